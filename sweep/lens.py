"""The lens in front of the sensor: from stop, depth and a few coefficients to the transfer of lens and camera.

    M(v) = sum over wavelengths w_l OTF(v l N_w / p; W020, W040, W060)
           x sinc(v cos t) sinc(v sin t) x exp(-2 pi^2 s^2 v^2)

with v in cycles per pixel along direction t, the pixel pitch p, the working f-number N_w = N (1 + m / P), and the
sensor's blur s. W020 comes from the distances behind the exit pupil, W040 scales with aperture^4, W060 with
aperture^6 (Hopkins, Wave Theory of Aberrations, 1950, from memory). Signs are kept: a negative transfer is reversed
contrast. Derivatives for the fit come along.
"""

from dataclasses import dataclass, replace

import numpy as np

from sweep.measure.linear import Floats
from sweep.optics import cutoff_cy_mm, defocus_waves, otf, working_f_number
from sweep.station import Station

SPECTRUM_NODES = 5
UNSTATED_RMS_SHARE = 0.02
"""Relative rms width of the light where none is stated: that of a coloured LED (common practice, no source)."""


@dataclass(frozen=True, slots=True)
class Bench:
    """The fixed part: focal length, pupils, magnification, pixels, light.

    `wavelengths_nm`, `weights`: (l,), the weights summing to 1; `spread`: (l,) how far each wavelength lies from the
    middle, in standard deviations of the spectrum.
    """

    focal_length_mm: float
    pupil_magnification: float
    magnification: float
    pixel_pitch_um: float
    wavelength_nm: float
    wavelengths_nm: Floats
    weights: Floats
    spread: Floats

    @classmethod
    def of(cls, station: Station) -> "Bench":
        """The bench that a station file describes; a Gaussian spectrum of the stated width, by Gauss-Hermite nodes."""
        lens, middle = station.lens, station.scene.wavelength_nm
        nodes, weights = np.polynomial.hermite_e.hermegauss(SPECTRUM_NODES)
        stated = station.scene.bandwidth_nm
        rms = stated / _FWHM_PER_RMS if stated else UNSTATED_RMS_SHARE * middle
        return cls(
            lens.focal_length_mm,
            lens.pupil_magnification,
            station.magnification,
            station.camera.pixel_pitch_um,
            middle,
            middle + min(rms, 0.12 * middle) * nodes,
            weights / weights.sum(),
            nodes,
        )

    @property
    def working(self) -> float:
        """Working f-number over f-number, 1 + m / P."""
        return float(working_f_number(1.0, self.magnification, self.pupil_magnification))

    @property
    def rms_nm(self) -> float:
        """Standard deviation of the spectrum, nm."""
        return float(np.sqrt(self.weights @ (self.wavelengths_nm - self.wavelength_nm) ** 2))

    def wave_um(self, f_number: float) -> float:
        """The shift of focus in the image (um) that is one wave of defocus at the pupil's edge: 8 lambda N_w^2."""
        return 8e-3 * self.wavelength_nm * (f_number * self.working) ** 2

    def of_one_wavelength(self) -> "Bench":
        """The same bench in light of the reference wavelength alone."""
        return replace(self, wavelengths_nm=np.array([self.wavelength_nm]), weights=np.array([1.0]), spread=np.zeros(1))

    def cutoff_cy_px(self, f_number: float | Floats) -> Floats:
        """Diffraction cutoff at the shortest wavelength, cycles per pixel."""
        shortest = float(self.wavelengths_nm.min())
        return np.asarray(cutoff_cy_mm(f_number * self.working, shortest) * self.pixel_pitch_um * 1e-3)

    def w020_waves(self, f_number: Floats, depth_mm: Floats | float, focus_mm: Floats | float) -> Floats:
        """Defocus at the pupil's edge, waves of `wavelength_nm`; negative for an object beyond the focus."""
        return defocus_waves(
            depth_mm,
            f_number,
            best_focus_mm=focus_mm,
            focal_length_mm=self.focal_length_mm,
            magnification=self.magnification,
            pupil_magnification=self.pupil_magnification,
            wavelength_nm=self.wavelength_nm,
        )


_FWHM_PER_RMS = 2.3548200450309493


@dataclass(frozen=True, slots=True)
class Pupil:
    """What the aperture does at one stop and depth, arrays of one shape (views,).

    The f-number, and in waves of the reference wavelength at the pupil's edge: defocus, spherical aberration of fourth
    and sixth order, and `colour`, the defocus for each standard deviation of the spectrum (longitudinal colour).
    """

    f_number: Floats
    w020: Floats
    w040: Floats
    w060: Floats
    colour: Floats


def pixel_box(v_cy_px: Floats, direction_deg: float | None) -> Floats:
    """Transfer of a square pixel at frequencies (n,) along a direction; the mean over directions where that is None."""
    if direction_deg is None:
        angles = np.radians(np.arange(0.0, 45.0, 5.0) + 2.5)
        return np.asarray(
            np.mean([np.sinc(v_cy_px * np.cos(t)) * np.sinc(v_cy_px * np.sin(t)) for t in angles], axis=0)
        )
    t = np.radians(direction_deg)
    return np.asarray(np.sinc(v_cy_px * np.cos(t)) * np.sinc(v_cy_px * np.sin(t)))


def lens_transfer(bench: Bench, pupil: Pupil, v_cy_px: Floats) -> Floats:
    """Signed transfer of the lens alone at frequencies v (views, n): the OTFs of all wavelengths, summed."""
    return np.asarray(np.einsum("l,lvn->vn", bench.weights, otf(*_waves(bench, pupil, v_cy_px))))


def lens_transfer_derivatives(bench: Bench, pupil: Pupil, v_cy_px: Floats) -> tuple[Floats, ...]:
    """The transfer (views, n) and its derivatives by w020, w040, w060, colour and ln N, waves held."""
    s, *waves = _waves(bench, pupil, v_cy_px)
    value, d020, d040, d060, ds = otf(s, *waves, derivatives=True)
    scaled = bench.weights * bench.wavelength_nm / bench.wavelengths_nm
    return (
        np.einsum("l,lvn->vn", bench.weights, value),
        np.einsum("l,lvn->vn", scaled, d020),
        np.einsum("l,lvn->vn", scaled, d040),
        np.einsum("l,lvn->vn", scaled, d060),
        np.einsum("l,lvn->vn", scaled * bench.spread, d020),
        np.einsum("l,lvn->vn", bench.weights, ds * s),
    )


def _waves(bench: Bench, pupil: Pupil, v_cy_px: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Fraction of the cutoff (wavelengths, views, n), and the three coefficients in waves of each wavelength."""
    ratio = (bench.wavelength_nm / bench.wavelengths_nm)[:, None, None]
    per_nm = (pupil.f_number * bench.working / (bench.pixel_pitch_um * 1e3))[:, None]
    s = v_cy_px * per_nm * bench.wavelengths_nm[:, None, None]
    w020 = (pupil.w020[:, None] + bench.spread[:, None, None] * pupil.colour[:, None]) * ratio
    return s, _held(w020), _held(pupil.w040[:, None] * ratio), _held(pupil.w060[:, None] * ratio)


MOST_WAVES = 40.0
"""Beyond it nothing is left of any contrast, and the time of the quadrature grows with the waves."""


def _held(waves: Floats) -> Floats:
    return np.clip(waves, -MOST_WAVES, MOST_WAVES)
