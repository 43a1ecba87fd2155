"""The probe against the simulated camera, sound and with one defect at a time, and against a real camera protocol."""

import io
import json
import math
import os
import shutil
import subprocess
import sys
import time
from collections import deque
from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
import pytest
from guided import ADDRESS, address_to_itself, small_station
from numpy.testing import assert_allclose
from rich.console import Console
from scipy.signal import lombscargle

import sweep.cameras.formats
import sweep.cameras.present
from sweep import cli
from sweep.cameras import Grab, Settings, open_camera
from sweep.cameras.formats import open_untold
from sweep.cameras.present import Present
from sweep.cameras.simulated_camera import SimulatedCamera, simulate
from sweep.demo import demo_station
from sweep.errors import CameraError, FormatError
from sweep.probe import VERDICTS, Probe, probe
from sweep.probe.light import exposure_step
from sweep.probe.pulse import _explained, evened, find_ripple
from sweep.probe.reach import even_blocks
from sweep.probe.run import unsettled
from sweep.report.probe_json import cameras_json, probe_json
from sweep.screens.probe_table import present_table, probe_table
from sweep.station import Camera as Stated
from sweep.station import Station

HERE = Path(__file__).parent
WELL_E = 10_000.0  # electrons at full scale of the simulated camera
READ_NOISE_E = 5.0
BUDGET_S = 20.0  # what a person is asked to wait at 20 frames a second


def station(**camera: object) -> Station:
    """The demo's station with one edge and one even patch, so that its frames are small."""
    demo = demo_station()
    edge, _, flat = demo.targets[0].patches
    patches = (edge, flat.model_copy(update={"region": (32, 160, 64, 64)}))
    targets = (demo.targets[0].model_copy(update={"patches": patches}),)
    return demo.model_copy(update={"targets": targets, "camera": demo.camera.model_copy(update=camera)})


def simulated(at: Station, seed: int = 1, stop: float = 2.8, **truth: object) -> SimulatedCamera:
    """A simulated camera whose lamp is warm, with other things true of it as asked."""
    sim = replace(simulate(at, np.random.default_rng(seed)), **{"lamp_drift": 0.0, **truth})
    camera = SimulatedCamera(at, sim, np.random.default_rng(seed + 100))
    camera.turn(stop, after_s=0.0, lasts_s=0.01)
    camera.grab(1.0)
    return camera


class Around:
    """A camera with something between it and the probe."""

    def __init__(self, inner):
        self.inner = inner

    def grab(self, timeout_s):
        grab = self.inner.grab(timeout_s)
        return Grab(self.changed(grab.pixels), grab.arrived_s)

    def changed(self, pixels):
        return pixels

    def set(self, *, exposure_ms=None, gain_db=None):
        return self.inner.set(exposure_ms=exposure_ms, gain_db=gain_db)

    def facts(self):
        return self.inner.facts()

    def close(self):
        self.inner.close()


class AutoExposure(Around):
    """Brings its tone back to half of full scale by itself, a part of the way each frame."""

    def __init__(self, inner, speed):
        super().__init__(inner)
        self.speed, self.true_ms = speed, 10.0

    def set(self, *, exposure_ms=None, gain_db=None):
        settings = super().set(exposure_ms=exposure_ms, gain_db=gain_db)
        self.true_ms = exposure_ms
        return settings

    def changed(self, pixels):
        tone = max(0.02, np.quantile(pixels, 0.9) / 4095)
        self.true_ms *= (0.5 / tone) ** self.speed
        self.inner.set(exposure_ms=self.true_ms)
        return pixels


class Deaf(Around):
    """Says yes to every exposure, and takes none of them."""

    def set(self, *, exposure_ms=None, gain_db=None):
        at_s = super().set(exposure_ms=0.9).at_s
        return Settings(exposure_ms, gain_db, at_s)


class Repeating(Around):
    """Every so many frames the one before comes again."""

    def __init__(self, inner, every):
        super().__init__(inner)
        self.every, self.count, self.last = every, 0, None

    def changed(self, pixels):
        self.count += 1
        if self.last is None or self.count % self.every:
            self.last = pixels
        return self.last


class Mapped(Around):
    """Every frame goes through a function."""

    def __init__(self, inner, function):
        super().__init__(inner)
        self.changed = function


