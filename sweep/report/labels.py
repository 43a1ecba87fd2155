"""Labels beside line ends and in free places of a plot, so that none covers another or a line."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

Points = NDArray[np.float64]

_LINE_PT = 1.25  # height of a line of text, of its font size
_LETTER_PT = 0.62  # width of a letter, of its font size: on the wide side for DejaVu Sans
_GAP_PT = 3.0
_LEAD_PT = 12.0
_SAMPLE_PT = 26.0
_AWAY_PT = (14.0, 26.0, 42.0, 62.0, 86.0)  # how far a free label may stand from its point
_FREE = 2.5  # a label's half sizes of free room around it, at which any place is as good
_UP = (1.0, -1.0, 0.5, -0.5, 1.6, -1.6, 2.4, -2.4)  # how high, of that


@dataclass(frozen=True, slots=True)
class Label:
    """A text that belongs to height `y` (data units) at the right edge; a line sample stands before it where stated."""

    y: float
    text: str
    colour: str = "black"
    bold: bool = False
    dash: Any = None
    marker: str = ""


def label_right(axes: Axes, labels: Sequence[Label], size_pt: float) -> None:
    """Write labels right of the axes at their heights, moved apart where they would overlap, each with a leader."""
    labels = sorted(labels, key=lambda one: float(axes.transData.transform((1, one.y))[1]))
    pixels_per_pt = _pixels_per_pt(axes)
    box = axes.get_window_extent()
    width_pt, height_pt = box.width / pixels_per_pt, box.height / pixels_per_pt
    wanted = [(axes.transData.transform((1, one.y))[1] - box.y0) / pixels_per_pt for one in labels]
    heights = [size_pt * _LINE_PT * (one.text.count("\n") + 1) + _GAP_PT for one in labels]
    for label, want, got in zip(labels, wanted, spread(wanted, heights, height_pt), strict=True):
        start, sample_end = 1 + _LEAD_PT / width_pt, 1 + (_LEAD_PT + _SAMPLE_PT) / width_pt
        end = start if label.dash is None else sample_end
        y = got / height_pt
        loose: dict[str, Any] = {"transform": axes.transAxes, "clip_on": False, "color": label.colour}
        axes.plot([1, start], [want / height_pt, y], lw=0.7, **loose)
        if label.dash is not None:
            axes.plot([start, end], [y, y], ls=label.dash, lw=2.2 if label.bold else 1.2, **loose)
            axes.plot([(start + end) / 2], [y], marker=label.marker, ms=5, mec="white", mew=0.5, **loose)
        axes.text(
            end + _GAP_PT / width_pt,
            y,
            label.text,
            transform=axes.transAxes,
            va="center_baseline" if "\n" not in label.text else "center",
            fontsize=size_pt,
            color=label.colour,
            fontweight="bold" if label.bold else "normal",
            linespacing=1.1,
        )


def spread(wanted: Sequence[float], heights: Sequence[float], room: float) -> list[float]:
    """Centres of boxes as near to the wanted ones as goes without overlap: `wanted` ascending, all from 0 to `room`.

    Boxes that touch are joined to a block that stands where its members' wishes balance. Where there is too little room
    in all, the boxes overlap evenly.
    """
    squeeze = min(1.0, room / sum(heights)) if heights else 1.0
    high = [h * squeeze for h in heights]
    blocks: list[list[int]] = []
    for i in range(len(wanted)):
        blocks.append([i])
        while len(blocks) > 1 and _bottom(blocks[-1], wanted, high, room) < _top(blocks[-2], wanted, high, room):
            blocks[-2:] = [blocks[-2] + blocks[-1]]
    centres = []
    for block in blocks:
        y = _bottom(block, wanted, high, room)
        for i in block:
            centres.append(y + high[i] / 2)
            y += high[i]
    return centres


def _bottom(block: Sequence[int], wanted: Sequence[float], high: Sequence[float], room: float) -> float:
    total, below, wish = sum(high[i] for i in block), 0.0, 0.0
    for i in block:
        wish += wanted[i] - (below + high[i] / 2)
        below += high[i]
    return min(max(wish / len(block), 0.0), room - total)


def _top(block: Sequence[int], wanted: Sequence[float], high: Sequence[float], room: float) -> float:
    return _bottom(block, wanted, high, room) + sum(high[i] for i in block)


def label_free(axes: Axes, xy: tuple[float, float], text: str, size_pt: float, taken: Points) -> None:
    """Write a label near the point `xy` where it covers the fewest of the points `taken` (n, 2), all in data units."""
    pixels_per_pt = _pixels_per_pt(axes)
    lines = text.split("\n")
    size = np.array([max(len(line) for line in lines) * size_pt * _LETTER_PT, len(lines) * size_pt * _LINE_PT])
    here = axes.transData.transform(xy) / pixels_per_pt
    others = axes.transData.transform(taken) / pixels_per_pt
    corners = axes.get_window_extent().get_points() / pixels_per_pt
    low = np.array(
        [
            (x, up * away)
            for away in _AWAY_PT
            for x in (0.7 * away, -0.7 * away - size[0])  # right of the point, left of it
            for up in _UP
        ]
    )
    low[:, 1] -= size[1] / 2
    low += here
    inside = np.all((low > corners[0] + 2) & (low + size < corners[1] - 2), axis=1)
    covers = np.all((others > low[:, None] - 4) & (others < low[:, None] + size + 4), axis=2).sum(axis=1)
    # Among equals the first is the nearest.
    best = low[np.argmin(np.where(inside, covers, len(others) + 1))]
    axes.annotate(
        text,
        xy=xy,
        xytext=(best[0] - here[0], best[1] + size[1] / 2 - here[1]),
        textcoords="offset points",
        va="center",
        fontsize=size_pt,
        fontweight="bold",
        linespacing=1.1,
        zorder=9,
        bbox={"boxstyle": "square,pad=0.2", "fc": "white", "ec": "none", "alpha": 0.85},
        arrowprops={"arrowstyle": "-", "color": "black", "lw": 0.8, "shrinkA": 0, "shrinkB": 7},
    )


def label_contour(axes: Axes, points: Points, text: str, size_pt: float, taken: Points, bold: bool = False) -> Points:
    """Write a number onto a line at the one of its `points` (n, 2) that is freest of what is `taken` (m, 2).

    Both in pixels. Returns `taken` with the label's place added; unchanged where there is no room for the label.
    """
    per_pt = _pixels_per_pt(axes)
    half = np.array([len(text) * size_pt * _LETTER_PT, size_pt * _LINE_PT]) * per_pt / 2
    low, high = axes.get_window_extent().get_points()
    inside = points[np.all((points > low + 1.3 * half) & (points < high - 1.3 * half), axis=1)]
    if not len(inside):
        return taken
    # Distance in half sizes of the label: above 1 nothing reaches in.
    apart = np.abs((inside[:, None] - taken[None]) / half).max(axis=2).min(axis=1)
    if apart.max() < 1:
        return taken
    at = inside[np.argmax(np.minimum(apart, _FREE))]
    x, y = axes.transData.inverted().transform(at)
    axes.text(
        x,
        y,
        text,
        ha="center",
        va="center_baseline",
        fontsize=size_pt,
        fontweight="bold" if bold else "normal",
        zorder=9,
        bbox={"boxstyle": "square,pad=0.12", "fc": "white", "ec": "none", "alpha": 0.8},
    )
    corners = np.array([(sx, sy) for sx in (-1, 0, 1) for sy in (-1, 0, 1)]) * half
    return np.vstack([taken, at + corners])


def _pixels_per_pt(axes: Axes) -> float:
    figure = axes.get_figure(root=True)
    assert figure is not None
    return figure.dpi / 72
