"""What light and pixels say of each stop, and of the camera: the evidence that the choice weighs."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from sweep.analyse.lens_fit import print_contrast
from sweep.analyse.places import SHARPNESS_KINDS, columns_of
from sweep.choose import StopEvidence
from sweep.fit import LensFit
from sweep.light import Light
from sweep.readings import CLIPPED_SHARE, Sighting, Sweep
from sweep.result import CameraNoise
from sweep.station import Station


def evidence_of(sweep: Sweep, light: Light, fit: LensFit | None, station: Station) -> list[StopEvidence]:
    """What light and readings say of each stop."""
    tones = _tones(sweep, light, fit, station)
    out = []
    for k, stop in enumerate(sweep.stops):
        here = sweep.at(stop)
        known = bool(np.isfinite(light.f_number[k]))
        tone = tones[k]
        swept = max((s for s in here if s.ok), key=lambda s: float(s.exposures.max()), default=None)
        out.append(
            StopEvidence(
                stop=stop,
                f_number_by_light=float(light.f_number[k]) if known else None,
                f_number_by_light_u=float(light.u[k]) if known else None,
                tone_per_ms=tone / sweep.scale.span_dn if tone is not None else None,
                sound=_sound(here, fit, station),
                snr_swept_db=_snr_swept_db(here, tone),
                exposure_swept_ms=float(swept.exposures.max()) if swept is not None else None,
                frames=max((s.frames for s in here), default=0),
            )
        )
    return out


def _sound(here: Sequence[Sighting], fit: LensFit | None, station: Station) -> bool:
    """Whether a stop may be recommended: nothing clipped or too dark, and each target read, or told by the model.

    A target that is blurred beyond its region can't be read, however often it is taken again; there the model speaks.
    """
    sharp = [s for s in here if s.kind in SHARPNESS_KINDS]
    if any(code in s.why_not for s in sharp for code in ("frames-saturated", "low-signal")):
        return False
    told = {s.site.target for s in sharp if s.ok}
    return bool(told) and (fit is not None or told == set(range(len(station.targets))))


def _snr_swept_db(here: Sequence[Sighting], tone: float | None) -> float | None:
    """Signal to noise of one pixel at the light tone as swept: the brightest even area's, by root of light."""
    points = [
        (p, s)
        for s in here
        if s.saturated_fraction <= CLIPPED_SHARE
        for p in s.noise
        if p.variance_dn2 > 0 and p.mean_dn > 0
    ]
    if not points or tone is None:
        return None
    point, sighting = max(points, key=lambda pair: pair[0].mean_dn)
    light = tone * float(sighting.exposures.max())
    return float(20.0 * np.log10(point.mean_dn / np.sqrt(point.variance_dn2)) + 10.0 * np.log10(light / point.mean_dn))


def _tones(sweep: Sweep, light: Light, fit: LensFit | None, station: Station) -> list[float | None]:
    """The light tone per ms (linear DN) at each stop: its brightest unclipped patch's, else by the light's ratio."""
    direct: list[float | None] = []
    for stop in sweep.stops:
        here = [(s, _tone(sweep, s, fit)) for s in sweep.at(stop)]
        tones = [t for s, t in here if s.ok and t is not None]
        complete = all(s.ok or "frames-saturated" not in s.why_not for s, _ in here)
        direct.append(max(tones) if tones and complete else None)
    known = [(k, t) for k, t in enumerate(direct) if t is not None]
    out = list(direct)
    for k, tone in enumerate(direct):
        if tone is None and known:
            near, near_tone = min(known, key=lambda pair: abs(pair[0] - k))
            f, g = (float(light.f_number[i]) if np.isfinite(light.f_number[i]) else sweep.stops[i] for i in (near, k))
            out[k] = near_tone * (f / g) ** 2
    return out


def _tone(sweep: Sweep, sighting: Sighting, fit: LensFit | None) -> float | None:
    """A patch's light tone per ms: of an edge or flat as measured; of a star or bars their level and print contrast."""
    if sighting.tone_per_ms is not None:
        return sighting.tone_per_ms
    if sighting.star is not None and sighting.star.rings is not None and sighting.star_curve is not None:
        return float(np.median(sighting.star.rings.level)) * (1.0 + sighting.star_curve.ratio)
    if sighting.bars is not None and sighting.bars.ok:
        stated = sighting.site.spec.modulation
        contrast = print_contrast(sweep)[0] if stated == 1.0 else stated
        if fit is not None:
            scale = f"scale {columns_of(sweep)[sighting.site.target, sighting.site.patch]}"
            contrast *= float(np.exp(fit.value(scale)[0])) if scale in fit.names else 1.0
        return sighting.bars.level * (1.0 + min(contrast, 1.0))
    return None


def camera_noise(sweep: Sweep) -> CameraNoise:
    """The camera's figures for the choice, per linear DN whatever the response; dark noise as it comes."""
    transfer = sweep.photon_transfer
    full = int(sweep.scale.full_dn)
    if transfer is None:
        return CameraNoise(None, None, sweep.black.level_dn, full)
    gain = 1.0 / transfer.dn_per_electron
    gain_u = gain * transfer.dn_per_electron_u / transfer.dn_per_electron
    dark = float(np.sqrt(transfer.dark_variance_dn2))
    dark_u = transfer.dark_variance_dn2_u / (2.0 * dark) if dark > 0 else 0.0
    read_u = float(np.hypot(gain * dark_u, dark * gain_u))
    return CameraNoise(gain, gain * dark, sweep.black.level_dn, full, gain_u, read_u)


def public_noise(camera: CameraNoise, sweep: Sweep, station: Station) -> CameraNoise:
    """The same for the result: no electrons where the response is not linear, no dark noise that rounding hides."""
    if station.camera.response != "linear" or sweep.photon_transfer is None:
        return replace(camera, electrons_per_dn=None, read_noise_e=None, electrons_per_dn_u=None, read_noise_e_u=None)
    if sweep.photon_transfer.dark_noise_dn is None:
        return replace(camera, read_noise_e=None, read_noise_e_u=None)
    return camera
