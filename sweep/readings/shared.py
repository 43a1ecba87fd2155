"""What a patch's stops share: the level at zero frequency of stars and bars, and the noise of neighbours."""

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
