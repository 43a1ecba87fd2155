"""The targets as lines of the plot: model and readings of each, and how they are drawn."""

import textwrap
from collections import defaultdict
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes

from sweep.report.labels import Label, Points
from sweep.report.letters import drawable
from sweep.result import Reading, Result, Stop
from sweep.station import Station
from sweep.verdict import chosen_stop

# Told apart by dash and marker first; the colours differ in lightness, too.
_COLOURS = ("#0072b2", "#c8501e", "#007a5a", "#8a5a9e", "#5f5f5f", "#a87900", "#3a9bd0", "#a03050")
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
_NAME_LETTERS = 44  # letters of a name, at most


@dataclass(frozen=True, slots=True)
class Line:
    """One target on the plot. `lowest` readings count, `others` are a target's better patches; both as (x, reading)."""

    label: str
    x: Points
    y: Points
    u: Points
    lowest: tuple[tuple[float, Reading], ...]
    others: tuple[tuple[float, Reading], ...]
    worst: bool
    colour: str
    dash: Any
    marker: str

    @property
    def named(self) -> Label | None:
        """The label for the line's right end; None where there is nothing drawn."""
        if not len(self.y) and not self.lowest:
            return None
        end = float(self.y[-1]) if len(self.y) else height(self.lowest[-1][1])
        return Label(end, self.label, self.colour, self.worst, self.dash, self.marker)


def place(stop: Stop) -> float:
    """Where a stop stands on the axis: by its light where known."""
    return stop.f_number_by_light or stop.stop


def height(reading: Reading) -> float:
    """A reading's contrast as it counts: a reversed one is none."""
    return 0.0 if reading.reversed else reading.contrast_at_feature or 0.0


def label_of(name: str, depth_mm: float) -> str:
    """A target's name, cut and broken to a readable width, over its depth."""
    short = textwrap.shorten(drawable(name), _NAME_LETTERS, placeholder="…") or drawable(name)
    return "\n".join([*_wrapped(short), f"{signed(depth_mm)} mm"])


def signed(depth_mm: float) -> str:
    """A depth with its sign."""
    return f"{depth_mm:+g}".replace("-", "\N{MINUS SIGN}") if depth_mm else "0"


def lines_of(result: Result, station: Station) -> list[Line]:
    """One line a target, the worst last, hence on top; depths between the targets make one line together."""
    chosen = chosen_stop(result)
    worst = chosen.worst_target if chosen else None
    curves: dict[str, list[tuple[float, float, float]]] = defaultdict(list)
    for p in result.curve:
        curves[p.target].append((p.f_number, p.contrast, p.contrast_u or 0.0))
    found = []
    for i, target in enumerate(station.targets):
        curve = np.array(sorted(curves.pop(target.name, []))).reshape(-1, 3)
        lowest, others = _readings(result, target.name)
        heavy = target.name == worst
        found.append(
            Line(
                label=label_of(target.name, target.depth_mm),
                x=curve[:, 0],
                y=curve[:, 1],
                u=curve[:, 2],
                lowest=lowest,
                others=others,
                worst=heavy,
                colour="black" if heavy else _COLOURS[i % len(_COLOURS)],
                dash="-" if heavy else _DASHES[i % len(_DASHES)],
                marker=_MARKERS[i % len(_MARKERS)],
            )
        )
    if curves and station.need.depth_range_mm is not None:
        found.append(_between(list(curves.values()), station.need.depth_range_mm, worst in curves))
    return sorted(found, key=lambda line: line.worst)


def draw_line(axes: Axes, line: Line) -> None:
    """The model as a line with a band of 2 u, readings as markers with bars of 2 u, reversed ones hollow."""
    on_top = 4 if line.worst else 3
    if len(line.x):
        low, high = line.y - 2 * line.u, line.y + 2 * line.u
        axes.fill_between(line.x, low, high, color=line.colour, alpha=0.18, lw=0, zorder=on_top - 1)
        axes.plot(line.x, line.y, color=line.colour, ls=line.dash, lw=2.4 if line.worst else 1.3, zorder=on_top)
    elif line.lowest:
        xs, ys = zip(*((x, height(r)) for x, r in line.lowest), strict=True)
        axes.plot(xs, ys, color=line.colour, ls=line.dash, lw=2.0 if line.worst else 1.0, zorder=on_top)
    for hollow in (False, True):
        _draw_readings(axes, line, [(x, r) for x, r in line.lowest if r.reversed == hollow], hollow, on_top + 0.5)
    if line.others:
        xs, ys = zip(*((x, height(r)) for x, r in line.others), strict=True)
        axes.plot(xs, ys, line.marker, ms=2.6, mfc=line.colour, mec="none", alpha=0.55, zorder=on_top)


def _draw_readings(
    axes: Axes, line: Line, readings: Sequence[tuple[float, Reading]], hollow: bool, on_top: float
) -> None:
    if not readings:
        return
    axes.errorbar(
        [x for x, _ in readings],
        [height(r) for _, r in readings],
        yerr=[2 * (r.contrast_at_feature_u or 0.0) for _, r in readings],
        fmt=line.marker,
        ms=6 if line.worst else 5,
        mfc="white" if hollow else line.colour,
        mec=line.colour if hollow else "white",
        mew=0.6,
        ecolor=line.colour,
        elinewidth=1.1,
        capsize=2.2,
        zorder=on_top,
    )


def _readings(
    result: Result, target: str
) -> tuple[tuple[tuple[float, Reading], ...], tuple[tuple[float, Reading], ...]]:
    """A target's lowest reading of each stop, and the rest, in the order of the stops."""
    lowest, others = [], []
    for stop in sorted(result.stops, key=lambda s: s.stop):
        here = [r for r in result.readings if r.target == target and r.stop == stop.stop]
        told = sorted((r for r in here if r.contrast_at_feature is not None), key=height)
        lowest += [(place(stop), r) for r in told[:1]]
        others += [(place(stop), r) for r in told[1:]]
    return tuple(lowest), tuple(others)


def _between(
    curves: Sequence[Sequence[tuple[float, float, float]]], range_mm: tuple[float, float], worst: bool
) -> Line:
    """The lowest of the model's curves over the depths that are asked for."""
    stack = np.array([sorted(c) for c in curves])
    lowest = stack[np.argmin(stack[:, :, 1], axis=0), np.arange(stack.shape[1])]
    label = f"worst depth from\n{signed(range_mm[0])} to {signed(range_mm[1])} mm"
    dash = "-" if worst else ":"
    return Line(label, lowest[:, 0], lowest[:, 1], lowest[:, 2], (), (), worst, "black", dash, "")


def _wrapped(text: str) -> Iterator[str]:
    yield from textwrap.wrap(text, 22)[:2]
