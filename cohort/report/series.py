"""A real study's detections as a table and a picture."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from cohort.observe.series import Found
from cohort.observe.table import Series
from cohort.quantities import DETECTION_COLUMNS
from cohort.report.figures import Panel, series_figure
from cohort.tables import DETECTIONS, write_bytes, write_table

MOST_PANELS = 60
UNITS = {"glucose": "mg/dL", "insulin": "mU/L"}


def keep_series(folder: Path, series: Sequence[Series], found: Found) -> None:
    """Write detections.parquet (a row a subject and analyte) and series.svg (the first 60 series) into a folder."""
    analyte = np.array([0 if word == "glucose" else 1 for word in found.analyte], dtype=np.int8)
    refused: list[str | None] = [why or None for why in found.refused]
    columns = {c.name: found.columns[c.name] for c in DETECTION_COLUMNS}
    write_table(
        folder / "detections.parquet",
        DETECTIONS,
        {"id": list(found.subject), "analyte": analyte, **columns, "refused": refused},
    )
    panels = [_panel(one, found, i) for i, one in enumerate(series[:MOST_PANELS])]
    if panels:
        write_bytes(folder / "series.svg", series_figure(panels).encode())


def _panel(one: Series, found: Found, i: int) -> Panel:
    detected, period = found.columns["detected"][i], found.columns["period_min"][i]
    note = f"rhythm of {period:.0f} min" if detected == 1 else "no rhythm detected" if detected == 0 else "not judged"
    hours = (one.times_min - one.times_min[0]) / 60.0
    return Panel(f"{one.subject}, {one.analyte}", note, hours, one.values, UNITS[one.analyte], bool(detected == 1))
