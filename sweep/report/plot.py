"""A result as one picture: contrast at the feature over the stop, and the exposure that each stop needs.

Made to be understood at first sight in a validation file, also in grey and by the colour-blind: each target has its own
marker and line style and is named at its line's end; every verdict is written out.
"""

import io
import textwrap
from collections import defaultdict
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import groupby

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, LogLocator, NullFormatter, NullLocator

from sweep.choose.settings import exposure_limit_ms
from sweep.choose.wording import number
from sweep.report.labels import Label, Points, label_free, label_right
from sweep.report.letters import drawable
from sweep.result import Reading, Result, Stop
from sweep.station import Station
from sweep.verdict import chosen_stop, headline, with_u

SIZE_IN = (9.0, 6.6)
DPI = 150

_STYLE = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "text.parse_math": False,  # a name may hold a dollar sign
    "axes.formatter.use_locale": False,
    "axes.linewidth": 0.8,
    "hatch.linewidth": 0.6,
    "svg.fonttype": "path",
    "svg.hashsalt": "sweep",
    "path.simplify": True,
}
_MARGIN = 1.19  # a quarter stop beyond the outermost marks
_HEAVY = "black"
# Told apart by style and marker first; the colours differ in lightness, too.
_COLOURS = ("#0072b2", "#c8501e", "#007a5a", "#8a5a9e", "#5f5f5f", "#b8860b", "#3a9bd0", "#a03050")
_DASHES = (
    "--",
    "-.",
    (0, (1, 1.2)),
    (0, (7, 2)),
    (0, (4, 1.5, 1, 1.5, 1, 1.5)),
    (0, (2.5, 1.5)),
    (0, (8, 1.5, 2, 1.5)),
)
_MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<", ">", "p")
_RULED_OUT = {"exposure": "////", "noise": "\\\\\\\\", "no-reading": "...."}
_CELL = {
    "exposure": "too little\nlight",
    "noise": "too\nnoisy",
    "contrast": "too little\ncontrast",
    "beyond-nyquist": "too fine for\nthe pixels",
    "no-reading": "no sound\nreading",
    "unproven": "not\nproven",
}
_FIRST = ("no-reading", "beyond-nyquist", "exposure", "noise", "contrast", "unproven")
"""Which of several faults a stop's cell names."""


@dataclass(frozen=True, slots=True)
class Line:
    """One target on the plot: its model and its readings, and how they are drawn."""

    name: str
    label: str
    x: Points
    y: Points
    band: Points
    readings: tuple[tuple[float, Reading], ...]
    others: tuple[tuple[float, Reading], ...]
    heavy: bool
    colour: str
    dash: object
    marker: str

    @property
    def end(self) -> float | None:
        """Height of the line's right end."""
        if len(self.y):
            return float(self.y[-1])
        return _height(self.readings[-1][1]) if self.readings else None


def png(result: Result, station: Station) -> bytes:
    """The picture as PNG; the same bytes each time with the same libraries."""
    return _saved(result, station, "png")


def svg(result: Result, station: Station) -> bytes:
    """The picture as SVG, its letters as outlines; the same bytes each time with the same libraries."""
    return _saved(result, station, "svg")


def draw(result: Result, station: Station) -> Figure:
    """The picture as a matplotlib figure of its own, outside pyplot."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        return _figure(result, station)


def _saved(result: Result, station: Station, kind: str) -> bytes:
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        file = io.BytesIO()
        nothing = {"Date": None, "Creator": None} if kind == "svg" else {"Software": None}
        _figure(result, station).savefig(file, format=kind, dpi=DPI, metadata=nothing)
        return file.getvalue()


def _figure(result: Result, station: Station) -> Figure:
    figure = Figure(figsize=SIZE_IN, dpi=DPI)
    FigureCanvasAgg(figure)
    title = textwrap.fill(drawable(headline(result, station)), 84)
    rows = title.count("\n")
    top = 0.885 - 0.033 * rows
    grid = figure.add_gridspec(
        3, 1, left=0.075, right=0.775, top=top, bottom=0.095, hspace=0.0, height_ratios=(0.085, 0.68, 0.235)
    )
    strip, main, below = (figure.add_subplot(grid[i]) for i in range(3))
    figure.text(0.02, 0.975, title, fontsize=12.5, fontweight="bold", va="top", linespacing=1.15)
    under = f"{drawable(station.station.name)}.  Markers: readings, bars ± 2 standard uncertainties"
    under += ".  Lines: lens model." if result.curve else "."
    figure.text(0.02, 0.925 - 0.033 * rows, under, fontsize=8.5, va="top", color="0.25")
    edges = _cells(result)
    for axes in (strip, main, below):
        _stop_axis(axes, result, edges)
    _verdicts(strip, result, edges)
    _contrast(main, result, station, edges)
    _exposure(below, result, station)
    return figure


def _place(stop: Stop) -> float:
    """Where a stop stands on the axis: by its light where known."""
    return stop.f_number_by_light or stop.stop


def _cells(result: Result) -> list[float]:
    """The borders between the stops' cells, and both ends of the axis."""
    at = sorted({s.stop for s in result.stops})
    places = [*at, *(_place(s) for s in result.stops)]
    inner = [float(np.sqrt(a * b)) for a, b in zip(at, at[1:], strict=False)]
    return [min(places) / _MARGIN, *inner, max(places) * _MARGIN]


