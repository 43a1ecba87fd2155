"""What the simulated lens makes of printed patches: edges, flats, stars, bars and tri-bar sets, in pixels.

An edge that runs right across its patch has an image that depends on the distance to the edge alone; it is
summed from the transfer along the edge's normal, exactly. Everything else is drawn area-exact on a finer grid,
carried through the two-dimensional transfer by FFT, and gathered over the area of each pixel.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import assert_never

import numpy as np
from numpy.typing import NDArray
from scipy.fft import fftfreq, irfft, irfft2, next_fast_len, rfft2, rfftfreq
from scipy.ndimage import map_coordinates

from sweep.cameras.simulated_lens import POLAR_ANGLES, SimulatedLens, polar_table
from sweep.station import Patch

Floats = NDArray[np.float64]
Picture = Callable[[float, float], Floats]

MARGIN_PX = 12  # how far a printed card reaches beyond its region
FINER = 7  # odd, so that a pixel's centre is the centre of a fine cell
GUARD_PX = 20  # room around a card for light that spreads from it
EDGE_WINDOW_PX = 1024
EDGE_SAMPLES = 65536


@dataclass(frozen=True, slots=True)
class Print:
    """How one patch is printed: tilt from an axis, reflectances from 0 to 1, and which side is dark.

    Edges and bars of regions that are higher than wide run near the vertical, others near the horizontal.
    """

    tilt_deg: float = 5.0
    dark: float = 0.08
    light: float = 0.9
    dark_first: bool = True


@dataclass(frozen=True, slots=True)
class Optics:
    """All that shapes a point of light at one stop and depth: the lens, the pixel's box, the spread of charge."""

    lens: SimulatedLens
    pixel_pitch_um: float
    blur_px: float
    f_number: float
    depth_mm: float

    def transfer(self, frequency_cy_px: Floats, *directions_deg: float) -> NDArray[np.complex128]:
        """Complex transfer along some directions (rows), lens and camera together; frequencies in cycles per pixel."""
        cy_mm = frequency_cy_px * 1000 / self.pixel_pitch_um
        through = [
            self.lens.transfer(self.f_number, self.depth_mm, direction, cy_mm)
            for direction in (directions_deg[:1] if self.lens.round() else directions_deg)
        ]
        along = np.radians(directions_deg)[:, None]
        box = np.sinc(frequency_cy_px * np.cos(along)) * np.sinc(frequency_cy_px * np.sin(along))
        return np.asarray(np.stack(through) * box * self._spread(frequency_cy_px), dtype=np.complex128)

    def cutoff_cy_px(self) -> float:
        """Where the optics let nothing through any more, cycles per pixel, for the shortest wavelength."""
        shortest_um = (self.lens.wavelength_nm - 1.5 * self.lens.bandwidth_nm) / 1000
        return self.pixel_pitch_um / (shortest_um * self.lens.working_f_number(self.f_number))

    def plane(self, shape: tuple[int, int], step_px: float) -> NDArray[np.complex128]:
        """Transfer of lens and charge, without the pixel's box, on the grid of `rfft2` for fine cells."""
        fy = fftfreq(shape[0], step_px)[:, None]
        fx = rfftfreq(shape[1], step_px)[None, :]
        radius = np.hypot(fx, fy)
        table_cy_px = np.linspace(0, float(radius.max()), 4096)
        table = polar_table(self.lens, self.f_number, self.depth_mm, table_cy_px * 1000 / self.pixel_pitch_um)
        column = radius / table_cy_px[-1] * (table_cy_px.size - 1)
        if len(table) == 1:
            optical = np.interp(column, np.arange(table_cy_px.size), table[0].real).astype(np.complex128)
        else:
            angle = np.degrees(np.arctan2(fy, fx)) * np.ones_like(radius)
            place = np.stack([np.abs(angle) * POLAR_ANGLES / 180, column])
            # Below the horizontal the direction is the opposite one, whose transfer is the conjugate.
            place[0] = np.where(angle < 0, POLAR_ANGLES - place[0], place[0])
            real = map_coordinates(table.real, place, order=1, mode="nearest")
            imaginary = map_coordinates(table.imag, place, order=1, mode="nearest")
            optical = real + 1j * np.where(angle < 0, -imaginary, imaginary)
        return np.asarray(optical * self._spread(radius), dtype=np.complex128)

    def _spread(self, frequency_cy_px: Floats) -> Floats:
        return np.asarray(np.exp(-2 * (math.pi * self.blur_px * frequency_cy_px) ** 2))


