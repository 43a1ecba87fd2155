"""An invented station and a plain lens, in closed form, for the tests of the choice."""

from dataclasses import dataclass, replace

import numpy as np

from sweep.choose import Outlook, Place, StopEvidence
from sweep.result import CameraNoise
from sweep.station import Station

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0, 11.0, 16.0)
CAMERA = CameraNoise(electrons_per_dn=2.5, read_noise_e=5.0, black_level_dn=16.0, full_scale_dn=4095)
WAVELENGTH_UM = 0.53


def a_station(*, stops=STOPS, depths=(0.0, 6.0, 12.0), exposure_step_ms=None, **need):
    """The vial cap lane; `need` overrides single keys."""
    wanted = {"feature_um": 180.0, "contrast": 0.2, "level": 0.7, "max_exposure_ms": 4.0, "max_gain_db": 0.0}
    return Station.model_validate(
        {
            "station": {"name": "Vial cap lane"},
            "lens": {"focal_length_mm": 16.0, "stops": list(stops)},
            "camera": {"pixel_pitch_um": 3.45, "exposure_step_ms": exposure_step_ms},
            "scene": {"object_um_per_px": 58.0, "wavelength_nm": 1000 * WAVELENGTH_UM},
            "targets": [
                {"name": f"step {k}", "depth_mm": d, "patches": [{"kind": "edge", "region": [0, 0, 64, 64]}]}
                for k, d in enumerate(depths)
            ],
            "need": wanted | need,
        }
    )


def some_evidence(stops=STOPS, *, tone_at_first=1.0, sound=None, **more):
    """Light that falls as 1 / N^2 from `tone_at_first` per ms at the widest stop."""
    sound = [True] * len(stops) if sound is None else sound
    return tuple(
        StopEvidence(s, float(s), 0.01, tone_at_first * (stops[0] / s) ** 2, ok, **more)
        for s, ok in zip(stops, sound, strict=True)
    )


def places_of(station):
    """One place a target, all at the scale of the plane of focus."""
    scale = station.scene.object_um_per_px
    return tuple(Place(t.name, t.depth_mm, scale / (2 * station.need.feature_um), scale) for t in station.targets)


def normal_draws(contrast, u, n=400, shared=0.0, seed=5):
    """Draws about `contrast` (stops, places); `shared` of the variance is common to all."""
    rng = np.random.default_rng(seed)
    contrast = np.asarray(contrast, float)
    common = rng.standard_normal((n, 1, 1))
    own = rng.standard_normal((n, *contrast.shape))
    return contrast + u * (np.sqrt(shared) * common + np.sqrt(1 - shared) * own)


def an_outlook(station, contrast, u=0.002, **more):
    contrast = np.asarray(contrast, float)
    return Outlook(places_of(station), contrast, normal_draws(contrast, u), **more)


@dataclass(frozen=True)
class PlainLens:
    """Diffraction (closed form), a Gaussian of defocus and of lens error, and the pixel box, multiplied."""

    stops: tuple = STOPS
    focus_mm: float = 0.0
    defocus: float = 0.1  # Gaussian exponent for one mm of defocus at f/1, at 0.1 cycles per pixel
    error: float = 1.5  # the lens error's exponent at f/1
    pitch_um: float = 3.45
    u: float = 0.0  # of its transfer over depth

    def at(self, f_number, place, *, without=None, refocus_mm=0.0, pixel_scale=1.0):
        frequency = place.feature_cy_px
        s = min(WAVELENGTH_UM * f_number * frequency / self.pitch_um, 1.0)
        factors = {
            "diffraction": 2 / np.pi * (np.arccos(s) - s * np.sqrt(1 - s * s)),
            "depth": np.exp(
                -(((frequency / 0.1) * self.defocus * (place.depth_mm - self.focus_mm - refocus_mm) / f_number) ** 2)
            ),
            "aberration": np.exp(-self.error * frequency / 0.1 / f_number**2),
            "sampling": np.sinc(frequency * pixel_scale),
        }
        return float(np.prod([v for k, v in factors.items() if k != without]))

    def contrast(self, stop_index, place, *, without=None, refocus_mm=0.0, pixel_scale=1.0):
        return self.at(self.stops[stop_index], place, without=without, refocus_mm=refocus_mm, pixel_scale=pixel_scale)

    def over_frequency(self, stop_index, places, v_cy_px):
        return np.array([[self.contrast(stop_index, replace(p, feature_cy_px=v)) for v in v_cy_px] for p in places])

    def at_feature(self, stop_index, places):
        return np.array([self.contrast(stop_index, p) for p in places]), np.full(len(places), self.u)

    def outlook(self, station, u=0.002, grid=None):
        """What a sweep with this lens would know, with the curve between the stops on `grid`."""
        places = places_of(station)
        contrast = np.array([[self.at(n, p) for p in places] for n in self.stops])
        known = an_outlook(station, contrast, u)
        if grid is None:
            return known
        curve = np.array([[self.at(n, p) for p in places] for n in grid])
        return replace(known, curve_f_numbers=np.asarray(grid, float), curve=curve, curve_draws=normal_draws(curve, u))
