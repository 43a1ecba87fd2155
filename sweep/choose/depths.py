"""Contrast and the smallest feature told apart, over depth and stop: a map, and the usable range of depths.

Two criteria stand side by side. The fixed one is the contrast that the station file asks for. The other is detection:
a feature is detected where its contrast-to-noise ratio over its own area reaches 5, the criterion of Rose (The
sensitivity performance of the human eye on an absolute scale, J. Opt. Soc. Am. 38, 196-208, 1948; the value 5 is from
memory). A bar of width w and of the part's own contrast c (Michelson) differs from its gap by 2 c T / (1 + c) of the
light tone, T the transfer at 1 / (2 w); the noise of its w x w area is that of one pixel at the light tone over its
width in pixels.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from sweep.choose.chances import NYQUIST_CY_PX
from sweep.choose.evidence import DepthView, Place
from sweep.choose.settings import exposure_limit_ms
from sweep.result import DepthMap, DepthStop, Stop, TargetDetail
from sweep.station import Station

Floats = NDArray[np.float64]

ROSE = 5.0
DEPTHS = 25
MARGIN = 0.25  # of the span of the depths in question, mapped beyond them on both sides
ALIKE = 0.02  # of the defocus that takes all contrast at the middle stop: depths that lie closer count as one
NEAREST = -0.9  # of the way from the plane of focus to the entrance pupil
_STEP = 0.05  # of the defocus that takes all contrast: the grid of the usable range
_FREQUENCIES = np.geomspace(0.005, NYQUIST_CY_PX, 64)  # cycles per pixel; the largest feature is 100 pixels wide


def depth_map(station: Station, stops: Sequence[Stop], lens: DepthView, places: Sequence[Place]) -> DepthMap:
    """The lens model over depth, for each stop at its own setting, motion blur included.

    `stops` in the order of the lens's own; `places` are those of the choice, of which the targets' are looked at one by
    one. The depths are those of the targets, or `need.depth_range_mm`, and a quarter of their span beyond; where all
    are alike, as far as blur alone takes to lose the feature at the middle stop.
    """
    mapped_mm, searched_mm = _around(station, stops)
    depths = np.linspace(*mapped_mm, DEPTHS)
    mapped = [_place(station, d) for d in depths]
    on_targets = [p for p in places if p.target >= 0]
    rows = []
    for k, stop in enumerate(stops):
        used = _Used(station, lens, k, stop)
        contrast, u = used.contrast(mapped)
        detected, at_need = used.smallest_um(mapped)
        rows.append(
            DepthStop(
                stop=stop.stop,
                usable_mm=used.usable_mm(searched_mm),
                contrast=tuple(map(float, contrast)),
                contrast_u=tuple(map(float, u)),
                smallest_detected_um=tuple(map(_known, detected)),
                smallest_at_need_um=tuple(map(_known, at_need)),
                targets=used.details(on_targets),
            )
        )
    return DepthMap(station.need.part_contrast, tuple(map(float, depths)), tuple(rows))


def kept(contrast: Floats, contrast_u: Floats, confidence: float) -> Floats:
    """The contrast that is reached with that probability, errors taken as normal (JCGM 106:2012)."""
    return np.asarray(contrast - float(ndtri(confidence)) * contrast_u)


def contrast_to_noise(transfer: Floats, snr_db: float, width_px: Floats, part_contrast: float) -> Floats:
    """Contrast-to-noise ratio of bars over areas of their own width squared.

    `transfer` and `width_px`, the bar's width, broadcast; `snr_db` is that of one pixel at the light tone.
    """
    difference = 2 * part_contrast / (1 + part_contrast) * np.maximum(transfer, 0.0)
    return np.asarray(10 ** (snr_db / 20) * difference * width_px)


@dataclass(frozen=True, slots=True)
class _Used:
    """One stop as it would be used."""

    station: Station
    lens: DepthView
    index: int
    stop: Stop

    def contrast(self, places: Sequence[Place]) -> tuple[Floats, Floats]:
        """Contrast at the feature and its u, (places,); a reversed one counts as nothing."""
        value, u = self.lens.at_feature(self.index, places)
        left = self._left_by_motion(places, np.array([[p.feature_cy_px] for p in places]))[:, 0]
        return np.maximum(value, 0.0) * left, u * left

    def smallest_um(self, places: Sequence[Place]) -> tuple[Floats, Floats]:
        """The widths (um) down to which every larger bar is detected, and keeps the contrast of the need, (places,).

        At least one pixel, half the period at Nyquist; NaN where not even the largest bar is told apart, or the noise
        is unknown.
        """
        need, v = self.station.need, _FREQUENCIES
        transfer = self.lens.over_frequency(self.index, places, v) * self._left_by_motion(places, v)
        pixel_um = np.array([p.object_um_per_px for p in places])
        at_need = _down_to_px(transfer / need.contrast) * pixel_um
        if self.stop.snr_db is None:
            return np.full(len(places), np.nan), at_need
        seen = contrast_to_noise(transfer, self.stop.snr_db, 0.5 / v, need.part_contrast)
        return _down_to_px(seen / ROSE) * pixel_um, at_need

    def details(self, places: Sequence[Place]) -> tuple[TargetDetail, ...]:
        """The smallest features at each target, by its worst patch."""
        if not places:
            return ()
        detected, at_need = self.smallest_um(places)
        found = []
        for name in dict.fromkeys(p.name for p in places):
            mine = [i for i, p in enumerate(places) if p.name == name]
            # NaN, nothing told apart, is the worst of all and outlasts max.
            found.append(TargetDetail(name, _known(detected[mine].max()), _known(at_need[mine].max())))
        return tuple(found)

    def usable_mm(self, searched_mm: tuple[float, float]) -> tuple[float | None, float | None] | None:
        """The depths about the best one at which the contrast need is kept, with the wanted confidence.

        An end is None where the need is still kept at the end of what is searched.
        """
        low, high = searched_mm
        steps = math.ceil((high - low) / (_STEP * _lost_in_mm(self.station, self.stop)))
        depths = np.linspace(low, high, max(steps, DEPTHS) + 1)
        places = [_place(self.station, d) for d in depths]
        sure = kept(*self.contrast(places), self.station.need.confidence)
        sure = np.where([p.feature_cy_px <= NYQUIST_CY_PX for p in places], sure, 0.0)
        found = _about_the_best(depths, sure, self.station.need.contrast)
        if found is None or found[1] is None:
            return found
        return found[0], min(found[1], self._nyquist_mm())

    def _nyquist_mm(self) -> float:
        """The depth from which on the feature is too fine for the pixels."""
        pixels = self.station.need.feature_um / self.station.scene.object_um_per_px * 2 * NYQUIST_CY_PX
        return (pixels - 1) * self.station.pupil_distance_mm

    def _left_by_motion(self, places: Sequence[Place], v_cy_px: Floats) -> Floats:
        """What motion leaves of the transfer (places, n) at frequencies (n,) or (places, n), as in the choice.

        Where the exposure is unknown the longest that is allowed blurs most.
        """
        exposure_ms = exposure_limit_ms(self.station) if self.stop.exposure_ms is None else self.stop.exposure_ms
        speed = self.station.need.speed_mm_s
        if not speed or not math.isfinite(exposure_ms):
            return np.ones((len(places), v_cy_px.shape[-1]))
        way_px = np.array([[speed * exposure_ms / p.object_um_per_px] for p in places])
        return np.asarray(np.abs(np.sinc(way_px * v_cy_px)))


def _down_to_px(ratio: Floats) -> Floats:
    """Half the period (px) at which rows of `ratio` (n, frequencies) first fall below 1, by lines in log frequency."""
    below = ratio < 1
    first = np.where(below.any(axis=1), below.argmax(axis=1), len(_FREQUENCIES) - 1)
    row, before = np.arange(len(ratio)), np.maximum(first - 1, 0)
    high, low = ratio[row, before], ratio[row, first]
    share = np.where(low < 1, (high - 1) / np.where(high > low, high - low, 1.0), 1.0)
    ln_v = np.log(_FREQUENCIES)
    half_px = 0.5 / np.exp(ln_v[before] + share * (ln_v[first] - ln_v[before]))
    return np.where(below[:, 0], np.nan, half_px)


def _about_the_best(depths: Floats, contrast: Floats, wanted: float) -> tuple[float | None, float | None] | None:
    """The ends of what is kept around the highest contrast, by straight lines between the depths."""
    best = int(np.argmax(contrast))
    if contrast[best] < wanted:
        return None
    ends: list[float | None] = []
    for step, last in ((-1, 0), (1, len(depths) - 1)):
        k = best
        while k != last and contrast[k + step] >= wanted:
            k += step
        if k == last:
            ends.append(None)
            continue
        share = (contrast[k] - wanted) / (contrast[k] - contrast[k + step])
        ends.append(float(depths[k] + share * (depths[k + step] - depths[k])))
    return ends[0], ends[1]


def _around(station: Station, stops: Sequence[Stop]) -> tuple[tuple[float, float], tuple[float, float]]:
    """The depths to be mapped, and those searched for the ends of what is usable; no nearer than the lens allows (mm).

    No sweep speaks for depths far outside of its own.
    """
    depths = station.need.depth_range_mm or [t.depth_mm for t in station.targets]
    low, high = min(depths), max(depths)
    span, lost = high - low, _lost_in_mm(station, stops[len(stops) // 2])
    nearest = min(low, NEAREST * station.pupil_distance_mm)
    mapped, searched = (MARGIN * span if span > ALIKE * lost else lost), max(span, lost)
    return (max(low - mapped, nearest), high + mapped), (max(low - searched, nearest), high + searched)


def _lost_in_mm(station: Station, stop: Stop) -> float:
    """The defocus (mm) whose blur disc takes all contrast of the feature: 1.22 of its periods wide (first zero of J1).

    By similar triangles a point at depth d blurs over |d| D / e of the object, D the diameter of the entrance pupil and
    e its distance.
    """
    pupil_mm = station.lens.focal_length_mm / (stop.f_number_by_light or stop.stop)
    return 1.22 * 2e-3 * station.need.feature_um * station.pupil_distance_mm / pupil_mm


def _place(station: Station, depth_mm: float) -> Place:
    depth = float(depth_mm)
    return Place(f"{depth:+.3g} mm", depth, station.feature_cy_px_at(depth), station.object_um_per_px_at(depth))


def _known(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None
