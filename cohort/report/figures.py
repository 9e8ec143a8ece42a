"""Figures as functions of plain data; each returns SVG text. Colours are told apart by colour-blind readers too."""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

INK, PALE = "#1f2a36", "#8a94a0"
MARK, QUIET_MARK = "#b4540a", "#4a6f8a"


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
    """Small panels of sampled series on a common time axis, those with a rhythm marked: SVG text."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    rows = -(-len(panels) // columns)
    with mpl.rc_context({"font.size": 8, "svg.fonttype": "none", "svg.hashsalt": "cohort", "axes.edgecolor": PALE}):
        figure = Figure(figsize=(3.1 * columns, 1.9 * rows + 0.3), layout="constrained")
        axes = np.atleast_1d(figure.subplots(rows, columns, squeeze=False)).ravel()
        for axis, panel in zip(axes, panels, strict=False):
            colour = MARK if panel.detected else QUIET_MARK
            axis.plot(panel.hours, panel.values, color=colour, linewidth=0.9, marker="o", markersize=2.2)
            axis.set_title(panel.title, loc="left", color=INK, fontsize=9)
            axis.text(0.0, 1.01, panel.note, transform=axis.transAxes, va="bottom", fontsize=7, color=PALE)
            axis.title.set_position((0.0, 1.0))
            axis.set_title(panel.title, loc="left", color=INK, fontsize=9, pad=14)
            axis.set_xlabel("h")
            axis.set_ylabel(panel.unit)
            axis.spines[["top", "right"]].set_visible(False)
        for axis in axes[len(panels) :]:
            axis.set_visible(False)
        return as_svg(figure)


def as_svg(figure: Any) -> str:
    """A figure as SVG text without date or version in it."""
    out = io.StringIO()
    figure.savefig(out, format="svg", metadata={"Date": None, "Creator": None})
    return out.getvalue()
