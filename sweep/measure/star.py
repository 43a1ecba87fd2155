"""Sector stars: contrast over frequency and direction from the rings of a star of known cycles.

At radius r a star of n cycles has the frequency n / (2 pi r) cycles per pixel in every direction at
once. In each ring the light is fitted, at the pixels where they lie, by the level with its low orders
(light gradients), the n-th harmonic with its directional sidebands, and the second and third harmonics
of a printed square wave, so that neither resampling nor folded harmonics enter. Each frame has its own
centre, so that a shift between frames blurs nothing. The sign of the transfer follows from the phase
(spurious resolution).

What a star's wedges cannot hold, their contrast at zero frequency, is in `sweep.measure.star_level`.
The star as a test pattern with a harmonic fit per ring: ISO 12233 (sine-modulated star; clause not read).
"""

from dataclasses import dataclass, field, replace

import numpy as np

from sweep.measure.linear import Bools, Floats
from sweep.measure.star_find import (
    LEAST_RINGS,
    RING_PX,
    Complex,
    Frames,
    Point,
    find_centre,
    flatten,
    inner_radius,
    level_frames,
    polar,
    refine_centre,
    room,
)
from sweep.measure.star_rim import RadialProfile, find_rim, measure_profile

SATURATED_LIMIT = 0.01
_RING_SAMPLES = 90
_SIDES = (-1, 1, -2, 2)
_LEVEL_TERMS = 6
_RIM_MARGIN_PX = 3.5
_RIM_PERIODS = 0.4
_RIM_WIDTHS = 1.4


@dataclass(frozen=True, slots=True)
class StarRings:
    """What the rings say, from the outermost inwards (m rings), in the unit of the samples.

    `v_cy_px`, `radius_px`: (m,); `amplitude`: (m,) mean over directions of the modulus of the n-th harmonic, noise
    bias removed; `signed`: (m,) the n-th harmonic in the star's own phase, negative where it is reversed against the
    outermost rings; `u`: (m,) standard uncertainty of both, independent from ring to ring; `level`: (m,) mean
    level; `astigmatic`: (m, 2) the parts of the amplitude that follow cos 2t and sin 2t over the direction t of the
    frequency, with `astigmatic_u`.
    """

    v_cy_px: Floats
    radius_px: Floats
    amplitude: Floats
    signed: Floats
    u: Floats
    level: Floats
    astigmatic: Floats
    astigmatic_u: Floats