class Late(Around):
    """Frames wait in the driver: what is set shows some frames later."""

    def __init__(self, inner, frames):
        super().__init__(inner)
        self.waiting, self.frames = deque(), frames

    def grab(self, timeout_s):
        while len(self.waiting) <= self.frames:
            last = self.inner.grab(timeout_s)
            self.waiting.append(last.pixels)
            self.arrived_s = last.arrived_s
        pixels = self.waiting.popleft()
        return Grab(pixels, self.arrived_s)


class Coarse(Around):
    """Moves its exposure in steps of 0.25 ms, whatever it says."""

    STEP_MS = 0.25

    def set(self, *, exposure_ms=None, gain_db=None):
        at_s = super().set(exposure_ms=max(1, round(exposure_ms / self.STEP_MS)) * self.STEP_MS, gain_db=gain_db).at_s
        return Settings(exposure_ms, gain_db, at_s)


class ByHand(Around):
    """A stream: it comes as it comes, nothing can be set."""

    def set(self, *, exposure_ms=None, gain_db=None):
        return Settings(None, None, self.inner.set().at_s)


class Dying(Around):
    """Sends some frames, then no more."""

    def __init__(self, inner, frames):
        super().__init__(inner)
        self.frames = frames

    def grab(self, timeout_s):
        self.frames -= 1
        if self.frames < 0:
            raise CameraError("The camera sends no picture any more. Check its cable and power.")
        return super().grab(timeout_s)


class Jittering(Around):
    """Frames are noted late by up to some milliseconds."""

    def __init__(self, inner, late_s):
        super().__init__(inner)
        self.late_s, self.last_s, self.rng = late_s, 0.0, np.random.default_rng(3)

    def grab(self, timeout_s):
        grab = self.inner.grab(timeout_s)
        self.last_s = max(self.last_s + 1e-4, grab.arrived_s + abs(self.rng.normal(0, self.late_s)))
        return Grab(grab.pixels, self.last_s)


def smoothed(pixels):
    return cv2.GaussianBlur(pixels, (3, 3), 0.5)


def stretched(pixels):
    return np.minimum(pixels * 1.7, 4095).astype(np.uint16)


def temporal(share):
    """A filter over frames, as noise reduction in a camera is: each frame is mixed with what went out before."""
    before = None

    def mixed(pixels):
        nonlocal before
        now = pixels.astype(np.float64)
        before = now if before is None else share * before + (1 - share) * now
        return np.rint(before).astype(np.uint16)

    return mixed


def of(found: Probe, code: str):
    return next(finding for finding in found.findings if finding.code == code)


def bad(found: Probe) -> dict[str, str]:
    """What is not good, and how bad."""
    return {finding.code: finding.verdict for finding in found.findings if finding.verdict != "good"}


@pytest.mark.parametrize(
    ("camera", "stop", "seed"),
    [
        ({}, 2.8, 1),
        ({"layout": "rggb"}, 8.0, 2),
        ({"bit_depth": 8, "black_level_dn": 4.0, "layout": "bgr"}, 16.0, 3),
    ],
    ids=["mono 12 bit", "mosaic", "colour 8 bit"],
)
def test_a_sound_camera_gives_no_complaint(camera, stop, seed):
    at = station(**camera)
    device = simulated(at, seed, stop)
    found = probe(device, at.camera, edges=[at.targets[0].patches[0].region])
    assert bad(found) == {}
    assert found.verdict == "good"
    assert device.grab(1).arrived_s < BUDGET_S
    assert all(not finding.to_do for finding in found.findings)
    # What comes out is what the simulated camera was made with; EMVA 1288's photon transfer is the way.
    noise = of(found, "noise").figures
    full_dn = 2**at.camera.bit_depth - 1
    assert_allclose(noise["electrons_per_dn"], WELL_E / full_dn, rtol=0.03)
    if at.camera.bit_depth == 12:  # at 8 bits 0.13 DN of read noise hide below the rounding
        assert_allclose(noise["read_noise_e"], READ_NOISE_E, rtol=0.08)
    assert_allclose(of(found, "black").figures["black_level_dn"], at.camera.black_level_dn, atol=0.005 * full_dn**0.5)
    assert of(found, "bit-depth").figures["clips_at_dn"] == full_dn
    assert of(found, "exposure").figures["step_ms"] == pytest.approx(0.01)
    assert of(found, "exposure").figures["least_ms"] == pytest.approx(0.01)
    assert_allclose(of(found, "exposure").figures["least_by_light_ms"], 0.01, atol=0.002 + 3e-4 * found.exposure_ms)
    assert_allclose(of(found, "gain").figures["light_db_at_6_db"], 6.0, atol=0.05)
    assert_allclose(of(found, "gain").figures["light_db_at_12_db"], 12.0, atol=0.05)
    assert_allclose(of(found, "linearity").figures["response_exponent"], 1.0, atol=0.02)
    assert_allclose(of(found, "rate").figures["frame_rate_hz"], 20.0, rtol=1e-6)


