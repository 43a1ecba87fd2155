"""The set-up of the patches: what each shows against how its picture was made, and the station file written back.

Pictures are drawn here: an edge is a Gaussian-blurred step, whose place, tilt, levels and width are known exactly (its
10 to 90 % width is 2 x 1.2816 = 2.563 standard deviations, tables of the normal distribution).
"""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from printed import Bars, Blur, Star, Tribar, render
from scipy.special import ndtr

from sweep.errors import StationError
from sweep.framing import PatchCheck, check_patch, check_patches, light_tone, patches_of, with_region, write_regions
from sweep.station import Station, parse_station

STATION = """\
# the lane for vial caps
[station]
name = "Vial cap lane"

[lens]
focal_length_mm = 16.0
stops = [1.4, 2, 2.8]  # as engraved

[camera]
pixel_pitch_um = 3.45
bit_depth = 12
black_level_dn = 100

[scene]
object_um_per_px = 58.0
wavelength_nm = 530

[[targets]]
name = "tray floor"   # the lowest
depth_mm = 0
patches = [
  # left of the pocket
  { kind = "edge", region = [20, 30, 80, 100] },
  { kind = "flat", region = [ 200, 30, 64, 64 ] },  # even paper
]

[[targets]]
name = "cap top"
depth_mm = -8
patches = [{ kind = "edge", region = [20, 160, 100, 80] }]

[need]
feature_um = 180
contrast = 0.2
level = 0.7
max_exposure_ms = 4.0
"""
WIDTH, HEIGHT = 320, 260
WIDTH_IN_SIGMAS = 2.5631  # 10 to 90 % of a normal distribution


@pytest.fixture
def station() -> Station:
    return parse_station(STATION)


def picture(light: np.ndarray, camera_full: int = 4095, black: int = 100) -> np.ndarray:
    """A frame of 12 bits from light as a fraction of full scale less black."""
    noise = np.random.default_rng(1).normal(0, 3, light.shape)
    return np.clip(np.rint(black + light * (camera_full - black) + noise), 0, camera_full).astype(np.uint16)


def edge(
    x0: float, tilt_deg: float = 5.0, sigma_px: float = 1.5, dark: float = 0.1, light: float = 0.7, y0: float = 80
) -> np.ndarray:
    """An edge with its normal near x, through (x0, y0), over the whole frame; light on the right."""
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH].astype(float)
    t = math.radians(tilt_deg)
    distance = (x - x0) * math.cos(t) + (y - y0) * math.sin(t)
    return dark + (light - dark) * ndtr(distance / sigma_px)


def only(text: str, patches: str) -> Station:
    """The station with these patches on its first target, and no second target."""
    head, _, rest = text.partition("patches = [")
    need = rest[rest.index("[need]") :]
    return parse_station(f"{head}patches = [{patches}]\n\n{need}")


def told(check: PatchCheck) -> str:
    return " ".join(work.text for work in check.work)


def value(check: PatchCheck, name: str) -> float:
    figure = check.figure(name)
    assert figure is not None, [f.name for f in check.figures]
    return float(figure.value.split()[0].rstrip("°%"))


@pytest.mark.parametrize("tilt_deg", [2.5, 5.0, -8.0, 11.5])
def test_an_edge_in_the_middle_is_fine_and_its_figures_are_those_drawn(station, tilt_deg):
    check = check_patch(picture(edge(59.5, tilt_deg)), station, 0)
    assert check.status == "fine"
    assert check.name == "tray floor 1"
    assert value(check, "angle") == pytest.approx(abs(tilt_deg), abs=0.06)
    assert value(check, "blur") == pytest.approx(1.5 * WIDTH_IN_SIGMAS, abs=0.25)
    assert check.figure("print").value == "dark 10%, light 70%"
    # Half of 80 px times the cosine; by the tilt 2 % of the samples lie some pixels nearer.
    t = math.radians(abs(tilt_deg))
    assert value(check, "room") == pytest.approx(39.5 * math.cos(t), abs=3)


def test_contrast_at_the_feature_is_that_of_the_blur(station):
    # The transform of a Gaussian: exp(-2 (pi sigma v)^2), v = 58 um / (2 x 180 um) in cycles a pixel.
    check = check_patch(picture(edge(59.5)), station, 0)
    assert value(check, "contrast") == pytest.approx(math.exp(-2 * (math.pi * 1.5 * 58 / 360) ** 2), abs=0.02)


