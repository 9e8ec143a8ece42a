"""`cohort detect`, as the user runs it."""

import math
from pathlib import Path

import numpy as np
import pytest

from cohort.cli import main


def table(folder: Path, header: str = "subject,time (h),glucose (mmol/L)") -> Path:
    """Two invented people sampled every 20 min for 12 h: one with a 120 min rhythm, one with noise alone."""
    rng = np.random.default_rng(3)
    rows = [header]
    for name, amplitude in (("anna", 0.15), ("ben", 0.0)):
        for i in range(37):
            glucose = 6.5 * (1 + amplitude * math.sin(2 * math.pi * i / 6)) * (1 + 0.02 * rng.normal())
            rows.append(f"{name},{i / 3:.4f},{glucose:.3f}")
    path = folder / "series.csv"
    path.write_text("\n".join(rows) + "\n")
    return path


def test_a_rhythm_is_told_from_noise_and_said_with_its_caution(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["detect", str(table(tmp_path))]) == 0
    anna, ben, *_ = capsys.readouterr().out.splitlines()
    assert anna.startswith("anna, glucose: rhythm detected, 1")
    assert ben.startswith("ben, glucose: no rhythm detected")


def test_wrong_calls_are_taught(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["detect", str(tmp_path / "none.csv")]) == 2
    assert "cannot be read" in capsys.readouterr().err
    assert main(["detect", str(table(tmp_path, "subject,time,glucose"))]) == 2
    said = capsys.readouterr().err
    assert "unit" in said and "Traceback" not in said
    with pytest.raises(SystemExit) as caught:
        main(["detect", "x.csv", "--false-alarm", "2"])
    assert caught.value.code == 2
