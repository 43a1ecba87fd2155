"""Notices about what the camera does to its images: sharpening, smoothing, a bent response."""

import numpy as np

from sweep.measure.noise import noise_growth
from sweep.notices.thresholds import (
    BENT_TRANSFER,
    CERTAIN,
    CORRELATION,
    EXPOSURE_MISMATCH,
    GROWTH_BEYOND,
    OVERSHOOT,
)
from sweep.readings import CLIPPED_SHARE, Sweep
from sweep.result import Note
from sweep.station import Station


def processing_notices(sweep: Sweep) -> list[Note]:
    """Sharpening or smoothing in the camera: noise that neighbours share, or an overshoot that no lens gives."""
    points = [p for s in sweep.sightings if s.saturated_fraction <= CLIPPED_SHARE for p in s.noise]
    shared = 0.0
    if points:
        dof = np.array([p.dof for p in points])
        mean = np.average([p.correlation for p in points], axis=0, weights=dof)
        shared = float(mean[np.argmax(np.abs(mean))])
        if abs(shared) < CERTAIN / np.sqrt(dof.sum()):
            shared = 0.0
    seen = [s.edge for s in sweep.sightings if s.ok and s.edge is not None]
    sharp = sorted(seen, key=lambda e: e.spread_px)[: max(3, len(seen) // 2)]
    overshoot = float(np.median([0.5 * sum(e.overshoot) for e in sharp])) if sharp else 0.0
    told = []
    if abs(shared) > CORRELATION:
        told.append(f"noise of neighbouring pixels is correlated ({shared:+.2f})")
    if overshoot > OVERSHOOT:
        told.append(f"edges overshoot by {100 * overshoot:.0f} %, which no lens does")
    if not told:
        return []
    return [
        Note(
            "processed-image",
            f"The camera sharpens, smooths or interpolates its images: {' and '.join(told)}. Turn these off and take "
            "the sweep again; the readings are those of lens and processing together.",
        )
    ]


def exposure_notices(sweep: Sweep, station: Station) -> list[Note]:
    """Frames of one stop whose light does not follow their exposures."""
    ratios = []
    for s in sweep.sightings:
        if s.ok and len(s.exposures) == len(s.frame_light) and np.ptp(s.exposures) > 0.3 * s.exposures.max():
            order = np.argsort(s.exposures)
            ratios.append(float(s.frame_light[order[-1]] / s.frame_light[order[0]]))
    if not ratios or abs(np.median(ratios) - 1.0) <= EXPOSURE_MISMATCH:
        return []
    return [
        Note(
            "response-not-linear",
            f"Longer exposures give {100 * (np.median(ratios) - 1.0):+.0f} % light for the same time: the pixel "
            f"values do not follow the light as camera.response = {station.camera.response!r} says. Set the "
            "camera's gamma to 1, or state its response.",
        )
    ]


def noise_notices(sweep: Sweep, station: Station) -> list[Note]:
    """Noise that does not follow the light."""
    transfer = sweep.photon_transfer
    bend = transfer.bend if transfer is not None else None
    grown = noise_growth([p for s in sweep.sightings if s.saturated_fraction <= CLIPPED_SHARE for p in s.noise])
    if bend is not None and abs(bend[0]) > max(BENT_TRANSFER, CERTAIN * bend[1]):
        how = f"photon transfer is bent by {100 * bend[0]:+.0f} %"
    elif grown is not None and abs(grown[0] - 0.5) > 0.5 + max(GROWTH_BEYOND, CERTAIN * grown[1]):
        how = f"its variance goes as the light to the power of {grown[0]:.1f}; 0 to 1 is possible"
    else:
        return []
    return [
        Note(
            "response-not-linear",
            f"The noise does not follow the light as camera.response = {station.camera.response!r} says ({how}). Set "
            "the camera's gamma to 1, or state its response.",
        )
    ]
