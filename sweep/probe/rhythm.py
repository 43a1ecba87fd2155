"""What the times of arrival and the levels over time say: repeated and lost frames, rate, pulsing light, drift."""

from collections.abc import Sequence
from itertools import pairwise

import numpy as np

from sweep.choose.wording import listed, number
from sweep.measure.linear import Floats
from sweep.probe.bench import Sample
from sweep.probe.light import AUTOMATICS
from sweep.probe.pulse import ROLLING_TURNS, Ripple, evened, find_ripple
from sweep.probe.records import Figures, Finding, Verdict, hidden, percent
from sweep.probe.run import Observed

LOST_PERIODS = 1.6
REPEATED_FIT = 0.34
SLOWER = 0.9
SHORT_OF_EXPOSURE = 0.97
RIPPLE_GOOD = 0.003
PULSES = "the pulsing light"
LEAST_LEFT = 0.1
DRIFT_GOOD_A_MIN = 0.005  # a lamp that has warmed up (common practice, no source)


def periods_s(samples: Sequence[Sample]) -> Floats:
    """(n - 1,) times between frames."""
    return np.diff([sample.arrived_s for sample in samples])


def frames_finding(seen: Observed, frames: int) -> Finding:
    """Does each frame come once, and none get lost?"""
    runs = [seen.rest.samples, *(s.settled for s in seen.pulses)]
    pairs = [pair for run in runs for pair in pairwise(run)]
    # A frame without any light or with nothing but light may be the same again and yet be another.
    repeated = sum(a.digest == b.digest and a.level > 0 for a, b in pairs)
    left_out = int(seen.device.get("frames_repeated") or 0)
    share = max(repeated / max(len(pairs), 1), left_out / max(frames + left_out, 1))
    intervals = periods_s(seen.rest.samples)
    lost = int(np.sum(intervals > LOST_PERIODS * np.median(intervals)))
    figures: Figures = {"repeated_share": share, "late_frames": lost, "frames_at_rest": len(seen.rest.samples)}
    if share > 0:
        verdict: Verdict = "take care" if share < REPEATED_FIT else "not fit"
        found = f"{percent(share)} of the frames repeat the one before, bit for bit"
        to_do = "They fake low noise. Read the camera at its own rate; no stream must be filled up to another one."
        return Finding("frames", "Frames", verdict, found, to_do, figures)
    if lost > 0.05 * len(intervals):
        found = f"{lost} of {len(intervals)} frames came late or were lost"
        to_do = "Use a faster cable or port, a smaller picture or a lower frame rate; close what else uses the bus."
        return Finding("frames", "Frames", "take care", found, to_do, figures)
    return Finding("frames", "Frames", "good", f"each of {len(intervals) + 1} at rest is new", "", figures)


def rate_finding(seen: Observed, locked: bool) -> Finding:
    """How many frames a second, and what a long exposure does to it."""
    period_s = float(np.median(periods_s(seen.rest.samples)))
    rate_hz = 1 / max(period_s, 1e-6)
    figures: Figures = {"frame_rate_hz": rate_hz, "exposure_ms": seen.rest.exposure_ms}
    found = f"{number(rate_hz)} frames a second"
    slow = [(s.exposure_ms, 1000 * float(np.min(periods_s(s.settled)))) for s in seen.slow if s.exposure_ms is not None]
    if slow and locked:
        exposure_ms, long_ms = max(slow)
        long_hz = 1000 / max(long_ms, 1e-3)
        figures |= {"long_exposure_ms": exposure_ms, "frame_rate_at_long_exposure_hz": long_hz}
        if float(np.median([ms / exposed_ms for exposed_ms, ms in slow])) < SHORT_OF_EXPOSURE:
            found += f"; {number(long_hz)} at {number(exposure_ms)} ms, which cannot be"
            to_do = f"Exposures above {long_ms:.0f} ms are not what they say: keep below, or lower the frame rate."
            return Finding("rate", "Frame rate", "take care", found, to_do, figures)
        if long_hz < SLOWER * rate_hz:
            found += f", {number(long_hz)} at {number(exposure_ms)} ms"
    return Finding("rate", "Frame rate", "good", found, "", figures)


def ripple_of(seen: Observed, black_dn: float) -> Ripple | None:
    """The light's ripple, at the short exposure where there is one."""
    series = list(seen.pulses)
    if not series or series[0].exposure_ms == seen.rest.exposure_ms:
        series.insert(0, seen.rest)
    intervals = periods_s(series[0].settled)
    period_s = max(float(intervals[intervals < LOST_PERIODS * np.median(intervals)].mean()), 1e-6)
    time_s = [evened(np.array([sample.arrived_s for sample in s.settled]), period_s) for s in series]
    bands = [sample.bands - black_dn for s in series for sample in s.settled]
    return find_ripple(np.concatenate(time_s), np.array(bands), 1 / period_s)


