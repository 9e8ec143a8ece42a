"""Figures as functions of plain data: each returns SVG text with its caption, its numbers and what it says in words.

Colours and marks are told apart by colour-blind readers too; ink follows the page, light or dark.
"""

from __future__ import annotations

import io
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

INK, PALE = "#1f2a36", "#7d8791"
MARK, OTHER, THIRD = "#b4540a", "#2a7f78", "#6a4c93"
REGIME_COLOURS = {
    "sustained": MARK, "bistable": THIRD, "damped": OTHER, "quiet": "#8fa3ad", "undecided": "#b89b00", "failed": "#8b1e3f",
}  # fmt: skip
REGIME_MARKS = {"sustained": "o", "bistable": "D", "damped": "s", "quiet": "v", "undecided": "X", "failed": "P"}
ARM_COLOURS = (MARK, OTHER, THIRD, "#3f6db3", "#8b1e3f", "#5d6b00", "#7d4f2a", "#4b5660")
DASHES = ("-", "--", "-.", ":")


@dataclass(frozen=True)
class Figure:
    """A figure of the page. name: its file's name; title; alt: what it shows, for those who do not see it; svg; columns
    and rows: the numbers behind it; n: how many it rests on, in words; arm, outcome, stratum: whose it is, "" for all."""

    name: str
    title: str
    alt: str
    svg: str
    columns: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]
    n: str
    arm: str = ""
    outcome: str = ""
    stratum: str = ""


@contextmanager
def _drawn(width: float, height: float, rows: int = 1, columns: int = 1) -> Iterator[tuple[Any, Any]]:
    import matplotlib as mpl
    from matplotlib.figure import Figure as Canvas

    style = {
        "font.size": 9, "svg.fonttype": "none", "svg.hashsalt": "cohort", "axes.edgecolor": PALE, "text.color": INK,
        "axes.labelcolor": INK, "xtick.color": INK, "ytick.color": INK, "figure.facecolor": "none",
        "axes.facecolor": "none", "savefig.facecolor": "none", "legend.frameon": False, "font.family": "sans-serif",
        "text.parse_math": False, "axes.spines.top": False, "axes.spines.right": False, "path.simplify_threshold": 0.4,
    }  # fmt: skip
    with mpl.rc_context(style), warnings.catch_warnings():
        warnings.filterwarnings(
            "ignore", "Glyph"
        )  # text stays text in the SVG, and the reader's fonts know more letters
        canvas = Canvas(figsize=(width, height), layout="constrained")
        axes = canvas.subplots(rows, columns, squeeze=False)
        yield canvas, axes


def _short(label: str, longest: int = 56) -> str:
    """A label that leaves room for what it labels; a leading underscore would keep it out of the legend."""
    whole = label if len(label) <= longest else f"{label[: longest - 1]}…"
    return f" {whole}" if whole.startswith("_") else whole


def as_svg(canvas: Any) -> str:
    """A drawn figure as SVG text without date or version in it, its ink that of the text around it."""
    out = io.StringIO()
    canvas.savefig(out, format="svg", metadata={"Date": None, "Creator": None})
    text = out.getvalue()
    text = text[text.index("<svg") :]
    for width in ("width", "height"):  # the page sizes it
        start = text.index(f'{width}="')
        text = text[:start] + text[text.index('"', start + len(width) + 2) + 2 :]
    return text.replace(INK, "currentColor")


def intervals(
    labels: Sequence[str],
    value: Array,
    low: Array,
    high: Array,
    axis: str,
    groups: Sequence[int] = (),
    limits: tuple[float, float] | None = None,
) -> str:
    """Points with intervals, one a row from the top; groups: colour numbers; limits: of the axis."""
    n = len(labels)
    with _drawn(7.2, 0.55 + 0.27 * n) as (canvas, axes):
        ax = axes[0, 0]
        for i in range(n):
            colour = ARM_COLOURS[(groups[i] if groups else 0) % len(ARM_COLOURS)]
            ax.plot([low[i], high[i]], [i, i], color=colour, linewidth=2.0, solid_capstyle="butt")
            ax.plot([value[i]], [i], "o", color=colour, markersize=5)
        ax.set_yticks(range(n), [_short(label) for label in labels])
        ax.set_ylim(n - 0.5, -0.5)
        ax.set_xlabel(axis)
        if limits is not None:
            ax.set_xlim(*limits)
        else:
            ax.axvline(0.0, color=PALE, linewidth=0.8)
        ax.grid(axis="x", color=PALE, alpha=0.3, linewidth=0.6)
        return as_svg(canvas)


def whiskers(labels: Sequence[str], marks: Array, axis: str) -> str:
    """Quantiles as nested lines: marks float64[rows, 5] (5, 25, 50, 75, 95 %)."""
    n = len(labels)
    with _drawn(7.2, 0.55 + 0.3 * n) as (canvas, axes):
        ax = axes[0, 0]
        for i, (a, b, c, d, e) in enumerate(marks):
            ax.plot([a, e], [i, i], color=OTHER, linewidth=1.2)
            ax.plot([b, d], [i, i], color=OTHER, linewidth=4.5, solid_capstyle="butt")
            ax.plot([c], [i], "|", color=INK, markersize=11, markeredgewidth=1.8)
        ax.set_yticks(range(n), [_short(label) for label in labels])
        ax.set_ylim(n - 0.5, -0.5)
        ax.set_xlabel(axis)
        ax.grid(axis="x", color=PALE, alpha=0.3, linewidth=0.6)
        return as_svg(canvas)


