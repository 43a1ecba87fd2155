"""The map over depth and stop: what it shows, that it can be read in grey, and that it comes out the same each time."""

import xml.etree.ElementTree as ET
from dataclasses import replace
from itertools import combinations, pairwise

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.backend_bases import RendererBase
from matplotlib.colors import to_rgb
from matplotlib.contour import QuadContourSet
from matplotlib.figure import Figure
from matplotlib.text import Text
from numpy.testing import assert_allclose
from results import STOPS, a_result, a_station
from scipy.stats import norm

from sweep.report.depth_plot import _between_marks, depth_svg, depths_explained, draw_depths, usable_text
from sweep.result import DepthMap, Note, Result
from sweep.station import Station

SHELVES = [(f"shelf {i}", -12.0 + 3.0 * i) for i in range(9)]


def _cases() -> dict[str, tuple[Result, Station]]:
    stations = {
        "three": a_station(),
        "one": a_station([("tray floor", 3.0)]),
        "nine": a_station(SHELVES),
        "two stops": a_station(stops=(2.8, 8.0)),
        "sixteen stops": a_station(stops=tuple(np.round(np.geomspace(1.4, 22.0, 16), 1))),
        "ruled out": a_station(max_exposure_ms=0.01),
        "names": a_station([("Förderband-Oberfläche mit Kratzern und Öl", 3.0), ("$x_1$ & <b>", 0.0)]),
        "alike": a_station([("left", 1.0), ("right", 1.0), ("top", 1.0)]),
        "shallow": a_station([("low", -0.61), ("middle", 0.03), ("high", 0.47)]),
        "depths": a_station(depth_range_mm=[-9.0, 12.0]),
    }
    found = {name: (a_result(station), station) for name, station in stations.items()}
    three = stations["three"]
    found["nothing sound"] = a_result(three, clipped=STOPS), three
    found["low"] = a_result(three, sharpness=0.2), three
    found["lost"] = a_result(three, sharpness=0.0), three
    return found


CASES = _cases()


def _map(result: Result) -> DepthMap:
    assert result.depth_map is not None
    return result.depth_map


def _drawn(name: str) -> Figure:
    result, station = CASES[name]
    return draw_depths(_map(result), result, station)


def _main(figure: Figure) -> Axes:
    _, main = figure.axes
    return main


def _texts(figure: Figure) -> list[str]:
    return [t.get_text() for t in figure.findobj(Text) if isinstance(t, Text) and t.get_text()]


@pytest.mark.parametrize("name", CASES)
def test_the_picture_is_whole_and_the_same_each_time(name: str) -> None:
    result, station = CASES[name]
    picture = depth_svg(_map(result), result, station)
    assert ET.fromstring(picture).tag.endswith("svg")
    assert picture == depth_svg(_map(result), result, station)


@pytest.mark.parametrize("name", CASES)
def test_steps_of_grey_hold_the_contrast_and_are_few(name: str) -> None:
    result, _ = CASES[name]
    filled = [c for c in _main(_drawn(name)).collections if isinstance(c, QuadContourSet) and c.filled]
    (steps,) = filled
    highest = max(max(row.contrast) for row in _map(result).stops)
    assert steps.levels[0] == 0
    assert steps.levels[-2] <= highest < steps.levels[-1]
    greys = [to_rgb(c) for c in steps.get_facecolor()]
    assert 1 <= len(greys) <= 7
    assert all(r == g == b for r, g, b in greys)
    assert all(b[0] - a[0] > 0.05 for a, b in pairwise(greys))


def test_what_is_lost_between_the_stops_is_never_below_nothing() -> None:
    # Rounding in the cubics: below 0 there is no step of grey, and the picture would be blank there.
    rng = np.random.default_rng(1)
    lost_from = rng.integers(3, 8, 200)[:, None]
    falling = np.sort(rng.random((200, len(STOPS))), axis=1)[:, ::-1] * (np.arange(len(STOPS)) < lost_from)
    found = _map(a_result(a_station()))
    rows = [
        replace(row, contrast=tuple(column), contrast_u=(0.0,) * 200)
        for row, column in zip(found.stops, falling.T, strict=True)
    ]
    _, contrast, _ = _between_marks(rows, [1.2, *STOPS[1:], 19.0])
    assert contrast.min() == 0.0


