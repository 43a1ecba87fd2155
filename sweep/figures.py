"""From what a patch says to the figures of a reading: half-modulation frequency, contrast at the feature, smallest feature."""

from sweep.measure.mtf import Transfer
from sweep.readings import Sighting
from sweep.result import Reading
from sweep.station import Station

NYQUIST_CY_PX = 0.5


def reading_of(sighting: Sighting, station: Station) -> Reading:
    """The reading of one patch at one stop, from the pixels alone; figures only where it is sound."""
    target = station.targets[sighting.site.target]
    feature = station.feature_cy_px_at(target.depth_mm)
    base = {
        "stop": sighting.stop,
        "target": target.name,
        "patch": sighting.site.patch,
        "kind": sighting.kind,
        "depth_mm": target.depth_mm,
        "saturated_fraction": sighting.saturated_fraction,
    }
    why = sighting.why_not
    if sighting.ok and sighting.kind != "flat" and feature > NYQUIST_CY_PX:
        why = (*why, "beyond-nyquist")
    curve = sighting.transfer
    if not sighting.ok or curve is None:
        return Reading(ok=sighting.ok, why_not=why, **base)  # type: ignore[arg-type]
    half = curve.first_fall_to(0.5)
    at_feature = curve.at(feature) if feature <= 1.0 else None
    smallest = _smallest_feature(curve, station, target.depth_mm)
    return Reading(
        ok=True,
        why_not=why,
        mtf50_cy_px=half[0] if half else None,
        mtf50_cy_px_u=half[1] if half else None,
        contrast_at_feature=abs(at_feature[0]) if at_feature else None,
        contrast_at_feature_u=at_feature[1] if at_feature else None,
        reversed=bool(at_feature and at_feature[0] < -2.0 * at_feature[1]),
        smallest_feature_um=smallest[0] if smallest else None,
        smallest_feature_um_u=smallest[1] if smallest else None,
        **base,  # type: ignore[arg-type]
    )


def _smallest_feature(curve: Transfer, station: Station, depth_mm: float) -> tuple[float, float] | None:
    """Half the period (um, object) at which the curve first falls to the needed contrast; None beyond Nyquist."""
    fall = curve.first_fall_to(station.need.contrast)
    if fall is None or fall[0] > NYQUIST_CY_PX:
        return None
    size = station.object_um_per_px_at(depth_mm) / (2.0 * fall[0])
    return size, size * fall[1] / fall[0]