def distributions(names: Sequence[str], edges: Array, shares: Array, axis: str) -> str:
    """Outlines of histograms on common edges: shares float64[names, bins] of those counted in each."""
    with _drawn(7.2, 2.7) as (canvas, axes):
        ax = axes[0, 0]
        for i, (name, share) in enumerate(zip(names, shares, strict=True)):
            ax.stairs(100.0 * share, edges, color=ARM_COLOURS[i % len(ARM_COLOURS)], linewidth=1.6, label=_short(name),
                      linestyle=DASHES[i % len(DASHES)])  # fmt: skip
        ax.set_xlabel(axis)
        ax.set_ylabel("% of them")
        if len(names) > 1:
            ax.legend(fontsize=8)
        return as_svg(canvas)


def courses(panels: Sequence[tuple[str, Array, Array]], settle_h: float, reference: float | None) -> str:
    """Small panels of glucose against the arm's own clock (h): (title, hours, glucose mg/dL); the measured window begins at
    `settle_h`."""
    across = 3
    down = -(-len(panels) // across)
    with _drawn(7.4, 1.55 * down + 0.2, down, across) as (canvas, axes):
        flat = axes.ravel()
        top = max(float(np.nanmax(g)) for _, _, g in panels)
        bottom = min(float(np.nanmin(g)) for _, _, g in panels)
        for i, (ax, (title, hours, glucose)) in enumerate(zip(flat, panels, strict=False)):
            ax.plot(hours, glucose, color=MARK, linewidth=1.0)
            if settle_h > 0.0:
                ax.axvspan(0.0, settle_h, color=PALE, alpha=0.15, linewidth=0)
            ax.set_title(title, fontsize=8, loc="left")
            ax.set_ylim(bottom - 0.05 * (top - bottom) - 1.0, top + 0.05 * (top - bottom) + 1.0)
            ax.tick_params(labelsize=7)
            if i % across == 0:
                ax.set_ylabel("mg/dL", fontsize=8)
            if i // across == down - 1:
                ax.set_xlabel("h", fontsize=8)
            if reference is not None:
                ax.axhline(reference, color=PALE, linewidth=0.7, linestyle=":")
        for ax in flat[len(panels) :]:
            ax.set_visible(False)
        return as_svg(canvas)


def plane(x: Array, y: Array, regime: Sequence[str], axes_names: tuple[str, str]) -> str:
    """Subjects in the plane of two parameters, coloured and marked by regime."""
    with _drawn(7.2, 4.2) as (canvas, axes):
        ax = axes[0, 0]
        words = np.array([str(r) for r in regime], dtype=object)
        for name, colour in REGIME_COLOURS.items():
            here = words == name
            if here.any():
                drawn = ax.plot(x[here], y[here], REGIME_MARKS[name], color=colour, markersize=3.4, alpha=0.75,
                                markeredgewidth=0, linestyle="none", label=name)  # fmt: skip
                drawn[0].set_gid(f"plane-{name}")
        ax.set_xlabel(axes_names[0])
        ax.set_ylabel(axes_names[1])
        ax.legend(fontsize=8, loc="upper left", bbox_to_anchor=(1.0, 1.0))
        return as_svg(canvas)


def lines(series: Sequence[tuple[str, Array, Array]], axes_names: tuple[str, str], level: float | None = None,
          log_x: bool = False) -> str:  # fmt: skip
    """Curves by name on common axes; a dotted level across."""
    with _drawn(7.2, 2.9) as (canvas, axes):
        ax = axes[0, 0]
        for i, (name, x, y) in enumerate(series):
            ax.plot(x, y, color=ARM_COLOURS[i % len(ARM_COLOURS)], linestyle=DASHES[(i // len(ARM_COLOURS)) % len(DASHES)],
                    marker="o", markersize=2.6, linewidth=1.3, label=_short(name, 30))  # fmt: skip
        if level is not None:
            ax.axhline(level, color=PALE, linestyle=":", linewidth=1.0)
        if log_x:
            ax.set_xscale("log", base=2)
        ax.set_xlabel(axes_names[0])
        ax.set_ylabel(axes_names[1])
        if len(series) > 1:
            ax.legend(fontsize=8, loc="upper left", bbox_to_anchor=(1.0, 1.0))
        return as_svg(canvas)


@dataclass(frozen=True)
class Panel:
    """One subject's series: title, a line below it, times (h), values, unit, and whether a rhythm was detected."""

    title: str
    note: str
    hours: Array
    values: Array
    unit: str
    detected: bool


def series_figure(panels: Sequence[Panel], columns: int = 3) -> str:
    """Small panels of sampled series, those with a rhythm marked by colour and in words: SVG text."""
    down = -(-len(panels) // columns)
    with _drawn(3.1 * columns, 1.9 * down + 0.3, down, columns) as (canvas, axes):
        flat = axes.ravel()
        for ax, panel in zip(flat, panels, strict=False):
            colour = MARK if panel.detected else OTHER
            ax.plot(panel.hours, panel.values, color=colour, linewidth=0.9, marker="o", markersize=2.2)
            ax.set_title(f"{panel.title}: {panel.note}", loc="left", fontsize=8)
            ax.set_xlabel("h")
            ax.set_ylabel(panel.unit)
        for ax in flat[len(panels) :]:
            ax.set_visible(False)
        text = as_svg(canvas).replace("currentColor", INK)
    return '<?xml version="1.0" encoding="utf-8"?>\n' + text


def window_bars(names: Sequence[str], spans: Sequence[Sequence[tuple[float, float]]]) -> str:
    """Stretches of each variable over its own value (0 and inf: open) as bars on a logarithmic axis, one a row from the top."""
    low, high = 0.2, 5.0
    with _drawn(7.2, 0.6 + 0.27 * len(names)) as (canvas, axes):
        ax = axes[0, 0]
        for i, stretches in enumerate(spans):
            for begin, end in stretches:
                a, b = max(begin, low), min(end, high)
                if a < b:
                    ax.plot([a, b], [i, i], color=MARK, linewidth=5.0, solid_capstyle="butt")
        ax.axvline(1.0, color=INK, linewidth=1.0)
        ax.set_xscale("log")
        ax.set_xlim(low, high)
        ticks = [0.2, 0.5, 1.0, 2.0, 5.0]
        ax.set_xticks(ticks, [f"{t:g}" for t in ticks])
        ax.set_xticks([], minor=True)
        ax.set_yticks(range(len(names)), names)
        ax.set_ylim(len(names) - 0.5, -0.5)
        ax.set_xlabel("value over the body's own (line: 1); bars: it oscillates")
        ax.grid(axis="x", color=PALE, alpha=0.3, linewidth=0.6)
        return as_svg(canvas)


def _around(x: Array, y: Array, side: int) -> tuple[float, float, float, float]:
    """The sides of an image whose pixels are centred on the points of an even grid."""
    dx, dy = (0.5 * (v.max() - v.min()) / max(side - 1, 1) for v in (x, y))
    return float(x.min() - dx), float(x.max() + dx), float(y.min() - dy), float(y.max() + dy)


def region_plane(
    x: Array, y: Array, period: Array, borders: Sequence[Array], folds: Array, axis_names: Sequence[str]
) -> str:
    """Periods on an even grid as an image (nothing where there is no oscillation), borders as lines, folds as dots."""
    side = round(len(x) ** 0.5)
    with _drawn(7.2, 4.6) as (canvas, axes):
        ax = axes[0, 0]
        extent = _around(x, y, side)
        shown = ax.imshow(period.reshape(side, side), origin="lower", extent=extent, aspect="auto", cmap="cividis")
        for line in borders:
            ax.plot(line[:, 0], line[:, 1], color=MARK, linewidth=1.8)
        if len(folds):
            ax.plot(folds[:, 0], folds[:, 1], ".", color=THIRD, markersize=4)
        ax.set_xlim(*extent[:2])
        ax.set_ylim(*extent[2:])
        ax.set_xlabel(axis_names[0])
        ax.set_ylabel(axis_names[1])
        canvas.colorbar(shown, ax=ax, label="period, min")
        return as_svg(canvas)


LOCKING_COLOURS = {"1:1": OTHER, "2:1": THIRD, "aperiodic": "#d9cdb8", "undecided": "#b89b00", "failed": "#8b1e3f"}


def locking_plane(x: Array, y: Array, words: Sequence[str], borders: Sequence[Array]) -> str:
    """Locking on an even grid in colours, the borders of its regions as lines."""
    from matplotlib.colors import to_rgb
    from matplotlib.patches import Patch

    side = round(len(x) ** 0.5)
    kinds = sorted(set(words), key=lambda w: -list(words).count(w))
    spare = iter(c for c in (*ARM_COLOURS, *["#9aa5ad"] * len(kinds)) if c not in LOCKING_COLOURS.values())
    colours = {kind: LOCKING_COLOURS.get(kind) or next(spare) for kind in kinds}
    with _drawn(7.2, 4.6) as (canvas, axes):
        ax = axes[0, 0]
        image = np.array([to_rgb(colours[w]) for w in words]).reshape(side, side, 3)
        extent = _around(x, y, side)
        ax.imshow(image, origin="lower", extent=extent, aspect="auto", alpha=0.75)
        for line in borders:
            ax.plot(line[:, 0], line[:, 1], color=INK, linewidth=1.3)
        ax.set_xlim(*extent[:2])
        ax.set_ylim(*extent[2:])
        ax.set_xlabel("forcing period, min")
        ax.set_ylabel("amplitude of the forcing over its mean")
        handles = [Patch(color=colours[kind], alpha=0.75, label=kind) for kind in kinds[:10]]
        ax.legend(handles=handles, loc="upper left", bbox_to_anchor=(1.0, 1.0))
        return as_svg(canvas)
