"""Each notice: a sweep that has what it tells, by name, and sound sweeps that have none.

Frames come from the simulated station; what goes wrong is done to them, or to the table of shots, afterwards.
"""

from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest
from lenses import TRUTH
from scipy.ndimage import gaussian_filter, gaussian_filter1d
from sweeps import (
    a_lane,
    a_sweep,
    at_exposures,
    scaled,
    with_camera,
    with_frames,
    with_notes,
    with_shots,
    with_stops_of,
)

from sweep.analyse import analyse
from sweep.cameras.simulated_print import Print
from sweep.figures import reading_of
from sweep.light import light_of
from sweep.notices import notices
from sweep.notices.lamp import row_ripple
from sweep.outlook import Discrepancy
from sweep.readings import measure_sweep
from sweep.result import NOTE_CODES, Note
from sweep.station import Patch

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0)
FLOOR, RIM = "tray floor", "cap rim"


@lru_cache(maxsize=1)
def lane():
    """Two targets, six stops."""
    return a_lane(STOPS, (6.0, -4.0))


def base(**effects):
    return a_sweep(lane(), **effects)


def noticed(sweep, station=None):
    """What pixels and light tell, by code: the texts."""
    station = station or lane()
    seen = measure_sweep(sweep, station)
    readings = [reading_of(s, station) for s in seen.sightings]
    nothing = Discrepancy(np.zeros(len(seen.stops)), 0.0, 0)
    return by_code(notices(seen, readings, light_of(seen), None, nothing, station, compressed=False))


def answered(sweep, station=None):
    """All notices of an answer by code: the texts."""
    return by_code(analyse(sweep, station or lane()).warnings)


def by_code(notes):
    found = {}
    for note in notes:
        found.setdefault(note.code, []).append(note.text)
    return found


def only(found, code, *names):
    """The one text of a code, that is the only code, with all names in it."""
    assert set(found) == {code}
    return named(found, code, *names)


def named(found, code, *names):
    """The first text of a code, with all names in it."""
    text = found[code][0]
    for name in names:
        assert name in text
    return text


def in_patch(sweep, change, target=0, margin=8):
    """Each frame with `change(rows)` of one target's edge region and a margin about it; rows as floats."""
    x, y, w, h = lane().targets[target].patches[0].region

    def changed(shot, pixels):
        out = pixels.astype(float)
        cut = np.s_[y - margin : y + h + margin, x - margin : x + w + margin]
        out[cut] = change(out[cut])
        return out.round().astype(np.uint16)

    return with_frames(sweep, changed)


def moved_rows(rows, by_px):
    """Each row moved sideways by its own amount."""
    x = np.arange(rows.shape[1])
    return np.array([np.interp(x - by, x, row) for row, by in zip(rows, by_px, strict=True)])


# Sound sweeps.

CAMERAS = [{}, {"bit_depth": 8, "black_level_dn": 2}, {"layout": "rggb"}]
COLOUR = {"layout": "bgr", "bit_depth": 8, "black_level_dn": 2, "response": 2.2}


@pytest.mark.parametrize("camera", [*CAMERAS, COLOUR], ids=["12 bit", "8 bit", "rggb", "8-bit colour, gamma 2.2"])
def test_a_sound_sweep_has_none(camera):
    station = a_lane(STOPS, (6.0, -4.0), camera=camera)
    sound = a_sweep(station, seed=2, ring=(1.01, 0.99, 1.0, 1.02, 0.985, 1.0), lamp_drift=0.01)
    assert answered(sound, station) == {}


def test_several_exposures_are_no_fault():
    assert answered(at_exposures(lane(), (0.5, 1.0, 1.0))) == {}


# Frames.


def test_frames_saturated():
    clipped = scaled(base(), lambda shot: 2.0 if shot.stop == 4.0 else 1.0)
    clipped = with_shots(clipped, lambda s: replace(s, exposure_ms=2.0 * s.exposure_ms) if s.stop == 4.0 else s)
    only(noticed(clipped), "frames-saturated", "f/4", FLOOR, RIM, "shorter")


def test_low_signal():
    dim = scaled(base(), lambda shot: 1 / 1500 if shot.stop == 4.0 else 1.0)
    dim = with_shots(dim, lambda s: replace(s, exposure_ms=s.exposure_ms / 1500) if s.stop == 4.0 else s)
    named(noticed(dim), "low-signal", "f/4", FLOOR, RIM)


