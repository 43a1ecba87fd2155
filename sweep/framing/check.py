"""What each patch of a station shows in one live frame, and what to do where it is not good enough.

The figures come from the functions that read the recorded frames later; the limits are theirs, or common
practice where no source is named. The blur is largest with the ring wide open: room that suffices there suffices at
every stop.
"""

import math
from collections.abc import Iterator, Sequence

import numpy as np

from sweep.errors import StationError
from sweep.frames import Pixels
from sweep.framing.records import Figure, PatchCheck, Work
from sweep.framing.regions import patches_of
from sweep.measure.bars import bars_contrasts, read_bars
from sweep.measure.edge import ANGLE_RANGE_DEG, EdgeCurve, EdgeMeasure, read_edge
from sweep.measure.linear import Floats, Scale, Sites, crop, sharpness_sites, sharpness_values
from sweep.measure.star import StarMeasure, read_star
from sweep.measure.star_find import NYQUIST_CY_PX, inner_radius, room
from sweep.measure.star_level import star_curves
from sweep.measure.tribar import read_tribar
from sweep.notices import BENT_PX, RAGGED_PX
from sweep.result import NOTE_CODES
from sweep.station import Camera, Patch, Station, Target

ANGLE_WANTED_DEG = (2.0, 12.0)
ROOM_IN_SPREADS = 2.4  # beyond it the spread function has levelled out: sweep.measure.edge
LEAST_ROOM_PX = 5.0
LEAST_LENGTH_PX = 40  # of an edge, common practice, no source
LEAST_PRINT_CONTRAST = 0.3  # (light - dark) / (light + dark), common practice, no source
CLIPPED_SHARE = 0.001
LEAST_TONE = 0.05  # of full scale: darker than this a patch is mostly noise (common practice, no source)
STAR_MARGIN_PX = 6.0
OFF_CENTRE_SHARE = 0.1
PERIODS_NEEDED, PERIODS_WANTED = 3.0, 5.0
BARS_BORDER_PX = 3.0
SCALE_SHARE = 0.03  # neighbouring elements differ by 12 %, so that more than 6 % goes for another element
LEAST_FLAT_PX = 1000  # pixels of an even area, common practice, no source
UNEVEN_SHARE = 0.05
BLOCK_PX = 8
TONE_QUANTILE = 0.995
STRIDE = 4

Findings = tuple[list[Figure], list[Work]]


def check_patches(pixels: Pixels, station: Station) -> tuple[PatchCheck, ...]:
    """Check every patch of the station, in the order of its file, in one frame of the camera.

    Raises StationError where the frame has colours and camera.layout says none, or the other way round.
    """
    return tuple(check_patch(pixels, station, number) for number, _ in enumerate(patches_of(station)))


def check_patch(pixels: Pixels, station: Station, number: int) -> PatchCheck:
    """Check one patch, by its number over all targets from 0. Raises StationError as `check_patches` does."""
    camera = station.camera
    if (pixels.ndim == 3) != (camera.layout == "bgr"):
        what = "colour" if pixels.ndim == 3 else "single-channel"
        raise StationError(
            f"The camera delivers {what} frames, but camera.layout in the station file is {camera.layout!r}. Change "
            "one of the two."
        )
    name, target, patch = list(patches_of(station))[number]
    figures, work = _check(pixels, station, target, patch)
    return PatchCheck(name, patch, tuple(figures), tuple(work))


def light_tone(pixels: Pixels, camera: Camera) -> float:
    """The light tone of a whole frame as a fraction of full scale less black, 1 where it clips."""
    scale, shift = _scale(pixels, camera)
    codes = np.quantile(pixels[::STRIDE, ::STRIDE], TONE_QUANTILE, method="nearest") / (1 << shift)
    return float(scale.linear(np.asarray(codes)) / scale.span_dn)


def _scale(pixels: Pixels, camera: Camera) -> tuple[Scale, int]:
    """What turns samples into light, and by how many bits they are moved up in their words."""
    container = 8 * pixels.dtype.itemsize
    depth = min(camera.bit_depth or container, container)
    shift = container - depth if int(pixels.max()) >> depth else 0
    return Scale(camera.black_level_dn, (1 << depth) - 1, camera.response), shift


