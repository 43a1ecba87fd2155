"""Effects that a lens model without them must live with, put on simulated sweeps one at a time.

Iris blades, coma, sharpening and vibration are the simulated station's own. A curved field gives each patch a focus
of its own; veiling glare lifts dark and light alike, most at the widest stop.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from sweep.cameras.simulated import (
    SECONDS_PER_STOP,
    RenderedSweep,
    Scene,
    SimulatedStation,
    TrueStop,
    bits,
    exposure_for,
    lamp_at,
    round_exposure,
    station_truth,
)
from sweep.cameras.simulated_draw import SIZE_PX, Kind
from sweep.frames import Pixels, Shot
from sweep.station import Station, Target

EFFECTS = ("none", "iris blades", "coma", "curved field", "glare", "sharpening", "vibration")
QUICK_EFFECTS = ("none", "curved field", "glare", "sharpening")
"""Effects for stars and bars, whose images are costly to make in lenses that are not round, and anew for each frame."""


@dataclass(frozen=True)
class Case:
    """One sweep: the station as stated and as it is (each patch at its own focus), the truth, glare by stop."""

    effect: str
    stated: Station
    real: Station
    sim: SimulatedStation
    veil: tuple[float, ...]

    def at(self, place: int) -> SimulatedStation:
        """The truth at one stop: its glare lies over every print."""
        veil = self.veil[place]
        if veil == 0:
            return self.sim
        prints = tuple(
            tuple(replace(p, dark=p.dark + veil, light=p.light + veil) for p in prints) for prints in self.sim.prints
        )
        return replace(self.sim, prints=prints)

    def truth(self) -> tuple[TrueStop, ...]:
        """Exact answers, stop by stop; the exposure for the light tone as it is with the glare."""
        level = self.stated.need.level
        return tuple(
            replace(true, exposure_ms=exposure_for(self.real, self.at(place), true.true_f_number, level))
            for place, true in enumerate(station_truth(self.real, self.sim))
        )


def draw_case(station: Station, sim: SimulatedStation, kind: Kind, rng: np.random.Generator) -> Case:
    """The drawn station with at most one effect of a random size."""
    effects = EFFECTS if kind == "edge" else QUICK_EFFECTS
    effect = str(rng.choice(effects[1:])) if rng.random() < 0.55 else "none"
    real, veil = station, tuple(0.0 for _ in sim.ring)
    match effect:
        case "iris blades":
            sim = replace(sim, lens=replace(sim.lens, blades=int(rng.integers(5, 10))))
        case "coma":
            lens = replace(sim.lens, coma_waves=rng.uniform(0.2, 1.2), coma_deg=rng.uniform(0, 360))
            sim = replace(sim, lens=lens)
        case "curved field":
            real, sim = _curved(station, sim, float(rng.choice([-1, 1]) * rng.uniform(0.3, 1.5)))
        case "glare":
            most = rng.uniform(0.01, 0.06)
            veil = tuple(most * (station.lens.stops[0] / stop) for stop in station.lens.stops)
        case "sharpening":
            sim = replace(sim, sharpening=rng.uniform(0.15, 0.8))
        case "vibration":
            sim = replace(sim, vibration_px=rng.uniform(0.05, 0.4))
    return Case(effect, station, real, sim, veil)


def _curved(station: Station, sim: SimulatedStation, corner_waves: float) -> tuple[Station, SimulatedStation]:
    """Every patch a target of its own; its focus off as the square of image height, `corner_waves` at the corner."""
    lens = sim.lens
    per_mm_um = abs(lens.wavefront(lens.widest_stop, 0.5, lens.wavelength_nm).defocus_um) * 2
    corner_mm = corner_waves * lens.wavelength_nm / 1000 / per_mm_um
    half = math.hypot(*SIZE_PX) / 2
    targets, prints = [], []
    for target, own in zip(station.targets, sim.prints, strict=True):
        for index, (patch, print_) in enumerate(zip(target.patches, own, strict=True)):
            x, y, width, height = patch.region
            height_px = math.hypot(x + width / 2 - SIZE_PX[0] / 2, y + height / 2 - SIZE_PX[1] / 2)
            depth = target.depth_mm + corner_mm * (height_px / half) ** 2
            targets.append(Target(name=f"{target.name} {index}", depth_mm=depth, patches=(patch,)))
            prints.append((print_,))
    return station.model_copy(update={"targets": tuple(targets)}), replace(sim, prints=tuple(prints))


def take_sweep(case: Case, frames: int, rng: np.random.Generator, level: float = 0.65) -> RenderedSweep:
    """A sweep of the case, widest stop first, the light tone near `level` at every stop."""
    pattern_seed = int(rng.integers(2**32))
    pixels: dict[str, Pixels] = {}
    shots: list[Shot] = []
    for place, (stop, ring) in enumerate(zip(case.stated.lens.stops, case.sim.ring, strict=True)):
        sim = case.at(place)
        scene = Scene(case.real, sim, np.random.default_rng(pattern_seed))
        exposure_ms = round_exposure(exposure_for(case.real, sim, stop * ring, level), sim.exposure_step_ms)
        for number in range(frames):
            time_s = place * SECONDS_PER_STOP + number / sim.frame_rate_hz
            shift = sim.vibration_px * rng.standard_normal(2)
            lamp = lamp_at(sim, time_s, exposure_ms)
            shot = Shot(f"f{stop:g}_{number}.png", stop, exposure_ms, 0.0, "target", len(shots), None, time_s)
            pixels[shot.file] = scene.expose(
                stop * ring, exposure_ms, 0.0, rng, lamp, (float(shift[0]), float(shift[1]))
            )
            shots.append(shot)
    return RenderedSweep(tuple(shots), pixels, bits(case.stated))


def usable(case: Case, truth: Sequence[TrueStop], slack: float = 0.0) -> list[bool]:
    """Which stops keep exposure and gain by the truth, `slack` (a part) to spare; all of them where none does."""
    need = case.stated.need
    assert need.max_exposure_ms is not None
    limit = need.max_exposure_ms * 10 ** (need.max_gain_db / 20)
    kept = [true.exposure_ms <= limit * (1 + slack) for true in truth]
    return kept if any(kept) else [True] * len(kept)