def test_too_few_frames():
    few = with_shots(base(), lambda s: None if s.stop == 4.0 and s.file != "f4_0.png" else s)
    only(noticed(few), "too-few-frames", "f/4")


def test_frames_identical():
    sweep = base()
    copied = with_frames(sweep, lambda s, pixels: sweep.frames["f4_0.png"] if s.file == "f4_1.png" else pixels)
    only(noticed(copied), "frames-identical", "f4_0.png", "f4_1.png")


def test_bit_depth():
    only(noticed(with_frames(base(), lambda s, pixels: pixels >> 2 << 2)), "bit-depth", "2 of 12", "10 bits")


def test_what_the_reader_noticed_comes_along():
    codes = ("frame-missing", "frame-unreadable", "recording-changed", "compressed-source")
    notes = [Note(code, f"f4_1.png: {NOTE_CODES[code].meaning} {NOTE_CODES[code].remedy}") for code in codes]
    assert analyse(with_notes(base(), *notes), lane()).warnings == tuple(notes)


# The ring.


def test_light_unchanged():
    only(noticed(base(ring=(1, 1, 1, 2.8 / 4, 1, 1))), "light-unchanged", "f/2.8", "f/4", "not turned")


def test_stop_order():
    swapped = {4.0: 5.6, 5.6: 4.0}
    mixed = with_shots(base(), lambda s: replace(s, stop=swapped.get(s.stop, s.stop)))
    named(noticed(mixed), "stop-order", "f/4", "f/5.6")


def test_ring_off():
    only(noticed(base(ring=(1, 1, 1, 1.15, 1, 1))), "ring-off", "f/4:", "f/4.6")


def test_ring_off_at_one_frame():
    only(noticed(scaled(base(), lambda s: 1.1 if s.file == "f4_1.png" else 1.0)), "ring-off", "f/4", "+10 %")


# The lamp.


def test_light_drift():
    # With a second visit to the first stop at the end the ring can't be to blame.
    late = with_shots(base(), lambda s: replace(s, time_s=40.0) if s.file == "f1.4_2.png" else s)
    text = only(noticed(scaled(late, lambda s: 1.0 + 0.08 * s.time_s / 40.0)), "light-drift")
    assert "+7." in text or "+8." in text


def test_flicker_from_frame_to_frame():
    rng = np.random.default_rng(0)
    level = {shot.file: 1.0 + 0.04 * rng.standard_normal() for shot in base().shots}
    only(noticed(scaled(base(), lambda s: level[s.file])), "flicker", "frame to frame")


def test_flicker_over_the_rows():
    sweep = base()

    def lamp(shot):
        phase = 2.4 * sweep.shots.index(shot)
        return 1.0 + 0.02 * np.sin(2 * np.pi * np.arange(162)[:, None] / 20.0 + phase)

    text = only(noticed(scaled(sweep, lamp)), "flicker", "rows apart")
    assert "20 rows" in text


def test_bands_that_are_no_line_are_no_ripple():
    rng = np.random.default_rng(1)
    white = [1.0 + 0.01 * rng.standard_normal((3, 200)) for _ in range(4)]
    assert row_ripple(white) is None
    slow = [1.0 + 0.02 * np.linspace(-1, 1, 200) * np.ones((3, 1)) * rng.choice([-1, 1], (3, 1)) for _ in range(4)]
    assert row_ripple(slow) is None
    assert row_ripple([]) is None


# Movement.


def test_vibration():
    text = only(noticed(base(vibration_px=0.25)), "vibration", "px (rms)")
    assert 0.15 < float(text.split(" px")[0].split()[-1]) < 0.35


def test_one_target_moved():
    def nudged(shot, pixels):
        out = pixels.copy()
        if shot.stop == 4.0:
            out[:, 2:82] = np.roll(out[:, 2:82], 2, axis=1)
        return out

    text = only(noticed(with_frames(base(), nudged)), "target-moved", "f/4", FLOOR, "2.0 px")
    assert RIM not in text


def test_the_camera_moved():
    rolled = with_frames(base(), lambda s, pixels: np.roll(pixels, 2, axis=1) if s.stop == 4.0 else pixels)
    only(noticed(rolled), "target-moved", "f/4", "every target", "camera")


def test_focus_moved():
    touched = with_stops_of(base(), base(lens=replace(TRUTH, focus_offset_mm=5.0)), lambda stop: stop >= 4.0)
    only(answered(touched), "focus-moved", "f/4", "mm")


# Patches.


