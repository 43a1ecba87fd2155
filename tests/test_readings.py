"""From frames to what each patch says, on small sweeps of the simulated station whose exact answers are known.

The simulated station forms its images by a two-dimensional pupil transform and counts photons (tests/sweeps.py).
"""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from sweeps import a_lane, a_sweep, a_truth, at_exposures, shuffled, with_frames, with_notes, with_shots

from sweep.cameras.simulated import RenderedSweep, station_truth
from sweep.errors import SourceError
from sweep.figures import reading_of
from sweep.readings import measure_sweep
from sweep.result import Note

TWO = {"stops": (2.8, 5.6), "depths": (4.0, -4.0)}


def told(sweep, station):
    """Readings by (stop, target, patch)."""
    readings = [reading_of(s, station) for s in measure_sweep(sweep, station).sightings]
    return {(r.stop, r.target, r.patch): r for r in readings}


def off_truth(station, sim, sweep):
    """Relative error of the half modulation and error of the contrast, each with its u, of all edges."""
    readings, halves, contrasts = told(sweep, station), [], []
    for stop in station_truth(station, sim):
        for patch in stop.patches:
            reading = readings[stop.stop, patch.target, patch.patch]
            assert reading.ok, reading.why_not
            halves.append((reading.mtf50_cy_px - patch.mtf50_cy_px, reading.mtf50_cy_px_u, patch.mtf50_cy_px))
            contrasts.append((reading.contrast_at_feature - patch.contrast_at_feature, reading.contrast_at_feature_u))
    return np.array(halves).T, np.array(contrasts).T


# Truth.


@pytest.mark.parametrize(
    "camera",
    [
        {},
        {"bit_depth": 8, "black_level_dn": 4},
        {"layout": "rggb"},
        {"layout": "gbrg", "bit_depth": 10},
        {"layout": "bgr", "bit_depth": 8, "black_level_dn": 2, "response": 2.2},
        {"response": "srgb"},
    ],
    ids=["12 bit", "8 bit", "rggb", "gbrg 10 bit", "8-bit colour, gamma 2.2", "srgb"],
)
def test_readings_of_any_camera_hold_the_truth(camera):
    # 4 edges, two figures: one of 8 lies beyond 3.5 u once in 250 trials (normal distribution)
    station = a_lane(**TWO, camera=camera)
    (half, half_u, true_half), (contrast, contrast_u) = off_truth(station, a_truth(station), a_sweep(station))
    assert np.abs(half / half_u).max() < 3.5
    assert np.abs(contrast / contrast_u).max() < 3.5
    assert np.abs(half / true_half).max() < 0.03
    assert np.abs(contrast).max() < 0.015


def test_the_camera_is_told_from_even_areas():
    station = a_lane(**TWO)
    sim = a_truth(station, read_noise_e=6.0)
    sweep = measure_sweep(a_sweep(station, read_noise_e=6.0, frames=4), station)
    transfer = sweep.photon_transfer
    gain = transfer.dn_per_electron * sim.electrons_per_dn
    assert_allclose(gain, 1.0, atol=4 * transfer.dn_per_electron_u * sim.electrons_per_dn)
    assert_allclose(gain, 1.0, atol=0.03)
    assert_allclose(transfer.dark_noise_dn * sim.electrons_per_dn, 6.0, rtol=0.05)


# The walk.


class Counted:
    """A source that counts how often each frame is read."""

    def __init__(self, sweep: RenderedSweep) -> None:
        self.sweep, self.read_files = sweep, []
        self.shots, self.bit_depth, self.sha256, self.notes = sweep.shots, sweep.bit_depth, sweep.sha256, sweep.notes

    def read(self, shot):
        self.read_files.append(shot.file)
        return self.sweep.read(shot)


def test_each_frame_is_read_once_and_progress_is_told():
    station, steps = a_lane(**TWO), []
    source = Counted(a_sweep(station))
    measure_sweep(source, station, lambda done, every: steps.append((done, every)))
    assert sorted(source.read_files) == sorted(s.file for s in source.shots)
    assert steps == [(k + 1, 8) for k in range(8)]


def test_no_reading_changes_when_rows_change_places():
    station = a_lane(**TWO)
    untimed = with_shots(a_sweep(station), lambda shot: replace(shot, time_s=None))
    assert told(untimed, station) == told(shuffled(untimed), station)


def test_without_target_frames_there_is_nothing_to_measure():
    station = a_lane(**TWO)
    darks = with_shots(a_sweep(station), lambda shot: shot if shot.role == "dark" else None)
    with pytest.raises(SourceError, match="No target frames"):
        measure_sweep(darks, station)