DEFECTS = {
    "exposure goes back at once": (lambda c: AutoExposure(c, 0.5), {"automatics": "not fit"}),
    "exposure goes back slowly": (lambda c: AutoExposure(c, 0.08), {"automatics": "not fit"}),
    "exposure is not obeyed": (Deaf, {"automatics": "not fit"}),
    "frames repeated": (lambda c: Repeating(c, 5), {"frames": "take care"}),
    "most frames repeated": (lambda c: Repeating(c, 2), {"frames": "not fit"}),
    "high-aligned": (lambda c: Mapped(c, lambda p: p << 4), {"bit-depth": "take care"}),
    "idle low bits": (lambda c: Mapped(c, lambda p: p >> 2 << 2), {"bit-depth": "take care"}),
    "stretched codes": (lambda c: Mapped(c, stretched), {"bit-depth": "take care"}),
    "smoothed": (lambda c: Mapped(c, smoothed), {"processing": "not fit"}),
    "smoothed over frames": (lambda c: Mapped(c, temporal(0.3)), {"processing": "not fit"}),
    "black clips": (lambda c: Mapped(c, lambda p: np.maximum(p, 110) - 110), {"black": "take care"}),
    "coarse exposures": (Coarse, {"exposure": "not fit"}),
}  # fmt: skip


@pytest.mark.parametrize("name", DEFECTS)
def test_each_defect_is_named_and_nothing_else_is_accused(name):
    around, expected = DEFECTS[name]
    at = station()
    found = probe(around(simulated(at)), at.camera)
    told = {code: verdict for code, verdict in bad(found).items() if verdict != "not told"}
    assert told == expected
    assert found.verdict == max(expected.values(), key=VERDICTS.index)
    for code in expected:
        assert of(found, code).to_do
    # What a defect hides is said to be hidden, and not measured.
    assert all(of(found, code).to_do for code in bad(found))


TRUTHS = {
    "sharpening": ({"sharpening": 0.5}, {"processing": "not fit"}),
    "warming up": ({"lamp_drift": 0.05}, {"drift": "take care"}),
    "pulsing": ({"ripple": 0.05, "ripple_hz": 100.0}, {"flicker": "take care"}),
}


@pytest.mark.parametrize("name", TRUTHS)
def test_what_is_wrong_in_lamp_and_sensor_is_named(name):
    truth, expected = TRUTHS[name]
    at = station()
    found = probe(simulated(at, **truth), at.camera)
    assert {code: verdict for code, verdict in bad(found).items() if verdict != "not told"} == expected


def test_a_gamma_is_found_and_told_as_one():
    at = station(response=2.2, black_level_dn=0.0)
    device = simulated(at)
    found = probe(device, station(black_level_dn=0.0).camera)
    assert of(found, "linearity").verdict == "not fit"
    # Codes go as light to the power 1/2.2.
    assert_allclose(of(found, "linearity").figures["response_exponent"], 1 / 2.2, atol=0.02)
    assert found.verdict == "not fit"
    assert bad(probe(simulated(at), at.camera)) == {}  # once it is stated, all is well


