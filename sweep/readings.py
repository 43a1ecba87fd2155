"""Frames x patches -> what each patch says at each stop, in one streaming pass.

Frames are read stop by stop; of each only the patches are kept, on linear light per millisecond, so
that frames of several exposures and gains are pooled. Nothing here knows a lens formula.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from hashlib import blake2b
from itertools import groupby

import numpy as np

from sweep.errors import SourceError
from sweep.frames import Pixels, Shot, Source
from sweep.measure.bars import BarsContrast, BarsMeasure, bars_contrasts, read_bars
from sweep.measure.edge import EdgeMeasure, read_edge
from sweep.measure.linear import (
    COLOUR_SITES,
    Bools,
    Floats,
    Scale,
    Sites,
    channel_mask,
    crop,
    sharpness_sites,
    sharpness_values,
)
from sweep.measure.mtf import Transfer
from sweep.measure.noise import NoisePoint, PhotonTransfer, area_noise, fit_photon_transfer
from sweep.measure.star import StarMeasure, read_star
from sweep.measure.star_level import StarCurve, star_curves
from sweep.result import PatchKind
from sweep.station import Patch, Station

MOST_SLOTS = 32
CLIPPED_SHARE = 0.005
CLIPPED_SHARE_FOR_LIGHT = 0.01
LEAST_SIGNAL_DN = 4.0
Progress = Callable[[int, int], None]


@dataclass(frozen=True, slots=True)
class PatchSite:
    """One patch of the station: where it is listed, what it is, and its sharpness samples."""

    target: int
    patch: int
    spec: Patch
    sites: Sites


@dataclass(frozen=True, slots=True)
class Sighting:
    """What one patch said at one stop.

    `light_per_ms`: mean linear light of the patch (DN per ms at 0 dB); `frame_light`: the same frame by frame, with the
    frames' place in time in `frame_order`; `tone_per_ms`: the light tone in the brightest channel, None where the kind
    has none; `exposures`: of the frames, ms at 0 dB; `noise`: of its even areas; `saturated_fraction`: over the
    frames used; `frames`: how many were used.
    """

    stop: float
    site: PatchSite
    ok: bool
    why_not: tuple[str, ...]
    saturated_fraction: float
    frames: int
    light_per_ms: float
    frame_light: Floats
    frame_order: Floats
    tone_per_ms: float | None
    exposures: Floats
    edge: EdgeMeasure | None = None
    star: StarMeasure | None = None
    star_curve: StarCurve | None = None
    bars: BarsMeasure | None = None
    bars_contrast: BarsContrast | None = None
    bars_reversed: bool = False
    noise: tuple[NoisePoint, ...] = ()

    @property
    def shifts_px(self) -> tuple[Floats, float] | None:
        """How far each frame's pattern lies from their mean, (n, axes) px, and the u of one figure; None: not told."""
        if self.edge is not None and self.edge.ok and self.edge.shift_px is not None:
            return self.edge.shift_px[:, None], self.edge.shift_u_px
        if self.star is not None and self.star.ok:
            return self.star.shift_px, self.star.shift_u_px
        if self.bars is not None and self.bars.ok:
            return self.bars.shift_px[:, None], self.bars.shift_u_px
        return None

    @property
    def half_found(self) -> bool:
        """Whether a sharper view of the same patch could help: no pattern was found, or a star without its rim."""
        rimless = self.star is not None and self.star.ok and self.star.rim_px is None
        return rimless or "pattern-not-found" in self.why_not

    @property
    def strength(self) -> float:
        """How clearly a star or bars stand out: amplitude over level."""
        if self.star is not None and self.star.rings is not None:
            return float(self.star.rings.amplitude[0] / self.star.rings.level[0])
        return self.bars.relative[0] if self.bars is not None else 0.0

    @property
    def position_px(self) -> tuple[float, ...] | None:
        """Where the pattern lies in the region, px: an edge across itself, a star's centre."""
        if self.edge is not None and self.edge.ok and self.edge.curve is not None:
            return (self.edge.curve.coefficients[0],)
        if self.star is not None and self.star.ok:
            return self.star.centre_px
        return None

    @property
    def transfer(self) -> Transfer | None:
        """The signed transfer of lens and camera that the patch shows by itself."""
        if self.star_curve is not None:
            return self.star_curve.transfer
        return self.edge.transfer if self.edge is not None else None

    @property
    def kind(self) -> PatchKind:
        """The kind of the patch."""
        return self.site.spec.kind


