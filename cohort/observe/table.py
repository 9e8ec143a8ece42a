"""A real study's samples from CSV: long (a row a sample) or wide (a column a subject), every problem found at once.

Units are declared, never guessed: in the header, `glucose (mg/dL)`, `time [h]`, `insulin_pmol_l`, or as options.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cohort.errors import Problem, StudyError, nearest, unprintable
from cohort.quantities import GLUCOSE_MG_DL_PER_MMOL_L, INSULIN_PMOL_PER_MU
from cohort.reading import UnreadableError, read_plain, why_unread

Array = NDArray[np.float64]

TIME_UNITS = {"min": 1.0, "h": 60.0, "d": 1440.0, "s": 1.0 / 60.0}
UNITS: dict[str, dict[str, float]] = {
    "glucose": {"mg/dL": 1.0, "mmol/L": GLUCOSE_MG_DL_PER_MMOL_L, "mg/L": 0.1, "g/L": 100.0},
    "insulin": {
        "mU/L": 1.0, "uU/mL": 1.0, "mIU/L": 1.0, "uIU/mL": 1.0, "pmol/L": 1.0 / INSULIN_PMOL_PER_MU,
        "nmol/L": 1000.0 / INSULIN_PMOL_PER_MU,
    },
}  # fmt: skip
PLAUSIBLE = {"glucose": (10.0, 2000.0), "insulin": (0.0, 1e5)}
"""Readings outside are taken for another unit: 4 to 8 mmol/L read as mg/dL, 70 mg/dL read as mmol/L."""
_SUBJECT_NAMES = ("subject", "id", "person", "participant", "patient")
_TIME_NAMES = ("time", "t", "minute", "minutes")
_MISSING = {"", "na", "n/a", "nan", "null", "none", ".", "-", "missing"}
_HEADER = re.compile(r"\s*(.*?)\s*[(\[]\s*([^)\]]*?)\s*[)\]]\s*")
_SHOWN, _COUNTED = 20, 100_000
LONGEST_NAME = 100
LARGEST_FILE = 50_000_000
MOST_CELLS = 5_000_000
MOST_SERIES = 2000
LATEST_MIN = 1e9
"""Later times, or earlier ones below 0, are no minutes of a study: samples must be told apart to a millionth of one."""


@dataclass(frozen=True, eq=False)
class Series:
    """One subject's samples of one analyte: times in min (rising), readings in mg/dL or mU/L (none missing)."""

    subject: str
    analyte: str
    times_min: Array
    values: Array


@dataclass(frozen=True)
class _Column:
    place: int
    label: str
    analyte: str
    factor: float


@dataclass
class _Reader:
    """What is gathered while a table is read."""

    file: str
    problems: list[Problem] = field(default_factory=list)
    more: int = 0
    found: dict[tuple[str, str], tuple[list[int], list[float], list[float]]] = field(default_factory=dict)

    def wrong(self, line: int | None, key: str, message: str) -> None:
        if len(self.problems) < _SHOWN:
            self.problems.append(Problem(key, message, self.file, line))
        else:
            self.more += 1
        if self.more == _COUNTED:
            _stop(self)

    @property
    def noted(self) -> int:
        return len(self.problems) + self.more

    def number(self, text: str, line: int, key: str, comma: bool) -> float | None:
        """The cell's number; None where it is missing or (with a problem noted) no number."""
        word = text.strip()
        if word.lower() in _MISSING:
            return None
        try:
            value = float(word.replace(",", ".") if comma else word)
        except ValueError:
            value = math.nan
        if math.isfinite(value) and "_" not in word:
            return value
        hint = "; record a reading below the assay's limit as that limit" if word[:1] in "<>" else ""
        self.wrong(line, key, f"{word[:40]!r} is not a number; leave the cell empty where a sample is missing{hint}")
        return None