@pytest.mark.parametrize(("x0", "way"), [(84.5, "right"), (34.5, "left")])
def test_an_edge_near_the_border_is_to_be_moved_towards_it(station, x0, way):
    check = check_patch(picture(edge(x0, sigma_px=2.5)), station, 0)
    assert check.status == "better"
    # The middle of the patch is at 59.5.
    assert f"Move the patch {way} by {abs(x0 - 59.5):.0f} px" in told(check)


def test_moving_a_patch_as_told_makes_it_fine(station):
    check = check_patch(picture(edge(84.0, sigma_px=2.5)), station, 0)
    by = int(told(check).partition("right by ")[2].split()[0])
    moved = with_region(station, 0, (20 + by, 30, 80, 100))
    assert check_patch(picture(edge(84.0, sigma_px=2.5)), moved, 0).status == "fine"


def test_a_patch_too_narrow_for_the_blur_is_to_be_made_wider_and_is_fine_then(station):
    soft = picture(edge(59.5, sigma_px=5.0))
    narrow = with_region(station, 0, (36, 30, 48, 100))
    check = check_patch(soft, narrow, 0)
    assert check.status == "better"
    by = int(told(check).partition("wider by ")[2].split()[0])
    wider = with_region(station, 0, (36 - by // 2, 30, 48 + by, 100))
    assert check_patch(soft, wider, 0).status == "fine"


@pytest.mark.parametrize(
    ("tilt_deg", "sigma_px", "dark", "region", "words", "status"),
    [
        (0.3, 1.5, 0.1, (20, 30, 80, 100), "tilted", "bad"),
        (25.0, 1.5, 0.1, (20, 30, 80, 100), "tilted", "bad"),
        (5.0, 1.5, 0.6, (20, 30, 80, 100), "more contrast", "better"),
        (5.0, 1.5, 0.1, (20, 65, 80, 30), "taller", "better"),
        (5.0, 1.5, 0.1, (150, 30, 80, 100), "one edge", "bad"),
        (5.0, 1.5, 0.1, (300, 30, 80, 100), "outside the frame of 320 × 260", "bad"),
    ],
)
def test_what_is_wrong_with_an_edge_is_said_with_what_to_do(station, tilt_deg, sigma_px, dark, region, words, status):
    check = check_patch(picture(edge(59.5, tilt_deg, sigma_px, dark)), with_region(station, 0, region), 0)
    assert check.status == status
    assert words in told(check)


def test_light_that_clips_or_lacks_is_said(station):
    assert "Dim the lamp" in told(check_patch(picture(1.6 * edge(59.5)), station, 0))
    assert "too dark" in told(check_patch(picture(0.03 * edge(59.5)), station, 0))
    assert check_patch(picture(0.03 * edge(59.5)), station, 0).status == "bad"


def test_an_edge_with_its_normal_near_y_is_moved_up_or_down(station):
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH].astype(float)
    sideways = 0.1 + 0.6 * ndtr(((y - 232) + math.tan(math.radians(5)) * (x - 70)) / 1.5)
    check = check_patch(picture(sideways), station, 2)
    assert check.name == "cap top"
    assert "Move the patch down by" in told(check)


def test_a_flat_is_even_or_not(station):
    even = np.full((HEIGHT, WIDTH), 0.5)
    assert check_patch(picture(even), station, 1).status == "fine"
    # From 0.45 to 0.55 over the patch: 10 % of the mean to either side.
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH]
    slope = 0.5 + 0.05 * (x - 231.5) / 31.5
    check = check_patch(picture(slope), station, 1)
    assert check.status == "better"
    # Means of blocks of 8 px: the outermost lie at 7/8 of the range.
    assert check.figure("even").value == "within 9%"
    assert "even tone" in told(check)
    assert "24" not in told(check)
    assert "32 × 32" in told(check_patch(picture(even), with_region(station, 1, (200, 30, 24, 24)), 1))


def star_frame(star: Star, size: int = 104) -> np.ndarray:
    frame = np.full((HEIGHT, WIDTH), 0.5)
    image = render(star, (size, size), Blur())
    frame[40 : 40 + size, 60 : 60 + size] = image / 1300
    return frame