def _check(pixels: Pixels, station: Station, target: Target, patch: Patch) -> Findings:
    left, top, width, height = patch.region
    rows, columns = pixels.shape[:2]
    if left + width > columns or top + height > rows:
        size = Figure("size", _size(width, height), f"inside {_size(columns, rows)}", False)
        return [size], [Work(f"It reaches outside the frame of {_size(columns, rows)} px. Move or shrink it.", True)]
    scale, shift = _scale(pixels, station.camera)
    cut = np.right_shift(crop(pixels, patch.region), shift)
    sites = sharpness_sites(station.camera.layout, patch.region)
    values = scale.linear(sharpness_values(cut, sites))
    clipped = float(np.mean(cut >= scale.full_dn))
    tone = float(np.quantile(values, 0.95)) / scale.span_dn
    figures, work = _light(tone, clipped)
    if tone < LEAST_TONE and not clipped:
        return figures, work
    more = {"edge": _edge, "star": _star, "bars": _bars, "tribar": _tribar, "flat": _flat}[patch.kind](
        sites, values[None, :] / scale.span_dn, station, target, patch
    )
    return figures + more[0], work + more[1]


def _light(tone: float, clipped: float) -> Findings:
    figure = Figure(
        "light", f"{tone:.0%}", f"{LEAST_TONE:.0%} to 100%", clipped <= CLIPPED_SHARE and tone >= LEAST_TONE
    )
    if clipped > CLIPPED_SHARE:
        return [figure], [Work("Pixels are at the top of the scale. Dim the lamp, or expose for less time.", True)]
    if tone < LEAST_TONE:
        return [figure], [Work("It is too dark. Is the patch in the light, the cap off, the ring open?", True)]
    return [figure], []


def _edge(sites: Sites, values: Floats, station: Station, target: Target, patch: Patch) -> Findings:
    width, height = patch.region[2:]
    found = read_edge(sites.x, sites.y, values)
    if found.curve is None:
        return [Figure("size", _size(width, height))], [Work(NOTE_CODES["edge-not-found"].remedy, True)]
    figures = [_angle(found.angle_deg)]
    if not found.ok:
        degrees = f"{found.angle_deg:.1f}° from rows or columns"
        return figures, [Work(f"The edge is tilted by {degrees}. {NOTE_CODES['edge-angle'].remedy}", True)]
    room_px, off_px = _room(found.curve, sites)
    needed_px = max(LEAST_ROOM_PX, ROOM_IN_SPREADS * found.spread_px)
    contrast = (found.light - found.dark) / (found.light + found.dark)
    least = _least_edge(found, needed_px, width, height)
    figures += [
        Figure("room", f"{room_px:.0f} px", f"{needed_px:.0f} px", room_px >= needed_px),
        Figure("size", _size(width, height), f"{_size(*least)} or more", width >= least[0] and height >= least[1]),
        Figure("blur", f"{found.spread_px:.1f} px wide"),
        Figure("print", f"dark {found.dark:.0%}, light {found.light:.0%}", "", contrast >= LEAST_PRINT_CONTRAST),
        _contrast(found.transfer.at(station.feature_cy_px_at(target.depth_mm)) if found.transfer else None, station),
    ]
    return figures, list(_edge_work(found, room_px, off_px, needed_px, least, patch))


def _edge_work(
    found: EdgeMeasure, room_px: float, off_px: float, needed_px: float, least: tuple[int, int], patch: Patch
) -> Iterator[Work]:
    assert found.curve is not None
    across_x = found.curve.across_x
    across, along = (patch.region[2:]) if across_x else (patch.region[3], patch.region[2])
    if room_px < needed_px:
        lacking = f"Beside the edge is room for {room_px:.0f} px, its blur asks for {needed_px:.0f} px. "
        if room_px + abs(off_px) >= needed_px:
            yield Work(f"{lacking}Move the patch {_towards(off_px, across_x)}.", False)
        else:
            more = math.ceil(max(2 * (needed_px - room_px), least[0 if across_x else 1] - across))
            yield Work(f"{lacking}Make it {'wider' if across_x else 'taller'} by {more} px, or focus.", False)
    if along < LEAST_LENGTH_PX:
        yield Work(
            f"Only {along} px of the edge are in it. Make it {'taller' if across_x else 'wider'}, "
            f"{LEAST_LENGTH_PX} px or more.",
            False,
        )
    if (found.light - found.dark) / (found.light + found.dark) < LEAST_PRINT_CONTRAST:
        yield Work("Its dark side is nearly as light as the light one. Use a print of more contrast.", False)
    if found.ragged_px > RAGGED_PX or found.bend_px > BENT_PX:
        yield Work(f"The edge is not straight. {NOTE_CODES['edge-not-straight'].remedy}", False)
    if not ANGLE_WANTED_DEG[0] <= found.angle_deg <= ANGLE_WANTED_DEG[1]:
        yield Work(f"The edge is tilted by {found.angle_deg:.1f}°. {NOTE_CODES['edge-angle'].remedy}", False)


def _angle(angle_deg: float) -> Figure:
    wanted = f"{ANGLE_WANTED_DEG[0]:g}° to {ANGLE_WANTED_DEG[1]:g}°"
    return Figure("angle", f"{angle_deg:.1f}°", wanted, ANGLE_RANGE_DEG[0] <= angle_deg <= ANGLE_RANGE_DEG[1])


