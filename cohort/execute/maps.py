"""The maps of a study: computed around one body, each table written whole and kept while nothing it rests on changes."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import kernel_identity
from cohort.measure.folds import fold_beyond
from cohort.measure.hopf import Border, Plane, Setting, crossings, curves, described, grid
from cohort.measure.regime import BISTABLE, SUSTAINED, cycles
from cohort.measure.tongues import Box, locking_map, tongues
from cohort.model.body import body
from cohort.quantities import PARAMETERS
from cohort.study import Study
from cohort.study.maps import INFUSION, INFUSION_RANGE, Axis, Maps
from cohort.tables import (
    MAP_BORDERS,
    MAP_LOCKING,
    MAP_REGION,
    MAP_TONGUES,
    MAP_WINDOWS,
    Schema,
    Stamp,
    Values,
    verify_part,
    write_part,
)

Array = NDArray[np.float64]

BATCH = 1024
SIDE = 1e-4
"""How far beside a border its sides are looked at, relatively."""

FOLDS_SOUGHT = 24
"""Along a border whose rhythm is not born small, the strip beside it is measured at so many points."""


def run_maps(study: Study, out: Path) -> None:
    """Write every table of map/ that is asked for and not there yet."""
    asked = study.maps
    if asked is None:
        return
    found = body(study.model)
    setting = Setting(found, np.array(asked.values), asked.infusion, asked.secretion)
    wanted: list[tuple[str, Schema, Callable[[], Values]]] = []
    if asked.windows:
        wanted.append(("windows", MAP_WINDOWS, lambda: _windows(setting, asked)))
    if asked.region is not None:
        plane = _plane(asked.region)
        growth = _growth(setting, plane, asked.points)
        wanted.append(("region", MAP_REGION, lambda: _region(setting, plane, asked.points, growth)))
        wanted.append(("borders", MAP_BORDERS, lambda: _borders(setting, plane, growth)))
    for name, schema, make in wanted:
        _kept(study, asked, out, name, schema, make)
    if asked.forcing is not None:
        _forced(study, asked, out, setting)


def _kept(study: Study, asked: Maps, out: Path, name: str, schema: Schema, make: Callable[[], Values]) -> None:
    path = out / "map" / f"{name}.parquet"
    stamp = Stamp(_identity(study, asked, name), 0, 1)
    if not verify_part(path, schema, stamp):
        write_part(path, schema, make(), stamp)


def _identity(study: Study, asked: Maps, name: str) -> str:
    text = repr((name, study.model, sorted(asdict(asked).items()), kernel_identity()))
    return hashlib.blake2b(text.encode(), digest_size=16).hexdigest()


def _forced(study: Study, asked: Maps, out: Path, setting: Setting) -> None:
    """Both tables of the forcing rest on the same responses."""
    assert asked.forcing is not None
    names = {"locking": MAP_LOCKING, "tongues": MAP_TONGUES}
    stamps = {name: Stamp(_identity(study, asked, name), 0, 1) for name in names}
    if all(verify_part(out / "map" / f"{n}.parquet", s, stamps[n]) for n, s in names.items()):
        return
    period, amplitude = asked.forcing
    box = Box(setting, (period.low, period.high), (amplitude.low, amplitude.high))
    seen = locking_map(box, asked.points)
    side = np.linspace(0.0, 1.0, asked.points)
    cells: Values = {
        "forcing_period_min": np.tile(period.low + side * (period.high - period.low), asked.points),
        "relative_amplitude": np.repeat(amplitude.low + side * (amplitude.high - amplitude.low), asked.points),
        "locking": seen.words(), "response_period_min": seen.response_period,
        "response_glucose_amplitude_mg_dl": seen.amplitude, "response_lag_min": seen.lag,
        "response_multiplier": seen.multiplier,
    }  # fmt: skip
    write_part(out / "map" / "locking.parquet", MAP_LOCKING, cells, stamps["locking"])
    rows: list[tuple[Any, ...]] = [
        (k, i, f"{t.maxima}:{t.periods}", kind, *(float(v) for v in point))
        for k, t in enumerate(tongues(box, seen, asked.points))
        for i, (kind, point) in enumerate(zip(t.kinds, t.points, strict=True))
    ]
    write_part(out / "map" / "tongues.parquet", MAP_TONGUES, _columns(MAP_TONGUES, rows), stamps["tongues"])


def _columns(schema: Schema, rows: list[tuple[Any, ...]]) -> Values:
    kinds = {"int64": np.int64, "float64": np.float64}
    found: dict[str, Any] = {}
    for j, column in enumerate(schema.columns):
        values = [row[j] for row in rows]
        found[column.name] = np.array(values, kinds[column.kind]) if column.kind in kinds else np.array(values, object)
    return found


# ---- windows ------------------------------------------------------------------------------------------------------


def _windows(setting: Setting, asked: Maps) -> Values:
    rows: list[tuple[Any, ...]] = []
    for name in asked.windows:
        low, high = INFUSION_RANGE if name == INFUSION else (PARAMETERS[name].low, PARAMETERS[name].high)
        unit = "mg/min" if name == INFUSION else PARAMETERS[name].unit
        own = setting.value(name)
        oscillates = bool(setting.growth((), np.empty((1, 0)))[0] > 0.0)
        values = crossings(setting, name, low, high)
        border = described(setting, (name,), values[:, None])
        for i, value in enumerate(values):
            above = bool(setting.growth((name,), np.array([[value * (1.0 + SIDE)]]))[0] > 0.0)
            fold = _fold(setting, (name,), border, i, np.array([-0.5 * value if above else 0.5 * value]))
            rows.append((
                name, unit, own, oscillates, border.kind[i], float(value), "above" if above else "below",
                float(border.period[i]), float(border.lyapunov[i]), _born(border, i), float(value / own - 1.0),
                np.nan if fold is None else float(fold[0]),
            ))  # fmt: skip
        if not len(values):
            rows.append((name, unit, own, oscillates, None, np.nan, None, np.nan, np.nan, None, np.nan, np.nan))
    return _columns(MAP_WINDOWS, rows)


def _born(border: Border, i: int) -> str | None:
    """In words how a rhythm appears at a border."""
    if border.kind[i] != "hopf":
        return None
    return "small, attracting" if border.lyapunov[i] < 0.0 else "at once, with a strip of both"


def _fold(setting: Setting, names: tuple[str, ...], border: Border, i: int, towards: Array) -> Array | None:
    if border.kind[i] != "hopf" or not border.lyapunov[i] > 0.0:
        return None
    return fold_beyond(setting, names, border.points[i], towards)


# ---- regions ------------------------------------------------------------------------------------------------------


def _plane(axes: tuple[Axis, Axis]) -> Plane:
    return Plane((axes[0].name, axes[1].name), np.array([a.low for a in axes]), np.array([a.high for a in axes]))


def _growth(setting: Setting, plane: Plane, count: int) -> Array:
    return setting.growth(plane.names, grid(plane, count)).reshape(count, count)


def _region(setting: Setting, plane: Plane, count: int, growth: Array) -> Values:
    points = grid(plane, count)
    parameters, Gin = setting.spread(plane.names, points)
    oscillates, period, swing = (
        np.zeros(len(points), np.int8),
        np.full(len(points), np.nan),
        np.full(len(points), np.nan),
    )
    for begin in range(0, len(points), BATCH):
        some = slice(begin, begin + BATCH)
        found = cycles(setting.body, parameters[some], Gin[some], np.zeros(len(Gin[some])))
        yes = np.isin(found.regime, (SUSTAINED, BISTABLE))
        oscillates[some] = np.where(found.regime > BISTABLE, -1, yes)
        period[some] = np.where(yes, found.period, np.nan)
        swing[some] = np.where(
            yes, found.turn[:, 0, 1] - found.turn[:, 0, 0], np.where(found.regime > BISTABLE, np.nan, 0.0)
        )
    return {
        "x": points[:, 0], "y": points[:, 1], "growth_per_min": growth.ravel(), "oscillates": oscillates,
        "period_min": period, "glucose_amplitude_mg_dl": swing,
        "x_name": np.full(len(points), plane.names[0], object), "y_name": np.full(len(points), plane.names[1], object),
    }  # fmt: skip


def _borders(setting: Setting, plane: Plane, growth: Array) -> Values:
    rows: list[tuple[Any, ...]] = []
    found = curves(lambda s: setting.growth(plane.names, plane.points(s)), growth)
    for k, curve in enumerate(found):
        border = described(setting, plane.names, plane.points(curve))
        every = max(1, len(curve) // FOLDS_SOUGHT)
        for i, point in enumerate(border.points):
            fold = None
            if i % every == 0:
                fold = _fold(setting, plane.names, border, i, _outwards(setting, plane, curve, i))
            ends = (np.nan, np.nan) if fold is None else (float(fold[0]), float(fold[1]))
            rows.append((
                k, i, *plane.names, float(point[0]), float(point[1]), border.kind[i], float(border.period[i]),
                float(border.lyapunov[i]), _born(border, i), *ends,
            ))  # fmt: skip
    return _columns(MAP_BORDERS, rows)


def _outwards(setting: Setting, plane: Plane, curve: Array, i: int) -> Array:
    """A step of a tenth of the region from a border to its stable side."""
    along = curve[min(i + 1, len(curve) - 1)] - curve[max(i - 1, 0)]
    across = np.array([-along[1], along[0]]) / max(float(np.hypot(*along)), 1e-300)
    if setting.growth(plane.names, plane.points(curve[i] + SIDE * across))[0] > 0.0:
        across = -across
    return np.asarray(0.1 * across * (plane.high - plane.low))
