"""Labels beside line ends and in free places of a plot, so that none covers another or a line."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

Points = NDArray[np.float64]

_LINE_PT = 1.25  # height of a line of text, of its font size
_LETTER_PT = 0.62  # width of a letter, of its font size: on the wide side for DejaVu Sans
_GAP_PT = 3.0
_LEAD_PT = 16.0


@dataclass(frozen=True, slots=True)
class Label:
    """A text that belongs to height `y` (data units) at the right edge of the axes."""

    y: float
    text: str
    colour: str = "black"
    bold: bool = False


def label_right(axes: Axes, labels: Sequence[Label], size_pt: float) -> None:
    """Write labels right of the axes at their heights, moved apart where they would overlap, each with a leader."""
    labels = sorted(labels, key=lambda one: one.y)
    pixels_per_pt = axes.figure.dpi / 72
    box = axes.get_window_extent()
    wanted = [(axes.transData.transform((1, one.y))[1] - box.y0) / pixels_per_pt for one in labels]
    heights = [size_pt * _LINE_PT * (one.text.count("\n") + 1) + _GAP_PT for one in labels]
    placed = spread(wanted, heights, box.height / pixels_per_pt)
    for label, want, got in zip(labels, wanted, placed, strict=True):
        axes.annotate(
            label.text,
            xy=(1, want / (box.height / pixels_per_pt)),
            xycoords="axes fraction",
            xytext=(_LEAD_PT, got - want),
            textcoords="offset points",
            va="center",
            fontsize=size_pt,
            color=label.colour,
            fontweight="bold" if label.bold else "normal",
            linespacing=1.1,
            annotation_clip=False,
            arrowprops={
                "arrowstyle": "-",
                "color": label.colour,
                "lw": 0.8,
                "shrinkA": 1,
                "shrinkB": 0,
                "relpos": (0, 0.5),
            },
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
    lines = text.split("\n")
    pixels_per_pt = axes.figure.dpi / 72
    width = max(len(line) for line in lines) * size_pt * _LETTER_PT
    height = len(lines) * size_pt * _LINE_PT
    box = axes.get_window_extent()
    x0, y0 = axes.transData.transform(xy) / pixels_per_pt
    others = axes.transData.transform(taken) / pixels_per_pt
    best: tuple[float, float, float] | None = None
    for away in (14.0, 26.0, 42.0, 62.0, 86.0):
        for side in (1, -1):
            for up in (1.0, -1.0, 0.6, -0.6, 1.6, -1.6, 2.4, -2.4):
                left = x0 + (away * 0.7 if side > 0 else -away * 0.7 - width)
                low = y0 + up * away - height / 2
                inside = (
                    left > box.x0 / pixels_per_pt + 2
                    and left + width < box.x1 / pixels_per_pt - 2
                    and low > box.y0 / pixels_per_pt + 2
                    and low + height < box.y1 / pixels_per_pt - 2
                )
                if not inside:
                    continue
                covered = np.sum(
                    (others[:, 0] > left - 4)
                    & (others[:, 0] < left + width + 4)
                    & (others[:, 1] > low - 3)
                    & (others[:, 1] < low + height + 3)
                )
                if best is None or covered + away / 200 < best[0]:
                    best = (float(covered + away / 200), left - x0, low + height / 2 - y0)
    _, dx, dy = best or (0.0, 12.0, 0.0)
    axes.annotate(
        text,
        xy=xy,
        xytext=(dx, dy),
        textcoords="offset points",
        va="center",
        fontsize=size_pt,
        fontweight="bold",
        linespacing=1.1,
        zorder=9,
        bbox={"boxstyle": "square,pad=0.2", "fc": "white", "ec": "none", "alpha": 0.85},
        arrowprops={"arrowstyle": "-", "color": "black", "lw": 0.8, "shrinkA": 0, "shrinkB": 7},
    )