def test_a_star_in_the_middle_is_fine_and_off_the_middle_is_to_be_moved():
    star = Star()  # of 36 cycles, its centre at (51.3, 51.8), its rim at 47.8 px
    patch = '{ kind = "star", region = [%d, %d, 104, 104], cycles = 36 }'
    frame = picture(star_frame(star))
    check = check_patch(frame, only(STATION, patch % (60, 40)), 0)
    assert check.status == "fine"
    # 36 cycles are as fine as the feature where 36 / (2 pi r) = 58 / 360.
    assert check.figure("room").wanted == f"{36 * 360 / (2 * math.pi * 58):.0f} px"
    check = check_patch(frame, only(STATION, patch % (74, 40)), 0)
    assert "Move the patch left by 14 px" in told(check)


def test_a_star_that_ends_before_the_feature_wants_fewer_cycles():
    text = STATION.replace("feature_um = 180", "feature_um = 300")
    # 36 / (2 pi 47.8) cycles a pixel at the rim are 242 um; 300 um need a rim of 59 px, or 26 cycles at 90 % of it.
    station = only(text, '{ kind = "star", region = [60, 40, 104, 104], cycles = 36 }')
    check = check_patch(picture(star_frame(Star())), station, 0)
    assert check.status == "better"
    assert "with 26 cycles" in told(check)


def test_a_star_is_not_found_where_there_is_none():
    station = only(STATION, '{ kind = "star", region = [60, 40, 104, 104], cycles = 36 }')
    check = check_patch(picture(np.full((HEIGHT, WIDTH), 0.5)), station, 0)
    assert check.status == "bad"
    assert "No star of 36 cycles" in told(check)


def bars_frame(bars: Bars, width: int = 84, height: int = 60) -> np.ndarray:
    frame = np.full((HEIGHT, WIDTH), 0.5)
    image = render(bars, (width, height), Blur())
    frame[40 : 40 + height, 60 : 60 + width] = image / 1300
    return frame


def test_bars_are_counted_and_their_period_is_measured():
    frame = picture(bars_frame(Bars(period_px=7.3)))
    patch = '{ kind = "bars", region = [60, 40, %d, 60], period_um = 423.4 }'  # 7.3 px of 58 um
    check = check_patch(frame, only(STATION, patch % 84), 0)
    assert check.status == "fine"
    assert value(check, "period") == pytest.approx(7.3, abs=0.03)
    # 84 px less a border of 3 on both sides, over the period and the cosine of 3 degrees.
    assert value(check, "bars") == pytest.approx(78 / 7.3, abs=0.1)
    check = check_patch(frame, only(STATION, patch % 36), 0)
    assert check.status == "better"
    assert "5 or more" in told(check)
    wrong = '{ kind = "bars", region = [60, 40, 84, 60], period_um = 900 }'
    assert "No bars of 900 µm" in told(check_patch(frame, only(STATION, wrong), 0))


def test_features_finer_than_two_pixels_are_refused():
    # 58 um a pixel: two pixels a period are 116 um.
    bars = only(STATION, '{ kind = "bars", region = [60, 40, 84, 60], period_um = 110 }')
    assert check_patch(picture(bars_frame(Bars())), bars, 0).status == "bad"
    fine = STATION.replace("feature_um = 180", "feature_um = 50")
    star = only(fine, '{ kind = "star", region = [60, 40, 104, 104], cycles = 36 }')
    assert "two pixels per period" in told(check_patch(picture(star_frame(Star())), star, 0))


def test_a_tribar_target_tells_the_size_of_a_pixel():
    frame = np.full((HEIGHT, WIDTH), 0.5)
    image = render(Tribar(width_px=9.0, centre=(130.0, 130.0)), (HEIGHT, HEIGHT), Blur())
    frame[:, :HEIGHT] = image / 1300
    # Element 1 of group 0 has bars of 500 um: 55.6 um a pixel where they are 9 px wide.
    patch = '{ kind = "tribar", region = [0, 0, 260, 260], group = 0 }'
    right = only(STATION.replace("object_um_per_px = 58.0", "object_um_per_px = 55.6"), patch)
    check = check_patch(picture(frame), right, 0)
    assert value(check, "pixel") == pytest.approx(500 / 9, rel=0.02)
    assert check.status == "fine"
    assert "object_um_per_px" in told(check_patch(picture(frame), only(STATION, patch), 0))


