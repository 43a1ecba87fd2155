"""Where the aperture ring stands, told by the light alone.

Closing the iris by one stop halves the light (f-numbers go as the square root of it, ISO 517:2008), so light per
exposure, on a logarithmic scale, is the ring's position up to a constant. The constant is learned from the stops
already taken; the limits below are our own (common practice, no source), tried on simulated hands.
"""

import math
from bisect import bisect_left
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

State = Literal[
    "waiting",  # too little seen to tell
    "dark",  # no light to speak of
    "turning",
    "shaking",  # at rest on average, but not steady
    "resting",  # at rest; which stop it is cannot be told before the first is taken
    "arrived",
    "between",
    "past",
    "not turned",
    "wrong way",
]

WINDOWS_S = (0.6, 0.8, 0.95)  # the longer, the more noise is borne
LEAST_SAMPLES = 6
KEPT_SAMPLES = 400
REST_STOPS_S = 0.12  # slower than this is rest
REST_SIGMAS = 1.5
DRIFTED_STOPS = 0.07  # what may lie between the two halves of a rest
NEAR_STOPS = (0.14, 0.22, math.inf)  # how near the mark a rest must be, to be believed after each of the windows
LEFT_STOPS = 0.08  # the least move that ends a rest
FLICKER_STOPS = 0.06
SHAKING_STOPS = 0.02
SHAKING_OVER_REST = 3.0
SHAKING_SAMPLES = 5  # in a row, before it is told
ARRIVED_STOPS = 0.25
ARRIVED_OF_GAP = 0.35  # where marks lie closer than full stops
UNTURNED_STOPS = 0.12
DARK_STOPS = 2.5  # beyond the narrowest mark nothing but a failed lamp or a capped lens is left
FADING = 0.7  # an older stop's weight in the constant, per stop since


@dataclass(frozen=True, slots=True)
class RingView:
    """What the light says now.

    `off_stops`: from the asked mark, positive = closed too far, None before the first stop is taken; `at`: the mark
    that it stands on, None between marks; `spread_stops`: the light's unrest, rms.
    """

    state: State
    off_stops: float | None = None
    at: float | None = None
    spread_stops: float | None = None


