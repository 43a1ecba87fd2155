"""The lens of the simulated station: transfer functions by a two-dimensional transform of a complex pupil.

The pupil (its outline, defocus, spherical aberration, coma, iris blades) is sampled on a grid that is turned
so that one axis lies along the wanted direction; the autocorrelation along that axis, by FFT row by row, is
the optical transfer function in that direction. No closed form and no quadrature of the lens model is used
here, so that the model is never tested against itself.

Source: J. W. Goodman, Introduction to Fourier Optics (1996), 6.3 and 6.4 (the OTF as the normalised
autocorrelation of the generalised pupil). Geometry of thick lenses by the chief ray through the pupils.
"""

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.fft import fft, ifft, next_fast_len
from scipy.interpolate import CubicSpline

Floats = NDArray[np.float64]

SPECTRAL_POINTS = 5
POLAR_ANGLES = 48
FWHM_TO_SIGMA = 2 * math.sqrt(2 * math.log(2))


@dataclass(frozen=True, slots=True)
class Wavefront:
    """Optical path differences at the rim of a round pupil, um; the coma points to `coma_deg`."""

    defocus_um: float = 0.0
    spherical4_um: float = 0.0
    spherical6_um: float = 0.0
    coma_um: float = 0.0
    coma_deg: float = 0.0

    def span_um(self) -> float:
        """A bound on the path difference between any two points of the pupil, um."""
        return abs(self.defocus_um) + abs(self.spherical4_um) + abs(self.spherical6_um) + 2 * abs(self.coma_um)


@dataclass(frozen=True, slots=True)
class SimulatedLens:
    """A lens on a sensor that stays put; aberrations are given at the widest stop, in waves of `wavelength_nm`.

    `magnification` holds at depth 0; `focus_offset_mm` is the depth that the sensor is focused on. Positive
    `w040_waves` is an undercorrected lens: rays from its rim come to a focus nearer to it, as those of an object
    farther away do. `blades` = 0 is a round iris; the barrel keeps the widest stop round in any case.
    """

    focal_length_mm: float
    magnification: float
    widest_stop: float
    wavelength_nm: float
    bandwidth_nm: float = 0.0
    pupil_magnification: float = 1.0
    focus_offset_mm: float = 0.0
    w040_waves: float = 0.0
    w060_waves: float = 0.0
    coma_waves: float = 0.0
    coma_deg: float = 0.0
    blades: int = 0
    chromatic_mm_per_100nm: float = 0.0

    def working_f_number(self, f_number: float) -> float:
        """The f-number at finite distance, from the ring's."""
        return f_number * (1 + self.magnification / self.pupil_magnification)

    def scale(self, depth_mm: float) -> float:
        """Size of the object pixel at a depth over that at depth 0, by the chief ray through the entrance pupil."""
        pupil_to_object_mm = self.focal_length_mm * (1 / self.pupil_magnification + 1 / self.magnification)
        return 1 + depth_mm / pupil_to_object_mm

    def wavefront(self, f_number: float, depth_mm: float, wavelength_nm: float) -> Wavefront:
        """Path differences at the pupil's rim for one stop, depth (mm from the plane of focus) and wavelength."""
        f = self.focal_length_mm
        exit_to_sensor_mm = f * (self.pupil_magnification + self.magnification)
        principal_to_object_mm = f * (1 + 1 / self.magnification)
        shift_mm = self.chromatic_mm_per_100nm * (wavelength_nm - self.wavelength_nm) / 100
        object_mm = principal_to_object_mm + depth_mm - self.focus_offset_mm + shift_mm
        exit_to_image_mm = 1 / (1 / f - 1 / object_mm) - f * (1 - self.pupil_magnification)
        radius_mm = exit_to_sensor_mm / (2 * self.working_f_number(f_number))
        opened = self.widest_stop / f_number
        wave_um = self.wavelength_nm / 1000
        return Wavefront(
            defocus_um=1000 * radius_mm**2 / 2 * (1 / exit_to_sensor_mm - 1 / exit_to_image_mm),
            spherical4_um=-self.w040_waves * wave_um * opened**4,
            spherical6_um=-self.w060_waves * wave_um * opened**6,
            coma_um=self.coma_waves * wave_um * opened**3,
            coma_deg=self.coma_deg,
        )

    def transfer(
        self, f_number: float, depth_mm: float, direction_deg: float, frequency_cy_mm: Floats
    ) -> NDArray[np.complex128]:
        """Complex transfer of the optics over all its wavelengths, along one direction of the image plane.

        frequency_cy_mm: image-plane frequencies, not negative, cycles/mm. Returns the OTF at these, 1 at zero.
        """
        blades = self.blades if f_number > 1.02 * self.widest_stop else 0
        total = np.zeros(frequency_cy_mm.shape, dtype=np.complex128)
        for wavelength_nm, weight in self._spectrum():
            wavelength_um = wavelength_nm / 1000
            front = self.wavefront(f_number, depth_mm, wavelength_nm)
            fraction = frequency_cy_mm * wavelength_um / 1000 * self.working_f_number(f_number)
            total += weight * pupil_transfer(front, wavelength_um, fraction, direction_deg, blades)
        return total

    def round(self) -> bool:
        """Whether the transfer is the same in every direction."""
        return self.blades == 0 and self.coma_waves == 0

    def _spectrum(self) -> list[tuple[float, float]]:
        """Wavelengths, nm, and weights of a Gaussian spectrum of the given full width at half maximum."""
        if self.bandwidth_nm == 0:
            return [(self.wavelength_nm, 1.0)]
        nodes, weights = np.polynomial.hermite_e.hermegauss(SPECTRAL_POINTS)
        wavelengths = self.wavelength_nm + self.bandwidth_nm / FWHM_TO_SIGMA * nodes
        return list(zip(wavelengths.tolist(), (weights / weights.sum()).tolist(), strict=True))