def test_edge_angle():
    prints = tuple((Print(tilt_deg=tilt), Print(light=0.5)) for tilt in (20.0, 5.0))
    text = only(noticed(base(prints=prints)), "edge-angle", FLOOR, "patch 0", "f/1.4")
    assert RIM not in text


def test_edge_not_found():
    even = in_patch(base(), lambda rows: np.broadcast_to(rows[:, 10:11], rows.shape), margin=0)
    only(noticed(even), "edge-not-found", FLOOR, "patch 0")


def test_a_bowed_edge():
    bowed = in_patch(base(), lambda rows: moved_rows(rows, 3.0 * np.linspace(-1.2, 1.2, len(rows)) ** 2))
    named(noticed(bowed), "edge-not-straight", FLOOR, "patch 0", "bows by")


def test_a_ragged_edge():
    by_px = 0.9 * gaussian_filter1d(np.random.default_rng(0).standard_normal(88), 2.0)
    named(noticed(in_patch(base(), lambda rows: moved_rows(rows, by_px))), "edge-not-straight", FLOOR, "wanders")


def test_pattern_not_found():
    floor, rim = lane().targets
    star = Patch(kind="star", region=floor.patches[0].region, cycles=24)
    station = lane().model_copy(
        update={"targets": (floor.model_copy(update={"patches": (star, floor.patches[1])}), rim)}
    )
    only(noticed(base(), station), "pattern-not-found", FLOOR, "patch 0")


def test_beyond_nyquist():
    station = a_lane(STOPS, (6.0, -4.0), feature_um=50.0)
    named(noticed(base(), station), "beyond-nyquist", "50 um", FLOOR, RIM)


# The camera.


@pytest.mark.parametrize("amount", [0.25, 0.6])
def test_sharpening_in_the_camera(amount):
    named(noticed(base(sharpening=amount)), "processed-image")


def test_smoothing_in_the_camera():
    smooth = with_frames(base(), lambda s, p: gaussian_filter(p.astype(float), 0.6).round().astype(np.uint16))
    named(noticed(smooth), "processed-image", "correlated")


def test_compressed_images_are_not_called_processed():
    smooth = with_frames(base(), lambda s, p: gaussian_filter(p.astype(float), 0.6).round().astype(np.uint16))
    jpeg = Note("compressed-source", "12 frames are JPEG files. Record PNG or TIFF files.")
    assert set(answered(with_notes(smooth, jpeg))) == {"compressed-source"}


@pytest.mark.parametrize(
    ("is_", "stated"), [(2.2, "linear"), ("srgb", "linear"), ("linear", 2.2)], ids=["gamma", "srgb", "linear"]
)
def test_a_response_that_is_not_as_stated_by_the_noise(is_, stated):
    true = with_camera(lane(), response=is_)
    named(noticed(a_sweep(true), with_camera(true, response=stated)), "response-not-linear", repr(stated), "noise")


def test_a_response_that_is_not_as_stated_by_the_exposures():
    true = with_camera(lane(), response=2.2)
    found = noticed(at_exposures(true, (0.5, 1.0, 1.0)), with_camera(true, response="linear"))
    named(found, "response-not-linear", "'linear'", "Longer exposures")


# The model.


def test_model_misfit():
    # Coma is not in the model.
    found = answered(base(lens=replace(TRUTH, coma_waves=0.8, coma_deg=30.0)))
    only(found, "model-misfit", "f/1.4", "tilt")


def test_optimum_outside():
    station = a_lane((1.4, 2.0, 2.8), (6.0, -4.0))
    only(answered(a_sweep(station), station), "optimum-outside", "f/2.8")


def test_no_reading_where_the_model_expects_the_best():
    def lost(shot, pixels):
        return np.full_like(pixels, 4095) if shot.stop == 4.0 else pixels

    named(answered(with_frames(base(), lost)), "no-reading", "f/4", "again")


# All of them.


def test_notices_come_in_the_order_of_the_table():
    swapped = {1.4: 2.0, 2.0: 1.4}
    sweep = with_shots(base(vibration_px=0.25), lambda s: replace(s, stop=swapped.get(s.stop, s.stop)))
    codes = list(noticed(with_frames(sweep, lambda s, p: p >> 2 << 2)))
    assert len(codes) >= 3
    assert codes == sorted(codes, key=list(NOTE_CODES).index)


def test_every_code_says_what_it_means_and_what_to_do():
    for code in NOTE_CODES.values():
        assert code.meaning.endswith(".")
        assert code.remedy.endswith(".")