def _room(curve: EdgeCurve, sites: Sites) -> tuple[float, float]:
    """Room (px) on the edge's narrower side, and how far the edge's middle lies from the region's, px across it."""
    distance = curve.distance(sites.x, sites.y)
    across = sites.x if curve.across_x else sites.y
    off = curve.coefficients[0] - 0.5 * float(across.min() + across.max())
    return min(-float(np.percentile(distance, 2)), float(np.percentile(distance, 98))), off


def _least_edge(found: EdgeMeasure, needed_px: float, width: int, height: int) -> tuple[int, int]:
    """Width and height (px) in which an edge in the middle has the room that its blur asks for."""
    assert found.curve is not None
    along = height if found.curve.across_x else width
    lean_px = along * math.tan(math.radians(found.angle_deg))
    across = math.ceil(2 * needed_px + lean_px)
    return (across, LEAST_LENGTH_PX) if found.curve.across_x else (LEAST_LENGTH_PX, across)


def _star(sites: Sites, values: Floats, station: Station, target: Target, patch: Patch) -> Findings:
    size = patch.region[2:]
    cycles = patch.cycles or 0
    feature_cy_px = station.feature_cy_px_at(target.depth_mm)
    # At this radius the star is as fine as the feature.
    ring_px = cycles / (2 * math.pi * feature_cy_px)
    least = math.ceil(2 * (max(ring_px, inner_radius(cycles)) + STAR_MARGIN_PX))
    figures = [Figure("size", _size(*size), f"{_size(least, least)} or more", min(size) >= least)]
    if feature_cy_px > NYQUIST_CY_PX:
        return figures, [_too_fine()]
    found = read_star(sites.x, sites.y, values, None, cycles, size)
    if not found.ok:
        text = f"No star of {cycles} cycles is found. {NOTE_CODES['pattern-not-found'].remedy}"
        if min(size) < least:
            text = f"{text} It needs {_size(least, least)} px or more."
        return figures, [Work(text, True)]
    curve = star_curves([found], patch.modulation)[0]
    reach_px = min(room(found.centre_px, size), math.inf if found.rim_px is None else found.rim_px)
    figures += [
        Figure("room", f"{reach_px:.0f} px", f"{ring_px:.0f} px", reach_px >= ring_px),
        Figure("rim", "not in it" if found.rim_px is None else f"{found.rim_px:.0f} px from the centre"),
        _contrast(curve.transfer.at(feature_cy_px) if curve is not None else None, station),
    ]
    return figures, list(_star_work(found, ring_px, cycles, patch))


def _star_work(found: StarMeasure, ring_px: float, cycles: int, patch: Patch) -> Iterator[Work]:
    size = patch.region[2:]
    off = [centre - (side - 1) / 2 for centre, side in zip(found.centre_px, size, strict=True)]
    if max(abs(off[0]) / size[0], abs(off[1]) / size[1]) > OFF_CENTRE_SHARE:
        yield Work(f"The star's centre is not in the middle. Move the patch {_towards2(off)}.", False)
    elif found.rim_px is not None and found.rim_px < ring_px:
        fewer = max(4, math.floor(cycles * 0.9 * found.rim_px / ring_px))
        yield Work(
            f"The star ends {found.rim_px:.0f} px from its centre, and is as fine as the feature only beyond, at "
            f"{ring_px:.0f} px. Print it larger, or with {fewer} cycles.",
            False,
        )
    elif found.rim_px is None:
        yield Work(
            "Let the patch reach beyond the star's rim: what surrounds it tells the contrast of coarse things.", False
        )


def _bars(sites: Sites, values: Floats, station: Station, target: Target, patch: Patch) -> Findings:
    size = patch.region[2:]
    period_px = (patch.period_um or 0.0) / station.object_um_per_px_at(target.depth_mm)
    if period_px < 1 / NYQUIST_CY_PX:
        return [Figure("period", f"{period_px:.2f} px", "2 px or more", False)], [_too_fine()]
    found = read_bars(sites.x, sites.y, values, None, period_px)
    if not found.ok:
        text = f"No bars of {patch.period_um:g} µm ({period_px:.1f} px) are found."
        return [Figure("size", _size(*size))], [Work(f"{text} {NOTE_CODES['pattern-not-found'].remedy}", True)]
    direction = math.radians(found.direction_deg)
    # Along the frequency vector, within the borders that stay out.
    spans = [
        (side - 2 * BARS_BORDER_PX) / max(abs(part), 1e-3)
        for side, part in zip(size, (math.cos(direction), math.sin(direction)), strict=True)
    ]
    periods = min(spans) * found.v_cy_px
    told = bars_contrasts([found], patch.modulation)[0]
    figures = [
        Figure("size", _size(*size)),
        Figure("bars", f"{periods:.1f} periods", f"{PERIODS_WANTED:g} or more", periods >= PERIODS_WANTED),
        Figure("period", f"{1 / found.v_cy_px:.2f} px", f"{period_px:.2f} px by the file"),
        Figure("contrast", "–" if told is None else f"{abs(told.contrast):.2f}", "at the bars' own frequency"),
    ]
    work = []
    if periods < PERIODS_WANTED:
        work.append(
            Work(
                f"Only {periods:.1f} bars with their gaps are in it. Make it larger: {PERIODS_WANTED:g} or more.",
                periods < PERIODS_NEEDED,
            )
        )
    return figures, work