# Lamps on alternating mains pulse at twice its frequency: 100 and 120 Hz (common practice, no source).
@pytest.mark.parametrize(("rate_hz", "lamp_hz"), [(20.0, 100.0), (20.0, 120.0), (25.0, 100.0), (23.0, 271.0)])
def test_the_frequency_of_a_pulsing_lamp_is_told_though_the_frame_rate_hides_it(rate_hz, lamp_hz):
    at = station()
    found = probe(simulated(at, frame_rate_hz=rate_hz, ripple=0.1, ripple_hz=lamp_hz), at.camera)
    finding = of(found, "flicker")
    assert finding.verdict == "take care"
    assert_allclose(finding.figures["flicker_hz"], lamp_hz, atol=0.2)
    assert_allclose(finding.figures["lamp_ripple"], 0.1, rtol=0.05)
    assert finding.figures["might_be_hz"] is None


def test_late_arrivals_do_not_hide_the_frequency():
    at = station()
    device = Jittering(simulated(at, ripple=0.05, ripple_hz=100.0), 0.0015)
    assert_allclose(of(probe(device, at.camera), "flicker").figures["flicker_hz"], 100.0, atol=0.5)


def test_a_rolling_shutter_shows_stripes():
    rng = np.random.default_rng(4)
    time_s = np.cumsum(rng.uniform(0.04, 0.06, 80))
    row_s = 0.03 * np.arange(16) / 16  # 3 periods of 100 Hz from the top to the bottom
    bands = 1000 * (1 + 0.04 * np.cos(2 * np.pi * 100.0 * (time_s[:, None] + row_s)))
    found = find_ripple(time_s, bands + rng.normal(0, 0.5, bands.shape), 20.0)
    assert_allclose((found.hz, found.amplitude, found.turns), (100.0, 0.04, 3.0), rtol=0.01)


def test_noise_alone_is_no_ripple():
    rng = np.random.default_rng(5)
    for _ in range(20):
        time_s = np.cumsum(rng.uniform(0.045, 0.055, 40))
        found = find_ripple(time_s, 1000 + rng.normal(0, 0.3, (40, 1)), 20.0)
        assert found.hz is None
        assert found.amplitude < 0.001


def test_explained_shares_are_those_of_the_general_periodogram():
    # scipy.signal.lombscargle, normalised: the share of the variance that a sine of that frequency explains.
    rng = np.random.default_rng(6)
    time_s = np.sort(rng.uniform(0, 4, 60))
    off = (0.02 * np.sin(2 * np.pi * 7.3 * time_s) + rng.normal(0, 0.01, 60))[:, None]
    hz = np.linspace(1, 30, 200)
    expected = lombscargle(time_s, off[:, 0], 2 * np.pi * hz, normalize=True)
    assert_allclose(_explained(time_s, off, hz, np.zeros((60, 1))), expected, atol=1e-6)


def test_arrival_times_are_evened_out():
    # Frames 50 ms apart, one missing, each noted late by up to 4 ms.
    late_s = np.array([0.004, 0.001, 0.0, 0.003, 0.002])
    place = np.array([0, 1, 2, 4, 5])
    assert_allclose(evened(1.0 + 0.05 * place + late_s, 0.05), 1.0 + 0.05 * place, atol=1e-9)


def test_frames_that_wait_in_the_driver_are_counted():
    at = station()
    found = probe(Late(simulated(at), 3), at.camera)
    assert of(found, "settling").figures["settling_frames"] == 3
    assert bad(found) == {}


def test_settling_counts_frames_away_from_where_the_level_ends():
    assert unsettled(np.array([400.0, 400, 100, 100, 100, 100, 100]), 0.0) == 2
    assert unsettled(np.array([100.0, 101, 100, 99, 100]), 0.0) == 0
    assert unsettled(np.array([100.0, 110, 90, 110, 90, 110, 90]), 0.1) == 0


def test_the_step_is_the_smallest_difference_that_is_read_back():
    assert exposure_step([(1.0, 1.0), (1.01, 1.0), (1.05, 1.1), (1.1, 1.1), (2.0, 2.0)]) == pytest.approx(0.1)
    assert exposure_step([(1.0, 1.0), (1.5, 1.0)]) is None


def test_a_coarse_step_is_told_by_light():
    at = station()
    figures = of(probe(Coarse(simulated(at)), at.camera), "exposure").figures
    assert_allclose(figures["step_by_light_ms"], Coarse.STEP_MS, rtol=0.25)


def test_a_black_level_below_zero_is_told_where_no_pixel_is_dark_enough_to_show_it():
    at = station()
    device = Mapped(simulated(at, stop=1.4), lambda p: np.maximum(p, 110) - 110)
    black = of(probe(device, at.camera), "black")
    assert black.verdict == "take care"
    assert_allclose(black.figures["black_level_dn"], at.camera.black_level_dn - 110, atol=1)


