"""From what a patch says to a reading: half-modulation frequency, contrast at the feature, smallest feature."""

from dataclasses import replace

import numpy as np

from sweep.measure.mtf import Transfer
from sweep.measure.star_level import SQUARE_WAVE
from sweep.measure.tribar import TribarMeasure
from sweep.readings import Sighting
from sweep.result import Reading
from sweep.station import Station

NYQUIST_CY_PX = 0.5


def reading_of(sighting: Sighting, station: Station) -> Reading:
    """The reading of one patch at one stop, from the pixels alone; figures only where it is sound."""
    target = station.targets[sighting.site.target]
    feature = station.feature_cy_px_at(target.depth_mm)
    why = sighting.why_not
    if sighting.ok and sighting.kind != "flat" and feature > NYQUIST_CY_PX:
        why = (*why, "beyond-nyquist")
    bare = Reading(
        stop=sighting.stop,
        target=target.name,
        patch=sighting.site.patch,
        kind=sighting.kind,
        depth_mm=target.depth_mm,
        ok=sighting.ok,
        why_not=why,
        saturated_fraction=sighting.saturated_fraction,
    )
    curve = sighting.transfer
    if sighting.ok and sighting.bars is not None:
        return _bars_reading(bare, sighting, station)
    if sighting.ok and sighting.tribar is not None:
        return _tribar_reading(bare, sighting.tribar)
    if not sighting.ok or curve is None:
        return bare
    star = sighting.star_curve
    half = star.mtf50() if star is not None else curve.first_fall_to(0.5)
    at_feature = star.contrast(feature) if star is not None else curve.at(feature)
    smallest = _smallest_feature(curve, station, target.depth_mm)
    if star is not None and smallest is not None and star.contrast(smallest[2]) is None:
        smallest = None
    astigmatic = _astigmatism(sighting, feature)
    return replace(
        bare,
        mtf50_cy_px=half[0] if half else None,
        mtf50_cy_px_u=half[1] if half else None,
        contrast_at_feature=abs(at_feature[0]) if at_feature else None,
        contrast_at_feature_u=at_feature[1] if at_feature else None,
        reversed=bool(at_feature and at_feature[0] < -2.0 * at_feature[1]),
        smallest_feature_um=smallest[0] if smallest else None,
        smallest_feature_um_u=smallest[1] if smallest else None,
        astigmatic_contrast=astigmatic[0] if astigmatic else None,
        astigmatic_contrast_u=astigmatic[1] if astigmatic else None,
    )


def _tribar_reading(bare: Reading, tribar: TribarMeasure) -> Reading:
    """What a tri-bar target says: the finest element told apart, and the chance of each."""
    finest = tribar.smallest
    return replace(
        bare,
        smallest_element=f"{finest.group}-{finest.element}" if finest is not None else None,
        smallest_element_um=finest.line_um if finest is not None else None,
        element_chances=tuple(f"{e.group}-{e.element}={e.chance:.2f}" for e in tribar.elements),
    )


def _bars_reading(bare: Reading, sighting: Sighting, station: Station) -> Reading:
    """What a set of bars says: the contrast at its own frequency, and at the feature's where that is the same."""
    bars, told, period_um = sighting.bars, sighting.bars_contrast, sighting.site.spec.period_um
    assert bars is not None
    assert period_um is not None
    if told is None:
        return replace(bare, bars_cy_px=bars.v_cy_px)
    at_feature = abs(period_um / (2.0 * station.need.feature_um) - 1.0) < SAME_PERIOD
    return replace(
        bare,
        contrast_at_bars=abs(told.contrast),
        contrast_at_bars_u=told.contrast_u,
        bars_cy_px=told.bars_cy_px,
        reversed=told.contrast < -2.0 * told.contrast_u,
        contrast_at_feature=abs(told.contrast) if at_feature else None,
        contrast_at_feature_u=told.contrast_u if at_feature else None,
    )


SAME_PERIOD = 1e-3


def _astigmatism(sighting: Sighting, feature: float) -> tuple[float, float] | None:
    """A star's difference over directions at the feature: the half range of contrast, and its u."""
    star, curve = sighting.star, sighting.star_curve
    if star is None or star.rings is None or curve is None or not curve.rim_cy_px <= feature <= curve.limit_cy_px:
        return None
    rings = star.rings
    v = rings.v_cy_px
    order = np.argsort(v)
    scale = np.maximum(rings.level * curve.ratio * SQUARE_WAVE, 1e-12)
    range_ = np.hypot(*rings.astigmatic.T) / scale
    u = rings.astigmatic_u if rings.astigmatic_u.ndim == 1 else rings.astigmatic_u.mean(axis=1)
    range_u = float(np.interp(feature, v[order], (u / scale)[order]))
    return float(np.interp(feature, v[order], range_[order])), range_u


def _smallest_feature(curve: Transfer, station: Station, depth_mm: float) -> tuple[float, float, float] | None:
    """Half the period (um, object), u and frequency (cycles/pixel), of the needed contrast; None beyond Nyquist."""
    fall = curve.first_fall_to(station.need.contrast)
    if fall is None or fall[0] > NYQUIST_CY_PX:
        return None
    size = station.object_um_per_px_at(depth_mm) / (2.0 * fall[0])
    return size, size * fall[1] / fall[0], fall[0]
