"""Make the private environment the other scripts run in: `.venv`, with exactly what is locked, once.

Standard library only. The environment is built aside and moved into place, so an interrupted set-up leaves nothing
half-made; a stamp inside says which lock file and Python it was made for.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import subprocess
import sys
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
SCRIPTS = ROOT / "scripts"
LEAST = (3, 11)


def _stamp(lock: Path) -> str:
    digest = hashlib.sha256(lock.read_bytes() + (ROOT / "pyproject.toml").read_bytes()).hexdigest()
    return f"{sys.version_info[:3]} {digest}"


def python_of(folder: Path) -> Path:
    """Return the interpreter of an environment."""
    return folder / ("Scripts" if os.name == "nt" else "bin") / "python"


def ready(name: str) -> Path:
    """Return the interpreter of the environment for `run` or `test`, making it first where it is missing or stale.

    The test environment holds everything the running one does; where it is up to date it serves both.
    """
    if sys.version_info < LEAST:
        sys.exit(f"cohort needs Python {LEAST[0]}.{LEAST[1]} or newer; this is {sys.version.split()[0]}")
    folder = ROOT / ".venv"
    for candidate in {"run": ("test", "run"), "test": ("test",)}[name]:
        lock = SCRIPTS / f"lock-{candidate}.txt"
        mark = folder / f".made-for-{candidate}"
        if mark.exists() and mark.read_text() == _stamp(lock) and python_of(folder).exists():
            return python_of(folder)
    _make(folder, name)
    return python_of(folder)


def _make(folder: Path, name: str) -> None:
    lock = SCRIPTS / f"lock-{name}.txt"
    print(f"Setting up {folder.name} (once; a few minutes at most) ...", file=sys.stderr, flush=True)
    shutil.rmtree(folder, ignore_errors=True)
    venv.create(folder, with_pip=True)
    python = python_of(folder)
    quiet = ["--quiet", "--disable-pip-version-check", "--no-input"]
    install = [str(python), "-m", "pip", "install", *quiet]
    subprocess.run([*install, "--require-hashes", "-r", str(lock)], check=True)
    site = subprocess.run(
        [str(python), "-c", "import sysconfig; print(sysconfig.get_path('purelib'))"],
        check=True, capture_output=True, text=True,
    ).stdout.strip()  # fmt: skip
    # the package itself is used from the checkout; its command is a file of two lines
    (Path(site) / "ultradian-cohort.pth").write_text(str(ROOT) + "\n")
    command = python.parent / "cohort"
    command.write_text(f"#!{python}\nfrom cohort.cli import main\nraise SystemExit(main())\n")
    command.chmod(0o755)
    (folder / f".made-for-{name}").write_text(_stamp(lock))


def call(command: list[str]) -> int:
    """Run a command to its end, passing an interruption on to it, and return its exit code."""
    process = subprocess.Popen(command)
    while True:
        try:
            return process.wait()
        except KeyboardInterrupt:
            continue
