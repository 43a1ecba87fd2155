"""What the light says of the camera's settings: does the level follow exposure and gain, and stay?

Linearity is judged as EMVA Standard 1288 (Release 4.0 Linear, 2021) does: a straight line through level over
exposure, its deviations relative to each level weighed alike. The lens is not capped, so that the level without light
is the line's own intercept.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from sweep.choose.wording import number
from sweep.measure.linear import Floats
from sweep.probe.bench import Series
from sweep.probe.records import Figures, Finding, Verdict, hidden, percent
from sweep.probe.run import SETTLE_MOST, Observed
from sweep.station import Camera as Stated

FOLLOWS = 0.3
COMES_BACK = 0.1
DRIFT_FRAMES = 20
DRIFT_GOOD, DRIFT_FIT = 0.01, 0.03
LINEAR_GOOD, LINEAR_FIT = 0.01, 0.03
LOWEST_SHARE = 0.05
LEVEL_SHARE = 0.002  # of a level, by which it may be off
ROUNDING = 0.15  # of a code step, by which the mean of little noise may be off
POWERS = np.arange(0.25, 1.61, 0.01)
BENT_POWER = 0.06
GAIN_GOOD_DB = 0.5
LEAST_GOOD_MS = 1.0
LEAST_OFF_MS = 0.001
LIGHT_UNSURE = 0.001
ZERO_SHARE = 0.05
BELOW_ZERO = 0.002
AUTOMATICS = "the automatics"
EXPOSURES = "exposures that are not what they say"
DARK_LEVELS = "dark levels that are cut off at 0"
BY_HAND = (
    "Exposure and gain cannot be set from here: set and lock them on the camera, everything automatic off. Half the "
    "exposure must give half the level above black."
)
COARSE = 0.1
LIGHT_OFF = 0.1
SAME_LIGHT = 0.1
APART = 1.05


@dataclass(frozen=True, slots=True)
class Response:
    """Level over exposure: level = black + slope exposure, and how far the levels are off it.

    `deviation`: the largest, relative to the level above black, of levels above a twentieth of the highest, at
    `at_ms`; `power`: of the exposure that describes the levels best, 1 where they are proportional; `rise`: how much of
    the highest level the exposure makes.
    """

    black_dn: float
    slope_dn_ms: float
    deviation: float
    at_ms: float
    power: float
    rise: float

    def light_ms(self, level_dn: float) -> float:
        """The exposure that a level stands for."""
        return (level_dn - self.black_dn) / self.slope_dn_ms


def response_of(seen: Observed) -> Response | None:
    """Fit level over exposure; None where fewer than four exposures were taken."""
    exposure, level = _points(seen)
    if np.unique(exposure).size < 4:
        return None
    weight = 1.0 / (LEVEL_SHARE * np.maximum(level, 0.01 * level.max()) + ROUNDING * seen.codes.step)

    def line(power: float) -> tuple[Floats, float]:
        design = np.column_stack([np.ones(exposure.size), exposure**power])
        solved = np.linalg.lstsq(design * weight[:, None], level * weight, rcond=None)[0]
        return solved, float((((level - design @ solved) * weight) ** 2).sum())

    (black, slope), _ = line(1.0)
    light = slope * exposure
    high = light > LOWEST_SHARE * light.max()
    off = np.maximum(np.abs(level - black - light) - ROUNDING * seen.codes.step, 0.0)
    off = off[high] / np.maximum(light[high], 1e-9) if slope > 0 else np.array([np.inf])
    power = min(POWERS, key=lambda p: line(float(p))[1])
    worst = int(np.argmax(off))
    rise = float((level[-1] - level.min()) / max(level[-1], 1e-9) / (1 - exposure[0] / exposure[-1]))
    at_ms = float(exposure[high][worst]) if slope > 0 else float(exposure[-1])
    return Response(float(black), float(slope), float(off[worst]), at_ms, float(power), rise)


def _points(seen: Observed) -> tuple[Floats, Floats]:
    """Exposures, ms, as read back, in order, and their levels; what clips at zero tells nothing."""
    series = [s for s in (seen.rest, seen.drop, *seen.ladder, *seen.fine, seen.again) if s and not _at_zero(s)]
    points = sorted((s.exposure_ms, _level(s)) for s in series if s.exposure_ms is not None and s.exposure_ms > 0)
    return np.array([e for e, _ in points]), np.array([y for _, y in points])


def coarse_step(seen: Observed) -> float | None:
    """About how far apart exposures are in truth, ms, where different ones give the same light; else None."""
    exposure, level = _points(seen)
    slope = (level[-1] - level[0]) / (exposure[-1] - exposure[0])
    pairs = [
        k
        for k in range(len(level) - 1)
        if exposure[k + 1] > APART * exposure[k]
        and abs(level[k + 1] - level[k]) < SAME_LIGHT * slope * (exposure[k + 1] - exposure[k])
    ]
    if slope <= 0 or len(pairs) < 2:
        return None
    jumps = np.diff(level)
    jump = float(jumps[jumps > SAME_LIGHT * jumps.max()].min())
    # The shortest exposure is taken to be one step.
    return float(exposure[-1] / (round((level[-1] - level[0]) / jump) + 1))


def _at_zero(series: Series) -> bool:
    return series.settled[-1].zero_share > ZERO_SHARE


def _level(series: Series) -> float:
    """Level at a setting; of a change whose every frame is kept, the last ones."""
    return float(series.levels[-4:].mean()) if series.skip == 0 else series.level


def automatics(seen: Observed, response: Response | None, rippling: bool) -> Finding:
    """Does the level follow the exposure, and then stay where it is?"""
    rest = seen.rest.levels
    drift = max(_drift(rest[:DRIFT_FRAMES]), _drift(rest[-DRIFT_FRAMES:]))
    figures: Figures = {"level_change_at_rest": drift, "follows_exposure": None if response is None else response.rise}
    off = "Switch off automatic exposure, gain, brightness and backlight correction on the camera, then probe again."
    if response is not None and (not seen.follows or response.rise < FOLLOWS):
        found = "the level does not follow the exposure"
        return Finding("automatics", "Automatics", "not fit", found, off, figures)
    if (back := _comes_back(seen)) > COMES_BACK:
        figures["comes_back"] = back
        found = f"after a change {percent(back)} of the level comes back by itself"
        return Finding("automatics", "Automatics", "not fit", found, off, figures)
    stays = f"{DRIFT_FRAMES} frames at rest within {percent(drift)}"
    if drift > DRIFT_GOOD and not rippling:
        verdict: Verdict = "take care" if drift < DRIFT_FIT else "not fit"
        to_do = f"{off} If all is off: is the lamp warm, does anything move?"
        return Finding("automatics", "Automatics", verdict, stays, to_do, figures)
    if not seen.settable:
        return Finding("automatics", "Automatics", "not told", stays, BY_HAND, figures)
    return Finding("automatics", "Automatics", "good", f"none seen; {stays}", "", figures)


def _drift(levels: Floats) -> float:
    """Relative change along a straight line through the levels."""
    slope = np.polynomial.polynomial.polyfit(np.arange(levels.size), levels, 1)[1] if levels.size > 2 else 0.0
    return float(abs(slope) * levels.size / max(levels.mean(), 1e-9))


def _comes_back(seen: Observed) -> float:
    """Part of a drop of level that is made good again without anything being set."""
    if seen.drop is None:
        return 0.0
    levels = seen.drop.levels
    lowest = int(np.argmin(levels[: SETTLE_MOST + 1]))
    fall = seen.rest.level - levels[lowest]
    return float((levels[-3:].mean() - levels[lowest]) / fall) if fall > 0.05 * seen.rest.level else 0.0


def linearity(seen: Observed, response: Response | None, spoilt: str, ripple: float) -> Finding:
    """Is the level, less black, proportional to the exposure? `spoilt`: what keeps that from being told."""
    name = "Linearity"
    if not seen.settable:
        return Finding("linearity", name, "not told", "needs several exposures", BY_HAND)
    if spoilt or response is None:
        return hidden("linearity", name, spoilt or DARK_LEVELS)
    figures: Figures = {
        "deviation": response.deviation,
        "deviation_at_ms": response.at_ms,
        "response_exponent": response.power,
    }
    found = f"level over exposure within {percent(response.deviation)} of a line"
    if response.deviation <= LINEAR_GOOD:
        return Finding("linearity", name, "good", found, "", figures)
    if response.deviation <= 1.5 * ripple:
        return Finding("linearity", name, "not told", f"{found}, in pulsing light", "Probe in steady light.", figures)
    if abs(response.power - 1) > BENT_POWER and response.deviation > LINEAR_FIT:
        found = f"off a line by {percent(response.deviation)}, as by a gamma of {1 / response.power:.2f}"
        to_do = "Set the camera's gamma to 1 and contrast curves off, or state camera.response in the station file."
        return Finding("linearity", name, "not fit", found, to_do, figures)
    verdict: Verdict = "take care" if response.deviation <= LINEAR_FIT else "not fit"
    to_do = f"The level is off most at {number(response.at_ms)} ms. Use few different exposures; check gamma and black."
    return Finding("linearity", name, verdict, found, to_do, figures)


def black(seen: Observed, response: Response | None, stated: Stated, spoilt: str) -> Finding | None:
    """The level without light, and whether it clips at zero; None where it cannot be told from the exposures."""
    if response is None or spoilt or stated.response != "linear":
        return None
    darkest = min(seen.ladder, key=lambda s: s.exposure_ms or 0.0)
    zero = max(sample.zero_share for sample in darkest.settled)
    figures: Figures = {"black_level_dn": response.black_dn, "zero_share": zero}
    cut = zero > ZERO_SHARE and seen.codes.container > 8
    if cut or response.black_dn < -max(2.0 * seen.codes.step, BELOW_ZERO * seen.codes.top_dn):
        found = f"{percent(zero)} of the pixels are at 0 in the shortest exposure" if cut else "below 0, and so cut off"
        to_do = "Raise the camera's black level (offset) until no pixel is 0 without light: else dark levels read high."
        return Finding("black", "Black level", "take care", found, to_do, figures)
    found = f"{max(response.black_dn, 0.0):.1f} DN, by the line through the levels"
    return Finding("black", "Black level", "good", found, "", figures)


def exposure(seen: Observed, response: Response | None, coarse_ms: float | None, spoilt: str) -> Finding:
    """Which exposures can be set, and are they what the light says?"""
    name = "Exposure"
    if not seen.settable:
        return Finding("exposure", name, "take care", "cannot be set from here", BY_HAND)
    step_ms, least_ms, used_ms = exposure_step(seen.readbacks), seen.least_ms, seen.rest.exposure_ms or 0.0
    figures: Figures = {"least_ms": least_ms, "step_ms": step_ms, "used_ms": used_ms}
    if least_ms is None:
        to_do = "Keep to the exposures that it takes."
        return Finding("exposure", name, "take care", "shorter than 1 ms is refused", to_do, figures)
    found = f"from {number(least_ms)} ms, in steps {'above 1' if step_ms is None else f'of {number(step_ms)}'} ms"
    if coarse_ms is not None:
        figures["step_by_light_ms"] = coarse_ms
        found += f", but by light in steps of about {number(coarse_ms)} ms"
        to_do = (
            f"State camera.exposure_step_ms = {number(coarse_ms)}, and dim the light until exposures are long to it."
        )
        return Finding(
            "exposure", name, "not fit" if coarse_ms > COARSE * used_ms else "take care", found, to_do, figures
        )
    if response is not None and not spoilt and not _at_zero(seen.ladder[-1]):
        by_light = response.light_ms(seen.ladder[-1].level)
        figures |= {"least_by_light_ms": by_light, "step_by_light_ms": step_by_light(seen.fine, response)}
        rounding_ms = 2 * ROUNDING * seen.codes.step / response.slope_dn_ms
        if abs(by_light - least_ms) > max(LIGHT_OFF * least_ms, LEAST_OFF_MS, LIGHT_UNSURE * used_ms, rounding_ms):
            found += f"; by light the least is {number(by_light)} ms"
            to_do = f"Stay well above {number(max(by_light, least_ms))} ms: shorter exposures are not what they say."
            return Finding("exposure", name, "take care", found, to_do, figures)
    if step_ms is None or step_ms > COARSE * used_ms:
        to_do = (
            "Only few exposures can be had, so levels are met roughly: trim them by the light."
            if step_ms is None
            else f"One step is {percent(step_ms / used_ms)} of the {number(used_ms)} ms used here: dim the light for "
            "longer exposures, and state camera.exposure_step_ms."
        )
        return Finding("exposure", name, "take care", found, to_do, figures)
    if least_ms > LEAST_GOOD_MS:
        to_do = f"Shorter than {number(least_ms)} ms is not to be had: dim the light for the wide stops."
        return Finding("exposure", name, "take care", found, to_do, figures)
    return Finding("exposure", name, "good", found, "", figures)


def exposure_step(readbacks: Sequence[tuple[float, float]]) -> float | None:
    """The smallest step between exposures read back; None where all that was asked came back as one."""
    told = sorted({round(told_ms, 6) for _, told_ms in readbacks})
    steps = [b - a for a, b in pairwise(told) if b - a > 1e-6]
    return min(steps) if steps else None


def step_by_light(fine: Sequence[Series], response: Response) -> float | None:
    """The smallest difference that the light shows between exposures asked close together; None where it shows none."""
    light = sorted(response.light_ms(s.level) for s in fine)
    spread = [float(np.ptp([sample.level for sample in s.settled])) / response.slope_dn_ms for s in fine]
    noise = 4 * max(spread, default=0.0) + 0.01 * max(light, default=0.0)
    jumps = [b - a for a, b in pairwise(light) if b - a > noise]
    return min(jumps) if jumps else None


def gain(seen: Observed, response: Response | None, spoilt: str) -> Finding:
    """Does a gain that is asked for in dB give as much light?"""
    name = "Gain"
    base, *others = seen.gains
    if all(s.gain_db is None or abs(s.gain_db - (base.gain_db or 0.0)) < 0.01 for s in others):
        return Finding("gain", name, "good", "cannot be set in dB: left at its least", "", {"settable": 0})
    if response is None or spoilt:
        return hidden("gain", name, spoilt or DARK_LEVELS)
    low = base.level - response.black_dn
    figures: Figures = {"settable": 1}
    told, off = [], 0.0
    for s in others:
        asked = (s.gain_db or 0.0) - (base.gain_db or 0.0)
        high = s.level - response.black_dn
        by_light = 20 * math.log10(high / low) if high > 0 and low > 0 else None
        figures[f"light_db_at_{asked:g}_db"] = by_light
        told.append(f"{asked:g} dB give {'nothing' if by_light is None else f'{by_light:.2f} dB'}")
        off = max(off, math.inf if by_light is None else abs(by_light - asked))
    found = f"by light, {' and '.join(told)}"
    if off > GAIN_GOOD_DB:
        to_do = "Do not count on gain: leave need.max_gain_db at 0."
        return Finding("gain", name, "take care", found, to_do, figures)
    return Finding("gain", name, "good", found, "", figures)


def settling(seen: Observed, locked: bool) -> Finding:
    """How many frames after a change still show the old setting."""
    frames = seen.settled_frames or 0
    period_ms = 1000 * float(np.median(np.diff([s.arrived_s for s in seen.rest.samples])))
    figures: Figures = {"settling_frames": frames, "settling_ms": frames * period_ms}
    if not locked:
        return hidden("settling", "Settling", AUTOMATICS, figures)
    if frames > SETTLE_MOST:
        to_do = "The level goes on changing after an exposure was set: look for smoothing over frames or automatics."
        return Finding("settling", "Settling", "not fit", f"not within {SETTLE_MOST} frames", to_do, figures)
    found = (
        "the first frame after a change shows it"
        if frames == 0
        else f"{frames} frame{'s' * (frames > 1)} after a change still show{'s' * (frames == 1)} the old setting"
    )
    return Finding("settling", "Settling", "good", found, "", figures)