def test_words_filled_from_the_top_are_moved_down(station):
    low = picture(edge(59.5))
    high = (low << 4).astype(np.uint16)
    assert check_patches(high, station) == check_patches(low, station)
    assert light_tone(high, station.camera) == pytest.approx(light_tone(low, station.camera), abs=1e-3)


def test_light_tone_is_the_light_part_of_the_frame(station):
    assert light_tone(picture(edge(59.5)), station.camera) == pytest.approx(0.7, abs=0.005)
    assert light_tone(picture(2 * edge(59.5)), station.camera) == 1.0


def test_colours_where_none_are_stated_are_refused(station):
    with pytest.raises(StationError, match="colour frames"):
        check_patches(np.zeros((HEIGHT, WIDTH, 3), np.uint8), station)


# ---- the file


def regions(station: Station) -> list[tuple[int, ...]]:
    return [patch.region for _, _, patch in patches_of(station)]


def test_only_the_numbers_change():
    text = write_regions(STATION, [(24, 30, 80, 100), (200, 30, 64, 64), (20, 160, 100, 72)])
    expected = STATION.replace("[20, 30, 80, 100]", "[24, 30, 80, 100]").replace("100, 80] }]", "100, 72] }]")
    assert text == expected


def test_unchanged_places_leave_every_byte():
    assert write_regions(STATION, regions(parse_station(STATION))) == STATION


@pytest.mark.parametrize(
    "text",
    [
        STATION.replace("\n", "\r\n"),
        "\ufeff" + STATION,
        STATION.replace("region = [20, 30, 80, 100]", "region = [20,   30,80, 100]"),
        STATION.replace(
            '  { kind = "edge", region = [20, 30, 80, 100] },',
            '  { kind = "edge", "region" = [\n    20, # x\n    30, # y\n    80,\n    100, # height\n  ] },',
        ),
    ],
    ids=["CRLF", "byte order mark", "odd blanks", "comments inside"],
)
def test_ways_of_writing_are_kept(text):
    before = regions(parse_station(text))
    changed = write_regions(text, [(21, *before[0][1:]), *before[1:]])
    assert regions(parse_station(changed)) == [(21, *before[0][1:]), *before[1:]]
    assert len(changed) == len(text)
    assert sum(a != b for a, b in zip(text, changed, strict=True)) == 1


def test_patches_as_tables_of_their_own_and_targets_in_one_line_are_written_too():
    head, _, rest = STATION.partition("[[targets]]")
    need = rest[rest.index("[need]") :]
    tables = (
        head + '[[targets]]\nname = "a"\ndepth_mm = 0\n'
        '[[targets.patches]]\nkind = "edge" # one\nregion = [1, 2, 30, 40]\n'
        '[[targets.patches]]\nkind = "flat"\nregion = [5, 6, 70, 80]\n' + need
    )
    # Keys before the first table: a target may stand in one line.
    line = (
        'targets = [{ name = "a", depth_mm = 0, patches = [{ kind = "edge", region = [1, 2, 30, 40] }] }]\n'
        + head
        + need
    )
    assert write_regions(tables, [(9, 2, 30, 40), (5, 6, 70, 81)]) == tables.replace("[1, 2", "[9, 2").replace(
        "70, 80]", "70, 81]"
    )
    assert write_regions(line, [(9, 2, 30, 40)]) == line.replace("[1, 2", "[9, 2")


@settings(max_examples=30)
@given(
    st.lists(
        st.tuples(st.integers(0, 5000), st.integers(0, 5000), st.integers(1, 5000), st.integers(1, 5000)),
        min_size=3,
        max_size=3,
    )
)
def test_any_places_are_read_back_as_written(places):
    text = write_regions(STATION, places)
    assert regions(parse_station(text)) == places
    assert [line for line in text.splitlines() if "#" in line and "region" not in line] == [
        line for line in STATION.splitlines() if "#" in line and "region" not in line
    ]


def test_places_that_are_none_are_refused(station):
    with pytest.raises(StationError):
        with_region(station, 0, (0, 0, 0, 10))
    with pytest.raises(IndexError):
        with_region(station, 3, (0, 0, 10, 10))
    with pytest.raises(StationError, match="by hand"):
        write_regions(STATION, [(1, 2, 3, 4)])