def normal_deg(patch: Patch, print_: Print) -> float:
    """Direction of an edge's normal, or across the bars, degrees from x toward y (down)."""
    return print_.tilt_deg if patch.region[3] > patch.region[2] else 90 + print_.tilt_deg


def see_patch(patch: Patch, print_: Print, object_um_per_px: float) -> Callable[[Optics], Picture]:
    """One printed card, ready to be seen through any stop: optics in, a function of a shift (dx, dy) in pixels out.

    object_um_per_px holds at the patch's own depth. The picture is linear light from 0 to 1, of the region's size
    and MARGIN_PX more on every side.
    """
    match patch.kind:
        case "flat":
            even = np.full(_card(patch), print_.light)
            return lambda optics: lambda dx, dy: even
        case "edge":
            return lambda optics: _edge(patch, print_, optics)
        case "star":
            return _fine(patch, _star(patch, print_))
        case "bars":
            return _fine(patch, _bars(patch, print_, object_um_per_px))
        case "tribar":
            return _fine(patch, _tribar(patch, print_, object_um_per_px))
        case _:
            assert_never(patch.kind)


def _card(patch: Patch) -> tuple[int, int]:
    return patch.region[3] + 2 * MARGIN_PX, patch.region[2] + 2 * MARGIN_PX


def _edge(patch: Patch, print_: Print, optics: Optics) -> Picture:
    """A straight edge through the middle of the region."""
    direction = normal_deg(patch, print_)
    place_px, share = edge_spread(optics, direction)
    first, second = (print_.dark, print_.light) if print_.dark_first else (print_.light, print_.dark)
    height, width = _card(patch)
    x = np.arange(width) - (width - 1) / 2
    y = np.arange(height)[:, None] - (height - 1) / 2
    along = math.radians(direction)

    def picture(dx: float, dy: float) -> Floats:
        distance = (x - dx) * math.cos(along) + (y - dy) * math.sin(along)
        return np.asarray(first + (second - first) * np.interp(distance, place_px, share))

    return picture


def edge_spread(optics: Optics, direction_deg: float) -> tuple[Floats, Floats]:
    """The image of a step from 0 to 1 along a direction: distances in pixels, ascending, and light.

    Summed as a square wave of a period far longer than any patch: what lies half a period away is as
    good as nowhere.
    """
    frequency = rfftfreq(EDGE_SAMPLES, EDGE_WINDOW_PX / EDGE_SAMPLES)
    held = int(np.searchsorted(frequency, optics.cutoff_cy_px()))
    held = min(held + 1, frequency.size - 1)
    order = np.arange(1, held, 2)
    coefficient = np.zeros(frequency.size, dtype=np.complex128)
    coefficient[order] = optics.transfer(frequency[order], direction_deg)[0] / (1j * math.pi * order) * EDGE_SAMPLES
    wave = irfft(coefficient)
    half = EDGE_SAMPLES // 4
    place_px = np.arange(-half, half) * EDGE_WINDOW_PX / EDGE_SAMPLES
    return place_px, np.roll(wave, half)[: 2 * half] + 0.5


def _fine(patch: Patch, drawn: Callable[[Floats, Floats], Floats]) -> Callable[[Optics], Picture]:
    """Any print: drawn on fine cells by `drawn(x, y)`, carried through the optics, gathered over pixels."""
    height, width = _card(patch)
    rows, columns = (next_fast_len((size + 2 * GUARD_PX) * FINER, real=True) for size in (height, width))
    guard = GUARD_PX * FINER
    y = (np.arange(rows) - guard - (height * FINER - 1) / 2) / FINER
    x = (np.arange(columns) - guard - (width * FINER - 1) / 2) / FINER
    object_ = rfft2(drawn(x[None, :], y[:, None]).astype(np.float32))
    fy, fx = fftfreq(rows, 1 / FINER)[:, None], rfftfreq(columns, 1 / FINER)[None, :]

    def seen(optics: Optics) -> Picture:
        image = object_ * optics.plane((rows, columns), 1 / FINER).astype(np.complex64)

        def picture(dx: float, dy: float) -> Floats:
            moved = image
            if dx or dy:
                moved = image * np.exp(-2j * math.pi * fx * dx) * np.exp(-2j * math.pi * fy * dy)
            cells = irfft2(moved, (rows, columns))[guard : guard + height * FINER, guard : guard + width * FINER]
            return np.asarray(cells.reshape(height, FINER, width, FINER).mean(axis=(1, 3)), dtype=np.float64)

        return picture

    return seen