def read_series(path: Path, units: Mapping[str, str] | None = None) -> tuple[Series, ...]:
    """Read a table: one Series for each subject and analyte, in the file's order.

    Long: columns time, glucose and/or insulin, and a subject column unless there is one subject. Wide: time, then a
    column a subject. `units` gives those of "time", "glucose" and "insulin" where headers do not.
    Raises StudyError with every problem: text cells, units not declared or not fitting the readings, negative
    readings, times that repeat or do not rise within a subject.
    """
    reader = _Reader(str(path))
    rows, comma = _rows(path, reader)
    _stop(reader)
    time, subject, columns = _columns(rows[0][1], dict(units or {}), reader)
    _stop(reader)
    if not columns:
        reader.wrong(rows[0][0], "header", "no column of readings; glucose or insulin with a unit, or one a subject")
        _stop(reader)
    for line, cells in rows[1:]:
        _take(reader, line, cells, len(rows[0][1]), time, subject, columns, comma)
    if len(reader.found) > MOST_SERIES:
        reader.wrong(None, "", f"holds {len(reader.found):,} series; at most {MOST_SERIES:,} are allowed")
        _stop(reader)
    series = tuple(_finish(reader, *key, samples) for key, samples in reader.found.items())
    if not series and not reader.problems:
        reader.wrong(None, "", "no samples in it")
    _stop(reader)
    return series


def _stop(reader: _Reader) -> None:
    if reader.more:
        raise StudyError(
            [
                *reader.problems,
                Problem(
                    "", f"and {'at least ' * (reader.more >= _COUNTED)}{reader.more:,} more like these", reader.file
                ),
            ]
        )
    if reader.problems:
        raise StudyError(reader.problems)


def _rows(path: Path, reader: _Reader) -> tuple[list[tuple[int, list[str]]], bool]:
    """Rows that are not empty with their line numbers, and whether a comma is the decimal mark."""
    try:
        text = read_plain(path, LARGEST_FILE).decode("utf-8-sig").replace("\r\n", "\n").replace("\r", "\n")
    except (OSError, UnreadableError) as error:
        reader.wrong(None, "", f"cannot be read: {why_unread(error)}")
        return [], False
    except UnicodeDecodeError:
        reader.wrong(None, "", "is not UTF-8 text; save the table as CSV in UTF-8")
        return [], False
    header = text.lstrip().split("\n", 1)[0]
    mark = max(",;\t", key=header.count)
    cells = text.count(mark) + text.count("\n") + 1
    if cells > MOST_CELLS:
        reader.wrong(None, "", f"holds {cells:,} cells; at most {MOST_CELLS:,} are allowed")
        return [], False
    lines = csv.reader(io.StringIO(text), delimiter=mark)
    try:
        rows = [(lines.line_num, row) for row in lines if any(cell.strip() for cell in row)]
    except csv.Error as error:
        reader.wrong(lines.line_num, "", f"is not CSV: {error}")
        return [], False
    if len(rows) < 2:
        reader.wrong(None, "", "is empty; a header and at least one row are needed")
    return rows, mark != ","


def _split(header: str) -> tuple[str, str]:
    """A header's name and unit: `glucose (mg/dL)`, `time [h]`, `glucose_mg_dl`, `time_min`."""
    found = _HEADER.fullmatch(header)
    if found:
        return found[1], found[2].replace("µ", "u").replace("μ", "u").replace(" ", "")
    name = header.strip()
    for unit in [*TIME_UNITS, *UNITS["glucose"], *UNITS["insulin"]]:
        suffix = "_" + unit.lower().replace("/", "_")
        if name.lower().endswith(suffix):
            return name[: -len(suffix)], unit
    return name, ""


def _columns(header: list[str], units: dict[str, str], reader: _Reader) -> tuple[_Column, int | None, list[_Column]]:
    time, subject, columns = None, None, []
    names = [_split(cell) for cell in header]
    long = any(name.lower() in UNITS for name, _ in names)
    for place, (name, unit) in enumerate(names):
        if name.lower() in _TIME_NAMES and time is None:
            time = _Column(place, "time", "", _factor(reader, header[place], "time", unit or units.get("time", "")))
        elif name.lower() in _SUBJECT_NAMES and not unit:
            subject = place
        elif name.lower() in UNITS or not long:
            analyte = name.lower() if long else _analyte(unit, units)
            if not name:
                reader.wrong(1, f"column {place + 1}", "has no name")
                continue
            if _no_name(name):
                reader.wrong(1, f"column {place + 1}", f"{name[:LONGEST_NAME]!r} {_no_name(name)}")
                continue
            stated = unit or units.get(analyte, "")
            columns.append(_Column(place, "" if long else name, analyte, _factor(reader, name, analyte, stated)))
    labels = Counter((c.label, c.analyte) for c in columns)
    for label, analyte in sorted(x for x, times in labels.items() if times > 1):
        reader.wrong(1, label or analyte, "is there more than once")
    if time is None:
        found = ", ".join(name for name, _ in names[:8])
        reader.wrong(1, "header", f"no column of times; one named time is needed, such as `time (min)`; found: {found}")
        time = _Column(0, "time", "", 1.0)
    if not long and subject is not None:
        reader.wrong(1, "header", "a subject column but none named glucose or insulin"
                     + "".join(nearest(name, UNITS) for name, _ in names))  # fmt: skip
    return time, subject, columns


