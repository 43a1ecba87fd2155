"""Sector stars: contrast over frequency and direction from the rings of a star of known cycles.

At radius r a star of n cycles has the frequency n / (2 pi r) cycles per pixel in every direction at
once. In each ring the light is fitted, at the pixels where they lie, by the level with its low orders
(light gradients), the n-th harmonic with its directional sidebands, and the second and third harmonics
of a printed square wave, so that neither resampling nor folded harmonics enter. Each frame has its own
centre, so that a shift between frames blurs nothing.

What a star's wedges cannot hold, their contrast at zero frequency, is in `sweep.measure.star_level`.
Source of the star as a test pattern and of the harmonic fit per ring: ISO 12233, sine-modulated star
(clause not read); the sign of the transfer follows from the phase (spurious resolution).
"""

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from sweep.measure.linear import Bools, Floats

Complex = NDArray[np.complex128]

NYQUIST_CY_PX = 0.5
SATURATED_LIMIT = 0.01
RING_BIN_PX = 0.5
_RING_PX = 1.5
_RING_SAMPLES = 90
_ORDERS = (0, -1, 1, -2, 2)
_EMPTY = np.empty(0)


@dataclass(frozen=True, slots=True)
class StarRings:
    """What the rings say, from the outermost inwards (m rings).

    `v_cy_px`, `radius_px`: (m,); `amplitude`: (m,) mean over directions of the modulus of the n-th harmonic, noise
    bias removed; `signed`: (m,) the n-th harmonic in the star's own phase, negative where it is reversed against the
    outermost rings; `u`: (m,) standard uncertainty of both, of which `pattern_u` comes back at every stop (the
    pixels' own pattern); `level`: (m,) mean level; `astigmatic`: (m, 2) the parts of the amplitude that follow cos 2t
    and sin 2t over direction t of the frequency, with `astigmatic_u`. All in the unit of the samples.
    """

    v_cy_px: Floats
    radius_px: Floats
    amplitude: Floats
    signed: Floats
    u: Floats
    pattern_u: Floats
    level: Floats
    astigmatic: Floats
    astigmatic_u: Floats