def test_the_bold_border_is_where_the_need_is_sure() -> None:
    result, station = CASES["three"]
    figure = _drawn("three")
    bold = [c for c in _main(figure).collections if isinstance(c, QuadContourSet) and c.get_linewidth()[0] > 2]
    (border,) = bold
    assert list(border.levels) == [station.need.contrast]
    points = np.vstack([path.vertices for path in border.get_paths()])
    found = _map(result)
    for row in found.stops:
        crossing = points[np.isclose(points[:, 0], row.stop, rtol=1e-9), 1]
        # the guard band of the one-sided normal quantile (JCGM 106:2012, 8.3.2)
        sure = np.array(row.contrast) - norm.ppf(station.need.confidence) * np.array(row.contrast_u)
        for depth in crossing:
            assert_allclose(np.interp(depth, found.depths_mm, sure), station.need.contrast, atol=1e-6)
    assert len(points) > 20


def test_nearer_is_up_and_targets_stand_at_their_depths() -> None:
    result, station = CASES["three"]
    main = _main(_drawn("three"))
    assert main.get_ylim() == (_map(result).depths_mm[-1], _map(result).depths_mm[0])
    level = {line.get_ydata()[0] for line in main.lines if line.get_linestyle() == "--"}  # type: ignore[index]
    assert level == {t.depth_mm for t in station.targets}


def test_the_recommended_stop_has_its_usable_depths_as_a_bar() -> None:
    station = a_station()
    result = a_result(station)
    rows = tuple(replace(row, usable_mm=(-3.0, 2.0) if row.stop == 5.6 else None) for row in _map(result).stops)
    main = _main(draw_depths(replace(_map(result), stops=rows), result, station))
    bars = [line for line in main.lines if line.get_linewidth() > 4]
    assert [list(bar.get_xdata()) for bar in bars] == [[5.6, 5.6]]  # type: ignore[call-overload]
    assert [sorted(bar.get_ydata()) for bar in bars] == [[-3.0, 2.0]]  # type: ignore[type-var]


@pytest.mark.parametrize(
    ("usable", "words"),
    [
        (None, "none"),
        ((None, None), "all"),
        ((-5.5748, 5.4117), "−5.57\nto 5.41"),
        ((-5.5711, 5.4199), "−5.57\nto 5.41"),  # inwards
        ((-3.0, None), "from\n−3"),
        ((0.0, None), "from\n0"),
        ((None, 12.34), "up\nto 12.3"),
    ],
)
def test_usable_depths_are_told_in_words(usable: tuple[float | None, float | None] | None, words: str) -> None:
    assert usable_text(usable) == words


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("three", "needed: 0.3"),
        ("three", "cap top −8 mm"),
        ("three", "farther ← → nearer"),
        ("depths", "parts lie from −9 to +12 mm"),
        ("names", "$x_1$ & <b>"),
        ("lost", "none"),
    ],
)
def test_each_case_says_what_is_special_about_it(name: str, words: str) -> None:
    assert words in " ".join(" ".join(_texts(_drawn(name))).split())


def test_what_it_means_is_explained() -> None:
    result, station = CASES["three"]
    assert "0.3 is kept with a confidence of 0.95" in depths_explained(result, station)
    moving = a_station(speed_mm_s=200.0, blur_px=0.5)
    assert "motion is counted in" in depths_explained(a_result(moving), moving)
    doubted = a_result(station, warnings=[Note("model-misfit", "f/2.")])
    assert "does not describe all readings" in depths_explained(doubted, station)


@pytest.mark.parametrize("name", CASES)
def test_no_word_covers_another_or_leaves_the_picture(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    figure = _drawn(name)
    drawn: dict[int, Text] = {}
    plain = Text.draw

    def seen(text: Text, renderer: RendererBase) -> None:
        if text.get_text().strip():
            drawn[id(text)] = text
        plain(text, renderer)

    monkeypatch.setattr(Text, "draw", seen)
    figure.draw_without_rendering()
    boxes = [(text.get_text(), text.get_window_extent()) for text in drawn.values()]
    assert len(boxes) > 10
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
