"""Notices about the frames as such: clipped, dark, few, identical, with idle bits."""

from collections.abc import Sequence

from sweep.notices.wording import listed, mark
from sweep.readings import CLIPPED_SHARE, Sweep
from sweep.result import Note
from sweep.station import Station


def frame_notices(sweep: Sweep, station: Station) -> list[Note]:
    """Clipped, dark, few and identical frames, idle bits."""
    out: list[Note] = []
    for stop in sweep.stops:
        clipped = [s for s in sweep.at(stop) if s.saturated_fraction > CLIPPED_SHARE]
        if clipped:
            worst = max(clipped, key=lambda s: s.saturated_fraction)
            names = listed(station.targets[s.site.target].name for s in clipped)
            out.append(
                Note(
                    "frames-saturated",
                    f"{mark(stop)}: up to {100 * worst.saturated_fraction:.3g} % of the pixels are clipped ({names}). "
                    "Take this stop again at a shorter exposure.",
                )
            )
        dark = [s for s in sweep.at(stop) if "low-signal" in s.why_not]
        if dark:
            names = listed(station.targets[s.site.target].name for s in dark)
            out.append(Note("low-signal", f"{mark(stop)}: too dark to measure ({names}). Expose this stop longer."))
        few = [s for s in sweep.at(stop) if s.frames < 2]
        if few:
            out.append(
                Note(
                    "too-few-frames",
                    f"{mark(stop)}: a single usable frame; noise can't be told. Take two or more, better eight.",
                )
            )
    for group in sweep.identical:
        out.append(
            Note(
                "frames-identical",
                f"{_same_frames(group)} the same bit for bit, so they are one measurement. Take the stop again.",
            )
        )
    if sweep.idle_bits and station.camera.bit_depth is not None:
        used = station.camera.bit_depth - sweep.idle_bits
        out.append(
            Note(
                "bit-depth",
                f"The lowest {sweep.idle_bits} of {station.camera.bit_depth} bits never change: the camera delivers "
                f"{used} bits. Set camera.bit_depth, or the camera's pixel format, accordingly.",
            )
        )
    return out


def _same_frames(files: Sequence[str]) -> str:
    """Who is the same: several files, or one that is listed more than once."""
    names = list(dict.fromkeys(files))
    return f"{listed(names)} are" if len(names) > 1 else f"{names[0]} is listed {len(files)} times:"