def _stop_axis(axes: Axes, result: Result, edges: Sequence[float]) -> None:
    axes.set_xscale("log", base=2)
    axes.set_xlim(edges[0], edges[-1])
    axes.xaxis.set_major_locator(FixedLocator(sorted(s.stop for s in result.stops)))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(NullFormatter())
    axes.tick_params(axis="x", length=0)


def _by_mark(result: Result) -> list[Stop]:
    return sorted(result.stops, key=lambda s: s.stop)


def _fault(stop: Stop) -> str:
    """The one code that a stop's cell names; empty where it meets the need."""
    return next((code for code in _FIRST if code in stop.why_not), "")


def _runs(result: Result, edges: Sequence[float]) -> Iterator[tuple[str, float, float, int]]:
    """Neighbouring stops with the same verdict: its code, from where to where, how many."""
    at = 0
    for code, group in groupby(_by_mark(result), key=_fault):
        n = len(list(group))
        yield code, edges[at], edges[at + n], n
        at += n


def _verdicts(axes: Axes, result: Result, edges: Sequence[float]) -> None:
    """The strip on top: a word on every stop."""
    axes.set_yticks([])
    axes.set_ylim(0, 1)
    width = np.log(edges[-1] / edges[0])
    for code, left, right, _ in _runs(result, edges):
        axes.axvspan(left, right, fc="white" if not code else "0.93", ec="black", lw=0.8)
        wide = np.log(right / left) / width > 0.2
        text = _CELL[code] if code else "meets\nthe need"
        axes.text(
            float(np.sqrt(left * right)),
            0.5,
            text.replace("\n", " ") if wide else text,
            ha="center",
            va="center",
            fontsize=8.5 if wide else 6.5 if np.log(right / left) / width > 0.08 else 5,
            fontweight="normal" if code else "bold",
            linespacing=1.05,
        )


def _contrast(axes: Axes, result: Result, station: Station, edges: Sequence[float]) -> None:
    need = station.need
    lines = list(_lines(result, station))
    heights = [need.contrast, *(s.worst_contrast or 0.0 for s in result.stops)]
    heights += [v for line in lines for v in (*line.y, *(_height(r) for _, r in line.readings))]
    top = next(t for t in (0.25, 0.5, 1.04) if max(heights) < 0.93 * t or t > 1)
    axes.set_ylim(0, top)
    axes.set_ylabel(
        f"Contrast of a feature of {number(need.feature_um)} µm at the object\n(0 = lost, 1 = full)", fontsize=9
    )
    axes.grid(axis="y", color="0.9", lw=0.6, zorder=0)
    axes.set_axisbelow(True)
    axes.axhspan(0, need.contrast, color="0.955", lw=0, zorder=0.1)
    for code, left, right, _ in _runs(result, edges):
        if code in _RULED_OUT:
            axes.axvspan(left, right, fc="none", ec="0.78", hatch=_RULED_OUT[code], lw=0, zorder=0.2)
    axes.axhline(need.contrast, color="black", lw=1.4, ls=(0, (6, 2)), zorder=2)
    for line in lines:
        _draw_line(axes, line)
    labels = [Label(need.contrast, f"needed: {need.contrast:g}", bold=True)]
    labels += [Label(line.end, line.label, line.colour, line.heavy) for line in lines if line.end is not None]
    labels += _with_motion(axes, result, station)
    label_right(axes, labels, 8.5 if len(labels) <= 8 else 7.5 if len(labels) <= 14 else 6.0)
    _mark_chosen(axes, result, lines, need.contrast)