class Ring:
    """Follows one aperture ring: ask for a stop, show it light as it comes, tell it what was taken."""

    def __init__(self, stops: Sequence[float]) -> None:
        """Stops as engraved."""
        self._marks = {stop: 2 * math.log2(stop) for stop in stops}
        self._asked: float | None = None
        self._times: list[float] = []
        self._levels: list[float] = []  # in stops, darker is more
        self._constants: dict[float, float] = {}
        self._rest_spread: float | None = None
        self._shaken = 0
        self._left: float | None = None
        self._rest_level: float | None = None

    def ask(self, stop: float) -> None:
        """The mark that the hand is sent to; where it stands now is where it comes from."""
        self._asked = stop
        self._left = self._level(WINDOWS_S[0])
        self._start_anew()

    @property
    def known(self) -> bool:
        """Whether a stop has been taken, so that marks can be told."""
        return bool(self._constants)

    def see(self, time_s: float, light: float) -> RingView:
        """One more frame: its arrival in seconds, and its light over exposure and gain (any unit, black taken off)."""
        if light <= self._least_light():
            self._start_anew()
            return RingView("dark")
        if len(self._times) >= 2 * KEPT_SAMPLES:
            del self._times[:KEPT_SAMPLES], self._levels[:KEPT_SAMPLES]
        self._times.append(time_s)
        self._levels.append(-math.log2(light))
        return self._judge()

    def taken(self, stop: float) -> None:
        """The ring stands at this stop, by the hand's or the caller's word: learn the constant and the unrest here."""
        if len(self._times) < LEAST_SAMPLES:
            return
        spread = float(self._window(WINDOWS_S[-1])[1].std())
        self._rest_spread = max(spread, self._rest_spread or 0.0)
        level = float(self._window(self._windows_s()[-1])[1].mean())
        self._constants.pop(stop, None)
        self._constants[stop] = level - self._marks[stop]

    def forget(self, stop: float) -> None:
        """A stop turned out to be wrong: its light counts no more."""
        self._constants.pop(stop, None)

    def _start_anew(self) -> None:
        self._times.clear()
        self._levels.clear()
        self._rest_level = None

    def _judge(self) -> RingView:
        slope, spread = 0.0, 0.0
        for window_s, near in zip(self._windows_s(), NEAR_STOPS, strict=True):
            times, levels = self._window(window_s)
            if times.size < LEAST_SAMPLES or times[-1] - times[0] < 0.85 * window_s:
                if window_s == self._windows_s()[0]:
                    return RingView("waiting", self._off(self._levels[-1]))
                break
            slope, slope_u, spread = _line(times, levels)
            if self._still_resting(levels):
                return self._at_rest(times, levels, spread)
            half = times.size // 2
            moved = abs(float(levels[:half].mean() - levels[half:].mean()))
            drifted = max(DRIFTED_STOPS, 6 * (self._rest_spread or 0.0) / math.sqrt(times.size))
            steady = abs(slope) + REST_SIGMAS * slope_u < REST_STOPS_S and moved < drifted
            # A hand on its way may pause; the farther from the mark, the longer the rest that is believed.
            if steady and abs(self._off(float(levels.mean())) or 0.0) + spread < near:
                return self._at_rest(times, levels, spread)
            if abs(slope) > 4 * slope_u:
                break
        off = self._off(self._levels[-1])
        if abs(slope) < REST_STOPS_S and (state := self._unrest(times, levels, spread)) is not None:
            return RingView(state, off, spread_stops=spread)
        return RingView("turning", off, spread_stops=spread)

    def _windows_s(self) -> tuple[float, ...]:
        """How far back to look; longer under a lamp that flickers more than the windows were made for."""
        longer = min(3.0, max(1.0, (self._rest_spread or 0.0) / FLICKER_STOPS))
        return tuple(longer * window_s for window_s in WINDOWS_S)

    def _still_resting(self, levels: NDArray[np.float64]) -> bool:
        """Whether a rest that was told goes on: noise may not make it flicker, a move ends it at once."""
        if self._rest_level is not None:
            away = abs(float(np.median(levels[-3:])) - self._rest_level)
            if away < max(LEFT_STOPS, 2.5 * (self._rest_spread or 0.0)):
                return True
        self._rest_level = None
        return False

    def _at_rest(self, times: NDArray[np.float64], levels: NDArray[np.float64], spread: float) -> RingView:
        level = float(levels.mean())
        if self._rest_level is None:
            self._rest_level = level
        off = self._off(level)
        if (unrest := self._unrest(times, levels, spread)) is not None:
            return RingView(unrest, off, spread_stops=spread)
        if off is None or self._asked is None:
            return RingView("resting", None, spread_stops=spread)
        at = self._mark_at(level)
        if at == self._asked:
            return RingView("arrived", off, at, spread)
        state: State = "past" if off * self._way() > 0 else "between"
        if self._left is not None:
            gone = (level - self._left) * self._way()
            if abs(gone) < UNTURNED_STOPS:
                state = "not turned"
            elif gone < 0:
                state = "wrong way"
        return RingView(state, off, at, spread)

    def _least_light(self) -> float:
        constant = self._constant()
        return 0.0 if constant is None else 2.0 ** -(constant + max(self._marks.values()) + DARK_STOPS)

    def _unrest(self, times: NDArray[np.float64], levels: NDArray[np.float64], spread: float) -> State | None:
        """Shaking, where there has been more unrest for some frames than a hand off the ring leaves at stops taken."""
        bearable = max(SHAKING_STOPS, SHAKING_OVER_REST * (self._rest_spread or 0.0))
        if spread <= bearable:
            self._shaken = 0
            return None
        self._shaken = self._shaken + 1 if _goes_to_and_fro(times, levels) else 0
        return "shaking" if self._shaken >= SHAKING_SAMPLES else "turning"

    def _constant(self) -> float | None:
        """Level less mark, over the stops taken; the latest weigh most, since lamps drift."""
        if not self._constants:
            return None
        values = np.array(list(self._constants.values()))
        return float(np.average(values, weights=FADING ** np.arange(values.size)[::-1]))

    def _off(self, level: float) -> float | None:
        constant = self._constant()
        if constant is None or self._asked is None:
            return None
        return level - constant - self._marks[self._asked]

    def _way(self) -> float:
        """+1 where the hand is asked to close the iris, -1 to open it."""
        constant = self._constant()
        if self._left is None or constant is None or self._asked is None:
            return 1.0
        return 1.0 if self._marks[self._asked] + constant > self._left else -1.0

    def _mark_at(self, level: float) -> float | None:
        constant = self._constant()
        if constant is None:
            return None
        nearest = min(self._marks, key=lambda stop: abs(self._marks[stop] + constant - level))
        gaps = [abs(self._marks[nearest] - mark) for stop, mark in self._marks.items() if stop != nearest]
        reach = min(ARRIVED_STOPS, ARRIVED_OF_GAP * min(gaps)) if gaps else ARRIVED_STOPS
        return nearest if abs(self._marks[nearest] + constant - level) <= reach else None

    def _window(self, length_s: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        # Slow cameras: as many frames as it takes, however long they took.
        start = min(bisect_left(self._times, self._times[-1] - length_s), max(0, len(self._times) - LEAST_SAMPLES))
        return np.array(self._times[start:]), np.array(self._levels[start:])

    def _level(self, length_s: float) -> float | None:
        if len(self._times) < LEAST_SAMPLES:
            return None
        return float(np.median(self._window(length_s)[1]))


def _line(times: NDArray[np.float64], levels: NDArray[np.float64]) -> tuple[float, float, float]:
    """Slope (stops/s) of a straight line through the samples, its standard uncertainty, and the rms about it."""
    centred = times - times.mean()
    power = float(centred @ centred)
    slope = float(centred @ levels) / power
    rest = levels - levels.mean() - slope * centred
    spread = math.sqrt(float(rest @ rest) / max(1, times.size - 2))
    return slope, spread / math.sqrt(power), spread


def _goes_to_and_fro(times: NDArray[np.float64], levels: NDArray[np.float64]) -> bool:
    """Whether the levels keep crossing their own parabola and come back, as in a tremor; a turn's ends do neither."""
    rest = levels - np.polyval(np.polyfit(times - times[0], levels, 2), times - times[0])
    crossings = int(np.count_nonzero(np.diff(np.sign(rest))))
    gone = abs(float(np.median(levels[-3:]) - np.median(levels[:3])))
    return crossings >= times.size // 4 and gone < 1.5 * float(levels.std())