def _tribar(sites: Sites, values: Floats, station: Station, target: Target, patch: Patch) -> Findings:
    size = Figure("size", _size(*patch.region[2:]))
    pixel_um = station.object_um_per_px_at(target.depth_mm)
    found = read_tribar(sites.x, sites.y, values, None, patch.group or 0, pixel_um)
    if not found.ok:
        return [size], [Work(f"No sets of three bars are found. {NOTE_CODES['pattern-not-found'].remedy}", True)]
    smallest = found.smallest
    told = (
        "none" if smallest is None else f"group {smallest.group} element {smallest.element}, {smallest.line_um:.0f} µm"
    )
    off = abs(found.um_per_px / pixel_um - 1)
    figures = [
        size,
        Figure("told apart", told, f"{station.need.feature_um:g} µm, at the stop to be found"),
        Figure("pixel", f"{found.um_per_px:.3g} µm", f"{pixel_um:.3g} µm by the file", off <= SCALE_SHARE),
    ]
    work = []
    if smallest is None:
        work.append(Work("Its largest bars cannot be told apart. Focus, or use a larger target.", False))
    if off > SCALE_SHARE:
        work.append(
            Work(
                f"By its bars a pixel is {found.um_per_px:.3g} µm wide there, by the station file {pixel_um:.3g} µm. "
                "Check object_um_per_px, depth_mm and group.",
                False,
            )
        )
    return figures, work


def _flat(sites: Sites, values: Floats, station: Station, target: Target, patch: Patch) -> Findings:
    width, height = patch.region[2:]
    count = values.shape[1]
    uneven = _unevenness(sites, values[0])
    figures = [
        Figure("size", _size(width, height), f"{LEAST_FLAT_PX} pixels or more", count >= LEAST_FLAT_PX),
        Figure("even", f"within {uneven:.0%}", f"{UNEVEN_SHARE:.0%}", uneven <= UNEVEN_SHARE),
    ]
    work = []
    if uneven > UNEVEN_SHARE:
        work.append(Work("It is not an even tone. Move it to where nothing is printed, or even out the light.", False))
    if count < LEAST_FLAT_PX:
        side = math.ceil(math.sqrt(LEAST_FLAT_PX * width * height / count))
        work.append(
            Work(f"It holds {count} pixels, few for the noise. Make it {_size(side, side)} px or larger.", False)
        )
    return figures, work


def _unevenness(sites: Sites, values: Floats) -> float:
    """Half the range of block means over their mean: slopes and things show, noise hardly does."""
    block = (sites.y // BLOCK_PX).astype(int) * 10_000 + (sites.x // BLOCK_PX).astype(int)
    _, index, counts = np.unique(block, return_inverse=True, return_counts=True)
    means = np.bincount(index, weights=values) / counts
    full = means[counts >= 0.6 * counts.max()]
    return float(np.ptp(full) / 2 / max(float(full.mean()), 1e-9))


def _contrast(at: tuple[float, float] | None, station: Station) -> Figure:
    """The contrast at the feature as the lens stands now; not judged, since the stop may not be the one to use."""
    need = station.need
    value = "–" if at is None else f"{max(0.0, at[0]):.2f}"
    return Figure("contrast", value, f"{need.contrast:g} at {need.feature_um:g} µm, at the stop to be found")


def _too_fine() -> Work:
    return Work(f"{NOTE_CODES['beyond-nyquist'].meaning} {NOTE_CODES['beyond-nyquist'].remedy}", True)


def _size(width: int, height: int) -> str:
    return f"{width} × {height}"


def _towards(off_px: float, across_x: bool) -> str:
    """Which way, and how far: off_px along x or y."""
    side = ("right" if off_px > 0 else "left") if across_x else ("down" if off_px > 0 else "up")
    return f"{side} by {abs(off_px):.0f} px"


def _towards2(off: Sequence[float]) -> str:
    parts = [_towards(o, across_x) for o, across_x in zip(off, (True, False), strict=True) if abs(o) >= 1]
    return " and ".join(parts)
