"""The station file: what is read, what is refused and in which words, and the geometry that follows from it."""

import re
import tomllib
from pathlib import Path

import numpy as np
import pytest
import tomlkit
from hypothesis import example, given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from references import facts

from sweep.errors import StationError
from sweep.station import build_station, check_regions, parse_station

DOCS = Path(__file__).parent.parent / "docs" / "station-file.md"
WHOLE = re.search(r"```toml\n(.*?)```", DOCS.read_text(encoding="utf-8"), re.DOTALL)[1]

LEAST = """
station = { name = "Vial cap lane" }
lens = { focal_length_mm = 16, stops = [2, 2.8] }
camera = { pixel_pitch_um = 3.45 }
scene = { object_um_per_px = 58, wavelength_nm = 530 }
need = { feature_um = 180, contrast = 0.2, level = 0.7, max_exposure_ms = 4 }
[[targets]]
name = "tray floor"
depth_mm = 0
patches = [{ kind = "edge", region = [0, 0, 80, 100] }]
"""


def refusal(text):
    with pytest.raises(StationError) as caught:
        parse_station(text)
    message = str(caught.value)
    assert 1 <= len(message.splitlines()) <= 4
    return message


def with_key(place, value):
    """The least station file with one key set: `place` is dotted, list indices are numbers."""
    data = tomllib.loads(LEAST)
    *above, last = [int(p) if p.isdigit() else p for p in place.split(".")]
    table = data
    for part in above:
        table = table[part]
    table[last] = value
    return data


def refusal_of_key(place, value):
    with pytest.raises(StationError) as caught:
        build_station(with_key(place, value))
    return str(caught.value)


def test_the_example_of_the_manual_is_a_station_file_that_uses_every_key():
    station = parse_station(WHOLE)
    assert station.targets[0].patches[1].modulation == 0.9
    assert station.need.depth_range_mm == (-8.0, 0.0)
    tables = [station.station, station.lens, station.camera, station.scene, station.need, *station.targets]
    for table in tables:
        assert table.model_fields_set == set(type(table).model_fields), type(table)
    used = {key for target in station.targets for patch in target.patches for key in patch.model_fields_set}
    assert used == set(type(station.targets[0].patches[0]).model_fields)


def test_the_manual_names_every_key():
    text = DOCS.read_text(encoding="utf-8")
    station = parse_station(WHOLE)
    tables = [station.station, station.lens, station.camera, station.scene, station.need, station.targets[0]]
    for table in [*tables, station.targets[0].patches[0]]:
        for key in type(table).model_fields:
            assert f"| `{key}` |" in text, key


def test_absent_keys_have_the_stated_defaults():
    station = parse_station(LEAST)
    assert station.camera.layout == "mono"
    assert station.camera.response == "linear"
    assert station.camera.bit_depth is None
    assert station.camera.black_level_dn == 0
    assert station.lens.pupil_magnification == 1
    assert station.scene.bandwidth_nm == 0
    need = station.need
    assert (need.max_gain_db, need.min_snr_db, need.flicker_hz, need.confidence) == (0, None, 0, 0.95)
    assert (need.part_contrast, need.depth_range_mm, need.speed_mm_s, need.blur_px) == (1, None, None, None)


@pytest.mark.parametrize("change", [lambda t: "\ufeff" + t, lambda t: t.replace("\n", "\r\n"), lambda t: t.strip()])
def test_byte_order_marks_and_line_ends_do_not_matter(change):
    assert parse_station(change(WHOLE)) == parse_station(WHOLE)


def test_a_tomlkit_document_builds_the_same_station():
    assert build_station(tomlkit.parse(WHOLE).unwrap()) == parse_station(WHOLE)


def test_whole_numbers_stand_for_floats():
    assert isinstance(parse_station(LEAST).lens.focal_length_mm, float)