@dataclass(frozen=True, slots=True)
class StarMeasure:
    """What one star says at one stop. Without `ok`, `why_not` holds codes and there are no rings.

    `centre_px`: (x, y); `phase_rad`: of the wedges, which tells a reversed star from one that is not, between stops;
    `shift_px`: (n, 2) of each frame against their mean, with `shift_u_px`; `rim_px`: radius of the star's outer end,
    None where it lies outside of the region; `noise`: rms of a pixel of the mean frame about the fit, of which
    `temporal_noise` differs from frame to frame; `profile`: see `RadialProfile`, None without rim.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    cycles: int = 0
    rings: StarRings | None = None
    centre_px: tuple[float, float] = (0.0, 0.0)
    phase_rad: float = 0.0
    shift_px: Floats = field(default_factory=lambda: np.empty((0, 2)))
    shift_u_px: float = 0.0
    rim_px: float | None = None
    noise: float = 0.0
    temporal_noise: float | None = None
    profile: "RadialProfile | None" = None


@dataclass(frozen=True, slots=True)
class RadialProfile:
    """Mean level over radius, across the rim into the plain surround: bins of pixels, wedges and gradient taken out.

    `radius_px`, `value`, `u`: (b,); `ring`: (b,) True for whole rings of `RING_BIN_PX`, False for parts of the
    region's corners; `border`: (b, d) how many of the region's four borders lie at 0, 1, ... pixels, mean over the bin.
    """

    radius_px: Floats
    value: Floats
    u: Floats
    ring: Bools
    border: Floats


def read_star(
    x: Floats,
    y: Floats,
    values: Floats,
    valid: Bools | None,
    cycles: int,
    region_size: tuple[int, int],
    near_px: tuple[float, float] | None = None,
) -> StarMeasure:
    """Read one star from n frames of one stop.

    x, y: (k,) sample positions in pixels from the region's first; values: (n, k) linear light; valid: (n, k), False
    where a sample must not count; region_size: (width, height) in pixels; near_px: centre at other stops, for a star
    that is too soft to be found by itself. Returns levels in the unit of `values`, frequencies in cycles per pixel.
    """
    good = np.isfinite(values) if valid is None else valid & np.isfinite(values)
    if values.size == 0 or cycles < 4 or min(region_size) < 16:
        return StarMeasure(False, ("pattern-not-found",))
    if np.mean(~good) > SATURATED_LIMIT:
        return StarMeasure(False, ("frames-saturated",))
    stack = _level_frames(x, y, values, good)
    if stack is None:
        return StarMeasure(False, ("low-signal",))
    limit = _inner_radius(cycles)
    found = _find(stack, cycles, region_size, limit, near_px)
    if found is None:
        return StarMeasure(False, ("pattern-not-found",))
    centre, rim, outer = found
    return _read(stack, cycles, region_size, centre, rim, limit, outer)


@dataclass(frozen=True, slots=True)
class _Stack:
    """Frames brought to one level, (n, k), with the weight of each sample, 0 or 1, and their mean, (k,)."""

    x: Floats
    y: Floats
    values: Floats
    weight: Floats
    mean: Floats


def _level_frames(x: Floats, y: Floats, values: Floats, good: Bools) -> _Stack | None:
    """The frames at one level; None where there is no light."""
    weight = good.astype(float)
    clean = np.where(good, values, 0.0)
    shared = good.all(axis=0)
    if not shared.any():
        return None
    levels = clean[:, shared].mean(axis=1)
    if not (levels > 0).all() or levels.min() < 0.2 * levels.max():
        return None
    clean = clean * (levels.mean() / levels)[:, None]
    counts = weight.sum(axis=0)
    mean = np.where(counts > 0, clean.sum(axis=0) / np.maximum(counts, 1), levels.mean())
    return _Stack(x, y, clean, weight, mean)


def _inner_radius(cycles: int) -> float:
    """Radius (pixels) inside of which the star is finer than two pixels a period."""
    return cycles / (2 * np.pi * NYQUIST_CY_PX)


def _find(
    stack: _Stack, cycles: int, region_size: tuple[int, int], inner: float, near_px: tuple[float, float] | None
) -> tuple[tuple[float, float], float | None, float] | None:
    """Centre, rim radius (None without rim) and outermost sound radius; None where there is no such star."""
    starts = [near_px] if near_px is not None else _symmetry_centres(stack, cycles, region_size)
    best, best_power = None, 0.0
    for start in starts:
        if _room(start, region_size) < inner + 6:
            continue
        centre = start if near_px is not None else _refine(stack, stack.mean, cycles, start, inner, region_size)
        room = _room(centre, region_size)
        if room < inner + 6:
            continue
        power = _harmonic_power(stack, cycles, centre, inner, room)
        if power > best_power:
            best, best_power = centre, power
    if best is None:
        return None
    room = _room(best, region_size)
    rings = (room - inner) / _RING_PX
    if near_px is None and (best_power < 1 + 8 / np.sqrt(rings) or not _cycles_right(stack, cycles, best, inner, room)):
        return None
    rim, width = _find_rim(stack, cycles, best, inner, room)
    outer = room - 1.0 if rim is None else rim - max(3.5, width)
    if outer < inner + 3 * _RING_PX:
        return None
    return best, rim, outer


def _room(centre: tuple[float, float], region_size: tuple[int, int]) -> float:
    """Largest radius (pixels) whose ring lies wholly inside the region; negative for a centre outside."""
    return min(centre[0], centre[1], region_size[0] - 1 - centre[0], region_size[1] - 1 - centre[1])


def _symmetry_centres(stack: _Stack, cycles: int, region_size: tuple[int, int]) -> list[tuple[float, float]]:
    """Points about which the region is most alike (odd cycles: most unlike) itself turned by 180 degrees."""
    width, height = region_size
    total, count = np.zeros((height, width)), np.zeros((height, width))
    columns, rows = np.rint(stack.x).astype(int), np.rint(stack.y).astype(int)
    inside = (columns >= 0) & (columns < width) & (rows >= 0) & (rows < height)
    total[rows[inside], columns[inside]] = stack.mean[inside]
    count[rows[inside], columns[inside]] = 1.0
    fine, coarse = _box(total, 1), _box(total, 7)
    image = fine / np.maximum(_box(count, 1), 1e-9) - coarse / np.maximum(_box(count, 7), 1e-9)
    edge = 2
    image[:edge], image[-edge:], image[:, :edge], image[:, -edge:] = 0, 0, 0, 0
    size = (2 * height, 2 * width)
    likeness = np.fft.irfft2(np.fft.rfft2(image, size) ** 2, size) * (1 if cycles % 2 == 0 else -1)
    centres = []
    for _ in range(3):
        row, column = np.unravel_index(int(np.argmax(likeness)), likeness.shape)
        centres.append((float(column) / 2, float(row) / 2))
        likeness[max(0, row - 4) : row + 5, max(0, column - 4) : column + 5] = -np.inf
    return centres


def _box(image: Floats, half: int) -> Floats:
    """Sums over squares of 2 half + 1 pixels, zero beyond the borders."""
    padded = np.pad(image, ((half + 1, half), (half + 1, half))).cumsum(0).cumsum(1)
    n = 2 * half + 1
    return np.asarray(padded[n:, n:] - padded[:-n, n:] - padded[n:, :-n] + padded[:-n, :-n])


def _polar(stack: _Stack, centre: tuple[float, float]) -> tuple[Floats, Complex]:
    """Radius and direction, as exp(i theta), of the samples about the centre."""
    z = (stack.x - centre[0]) + 1j * (stack.y - centre[1])
    radius = np.abs(z)
    return radius, np.where(radius > 0, z / np.maximum(radius, 1e-12), 1.0)


def _coarse_rings(
    radius: Floats, turn: Complex, value: Floats, weight: Floats, edges: Floats
) -> tuple[NDArray[np.intp], Floats, Floats, Complex]:
    """Ring of each sample, and count, level and harmonic of each ring, by plain means."""
    ring = np.asarray(np.digitize(radius, edges), np.intp)
    m = len(edges) + 1
    count = np.asarray(np.maximum(np.bincount(ring, weight, m), 1e-9))
    level = np.bincount(ring, weight * value, m) / count
    rest = weight * (value - level[ring])
    harmonic = (np.bincount(ring, rest * turn.real, m) + 1j * np.bincount(ring, rest * turn.imag, m)) * 2 / count
    return ring, count, level, harmonic


def _refine(
    stack: _Stack,
    value: Floats,
    cycles: int,
    start: tuple[float, float],
    inner: float,
    region_size: tuple[int, int],
    weight: Floats | None = None,
    outer: float | None = None,
) -> tuple[float, float]:
    """The centre that brings the wedges' phase to one value in each ring, by Gauss-Newton steps."""
    centre = np.array(start)
    ones = np.ones_like(value) if weight is None else weight
    for step in range(6):
        stop_at = min(outer or np.inf, _room((centre[0], centre[1]), region_size))
        begin = inner if step > 2 else max(inner, 0.55 * stop_at)
        if stop_at < begin + 4:
            break
        radius, direction = _polar(stack, (centre[0], centre[1]))
        near = (radius > begin) & (radius < stop_at)
        turn, r, v, w = direction[near] ** cycles, radius[near], value[near], ones[near]
        ring, _, level, harmonic = _coarse_rings(r, turn, v, w, np.arange(begin, stop_at, 2.0))
        local = np.conj(harmonic[ring]) * turn
        slope = -local.imag * cycles / r * w
        rest = (v - level[ring] - local.real) * w
        across = np.stack([slope * direction[near].imag, -slope * direction[near].real])
        square = across @ across.T
        if np.linalg.det(square) <= 1e-12 * max(float(np.trace(square)), 1e-300) ** 2:
            break
        move = np.linalg.solve(square, across @ rest)
        move *= min(1.0, 1.0 / max(float(np.hypot(*move)), 1e-12))
        centre += move
        if step > 2 and np.hypot(*move) < 1e-3:
            break
    return float(centre[0]), float(centre[1])


