"""Frames cut to one patch, on linear light, pooled where one stop has many of them."""

from dataclasses import dataclass

from sweep.frames import Pixels, Shot
from sweep.measure.linear import Bools, Floats, Scale, crop, sharpness_values
from sweep.readings.sightings import PatchSite


@dataclass(slots=True)
class Slot:
    """One frame, or the mean of several of one setting, cut to one patch: linear DN, and what is clipped."""

    exposure_ms: float
    gain_db: float
    count: int
    values: Floats
    valid: Bools
    clipped: float
    full: Floats
    order: float

    @property
    def light_unit(self) -> float:
        """Milliseconds x gain: what turns DN into light."""
        return float(self.exposure_ms * 10.0 ** (self.gain_db / 20.0))


def cut(pixels: Pixels, site: PatchSite, shot: Shot, scale: Scale) -> Slot:
    """One frame (height, width) or (height, width, 3) as a slot of the site's patch."""
    patch = crop(pixels, site.spec.region)
    top = patch >= scale.full_dn
    any_top = top.any(axis=2) if top.ndim == 3 else top
    values = scale.linear(sharpness_values(patch, site.sites))
    valid = ~any_top.reshape(-1)[site.sites.flat_index]
    order = shot.time_s if shot.time_s is not None else float(shot.order)
    return Slot(shot.exposure_ms, shot.gain_db, 1, values, valid, float(any_top.mean()), scale.linear(patch), order)


def add(slots: list[Slot], new: Slot, per_slot: int) -> None:
    """Append a frame, or pool it with the slot before where that is not full and of the same setting."""
    last = slots[-1] if slots else None
    same = last is not None and (last.exposure_ms, last.gain_db) == (new.exposure_ms, new.gain_db)
    if last is None or not same or last.count >= per_slot:
        slots.append(new)
        return
    n = last.count
    last.values = (last.values * n + new.values) / (n + 1)
    last.full = (last.full * n + new.full) / (n + 1)
    last.valid &= new.valid
    last.clipped = (last.clipped * n + new.clipped) / (n + 1)
    last.order = (last.order * n + new.order) / (n + 1)
    last.count = n + 1
