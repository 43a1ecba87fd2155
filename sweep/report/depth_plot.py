"""Contrast over depth and stop as one picture for the record's second page: what depth a stop serves.

Made to be read in grey: few steps of grey from lost to full, their borders numbered, the need as a bold border, and
the usable depths of each stop written out.
"""

import math
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patheffects import AbstractPathEffect, withStroke
from matplotlib.ticker import MaxNLocator
from scipy.interpolate import PchipInterpolator

from sweep.choose.depths import kept
from sweep.choose.wording import at_least, at_most, number
from sweep.report.drawing import MANY, cells, name_stops, new_figure, stop_axis, styled, svg_of
from sweep.report.labels import Label, Points, label_contour, label_right
from sweep.report.letters import typeset
from sweep.report.lines import label_of, signed
from sweep.result import DepthMap, DepthStop, Result
from sweep.station import Station
from sweep.verdict import chosen_stop

SIZE_IN = (9.0, 4.5)
_COLUMNS = 40  # of the picture, for each stop
_STEPS = ((0.3, 0.05), (0.6, 0.1), (math.inf, 0.2))  # up to which highest contrast, which step of grey
_DARKEST, _LIGHTEST = 0.52, 1.0
_CASING: list[AbstractPathEffect] = [withStroke(linewidth=5.0, foreground="white")]


def depth_svg(found: DepthMap, result: Result, station: Station) -> bytes:
    """The map as SVG, its letters as outlines; the same bytes each time with the same libraries."""
    return svg_of(lambda: _figure(found, result, station))


def draw_depths(found: DepthMap, result: Result, station: Station) -> Figure:
    """The map as a figure."""
    return styled(lambda: _figure(found, result, station))


def depths_explained(result: Result, station: Station) -> str:
    """What steps, lines and words of the map mean."""
    need = station.need
    told = (
        f"Grey: contrast of a {number(need.feature_um)} um feature by the lens model, dark for lost, light for full, "
    )
    told += "each stop at its own exposure, between the stops interpolated. "
    told += (
        f"Bold: {need.contrast:g} is kept with a confidence of {need.confidence:g}. Usable depths: where it is kept "
    )
    told += "about the sharpest; an end that is not named lies far outside the depths in question."
    if need.speed_mm_s:
        told += " The part's motion is counted in."
    if any(note.code == "model-misfit" for note in result.warnings):
        told += " The model does not describe all readings (see the warnings): trust these more."
    return told


def usable_text(usable_mm: tuple[float | None, float | None] | None) -> str:
    """The usable depths (mm) in few words, rounded inwards."""
    if usable_mm is None:
        return "none"
    near, far = usable_mm
    if near is None and far is None:
        return "all"
    if far is None:
        return f"from\n{typeset(at_least(near or 0.0))}"
    return f"{'up' if near is None else typeset(at_least(near))}\nto {typeset(at_most(far))}"


def _figure(found: DepthMap, result: Result, station: Station) -> Figure:
    rows = sorted(found.stops, key=lambda row: row.stop)
    marks = [row.stop for row in rows]
    figure = new_figure(*SIZE_IN)
    grid = figure.add_gridspec(
        2,
        1,
        left=0.115,
        right=0.785,
        top=0.985,
        bottom=0.105 if len(marks) <= MANY else 0.14,
        hspace=0.0,
        height_ratios=(0.12, 0.88),
    )
    strip, main = (figure.add_subplot(grid[i]) for i in (0, 1))
    edges = cells(marks, marks)
    for axes in (strip, main):
        stop_axis(axes, marks, edges)
    _usable(strip, rows, edges, result)
    _contrast(main, rows, found.depths_mm, edges, result, station)
    name_stops(main, marks, result.recommendation.stop)
    main.set_xlabel("Stop (f-number as engraved)", labelpad=6)
    return figure


def _usable(axes: Axes, rows: Sequence[DepthStop], edges: Sequence[float], result: Result) -> None:
    """The strip on top: the usable depths in words, bold for stops that meet every need."""
    axes.set_yticks([])
    axes.set_ylim(0, 1)
    axes.set_ylabel("Usable\ndepths\n(mm)", rotation=0, ha="center", va="center", fontsize=8.5)
    axes.yaxis.set_label_coords(-0.075, 0.58)
    serves = {s.stop for s in result.stops if s.meets_need}
    for row, left, right in zip(rows, edges[:-1], edges[1:], strict=True):
        share = math.log(right / left) / math.log(edges[-1] / edges[0])
        axes.axvspan(left, right, fc="white" if row.stop in serves else "0.93", ec="black", lw=0.8)
        axes.text(
            math.sqrt(left * right),
            0.5,
            usable_text(row.usable_mm),
            ha="center",
            va="center",
            fontsize=min(8.5, 84 * share),
            fontweight="bold" if row.stop in serves else "normal",
            linespacing=1.05,
        )


