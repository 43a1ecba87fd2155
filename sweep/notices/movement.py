"""Notices about what moved: the image between frames, targets between stops."""

from collections import defaultdict

import numpy as np

from sweep.measure.linear import Floats
from sweep.notices.thresholds import CERTAIN, MOVED_PX, VIBRATION_PX
from sweep.notices.wording import listed, mark
from sweep.readings import Sweep
from sweep.result import Note
from sweep.station import Station


def movement_notices(sweep: Sweep, station: Station) -> list[Note]:
    """Vibration from frame to frame, pooled over the sweep; targets that stand elsewhere at one stop."""
    squares: dict[float, list[float]] = defaultdict(list)
    noise2: list[float] = []
    for s in sweep.sightings:
        told = s.shifts_px
        if s.ok and told is not None and len(told[0]) >= 2:
            n = len(told[0])
            squares[s.stop] += [float(v) for v in (told[0] ** 2).ravel() * n / (n - 1)]
            noise2 += [told[1] ** 2] * told[0].size
    out: list[Note] = []
    rms = 0.0
    if noise2:
        every = np.array([v for values in squares.values() for v in values])
        rms = float(np.sqrt(max(every.mean() - np.mean(noise2), 0.0)))
        certain = every.mean() > np.mean(noise2) * (1.0 + CERTAIN * np.sqrt(2.0 / len(every)))
        if rms > VIBRATION_PX and certain:
            worst = max(squares, key=lambda stop: float(np.mean(squares[stop])))
            out.append(
                Note(
                    "vibration",
                    f"The image moves by {rms:.2f} px (rms) between frames of one stop, most at {mark(worst)}. Hold "
                    "camera and parts firmly and take the hand off the ring before a frame is taken.",
                )
            )
    return out + _moved_targets(sweep, station, rms)


def _moved_targets(sweep: Sweep, station: Station, rms: float) -> list[Note]:
    places: dict[tuple[int, int], list[tuple[float, Floats]]] = defaultdict(list)
    for s in sweep.sightings:
        if s.ok and s.position_px is not None:
            places[s.site.target, s.site.patch].append((s.stop, np.array(s.position_px)))
    limit = max(MOVED_PX, 4.0 * rms)
    moved: dict[float, dict[int, float]] = defaultdict(dict)
    for (target, _), seen in places.items():
        middle = np.median([p for _, p in seen], axis=0)
        for stop, p in seen:
            away = float(np.linalg.norm(p - middle))
            if away > limit and len(seen) >= 3:
                moved[stop][target] = max(away, moved[stop].get(target, 0.0))
    out = []
    for stop, targets in sorted(moved.items()):
        every = len(targets) == len({t for t, _ in places}) > 1
        what = "every target stands" if every else f"{listed(station.targets[t].name for t in targets)} stands"
        cause = "the camera or the whole set was nudged" if every else "it was nudged"
        out.append(
            Note(
                "target-moved",
                f"{mark(stop)}: {what} {max(targets.values()):.1f} px from where it is at the other stops: {cause}. "
                "Fix it and take this stop again.",
            )
        )
    return out
