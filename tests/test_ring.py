"""The ring told by light alone, with simulated hands.

A hand's path is a chain of minimum-jerk movements (T. Flash and N. Hogan, The coordination of arm movements,
J. Neurosci. 5(7), 1985: x = 10 s^3 - 15 s^4 + 6 s^5), with pauses and an 8 Hz tremor (8 to 12 Hz is physiological
tremor; value from memory). Its other figures are invented: no source.
"""

import math
from dataclasses import dataclass

import numpy as np
import pytest

from sweep.ring import Ring, RingView

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0, 11.0, 16.0)
RATE_HZ = 20.0


@dataclass(frozen=True)
class Turn:
    """One simulated turn: ring positions in stops over time, when the hand came to rest, and what should be told."""

    times: np.ndarray
    stops: np.ndarray
    rest_s: float
    asked: float
    expected: str


def minimum_jerk(s: np.ndarray) -> np.ndarray:
    s = np.clip(s, 0, 1)
    return 10 * s**3 - 15 * s**4 + 6 * s**5


def hand(rng: np.random.Generator, start: float, goal: float) -> tuple[np.ndarray, np.ndarray, float]:
    """Times, positions (stops) and the moment of rest: a reaction, one to three moves, pauses, and a rest."""
    times = np.cumsum(rng.normal(1 / RATE_HZ, 0.002, 400))
    moves = int(rng.integers(1, 4))
    shares = [*np.sort(rng.uniform(0.3, 0.9, moves - 1)).tolist(), 1.0]
    place, moment, at = np.full(times.size, start), float(rng.uniform(0.3, 1.2)), start
    for share in shares:
        to = start + share * (goal - start)
        if share == 1.0 and rng.random() < 0.3:
            to += rng.normal(0, 0.05)  # a little past, and back
        lasts = max(0.25, abs(to - at) * rng.uniform(0.3, 1.1))
        place = np.where(times > moment, at + (to - at) * minimum_jerk((times - moment) / lasts), place)
        moment, at = moment + lasts + rng.uniform(0, 0.12), to
    if at != goal:
        place = np.where(times > moment, at + (goal - at) * minimum_jerk((times - moment) / 0.3), place)
        moment += 0.3
    shaking = rng.uniform(0.005, 0.03) * np.sin(2 * math.pi * 8.3 * times + rng.uniform(0, 6))
    place = place + np.where(times < moment, shaking, 0)
    rest_s = float(moment)
    kept = times < rest_s + 1.6
    return times[kept], place[kept], rest_s


def marks(rng: np.random.Generator) -> np.ndarray:
    """True ring positions at the marks: off by 2 % in f-number, 0.06 stop."""
    return 2 * np.log2(STOPS) + rng.normal(0, 0.06, len(STOPS))


def turn(rng: np.random.Generator, at: np.ndarray, place: int) -> Turn:
    """One of the things that a hand does when it is asked from mark `place` - 1 to mark `place`."""
    start, asked = at[place - 1], at[place]
    kind = rng.choice(["arrived", "past", "between", "wrong way", "not turned"], p=[0.7, 0.09, 0.07, 0.07, 0.07])
    goal = {
        "arrived": asked,
        "past": at[place + 1] if place + 1 < len(at) else asked + 0.6,
        "between": start + rng.uniform(0.35, 0.6) * (asked - start),
        "wrong way": start - rng.uniform(0.4, 1.0),
        "not turned": start,
    }[str(kind)]
    times, stops, rest_s = hand(rng, start, goal)
    return Turn(times, stops, rest_s, STOPS[place], str(kind))


def light(rng: np.random.Generator, times: np.ndarray, stops: np.ndarray, lamp: dict[str, float]) -> np.ndarray:
    """Light over exposure: 2^-stops, with the lamp's drift and ripple, averaged over an exposure, and noise."""
    exposure_s, turn_rate = lamp["exposure_s"], 2 * math.pi * lamp["hz"]
    ripple = (np.cos(turn_rate * times) - np.cos(turn_rate * (times + exposure_s))) / (turn_rate * exposure_s)
    steady = 2.0**-stops * (1 + lamp["drift_s"] * times) * (1 + lamp["ripple"] * ripple)
    return steady * (1 + lamp["noise"] * rng.standard_normal(times.size))


def lamp(rng: np.random.Generator) -> dict[str, float]:
    return {
        "hz": float(rng.choice([100.0, 120.0])) * rng.normal(1, 5e-4),
        "ripple": float(rng.choice([0.0, rng.uniform(0, 0.05)])),
        "exposure_s": math.exp(rng.uniform(math.log(2e-4), math.log(0.02))),
        "drift_s": rng.normal(0, 0.01 / 60),
        "noise": rng.uniform(0.0005, 0.012),
    }


