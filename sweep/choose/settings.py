"""The exposure and gain that each stop would be used at, and the signal-to-noise that follows.

The light tone grows with exposure and with gain, 20 log10(factor) dB. Motion blur in pixels is speed x exposure over
object pixel. Noise by photon transfer (EMVA Standard 1288, Release 4.0 Linear, 2021): photon noise, dark noise and the
1/12 DN^2 of quantisation. A light that ripples with frequency f leaves |sin(pi f t) / (pi f t)| of its ripple on an
exposure t, and nothing on whole periods.
"""

import math
from dataclasses import dataclass

from sweep.choose.evidence import StopEvidence
from sweep.result import CameraNoise
from sweep.station import Need, Station

LONGER_BY_RIPPLE = 1.05  # whole ripple periods may exceed the exposure by this factor
ROUNDING = 1e-9  # relative; keeps exact quotients from falling to the step or period below


@dataclass(frozen=True, slots=True)
class Setting:
    """How a stop would be used: `total_ms` is the exposure that the level needs at 0 dB, `level` what is reached.

    `fails_exposure` says that limits on exposure and gain forbid the level; `by_ripple` that the exposure was moved to
    whole ripple periods, in which case a level that gives way is no failed need.
    """

    total_ms: float | None
    total_rel_u: float
    exposure_ms: float | None
    gain_db: float | None
    level: float | None
    fails_exposure: bool
    by_ripple: bool
    snr_db: float | None
    snr_u_db: float
    fails_noise: bool

    @property
    def fails(self) -> bool:
        """Whether exposure, gain or noise rule the stop out."""
        return self.fails_exposure or self.fails_noise


def setting_for(evidence: StopEvidence, station: Station, camera: CameraNoise) -> Setting:
    """The setting that brings the light tone at one stop to `need.level`.

    Exposure first; gain only where the limit on exposure, or whole ripple periods, leave the level short.
    """
    need = station.need
    tone = evidence.tone_per_ms
    if tone is None or tone <= 0:
        return Setting(None, 0.0, None, None, None, False, False, None, 0.0, False)
    total = need.level / tone
    rel_u = (evidence.tone_per_ms_u or 0.0) / tone
    limit = exposure_limit_ms(station)
    most = 10 ** (need.max_gain_db / 20)
    exposure, by_ripple = _whole_periods(min(total, limit), total, limit, need)
    step = station.camera.exposure_step_ms
    if step is not None:
        exposure = round(math.floor(exposure / step * (1 + ROUNDING)) * step, 9)
        if exposure <= 0:  # the camera cannot expose so briefly
            return Setting(total, rel_u, None, None, None, True, False, None, 0.0, False)
    gain = 0.0
    if total > limit or by_ripple:
        gain = min(max(20 * math.log10(total / exposure), 0.0), need.max_gain_db)
    level = need.level * exposure * 10 ** (gain / 20) / total
    snr, snr_u = _snr_db(evidence, station, camera, exposure, gain, level)
    too_noisy = need.min_snr_db is not None and snr is not None and snr < need.min_snr_db
    return Setting(
        total_ms=total,
        total_rel_u=rel_u,
        exposure_ms=exposure,
        gain_db=gain,
        level=level,
        fails_exposure=total > limit * most * (1 + ROUNDING),
        by_ripple=by_ripple,
        snr_db=snr,
        snr_u_db=snr_u,
        fails_noise=too_noisy,
    )


def exposure_limit_ms(station: Station) -> float:
    """The longest exposure that the job allows, ms: the smaller of `max_exposure_ms` and what motion allows, or inf."""
    limit = station.need.max_exposure_ms
    return min(math.inf if limit is None else limit, motion_limit_ms(station))


def motion_limit_ms(station: Station) -> float:
    """The exposure, ms, in which the part moves by `need.blur_px` at the plane of focus; inf where nothing moves."""
    need = station.need
    if not need.speed_mm_s or need.blur_px is None:
        return math.inf
    return need.blur_px * station.scene.object_um_per_px / need.speed_mm_s


def snr_db(camera: CameraNoise, level: float, gain_db: float, code_step: float = 1.0) -> float | None:
    """Signal-to-noise of one pixel by photon transfer, dB; None where the camera's figures are unknown.

    `level` is a fraction of full scale less black; `code_step` is the size of one code at that level in linear DN.
    """
    if camera.electrons_per_dn is None or camera.read_noise_e is None or level <= 0:
        return None
    electrons_per_dn = camera.electrons_per_dn / 10 ** (gain_db / 20)
    signal_e = level * (camera.full_scale_dn - camera.black_level_dn) * electrons_per_dn
    noise_e = math.sqrt(signal_e + camera.read_noise_e**2 + (electrons_per_dn * code_step) ** 2 / 12)
    return 20 * math.log10(signal_e / noise_e)


def ripple_left(frequency_hz: float, exposure_ms: float) -> float:
    """The share of a light's ripple that an exposure leaves, 0 to 1."""
    turns = math.pi * frequency_hz * exposure_ms / 1000
    return abs(math.sin(turns) / turns) if turns else 1.0


def _whole_periods(exposure: float, total: float, limit: float, need: Need) -> tuple[float, bool]:
    """The exposure moved to whole ripple periods, ms, and whether it was; shorter than a period it stays."""
    if not need.flicker_hz:
        return exposure, False
    period = 1000 / need.flicker_hz
    periods = math.floor(exposure / period * (1 + ROUNDING))
    if periods < 1:
        return exposure, False
    above = (periods + 1) * period
    # the light tone itself must not be pushed into the top of the scale
    unclipped = need.level * above / total <= 1
    fits = above <= LONGER_BY_RIPPLE * exposure and above <= limit * (1 + ROUNDING)
    return (above if fits and unclipped else periods * period), True


def _snr_db(
    evidence: StopEvidence, station: Station, camera: CameraNoise, exposure: float, gain: float, level: float
) -> tuple[float | None, float]:
    """Signal-to-noise and its standard uncertainty, dB: by photon transfer, else from the frames of the sweep."""
    by_transfer = snr_db(camera, level, gain, _code_step(level, station.camera.response))
    if by_transfer is not None and camera.electrons_per_dn:
        rel_u = (camera.electrons_per_dn_u or 0.0) / camera.electrons_per_dn
        return by_transfer, 10 / math.log(10) * rel_u
    if evidence.snr_swept_db is None or not evidence.exposure_swept_ms:
        return None, 0.0
    # Electrons go with the exposure alone at one stop; at the light tone photon noise rules, so SNR ~ sqrt(electrons).
    return evidence.snr_swept_db + 10 * math.log10(exposure / evidence.exposure_swept_ms), 0.0


def _code_step(level: float, response: float | str) -> float:
    """Linear DN for one code at a linear level, for a display gamma or sRGB (IEC 61966-2-1)."""
    if response == "linear":
        return 1.0
    if response == "srgb":
        code = 1.055 * level ** (1 / 2.4) - 0.055
        slope: float = 2.4 / 1.055 * ((code + 0.055) / 1.055) ** 1.4 if level > 0.0031308 else 1 / 12.92
        return slope
    gamma = float(response)
    return float(gamma * level ** (1 - 1 / gamma))
