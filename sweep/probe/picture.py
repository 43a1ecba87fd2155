"""What the pixels themselves say: bits in truth, processing in the camera, noise and its photon transfer.

Photon transfer is that of EMVA Standard 1288 (Release 4.0 Linear, 2021), by sweep.measure.noise. Noise that neighbours
or successive frames share, and edges that overshoot, come of sharpening, smoothing and compression, not of a lens.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from sweep.choose.wording import number
from sweep.measure.edge import read_edge
from sweep.measure.linear import Floats, sharpness_sites
from sweep.measure.noise import QUANTISATION_VARIANCE, NoisePoint, PhotonTransfer, area_noise, fit_photon_transfer
from sweep.notices import BENT_TRANSFER, CERTAIN, CORRELATION, OVERSHOOT
from sweep.probe.bench import Bench, Series
from sweep.probe.records import Figures, Finding, hidden, percent
from sweep.probe.run import Observed
from sweep.station import Camera as Stated
from sweep.station import Region

COMPRESSED = {"MJPG", "JPEG", "H264", "AVC1", "HEVC", "HEV1", "HVC1", "MP4V", "MPG2", "MPG1", "VP80", "VP90", "AV01"}
SHARED_OVER_TIME = 0.05
WINDOW_CODES = 32
LEAST_A_CODE = 20.0
STRETCHED = 1.3
EDGE_PX = 64
EDGES = 16
LEAST_EDGES = 2
RAGGED_PX = 0.12  # a square that was found by itself may hold a corner, which looks ragged and bent
BENT_PX = 0.2
LEAST_STEP = 0.15
LEAST_FRAMES = 8


def bit_depth(seen: Observed, bench: Bench, stated: Stated) -> Finding:
    """Which bits carry the picture, and where it clips."""
    codes = seen.codes
    stretch = _stretch(bench, codes.shift, codes.step)
    figures: Figures = {
        "container_bits": codes.container,
        "significant_bits": codes.depth,
        "idle_low_bits": codes.shift + codes.step.bit_length() - 1,
        "clips_at_dn": codes.clip_dn,
        "codes_a_step": codes.step * stretch,
    }
    where = "" if codes.clip_dn is None else f", clips at {codes.clip_dn:.0f}"
    found = f"{codes.depth} bits in samples of {codes.container}{where}"
    if codes.shift or codes.step > 1:
        idle = codes.shift + codes.step.bit_length() - 1
        found += f"; the lowest {idle} never change"
        depth = codes.depth if codes.shift else codes.depth - idle
        to_do = (
            f"State camera.bit_depth = {codes.depth}; the samples are then moved down."
            if codes.shift
            else f"The camera delivers {depth} bits: choose a deeper pixel format, or live with coarse steps."
        )
        return Finding("bit-depth", "Bit depth", "take care", found, to_do, figures)
    if stretch > STRETCHED:
        found += f"; only one code in {stretch:.1f} occurs"
        to_do = "The camera stretches its codes: set digital gain, contrast and gamma to none."
        return Finding("bit-depth", "Bit depth", "take care", found, to_do, figures)
    to_state = f"State camera.bit_depth = {codes.depth} in the station file." if stated.bit_depth is None else ""
    if codes.clip_dn is None and seen.settable:
        to_do = "Nothing was bright enough to clip: give more light, then probe again, to see the top of the range."
        return Finding("bit-depth", "Bit depth", "not told", found, to_do, figures)
    return Finding("bit-depth", "Bit depth", "good", found, to_state if codes.container > 8 else "", figures)


def _stretch(bench: Bench, shift: int, step: int) -> float:
    """How many codes there are for each one that occurs, where pixels are plenty; 1 where all occur."""
    counts = bench.codes[:: step << shift][1:-1]
    windows = counts[: counts.size // WINDOW_CODES * WINDOW_CODES].reshape(-1, WINDOW_CODES)
    full = windows[windows.mean(axis=1) > LEAST_A_CODE]
    # The border of a cloud of codes has empty ones of its own: windows with counts all over are asked alone.
    full = full[(full[:, : WINDOW_CODES // 2].any(axis=1)) & (full[:, WINDOW_CODES // 2 :].any(axis=1))]
    return float(full.size / np.count_nonzero(full)) if full.size else 1.0


@dataclass(frozen=True, slots=True)
class Processing:
    """Signs of processing: noise shared between neighbours and between frames, overshoot of edges (dark, light)."""

    neighbours: float
    frames: float
    overshoot: float | None
    edges: int
    compressed: str


def processing_of(seen: Observed, bench: Bench, stated: Stated, edges: Sequence[Region]) -> Processing:
    """Look for signs of processing in the frames at rest; at `edges`, if any are given, else at any in the picture."""
    stack = _stack(seen.rest, bench)
    grid = _grid(bench.side)
    points = [point for k in range(stack.shape[1]) if (point := area_noise(stack[:, k], 0.0, 0.0, grid)) is not None]
    dof = np.array([p.dof for p in points])
    shared, over_time = 0.0, 0.0
    if len(stack) >= LEAST_FRAMES and points and dof.sum() > 0:
        mean = np.average([p.correlation for p in points], axis=0, weights=dof)
        shared = float(mean[np.argmax(np.abs(mean))])
        shared = 0.0 if abs(shared) < CERTAIN / np.sqrt(dof.sum()) else shared
        over_time = _over_time(stack)
    overshoots = _overshoots(seen, bench, stated, edges)
    code = str(seen.device.get("pixel_format") or "").upper()
    compressed = code if code in COMPRESSED else ""
    sharpest = overshoots[: max(LEAST_EDGES, len(overshoots) // 2)]
    overshoot = float(np.median(sharpest)) if len(sharpest) >= LEAST_EDGES else None
    return Processing(shared, over_time, overshoot, len(overshoots), compressed)


def processing(found: Processing, stated: Stated, unrest: str) -> Finding:
    """Does the camera sharpen, smooth or compress? `unrest`: what keeps the noise from telling."""
    figures: Figures = {
        "noise_shared_by_neighbours": found.neighbours,
        "noise_shared_by_frames": found.frames,
        "overshoot": found.overshoot,
        "edges_seen": found.edges,
    }
    told = []
    if abs(found.neighbours) > CORRELATION and not unrest:
        told.append(f"neighbours share noise ({found.neighbours:+.2f})")
    if found.frames > SHARED_OVER_TIME and not unrest:
        told.append(f"frames share noise ({found.frames:+.2f})")
    if found.overshoot is not None and found.overshoot > OVERSHOOT:
        told.append(f"edges overshoot by {percent(found.overshoot)}")
    if found.compressed:
        told.append(f"compressed ({found.compressed})")
    if not told:
        if unrest:
            return hidden("processing", "Processing", unrest, figures)
        edges = (
            "too few edges for overshoot"
            if found.overshoot is None
            else f"{found.edges} edge{'s' * (found.edges > 1)} overshoot by {max(0.0, 100 * found.overshoot):.1f} %"
        )
        text = f"noise is each pixel's own; {edges}"
        return Finding("processing", "Processing", "good", text, "", figures)
    text = ", ".join(told)
    if told[0].startswith("compressed"):
        to_do = "Choose an uncompressed pixel format: compression changes fine detail and noise."
        return Finding("processing", "Processing", "take care", text, to_do, figures)
    if stated.layout == "bgr" and len(told) == 1 and found.neighbours > CORRELATION:
        to_do = "Colours are interpolated, which blurs: use the raw mosaic if the camera offers it."
        return Finding("processing", "Processing", "take care", text, to_do, figures)
    to_do = (
        "Switch off sharpening, noise reduction and compression: else the readings are those of lens and processing."
    )
    return Finding("processing", "Processing", "not fit", text, to_do, figures)


def transfer_of(seen: Observed, bench: Bench, black_dn: float) -> PhotonTransfer | None:
    """The photon transfer over all series at rest, blocks by blocks."""
    series = [seen.rest, *seen.ladder, *seen.fine, *seen.gains, *([seen.again] if seen.again is not None else [])]
    rounding = QUANTISATION_VARIANCE * seen.codes.step**2
    points: list[NoisePoint] = []
    for s in series:
        stack = _stack(s, bench) - black_dn
        for k in range(stack.shape[1]):
            if s.settled[0].blocks[k].max() >= 0.98 * seen.codes.top_dn:
                continue
            point = area_noise(stack[:, k], s.gain_db or 0.0, rounding)
            if point is not None and point.dof > 0:
                points.append(point)
    return fit_photon_transfer(points)


def noise(transfer: PhotonTransfer | None, seen: Observed, spoilt: str, black_dn: float) -> Finding:
    """Temporal noise, and electrons for each DN where the noise tells them."""
    name = "Noise"
    if spoilt:
        return hidden("noise", name, spoilt)
    if transfer is None:
        to_do = "Probe again with an even tone in view, and with more light."
        return Finding("noise", name, "not told", "hidden by rounding, or no even area in view", to_do)
    dark = transfer.dark_noise_dn
    per_dn = 1 / transfer.dn_per_electron
    signal = 0.7 * (seen.codes.top_dn - black_dn)
    snr_db = 20 * float(np.log10(signal / np.sqrt(transfer.variance(signal, 0.0, QUANTISATION_VARIANCE))))
    figures: Figures = {
        "electrons_per_dn": per_dn,
        "electrons_per_dn_u": per_dn * transfer.dn_per_electron_u / transfer.dn_per_electron,
        "read_noise_e": None if dark is None else dark * per_dn,
        "snr_db_at_0.7": snr_db,
        "bend": None if transfer.bend is None else transfer.bend[0],
    }
    if transfer.bend is not None and abs(transfer.bend[0]) > max(BENT_TRANSFER, CERTAIN * transfer.bend[1]):
        found = f"does not grow with the light as photons do ({100 * transfer.bend[0]:+.0f} % at the top)"
        to_do = "Look for gamma, noise reduction or compression in the camera and switch it off."
        return Finding("noise", name, "take care", found, to_do, figures)
    read = "read noise below rounding" if dark is None else f"read noise {number(dark * per_dn)} electrons"
    found = f"{number(per_dn)} electrons a DN, {read}"
    return Finding("noise", name, "good", found, "", figures)


def _stack(series: Series, bench: Bench) -> Floats:
    """(frames, blocks, pixels) on linear light; a frame that repeats the one before has no noise of its own."""
    first, *others = series.settled
    new = [first, *(b for a, b in pairwise((first, *others)) if a.digest != b.digest)]
    stack = np.stack([bench.linear(sample.blocks) for sample in new])
    return stack.reshape(*stack.shape[:2], -1)


def _grid(side: int) -> tuple[Floats, Floats]:
    y, x = np.mgrid[0:side, 0:side].reshape(2, -1).astype(np.float64)
    return x, y


def _over_time(stack: Floats) -> float:
    """Correlation of each pixel's noise from one frame to the next."""
    n = len(stack)
    levels = stack.mean(axis=2, keepdims=True)
    rest = stack - levels
    rest = rest - rest.mean(axis=0)
    total = float((rest**2).mean())
    # The mean over frames that was taken off makes them share -1/n.
    return float((rest[1:] * rest[:-1]).mean() / total) + 1 / n if total > 0 else 0.0


