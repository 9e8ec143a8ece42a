"""The maps of a run as figures and words: regions, windows and tongues, from map/ alone."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.report.figures import Figure, locking_plane, region_plane, window_bars
from cohort.report.results import Results
from cohort.tables import numbers, read_table

Array = NDArray[np.float64]


def map_figures(results: Results) -> Iterator[tuple[str, Figure]]:
    """(section, figure) of each map that was made."""
    folder = results.folder / "map"
    if (folder / "windows.parquet").exists():
        yield from _windows(read_table(folder / "windows.parquet"))
    if (folder / "borders.parquet").exists():
        units = {"infusion": "mg/min", **(results.record.get("units") or {})}
        yield from _region(read_table(folder / "region.parquet"), read_table(folder / "borders.parquet"), units)
    if (folder / "tongues.parquet").exists():
        yield from _locking(read_table(folder / "locking.parquet"), read_table(folder / "tongues.parquet"))


def _windows(table: Any) -> Iterator[tuple[str, Figure]]:
    rows = table.to_pylist()
    names = list(dict.fromkeys(r["variable"] for r in rows))
    spans = {name: _spans([r for r in rows if r["variable"] == name]) for name in names}
    near = {n: min((abs(r["distance"]) for r in rows if r["variable"] == n and r["distance"] is not None), default=np.inf)
            for n in names}  # fmt: skip
    order = sorted(names, key=lambda n: near[n])
    words = [f"{n}: nearest border {100 * near[n]:.0f} % away" for n in order if np.isfinite(near[n])]
    free = [n for n in names if not np.isfinite(near[n])]
    alt = "; ".join([*words, *([f"no border at all in {', '.join(free)}"] if free else [])])
    yield "map", Figure(
        "windows-of-oscillation", "Windows of oscillation, one variable at a time",
        f"Where the mapped body oscillates as one variable alone is changed, over its own value. {alt}",
        window_bars(order, [spans[n] for n in order]), tuple(table.column_names), tuple(tuple(r.values()) for r in rows),
        f"one body, {len(names)} variables",
    )  # fmt: skip


def _spans(rows: list[dict[str, Any]]) -> list[tuple[float, float]]:
    """Stretches, over the own value, in which the body oscillates: 0 and inf where no border ends them."""
    borders = [(r["border"] / r["own"], r["oscillates_side"]) for r in rows if r["border"] is not None]
    if not borders:
        return [(0.0, np.inf)] if rows[0]["oscillates"] else []
    found, begin = [], 0.0 if borders[0][1] == "below" else None
    for place, side in borders:
        if side == "above":
            begin = place
        elif begin is not None:
            found.append((begin, place))
            begin = None
    return [*found, *([(begin, np.inf)] if begin is not None else [])]


def _region(cells: Any, borders: Any, units: dict[str, str]) -> Iterator[tuple[str, Figure]]:
    x, y, period = (numbers(cells, name) for name in ("x", "y", "period_min"))
    names = [cells.column(name)[0].as_py() for name in ("x_name", "y_name")]
    curve = np.array(borders.column("curve").to_pylist(), dtype=np.int64)
    lines = [np.column_stack([numbers(borders, n)[curve == k] for n in ("x", "y")]) for k in np.unique(curve)]
    folds = np.column_stack([numbers(borders, n) for n in ("fold_x", "fold_y")])
    folds = folds[np.isfinite(folds).all(axis=1)]
    share = np.isfinite(period).mean()
    alt = f"{100 * share:.0f} % of the region oscillates"
    if share > 0:
        alt += f", with periods of {np.nanmin(period):.0f} to {np.nanmax(period):.0f} min"
    yield "map", Figure(
        "region-of-oscillation", f"Where oscillation lives: {names[0]} and {names[1]}",
        f"{alt}; the line is the border, by continuation; dots mark the far side of strips where rest and rhythm both attract",
        region_plane(x, y, period, lines, folds, [f"{n}, {units[n]}" for n in names]), tuple(cells.column_names),
        tuple(tuple(r.values()) for r in cells.to_pylist()), f"one body, {len(x):,} points and {len(curve):,} on the border",
    )  # fmt: skip


def _locking(cells: Any, tongues: Any) -> Iterator[tuple[str, Figure]]:
    x, y = numbers(cells, "forcing_period_min"), numbers(cells, "relative_amplitude")
    words = [w or "failed" for w in cells.column("locking").to_pylist()]
    curve = np.array(tongues.column("curve").to_pylist(), dtype=np.int64)
    lines = [np.column_stack([numbers(tongues, n)[curve == k] for n in ("forcing_period_min", "relative_amplitude")])
             for k in np.unique(curve)]  # fmt: skip
    common = sorted(set(words), key=lambda w: -words.count(w))
    alt = ", ".join(f"{w} {100 * words.count(w) / len(words):.0f} %" for w in common[:6])
    yield "map", Figure(
        "locking", "Which forcing captures the rhythm", f"Locking over forcing period and relative amplitude: {alt}",
        locking_plane(x, y, words, lines), tuple(cells.column_names), tuple(tuple(r.values()) for r in cells.to_pylist()),
        f"one body, {len(x):,} points and {len(curve):,} on borders",
    )  # fmt: skip