def _harmonic_power(stack: _Stack, cycles: int, centre: tuple[float, float], inner: float, room: float) -> float:
    """Power of the n-th harmonic over what noise would give: 1 on average without star."""
    radius, direction = _polar(stack, centre)
    near = (radius > inner) & (radius < room)
    turn = direction[near] ** cycles
    ring, count, level, harmonic = _coarse_rings(
        radius[near], turn, stack.mean[near], np.ones(int(near.sum())), np.arange(inner, room, _RING_PX)
    )
    rest = stack.mean[near] - level[ring] - (np.conj(harmonic[ring]) * turn).real
    variance = max(float(np.median(np.abs(rest))) / 0.6745, 1e-12 * float(np.abs(level).max()), 1e-300) ** 2
    filled = count > 20
    return float(np.mean(count[filled] * np.abs(harmonic[filled]) ** 2)) / (4 * variance) if filled.any() else 0.0


def _cycles_right(stack: _Stack, cycles: int, centre: tuple[float, float], inner: float, room: float) -> bool:
    """Whether no other number of cycles, gradients apart, is stronger in the outer rings than the one named."""
    radius, direction = _polar(stack, centre)
    near = (radius > max(inner, 0.5 * room)) & (radius < room)
    slots = 1024
    slot = np.rint(np.angle(direction[near]) * slots / (2 * np.pi)).astype(int) % slots
    count = np.bincount(slot, minlength=slots)
    total = np.bincount(slot, stack.mean[near] - stack.mean[near].mean(), slots)
    spectrum = np.abs(np.fft.rfft(np.where(count > 0, total / np.maximum(count, 1), 0.0)))
    others = spectrum[5 : slots // 4].copy()
    others[max(0, cycles - 5 - 2) : cycles - 5 + 3] = 0
    return bool(spectrum[cycles] >= 1.2 * others.max())


def _find_rim(
    stack: _Stack, cycles: int, centre: tuple[float, float], inner: float, room: float
) -> tuple[float | None, float]:
    """Radius of the star's outer end and the width of its blur (15 to 85 % of the step), pixels."""
    radius, _ = _polar(stack, centre)
    edges = np.arange(0.0, room + 0.25, 0.5)
    where = np.digitize(radius, edges) - 1
    count = np.bincount(where, minlength=len(edges))[: len(edges)]
    level = np.bincount(where, stack.mean, len(edges))[: len(edges)] / np.maximum(count, 1)
    smooth = np.convolve(level, np.ones(3) / 3, "same")
    first, last = int(2 * max(inner + 6, 0.5 * room)), len(edges) - 5
    steps = [(abs(smooth[i + 4 : i + 7].mean() - smooth[i - 7 : i - 3].mean()), i) for i in range(first, last)]
    if not steps:
        return None, 0.0
    step, at = max(steps)
    plateau = level[int(2 * inner + 4) : max(at - 12, int(2 * inner) + 8)]
    scatter = float(np.median(np.abs(plateau - np.median(plateau)))) / 0.6745
    if step < max(6 * scatter, 0.04 * abs(float(np.median(plateau)))):
        return None, 0.0
    low = float(np.median(plateau))
    high = float(smooth[at + 4 : at + 7].mean())
    rise = (level[at - 10 if at > 10 else 0 : at + 8] - low) / (high - low)
    radii = edges[at - 10 if at > 10 else 0 : at + 8][: len(rise)] + 0.25
    return _crossing(radii, rise, 0.5), _crossing(radii, rise, 0.85) - _crossing(radii, rise, 0.15)


def _crossing(radii: Floats, rise: Floats, level: float) -> float:
    """The last radius at which the rise goes through the level."""
    below = np.flatnonzero(rise < level)
    i = int(below[-1]) if below.size else 0
    if i + 1 >= len(rise):
        return float(radii[-1])
    span = float(rise[i + 1] - rise[i])
    return float(
        radii[i] + (radii[i + 1] - radii[i]) * min(max((level - float(rise[i])) / span, 0.0), 1.0) if span else radii[i]
    )


def _read(
    stack: _Stack,
    cycles: int,
    region_size: tuple[int, int],
    centre: tuple[float, float],
    rim: float | None,
    inner: float,
    outer: float,
) -> StarMeasure:
    """Shift of each frame, then the rings over all frames, each about its own centre."""
    n = len(stack.values)
    centres = np.array(
        [
            _refine(stack, v, cycles, centre, inner, region_size, w, outer)
            for v, w in zip(stack.values, stack.weight, strict=True)
        ]
    )
    if n == 1 or np.abs(centres - centre).max() > 3:
        centres = np.tile(np.asarray(centre), (n, 1))
    edges = _ring_edges(inner, outer, len(stack.x) / (region_size[0] * region_size[1]))
    fits, rest = _fit_rings(stack, stack.weight, cycles, centres, edges)
    if fits is not None and (wild := _wild(rest)).any():
        stack = replace(stack, weight=stack.weight * ~wild)
        fits, rest = _fit_rings(stack, stack.weight, cycles, centres, edges)
    if fits is None or not rest.any():
        return StarMeasure(False, ("pattern-not-found",))
    noise, temporal = _noise(rest, fits.coefficients.size)
    rings, phase = _rings(fits, cycles, n, noise, temporal)
    return StarMeasure(
        True,
        cycles=cycles,
        rings=rings,
        centre_px=(float(centres[:, 0].mean()), float(centres[:, 1].mean())),
        phase_rad=phase,
        shift_px=centres - centres.mean(axis=0),
        rim_px=rim,
        noise=noise,
        temporal_noise=temporal,
        profile=None if rim is None else _profile(stack, cycles, centres, region_size, inner + 5, rim, fits, noise),
    )


def _wild(rest: Floats) -> Bools:
    """Samples that no noise explains (hot pixels, dust): beyond six times the robust scatter."""
    used = rest[rest != 0]
    return np.asarray(np.abs(rest) > 6 * 1.4826 * float(np.median(np.abs(used)) if used.size else np.inf))


def _ring_edges(inner: float, outer: float, density: float) -> Floats:
    """Ring borders from outside inwards, each ring wide enough to hold the fit."""
    edges = [outer]
    while True:
        width = max(_RING_PX, _RING_SAMPLES / (2 * np.pi * edges[-1] * density))
        if edges[-1] - width < inner:
            return np.array(edges[::-1])
        edges.append(edges[-1] - width)


@dataclass(frozen=True, slots=True)
class _RingFits:
    """Coefficients, (m, p), their unscaled variances, (m, p), samples and residual square sums, (m,), of the rings."""

    radius: Floats
    coefficients: Floats
    variance: Floats
    count: Floats
    square: Floats


def _fit_rings(
    stack: _Stack, weight: Floats, cycles: int, centres: Floats, edges: Floats
) -> tuple[_RingFits | None, Floats]:
    """Least squares in each ring over all frames; the residuals come back as (n, k), 0 outside of the rings."""
    m, p = len(edges) - 1, 6 + 2 * (len(_ORDERS) + 3)
    square, right, power, count = np.zeros((m, p, p)), np.zeros((m, p)), np.zeros(m), np.zeros(m)
    middles = (edges[:-1] + edges[1:]) / 2
    kept = []
    for v, w, centre in zip(stack.values, weight, centres, strict=True):
        radius, direction = _polar(stack, (centre[0], centre[1]))
        index = np.flatnonzero((radius >= edges[0]) & (radius < edges[-1]))
        ring = np.digitize(radius[index], edges) - 1
        order = np.argsort(ring, kind="stable")
        index, ring = index[order], ring[order]
        design = _design(radius[index], direction[index], cycles, middles[ring]) * w[index][:, None]
        cut = np.searchsorted(ring, np.arange(m + 1))
        for i in range(m):
            a, b = design[cut[i] : cut[i + 1]], v[index[cut[i] : cut[i + 1]]]
            square[i] += a.T @ a
            right[i] += a.T @ b
        count += np.bincount(ring, w[index], m)
        kept.append((index, ring, design, v, w))
    if (count < 1.5 * p).any():
        return None, np.zeros_like(stack.values)
    inverse = np.linalg.pinv(square, hermitian=True)
    coefficients = np.einsum("ijk,ik->ij", inverse, right)
    rest = np.zeros_like(stack.values)
    for f, (index, ring, design, v, w) in enumerate(kept):
        rest[f, index] = (v[index] - np.einsum("ij,ij->i", design, coefficients[ring])) * w[index]
        power += np.bincount(ring, rest[f, index] ** 2, m)
    return _RingFits(middles, coefficients, np.einsum("ijj->ij", inverse), count, power), rest


def _design(radius: Floats, direction: Complex, cycles: int, middle: Floats) -> Floats:
    """Columns of the ring fit: level and its low orders, the harmonic with slope and sidebands, 2nd and 3rd."""
    across = radius - middle
    turn = direction**cycles
    second = direction * direction
    waves = [
        turn,
        turn * across,
        turn * np.conj(direction),
        turn * direction,
        turn * np.conj(second),
        turn * second,
        turn * turn,
        turn**3,
    ]
    level = [np.ones_like(radius), across, direction.real, direction.imag, second.real, second.imag]
    return np.stack([*level, *(part for wave in waves for part in (wave.real, wave.imag))], axis=1)


def _noise(rest: Floats, parameters: int) -> tuple[float, float | None]:
    """Rms of the mean frame about the fit, and rms of one frame about the mean frame (None for one frame)."""
    used = (rest != 0).all(axis=0)
    if not used.any():
        return 0.0, None
    mean = rest[:, used].mean(axis=0)
    freedom = max(int(used.sum()) - parameters, 1)
    noise = float(np.sqrt(np.sum(mean**2) / freedom))
    if len(rest) == 1:
        return noise, None
    return noise, float(np.sqrt(np.sum((rest[:, used] - mean) ** 2) / (used.sum() * (len(rest) - 1))))


def _rings(fits: _RingFits, cycles: int, n: int, noise: float, temporal: float | None) -> tuple[StarRings, float]:
    """Amplitudes and their uncertainties from the coefficients, outermost ring first."""
    coefficients = fits.coefficients[::-1]
    wave = coefficients[:, 6:].reshape(len(coefficients), -1, 2)
    harmonic = wave[..., 0] + 1j * wave[..., 1]
    side = {0: harmonic[:, 0], -1: harmonic[:, 2], 1: harmonic[:, 3], -2: harmonic[:, 4], 2: harmonic[:, 5]}
    # the unscaled variance counts the samples of every frame, the noise is that of the mean frame
    unit = n * fits.variance[::-1, 6]
    variance = noise**2 * unit
    phase = _common_phase(side[0], variance)
    turned = {j: a * np.exp(-1j * phase) for j, a in side.items()}
    if turned[0][0].real < 0:
        phase += np.pi
        turned = {j: -a for j, a in turned.items()}
    signed = turned[0].real
    theta = np.arange(48) * (2 * np.pi / 48)
    local = signed[:, None] + 1j * _significant(turned[0].imag, variance)[:, None]
    for j in _ORDERS[1:]:
        local = local + _significant(turned[j], 2 * variance)[:, None] * np.exp(-1j * j * theta)
    sign = np.where(signed < 0, -1.0, 1.0)
    # direction of the frequency lies across the radius
    even = -(turned[2] + turned[-2]).real * sign
    odd = -(turned[2] - turned[-2]).imag * sign
    pattern = np.sqrt(max(noise**2 - (temporal**2 / n if temporal is not None else noise**2), 0.0))
    rings = StarRings(
        v_cy_px=cycles / (2 * np.pi * fits.radius[::-1]),
        radius_px=fits.radius[::-1],
        amplitude=np.abs(local).mean(axis=1),
        signed=signed,
        u=np.sqrt(variance),
        pattern_u=pattern * np.sqrt(unit),
        level=coefficients[:, 0],
        astigmatic=np.stack([even, odd], axis=1),
        astigmatic_u=np.sqrt(2 * variance),
    )
    return rings, float(phase % (2 * np.pi))


def _common_phase(harmonic: Complex, variance: Floats) -> float:
    """The phase that all rings share, known to half a turn."""
    return float(np.angle(np.sum(harmonic**2 / np.maximum(variance, 1e-300)))) / 2


def _significant(part: Complex | Floats, variance: Floats) -> Complex:
    """A part of the wave as five neighbouring rings have it, shrunk to nothing where their noise explains it.

    A modulus taken of noise would read too high everywhere.
    """
    kernel = np.ones(5) / 5
    if len(part) < 5:
        return np.zeros(len(part), complex)
    smooth = np.convolve(np.pad(part, 2, "edge"), kernel, "valid")
    expected = np.convolve(np.pad(variance, 2, "edge"), kernel, "valid") / 5
    power = np.abs(smooth) ** 2
    return np.asarray(smooth * np.sqrt(np.clip(1 - 4 * expected / np.maximum(power, 1e-300), 0, 1)), complex)


def _profile(
    stack: _Stack,
    cycles: int,
    centres: Floats,
    region_size: tuple[int, int],
    begin: float,
    rim: float,
    fits: _RingFits,
    noise: float,
) -> RadialProfile | None:
    """The level in whole rings as far as they fit into the region, then in blocks of the corners."""
    width, height = region_size
    n = len(stack.values)
    reach = _room((float(centres[:, 0].mean()), float(centres[:, 1].mean())), region_size) - 2.5
    gradient = _gradient(fits)
    borders = np.stack([stack.x, width - 1 - stack.x, stack.y, height - 1 - stack.y])
    inner_part = borders.min(axis=0) >= 2.0
    rings = int(max(reach - begin, 0) / RING_BIN_PX)
    block = (np.minimum(borders[0], borders[1]) // 3) * 1000 + np.minimum(borders[2], borders[3]) // 3
    blocks, block_of = np.unique(block, return_inverse=True)
    b = rings + len(blocks)
    sums = np.zeros((b, 3, 3))
    right = np.zeros((b, 3))
    far = np.zeros(b)
    for v, w, centre in zip(stack.values, stack.weight, centres, strict=True):
        radius, direction = _polar(stack, (centre[0], centre[1]))
        whole = (radius >= begin) & (radius < begin + rings * RING_BIN_PX)
        corner = (radius >= max(reach, rim + 1.5)) & inner_part
        use = np.flatnonzero((whole | corner) & (w > 0))
        slot = np.where(whole, (radius - begin) / RING_BIN_PX, rings + block_of)[use].astype(np.intp)
        turn = np.where(whole, direction**cycles, 0.0)[use]
        z = radius[use] * direction[use]
        value = v[use] * (1 - (gradient[0] * z.real + gradient[1] * z.imag))
        columns = (np.ones(len(use)), turn.real, turn.imag)
        for i in range(3):
            right[:, i] += np.bincount(slot, columns[i] * value, b)
            for j in range(i, 3):
                sums[:, i, j] += np.bincount(slot, columns[i] * columns[j], b)
        far += np.bincount(slot, radius[use], b)
    lower = np.tril_indices(3, -1)
    sums[:, lower[0], lower[1]] = sums[:, lower[1], lower[0]]
    count = sums[:, 0, 0]
    keep = count >= 6 * n
    keep[:rings] &= count[:rings] >= 20 * n
    if keep[rings:].sum() < 3:
        return None
    inverse = np.linalg.pinv(sums[keep], hermitian=True)
    value = np.einsum("ij,ij->i", inverse[:, 0], right[keep])
    ring = np.flatnonzero(keep) < rings
    u = noise * np.sqrt(n * inverse[:, 0, 0])
    sound = ring | _near_most(value, u, ~ring)
    histogram = _borders(
        stack, borders, (float(centres[:, 0].mean()), float(centres[:, 1].mean())), begin, rings, block_of, b
    )
    return RadialProfile((far[keep] / count[keep])[sound], value[sound], u[sound], ring[sound], histogram[keep][sound])


def _gradient(fits: _RingFits) -> tuple[float, float]:
    """Relative change of the light per pixel along x and y, from the level's first order in the rings."""
    c, r = fits.coefficients, fits.radius
    scale = float(np.sum(r * r * c[:, 0]))
    return float(np.sum(r * c[:, 2])) / scale, float(np.sum(r * c[:, 3])) / scale


def _near_most(value: Floats, u: Floats, where: Bools) -> Bools:
    """Which of the marked bins agree with their median, within ten times their scatter or a third of the level."""
    middle = float(np.median(value[where]))
    spread = 1.4826 * float(np.median(np.abs(value[where] - middle))) + float(np.median(u[where]))
    return np.asarray(where & (np.abs(value - middle) < min(10 * spread, abs(middle) / 3)))


def _borders(
    stack: _Stack,
    borders: Floats,
    centre: tuple[float, float],
    begin: float,
    rings: int,
    block_of: NDArray[np.intp],
    b: int,
) -> Floats:
    """For each bin of the profile, how many of the four borders lie at 0, 1, ... pixels."""
    radius, _ = _polar(stack, centre)
    whole = (radius >= begin) & (radius < begin + rings * RING_BIN_PX)
    slot = np.where(whole, (radius - begin) / RING_BIN_PX, rings + block_of).astype(np.intp)
    count = np.maximum(np.bincount(slot, minlength=b), 1)
    d = int(borders.max()) + 1
    flat = np.zeros(b * d)
    for border in borders:
        flat += np.bincount(slot * d + border.astype(np.intp), minlength=b * d)
    return np.asarray(flat.reshape(b, d) / count[:, None])
