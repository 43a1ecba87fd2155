"""What a careful person would notice in a sweep: each code of `result.NOTE_CODES` that pixels, light and fit can tell.

    frames    clipped, dark, few, identical      patches  what can't be read as what it should be
    ring      where the ring stood, by light     camera   processing, a bent response
    lamp      drift, ripple, bands               model    a focus that moved, a model that doesn't fit
    movement  vibration, nudged targets          thresholds, wording

Every test has a threshold that a sound sweep passes with room to spare: at least five of its own standard uncertainties
and a size that matters to the answer. docs/outputs.md lists what to do about each.
"""

from collections.abc import Sequence

from sweep.fit import LensFit
from sweep.light import Light
from sweep.notices.camera import exposure_notices, noise_notices, processing_notices
from sweep.notices.frames import frame_notices
from sweep.notices.lamp import lamp_notices
from sweep.notices.model import model_notices
from sweep.notices.movement import movement_notices
from sweep.notices.patches import patch_notices
from sweep.notices.ring import ring_notices, stray_frame_notices
from sweep.notices.thresholds import BENT_PX, BENT_TRANSFER, CERTAIN, CORRELATION, OVERSHOOT, RAGGED_PX
from sweep.outlook import Discrepancy
from sweep.readings import Sweep
from sweep.result import NOTE_CODES, Note, Reading
from sweep.station import Station

__all__ = ["BENT_PX", "BENT_TRANSFER", "CERTAIN", "CORRELATION", "OVERSHOOT", "RAGGED_PX", "notices"]


def notices(
    sweep: Sweep,
    readings: Sequence[Reading],
    light: Light,
    fit: LensFit | None,
    discrepancy: Discrepancy,
    station: Station,
    compressed: bool,
) -> list[Note]:
    """All notices of a sweep, in the order of the table of codes."""
    processed = [] if compressed else processing_notices(sweep)
    bent = exposure_notices(sweep, station)
    lamp = [] if bent else lamp_notices(sweep, light)
    flickers = any(note.code == "flicker" for note in lamp)
    rippling = station.need.flicker_hz > 0 or flickers
    found = [
        *frame_notices(sweep, station),
        *ring_notices(sweep, light),
        *lamp,
        *([] if rippling or bent else stray_frame_notices(sweep, light)),
        *movement_notices(sweep, station),
        *patch_notices(sweep, readings, station),
        *processed,
        *(bent if bent or compressed or processed or flickers else noise_notices(sweep, station)),
        *model_notices(fit, discrepancy, sweep, station),
    ]
    order = list(NOTE_CODES)
    return sorted(found, key=lambda note: order.index(note.code))
