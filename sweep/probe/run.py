"""The course of a probe: what is set and taken, in which order. Nothing is judged here.

The exposures change in no order of size, so that a drifting lamp does not pass for a bent response.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from sweep.cameras import Camera, Facts
from sweep.probe.bench import Bench, Series
from sweep.probe.reach import START_MS, Codes, Even, even_blocks, find_reach
from sweep.probe.records import Tell
from sweep.station import Camera as Stated

MEAN_FRAMES = 8
REST_FRAMES = 40
REST_MOST_FRAMES = 160
REST_S = 2.0
AGAIN_FRAMES = 10
STEP_FRAMES = 12
LEVEL_FRAMES = 4
DROP = 4.0
LADDER = (2.0, 8.0, 32.0, 16.0)
FINE = (2.0, 2.5, 3.0, 2.25, 2.75)
LEAST_MS = (0.001, 0.01, 0.1, 1.0)
ASKED_MORE_MS = (0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0)
GAINS_DB = (6.0, 12.0)
PULSE_MS = 7.0
"""Longest exposure to look for a pulsing lamp at: over a whole period of 100 or 120 Hz it would even out."""
PULSE_FRAMES = 20
SHIFTS = 6
SHIFT_FRAMES = 3
SETTLE_SHARE = 0.02
SETTLE_MOST = 8


@dataclass(slots=True)
class Observed:
    """All that was seen. Series are empty, or None, where the camera's exposure cannot be set.

    `follows`: whether the light followed the exposure at all; `mean`: one picture, (rows, columns); `rest` and
    `again`: at the exposure for the wanted tone, at the beginning and the end; `drop`, `back`: all frames after a
    change to a quarter and back; `least_ms`: shortest exposure taken; `readbacks`: asked and read back;
    `slow`: at exposures longer than a frame; `pulses`: at one short exposure, at odd moments.
    """

    device: Facts
    settable: bool
    follows: bool
    codes: Codes
    even: Even
    mean: NDArray[np.float32]
    rest: Series
    again: Series | None = None
    drop: Series | None = None
    back: Series | None = None
    settled_frames: int | None = None
    least_ms: float | None = None
    ladder: list[Series] = field(default_factory=list)
    fine: list[Series] = field(default_factory=list)
    gains: list[Series] = field(default_factory=list)
    readbacks: list[tuple[float, float]] = field(default_factory=list)
    slow: list[Series] = field(default_factory=list)
    pulses: list[Series] = field(default_factory=list)


def observe(camera: Camera, stated: Stated, tell: Tell) -> tuple[Observed, Bench]:
    """Take all that a probe needs. Raises CameraError where the camera fails on the way."""
    tell("the light", 0.0)
    bench = Bench(camera, stated, START_MS)
    reach = find_reach(bench, stated)
    mean = bench.mean_plane(MEAN_FRAMES)
    even = even_blocks(mean, bench.side, reach.codes.top_dn)
    bench.watch(even.blocks, even.bright)
    tell("the camera at rest", 0.25)
    rest = _at_rest(bench)
    seen = Observed(camera.facts(), bench.settable, reach.follows, reach.codes, even, mean, rest)
    if bench.settable and even.blocks:
        _vary(bench, reach.exposure_ms, seen, tell)
    seen.device = camera.facts()
    return seen, bench


def _at_rest(bench: Bench) -> Series:
    series = bench.series(REST_FRAMES)
    samples = list(series.samples)
    while samples[-1].arrived_s - samples[0].arrived_s < REST_S and len(samples) < REST_MOST_FRAMES:
        samples += bench.series(1).samples
    return Series(series.asked_ms, series.exposure_ms, series.asked_db, series.gain_db, series.set_s, tuple(samples), 0)


def _vary(bench: Bench, exposure_ms: float, seen: Observed, tell: Tell) -> None:
    tell("changes of exposure", 0.37)
    seen.drop = bench.series(STEP_FRAMES, exposure_ms / DROP, skip=0)
    seen.back = bench.series(STEP_FRAMES, exposure_ms, skip=0)
    unrest = float(np.std(seen.rest.levels) / max(seen.rest.level, 1e-9))
    seen.settled_frames = max(unsettled(series.levels, unrest) for series in (seen.drop, seen.back))
    bench.skip = min(seen.settled_frames, SETTLE_MOST // 2) + 1
    tell("linearity", 0.45)
    seen.ladder = [bench.series(LEVEL_FRAMES, exposure_ms / part) for part in LADDER]
    seen.least_ms = _least(bench)
    if seen.least_ms is not None:
        seen.ladder.append(bench.series(LEVEL_FRAMES, seen.least_ms))
        short_ms = max(seen.least_ms, exposure_ms / 64)
        seen.fine = [bench.series(2, short_ms * part) for part in FINE if short_ms * part < exposure_ms]
    tell("the exposure's steps", 0.6)
    for more_ms in (0.0, *ASKED_MORE_MS):
        asked_ms = exposure_ms + more_ms
        if (told_ms := bench.set(asked_ms)) is not None:
            seen.readbacks.append((asked_ms, told_ms))
    tell("gain", 0.64)
    seen.gains = [bench.series(LEVEL_FRAMES, exposure_ms / DROP, gain_db) for gain_db in (0.0, *GAINS_DB)]
    tell("a pulsing lamp", 0.72)
    _look_for_pulses(bench, exposure_ms, seen)
    tell("drift", 0.95)
    seen.again = bench.series(AGAIN_FRAMES, exposure_ms)


def _least(bench: Bench) -> float | None:
    """The shortest exposure that the camera takes; some refuse what is too short instead of taking their least."""
    for asked_ms in LEAST_MS:
        if (told_ms := bench.set(asked_ms)) is not None:
            return told_ms or asked_ms
    return None


def _look_for_pulses(bench: Bench, exposure_ms: float, seen: Observed) -> None:
    """Frames at odd moments: a frame rate that is a part of the lamp's frequency meets it always at the same phase.

    An exposure longer than a frame in between moves the next frames by some milliseconds.
    """
    short_ms = exposure_ms
    while short_ms > PULSE_MS:
        short_ms /= 2
    period_ms = 1000 * float(np.median(np.diff([sample.arrived_s for sample in seen.rest.samples])))
    seen.pulses.append(bench.series(PULSE_FRAMES, short_ms))
    for k in range(SHIFTS):
        seen.slow.append(bench.series(2, min(500.0, max(2 * short_ms, period_ms * (1.06 + 0.07 * k))), skip=1))
        seen.pulses.append(bench.series(SHIFT_FRAMES, short_ms))


def unsettled(levels: np.ndarray[tuple[int, ...], np.dtype[np.float64]], unrest: float) -> int:
    """How many frames after a change still differ from where the level ends up; `unrest`: its usual relative spread."""
    end = float(np.median(levels[-4:]))
    away = np.abs(levels - end) > max(SETTLE_SHARE, 6 * unrest) * max(abs(end), 1e-9)
    return int(np.flatnonzero(away)[-1]) + 1 if away.any() else 0
