"""A result as one picture: contrast at the feature over the stop, and the exposure that each stop needs.

Made to be understood at first sight in a validation file, also in grey and by the colour-blind: each target has its own
marker and line style and is named at its line's end; every verdict is written out.
"""

import textwrap
from collections.abc import Iterator, Sequence
from itertools import groupby
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator

from sweep.choose.settings import exposure_limit_ms
from sweep.choose.wording import number
from sweep.report.drawing import by_mark, cells, name_stops, new_figure, png_of, stop_axis, styled, svg_of
from sweep.report.labels import Label, label_free, label_right
from sweep.report.letters import drawable, typeset
from sweep.report.lines import Line, draw_line, height, lines_of, place
from sweep.result import Result, Stop
from sweep.station import Station
from sweep.verdict import WHY_NOT, chosen_stop, headline, is_forecast, setting, stop_name, with_u

SIZE_IN = (9.0, 6.6)
_TITLE_LETTERS = 84  # a line
_TITLE_LINE = 0.033  # of the figure's height
_EXPLAINED_LETTERS = 120
_EXPLAINED_LINE = 0.024
_HEAD = 0.115  # of the figure's height: a title of one line over an explanation of one line
_RULED_OUT = {"exposure": "////", "noise": "\\\\\\\\", "no-reading": "...."}
_FIRST = ("no-reading", "beyond-nyquist", "exposure", "noise", "contrast", "unproven")
"""Which of several faults the word over a stop names."""
_NEED: dict[str, Any] = {"color": "black", "lw": 1.4, "ls": (0, (6, 2))}
_WITHIN = 1 + 1e-6  # what counts as not above a limit


def png(result: Result, station: Station) -> bytes:
    """The picture as PNG; the same bytes each time with the same libraries."""
    return png_of(lambda: _figure(result, station))


def svg(result: Result, station: Station) -> bytes:
    """The picture as SVG, its letters as outlines; the same bytes each time with the same libraries."""
    return svg_of(lambda: _figure(result, station))


def draw(result: Result, station: Station) -> Figure:
    """The picture as a figure."""
    return styled(lambda: _figure(result, station))


def headroom(result: Result, station: Station) -> float:
    """The part of the picture's height that title and explanation take."""
    more = _TITLE_LINE * (len(_title(result, station)) - 1)
    return _HEAD + more + _EXPLAINED_LINE * (len(_explained(result, station)) - 1)


def explanation(result: Result) -> str:
    """What markers and lines of the picture mean."""
    told = []
    if any(r.contrast_at_feature is not None for r in result.readings):
        told.append("Markers: readings, bars ± 2 standard uncertainties.")
    if any(r.reversed for r in result.readings):
        told.append("Hollow: reversed, counts as 0.")
    if result.curve:
        told.append(
            "Lines: lens model, with a band likewise."
            if told
            else "Lines: lens model, bands ± 2 standard uncertainties."
        )
    return " ".join(told)


def _figure(result: Result, station: Station) -> Figure:
    figure = new_figure(*SIZE_IN)
    head = headroom(result, station)
    grid = figure.add_gridspec(
        4, 1, left=0.095, right=0.77, top=1 - head, bottom=0.09, hspace=0.0, height_ratios=(0.085, 0.67, 0.025, 0.22)
    )
    strip, main, below = (figure.add_subplot(grid[i]) for i in (0, 1, 3))
    title = _title(result, station)
    under = 0.925 - _TITLE_LINE * (len(title) - 1)
    figure.text(0.02, 0.975, "\n".join(title), fontsize=12.5, fontweight="bold", va="top", linespacing=1.15)
    figure.text(0.02, under, "\n".join(_explained(result, station)), fontsize=8.5, va="top", color="0.25")
    marks = [s.stop for s in by_mark(result)]
    edges = cells(marks, [place(s) for s in result.stops])
    for axes in (strip, main, below):
        stop_axis(axes, marks, edges)
    _verdicts(strip, result, edges)
    _contrast(main, result, station, edges)
    _exposure(below, result, station)
    return figure


