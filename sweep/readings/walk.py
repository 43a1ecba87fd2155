"""The walk over a source's frames: each is read once, cut to the patches, and forgotten."""

from collections.abc import Callable, Sequence
from dataclasses import replace
from hashlib import blake2b
from itertools import groupby

import numpy as np

from sweep.frames import Pixels, Shot, Source
from sweep.measure.linear import Floats, Scale
from sweep.measure.noise import NoisePoint, area_noise
from sweep.readings.patch import measure_patch
from sweep.readings.sightings import Black, PatchSite, Sighting
from sweep.readings.slots import Slot, add, cut
from sweep.station import Station

MOST_SLOTS = 32
Progress = Callable[[int, int], None]


class Walk:
    """The walk over the frames of one source."""

    def __init__(self, source: Source, station: Station, progress: Progress | None) -> None:
        self.shape: tuple[int, ...] = ()
        self.row_light: list[Floats] = []
        self._source, self._station, self._progress = source, station, progress
        self._done = 0
        self._unfound: list[tuple[Sighting, list[Slot]]] = []
        self._hashes: dict[bytes, list[str]] = {}
        self._bits = 0

    def identical(self) -> tuple[tuple[str, ...], ...]:
        """Groups of files whose pixels are the same bit for bit."""
        return tuple(sorted(tuple(sorted(files)) for files in self._hashes.values() if len(files) > 1))

    def idle_bits(self) -> int:
        """Low bits that are 0 in every pixel of every target frame."""
        return (self._bits & -self._bits).bit_length() - 1 if self._bits else 0

    def black(self, shots: Sequence[Shot]) -> Black:
        """Black level and dark noise from the dark frames; as stated without any, or where they clip at zero."""
        stated = Black(self._station.camera.black_level_dn, False, ())
        if not shots:
            return stated
        levels: list[float] = []
        points: list[NoisePoint] = []
        clipped = False
        for (_, gain), group in groupby(shots, key=lambda s: (s.exposure_ms, s.gain_db)):
            frames = [np.asarray(self._read(s), dtype=np.float32) for s in list(group)[:MOST_SLOTS]]
            clipped = clipped or float(np.mean(frames[0] <= 0)) > 0.01
            levels += [float(np.mean(f, dtype=np.float64)) for f in frames]
            stack = np.stack([f.reshape(-1) for f in frames]).astype(np.float64)
            point = area_noise(stack - np.mean(levels), gain, 1.0 / 12.0)
            if point is not None:
                points.append(replace(point, mean_dn=0.0))
        if clipped:
            return stated
        linear = self._station.camera.response == "linear"
        return Black(float(np.mean(levels)), True, tuple(points) if linear else ())

    def stop(self, stop: float, shots: list[Shot], sites: Sequence[PatchSite], scale: Scale) -> list[Sighting]:
        """Read one stop's frames and measure all patches there."""
        slots: list[list[Slot]] = [[] for _ in sites]
        per_slot = -(-len(shots) // MOST_SLOTS)
        rows: list[Floats] = []
        for shot in shots:
            pixels = self._read(shot)
            rows.append(_row_means(pixels) - scale.black_dn)
            for site, mine in zip(sites, slots, strict=True):
                if shot.target is None or shot.target == self._station.targets[site.target].name:
                    add(mine, cut(pixels, site, shot, scale), per_slot)
        self.row_light.append(_row_ratios(np.stack(rows)))
        seen = []
        for site, mine in zip(sites, slots, strict=True):
            if mine:
                sighting = measure_patch(stop, site, mine, self._station, scale)
                seen.append(sighting)
                if sighting.half_found:
                    self._unfound.append((sighting, mine))
        return seen

    def look_again(self, sightings: Sequence[Sighting], scale: Scale) -> list[Sighting]:
        """Measure stars and bars that were too soft to be found, or whose rim was, where a sharper stop has them."""
        better: dict[int, Sighting] = {}
        for soft, slots in self._unfound:
            same = [s for s in sightings if s.site is soft.site and s.ok]
            rimmed = [s for s in same if s.star is not None and s.star.rim_px is not None]
            if same:
                near = max(rimmed or same, key=lambda s: s.strength)
                better[id(soft)] = measure_patch(soft.stop, soft.site, slots, self._station, scale, near)
        return [better.get(id(s), s) for s in sightings]

    def _read(self, shot: Shot) -> Pixels:
        pixels = self._source.read(shot)
        self.shape = pixels.shape
        if shot.role == "target":
            self._hashes.setdefault(blake2b(np.ascontiguousarray(pixels).data).digest(), []).append(shot.file)
            self._bits |= int(np.bitwise_or.reduce(pixels, axis=None))
        self._done += 1
        if self._progress is not None:
            self._progress(self._done, len(self._source.shots))
        return pixels


def _row_means(pixels: Pixels) -> Floats:
    """Mean value of each row, (rows,)."""
    return np.asarray(pixels.reshape(pixels.shape[0], -1).mean(axis=1, dtype=np.float64))


def _row_ratios(rows: Floats) -> Floats:
    """Each frame's rows against the stop's mean frame, level and small shifts apart, (n, rows); 1 without ripple."""
    level = rows.mean(axis=1, keepdims=True)
    even = rows / np.where(level > 0, level, 1.0)
    middle = even.mean(axis=0)
    ratio = even / np.where(middle > 0.05, middle, 1.0)
    slope = np.gradient(middle) / np.where(middle > 0.05, middle, 1.0)
    shift = (ratio - 1.0) @ slope / max(float(slope @ slope), 1e-12)
    return np.asarray(ratio - np.outer(shift, slope))
