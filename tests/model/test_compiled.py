"""Compiled code in memory and on disk: many threads, private folders, hostile ones, none at all."""

import ctypes
import os
import platform
import stat
import subprocess
import sys
import threading
from pathlib import Path

import numpy as np
import pytest

from cohort import compiled
from cohort.model.body import body
from cohort.program import Builder, run

ROOT = Path(__file__).resolve().parents[2]
CODE = (
    "import numpy as np; from cohort.compiled import cache_folder; from cohort.model.body import body; "
    "from cohort.model.rest import at_rest; b = body('prompt-liver'); "
    "r = at_rest(b, np.array([[*b.card.nominal.values(), 1.0]]), np.array([216.0]), np.zeros(1)); "
    "print(r.states[0, 2].hex(), cache_folder())"
)
EXPECTED = "12546.3736042415"


def python(**environment: str) -> tuple[str, str]:
    kept = {k: v for k, v in os.environ.items() if k not in ("HOME", "XDG_CACHE_HOME", "COHORT_CACHE_DIR")}
    done = subprocess.run(
        [sys.executable, "-c", CODE], cwd=ROOT, env=kept | environment, capture_output=True, text=True, check=True
    )
    glucose, folder = done.stdout.split()
    assert f"{float.fromhex(glucose):.10f}" == EXPECTED
    return folder, done.stderr


def test_threads_that_ask_for_the_same_program_share_one_copy() -> None:
    """A second copy would take the place of the first and free code that runs."""
    builder = Builder("threads", 1)
    program = builder.finish([builder.add(builder.mul(0, 0), builder.constant(0.123456789))])
    addresses: list[int] = []
    barrier = threading.Barrier(8)

    def ask() -> None:
        barrier.wait()
        addresses.append(compiled.compile_program(program, 4))

    threads = [threading.Thread(target=ask) for _ in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(set(addresses)) == 1
    out = np.empty((1, 4))
    compiled.run_compiled(program, np.full((1, 4), 2.0), out, 4)
    assert (out == 4.123456789).all()


def test_code_is_kept_in_a_private_folder(tmp_path: Path) -> None:
    folder, _ = python(HOME=str(tmp_path))
    kept = Path(folder)
    assert kept.is_relative_to(tmp_path)
    assert stat.S_IMODE(kept.stat().st_mode) == 0o700 and list(kept.glob("*.o"))
    python(HOME=str(tmp_path))


@pytest.mark.parametrize("environment", [{}, {"HOME": "/proc/nobody"}, {"COHORT_CACHE_DIR": "/proc/nothing"}])
def test_without_a_place_to_keep_it_code_is_compiled_anew(environment: dict[str, str]) -> None:
    assert python(**environment)[0] == "None"


def test_a_folder_that_others_may_write_is_not_used(tmp_path: Path) -> None:
    (tmp_path / ".cache" / "ultradian-cohort").mkdir(parents=True)
    (tmp_path / ".cache" / "ultradian-cohort").chmod(0o777)
    assert python(HOME=str(tmp_path))[0] == "None"


def test_two_processes_may_compile_at_once(tmp_path: Path) -> None:
    environment = os.environ | {"HOME": str(tmp_path)}
    both = [subprocess.Popen([sys.executable, "-c", CODE], cwd=ROOT, env=environment) for _ in range(2)]
    assert [process.wait() for process in both] == [0, 0]


def test_another_version_of_a_kernel_has_another_folder(monkeypatch: pytest.MonkeyPatch) -> None:
    compiled.cache_folder.cache_clear()
    here = compiled.cache_folder()
    compiled.cache_folder.cache_clear()
    monkeypatch.setattr(compiled, "_all_kernels", lambda: "other")
    there = compiled.cache_folder()
    compiled.cache_folder.cache_clear()
    assert here != there


def test_a_processor_without_fused_multiply_add_gives_the_same_bits(monkeypatch: pytest.MonkeyPatch) -> None:
    """There fma is a call of the C library's, which rounds once too."""
    found = body("hepatic-lag")
    stepper = found.stepper(("glucose_mg_dl", "insulin_mu_l"), True)
    rng = np.random.default_rng(3)
    program = stepper.step
    parameters = [*found.card.nominal.values(), 1.0]
    constants = run(stepper.hoisted, parameters)
    usual, without = np.empty((2, len(program.outputs)))
    monkeypatch.setattr(compiled, "_cpu", lambda: ("x86-64", "-fma,-avx,-avx2,-avx512f"))
    monkeypatch.setattr(compiled, "cache_folder", lambda: None)
    if platform.machine() != "x86_64":
        monkeypatch.setattr(compiled, "_cpu", lambda: ("generic", ""))
    address, kept = compiled._load(program, 1, None)
    plain = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p)(address)
    for _ in range(50):
        x = np.array(list(found.card.typical.values())) * np.exp(0.2 * rng.normal(size=6))
        scale = [1.0 / s for s in found.card.typical.values()]
        source = np.array([*x, *scale, 60.0, 216.0, 0.0, *constants])
        compiled.run_compiled(program, source, usual)
        plain(source.ctypes.data, without.ctypes.data)
        np.testing.assert_array_equal(usual, without)
    assert kept is not None