def seen(rng: np.random.Generator, ring: Ring, one: Turn, lit: dict[str, float]) -> list[RingView]:
    return [ring.see(t, value) for t, value in zip(one.times, light(rng, one.times, one.stops, lit), strict=True)]


def primed(rng: np.random.Generator, at: np.ndarray, place: int, lit: dict[str, float]) -> Ring:
    """A ring whose stops before `place` have been taken in turn, the hand resting at the last."""
    ring = Ring(STOPS)
    for visited in range(place):
        ring.ask(STOPS[visited])
        times = 3 * visited - 100 + np.cumsum(rng.normal(1 / RATE_HZ, 0.002, 16))
        for t, value in zip(times, light(rng, times, np.full(16, at[visited]), lit), strict=True):
            ring.see(t, value)
        ring.taken(STOPS[visited])
    return ring


def trial(seed: int) -> tuple[str, str, float | None, bool]:
    """One turn: what should be told, what was told at the end, seconds from rest to it, and any false arrival."""
    rng = np.random.default_rng(seed)
    at, lit, place = marks(rng), lamp(rng), int(rng.integers(1, len(STOPS)))
    ring = primed(rng, at, place, lit)
    one = turn(rng, at, place)
    ring.ask(one.asked)
    views = seen(rng, ring, one, lit)
    states = [view.state for view in views]
    # An arrival is false where the ring stands, at that moment, more than a fifth of a stop from the asked mark.
    away = np.abs(one.stops - at[place])
    false = any(state == "arrived" and off > 0.2 for state, off in zip(states, away, strict=True))
    first = next(
        (t - one.rest_s for s, t in zip(states, one.times, strict=True) if t >= one.rest_s and s == one.expected), None
    )
    return one.expected, states[-1], first, false


def test_two_thousand_turns():
    told = [trial(seed) for seed in range(2000)]
    right = np.mean([expected == final for expected, final, _, _ in told])
    assert right >= 0.995
    assert not any(false for *_, false in told)
    delays = [delay for expected, _, delay, _ in told if expected == "arrived" and delay is not None]
    assert np.quantile(delays, 0.99) < 1.0


def test_the_first_stop_is_not_told_before_it_is_taken():
    ring = Ring(STOPS)
    ring.ask(1.4)
    views = [ring.see(i / RATE_HZ, 1.0) for i in range(20)]
    assert views[2].state == "waiting"
    assert views[-1].state == "resting"
    assert views[-1].off_stops is None


def test_no_light_is_dark():
    ring = primed(np.random.default_rng(1), marks(np.random.default_rng(1)), 2, lamp(np.random.default_rng(2)))
    ring.ask(2.8)
    assert ring.see(0.0, 0.0).state == "dark"


def test_a_hand_that_keeps_shaking_does_not_arrive():
    rng = np.random.default_rng(3)
    at, lit = marks(rng), lamp(rng) | {"ripple": 0.0, "noise": 0.002}
    ring = primed(rng, at, 2, lit)
    ring.ask(2.8)
    times = np.arange(60) / RATE_HZ
    stops = at[2] + 0.06 * np.sin(2 * math.pi * 4.1 * times)
    states = [ring.see(t, v).state for t, v in zip(times, light(rng, times, stops, lit), strict=True)]
    assert "arrived" not in states
    assert states[-1] == "shaking"


@pytest.mark.parametrize("factor", [0.1, 3.0])
def test_a_change_of_exposure_changes_nothing(factor):
    # Light is handed over per exposure: the ring does not see the exposure at all, only its noise.
    ring = primed(np.random.default_rng(5), 2 * np.log2(STOPS), 1, lamp(np.random.default_rng(5)) | {"ripple": 0.0})
    ring.ask(2.0)
    rng = np.random.default_rng(6)
    states = [ring.see(i / RATE_HZ, 0.25 * (1 + 0.001 * rng.standard_normal())).state for i in range(30)]
    assert states[-1] == "arrived"


def test_a_forgotten_stop_no_longer_counts():
    ring = primed(np.random.default_rng(5), 2 * np.log2(STOPS), 1, lamp(np.random.default_rng(5)))
    ring.forget(1.4)
    ring.ask(2.0)
    assert [ring.see(i / RATE_HZ, 0.25).state for i in range(20)][-1] == "resting"


def test_half_stops_are_told_apart():
    stops = (2.0, 2.4, 2.8, 3.4, 4.0)
    ring = Ring(stops)
    ring.ask(2.0)
    for i in range(20):
        ring.see(i / RATE_HZ, 1.0)
    ring.taken(2.0)
    ring.ask(2.4)
    for i in range(20):
        view = ring.see(2 + i / RATE_HZ, (2.0 / 2.8) ** 2)
    assert (view.state, view.at) == ("past", 2.8)
