"""The plot: what it shows, that it can be read, and that it comes out the same each time."""

import io
import xml.etree.ElementTree as ET
from collections.abc import Callable
from dataclasses import replace
from itertools import combinations

import cv2
import matplotlib
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.axes import Axes
from matplotlib.backend_bases import RendererBase
from matplotlib.figure import Figure
from matplotlib.text import Text
from numpy.testing import assert_allclose
from results import STOPS, a_result, a_station
from scipy.optimize import isotonic_regression

from sweep.report.labels import spread
from sweep.report.letters import MISSING, drawable
from sweep.report.lines import lines_of
from sweep.report.plot import draw, png, svg
from sweep.result import Result
from sweep.station import Station

SHELVES = [(f"shelf {i}", -12.0 + 3.0 * i) for i in range(9)]
LONG = [
    ("Förderband-Oberfläche mit Kratzern und Öl, Größe Ä", 3.0),
    ("瓶 cap \N{GRINNING FACE}", -5.0),
    ("$x_1$ & <b>", 0.0),
]


def _cases() -> dict[str, tuple[Result, Station]]:
    stations = {
        "three": a_station(),
        "one": a_station([("tray floor", 3.0)]),
        "nine": a_station(SHELVES),
        "two stops": a_station(stops=(2.8, 8.0)),
        "ten stops": a_station(stops=(1.0, *STOPS, 22.0)),
        "ruled out": a_station(max_exposure_ms=0.01),
        "names": a_station(LONG),
        "alike": a_station([("left", 1.0), ("right", 1.1), ("top", 0.9)]),
        "moving": a_station(speed_mm_s=200.0, blur_px=0.5),
        "depths": a_station(depth_range_mm=[-9.0, 12.0]),
    }
    found = {name: (a_result(station), station) for name, station in stations.items()}
    three = stations["three"]
    found["nothing sound"] = a_result(three, clipped=STOPS), three
    found["no model"] = a_result(three, model=False), three
    found["low"] = a_result(three, sharpness=0.2), three
    unlit = tuple(replace(s, exposure_needed_ms=None, f_number_by_light=None) for s in found["three"][0].stops)
    found["no light"] = replace(found["three"][0], stops=unlit), three
    return found


CASES = _cases()


def _axes(figure: Figure) -> tuple[Axes, Axes, Axes]:
    strip, main, below = figure.axes
    return strip, main, below


def _texts(figure: Figure) -> list[str]:
    return [t.get_text() for t in figure.findobj(Text) if isinstance(t, Text) and t.get_text()]


@pytest.mark.parametrize("name", CASES)
def test_both_files_are_whole(name: str) -> None:
    picture = png(*CASES[name])
    pixels = cv2.imdecode(np.frombuffer(picture, np.uint8), cv2.IMREAD_COLOR)
    assert pixels is not None
    assert pixels.shape == (990, 1350, 3)
    drawing = svg(*CASES[name])
    root = ET.parse(io.BytesIO(drawing)).getroot()
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    assert root.find(".//{http://www.w3.org/2000/svg}text") is None  # letters are outlines: no font is needed
    assert b"dc:date" not in drawing


@pytest.mark.parametrize("write", [png, svg])
def test_the_bytes_are_the_same_each_time(write: Callable[[Result, Station], bytes]) -> None:
    assert write(*CASES["names"]) == write(*CASES["names"])


def test_a_users_style_changes_nothing_and_is_left_as_it_was() -> None:
    result, station = CASES["three"]
    plain = svg(result, station)
    with matplotlib.rc_context({"font.size": 30, "axes.facecolor": "red", "svg.fonttype": "none"}):
        before = dict(matplotlib.rcParams)
        assert svg(result, station) == plain
        assert dict(matplotlib.rcParams) == before


def test_lines_are_the_model_and_markers_the_readings() -> None:
    result, station = CASES["three"]
    _, main, _ = _axes(draw(result, station))
    drawn = {tuple(np.round(line.get_xydata().ravel(), 9)) for line in main.lines}  # type: ignore[union-attr]
    places = {s.stop: s.f_number_by_light for s in result.stops}
    for target in station.targets:
        curve = [(p.f_number, p.contrast) for p in result.curve if p.target == target.name]
        assert tuple(np.round(np.ravel(curve), 9)) in drawn
        sound = [r for r in result.readings if r.target == target.name and r.contrast_at_feature is not None]
        assert tuple(np.round(np.ravel([(places[r.stop], r.contrast_at_feature) for r in sound]), 9)) in drawn
    bars = [s for c in main.collections if hasattr(c, "get_segments") for s in c.get_segments()]
    lengths = sorted(float(np.ptp(s[:, 1])) for s in bars)
    wanted = sorted(4 * r.contrast_at_feature_u for r in result.readings if r.contrast_at_feature_u is not None)
    assert_allclose(lengths, wanted, rtol=1e-9)  # plus and minus two standard uncertainties