def test_a_camera_that_cannot_be_set_is_judged_by_what_it_sends():
    at = station()
    inner = simulated(at)
    inner.set(exposure_ms=0.8)
    found = probe(ByHand(inner), at.camera)
    assert found.exposure_ms is None
    assert bad(found) == {"automatics": "not told", "linearity": "not told", "exposure": "take care"}
    assert found.verdict == "take care"
    assert "20 Hz stay unseen" in of(found, "flicker").found
    assert len({of(found, code).to_do for code in bad(found)}) == 1
    unstated = probe(ByHand(inner), at.camera.model_copy(update={"black_level_dn": 0.0}))
    assert of(unstated, "noise").hidden_by == "a black level that is not stated"


@pytest.mark.parametrize(("exposure_ms", "word"), [(0.01, "dark"), (30.0, "clips")])
def test_without_usable_light_nothing_else_is_judged(exposure_ms, word):
    at = station()
    inner = simulated(at)
    inner.set(exposure_ms=exposure_ms)
    if word == "dark":
        inner.cap(True)
    found = probe(ByHand(inner), at.camera)
    assert {finding.code for finding in found.findings} == {"light", "bit-depth"}
    assert word in of(found, "light").found
    assert found.verdict == "not fit"


@pytest.mark.parametrize("frames", [0, 1, 30, 100])
def test_a_camera_that_dies_on_the_way_is_a_fault(frames):
    at = station()
    with pytest.raises(CameraError, match="no picture"):
        probe(Dying(simulated(at), frames), at.camera)


def test_a_camera_that_changes_its_frames_is_a_fault():
    at = station()
    count = 0

    def smaller(pixels):
        nonlocal count
        count += 1
        return pixels if count < 20 else np.ascontiguousarray(pixels[:-8])

    with pytest.raises(CameraError, match="size or depth"):
        probe(Mapped(simulated(at), smaller), at.camera)


def test_what_is_told_on_the_way_grows_to_the_end():
    at = station()
    told = []
    probe(simulated(at), at.camera, lambda what, share: told.append((what, share)))
    shares = [share for _, share in told]
    assert shares == sorted(shares)
    assert shares[0] == 0.0
    assert shares[-1] == 1.0
    assert all(what for what, _ in told)


def test_even_blocks_avoid_edges_and_clipped_light():
    frame = np.full((128, 160), 1000, np.float32)
    frame[:, 80:] = 3000
    frame[64:, 120:] = 4095
    even = even_blocks(frame, 16, 4095.0)
    assert even.blocks
    for row, column in even.blocks:
        block = frame[row : row + 16, column : column + 16]
        assert block.min() == block.max() < 4095
    assert {frame[even.blocks[i]] for i in even.bright} == {3000.0}


def a_probe() -> Probe:
    at = station()
    return probe(AutoExposure(simulated(at), 0.5), at.camera)


def test_json_says_all_without_what_json_does_not_know():
    found = a_probe()
    findings = (replace(found.findings[0], figures={"x": math.inf, "y": math.nan, "z": 1 / 3}), *found.findings[1:])
    text = probe_json(replace(found, findings=findings), "genicam:10.0.0.2")
    document = json.loads(text, parse_constant=lambda name: pytest.fail(name))
    assert document["schema"] == "sweep/probe/1"
    assert document["verdict"] == "not fit"
    assert document["source"] == "genicam:10.0.0.2"
    assert [f["code"] for f in document["findings"]] == [f.code for f in found.findings]
    assert {f["verdict"] for f in document["findings"]} <= set(VERDICTS)
    assert document["findings"][0]["figures"] == {"x": None, "y": None, "z": 0.333333}


def printed(pieces, width=80) -> str:
    out = io.StringIO()
    Console(file=out, width=width).print(*pieces, sep="\n")
    return out.getvalue()