@pytest.mark.parametrize(
    ("place", "value", "allowed"),
    [
        ("lens.focal_length_mm", -16.0, "a number above 0"),
        ("lens.focal_length_mm", 0, "a number above 0"),
        ("lens.focal_length_mm", float("nan"), "a number above 0"),
        ("lens.focal_length_mm", float("inf"), "a number above 0"),
        ("lens.focal_length_mm", "16", "a number above 0"),
        ("lens.focal_length_mm", True, "a number above 0"),
        ("lens.focal_length_mm", [16], "a number above 0"),
        ("lens.focal_length_mm", 10**400, "a number above 0"),
        ("lens.pupil_magnification", 0, "a number above 0"),
        ("lens.model", 3, "the path of a result.json"),
        ("lens.model", "", "the path of a result.json"),
        ("lens.stops", [2.8, 2], "widest (smallest) first"),
        ("lens.stops", [2, 2, 2.8], "widest (smallest) first"),
        ("lens.stops", [], "at least two"),
        ("lens.stops", [2], "at least two"),
        ("lens.stops", 2, "at least two"),
        ("lens.stops", [2, "2.8"], "at least two"),
        ("lens.stops", [0, 2], "at least two"),
        ("station.name", " ", "one line, not empty"),
        ("station.name", "a\x1b[2Jb", "one line, not empty"),
        ("camera.bit_depth", 7, "from 8 to 16"),
        ("camera.bit_depth", 12.0, "from 8 to 16"),
        ("camera.bit_depth", 17, "from 8 to 16"),
        ("camera.layout", "rgb", '"bgr"'),
        ("camera.response", "gamma", '"srgb"'),
        ("camera.response", 0, "display gamma"),
        ("camera.response", False, "display gamma"),
        ("camera.black_level_dn", -1, "0 or more"),
        ("camera.exposure_step_ms", 0, "above 0"),
        ("scene.object_um_per_px", 0, "above 0"),
        ("scene.bandwidth_nm", 530, "below scene.wavelength_nm"),
        ("targets.0.depth_mm", "0", "a number"),
        ("targets.0.depth_mm", float("nan"), "a number"),
        ("targets.0.name", "", "one line, not empty"),
        ("targets.0.patches", [], "at least one"),
        ("targets.0.patches", 3, "at least one"),
        ("targets.0.patches.0.kind", "corner", '"tribar"'),
        ("targets.0.patches.0.region", [0, 0, 80], "[x, y, width, height]"),
        ("targets.0.patches.0.region", [0, 0, 80, 0], "width and height from 1"),
        ("targets.0.patches.0.region", [-1, 0, 80, 90], "x and y from 0"),
        ("targets.0.patches.0.region", [0, 0, 80.5, 90], "whole pixels"),
        ("targets.0.patches.0.region", {}, "[x, y, width, height]"),
        ("need.feature_um", 0, "above 0"),
        ("need.contrast", 1.4, "at most 1"),
        ("need.contrast", 0, "above 0"),
        ("need.level", 70, "at most 1"),
        ("need.max_exposure_ms", -4, "above 0"),
        ("need.max_gain_db", -1, "from 0"),
        ("need.confidence", 1, "below 1"),
        ("need.confidence", 0.5, "above 0.5"),
        ("need.depth_range_mm", [12, 0], "the smaller number first"),
        ("need.depth_range_mm", [1], "[nearest, farthest]"),
        ("need.part_contrast", 1.5, "at most 1"),
    ],
)
def test_a_wrong_value_is_refused_with_its_key_and_what_is_allowed(place, value, allowed):
    message = refusal_of_key(place, value)
    key = re.sub(r"\.(\d+)", r"[\1]", place)
    assert f"{key} = " in message
    assert allowed in message
    assert message.endswith(".")


@pytest.mark.parametrize("key", ["station", "lens", "camera", "scene", "targets", "need"])
def test_each_table_is_needed_and_must_be_a_table(key):
    data = tomllib.loads(LEAST)
    for wrong in (3, "text", [], None):
        with pytest.raises(StationError, match=key):
            build_station(data | {key: wrong})
    del data[key]
    with pytest.raises(StationError, match=f"{key} is missing"):
        build_station(data)