def _no_name(text: str) -> str:
    """Why a text cannot name a subject in a line of words and in a figure, or an empty text."""
    if len(text) > LONGEST_NAME:
        return f"has {len(text):,} characters; a name has at most {LONGEST_NAME}"
    return "holds a character that is no printable text" if unprintable(text) else ""


def _analyte(unit: str, units: dict[str, str]) -> str:
    for analyte, known in UNITS.items():
        if _spelled(unit, known) in known:
            return analyte
    return "insulin" if "insulin" in units and "glucose" not in units else "glucose"


def _spelled(unit: str, known: Mapping[str, float]) -> str:
    return {name.lower(): name for name in known}.get(unit.replace("µ", "u").lower(), unit)


def _factor(reader: _Reader, key: str, kind: str, unit: str) -> float:
    known = TIME_UNITS if kind == "time" else UNITS[kind]
    spelled = _spelled(unit, known)
    if spelled in known:
        return known[spelled]
    allowed = ", ".join(known)
    said = f"{unit!r} is no unit of {kind}{nearest(unit, known)}" if unit else f"the unit of {kind} is not declared"
    reader.wrong(1, key, f"{said}; in the header as `{kind} ({next(iter(known))})` or as an option: {allowed}")
    return 1.0


def _take(
    reader: _Reader, line: int, cells: list[str], width: int, time: _Column, subject: int | None,
    columns: list[_Column], comma: bool,
) -> None:  # fmt: skip
    if len(cells) != width:
        reader.wrong(line, "", f"{len(cells)} cells where the header has {width}")
        return
    before = reader.noted
    at = reader.number(cells[time.place], line, "time", comma)
    if at is None:
        if reader.noted == before:
            reader.wrong(line, "time", "is missing")
        return
    if not abs(at * time.factor) <= LATEST_MIN:
        reader.wrong(line, "time", f"{at:g} is beyond {LATEST_MIN:,.0f} min")
        return
    who = cells[subject].strip() if subject is not None else ""
    if _no_name(who):
        reader.wrong(line, "subject", f"{who[:LONGEST_NAME]!r} {_no_name(who)}")
        return
    if subject is not None and not who:
        reader.wrong(line, "subject", "is missing")
        return
    for column in columns:
        label = column.label or who or "1"
        lines, times, values = reader.found.setdefault((label, column.analyte), ([], [], []))
        value = reader.number(cells[column.place], line, column.label or column.analyte, comma)
        lines.append(line)
        times.append(at * time.factor)
        values.append(math.nan if value is None else value * column.factor)


def _finish(reader: _Reader, subject: str, analyte: str, samples: tuple[list[int], list[float], list[float]]) -> Series:
    lines, times, values = samples
    at, found = np.array(times), np.array(values)
    for i in np.flatnonzero(np.diff(np.round(at - at[0], 6)) <= 0.0):
        said = "is there twice" if at[i + 1] >= at[i] else f"comes after {at[i]:g} min; sort each subject by time"
        reader.wrong(lines[i + 1], "time", f"subject {subject}: {at[i + 1]:g} min {said}")
    low, high = PLAUSIBLE[analyte]
    unit = next(iter(UNITS[analyte]))
    present = ~np.isnan(found)
    for i in np.flatnonzero(present & (found < 0.0)):
        reader.wrong(lines[i], analyte, f"subject {subject}: {found[i]:g} {unit}; a concentration is never negative")
    for i in np.flatnonzero(present & (found >= 0.0) & ((found < low) | (found > high))):
        reader.wrong(
            lines[i], analyte, f"subject {subject}: {found[i]:.3g} {unit}, outside {low:g} to {high:g}: another unit?"
        )
    return Series(subject, analyte, at[present], found[present])