def test_a_frame_that_speaks_for_one_target_counts_for_no_other():
    station = a_lane(**TWO)
    sweep = a_sweep(station)
    names = [t.name for t in station.targets]

    def for_one(shot):
        return replace(shot, target=names[int(shot.file[-5]) % 2]) if shot.role == "target" else shot

    sightings = measure_sweep(with_shots(sweep, for_one), station).sightings
    assert {(station.targets[s.site.target].name, s.frames) for s in sightings} == {(names[0], 2), (names[1], 1)}


# Black.


def test_black_comes_from_the_dark_frames():
    station = a_lane(**TWO)
    sweep = with_frames(a_sweep(station), lambda shot, pixels: pixels + np.uint16(20))
    black = measure_sweep(sweep, station).black
    assert black.from_dark_frames
    # 2 frames of 25,000 pixels of 5 electrons, and rounding: 0.01 DN
    assert_allclose(black.level_dn, 84.0, atol=0.05)


@pytest.mark.parametrize("darks", [0, 2], ids=["no dark frames", "dark frames that clip at zero"])
def test_black_is_as_stated(darks):
    station = a_lane(**TWO, camera={"black_level_dn": 0.5})
    black = measure_sweep(a_sweep(station, darks=darks), station).black
    assert (black.level_dn, black.from_dark_frames, black.noise) == (0.5, False, ())


# Exposures.


def test_frames_of_several_exposures_are_pooled_and_clipped_ones_left_out():
    station = a_lane(**TWO)
    sweep = at_exposures(station, (0.3, 0.6, 1.0, 1.0, 3.0))
    sightings = measure_sweep(sweep, station).sightings
    edges = [s for s in sightings if s.kind == "edge"]
    flats = [s for s in sightings if s.kind == "flat"]
    # at three times the exposure the light side (0.6 x 3) is clipped, an even tone of 0.5 (0.33 x 3) just so
    assert all(s.frames == 4 and s.saturated_fraction == 0.0 for s in edges)
    assert all(s.frames in (4, 5) for s in flats)
    (half, half_u, true_half), _ = off_truth(station, a_truth(station), sweep)
    assert np.abs(half / half_u).max() < 3.5
    assert np.abs(half / true_half).max() < 0.03


def test_light_does_not_depend_on_the_exposure():
    station = a_lane(**TWO)
    sweep = measure_sweep(at_exposures(station, (0.3, 1.0)), station)
    for s in sweep.sightings:
        assert_allclose(s.frame_light[0], s.frame_light[1], rtol=5e-3)


@pytest.mark.parametrize("gain_db", [0.0, 6.0])
def test_gain_is_light_that_was_not_there(gain_db):
    # 20 log10: 6.0206 dB double the signal (EMVA 1288)
    station = a_lane(**TWO)
    plain = at_exposures(station, (0.5, 0.5))
    doubled = with_frames(
        plain, lambda shot, pixels: ((pixels - 64.0) * 10 ** (gain_db / 20.0) + 64.0).round().astype(np.uint16)
    )
    doubled = with_shots(doubled, lambda shot: replace(shot, gain_db=gain_db))
    light, more = (measure_sweep(s, station).sightings for s in (plain, doubled))
    assert_allclose([s.frame_light.mean() for s in more], [s.frame_light.mean() for s in light], rtol=1e-3)


def test_a_stop_that_is_clipped_throughout_is_not_read():
    station = a_lane(**TWO)
    readings = told(at_exposures(station, (3.0, 3.0), stops=(2.8,)), station)
    for (stop, _, patch), reading in readings.items():
        if patch == 0:
            assert reading.ok == (stop == 5.6)
            assert ("frames-saturated" in reading.why_not) == (stop == 2.8)
            assert (reading.mtf50_cy_px is None) == (stop == 2.8)
            assert (reading.saturated_fraction > 0.2) == (stop == 2.8)


WELLS = {"full_well_e": 7000.0}  # of 10,000 electrons that the codes have room for: the wells are full at 0.7


@pytest.mark.parametrize("camera", [{}, {"bit_depth": 8, "black_level_dn": 2}, {"layout": "rggb"}, {"response": 2.2}])
def test_a_full_well_below_the_top_code_is_clipped(camera):
    # The light side of an edge is half of its patch.
    station = a_lane(**TWO, camera=camera)
    for level, full in [(0.6, False), (0.8, True)]:
        sightings = measure_sweep(a_sweep(station, level=level, **WELLS), station).sightings
        for s in [s for s in sightings if s.kind == "edge"]:
            assert s.ok != full
            assert ("frames-saturated" in s.why_not) == full
            assert_allclose(s.saturated_fraction, 0.5 if full else 0.0, atol=0.05 * full)