@pytest.mark.parametrize(
    ("place", "hint"),
    [
        ("lens.focal_lenght_mm", "focal_length_mm"),
        ("need.feature", "feature_um"),
        ("camera.bitdepth", "bit_depth"),
        ("targets.0.depth", "depth_mm"),
        ("targets.0.patches.0.roi", "kind, region, cycles"),
        ("camera.focal_length_mm", "it belongs to lens"),
        ("ned", "need"),
    ],
)
def test_an_unknown_key_is_refused_with_the_right_one(place, hint):
    message = refusal_of_key(place, 1)
    assert "is not a key of the station file" in message
    assert hint in message


def test_a_misspelt_needed_key_is_one_mistake():
    message = refusal(LEAST.replace("focal_length_mm", "focal_lenght_mm"))
    assert message.splitlines() == [
        "station.toml: lens.focal_lenght_mm is not a key of the station file: use focal_length_mm, if that is meant."
    ]


@pytest.mark.parametrize(
    ("patch", "message"),
    [
        ('kind = "star"', "cycles is missing: it must be a whole number"),
        ('kind = "bars"', "period_um is missing: it must be a number above 0"),
        ('kind = "tribar"', "group is missing: it must be a whole number"),
        ('kind = "edge", cycles = 36', "cycles does not belong to a patch of kind 'edge'"),
        ('kind = "flat", modulation = 1.0', "modulation does not belong to a patch of kind 'flat'"),
        ('kind = "star", cycles = 36, period_um = 250', "period_um does not belong to a patch of kind 'star'"),
        ('kind = "bars", period_um = 250, group = 0', "group does not belong to a patch of kind 'bars'"),
    ],
)
def test_keys_go_with_the_kind_of_patch(patch, message):
    text = LEAST.replace('kind = "edge"', patch)
    assert message in refusal(text)


def test_a_patch_with_several_mistakes_tells_them_all():
    message = refusal(
        LEAST.replace('kind = "edge", region = [0, 0, 80, 100]', 'kind = "star", region = [0], group = 1')
    )
    assert message.startswith("station.toml has 3 mistakes:")
    for key in ("region", "cycles", "group"):
        assert f"targets[0].patches[0].{key}" in message


def test_many_mistakes_are_counted_and_their_keys_named():
    message = refusal(
        WHOLE.replace("contrast = 0.20", "contrast = 2")
        .replace("focal_length_mm = 16.0", 'focal_length_mm = "16"')
        .replace('"cap top"', '"tray floor"')
        .replace('layout = "mono"', 'layout = "grey"')
        .replace("wavelength_nm = 530", "wave = 530")
    )
    assert message.splitlines()[0] == "station.toml has 6 mistakes:"
    assert message.splitlines()[3].startswith("  and 4 more, at ")
    for key in (
        "lens.focal_length_mm",
        "camera.layout",
        "scene.wavelength_nm",
        "scene.wave",
        "need.contrast",
        "targets",
    ):
        assert key in message


def test_names_of_targets_must_differ():
    assert 'targets: 2 have the name "tray floor"' in refusal(WHOLE.replace('"cap top"', '"tray floor"'))


def test_the_need_must_limit_the_exposure():
    def need(more):
        return LEAST.replace(", max_exposure_ms = 4", more)

    for none in ("", ", speed_mm_s = 50", ", blur_px = 0.5", ", speed_mm_s = 0, blur_px = 0.5"):
        assert "need.max_exposure_ms is missing" in refusal(need(none))
    assert parse_station(need(", speed_mm_s = 50, blur_px = 0.5")).need.max_exposure_ms is None
    assert parse_station(need(", max_exposure_ms = 4, speed_mm_s = 50")).need.blur_px is None


