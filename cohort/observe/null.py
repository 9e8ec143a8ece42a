"""Null tables: how large the detector's statistic gets on a schedule when there is no rhythm, by simulation.

A p-value cannot be read from the true background, which nobody knows. So series are simulated from every background of
the grid, each is fitted as a real one would be, and a table holds the statistic of those that were fitted alike. This
keeps the false alarms near the nominal rate in white noise and in AR(1) alike (see the tests' calibration).
"""

from __future__ import annotations

import contextlib
import functools
import hashlib
import os
import tempfile
import threading
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cohort.observe.design import FEWEST_SAMPLES, Design
from cohort.observe.scan import Scan, scan_series
from cohort.population.functions import normal_quantile
from cohort.population.uniforms import uniforms

Array = NDArray[np.float64]

SIMULATED = 2048
"""Series from each background."""
WHITE_WEIGHT = 3.0
"""A priori weight of white noise against each AR(1) of the grid."""
_FEWEST = 300
_SHARES_MISSING = (0.0, 0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9)
_VERSION = "1"


@dataclass(frozen=True, eq=False)
class NullTable:
    """The statistic of null series: `statistic` float64[n], the background each was fitted by, and its weight."""

    statistic: Array
    fitted: NDArray[np.int64]
    weight: Array

    @functools.cached_property
    def _by_fitted(self) -> dict[int, tuple[Array, Array]]:
        return {int(k): self._tail(self.fitted == k) for k in np.unique(self.fitted)}

    def _tail(self, chosen: NDArray[np.bool_]) -> tuple[Array, Array]:
        """The chosen statistics in order, and the share of weight at or above each (one more than were seen)."""
        if chosen.sum() < _FEWEST:
            chosen = np.ones_like(chosen)
        order = np.argsort(self.statistic[chosen], kind="stable")
        weight = self.weight[chosen][order]
        above = np.append(np.cumsum(weight[::-1])[::-1], 0.0)
        mean = weight.mean()
        return self.statistic[chosen][order], (above + mean) / (weight.sum() + mean)

    def p_values(self, statistic: Array, fitted: NDArray[np.int64]) -> Array:
        """Share of null series, fitted by the same background, with a statistic at least as large: float64[n]."""
        p = np.empty(len(statistic))
        for k in np.unique(fitted):
            mine = fitted == k
            ordered, share = self._by_fitted.get(int(k)) or self._tail(np.ones(len(self.statistic), dtype=bool))
            p[mine] = share[np.searchsorted(ordered, statistic[mine], side="left")]
        return p


def counted_missing(times: int, missing: int) -> int:
    """The number of missing samples whose table serves `missing` of them."""
    return min((round(share * times) for share in _SHARES_MISSING), key=lambda m: (abs(m - missing), m))


_TABLES: dict[str, NullTable] = {}
_LOCKS: dict[str, threading.Lock] = {}
_LOCK = threading.Lock()


def null_table(design: Design, missing: int, folder: Path | None = None, simulated: int = SIMULATED) -> NullTable:
    """The table of a design with so many samples missing, from memory, from `folder`, or simulated and kept there."""
    name = f"{_VERSION}:{design.key}:{missing}:{simulated}"
    key = hashlib.blake2b(name.encode(), digest_size=12).hexdigest()
    if key in _TABLES:
        return _TABLES[key]
    with _LOCK:
        mine = _LOCKS.setdefault(key, threading.Lock())
    with mine:
        if key not in _TABLES:
            _TABLES[key] = _kept(key, folder) or _simulate(design, missing, simulated, key, folder)
        return _TABLES[key]


def tables_needed(design: Design, missed: float) -> tuple[int, ...]:
    """Numbers of missing samples whose tables series on this design may need, if each is missed with this chance."""
    times = len(design.times_min)
    if not missed:
        return (0,)
    spread = 6.0 * float(np.sqrt(times * missed * (1.0 - missed))) + 1.0
    low, high = max(int(times * missed - spread), 0), min(int(times * missed + spread) + 1, times)
    return tuple(sorted({serving(design, m) for m in range(low, high + 1)}))


def serving(design: Design, missing: int) -> int:
    """The number of missing samples whose table serves a series with `missing` of them."""
    times = len(design.times_min)
    return min(counted_missing(times, missing), times - FEWEST_SAMPLES)


def _kept(key: str, folder: Path | None) -> NullTable | None:
    path = folder / f"null-{key}.npy" if folder else None
    if path is None or not path.exists():
        return None
    try:
        rows = np.load(path, allow_pickle=False)
    except (OSError, ValueError, EOFError):
        return None  # a damaged file is simulated again
    if rows.ndim != 2 or len(rows) != 3 or not np.all(np.isfinite(rows)):
        return None
    return NullTable(rows[0], rows[1].astype(np.int64), rows[2])


def _simulate(design: Design, missing: int, simulated: int, key: str, folder: Path | None) -> NullTable:
    if missing:
        _ = design.for_missing  # made once, before there are threads
    with ThreadPoolExecutor(os.cpu_count()) as pool:
        found = list(pool.map(lambda k: _null_scan(design, k, missing, simulated, key), range(len(design.backgrounds))))
    weight = np.ones((len(found), simulated))
    weight[0] = WHITE_WEIGHT
    table = NullTable(
        np.concatenate([f.statistic for f in found]), np.concatenate([f.fitted for f in found]), weight.ravel()
    )
    if folder is not None:
        _keep(table, folder / f"null-{key}.npy")
    return table


def _null_scan(design: Design, k: int, missing: int, simulated: int, key: str) -> Scan:
    from cohort.observe.kernels import colour

    n, background = len(design.times_min), design.backgrounds[k]
    series = normal_quantile(uniforms(0, "null table", f"{key}:{k}", 0, simulated, n))
    colour(series, background.phi, background.gain, background.root)
    if missing:
        order = np.argsort(uniforms(0, "null table", f"{key}:{k}:missing", 0, simulated, n), axis=1, kind="stable")
        np.put_along_axis(series, order[:, :missing], np.nan, axis=1)
    return scan_series(design, series)


def _keep(table: NullTable, path: Path) -> None:
    """Write whole or not at all; a folder that cannot be written costs only the next simulation."""
    with contextlib.suppress(OSError):
        path.parent.mkdir(parents=True, exist_ok=True)
        with tempfile.NamedTemporaryFile(dir=path.parent, prefix=".null-", delete=False) as file:
            np.save(file, np.stack([table.statistic, table.fitted.astype(np.float64), table.weight]))
        os.replace(file.name, path)  # noqa: PTH105 - the temporary is a plain name
