"""How the pictures of a report look, and the axis of stops that they share."""

import io
from collections.abc import Callable, Sequence
from itertools import pairwise
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, NullFormatter, NullLocator

from sweep.result import Result, Stop

DPI = 150
MARGIN = 1.19  # a quarter stop beyond the outermost marks
MANY = 14  # from more stops on their names stand upright
_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "text.parse_math": False,  # a name may hold a dollar sign
    "axes.formatter.use_locale": False,
    "axes.linewidth": 0.8,
    "hatch.linewidth": 0.6,
    "svg.fonttype": "path",
    "svg.hashsalt": "sweep",
}


def new_figure(width_in: float, height_in: float) -> Figure:
    """A figure in no need of pyplot or a display."""
    figure = Figure(figsize=(width_in, height_in), dpi=DPI)
    FigureCanvasAgg(figure)
    return figure


def styled(make: Callable[[], Figure]) -> Figure:
    """The figure in our own style over the defaults: a user's matplotlibrc changes nothing, and is left as it was."""
    with matplotlib.rc_context():
        _set_style()
        return make()


def png_of(make: Callable[[], Figure]) -> bytes:
    """The figure as PNG; the same bytes each time with the same libraries."""
    return _saved(make, "png", {"Software": None})


def svg_of(make: Callable[[], Figure]) -> bytes:
    """The figure as SVG, its letters as outlines; the same bytes each time with the same libraries."""
    return _saved(make, "svg", {"Date": None, "Creator": None})


def by_mark(result: Result) -> list[Stop]:
    """The stops, widest first."""
    return sorted(result.stops, key=lambda s: s.stop)


def cells(marks: Sequence[float], places: Sequence[float]) -> list[float]:
    """The borders between the stops' cells, and both ends of an axis that holds `places` as well."""
    inner = [float(np.sqrt(a * b)) for a, b in pairwise(marks)]
    return [min(*marks, *places) / MARGIN, *inner, max(*marks, *places) * MARGIN]


def stop_axis(axes: Axes, marks: Sequence[float], edges: Sequence[float]) -> None:
    """A logarithmic axis from edge to edge, its marks not yet named."""
    axes.set_xscale("log", base=2)
    axes.set_xlim(edges[0], edges[-1])
    axes.xaxis.set_major_locator(FixedLocator(list(marks)))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(NullFormatter())
    axes.tick_params(axis="x", length=0)
    axes.yaxis.set_label_coords(-0.068, 0.5)


def name_stops(axes: Axes, marks: Sequence[float], chosen: float | None) -> None:
    """The marks' names below the axis, the chosen one white on black."""
    many = len(marks) > MANY
    names = [f"{mark:g}" for mark in marks]
    axes.set_xticks(list(marks), names, fontsize=7 if many else 9.5, rotation=90 if many else 0)
    for mark, label in zip(marks, axes.get_xticklabels(), strict=True):
        if mark == chosen:
            box = {"boxstyle": "square,pad=0.25", "fc": "black", "ec": "black"}
            label.set(color="white", fontweight="bold", bbox=box)


def _saved(make: Callable[[], Figure], kind: str, metadata: dict[str, str | None]) -> bytes:
    with matplotlib.rc_context():
        _set_style()
        file = io.BytesIO()
        make().savefig(file, format=kind, dpi=DPI, metadata=metadata)
        return file.getvalue()


def _set_style() -> None:
    matplotlib.rcdefaults()
    matplotlib.rcParams.update(_STYLE)