def pupil_transfer(
    front: Wavefront, wavelength_um: float, fraction_of_cutoff: Floats, direction_deg: float = 0.0, blades: int = 0
) -> NDArray[np.complex128]:
    """OTF of one wavelength along one direction, by the autocorrelation of the sampled pupil.

    fraction_of_cutoff: frequency x wavelength x working f-number; beyond 1 the transfer of a round pupil is 0.
    Returns complex values, 1 at zero frequency. Holds to 1e-3 for path differences up to some 40 waves.
    """
    same_all_round = blades == 0 and front.coma_um == 0
    table, end = _correlation(front, wavelength_um, 0.0 if same_all_round else direction_deg, blades)
    inside = fraction_of_cutoff < end
    return np.asarray(np.where(inside, table(np.minimum(fraction_of_cutoff, end)), 0), dtype=np.complex128)


@lru_cache(maxsize=64)
def _correlation(
    front: Wavefront, wavelength_um: float, direction_deg: float, blades: int
) -> tuple[CubicSpline[np.complex128], float]:
    """The pupil's normalised autocorrelation along a direction, over the fraction of cut-off, and where it ends."""
    samples = 4 * int(min(512, 64 + 12 * front.span_um() / wavelength_um))
    reach = 1.0 if blades == 0 else math.sqrt(2 * math.pi / (blades * math.sin(2 * math.pi / blades)))
    step = 2 * reach / samples
    along = np.linspace(-1, 1, samples) * (samples - 1) * step / 2
    rows = np.linspace(-1, 1, samples // 2) * (samples // 2 - 1) * step
    if blades == 0 and front.coma_um == 0:
        rows = rows[samples // 4 :]  # the pupil is the same on both sides of the direction
    pupil = _pupil(front, wavelength_um, along[None, :], rows[:, None], step, direction_deg, blades)
    spread = (np.abs(fft(pupil, next_fast_len(2 * samples), axis=1)) ** 2).sum(axis=0)
    correlation = np.conj(ifft(spread)[:samples])
    # At no shift the softened rim meets itself and would count squared; the area is what it stands for.
    correlation[0] = np.abs(pupil).sum()
    return CubicSpline(np.arange(samples) * step / 2, correlation / correlation[0]), reach * (1 - 1 / samples)


def _pupil(
    front: Wavefront, wavelength_um: float, u: Floats, v: Floats, step: float, direction_deg: float, blades: int
) -> NDArray[np.complex128]:
    """The complex pupil on a turned grid (u along the direction), its rim softened over one sample."""
    rho2 = u**2 + v**2
    toward_coma = math.radians(front.coma_deg - direction_deg)
    path_um = (
        front.defocus_um * rho2
        + front.spherical4_um * rho2**2
        + front.spherical6_um * rho2**3
        + front.coma_um * rho2 * (u * math.cos(toward_coma) + v * math.sin(toward_coma))
    )
    if blades == 0:
        inside = 1 - np.sqrt(rho2)
    else:
        # A polygon of the circle's area, so that the f-number by light stays what the ring says.
        apothem = math.sqrt(math.pi / (blades * math.tan(math.pi / blades)))
        sides = 2 * math.pi * np.arange(blades) / blades - math.radians(direction_deg)
        inside = apothem - np.max([u * math.cos(side) + v * math.sin(side) for side in sides], axis=0)
    cover = np.clip(inside / step + 0.5, 0, 1)
    return np.asarray(cover * np.exp(2j * np.pi * path_um / wavelength_um), dtype=np.complex128)


def polar_table(
    lens: SimulatedLens, f_number: float, depth_mm: float, frequency_cy_mm: Floats
) -> NDArray[np.complex128]:
    """OTF over direction (rows, from 0 to 180 degrees, both ends) and frequency (columns); one row if it is round."""
    if lens.round():
        return lens.transfer(f_number, depth_mm, 0.0, frequency_cy_mm)[None, :]
    angles = np.linspace(0, 180, POLAR_ANGLES + 1)
    return np.stack([lens.transfer(f_number, depth_mm, float(angle), frequency_cy_mm) for angle in angles])