def _lines(result: Result, station: Station) -> Iterator[Line]:
    """One line a target, the worst last (on top); depths between the targets make one line together."""
    x_of = {s.stop: _place(s) for s in result.stops}
    chosen = chosen_stop(result)
    worst = chosen.worst_target if chosen else None
    curves: dict[str, list[tuple[float, float, float]]] = defaultdict(list)
    for p in result.curve:
        curves[p.target].append((p.f_number, p.contrast, p.contrast_u or 0.0))
    depth_of = {t.name: t.depth_mm for t in station.targets}
    range_mm = station.need.depth_range_mm
    between = [np.array(sorted(points)) for name, points in curves.items() if name not in depth_of]
    found = []
    for i, (name, depth_mm) in enumerate(depth_of.items()):
        curve = np.array(sorted(curves.get(name, []))).reshape(-1, 3)
        mine = [r for r in result.readings if r.target == name and r.contrast_at_feature is not None]
        by_stop = {
            stop: sorted((r for r in mine if r.stop == stop), key=_height) for stop in sorted({r.stop for r in mine})
        }
        label = textwrap.shorten(drawable(name), 44, placeholder="…")
        label = textwrap.fill(label, 22) + f"\n{depth_mm:+g} mm".replace("+0 mm", "0 mm")
        found.append(
            Line(
                name,
                label,
                curve[:, 0],
                curve[:, 1],
                curve[:, 2],
                tuple((x_of.get(stop, stop), rs[0]) for stop, rs in by_stop.items()),
                tuple((x_of.get(stop, stop), r) for stop, rs in by_stop.items() for r in rs[1:]),
                name == worst,
                _HEAVY if name == worst else _COLOURS[i % len(_COLOURS)],
                "-" if name == worst else _DASHES[i % len(_DASHES)],
                _MARKERS[i % len(_MARKERS)],
            )
        )
    if between and range_mm is not None:
        lowest = np.min([b[:, 1] for b in between], axis=0)
        which = np.argmin([b[:, 1] for b in between], axis=0)
        u = np.array([between[w][g, 2] for g, w in enumerate(which)])
        heavy = worst is not None and worst not in depth_of
        label = f"worst depth from\n{range_mm[0]:g} to {range_mm[1]:g} mm"
        found.append(Line("", label, between[0][:, 0], lowest, u, (), (), heavy, _HEAVY, "-" if heavy else ":", ""))
    yield from sorted(found, key=lambda line: line.heavy)


def _height(reading: Reading) -> float:
    """A reading's contrast as it counts: a reversed one is none."""
    return 0.0 if reading.reversed else reading.contrast_at_feature or 0.0


def _draw_line(axes: Axes, line: Line) -> None:
    on_top = 4 if line.heavy else 3
    if len(line.x):
        axes.fill_between(
            line.x,
            line.y - 2 * line.band,
            line.y + 2 * line.band,
            color=line.colour,
            alpha=0.18,
            lw=0,
            zorder=on_top - 1,
        )
        axes.plot(line.x, line.y, color=line.colour, ls=line.dash, lw=2.4 if line.heavy else 1.3, zorder=on_top)
    elif line.readings:
        xs, ys = zip(*((x, _height(r)) for x, r in line.readings), strict=True)
        axes.plot(xs, ys, color=line.colour, ls=line.dash, lw=1.0, zorder=on_top)
    for x, reading in line.readings:
        axes.errorbar(
            x,
            _height(reading),
            yerr=2 * (reading.contrast_at_feature_u or 0.0),
            fmt=line.marker,
            ms=6 if line.heavy else 5,
            mfc="white" if reading.reversed else line.colour,
            mec=line.colour if reading.reversed else "white",
            mew=0.6,
            ecolor=line.colour,
            elinewidth=1.1,
            capsize=2.2,
            zorder=on_top + 0.5,
        )
    if line.others:
        axes.scatter(
            [x for x, _ in line.others],
            [_height(r) for _, r in line.others],
            s=5,
            color=line.colour,
            alpha=0.6,
            lw=0,
            zorder=on_top,
        )


