"""Notices about the lamp: drift over the sweep, ripple from frame to frame, bands over the rows."""

from collections.abc import Sequence

import numpy as np

from sweep.light import Light
from sweep.measure.linear import Floats
from sweep.notices.thresholds import CERTAIN, DRIFT, LAMP_RIPPLE, ROW_RIPPLE
from sweep.readings import Sweep
from sweep.result import Note


def lamp_notices(sweep: Sweep, light: Light) -> list[Note]:
    """Drift over the sweep, ripple from frame to frame, bands over the rows."""
    out: list[Note] = []
    if abs(light.drift) > max(DRIFT, CERTAIN * light.drift_u):
        out.append(
            Note(
                "light-drift",
                f"The lamp changed by {100 * light.drift:+.1f} % over the sweep. Warm it up, and visit the first stop "
                "once more at the end.",
            )
        )
    ripple = usual_ripple(light)
    if ripple > LAMP_RIPPLE and len(light.frames) >= 6:
        out.append(
            Note(
                "flicker",
                f"The light differs by {100 * ripple:.1f} % (rms) from frame to frame. Use a steady lamp, "
                "or whole periods of its ripple as exposure, and set need.flicker_hz.",
            )
        )
    bands = row_ripple(sweep.row_light)
    if bands is not None:
        out.append(
            Note(
                "flicker",
                f"Bands of {100 * bands[0]:.1f} % cross the frames, {bands[1]:.0f} rows apart: a rolling shutter "
                "under a rippling lamp. Use a steady lamp, or whole periods of its ripple as exposure.",
            )
        )
    return out


def usual_ripple(light: Light) -> float:
    """What frames usually differ by in light (ln, deviation), a few stray ones apart."""
    off = np.array([f.ln_off for f in light.frames])
    return 1.4826 * float(np.median(np.abs(off))) if off.size else 0.0


def row_ripple(row_light: Sequence[Floats]) -> tuple[float, float] | None:
    """Amplitude and period (rows) of bands common to the frames; None where no single frequency stands out.

    row_light: for each stop, (n, rows), ratios to the stop's mean frame. The power spectra of all frames are averaged,
    each frame's mean and slope over the rows taken off; a band is a line at 30 times the median power that holds a
    quarter of all, of an amplitude that matters.
    """
    spectra = [np.abs(np.fft.rfft(_level(r), axis=1)) ** 2 for r in row_light if len(r) >= 2]
    if not spectra:
        return None
    rows = row_light[0].shape[1]
    power = np.concatenate(spectra).mean(axis=0)[2 : rows // 4]
    if power.size < 8:
        return None
    peak = int(np.argmax(power))
    line = float(power[max(peak - 1, 0) : peak + 2].sum())
    amplitude = 2.0 * np.sqrt(line) / rows
    if line < 0.25 * power.sum() or power[peak] < 30.0 * np.median(power) or amplitude < ROW_RIPPLE:
        return None
    return float(amplitude), rows / float(peak + 2)


def _level(rows: Floats) -> Floats:
    """Rows (n, rows) less the straight line through each frame's: a lamp that moved tips the light, and is no band."""
    at = np.linspace(-1.0, 1.0, rows.shape[1])
    even = rows - rows.mean(axis=1, keepdims=True)
    return np.asarray(even - np.outer(even @ at / float(at @ at), at))
