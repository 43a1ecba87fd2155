"""How the worst place fares at each stop: contrast, spread, and the chances to meet the need and to be the best.

The worst contrast is a minimum over places whose errors hang together, so its spread is taken from joint draws, one
minimum a draw (propagation of distributions: JCGM 101:2008). Conformity follows JCGM 106:2012: a stop meets the need
when the probability that it does reaches the wanted confidence. A moving part blurs by |sinc(b v)|, b = its way during
the exposure in pixels, v = the feature's frequency in cycles per pixel, the motion taken as across the bars.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from sweep.choose.evidence import Outlook, Place
from sweep.choose.settings import Setting
from sweep.station import Need

TIE = 0.01  # stops whose worst contrasts lie within 1 % of the highest are equally good
NYQUIST_CY_PX = 0.5


@dataclass(frozen=True, slots=True)
class Worst:
    """The worst place at one stop, motion blur included; `by_draw` holds one minimum for each draw."""

    place: int | None
    contrast: float | None
    u: float | None
    by_draw: NDArray[np.float64]


def worst_at(stop_index: int, outlook: Outlook, blur: NDArray[np.float64]) -> Worst:
    """The lowest contrast over the places at one stop, unknown where any place is.

    `blur` (places,) is the motion's share of the transfer.
    """
    signed = outlook.contrast[stop_index]
    draws = outlook.draws[:, stop_index, :]
    if not np.all(np.isfinite(signed)) or not np.all(np.isfinite(draws)):
        return Worst(None, None, None, np.full(len(outlook.draws), np.nan))
    contrast = np.maximum(signed * blur, 0.0)
    by_draw = np.maximum(draws * blur, 0.0).min(axis=1)
    # Where several places are lost the most reversed of them is named.
    place = int(np.argmin(signed * blur)) if contrast.min() <= 0 else int(np.argmin(contrast))
    spread = float(by_draw.std(ddof=1)) if len(by_draw) > 1 else 0.0
    return Worst(place, float(contrast.min()), spread, by_draw)


def motion_transfer(need: Need, exposure_ms: float | None, places: Sequence[Place]) -> NDArray[np.float64]:
    """What the part's motion during the exposure leaves of each place's contrast, (places,)."""
    if not need.speed_mm_s or exposure_ms is None:
        return np.ones(len(places))
    way_um = need.speed_mm_s * exposure_ms
    return np.array([abs(np.sinc(way_um / p.object_um_per_px * p.feature_cy_px)) for p in places])


def chance_meets(worst: Worst, setting: Setting, need: Need, allowed_factor: float, beyond: bool) -> float | None:
    """The probability that a stop keeps contrast, exposure and noise needs; None where its contrast is unknown.

    `allowed_factor` is the exposure and gain allowed, over the exposure needed at 0 dB; `beyond` says that the
    feature lies beyond Nyquist at some place.
    """
    if worst.contrast is None:
        return None
    if beyond:
        return 0.0
    chance = float(np.mean(worst.by_draw >= need.contrast))
    chance *= _chance_above(math.log(allowed_factor), setting.total_rel_u, kept=not setting.fails_exposure)
    if need.min_snr_db is not None and setting.snr_db is not None:
        chance *= _chance_above(setting.snr_db - need.min_snr_db, setting.snr_u_db, kept=not setting.fails_noise)
    return chance


def chances_best(worsts: Sequence[Worst], pool: Sequence[int]) -> dict[int, float]:
    """For each stop of the pool, the probability that no other stop of the pool is better by more than a tie."""
    if not pool:
        return {}
    draws = np.stack([worsts[i].by_draw for i in pool])
    best = draws.max(axis=0)
    return {i: float(np.mean(row >= (1 - TIE) * best)) for i, row in zip(pool, draws, strict=True)}


def _chance_above(margin: float, u: float, *, kept: bool) -> float:
    """The probability that a quantity lies above its limit, normal spread `u`; without spread what holds, holds."""
    if u <= 0:
        return 1.0 if kept else 0.0
    return float(ndtr(margin / u))
