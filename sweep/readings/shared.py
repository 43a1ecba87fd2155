"""What a patch's stops share: the level at zero frequency of stars and bars, the noise of neighbours, full wells."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sweep.measure.bars import bars_contrasts
from sweep.measure.noise import NoisePoint
from sweep.measure.star_level import star_curves
from sweep.readings.sightings import Sighting

_CORRELATION_MATTERS = 0.03


def with_star_curves(sightings: list[Sighting]) -> list[Sighting]:
    """The sightings with each star's transfer, whose level at zero frequency all its stops share."""
    out = list(sightings)
    sites = {id(s.site): s.site for s in sightings if s.kind == "star"}
    for site in sites.values():
        places = [i for i, s in enumerate(out) if s.site is site]
        for i, curve in zip(places, star_curves([out[i].star for i in places], site.spec.modulation), strict=True):
            out[i] = replace(out[i], star_curve=curve)
    return out


def with_bars_contrasts(sightings: list[Sighting]) -> list[Sighting]:
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


def with_shared_noise(sightings: list[Sighting], points: Sequence[NoisePoint]) -> list[Sighting]:
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


def without_full_wells(sightings: list[Sighting]) -> list[Sighting]:
    """The sightings, those edges called clipped whose light side can't rise further though no code is at the top.

    Noise rises with light until wells are full, then it falls (EMVA 1288 finds saturation by it): there the light side
    is steadier than the dark one.
    """
    return [_clipped(s) if _at_full_well(s) else s for s in sightings]


def _at_full_well(sighting: Sighting) -> bool:
    points = sorted(sighting.noise, key=lambda p: p.mean_dn)
    if sighting.kind != "edge" or len(points) < 2 or min(p.dof for p in points) < _ENOUGH_DOF:
        return False
    dark, light = points[0], points[-1]
    return light.mean_dn > 2.0 * dark.mean_dn and light.variance_dn2 < _STEADY * dark.variance_dn2


_ENOUGH_DOF, _STEADY = 100.0, 0.25


def _clipped(sighting: Sighting) -> Sighting:
    assert sighting.edge is not None
    assert sighting.edge.curve is not None
    light_side = sighting.edge.curve.distance(sighting.site.sites.x, sighting.site.sites.y) > 0
    why = (*(code for code in sighting.why_not if code != "frames-saturated"), "frames-saturated")
    share = max(sighting.saturated_fraction, float(np.mean(light_side)))
    return replace(sighting, ok=False, why_not=why, saturated_fraction=share)