def test_it_says_what_to_set_what_is_needed_and_why_not() -> None:
    result, station = CASES["three"]
    said = " ".join(_texts(draw(result, station))).replace("\n", " ")
    for words in (
        "f/5.6, 3.92 ms, 0 dB: meets the need at all three targets",
        "Contrast of a 180 µm feature at the object",
        "Stop (f-number as engraved",
        "needed: 0.3",
        "use f/5.6 3.92 ms, 0 dB contrast 0.441 ± 0.008",
        "too little contrast",
        "too little light",
        "meets the need",
        "allowed: 4 ms",
        "cap top −8 mm",
        "Exposure needed (ms)",
    ):
        assert words in said, words


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("nothing sound", "No stop can be recommended"),
        ("nine", "No stop meets the need; the best is f/5.6"),
        ("moving", "worst, with the part's motion"),
        ("no light", "The light could not be measured."),
        ("ruled out", "too little light"),
        ("names", "$x_1$ & <b>"),
        ("depths", "worst depth from −9 to +12 mm"),
    ],
)
def test_each_case_says_what_is_special_about_it(name: str, words: str) -> None:
    assert words in " ".join(_texts(draw(*CASES[name]))).replace("\n", " ")


@pytest.mark.parametrize("name", CASES)
def test_no_word_covers_another_or_leaves_the_picture(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    figure = draw(*CASES[name])
    drawn: dict[int, Text] = {}
    plain = Text.draw

    def seen(text: Text, renderer: RendererBase) -> None:
        if text.get_text().strip():
            drawn[id(text)] = text
        plain(text, renderer)

    monkeypatch.setattr(Text, "draw", seen)
    figure.draw_without_rendering()
    boxes = [(text.get_text(), text.get_window_extent()) for text in drawn.values()]
    assert len(boxes) > 15
    for words, box in boxes:
        assert box.x0 >= 0, words
        assert box.y0 >= 0, words
        assert box.x1 <= figure.bbox.width, words
        assert box.y1 <= figure.bbox.height, words
    for (a, box_a), (b, box_b) in combinations(boxes, 2):
        # Two dots of leeway: boxes hold the room above and below the letters, too.
        wide = min(box_a.x1, box_b.x1) - max(box_a.x0, box_b.x0)
        high = min(box_a.y1, box_b.y1) - max(box_a.y0, box_b.y0)
        assert min(wide, high) <= 2, (a, b)


def test_a_forecast_has_lines_without_readings() -> None:
    result, station = CASES["three"]
    forecast = replace(result, readings=())
    said = " ".join(_texts(draw(forecast, station)))
    assert "Lines: lens model, bands ± 2 standard uncertainties." in said
    assert "Markers" not in said


def test_targets_differ_in_grey_by_dash_or_marker() -> None:
    result, station = CASES["nine"]
    kinds = {(str(line.dash), line.marker) for line in lines_of(result, station)}
    assert len(kinds) == len(station.targets)
    assert [line.worst for line in lines_of(result, station)] == [False] * 8 + [True]


def test_reversed_readings_count_as_nothing_and_are_hollow() -> None:
    result, station = CASES["one"]
    turned = tuple(replace(r, reversed=r.stop == 1.4 and r.kind == "edge") for r in result.readings)
    figure = draw(replace(result, readings=turned), station)
    assert any("Hollow: reversed" in text for text in _texts(figure))
    hollow = [line for line in _axes(figure)[1].lines if line.get_markerfacecolor() == "white"]
    assert [line.get_ydata()[0] for line in hollow] == [0.0]  # type: ignore[index]


boxes = st.lists(st.tuples(st.floats(0, 300), st.floats(5, 30)), min_size=1, max_size=12)


@given(boxes)
def test_labels_are_moved_no_farther_than_least_squares_asks(found: list[tuple[float, float]]) -> None:
    """With the room that lies between them taken out, the centres are an isotonic regression, here by SciPy."""
    found = sorted(found)
    wanted, heights = np.array([w for w, _ in found]), np.array([h for _, h in found])
    room = 600.0
    placed = np.array(spread(wanted.tolist(), heights.tolist(), room))
    below = np.cumsum(heights) - heights / 2
    free = np.clip(isotonic_regression(wanted - below).x, 0.0, room - heights.sum())
    assert_allclose(placed, free + below, atol=1e-6)


def test_labels_without_room_share_what_there_is() -> None:
    assert_allclose(spread([10.0, 10.0], [30.0, 30.0], 40.0), [10.0, 30.0])
    assert spread([], [], 40.0) == []


def test_letters_that_no_font_has_become_squares() -> None:
    assert drawable("Größe Ж Ω") == "Größe Ж Ω"
    assert drawable("瓶 1\x00") == f"{MISSING} 1"
