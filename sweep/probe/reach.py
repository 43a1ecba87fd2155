"""Where the light is right: the exposure that brings the light tone high but clear of clipping, and what clips.

Also which bits of the samples carry the signal, and which blocks of the picture are even.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sweep.measure.linear import Floats
from sweep.probe.bench import BLOCKS, Bench, Sample
from sweep.station import Camera as Stated

START_MS = 10.0
LONGEST_MS = 160.0
SHORTEST_MS = 0.002
WANTED_TONE = 0.75  # high for the noise, clear of clipping (common practice, no source)
TONE_RANGE = (0.6, 0.85)
FACTOR = 4.0
STEPS = 6
SAME_TONE = 0.97
BELOW_CLIP = 0.9
DARK_TONE = 0.1
LEAST_DEPTH = 8
UNEVEN = 0.2
BRIGHT = 0.6
LEAST_BLOCKS = 8


@dataclass(frozen=True, slots=True)
class Codes:
    """What the samples can hold, in codes moved down by `shift` bits.

    `container`: bits of the words; `step`: codes between two that occur by idle bits; `depth`: bits that count;
    `clip_dn`: code at which the brightest pixels stay, None where that was not seen.
    """

    container: int
    shift: int
    step: int
    depth: int
    clip_dn: float | None

    @property
    def full_dn(self) -> int:
        """The top code."""
        return (1 << self.depth) - 1

    @property
    def top_dn(self) -> float:
        """The code at which pixels clip, as seen, else by the bits."""
        return self.clip_dn or float(self.full_dn)


@dataclass(frozen=True, slots=True)
class Reach:
    """The exposure at which to look on, whether the light followed the exposure so far, and the codes."""

    exposure_ms: float
    follows: bool
    codes: Codes


def find_reach(bench: Bench, stated: Stated) -> Reach:
    """Lengthen the exposure until the picture clips, then shorten it until it doesn't. Raises CameraError."""
    seen: dict[float, Sample] = {}

    def look(exposure_ms: float) -> Sample:
        sample = bench.series(1, exposure_ms).settled[-1]
        seen[bench.exposure_ms] = sample
        return sample

    last = look(START_MS)
    while bench.settable and not last.piled and bench.exposure_ms < LONGEST_MS / 1.5:
        before_ms = bench.exposure_ms
        last = look(min(LONGEST_MS, before_ms * FACTOR))
        if bench.exposure_ms < 1.5 * before_ms:
            break
    top = max(sample.tone for sample in seen.values())
    for _ in range(STEPS):
        shortest_ms = min(seen)
        if not bench.settable or seen[shortest_ms].tone < BELOW_CLIP * top or shortest_ms <= SHORTEST_MS:
            break
        look(max(SHORTEST_MS, shortest_ms / FACTOR))
    follows = min(sample.tone for sample in seen.values()) < BELOW_CLIP * top
    codes = _codes(bench, stated, seen, follows)
    bench.align(codes.shift, codes.full_dn)
    if not bench.settable or not follows:
        bench.series(1, START_MS)
        return Reach(bench.exposure_ms, follows, codes)
    return Reach(_for_tone(bench, codes, seen), follows, codes)


def _for_tone(bench: Bench, codes: Codes, seen: dict[float, Sample]) -> float:
    """The exposure for the wanted tone, from the nearest one that did not clip."""
    below = [e for e, sample in seen.items() if sample.tone / (1 << codes.shift) < BELOW_CLIP * codes.top_dn]
    exposure_ms = max(below)
    tone = seen[exposure_ms].tone / (1 << codes.shift) / codes.top_dn
    for _ in range(STEPS):
        factor = min(FACTOR, max(1 / FACTOR, WANTED_TONE / max(tone, 1e-3)))
        exposure_ms = min(LONGEST_MS, exposure_ms * factor)
        tone = bench.series(1, exposure_ms).settled[-1].tone / codes.top_dn
        if TONE_RANGE[0] <= tone <= TONE_RANGE[1] or exposure_ms == LONGEST_MS:
            break
    return bench.exposure_ms


def _codes(bench: Bench, stated: Stated, seen: dict[float, Sample], follows: bool) -> Codes:
    used = int(np.bitwise_or.reduce(np.flatnonzero(bench.codes)))
    idle = (used & -used).bit_length() - 1 if used else 0
    depth = min(stated.bit_depth or bench.container, bench.container)
    if bench.container == 8:
        shift = 0
    elif stated.bit_depth is not None:
        shift = bench.container - depth if used >> depth else 0
    else:
        shift = min(idle, 8)
    clip = _clip(seen, follows)
    highest = (used if clip is None else round(clip)) >> shift
    if stated.bit_depth is None and bench.container == 16:
        depth = max(LEAST_DEPTH, highest.bit_length())
    return Codes(
        bench.container, shift, 1 << max(0, idle - shift), depth, None if clip is None else clip / (1 << shift)
    )


def _clip(seen: dict[float, Sample], follows: bool) -> float | None:
    """The code at which the picture clips, None where it did not."""
    piled = [sample.top for sample in seen.values() if sample.piled]
    if piled:
        return float(max(piled))
    by_exposure = [seen[e].tone for e in sorted(seen)]
    top = by_exposure[-1]
    flat = len(by_exposure) > 1 and by_exposure[-2] > SAME_TONE * top
    return top if flat and follows else None


@dataclass(frozen=True, slots=True)
class Even:
    """Blocks of even tone, (row, column) of their first pixels, and which of them are bright."""

    blocks: tuple[tuple[int, int], ...]
    bright: tuple[int, ...]


def even_blocks(mean: NDArray[np.float32], side: int, top_dn: float) -> Even:
    """The most even blocks of a mean frame that do not clip, of all tones there are.

    Evenness is that of their sixteenths, so that neither noise nor the pattern of a mosaic counts.
    """
    rows, columns = mean.shape[0] // side, mean.shape[1] // side
    quarter = side // 4
    cut = np.asarray(mean[: rows * side, : columns * side], dtype=np.float64)
    parts = cut.reshape(rows, 4, quarter, columns, 4, quarter).mean(axis=(2, 5)).transpose(0, 2, 1, 3)
    parts = parts.reshape(rows, columns, 16)
    level: Floats = parts.mean(axis=2)
    peak = cut.reshape(rows, side, columns, side).max(axis=(1, 3))
    uneven = np.ptp(parts, axis=2) / (level + 0.02 * top_dn)
    order = [k for k in np.argsort(uneven, axis=None) if peak.flat[k] < 0.95 * top_dn]
    good = [k for k in order[: max(LEAST_BLOCKS, len(order) // 4)] if uneven.flat[k] < UNEVEN] or order[:LEAST_BLOCKS]
    good.sort(key=lambda k: float(level.flat[k]))
    picked = [good[round(i)] for i in np.linspace(0, len(good) - 1, min(BLOCKS, len(good)))]
    brightest = max((float(level.flat[k]) for k in picked), default=0.0)
    places = tuple((int(k) // columns * side, int(k) % columns * side) for k in picked)
    return Even(places, tuple(i for i, k in enumerate(picked) if level.flat[k] >= BRIGHT * brightest))