def test_nothing_stands_behind_the_lens():
    # 16 mm at 58 / 3.45: the entrance pupil (P = 1: the principal plane) is 284.99 mm from the plane of focus.
    assert "lies behind the lens" in refusal(LEAST.replace("depth_mm = 0", "depth_mm = -286"))
    assert parse_station(LEAST.replace("depth_mm = 0", "depth_mm = -284")).targets[0].depth_mm == -284
    behind = refusal(LEAST.replace("max_exposure_ms = 4", "max_exposure_ms = 4, depth_range_mm = [-290, 0]"))
    assert "need.depth_range_mm" in behind


@pytest.mark.parametrize(
    ("text", "where"),
    [
        (LEAST.replace("[[targets]]", "[[targets"), "line 7"),
        ("x = ", "line 1, at the end"),
        ("x = 1\nx = 2", "line 2"),
        ("a = 00", "line 1"),
        ("[" * 5000, "not valid TOML"),
        ("x = " + "9" * 5000, "not valid TOML"),
        ("\x00", "line 1"),
    ],
)
def test_broken_toml_is_told_with_its_line(text, where):
    message = refusal(text)
    assert where in message
    assert "not valid TOML" in message
    assert len(message) < 200


def test_the_file_is_named_as_given():
    with pytest.raises(StationError, match=r"^lane2\.toml: need\.contrast = 2: must be"):
        parse_station(LEAST.replace("contrast = 0.2", "contrast = 2"), "lane2.toml")


def test_regions_must_lie_in_the_frame():
    station = parse_station(WHOLE)
    check_regions(station, 640, 520)  # the tri-bar target ends at 620, 520
    with pytest.raises(StationError, match=re.escape("targets[1].patches[2].region = [420, 320, 200, 200]")):
        check_regions(station, 619, 520)
    with pytest.raises(StationError, match=re.escape("targets[1].patches[2].region")):
        check_regions(station, 640, 519)
    with pytest.raises(StationError) as caught:
        check_regions(station, 64, 48)
    assert len(str(caught.value).splitlines()) <= 4
    assert "6 mistakes" in str(caught.value)


def test_distance_and_scale_of_a_lens_whose_pupils_are_alike():
    # Thin lens: s = f (1 + 1/m); Field Guide to Geometrical Optics, SPIE FG01 (2004). fixtures/references/geometry.json
    # holds the distance for 16 mm, 3.45 um and 58 um.
    given_ = next(d for d in facts("geometry.json")["computed_dof"] if d["focal_length_mm"] == 16)
    station = parse_station(LEAST)
    assert_allclose(station.magnification, 3.45 / 58, rtol=1e-15)
    assert_allclose(station.pupil_distance_mm, given_["object_distance_mm"], rtol=1e-12)
    # The image distance s' = f (1 + m) stays; by the chief ray a pixel covers pitch x distance / s' in the object.
    image_mm = 16 * (1 + 3.45 / 58)
    for depth_mm in (-40.0, 0.0, 8.0, 300.0):
        expected_um = 3.45 * (given_["object_distance_mm"] + depth_mm) / image_mm
        assert_allclose(station.object_um_per_px_at(depth_mm), expected_um, rtol=1e-12)
        assert_allclose(station.feature_cy_px_at(depth_mm), 1 / (2 * 180 / expected_um), rtol=1e-12)