def _contrast(
    axes: Axes,
    rows: Sequence[DepthStop],
    depths_mm: Sequence[float],
    edges: Sequence[float],
    result: Result,
    station: Station,
) -> None:
    need = station.need
    axes.set_ylim(depths_mm[-1], depths_mm[0])  # nearer the camera on top
    axes.yaxis.set_major_locator(MaxNLocator(8, prune="both"))
    axes.yaxis.set_label_coords(-0.085, 0.5)  # room for ticks of two decimals
    axes.set_ylabel("Depth from the plane of focus (mm)\nfarther \N{LEFTWARDS ARROW}   \N{RIGHTWARDS ARROW} nearer")
    x, contrast, u = _between_marks(rows, edges)
    levels = _levels(float(contrast.max()))
    greys = [str(g) for g in np.linspace(_DARKEST, _LIGHTEST, len(levels) - 1)]
    axes.contourf(x, depths_mm, contrast, levels, colors=greys)
    sure = kept(contrast, u, need.confidence)
    taken = _marks(axes, rows, edges, result, station)
    bold = _border(axes, x, depths_mm, sure, need.contrast, bold=True)
    taken = label_contour(axes, bold, f"needed: {need.contrast:g}", 8.5, taken, bold=True)
    numbered = [(v, _border(axes, x, depths_mm, contrast, v)) for v in levels[1:-1]]
    taken = np.vstack([taken, bold])
    for level, points in numbered:
        taken = label_contour(axes, points, f"{level:g}", 8, taken)


def _between_marks(rows: Sequence[DepthStop], edges: Sequence[float]) -> tuple[Points, Points, Points]:
    """Stops (n,) of the columns, contrast and its u (depths, n), by monotone cubics in the log of the stop."""
    marks = np.log([row.stop for row in rows])
    x = np.geomspace(edges[0], edges[-1], _COLUMNS * len(rows) + 1)
    inside = np.clip(np.log(x), marks[0], marks[-1])
    contrast, u = (
        np.asarray(PchipInterpolator(marks, np.array(values))(inside)).T
        for values in ([row.contrast for row in rows], [row.contrast_u for row in rows])
    )
    return x, np.maximum(contrast, 0.0), u  # rounding may leave a lost contrast below 0, and so without a step


def _levels(highest: float) -> list[float]:
    """Borders of the grey steps, from 0 to above the highest contrast."""
    step = next(step for top, step in _STEPS if highest <= top)
    return [round(k * step, 2) for k in range(max(math.floor(highest / step) + 1, 1) + 1)]


def _border(
    axes: Axes, x: Points, depths_mm: Sequence[float], values: Points, level: float, bold: bool = False
) -> Points:
    """Draw where `values` pass a level; returns points of the line in pixels, (n, 2), none where it is not passed."""
    if not values.min() < level < values.max():
        return np.zeros((0, 2))
    drawn = axes.contour(x, depths_mm, values, [level], zorder=3, colors="0.2", linewidths=0.7)
    if bold:
        drawn.set(zorder=4, edgecolor="black", linewidth=2.4)
        drawn.set_path_effects(_CASING)
    return np.asarray(axes.transData.transform(np.vstack([path.vertices for path in drawn.get_paths()])))


def _marks(axes: Axes, rows: Sequence[DepthStop], edges: Sequence[float], result: Result, station: Station) -> Points:
    """Targets, the depths that are asked for, and the recommended stop; returns their points in pixels."""
    chosen = chosen_stop(result)
    worst = chosen.worst_target if chosen else None
    labels = []
    taken = []
    for target in station.targets:
        heavy = target.name == worst
        axes.axhline(target.depth_mm, color="black", lw=1.6 if heavy else 0.9, ls=(0, (5, 3)), zorder=5)
        labels.append(Label(target.depth_mm, label_of(target.name, target.depth_mm), bold=heavy))
        taken += [(x, target.depth_mm) for x in np.geomspace(edges[0], edges[-1], 200)]
    if station.need.depth_range_mm is not None:
        near, far = station.need.depth_range_mm
        axes.plot([1, 1], [near, far], color="black", lw=7, solid_capstyle="butt", transform=axes.get_yaxis_transform())
        labels.append(Label((near + far) / 2, f"parts lie from\n{signed(near)} to {signed(far)} mm", bold=True))
    label_right(axes, labels, 8.5 if len(labels) <= 8 else 7.5 if len(labels) <= 14 else 6.0)
    row = next((row for row in rows if row.stop == result.recommendation.stop), None)
    if row is not None:
        axes.axvline(row.stop, color="black", lw=1.0, zorder=5)
        ends = axes.get_ylim()
        taken += [(row.stop, y) for y in np.linspace(*ends, 120)]
        if row.usable_mm is not None:
            far, near = (end if v is None else v for v, end in zip(row.usable_mm[::-1], ends, strict=True))
            axes.plot([row.stop, row.stop], [near, far], color="black", lw=4.5, solid_capstyle="butt", zorder=5)
    return np.asarray(axes.transData.transform(np.array(taken)))