@dataclass(frozen=True, slots=True)
class StarMeasure:
    """What one star says at one stop. Without `ok`, `why_not` holds codes and there are no rings.

    `centre_px`: (x, y); `phase_rad`: of the wedges, which tells a reversed star from one that is not, between stops;
    `shift_px`: (n, 2) of each frame against their mean, with `shift_u_px`; `rim_px`: radius of the star's outer end,
    None where it lies outside of the region; `noise`: rms of a pixel of the mean frame about the fit, unit
    of the samples; `profile`: the level across the rim, None without rim.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    cycles: int = 0
    rings: StarRings | None = None
    centre_px: Point = (0.0, 0.0)
    phase_rad: float = 0.0
    shift_px: Floats = field(default_factory=lambda: np.empty((0, 2)))
    shift_u_px: float = 0.0
    rim_px: float | None = None
    noise: float = 0.0
    profile: RadialProfile | None = None


def read_star(
    x: Floats,
    y: Floats,
    values: Floats,
    valid: Bools | None,
    cycles: int,
    region_size: tuple[int, int],
    near: StarMeasure | None = None,
) -> StarMeasure:
    """Read one star from n frames of one stop.

    x, y: (k,) sample positions in pixels from the region's first; values: (n, k) linear light; valid: (n, k), False
    where a sample must not count; region_size: (width, height) in pixels; near: the same star as seen at another
    stop, which tells where a star, or its rim, is that is too soft to be found by itself.
    Returns levels in the unit of `values`, frequencies in cycles per pixel. Valid for 4 cycles and more and a star
    whose rings outside of the Nyquist radius cycles / pi lie inside the region.
    """
    good = np.isfinite(values) if valid is None else valid & np.isfinite(values)
    if good.size == 0 or cycles < 4 or min(region_size) < 16:
        return StarMeasure(False, ("pattern-not-found",))
    if np.mean(~good) > SATURATED_LIMIT:
        return StarMeasure(False, ("frames-saturated",))
    frames = level_frames(x, y, values, good, region_size)
    if frames is None:
        return StarMeasure(False, ("low-signal",))
    known = near if near is not None and near.ok and near.cycles == cycles else None
    centre = find_centre(frames, cycles)
    if centre is None and known is not None and room(known.centre_px, region_size) > inner_radius(cycles):
        return _measure(frames, cycles, known.centre_px, known, known.rim_px)
    if centre is None:
        return StarMeasure(False, ("low-signal",) if _mostly_noise(frames) else ("pattern-not-found",))
    return _measure(frames, cycles, centre, None, known.rim_px if known is not None else None)


def _mostly_noise(frames: Frames) -> bool:
    """Whether the samples scatter by more than any print of that mean level could make them, or from frame to frame."""
    between = float(np.median(frames.values.std(axis=0, ddof=1))) if len(frames.values) > 1 else 0.0
    return float(frames.mean.std()) > 1.5 or between > 0.5


SOFT_RIM_PX = 6.0
"""Width of a rim that is too soft to be found by itself."""


def _measure(
    frames: Frames, cycles: int, centre: Point, known: StarMeasure | None, known_rim_px: float | None
) -> StarMeasure:
    """Rim, shift of each frame, then the rings over all frames, each about its own centre."""
    frames = flatten(frames, centre)
    rim, width = find_rim(frames, cycles, centre)
    if rim is None and known_rim_px is not None:
        rim, width = known_rim_px, SOFT_RIM_PX
    outer = room(centre, frames.size) - 1.0 if rim is None else rim - _rim_margin(cycles, rim, width)
    edges = _ring_edges(inner_radius(cycles), outer, frames.density)
    if len(edges) <= LEAST_RINGS:
        return StarMeasure(False, ("pattern-not-found",))
    centres = np.tile(np.array(centre), (len(frames.values), 1))
    if known is None and len(centres) > 1:
        pairs = zip(frames.values, frames.weight, strict=True)
        own = np.array([refine_centre(frames, value, weight, cycles, centre, outer) for value, weight in pairs])
        centres = own if np.abs(own - centre).max() < 3 else centres
    fits, rest = _fit_rings(frames, cycles, centres, edges)
    if fits is not None and (wild := _wild(rest)).any():
        frames = replace(frames, weight=frames.weight * ~wild)
        fits, rest = _fit_rings(frames, cycles, centres, edges)
    if fits is None or not rest.any():
        return StarMeasure(False, ("pattern-not-found",))
    noise, temporal = _noise(rest, fits.coefficients.size)
    rings, phase, shift_u = _rings(fits, cycles, len(centres), noise, temporal, known)
    profile = None if rim is None else measure_profile(frames, cycles, centres, rim, noise)
    unit = frames.unit
    return StarMeasure(
        True,
        cycles=cycles,
        rings=_scaled(rings, unit),
        centre_px=(float(centres[:, 0].mean()), float(centres[:, 1].mean())),
        phase_rad=phase,
        shift_px=centres - centres.mean(axis=0),
        shift_u_px=shift_u,
        rim_px=rim,
        noise=noise * unit,
        profile=profile,
    )


def _scaled(rings: StarRings, unit: float) -> StarRings:
    """The rings in the unit of the samples."""
    names = ("amplitude", "signed", "u", "level", "astigmatic", "astigmatic_u")
    return replace(rings, **{name: getattr(rings, name) * unit for name in names})


def _rim_margin(cycles: int, rim: float, width: float) -> float:
    """How far from the rim (pixels) the wedges are as if they had no end, for a blur of that width."""
    return max(_RIM_MARGIN_PX, _RIM_WIDTHS * width, _RIM_PERIODS * 2 * np.pi * rim / cycles)


def _wild(rest: Floats) -> Bools:
    """Samples that no noise explains (hot pixels, dust): beyond six times the robust scatter and 2 % of the level."""
    used = rest[rest != 0]
    scatter = 1.4826 * float(np.median(np.abs(used))) if used.size else np.inf
    return np.asarray(np.abs(rest) > max(6 * scatter, 0.02))


def _ring_edges(inner: float, outer: float, density: float) -> Floats:
    """Ring borders, rising, each ring wide enough to hold the fit; the innermost one reaches across the limit."""
    edges = [outer]
    while edges[-1] > inner:
        edges.append(edges[-1] - max(RING_PX, _RING_SAMPLES / (2 * np.pi * edges[-1] * density)))
    return np.array(edges[::-1])


@dataclass(frozen=True, slots=True)
class _RingFits:
    """Coefficients, (m, p), and their unscaled variances, (m, p), of the rings of mean radius `radius`, (m,)."""

    radius: Floats
    coefficients: Floats
    variance: Floats


def _fit_rings(frames: Frames, cycles: int, centres: Floats, edges: Floats) -> tuple[_RingFits | None, Floats]:
    """Least squares in each ring over all frames; the residuals come back as (n, k), 0 outside of the rings."""
    m = len(edges) - 1
    middles = (edges[:-1] + edges[1:]) / 2
    parity = 1.0 - 2.0 * ((frames.x + frames.y) % 2)
    parity = parity if np.ptp(parity) > 0 else np.zeros(0)
    kept = []
    p = _LEVEL_TERMS + 2 * (len(_SIDES) + 4 + (len(parity) > 0))
    square, right, count = np.zeros((m, p, p)), np.zeros((m, p)), np.zeros(m)
    for value, weight, centre in zip(frames.values, frames.weight, centres, strict=True):
        radius, direction = polar(frames, (centre[0], centre[1]))
        index = np.flatnonzero((radius >= edges[0]) & (radius < edges[-1]))
        ring = np.digitize(radius[index], edges) - 1
        order = np.argsort(ring, kind="stable")
        index, ring = index[order], ring[order]
        design = _design(radius[index], direction[index], cycles, middles[ring], parity[index] if len(parity) else None)
        design *= weight[index][:, None]
        cut = np.searchsorted(ring, np.arange(m + 1))
        for i in range(m):
            a = design[cut[i] : cut[i + 1]]
            square[i] += a.T @ a
            right[i] += a.T @ value[index[cut[i] : cut[i + 1]]]
        count += np.bincount(ring, weight[index], m)
        kept.append((index, ring, design))
    rest = np.zeros_like(frames.values)
    if (count < 1.5 * p * len(centres)).any():
        return None, rest
    inverse = np.linalg.pinv(square, hermitian=True)
    coefficients = np.einsum("ijk,ik->ij", inverse, right)
    for f, (index, ring, design) in enumerate(kept):
        fitted = np.einsum("ij,ij->i", design, coefficients[ring])
        rest[f, index] = frames.values[f, index] * frames.weight[f, index] - fitted
    return _RingFits(middles, coefficients, np.einsum("ijj->ij", inverse)), rest


def _design(radius: Floats, direction: Complex, cycles: int, middle: Floats, parity: Floats | None) -> Floats:
    """Columns of the ring fit: level and its low orders, the harmonic with sidebands and slope, 2nd and 3rd.

    A colour camera that fills in its mosaic leaves a chequered copy of the wedges, which `parity` takes up.
    """
    across = radius - middle
    turn = direction**cycles
    second = direction * direction
    sides = [np.conj(direction), direction, np.conj(second), second]
    waves = [turn, *(turn * side for side in sides), turn * across, turn * turn, turn**3]
    if parity is not None:
        waves.append(turn * parity)
    level = [np.ones_like(radius), across, direction.real, direction.imag, second.real, second.imag]
    return np.stack([*level, *(part for wave in waves for part in (wave.real, wave.imag))], axis=1)


def _noise(rest: Floats, parameters: int) -> tuple[float, float | None]:
    """Rms of the mean frame about the fit, and rms of one frame about the mean frame (None for one frame)."""
    used = (rest != 0).all(axis=0)
    mean = rest[:, used].mean(axis=0) if used.any() else np.zeros(1)
    noise = float(np.sqrt(np.sum(mean**2) / max(len(mean) - parameters, 1)))
    if len(rest) == 1 or not used.any():
        return noise, None
    return noise, float(np.sqrt(np.sum((rest[:, used] - mean) ** 2) / (len(mean) * (len(rest) - 1))))


def _rings(
    fits: _RingFits, cycles: int, n: int, noise: float, temporal: float | None, known: StarMeasure | None
) -> tuple[StarRings, float, float]:
    """Amplitudes and their uncertainties from the coefficients, the phase, and u of a frame's shift (pixels)."""
    coefficients, radius = fits.coefficients[::-1], fits.radius[::-1]
    wave = coefficients[:, _LEVEL_TERMS:].reshape(len(radius), -1, 2)
    harmonic = wave[..., 0] + 1j * wave[..., 1]
    # the unscaled variance counts the samples of every frame, the noise is that of the mean frame
    unit = n * fits.variance[::-1, _LEVEL_TERMS]
    variance = noise**2 * unit
    phase = known.phase_rad if known is not None else _common_phase(harmonic[:, 0], variance)
    turned = harmonic * np.exp(-1j * phase)
    if known is None and turned[0, 0].real < 0:
        phase, turned = phase + np.pi, -turned
    signed = turned[:, 0].real
    theta = np.arange(48) * (2 * np.pi / 48)
    local = signed[:, None] + 1j * _significant(turned[:, 0].imag, variance)[:, None]
    for column, order in enumerate(_SIDES, start=1):
        local = local + _significant(turned[:, column], 2 * variance)[:, None] * np.exp(-1j * order * theta)
    # the frequency's direction lies across the radius, which turns the sign of both parts
    minus = np.where(signed < 0, 1.0, -1.0)
    even, odd = (turned[:, 4] + turned[:, 3]).real * minus, (turned[:, 4] - turned[:, 3]).imag * minus
    steep = float(np.sum((signed * cycles / radius) ** 2 / np.maximum(unit, 1e-12)))
    rings = StarRings(
        v_cy_px=cycles / (2 * np.pi * radius),
        radius_px=radius,
        amplitude=np.abs(local).mean(axis=1),
        signed=signed,
        u=np.sqrt(variance),
        level=coefficients[:, 0],
        astigmatic=np.stack([even, odd], axis=1),
        astigmatic_u=np.sqrt(2 * variance),
    )
    shift_u = np.sqrt(2 / steep) * temporal if temporal is not None and steep > 0 else 0.0
    return rings, float(phase % (2 * np.pi)), float(shift_u)


def _common_phase(harmonic: Complex, variance: Floats) -> float:
    """The phase that all rings share, known to half a turn."""
    return float(np.angle(np.sum(harmonic**2 / np.maximum(variance, 1e-300)))) / 2


def _significant(part: Complex | Floats, variance: Floats) -> Complex:
    """A part of the wave as five neighbouring rings have it, shrunk to nothing where their noise explains it.

    A modulus taken of noise would read too high everywhere.
    """
    kernel = np.ones(5) / 5
    smooth = np.convolve(np.pad(part, 2, "edge"), kernel, "valid")
    expected = np.convolve(np.pad(variance, 2, "edge"), kernel, "valid") / 5
    power = np.abs(smooth) ** 2
    return np.asarray(smooth * np.sqrt(np.clip(1 - 4 * expected / np.maximum(power, 1e-300), 0, 1)), complex)