@dataclass(frozen=True, slots=True)
class Black:
    """The level without light: from dark frames, or as the station file says; and the dark frames' noise."""

    level_dn: float
    from_dark_frames: bool
    noise: tuple[NoisePoint, ...]


@dataclass(frozen=True, slots=True)
class Sweep:
    """All that the pixels say: the sightings, the camera's noise, and what was noticed on the way.

    `identical`: groups of target frames that are the same bit for bit; `row_light`: for each stop (n, rows), each
    frame's mean light of every row against the stop's mean frame; `idle_bits`: low bits that are 0 in every pixel.
    """

    stops: tuple[float, ...]
    sightings: tuple[Sighting, ...]
    black: Black
    scale: Scale
    photon_transfer: PhotonTransfer | None
    frames: int
    identical: tuple[tuple[str, ...], ...]
    frame_shape: tuple[int, ...]
    row_light: tuple[Floats, ...]
    idle_bits: int

    def at(self, stop: float) -> list[Sighting]:
        """The sightings at one stop."""
        return [s for s in self.sightings if s.stop == stop]


def measure_sweep(source: Source, station: Station, progress: Progress | None = None) -> Sweep:
    """Measure every patch at every stop of a source.

    Frames are taken in an order that does not depend on the rows of the table; `progress` is told (frames done, all).
    Raises SourceError where there is nothing to measure, FrameError from the reader.
    """
    shots = sorted(source.shots, key=_canonical)
    targets = [s for s in shots if s.role == "target" and s.stop is not None]
    if not targets:
        raise SourceError("No target frames: shots.csv lists none with the role 'target'. Add frames of the targets.")
    pass_ = _Pass(source, station, progress, len(shots))
    black = pass_.black([s for s in shots if s.role == "dark"])
    full_dn = float(2**source.bit_depth - 1)
    scale = Scale(black.level_dn, full_dn, station.camera.response)
    sites = [
        PatchSite(i, j, patch, sharpness_sites(station.camera.layout, patch.region))
        for i, target in enumerate(station.targets)
        for j, patch in enumerate(target.patches)
    ]
    sightings: list[Sighting] = []
    stops: list[float] = []
    for stop, group in groupby(targets, key=lambda s: s.stop):
        assert stop is not None
        stops.append(stop)
        sightings += pass_.stop(stop, list(group), sites, scale)
    sightings = _with_bars_contrasts(_with_star_curves(pass_.look_again(sightings)))
    lit = [p for s in sightings for p in s.noise if s.saturated_fraction < CLIPPED_SHARE]
    sightings = _with_shared_noise(sightings, lit)
    points = lit + list(black.noise)
    return Sweep(
        tuple(stops),
        tuple(sightings),
        black,
        scale,
        fit_photon_transfer(points),
        len(shots),
        pass_.identical(),
        pass_.shape,
        tuple(pass_.row_light),
        pass_.idle_bits(),
    )


def _canonical(shot: Shot) -> tuple[object, ...]:
    stop = -1.0 if shot.stop is None else shot.stop
    time = shot.time_s if shot.time_s is not None else 0.0
    return (stop, shot.target or "", shot.exposure_ms, shot.gain_db, time, shot.file)


@dataclass(slots=True)
class _Slot:
    """One frame, or the mean of several of one setting, cut to one patch: linear DN, and what is clipped."""

    exposure_ms: float
    gain_db: float
    count: int
    values: Floats
    valid: Bools
    clipped: float
    full: Floats
    order: float

    @property
    def light_unit(self) -> float:
        """Milliseconds x gain: what turns DN into light."""
        return float(self.exposure_ms * 10.0 ** (self.gain_db / 20.0))