def test_the_table_fits_a_terminal_and_says_what_to_do_once():
    found = a_probe()
    text = printed(probe_table(found))
    assert max(map(len, text.splitlines())) <= 80
    for finding in found.findings:
        assert finding.name in text
        assert finding.verdict in text
    assert len(text.splitlines()) < 24
    assert text.startswith("This camera is not fit to measure as it is.")
    flat = " ".join(text.split())
    assert flat.count("hidden by the automatics") == 1
    assert "Mend" not in flat
    assert flat.index("hidden by the automatics") < flat.index("Switch off automatic exposure")


def test_a_sound_camera_fits_into_24_rows_and_the_manual_has_all_its_codes():
    at = station()
    found = probe(simulated(at), at.camera)
    assert len(printed(probe_table(found)).splitlines()) < 24
    manual = (HERE.parent / "docs" / "probe.md").read_text(encoding="utf-8")
    assert all(f"| `{code}` |" in manual for code in ["light", *(finding.code for finding in found.findings)])


@pytest.mark.parametrize(("around", "status"), [(Around, 0), (Deaf, 1), (lambda c: Dying(c, 5), 3)])
@pytest.mark.parametrize("as_json", [False, True])
def test_command_and_exit_status(monkeypatch, capsys, around, status, as_json):
    at = station()

    class Held(Around):
        def __enter__(self):
            return self

        def __exit__(self, *_):
            self.close()

    held = Held(around(simulated(at)))
    monkeypatch.setattr(
        sweep.cameras.formats, "open_untold", lambda source, station: (held, at.camera) if source == "7" else None
    )
    assert cli.main(["probe", "7", *(["--json"] if as_json else [])]) == status
    out, err = capsys.readouterr()
    if status == 3:
        assert out == ""
        assert err == "sweep: The camera sends no picture any more. Check its cable and power.\n"
    elif as_json:
        assert json.loads(out)["verdict"] == ("good" if status == 0 else "not fit")
    else:
        assert "Linearity" in out


