"""The simulated station as a live camera, and the hand on its ring.

Time is the camera's own: each frame takes one frame period, however long the computer works on it, so that a run
of minutes passes in seconds and comes out the same every time.
"""

import math
import time
from dataclasses import dataclass, replace
from types import TracebackType
from typing import Self

import numpy as np

from sweep.cameras import Facts, Grab, Settings
from sweep.cameras.simulated import exposure_for, round_exposure
from sweep.cameras.simulated_lens import SimulatedLens
from sweep.cameras.simulated_print import MARGIN_PX, Print
from sweep.cameras.simulated_scene import Scene, SimulatedStation, bits, full_scale_dn, lamp_at
from sweep.station import Station

SEED = 20
READ_OUT_MS = 1.0
MOVING_STEPS_A_STOP = 3  # while the ring turns, sharpness follows in steps, the light without
FULL_WELL_E = 10_000.0
WIDE_OPEN_MS = 0.28  # exposure that fills the wells with the light tone at the widest stop


@dataclass(frozen=True, slots=True)
class _Move:
    """One movement of the ring: from and to in stops (2 log2 of the f-number), from a moment on, lasting a while."""

    start_s: float
    lasts_s: float
    from_stops: float
    to_stops: float

    def at(self, time_s: float) -> float:
        s = min(1.0, max(0.0, (time_s - self.start_s) / self.lasts_s))
        # A minimum-jerk movement: Flash and Hogan, J. Neurosci. 5(7), 1688-1703 (1985).
        return self.from_stops + (self.to_stops - self.from_stops) * (10 * s**3 - 15 * s**4 + 6 * s**5)


class SimulatedCamera:
    """A camera over the simulated station; its ring turns and its lens is capped by calls that a hand would make."""

    def __init__(
        self, station: Station, sim: SimulatedStation, rng: np.random.Generator, *, real_time: bool = False
    ) -> None:
        """real_time: frames come no faster than the camera's clock, for a person to look at."""
        self._station = station
        self._sim = sim
        self._rng = rng
        self._scene = Scene(station, sim, rng)
        self._time_s = 0.0
        self._started_s = time.monotonic() if real_time else None
        self._capped = False
        self._exposure_ms = 10.0
        self._gain_db = 0.0
        self._move = _Move(0.0, 1.0, *[2 * math.log2(station.lens.stops[0] * sim.ring[0])] * 2)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def grab(self, timeout_s: float) -> Grab:
        """The next frame, one frame period later; it shows the ring as it stands at the middle of the exposure."""
        begins_s = self._time_s
        self._time_s += max(1 / self._sim.frame_rate_hz, (self._exposure_ms + READ_OUT_MS) / 1000)
        if self._started_s is not None:
            time.sleep(max(0.0, self._started_s + self._time_s - time.monotonic()))
        lamp = 0.0 if self._capped else lamp_at(self._sim, begins_s, self._exposure_ms)
        dx, dy = (float(v) for v in self._sim.vibration_px * self._rng.standard_normal(2))
        stops = self._move.at(begins_s + self._exposure_ms / 2000)
        moving = self._move.start_s < begins_s < self._move.start_s + self._move.lasts_s
        drawn_at = round(stops * MOVING_STEPS_A_STOP) / MOVING_STEPS_A_STOP if moving else stops
        pixels = self._scene.expose(
            2 ** (stops / 2), self._exposure_ms, self._gain_db, self._rng, lamp, (dx, dy), 2 ** (drawn_at / 2)
        )
        return Grab(pixels, self._time_s)

    def set(self, *, exposure_ms: float | None = None, gain_db: float | None = None) -> Settings:
        """Set exposure (in whole steps) and gain (0 to 24 dB)."""
        if exposure_ms is not None:
            self._exposure_ms = round_exposure(exposure_ms, self._sim.exposure_step_ms)
        if gain_db is not None:
            self._gain_db = min(24.0, max(0.0, gain_db))
        return Settings(self._exposure_ms, self._gain_db, self._time_s)

    def facts(self) -> Facts:
        """What there is to know of a camera that does not exist."""
        width, height = self._sim.size_px
        return {"device": "simulated station", "width_px": width, "height_px": height, "bit_depth": bits(self._station)}

    def close(self) -> None:
        """Nothing to let go of."""

    def turn(self, stop: float, *, after_s: float, lasts_s: float) -> None:
        """Turn the ring to an engraved stop, or to between two, some time from now; it comes to rest near the mark."""
        marks = self._station.lens.stops
        ring_error = self._sim.ring[marks.index(stop)] if stop in marks else 1.0
        aim = 1 + self._sim.ring_play * float(self._rng.standard_normal())
        to_stops = 2 * math.log2(stop * ring_error * aim)
        self._move = _Move(self._time_s + after_s, lasts_s, self._move.at(self._time_s), to_stops)

    def cap(self, on: bool) -> None:
        """Put the lens cap on, or take it off."""
        self._capped = on


def open_simulated(station: Station) -> SimulatedCamera:
    """A simulated camera for any station file, in real time; the same lens, lamp and prints on every call."""
    rng = np.random.default_rng(SEED)
    return SimulatedCamera(station, simulate(station, rng), rng, real_time=True)


def simulate(station: Station, rng: np.random.Generator) -> SimulatedStation:
    """A plausible truth behind a station file: a fast lens with spherical aberration, a lamp that warms up."""
    right = max(patch.region[0] + patch.region[2] for target in station.targets for patch in target.patches)
    bottom = max(patch.region[1] + patch.region[3] for target in station.targets for patch in target.patches)
    stops = station.lens.stops
    lens = SimulatedLens(
        focal_length_mm=station.lens.focal_length_mm,
        magnification=station.camera.pixel_pitch_um / station.scene.object_um_per_px,
        widest_stop=stops[0],
        wavelength_nm=station.scene.wavelength_nm,
        bandwidth_nm=station.scene.bandwidth_nm,
        pupil_magnification=station.lens.pupil_magnification,
        w040_waves=1.2 * (1.4 / stops[0]) ** 4,
        w060_waves=-0.1 * (1.4 / stops[0]) ** 6,
    )
    tilts = (5.0, -4.0, 6.0, -7.0)
    number = iter(range(1000))
    prints = tuple(
        tuple(
            Print(light=0.5) if patch.kind == "flat" else Print(tilt_deg=tilts[next(number) % len(tilts)])
            for patch in target.patches
        )
        for target in station.targets
    )
    sim = SimulatedStation(
        size_px=(right + 3 * MARGIN_PX, bottom + 3 * MARGIN_PX),
        lens=lens,
        prints=prints,
        ring=tuple(float(v) for v in np.exp(rng.normal(0, 0.015, len(stops)))),
        light_e_ms=1.0,
        electrons_per_dn=FULL_WELL_E / full_scale_dn(station),
        exposure_step_ms=station.camera.exposure_step_ms or 0.01,
        lamp_drift=0.008,
        ring_play=0.005,
    )
    fills_ms = exposure_for(station, sim, stops[0], 1.0)
    return replace(sim, light_e_ms=fills_ms / WIDE_OPEN_MS)