class _Pass:
    """The walk over the frames of one source."""

    def __init__(self, source: Source, station: Station, progress: Progress | None, total: int) -> None:
        self.source, self.station, self.progress, self.total = source, station, progress, total
        self.done = 0
        self.shape: tuple[int, ...] = ()
        self.row_light: list[Floats] = []
        self._unfound: list[tuple[float, PatchSite, list[_Slot], Scale]] = []
        self._hashes: dict[bytes, list[str]] = {}
        self._bits = 0

    def read(self, shot: Shot) -> Pixels:
        pixels = self.source.read(shot)
        self.shape = pixels.shape
        if shot.role == "target":
            self._hashes.setdefault(blake2b(np.ascontiguousarray(pixels).data).digest(), []).append(shot.file)
            self._bits |= int(np.bitwise_or.reduce(pixels, axis=None))
        self.done += 1
        if self.progress is not None:
            self.progress(self.done, self.total)
        return pixels

    def identical(self) -> tuple[tuple[str, ...], ...]:
        """Groups of files whose pixels are the same bit for bit."""
        return tuple(sorted(tuple(sorted(files)) for files in self._hashes.values() if len(files) > 1))

    def idle_bits(self) -> int:
        """Low bits that are 0 in every pixel of every target frame."""
        return (self._bits & -self._bits).bit_length() - 1 if self._bits else 0

    def black(self, shots: Sequence[Shot]) -> Black:
        """Black level and dark noise from the dark frames; as stated without any, or where they clip at zero."""
        stated = Black(self.station.camera.black_level_dn, False, ())
        if not shots:
            return stated
        levels: list[float] = []
        points: list[NoisePoint] = []
        clipped = False
        for (_, gain), group in groupby(shots, key=lambda s: (s.exposure_ms, s.gain_db)):
            frames = [np.asarray(self.read(s), dtype=np.float32) for s in list(group)[:MOST_SLOTS]]
            clipped = clipped or float(np.mean(frames[0] <= 0)) > 0.01
            levels += [float(np.mean(f, dtype=np.float64)) for f in frames]
            stack = np.stack([f.reshape(-1) for f in frames]).astype(np.float64)
            point = area_noise(stack - np.mean(levels), gain, 1.0 / 12.0)
            if point is not None:
                points.append(replace(point, mean_dn=0.0))
        if clipped:
            return stated
        linear = self.station.camera.response == "linear"
        return Black(float(np.mean(levels)), True, tuple(points) if linear else ())

    def stop(self, stop: float, shots: list[Shot], sites: Sequence[PatchSite], scale: Scale) -> list[Sighting]:
        """Read one stop's frames and measure all patches there."""
        slots: list[list[_Slot]] = [[] for _ in sites]
        per_slot = -(-len(shots) // MOST_SLOTS)
        rows: list[Floats] = []
        for shot in shots:
            pixels = self.read(shot)
            rows.append(_row_means(pixels) - scale.black_dn)
            for site, mine in zip(sites, slots, strict=True):
                if shot.target is None or shot.target == self.station.targets[site.target].name:
                    _add(mine, _cut(pixels, site, shot, scale), per_slot)
        self.row_light.append(_row_ratios(np.stack(rows)))
        seen = []
        for site, mine in zip(sites, slots, strict=True):
            if mine:
                sighting = measure_patch(stop, site, mine, self.station, scale)
                seen.append(sighting)
                if sighting.half_found:
                    self._unfound.append((stop, site, mine, scale))
        return seen

    def look_again(self, sightings: list[Sighting]) -> list[Sighting]:
        """Measure stars and bars that were too soft to be found, or whose rim was, where they stand at a sharper stop."""
        out = list(sightings)
        for stop, site, slots, scale in self._unfound:
            same = [s for s in sightings if s.site is site and s.ok]
            rimmed = [s for s in same if s.star is not None and s.star.rim_px is not None]
            if same:
                near = max(rimmed or same, key=lambda s: s.strength)
                i = next(i for i, s in enumerate(out) if s.site is site and s.stop == stop)
                out[i] = measure_patch(stop, site, slots, self.station, scale, near)
        return out


def _row_means(pixels: Pixels) -> Floats:
    """Mean value of each row, (rows,)."""
    return np.asarray(pixels.reshape(pixels.shape[0], -1).mean(axis=1, dtype=np.float64))


def _row_ratios(rows: Floats) -> Floats:
    """Each frame's rows against the stop's mean frame, level and small shifts apart, (n, rows); 1 without ripple."""
    level = rows.mean(axis=1, keepdims=True)
    even = rows / np.where(level > 0, level, 1.0)
    middle = even.mean(axis=0)
    ratio = even / np.where(middle > 0.05, middle, 1.0)
    slope = np.gradient(middle) / np.where(middle > 0.05, middle, 1.0)
    shift = ratio @ slope / max(float(slope @ slope), 1e-12)
    return np.asarray(ratio - np.outer(shift, slope))


def _cut(pixels: Pixels, site: PatchSite, shot: Shot, scale: Scale) -> _Slot:
    patch = crop(pixels, site.spec.region)
    top = patch >= scale.full_dn
    any_top = top.any(axis=2) if top.ndim == 3 else top
    values = scale.linear(sharpness_values(patch, site.sites))
    valid = ~any_top.reshape(-1)[site.sites.flat_index]
    order = shot.time_s if shot.time_s is not None else float(shot.order)
    return _Slot(shot.exposure_ms, shot.gain_db, 1, values, valid, float(any_top.mean()), scale.linear(patch), order)


def _add(slots: list[_Slot], new: _Slot, per_slot: int) -> None:
    """Append a frame, or pool it with the slot before where that is not full and of the same setting."""
    last = slots[-1] if slots else None
    same = last is not None and (last.exposure_ms, last.gain_db) == (new.exposure_ms, new.gain_db)
    if last is None or not same or last.count >= per_slot:
        slots.append(new)
        return
    n = last.count
    last.values = (last.values * n + new.values) / (n + 1)
    last.full = (last.full * n + new.full) / (n + 1)
    last.valid &= new.valid
    last.clipped = (last.clipped * n + new.clipped) / (n + 1)
    last.order = (last.order * n + new.order) / (n + 1)
    last.count = n + 1


def measure_patch(
    stop: float, site: PatchSite, slots: Sequence[_Slot], station: Station, scale: Scale, near: Sighting | None = None
) -> Sighting:
    """Measure one patch at one stop from its frames; clipped frames give way to unclipped ones.

    near: the same patch at a stop where it is sharper, which tells where a soft pattern is.
    """
    sound = [s for s in slots if s.clipped <= CLIPPED_SHARE]
    used = sound or list(slots)
    units = np.array([s.light_unit for s in used])
    light = np.stack([s.values for s in used]) / units[:, None]
    valid = np.stack([s.valid for s in used])
    weights = np.array([s.count for s in used]) * units
    frame_light = light.mean(axis=1)
    clipped = float(np.average([s.clipped for s in used], weights=[s.count for s in used]))
    why: list[str] = []
    if not sound:
        why.append("frames-saturated")
    brightest = float(np.max(units * np.percentile(light, 95, axis=1)))
    if brightest < LEAST_SIGNAL_DN:
        why.append("low-signal")
    edge, star, bars = None, None, None
    x, y = site.sites.x, site.sites.y
    readable = "low-signal" not in why
    if site.spec.kind == "edge" and readable:
        edge = read_edge(x, y, light, valid if sound else None, weights)
        why += edge.why_not
        if edge.frame_level is not None:
            frame_light = edge.frame_level * float(np.average(frame_light, weights=weights))
    elif site.spec.kind == "star" and readable and site.spec.cycles is not None:
        star = read_star(
            x, y, light, valid, site.spec.cycles, site.spec.region[2:], near.star if near is not None else None
        )
        why += [code for code in star.why_not if code not in why]
    elif site.spec.kind == "bars" and readable and site.spec.period_um is not None:
        period_px = site.spec.period_um / station.object_um_per_px_at(station.targets[site.target].depth_mm)
        bars = read_bars(x, y, light, valid, period_px, near.bars if near is not None else None)
        why += [code for code in bars.why_not if code not in why]
    full = np.average(np.stack([s.full / s.light_unit for s in used]), axis=0, weights=weights)
    base = Sighting(
        stop, site, not why, tuple(why), clipped, sum(s.count for s in used),
        float(np.average(frame_light, weights=weights)), frame_light, np.array([s.order for s in used]),
        _tone(full, site, edge, station), units, edge, star, None, bars,
    )  # fmt: skip
    return replace(base, noise=_noise(base, used, scale))


def _with_star_curves(sightings: list[Sighting]) -> list[Sighting]:
    """The sightings with each star's transfer, whose level at zero frequency all its stops share."""
    out = list(sightings)
    sites = {id(s.site): s.site for s in sightings if s.kind == "star"}
    for site in sites.values():
        places = [i for i, s in enumerate(out) if s.site is site]
        for i, curve in zip(places, star_curves([out[i].star for i in places], site.spec.modulation), strict=True):
            out[i] = replace(out[i], star_curve=curve)
    return out


_CORRELATION_MATTERS = 0.03


def _with_shared_noise(sightings: list[Sighting], points: Sequence[NoisePoint]) -> list[Sighting]:
    """The stars with the u that noise shared between neighbours leaves: its variance grows by (1 + r) / (1 - r)."""
    if not points:
        return sightings
    shared = np.average([p.correlation for p in points], axis=0, weights=[p.dof for p in points])
    shared = np.where(shared > _CORRELATION_MATTERS, np.minimum(shared, 0.6), 0.0)
    factor = float(np.sqrt(np.prod((1.0 + shared) / (1.0 - shared))))
    if factor == 1.0:
        return sightings
    return [_less_sure_star(s, factor) for s in sightings]


def _less_sure_star(sighting: Sighting, factor: float) -> Sighting:
    star, curve = sighting.star, sighting.star_curve
    if star is None or star.rings is None or curve is None:
        return sighting
    rings = replace(star.rings, u=star.rings.u * factor, astigmatic_u=star.rings.astigmatic_u * factor)
    transfer = replace(curve.transfer, u=curve.transfer.u * factor)
    return replace(sighting, star=replace(star, rings=rings), star_curve=replace(curve, transfer=transfer))


def _with_bars_contrasts(sightings: list[Sighting]) -> list[Sighting]:
    """The sightings with the contrast of each set of bars, whose level at zero frequency all its stops share."""
    out = list(sightings)
    for site in {id(s.site): s.site for s in sightings if s.kind == "bars"}.values():
        places = [i for i, s in enumerate(out) if s.site is site]
        seen = [b for i in places if (b := out[i].bars) is not None and b.ok]
        upright = max(seen, key=lambda b: b.relative[0]).phase_rad if seen else 0.0
        for i, told in zip(places, bars_contrasts([out[i].bars for i in places], site.spec.modulation), strict=True):
            bars = out[i].bars
            turned = bars is not None and np.cos(bars.phase_rad - upright) < 0
            out[i] = replace(out[i], bars_contrast=told, bars_reversed=bool(turned))
    return out


def _tone(full: Floats, site: PatchSite, edge: EdgeMeasure | None, station: Station) -> float | None:
    """The light tone in the brightest channel, per ms: a flat's mean, or the light side of an edge."""
    height, width = full.shape[:2]
    if site.spec.kind == "flat":
        light = np.ones((height, width), bool)
        scale = 1.0
    elif edge is not None and edge.ok and edge.curve is not None:
        rows, columns = np.mgrid[0:height, 0:width]
        light = edge.curve.distance(columns.astype(float), rows.astype(float)) > 2.0 * edge.spread_px
        own = sharpness_values(full, site.sites)
        own_light = light.reshape(-1)[site.sites.flat_index]
        if not own_light.any():
            return None
        scale = edge.light / float(own[own_light].mean())
    else:
        return None
    if full.ndim == 3:
        means = [float(full[..., c][light].mean()) for c in range(3)]
    elif station.camera.layout in COLOUR_SITES:
        masks = [channel_mask(station.camera.layout, site.spec.region, c) & light for c in "rgb"]
        means = [float(full[m].mean()) for m in masks if m.any()]
    else:
        means = [float(full[light].mean())]
    return max(means) * scale


def _noise(sighting: Sighting, slots: Sequence[_Slot], scale: Scale) -> tuple[NoisePoint, ...]:
    """Noise of the even areas: a flat, or the two sides of an edge beyond its spread; per setting."""
    site, edge = sighting.site, sighting.edge
    if sighting.kind == "flat":
        areas = [np.ones(len(site.sites.x), bool)]
    elif edge is not None and edge.ok and edge.curve is not None:
        d = edge.curve.distance(site.sites.x, site.sites.y)
        away = max(3.0, 2.0 * edge.spread_px)
        areas = [d < -away, d > away]
    else:
        return ()
    points: list[NoisePoint] = []
    for (_, gain), group in groupby(slots, key=lambda s: (s.exposure_ms, s.gain_db)):
        stack = list(group)
        frames = np.stack([s.values for s in stack])
        for area in areas:
            part = frames[:, area]
            if part.shape[1] < 30:
                continue
            stored = scale.stored(float(part.mean()))
            rounding = float(scale.slope(np.array(stored))) ** 2 / 12.0
            point = area_noise(part, gain, rounding, (site.sites.x[area], site.sites.y[area]))
            if point is not None:
                points.append(replace(point, variance_dn2=point.variance_dn2 * stack[0].count))
    return tuple(points)