@pytest.mark.parametrize(("first_mm", "second_mm", "gap_mm", "stop_mm"), [(60, 40, 20, 5), (-50, 25, 18, 12)])
def test_distance_and_scale_of_a_lens_whose_pupils_differ(first_mm, second_mm, gap_mm, stop_mm):
    # Two thin lenses with the stop between them, traced by ray matrices (Gerrard and Burch, Introduction to Matrix
    # Methods in Optics, 1975), against the closed form e = f (1/P + 1/m).
    def lens(f):
        return np.array([[1, 0], [-1 / f, 1]])

    def gap(t):
        return np.array([[1, t], [0, 1]])

    rest_mm = gap_mm - stop_mm
    system = lens(second_mm) @ gap(gap_mm) @ lens(first_mm)
    focal_mm = -1 / system[1, 0]
    entrance_mm = 1 / (1 / stop_mm - 1 / first_mm)  # to the right of the first lens
    entrance_size = entrance_mm / stop_mm
    exit_mm = 1 / (1 / rest_mm - 1 / second_mm)  # to the left of the second lens
    pupil_magnification = (exit_mm / rest_mm) / entrance_size
    object_mm = 400.0  # in front of the first lens
    to_lens = system @ gap(object_mm)
    image_mm = -to_lens[0, 1] / to_lens[1, 1]
    magnification = abs((gap(image_mm) @ to_lens)[0, 0])
    data = tomllib.loads(LEAST)
    data["lens"] |= {"focal_length_mm": focal_mm, "pupil_magnification": pupil_magnification}
    data["scene"]["object_um_per_px"] = 3.45 / magnification
    station = build_station(data)
    assert_allclose(station.pupil_distance_mm, object_mm + entrance_mm, rtol=1e-10)
    # A chief ray: from an object point 30 mm farther through the centre of the stop to the same sensor.
    slope = 0.01
    at_stop = gap(stop_mm) @ lens(first_mm)
    height = -(at_stop @ gap(object_mm + 30))[0, 1] * slope / (at_stop @ gap(object_mm + 30))[0, 0]
    on_sensor = (gap(image_mm) @ system @ gap(object_mm + 30) @ [height, slope])[0]
    assert_allclose(station.object_um_per_px_at(30.0), 3.45 * abs(height / on_sensor), rtol=1e-10)


@pytest.mark.parametrize(
    ("stated", "of_files", "full_dn"), [(12, None, 4095), (12, 16, 4095), (None, 16, 65535), (None, None, 255)]
)
def test_full_scale_is_the_top_code(stated, of_files, full_dn):
    text = (
        LEAST
        if stated is None
        else LEAST.replace("pixel_pitch_um = 3.45", f"pixel_pitch_um = 3.45, bit_depth = {stated}")
    )
    assert parse_station(text).full_scale_dn(of_files) == full_dn


def test_records_cannot_be_changed():
    with pytest.raises(ValueError, match="frozen"):
        parse_station(LEAST).need.contrast = 0.5


@given(st.text(max_size=300))
@example("[[targets]]\n[[targets.patches]]\n")
@example('targets = ["a", {name = 3}]\nlens = {stops = [{}]}')
def test_any_text_is_a_station_or_one_short_message(text):
    message = "fine"
    try:
        parse_station(text)
    except StationError as error:
        message = str(error)
    assert 1 <= len(message.splitlines()) <= 4
    assert all(c.isprintable() or c == "\n" for c in message)


VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8) | st.dates(),
    lambda inner: st.lists(inner, max_size=5) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=8,
)
PLACES = [
    *("station", "lens", "camera", "scene", "targets", "need", "station.name", "lens.stops", "camera.response"),
    *("camera.layout", "targets.0", "targets.0.name", "targets.0.patches", "targets.0.patches.0", "need.level"),
    *("targets.0.patches.0.kind", "targets.0.patches.0.region", "targets.0.patches.0.cycles", "need.depth_range_mm"),
    *("need.speed_mm_s", "need.max_exposure_ms", "lens.pupil_magnification", "camera.bit_depth", "need.odd"),
]


@given(st.dictionaries(st.sampled_from(PLACES), VALUES, min_size=1, max_size=1))
def test_any_value_at_any_place_is_a_station_or_one_short_message(changes):
    for place, value in changes.items():
        message, station = "fine", None
        try:
            station = build_station(with_key(place, value))
        except StationError as error:
            message = str(error)
        assert 1 <= len(message.splitlines()) <= 4
        if station is not None:
            assert np.isfinite([station.magnification, station.pupil_distance_mm]).all()