def _title(result: Result, station: Station) -> list[str]:
    return textwrap.wrap(typeset(headline(result, station)), _TITLE_LETTERS)


def _explained(result: Result, station: Station) -> list[str]:
    return textwrap.wrap(f"{drawable(station.station.name)}. {explanation(result)}", _EXPLAINED_LETTERS)


def _runs(result: Result, edges: Sequence[float]) -> Iterator[tuple[str, float, float]]:
    """Neighbouring stops with the same verdict: its code (empty where the need is met), from where to where."""
    at = 0
    for code, group in groupby(by_mark(result), key=_fault):
        n = len(list(group))
        yield code, edges[at], edges[at + n]
        at += n


def _fault(stop: Stop) -> str:
    if stop.meets_need:
        return ""
    return next((code for code in _FIRST if code in stop.why_not), "unproven")


def _verdicts(axes: Axes, result: Result, edges: Sequence[float]) -> None:
    """The strip on top: a word over every stop."""
    axes.set_yticks([])
    axes.set_ylim(0, 1)
    for code, left, right in _runs(result, edges):
        share = float(np.log(right / left) / np.log(edges[-1] / edges[0]))
        text = WHY_NOT[code] if code else "meets the need"
        axes.axvspan(left, right, fc="0.93" if code else "white", ec="black", lw=0.8)
        axes.text(
            float(np.sqrt(left * right)),
            0.5,
            text if share > 0.2 else textwrap.fill(text, 11 if share > 0.08 else 7),
            ha="center",
            va="center",
            fontsize=8.5 if share > 0.2 else 6.5 if share > 0.08 else 4.5,
            fontweight="normal" if code else "bold",
            linespacing=1.05,
        )


def _contrast(axes: Axes, result: Result, station: Station, edges: Sequence[float]) -> None:
    need = station.need
    lines = lines_of(result, station)
    seen = [need.contrast, *(s.worst_contrast or 0.0 for s in result.stops)]
    seen += [v for line in lines for v in (*line.y, *(height(r) for _, r in (*line.lowest, *line.others)))]
    top = next((t for t in (0.25, 0.5) if max(seen) < 0.93 * t), max(1.04, 1.04 * max(seen)))
    axes.set_ylim(-0.015 * top, top)
    axes.set_ylabel(f"Contrast of a {number(need.feature_um)} µm feature at the object\n(0 = lost, 1 = full)")
    axes.grid(axis="y", color="0.9", lw=0.6)
    axes.set_axisbelow(True)
    axes.axhspan(0, need.contrast, color="0.955", lw=0, zorder=0.1)
    for code, left, right in _runs(result, edges):
        if code in _RULED_OUT:
            axes.axvspan(left, right, fc="none", ec="0.78", hatch=_RULED_OUT[code], lw=0, zorder=0.2)
    axes.axhline(need.contrast, zorder=2, **_NEED)
    for line in lines:
        draw_line(axes, line)
    labels = [Label(need.contrast, f"needed: {need.contrast:g}", bold=True)]
    labels += [line.named for line in lines if line.named is not None]
    labels += _with_motion(axes, result, station)
    label_right(axes, labels, 8.5 if len(labels) <= 8 else 7.5 if len(labels) <= 14 else 6.0)
    _mark_chosen(axes, result, lines, need.contrast)


def _with_motion(axes: Axes, result: Result, station: Station) -> list[Label]:
    """Where the part moves, the worst contrasts of the choice lie below the lines."""
    points = [(place(s), s.worst_contrast) for s in by_mark(result) if s.worst_contrast is not None]
    if not station.need.speed_mm_s or not points:
        return []
    xs, ys = zip(*points, strict=True)
    axes.plot(xs, ys, color="black", ls=":", lw=1.2, marker="d", ms=5, mfc="white", zorder=5)
    return [Label(float(ys[-1]), "worst, with the\npart's motion", dash=":", marker="d")]