@pytest.mark.parametrize(
    ("words", "status", "told"),
    [
        (["nonsense"], 3, "There is no camera 'nonsense'"),
        (["0", "--station", "absent.toml"], 2, "absent.toml"),
        (["0", "1"], 2, "See sweep probe --help."),
        (["folder:absent"], 3, "absent"),
    ],
)
def test_bad_usage_is_one_line(words, status, told, capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert cli.main(["probe", *words]) == status
    out, err = capsys.readouterr()
    assert out == ""
    assert told in err
    assert len(err.splitlines()) == 1


def test_the_cameras_that_are_there_are_listed(monkeypatch, capsys):
    there = [Present("0", "1920 × 1080 px, by V4L2"), Present("genicam:10.0.0.2", "Maker Model 4711")]
    monkeypatch.setattr(sweep.cameras.present, "cameras_present", lambda: (there, ""))
    assert cli.main(["probe"]) == 0
    out = capsys.readouterr().out
    assert "genicam:10.0.0.2" in out
    assert "Maker Model 4711" in out
    assert "sweep probe 0" in out
    assert cli.main(["probe", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["cameras"][0] == {"source": "0", "what": "1920 × 1080 px, by V4L2"}


def test_no_camera_and_no_library_are_said(monkeypatch):
    def missing():
        raise CameraError("GenICam cameras need the library aravis 0.8, which is not here.")

    monkeypatch.setattr(sweep.cameras.present, "found_genicam", missing)
    monkeypatch.setattr(sweep.cameras.present, "_opened", lambda number: "")
    cameras, why = sweep.cameras.present.cameras_present()
    assert (list(cameras), why) == ([], "GenICam cameras need the library aravis 0.8, which is not here.")
    text = printed(present_table(cameras, why))
    assert "No camera is found here." in text
    assert "library aravis" in text
    assert json.loads(cameras_json(cameras, why))["missing"] == why


class OneFormat(Around):
    """A camera that delivers one layout at one depth only, and says so where another is wanted."""

    def __init__(self, asked: Stated, layout, bit_depth, late=False):
        if not late and (asked.layout, asked.bit_depth) != (layout, bit_depth):
            raise FormatError("The camera has none of the pixel formats that are asked for.")
        self.wrong = (asked.layout, asked.bit_depth) != (layout, bit_depth)
        self.shape = (8, 8, 3) if layout == "bgr" else (8, 8)
        self.closed = False

    def grab(self, timeout_s):
        if self.wrong:
            raise FormatError("The camera delivers colour, but camera.layout is 'mono'.")
        return Grab(np.zeros(self.shape, np.uint8), 0.0)

    def close(self):
        self.closed = True


@pytest.mark.parametrize("late", [False, True])
@pytest.mark.parametrize(
    ("source", "layout", "bit_depth"),
    [
        ("0", "bgr", 8),
        ("0", "mono", 16),
        ("http://x/v", "mono", 8),
        ("genicam:", "gbrg", 10),
        ("genicam:a", "mono", 12),
    ],
)
def test_the_format_is_found_by_trial(monkeypatch, source, layout, bit_depth, late):
    opened = []

    def open_one(name, at):
        assert name == source
        opened.append(OneFormat(at.camera, layout, bit_depth, late))
        return opened[-1]

    monkeypatch.setattr(sweep.cameras.formats, "open_camera", open_one)
    camera, stated = open_untold(source, station())
    assert camera is opened[-1]
    assert [one.closed for one in opened] == [True] * (len(opened) - 1) + [False]
    assert (stated.layout, stated.bit_depth, stated.response, stated.black_level_dn) == (layout, None, "linear", 0.0)


def test_a_camera_of_no_known_format_is_refused(monkeypatch):
    monkeypatch.setattr(sweep.cameras.formats, "open_camera", lambda name, at: OneFormat(at.camera, "mono", 14))
    with pytest.raises(FormatError, match="none of the pixel formats"):
        open_untold("genicam:", station())


@pytest.fixture
def gige():
    """Serves a simulated camera over the GigE Vision protocol: our own scene, or what the library aravis brings."""
    fake = shutil.which("arv-fake-gv-camera-0.8")
    if fake is None:
        pytest.skip("arv-fake-gv-camera-0.8 is not installed (Debian package aravis-tools)")
    servers = []

    def serve(own_scene):
        command = [sys.executable, str(HERE / "gige_station.py"), ADDRESS] if own_scene else [fake, "-i", ADDRESS]
        path = {"PYTHONPATH": os.pathsep.join([str(HERE.parent), str(HERE)])}
        servers.append(
            subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=os.environ | path)
        )
        if own_scene:
            assert servers[-1].stdout.readline() == "ready\n"
        else:
            time.sleep(0.5)

    with address_to_itself():
        yield serve
        for server in servers:
            server.kill()
            server.communicate()


def test_over_the_gige_protocol_our_scene_is_sound(gige):
    gige(own_scene=True)
    with open_camera(f"genicam:{ADDRESS}", small_station()) as camera:
        found = probe(camera, small_station().camera)
    # The scene's server takes no gain, and its frames do not slow down for long exposures: both are true findings.
    # A busy computer may lose frames; the light may not differ for it.
    assert set(bad(found)) <= {"gain", "rate", "frames"}
    assert of(found, "gain").verdict == "take care"
    assert_allclose(of(found, "noise").figures["electrons_per_dn"], WELL_E / 4095, rtol=0.03)
    assert of(found, "linearity").figures["deviation"] < 0.01
    assert of(found, "bit-depth").figures["significant_bits"] == 12


def test_over_the_gige_protocol_a_moving_bent_picture_is_not_fit(gige, capsys):
    # The library's own picture: a ramp that moves, of a level that goes with the logarithm of the exposure.
    gige(own_scene=False)
    assert cli.main(["probe"]) == 0
    assert f"genicam:{ADDRESS}" in capsys.readouterr().out
    assert cli.main(["probe", "genicam:", "--json"]) == 1
    document = json.loads(capsys.readouterr().out)
    assert document["device"]["device"] == "Aravis Fake"
    assert document["device"]["pixel_format"] == "Mono16"
    assert document["device"]["times_lost"] == 0
    verdicts = {finding["code"]: finding["verdict"] for finding in document["findings"]}
    assert verdicts["automatics"] == "not fit"
    assert verdicts["frames"] != "not fit"


def test_exposures_beyond_a_genicam_cameras_bounds_become_its_least(gige):
    gige(own_scene=False)
    with open_camera(f"genicam:{ADDRESS}", small_station()) as camera:
        assert camera.set(exposure_ms=1e-6).exposure_ms == pytest.approx(0.01)  # 10 us, its least
        camera.grab(3.0)
        assert camera.facts()["times_lost"] == 0
