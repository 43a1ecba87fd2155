"""The engraved stops as candidates, and the order in which one is chosen.

The stop with the highest worst contrast among those that keep exposure, gain and noise; where none keeps these, the
highest of all. Stops within 1 % of the highest are a tie. A stop without a sound reading of its own is not chosen.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sweep.choose.chances import NYQUIST_CY_PX, TIE, Worst, chance_meets, chances_best, motion_transfer, worst_at
from sweep.choose.evidence import Outlook, Place, StopEvidence
from sweep.choose.settings import Setting, exposure_limit_ms, setting_for
from sweep.result import CameraNoise, Stop
from sweep.station import Station

CHANCE_ALIKE = 0.01  # chances from a few hundred draws say no more than this
TIE_HOLDS = 0.05  # a tie is used only where the chance to be the best is given up by no more than this


@dataclass(frozen=True, slots=True)
class Candidate:
    """One stop: its setting, its worst place, and what speaks against it."""

    index: int
    evidence: StopEvidence
    setting: Setting
    blur: NDArray[np.float64]
    worst: Worst
    worst_place: Place | None
    why_not: tuple[str, ...]
    chance_meets: float | None
    chance_best: float | None = None

    @property
    def name(self) -> str:
        """The stop as people write it."""
        return f"f/{self.evidence.stop:g}"

    @property
    def meets_need(self) -> bool:
        """Whether every need is kept, with the wanted confidence."""
        return not self.why_not

    @property
    def contrast(self) -> float:
        """The worst contrast, or -inf where it is unknown: for ranking."""
        return -math.inf if self.worst.contrast is None else self.worst.contrast

    @property
    def readable(self) -> bool:
        """Whether the stop may be recommended at all."""
        return self.evidence.sound and self.worst.contrast is not None

    @property
    def f_number(self) -> float:
        """The f-number by light, or as engraved where the light can't tell."""
        return self.evidence.f_number_by_light or self.evidence.stop


@dataclass(frozen=True, slots=True)
class Pick:
    """What was chosen, from which pool, and the stops that tie with it (itself left out)."""

    best: Candidate
    pool: tuple[Candidate, ...]
    tied: tuple[Candidate, ...]


def candidates_of(
    station: Station, evidence: Sequence[StopEvidence], camera: CameraNoise, outlook: Outlook
) -> tuple[Candidate, ...]:
    """Every stop with its setting, its worst contrast and its faults, in the order of `evidence`."""
    found = [_candidate(i, e, station, camera, outlook) for i, e in enumerate(evidence)]
    chances = chances_best([c.worst for c in found], [c.index for c in pool_of(found)])
    return tuple(replace(c, chance_best=chances.get(c.index)) for c in found)


def pool_of(candidates: Sequence[Candidate]) -> tuple[Candidate, ...]:
    """The readable stops that keep exposure, gain and noise; where there are none, all readable ones."""
    readable = tuple(c for c in candidates if c.readable)
    return tuple(c for c in readable if not c.setting.fails) or readable


def pick(candidates: Sequence[Candidate]) -> Pick | None:
    """The stop to recommend; None where no stop has a sound reading.

    A tie goes to the higher chance to meet the need, then to the shorter exposure, as long as the chance to be the
    best is not given up for it.
    """
    pool = pool_of(candidates)
    if not pool:
        return None
    highest = max(c.contrast for c in pool)
    tied = [c for c in pool if c.contrast >= (1 - TIE) * highest]
    surest = max(c.chance_best or 0.0 for c in tied)
    held = [c for c in tied if (c.chance_best or 0.0) >= surest - TIE_HOLDS]
    likely = max(c.chance_meets or 0.0 for c in held)
    likeliest = [c for c in held if (c.chance_meets or 0.0) >= likely - CHANCE_ALIKE]
    best = min(likeliest, key=_by_exposure)
    return Pick(best, pool, tuple(c for c in tied if c is not best))


def as_stop(candidate: Candidate) -> Stop:
    """The candidate as the result's record."""
    place, setting, evidence = candidate.worst_place, candidate.setting, candidate.evidence
    return Stop(
        stop=evidence.stop,
        f_number_by_light=evidence.f_number_by_light,
        f_number_by_light_u=evidence.f_number_by_light_u,
        exposure_ms=setting.exposure_ms,
        gain_db=setting.gain_db,
        worst_target=None if place is None else place.name,
        worst_contrast=candidate.worst.contrast,
        worst_contrast_u=candidate.worst.u,
        snr_db=setting.snr_db,
        meets_need=candidate.meets_need,
        why_not=candidate.why_not,
        chance_meets=candidate.chance_meets,
        chance_best=candidate.chance_best,
        exposure_needed_ms=setting.total_ms,
    )


def _candidate(
    index: int, evidence: StopEvidence, station: Station, camera: CameraNoise, outlook: Outlook
) -> Candidate:
    need = station.need
    setting = setting_for(evidence, station, camera)
    limit = exposure_limit_ms(station)
    exposure = setting.exposure_ms
    if exposure is None and math.isfinite(limit):
        exposure = limit  # unknown exposure: the longest that is allowed blurs most
    blur = motion_transfer(need, exposure, outlook.places)
    worst = worst_at(index, outlook, blur)
    beyond = any(p.feature_cy_px > NYQUIST_CY_PX for p in outlook.places)
    allowed = limit * 10 ** (need.max_gain_db / 20) / setting.total_ms if setting.total_ms else 1.0
    chance = chance_meets(worst, setting, need, allowed, beyond)
    return Candidate(
        index=index,
        evidence=evidence,
        setting=setting,
        blur=blur,
        worst=worst,
        worst_place=None if worst.place is None else outlook.places[worst.place],
        why_not=_why_not(evidence, setting, worst, chance, beyond, station),
        chance_meets=chance,
    )


def _why_not(
    evidence: StopEvidence, setting: Setting, worst: Worst, chance: float | None, beyond: bool, station: Station
) -> tuple[str, ...]:
    """The codes of what speaks against a stop; a need that cannot be judged is unproven."""
    need = station.need
    codes = []
    if setting.fails_exposure:
        codes.append("exposure")
    if setting.fails_noise:
        codes.append("noise")
    if worst.contrast is not None and worst.contrast < need.contrast:
        codes.append("contrast")
    if beyond:
        codes.append("beyond-nyquist")
    if not evidence.sound or worst.contrast is None:
        codes.append("no-reading")
    unknown = setting.total_ms is None or (need.min_snr_db is not None and setting.snr_db is None)
    unsure = chance is not None and chance < need.confidence
    if not codes and (unknown or unsure):
        codes.append("unproven")
    return tuple(codes)


def _by_exposure(candidate: Candidate) -> tuple[float, float]:
    """Shorter exposure first, the wider stop where exposures are unknown or the same."""
    exposure = candidate.setting.exposure_ms
    return (math.inf if exposure is None else exposure, candidate.evidence.stop)