def _mark_chosen(axes: Axes, result: Result, lines: Sequence[Line], need: float) -> None:
    """A rule through the recommended stop, a ring at its worst contrast, and what to set."""
    chosen = chosen_stop(result)
    if chosen is None:
        return
    x = place(chosen)
    axes.axvline(x, color="black", lw=1.0, zorder=2.5)
    if chosen.worst_contrast is None:
        return
    y = chosen.worst_contrast
    axes.plot([x], [y], "o", ms=15, mfc="none", mec="black", mew=1.8, zorder=8)
    grid = np.geomspace(*axes.get_xlim(), 160)
    taken = [np.column_stack([grid, np.full_like(grid, need)])]
    taken.append(np.column_stack([np.full(60, x), np.linspace(*axes.get_ylim(), 60)]))
    for line in lines:
        points = np.array([(px, height(r)) for px, r in line.lowest]).reshape(-1, 2)
        taken.append(np.repeat(points, 3, axis=0))
        if len(line.x) or len(points):
            drawn = (line.x, line.y) if len(line.x) else (points[:, 0], points[:, 1])
            taken.append(np.column_stack([grid, np.interp(grid, *drawn)]))
    use = f"use {stop_name(chosen.stop)}\n" if chosen.meets_need else f"{stop_name(chosen.stop)}\n"
    if not is_forecast(result):
        use += f"{setting(chosen.exposure_ms, chosen.gain_db)}\n"
    use += f"contrast {with_u(y, chosen.worst_contrast_u)}"
    label_free(axes, (x, y), use, 8.5, np.vstack(taken))


def _exposure(axes: Axes, result: Result, station: Station) -> None:
    """The lower part: what each stop needs, against what is allowed."""
    stops, need = by_mark(result), station.need
    limit = exposure_limit_ms(station)
    most = limit * 10 ** (need.max_gain_db / 20)
    known = [(place(s), s.exposure_needed_ms) for s in stops if s.exposure_needed_ms is not None]
    values = [v for _, v in known] + [limit, most]
    _stop_labels(axes, result)
    axes.set_ylabel("Exposure\nneeded (ms)")
    axes.set_yscale("log")
    axes.set_ylim(min(values) / 1.8, max(values) * 2.6)
    axes.yaxis.set_major_locator(LogLocator(10, subs=(1, 2, 5) if max(values) < 30 * min(values) else (1,)))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda v, _: number(v)))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.grid(axis="y", color="0.9", lw=0.6)
    axes.set_axisbelow(True)
    axes.axhline(limit, **_NEED)
    labels = [Label(limit, f"allowed: {number(limit)} ms", bold=True)]
    if most > limit:
        axes.axhline(most, color="0.3", lw=1.0, ls=":")
        labels.append(Label(most, f"{number(most)} ms with {need.max_gain_db:g} dB", "0.3"))
    label_right(axes, labels, 8.5)
    axes.plot([x for x, _ in known], [v for _, v in known], color="0.45", lw=1.0)
    for marker, face, low, high in (
        ("o", "black", 0.0, limit),
        ("o", "white", limit, most),
        ("x", "black", most, np.inf),
    ):
        mine = [(x, v) for x, v in known if low * _WITHIN < v <= high * _WITHIN]
        axes.plot([x for x, _ in mine], [v for _, v in mine], marker, ms=5.5, mfc=face, mec="black", mew=1.2)
    told = "●  within the limit     ○  with gain     ×  out of reach"
    if not known:
        told = "Not known before light is measured." if is_forecast(result) else "The light could not be measured."
    axes.text(0.012, 0.94, told, transform=axes.transAxes, va="top", fontsize=7.5, color="0.25")
    chosen = chosen_stop(result)
    if chosen is not None:
        axes.axvline(place(chosen), color="black", lw=1.0)


def _stop_labels(axes: Axes, result: Result) -> None:
    name_stops(axes, [s.stop for s in by_mark(result)], result.recommendation.stop)
    lit = any(s.f_number_by_light is not None for s in result.stops)
    told = "; points stand where the light says that the iris was" if lit else ""
    axes.set_xlabel(f"Stop (f-number as engraved{told})", labelpad=6)