def lamp_swing(ripple: Ripple | None, seen: Observed) -> float:
    """The lamp's own ripple, relative: an exposure evens it out by sinc(frequency x exposure)."""
    if ripple is None or ripple.amplitude < RIPPLE_GOOD:
        return 0.0
    exposure_s = ((seen.pulses[0] if seen.pulses else seen.rest).exposure_ms or 0.0) / 1000
    left = abs(float(np.sinc((ripple.hz or 0.0) * exposure_s)))
    return ripple.amplitude / max(left, LEAST_LEFT)


def flicker(ripple: Ripple | None, seen: Observed, locked: bool) -> Finding:
    """Does the lamp pulse, and how often a second?"""
    if not locked:
        return hidden("flicker", "Flicker", AUTOMATICS)
    rate_hz = 1 / max(float(np.median(periods_s(seen.rest.samples))), 1e-6)
    if ripple is None:
        to_do = "Give more light, then probe again."
        return Finding("flicker", "Flicker", "not told", "too little light to tell", to_do)
    figures: Figures = {
        "ripple": ripple.amplitude,
        "lamp_ripple": lamp_swing(ripple, seen),
        "flicker_hz": ripple.hz,
        "stripes": ripple.turns,
        "frame_rate_hz": rate_hz,
        "might_be_hz": None if not ripple.others_hz else listed([number(f) for f in ripple.others_hz]),
    }
    if ripple.amplitude < RIPPLE_GOOD:
        unseen = "" if seen.pulses else f"; multiples of {number(rate_hz)} Hz stay unseen"
        found = f"none above {percent(max(ripple.amplitude, 0.0005))} of the light{unseen}"
        return Finding("flicker", "Flicker", "good", found, "", figures)
    swing = f"the light swings by ±{percent(ripple.amplitude)}"
    if ripple.hz is None:
        to_do = "Look for what changes the light: daylight, a loose lamp, its supply; or automatics in the camera."
        return Finding("flicker", "Flicker", "take care", f"{swing}, in no rhythm", to_do, figures)
    found = f"{swing} at {ripple.hz:.1f} Hz"
    if ripple.others_hz:
        found += f" ({listed([f'{f:.1f}' for f in ripple.others_hz])} Hz would explain it as well)"
    if ripple.turns > ROLLING_TURNS:
        found += f", in {ripple.turns:.1f} stripes: the shutter rolls"
    to_do = (
        f"Use a steady (direct-current) lamp, or exposures of whole periods of {number(1000 / ripple.hz)} ms: state "
        f"need.flicker_hz = {ripple.hz:.0f}."
    )
    return Finding("flicker", "Flicker", "take care", found, to_do, figures)


def drift(seen: Observed, pulsing: bool, locked: bool) -> Finding:
    """Does the level creep over the whole probe, as it does while lamp and camera warm up?"""
    samples = [*seen.rest.samples, *(seen.again.settled if seen.again is not None else ())]
    time_min = np.array([sample.arrived_s for sample in samples]) / 60
    level = np.array([sample.level for sample in samples])
    mean = max(float(level.mean()), 1e-9)
    centred = time_min - time_min.mean()
    a_min = float(centred @ level / max(float(centred @ centred), 1e-12) / mean)
    rest = level / mean - 1 - a_min * centred
    # Frames of one series share the lamp's wander: as few independent ones as there are series, and a few more.
    u = float(np.std(rest) / np.sqrt(max(float(centred @ centred), 1e-12)) * np.sqrt(len(samples) / 8))
    span_s = 60 * float(np.ptp(time_min))
    figures: Figures = {"drift_a_minute": a_min, "drift_a_minute_u": u, "over_s": span_s}
    found = f"{100 * a_min:+.2g} ± {200 * u:.1g} % a minute, over {span_s:.0f} s"
    if not locked:
        return hidden("drift", "Drift", AUTOMATICS, figures)
    if abs(a_min) - 2 * u <= DRIFT_GOOD_A_MIN:
        return Finding("drift", "Drift", "good", found, "", figures)
    if pulsing:
        return hidden("drift", "Drift", PULSES, figures)
    to_do = "Let lamp and camera warm up for 20 to 30 minutes, then probe again; is daylight kept out?"
    return Finding("drift", "Drift", "take care", found, to_do, figures)