def _with_motion(axes: Axes, result: Result, station: Station) -> list[Label]:
    """Where the part moves, the worst contrasts of the choice lie below the lines."""
    points = [(_place(s), s.worst_contrast) for s in _by_mark(result) if s.worst_contrast is not None]
    if not station.need.speed_mm_s or not points:
        return []
    xs, ys = zip(*points, strict=True)
    axes.plot(xs, ys, color="black", ls=":", lw=1.2, marker="d", ms=5, mfc="white", zorder=5)
    return [Label(float(ys[-1]), "worst, with the\npart's motion")]


def _mark_chosen(axes: Axes, result: Result, lines: Sequence[Line], need: float) -> None:
    chosen = chosen_stop(result)
    if chosen is None:
        return
    x = _place(chosen)
    axes.axvline(x, color="black", lw=1.0, zorder=2.5)
    if chosen.worst_contrast is None:
        return
    axes.plot([x], [chosen.worst_contrast], "o", ms=15, mfc="none", mec="black", mew=1.8, zorder=8)
    left, right = axes.get_xlim()
    grid = np.geomspace(left, right, 160)
    taken = [np.column_stack([grid, np.full_like(grid, need)])]
    low, high = axes.get_ylim()
    taken.append(np.column_stack([np.full(60, x), np.linspace(low, high, 60)]))
    for line in lines:
        if len(line.x):
            taken.append(np.column_stack([grid, np.interp(grid, line.x, line.y)]))
        taken += [np.array([[px, _height(r)]] * 3) for px, r in line.readings]
    text = f"{with_u(chosen.worst_contrast, chosen.worst_contrast_u)}\nat f/{chosen.stop:g}"
    label_free(axes, (x, chosen.worst_contrast), text, 9, np.vstack(taken))


def _exposure(axes: Axes, result: Result, station: Station) -> None:
    """The lower part: what each stop needs, against what is allowed."""
    stops = _by_mark(result)
    chosen = chosen_stop(result)
    few = len(stops) <= 12
    axes.set_xticks([s.stop for s in stops], [f"{s.stop:g}" for s in stops], fontsize=9.5 if few else 7)
    for stop, label in zip(stops, axes.get_xticklabels(), strict=True):
        if stop is chosen:
            label.set(
                color="white", fontweight="bold", bbox={"boxstyle": "square,pad=0.25", "fc": "black", "ec": "black"}
            )
    lit = any(s.f_number_by_light is not None for s in stops)
    axes.set_xlabel(
        "Stop (f-number as engraved; points stand where the light says that the iris was)"
        if lit
        else "Stop (f-number as engraved)",
        labelpad=6,
    )
    axes.set_ylabel("Exposure\nneeded (ms)")
    axes.set_yscale("log")
    need, limit = station.need, exposure_limit_ms(station)
    most = limit * 10 ** (need.max_gain_db / 20)
    known = [(s, s.exposure_needed_ms) for s in stops if s.exposure_needed_ms is not None]
    values = [v for _, v in known] + [v for v in (limit, most) if np.isfinite(v)]
    axes.set_ylim(min(values) / 1.8, max(values) * 1.8)
    axes.yaxis.set_major_locator(LogLocator(10, subs=(1, 2, 5) if max(values) / min(values) < 60 else (1,)))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda v, _: number(v)))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.grid(axis="y", color="0.9", lw=0.6)
    axes.set_axisbelow(True)
    labels = []
    if np.isfinite(limit):
        axes.axhline(limit, color="black", lw=1.4, ls=(0, (6, 2)))
        labels.append(Label(limit, f"allowed: {number(limit)} ms", bold=True))
    if np.isfinite(most) and most > limit:
        axes.axhline(most, color="0.3", lw=1.0, ls=":")
        labels.append(Label(most, f"{number(most)} ms with {need.max_gain_db:g} dB", "0.3"))
    axes.plot([_place(s) for s, _ in known], [v for _, v in known], color="0.45", lw=1.0)
    for stop, value in known:
        within = value <= most * 1.000001
        axes.plot(
            [_place(stop)],
            [value],
            "o" if within else "x",
            ms=5.5,
            mfc="black" if value <= limit * 1.000001 else "white",
            mec="black",
            mew=1.2,
        )
    if chosen is not None:
        axes.axvline(_place(chosen), color="black", lw=1.0)
    if not known:
        axes.text(0.5, 0.5, "the light could not be measured", transform=axes.transAxes, ha="center", va="center")
    label_right(axes, labels, 8.5)
