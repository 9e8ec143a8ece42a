"""The fuzzer in its short form: it ends clean, does the same for the same seed, and finds what is planted."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
QUICK = ("units", "lines", "override", "study", "table", "parquet", "series")


def fuzz(out: Path, *words: str) -> str:
    """What the fuzzer prints; it must find nothing."""
    command = [sys.executable, str(ROOT / "scripts" / "fuzz.py"), "--out", str(out), *words]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
    assert not list(out.iterdir())
    return done.stdout


def counts(table: str) -> list[list[str]]:
    """Target, cases, paths and crashes of each line; times and memory differ from run to run."""
    return [line.split()[:4] for line in table.splitlines()[1:]]


def test_a_short_run_finds_nothing(tmp_path: Path) -> None:
    found = {name: (int(cases.replace(",", "")), int(paths.replace(",", "")))
             for name, cases, paths, _ in counts(fuzz(tmp_path, "--cases", "1800", "--seed", "3", "--only", *QUICK))}  # fmt: skip
    assert set(found) == {*QUICK, "all"} and found["all"][0] > 1500
    assert found["study"][1] > 1000 and found["lines"][1] > 50


def test_the_same_seed_does_the_same(tmp_path: Path) -> None:
    words = ("--cases", "1000", "--seed", "5", "--only", "override", "series")
    assert counts(fuzz(tmp_path / "a", *words)) == counts(fuzz(tmp_path / "b", *words))


@pytest.mark.long
def test_a_long_run_finds_nothing(tmp_path: Path) -> None:
    assert len(counts(fuzz(tmp_path / "long", "--cases", "300000", "--seed", "11"))) > len(QUICK)


def test_what_is_planted_is_found_and_made_small(tmp_path: Path) -> None:
    code = (
        "import sys\nsys.path.insert(0, 'scripts')\nimport fuzz, mmap, signal\nfrom pathlib import Path\n"
        "from fuzz_targets import Target\n"
        "def run(data):\n    if b'7' in data: raise KeyError('planted')\n    while b'8' in data: pass\n"
        "fuzz.SECONDS_A_CASE = 0.2\nsignal.signal(signal.SIGALRM, fuzz.late)\n"
        "target = Target('planted', run, (b'x = 1',), 1.0, 1.0)\n"
        "row = fuzz.fuzz(target, 400, 1, 60.0, Path(sys.argv[1]), mmap.mmap(-1, 1 << 21))\n"
        "print(sorted(row.crashes))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path)], capture_output=True, text=True, cwd=ROOT, check=True
    )
    assert "KeyError" in done.stdout and "TooSlowError" in done.stdout
    assert b"7" in {path.read_bytes() for path in tmp_path.iterdir()}