def _overshoots(seen: Observed, bench: Bench, stated: Stated, edges: Sequence[Region]) -> Sequence[float]:
    """Overshoot at each slanted edge, the smaller of its two sides, the sharpest edge first."""
    height, width = seen.mean.shape
    found = []
    for left, top, across, down in edges or _squares(seen):
        cut = seen.mean[top : top + down, left : left + across]
        if left + across > width or top + down > height or cut.max() >= 0.98 * seen.codes.top_dn:
            continue
        sites = sharpness_sites(stated.layout, (left, top, across, down))
        values = bench.linear(cut).ravel()[sites.flat_index]
        edge = read_edge(sites.x, sites.y, values[None, :])
        step = (edge.light - edge.dark) / max(float(values.mean()), 1e-9)
        if edge.ok and step > LEAST_STEP and edge.ragged_px < RAGGED_PX and edge.bend_px < BENT_PX:
            found.append((edge.spread_px, min(edge.overshoot)))
    return [overshoot for _, overshoot in sorted(found)]


def _squares(seen: Observed) -> Sequence[Region]:
    """Squares around the strongest steps of tone, no two centres close to each other."""
    size, cell = min(EDGE_PX, min(seen.mean.shape) // 2), 8
    rows, columns = (n // cell for n in seen.mean.shape)
    coarse = seen.mean[: rows * cell, : columns * cell].reshape(rows, cell, columns, cell).mean(axis=(1, 3))
    slope = np.hypot(*(np.gradient(coarse, axis=axis) for axis in (0, 1)))
    places: list[Region] = []
    for k in np.argsort(slope, axis=None)[::-1][: 40 * EDGES]:
        top, left = (int(n) * cell + cell // 2 - size // 2 for n in divmod(int(k), columns))
        inside = 0 <= top <= seen.mean.shape[0] - size and 0 <= left <= seen.mean.shape[1] - size
        if inside and all(max(abs(left - x), abs(top - y)) >= size // 2 for x, y, _, _ in places):
            places.append((left, top, size, size))
        if len(places) == EDGES:
            break
    return places