def _star(patch: Patch, print_: Print) -> Callable[[Floats, Floats], Floats]:
    """A star of alternating sectors that fills the region, its hub and surroundings even."""
    cycles = patch.cycles or 36
    radius = min(patch.region[2:]) / 2 - 2
    hub = 1.2 * cycles / math.pi / 2

    def drawn(x: Floats, y: Floats) -> Floats:
        r, phase = np.hypot(x, y), (np.arctan2(y, x) - math.radians(print_.tilt_deg)) * cycles / math.pi
        nearest = np.round(phase)
        line = (nearest * math.pi / cycles) + math.radians(print_.tilt_deg)
        # Signed distance to the nearest sector boundary; every second boundary has its light side ahead.
        ahead = r * np.sin((phase - nearest) * math.pi / cycles) * np.where(nearest % 2 == 0, 1, -1)
        lit = half_plane(ahead, -np.sin(line), np.cos(line))
        tone = print_.dark + (print_.light - print_.dark) * lit
        outside = half_plane(r - radius, x / np.maximum(r, 1e-9), y / np.maximum(r, 1e-9))
        inside_hub = half_plane(hub - r, x / np.maximum(r, 1e-9), y / np.maximum(r, 1e-9))
        tone = tone + (print_.light - tone) * outside
        return np.asarray(tone + (print_.dark - tone) * inside_hub)

    return drawn


def _bars(patch: Patch, print_: Print, object_um_per_px: float) -> Callable[[Floats, Floats], Floats]:
    """Parallel bars, half the period wide, right across the card."""
    half_px = (patch.period_um or 0) / object_um_per_px / 2
    along = math.radians(normal_deg(patch, print_))

    def drawn(x: Floats, y: Floats) -> Floats:
        distance = x * math.cos(along) + y * math.sin(along)
        nearest = np.round(distance / half_px)
        ahead = (distance - nearest * half_px) * np.where(nearest % 2 == 0, 1, -1)
        lit = half_plane(ahead, math.cos(along), math.sin(along))
        return np.asarray(print_.dark + (print_.light - print_.dark) * lit)

    return drawn


def _tribar(patch: Patch, print_: Print, object_um_per_px: float) -> Callable[[Floats, Floats], Floats]:
    """The elements of a 1951 tri-bar target, from element 1 of the patch's group on, as many as fit.

    MIL-STD-150A: 2**(group + (element - 1) / 6) line pairs per mm; three bars five widths long, one set upright and
    one lying for each element. The sets stand in rows from the top left on, five widths apart.
    """
    width, height = patch.region[2:]
    boxes: list[tuple[float, float, float, float]] = []
    top, element = -height / 2 + 4.0, 0
    while True:
        bar = 500 / 2 ** ((patch.group or 0) + element / 6) / object_um_per_px
        if bar < 0.5 or top + 5 * bar > height / 2 - 4 or 12 * bar > width - 8:
            break
        left = -width / 2 + 4.0
        boxes += [(left + 2 * k * bar, top, bar, 5 * bar) for k in range(3)]
        boxes += [(left + 7 * bar, top + 2 * k * bar, 5 * bar, bar) for k in range(3)]
        top, element = top + 7 * bar, element + 1

    def drawn(x: Floats, y: Floats) -> Floats:
        ink = sum((_covered(x, box[0], box[2]) * _covered(y, box[1], box[3]) for box in boxes), np.zeros((1, 1)))
        return np.asarray(print_.light + (print_.dark - print_.light) * ink * np.ones((y.size, x.size)))

    return drawn


def _covered(place: Floats, start: float, length: float) -> Floats:
    """Share of each fine cell that lies between start and start + length, along one axis."""
    cell = 0.5 / FINER
    upper = np.minimum(place + cell, start + length)
    return np.asarray(np.clip((upper - np.maximum(place - cell, start)) * FINER, 0, 1))


def half_plane(distance_px: Floats, normal_x: Floats | float, normal_y: Floats | float) -> Floats:
    """Area share of a fine cell, 1 / FINER pixel wide, on the positive side of a line at a signed distance.

    The exact area of a square cut by a line: quadratic where the line cuts a corner, straight between.
    """
    a, b = np.abs(normal_x), np.abs(normal_y)
    longer, shorter = np.maximum(a, b), np.minimum(a, b)
    reach = (longer + shorter) / 2
    d = np.clip(distance_px * FINER, -reach, reach)
    straight = (longer - shorter) / 2
    corner = np.maximum(np.abs(d) - straight, 0)
    cut = np.abs(d) / longer - corner**2 / (2 * longer * np.maximum(shorter, 1e-12))
    return np.asarray(0.5 + np.sign(d) * cut)