def test_noise_that_does_not_fall_is_no_full_well():
    station = a_lane(**TWO)
    shaken = measure_sweep(a_sweep(station, vibration_px=0.4), station)
    coarse = measure_sweep(with_frames(a_sweep(station, frames=2), lambda s, p: p // 16 * 16), station)
    assert {s.saturated_fraction for s in (*shaken.sightings, *coarse.sightings)} == {0.0}


def test_compression_that_takes_the_noise_of_the_light_side_is_no_full_well():
    station = a_lane(**TWO)
    steady = with_frames(a_sweep(station), lambda s, p: np.where(p > 2200, 2600, p).astype(np.uint16))
    jpeg = Note("compressed-source", "6 frames are JPEG files. Record PNG or TIFF files.")
    for sweep, full in [(steady, True), (with_notes(steady, jpeg), False)]:
        edges = [s for s in measure_sweep(sweep, station).sightings if s.kind == "edge"]
        assert {s.saturated_fraction > 0 for s in edges} == {full}


def test_a_pixel_is_clipped_when_any_channel_is():
    station = a_lane(**TWO, camera={"layout": "bgr", "bit_depth": 8, "black_level_dn": 2})

    def red_is_full(shot, pixels):
        pixels = pixels.copy()
        pixels[30:50, 20:60, 2] = 255
        return pixels

    sightings = measure_sweep(with_frames(a_sweep(station), red_is_full), station).sightings
    first = [s for s in sightings if (s.site.target, s.site.patch) == (0, 0)]
    # 20 x 40 pixels of 56 x 72
    assert_allclose([s.saturated_fraction for s in first], 800 / 4032, rtol=1e-9)
    assert all("frames-saturated" in s.why_not for s in first)


def test_hardly_any_light():
    station = a_lane(**TWO)
    dim = with_frames(a_sweep(station), lambda shot, pixels: (64 + (pixels - 64.0) / 1500).round().astype(np.uint16))
    assert {code for r in told(dim, station).values() for code in r.why_not} == {"low-signal"}


def test_many_frames_are_pooled_without_changing_their_noise():
    station = a_lane(stops=(2.8, 5.6), depths=(0.0,))
    few, many = (a_sweep(station, frames=n, darks=0) for n in (4, 70))
    one, other = (measure_sweep(s, station).photon_transfer for s in (few, many))
    assert_allclose(other.dn_per_electron, one.dn_per_electron, rtol=0.03)
    assert [s.frames for s in measure_sweep(many, station).sightings] == [70] * 4


# What is noticed on the way.


def test_frames_that_are_the_same_bit_for_bit():
    station = a_lane(**TWO)
    sweep = a_sweep(station)
    copied = with_frames(
        sweep, lambda shot, pixels: sweep.frames["f2.8_0.png"] if shot.file == "f2.8_2.png" else pixels
    )
    assert measure_sweep(copied, station).identical == (("f2.8_0.png", "f2.8_2.png"),)
    assert measure_sweep(sweep, station).identical == ()


@pytest.mark.parametrize("bits", [0, 2, 4])
def test_low_bits_that_never_change(bits):
    station = a_lane(**TWO)
    idle = with_frames(a_sweep(station), lambda shot, pixels: (pixels >> bits) << bits)
    assert measure_sweep(idle, station).idle_bits == bits


def test_rows_are_held_against_the_mean_of_their_stop():
    station = a_lane(**TWO)

    def banded(shot, pixels):
        rows = 1.0 + 0.02 * np.sin(2 * np.pi * np.arange(len(pixels)) / 20.0 + int(shot.file[-5]) * 2.1)
        return (64 + (pixels - 64.0) * rows[:, None]).round().astype(np.uint16)

    sweep = measure_sweep(with_frames(a_sweep(station, darks=0), banded), station)
    assert [r.shape for r in sweep.row_light] == [(3, sweep.frame_shape[0])] * 2
    spectrum = np.abs(np.fft.rfft(sweep.row_light[0], axis=1)).mean(axis=0)[2:]
    assert_allclose(sweep.frame_shape[0] / (np.argmax(spectrum) + 2), 20.0, rtol=0.1)


def test_the_light_tone_is_that_of_the_brightest_channel():
    # Green's share of the light is 1, blue's 0.7, red's 0.8 (SimulatedStation).
    station = a_lane(**TWO, camera={"layout": "rggb"})
    shares = (0.7, 1.0, 0.8)
    sightings = measure_sweep(a_sweep(station), station).sightings
    plain = a_lane(**TWO)
    same = measure_sweep(a_sweep(plain), plain).sightings
    assert_allclose([s.tone_per_ms for s in sightings], [s.tone_per_ms * max(shares) for s in same], rtol=0.01)
    redder = measure_sweep(a_sweep(station, colour_bgr=(0.7, 1.0, 1.5)), station).sightings
    told_by = [(r.tone_per_ms, p.tone_per_ms) for r, p in zip(redder, same, strict=True) if r.ok]
    assert told_by
    assert_allclose([red / plain for red, plain in told_by], 1.5, rtol=0.01)
