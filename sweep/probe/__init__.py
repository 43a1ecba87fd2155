"""Is this camera fit to measure? It is asked by its light, since drivers do not say.

A few hundred frames of any still scene in steady light: exposure and gain are changed and must be followed, frames
at rest must be new and alike, noise must be the pixels' own. Each finding has a verdict and what to do; docs/probe.md
says how each is made.
"""

from collections.abc import Sequence

from sweep.cameras import Camera
from sweep.probe import light, picture, rhythm
from sweep.probe.bench import Bench
from sweep.probe.pulse import ROLLING_TURNS
from sweep.probe.records import VERDICTS, Figures, Finding, Probe, Tell, Verdict
from sweep.probe.run import Observed, observe
from sweep.station import Camera as Stated
from sweep.station import Region

__all__ = ["VERDICTS", "Finding", "Probe", "Tell", "Verdict", "probe"]

TOO_DARK = 0.1
TOO_BRIGHT = 0.98


def probe(camera: Camera, stated: Stated, tell: Tell = lambda what, share: None, edges: Sequence[Region] = ()) -> Probe:
    """Probe a camera; some 230 to 300 frames, 12 to 15 s at 20 frames a second.

    stated: what is known of its samples (layout, bit depth, response, black level); edges: where slanted edges are, if
    that is known. The camera is left at other settings than it was found. Raises CameraError where it fails on the way.
    """
    seen, bench = observe(camera, stated, tell)
    tone = float(seen.rest.samples[-1].tone / seen.codes.top_dn)
    findings: list[Finding | None] = [_no_light(seen, tone), picture.bit_depth(seen, bench, stated)]
    if findings[0] is None:
        findings += _judged(seen, bench, stated, edges)
    tell("done", 1.0)
    told = tuple(finding for finding in findings if finding is not None)
    return Probe(seen.device, seen.rest.exposure_ms, tone, bench.frames, told)


def _judged(seen: Observed, bench: Bench, stated: Stated, edges: Sequence[Region]) -> list[Finding | None]:
    """All findings that need light; what one of them spoils, the others don't judge."""
    response = light.response_of(seen) if seen.settable else None
    coarse_ms = None if response is None else light.coarse_step(seen)
    black_dn = _black_dn(None if coarse_ms is not None else response, stated)
    ripple = rhythm.ripple_of(seen, black_dn)
    pulsing = ripple is not None and ripple.amplitude > rhythm.RIPPLE_GOOD
    locked = light.automatics(seen, response, pulsing)
    is_locked = locked.verdict != "not fit"
    spoilt = light.AUTOMATICS if not is_locked else light.EXPOSURES if coarse_ms is not None else ""
    straight = light.linearity(seen, response, spoilt, rhythm.lamp_swing(ripple, seen))
    spoilt = spoilt or ("the bent response" if straight.verdict == "not fit" else "")
    striped = ripple is not None and pulsing and ripple.turns > ROLLING_TURNS
    unrest = light.AUTOMATICS if not is_locked else rhythm.PULSES if striped else ""
    processed = picture.processing(picture.processing_of(seen, bench, stated, edges), stated, unrest)
    transfer = picture.transfer_of(seen, bench, black_dn)
    dark = "" if seen.settable or stated.black_level_dn else "a black level that is not stated"
    unsound = spoilt or ("the processing" if processed.verdict == "not fit" else dark)
    return [
        locked,
        straight,
        light.black(seen, response, stated, spoilt),
        light.exposure(seen, response, coarse_ms if is_locked else None, spoilt),
        *([light.gain(seen, response, spoilt), light.settling(seen, is_locked)] if seen.gains else []),
        rhythm.frames_finding(seen, bench.frames),
        rhythm.rate_finding(seen, is_locked),
        rhythm.flicker(ripple, seen, is_locked),
        rhythm.drift(seen, pulsing, is_locked),
        processed,
        picture.noise(transfer, seen, unsound, black_dn),
    ]


def _black_dn(response: light.Response | None, stated: Stated) -> float:
    """Level without light: by the exposures, else as stated."""
    if response is not None and response.slope_dn_ms > 0:
        return response.black_dn
    return stated.black_level_dn if stated.response == "linear" else 0.0


def _no_light(seen: Observed, tone: float) -> Finding | None:
    """Why nothing can be judged, if so."""
    figures: Figures = {"tone": tone}
    if tone > TOO_BRIGHT or not seen.even.blocks:
        to_do = "Close the ring, dim the lamp or shorten the exposure, then probe again."
        return Finding("light", "Light", "not fit", "the picture clips: nothing can be judged", to_do, figures)
    if not seen.follows and tone < TOO_DARK:
        to_do = "Take the cap off, open the ring or give more light, then probe again."
        return Finding("light", "Light", "not fit", "too dark: nothing can be judged", to_do, figures)
    return None
