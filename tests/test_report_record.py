"""The record: pages by PDF/A-2b, with the words of users as they are and never as markup."""

import re
import zlib
from dataclasses import replace

import pytest
from results import STOPS, a_result, a_station

from sweep.report.depth_plot import depth_svg
from sweep.report.letters import _letters, drawable
from sweep.report.plot import svg
from sweep.report.record import _content, _value, record_pdf
from sweep.result import Note, Result, SourceFacts
from sweep.station import Station

NOTES = [Note("frames-saturated", "f/1.4: 31 % clipped."), Note("gain-spent", "f/8 takes 6 dB.")]
HOSTILE = (
    '#panic("no")',
    "*bold* _thin_ `raw`",
    "$ sum_(i=1)^n $",
    "]) [ \\ <label> @cite",
    '"quoted" \\u{41}',
    "= Title",
)


@pytest.fixture(scope="module")
def three() -> tuple[Result, Station]:
    station = a_station()
    return a_result(station, warnings=NOTES, clipped=(1.4,)), station


def _pdf(result: Result, station: Station) -> bytes:
    depths = None if result.depth_map is None else depth_svg(result.depth_map, result, station)
    return record_pdf(result, station, svg(result, station), depths)


def test_it_is_pdf_a_2b_and_the_same_each_time(three: tuple[Result, Station]) -> None:
    pdf = _pdf(*three)
    assert pdf == _pdf(*three)
    # ISO 19005-2:2011, 6.6.4: the metadata name part and conformance, in the open.
    assert b"<pdfaid:part>2</pdfaid:part>" in pdf
    assert b"<pdfaid:conformance>B</pdfaid:conformance>" in pdf
    assert b"%PDF-1.7" in pdf


def test_only_fonts_of_the_typesetter_are_in_it(three: tuple[Result, Station]) -> None:
    pdf = _pdf(*three)
    streams = re.findall(rb"stream\r?\n(.*?)\r?\nendstream", pdf, re.DOTALL)
    text = pdf + b"".join(zlib.decompress(s) for s in streams if s.startswith(b"x"))
    fonts = {name.decode() for name in re.findall(rb"/FontName\s*/[A-Z]{6}\+([A-Za-z-]+)", text)}
    assert fonts
    assert all(font.startswith(("LibertinusSerif", "DejaVuSansMono")) for font in fonts), fonts


@pytest.mark.parametrize("text", HOSTILE)
def test_markup_in_names_and_notes_stays_text(text: str) -> None:
    station = a_station([(text, 3.0)], stops=(2.8, 5.6))
    station = station.model_copy(update={"station": station.station.model_copy(update={"name": text})})
    result = a_result(station, warnings=[Note("flicker", text)])
    found = replace(result.recommendation, reasons=(text,), shortfalls=(text,))
    assert _pdf(replace(result, recommendation=found), station).startswith(b"%PDF")  # a #panic would raise


def test_every_letter_that_counts_as_drawable_can_be_set() -> None:
    station = a_station([("cap", 3.0)], stops=(2.8, 5.6))
    result = a_result(station)
    every = drawable("".join(map(chr, sorted(_letters()))))
    assert len(every) > 3000  # DejaVu Sans Mono holds some 3,300 letters
    pdf = _pdf(replace(result, recommendation=replace(result.recommendation, reasons=(every,))), station)
    assert pdf.startswith(b"%PDF")


def test_names_beyond_the_fonts_are_told() -> None:
    station = a_station([("瓶", 3.0)], stops=(2.8, 5.6))
    result = a_result(station)
    assert "stands for a letter" in _content(result, station)["footer"]
    assert "stands for" not in _content(a_result(a_station()), a_station())["footer"]
    assert _pdf(result, station).startswith(b"%PDF")


def test_it_says_the_verdict_its_limits_and_what_to_do(three: tuple[Result, Station]) -> None:
    page = _content(*three)
    assert page["headline"] == "f/5.6, 3.92 ms, 0 dB: meets the need at all three targets"
    assert any("0.441 ± 0.008 (k = 2); 0.3 is needed" in line for line in page["verdict"])
    assert "2 warnings: see below." in page["verdict"]
    assert ("Exposure", "3.92 ms") in page["set"]
    assert ("Exposure", "at most 4 ms") in page["need"]
    # What the note itself does not say is added from its kind.
    assert page["warnings"][1] == "f/8 takes 6 dB. More light, or a longer allowed exposure."
    assert len(page["stops"]["rows"]) == len(STOPS)
    assert [row["cells"][0] for row in page["stops"]["rows"] if row["bold"]] == ["f/5.6"]
    assert len(page["readings"]["rows"]) == 3 * len(STOPS)  # flats are left out
    assert page["readings"]["rows"][0]["cells"][-1] == "frames saturated"


def test_the_smallest_features_have_two_rows_a_target_and_a_column_a_stop() -> None:
    station = a_station(part_contrast=0.1)
    result = a_result(station)
    found = _content(result, station)["details"]
    assert found["head"] == ["Target", "", *(f"f/{stop:g}" for stop in STOPS)]
    assert [row["cells"][:2] for row in found["rows"][:2]] == [["cap top", "detected"], ["", "contrast 0.3"]]
    assert len(found["rows"]) == 2 * 3
    assert result.depth_map is not None
    at_four = result.depth_map.stops[3].targets[2]  # cap top
    assert at_four.smallest_at_need_um is not None
    assert found["rows"][1]["cells"][5] == f"{at_four.smallest_at_need_um:.3g}"
    assert found["head"][found["strong"]] == "f/5.6"
    assert "part contrast of 0.1" in found["note"]


def test_without_noise_nothing_is_told_of_detection() -> None:
    station = a_station()
    result = a_result(station)
    quiet = replace(result, stops=tuple(replace(s, snr_db=None) for s in result.stops))
    found = _content(quiet, station)["details"]
    assert [row["cells"][:2] for row in found["rows"]] == [
        [name, "contrast 0.3"] for name in ("cap top", "cap rim", "tray floor")
    ]
    assert "Detected" not in found["note"]


@pytest.mark.parametrize("model", [True, False])
def test_a_record_goes_without_what_is_not_known(model: bool) -> None:
    station = a_station([("tray floor", 2.0), ("flat", 1.0)])
    flat = station.targets[1].model_copy(update={"patches": station.targets[1].patches[1:]})
    station = station.model_copy(update={"targets": (station.targets[0], flat)})
    result = a_result(station, model=model)
    if result.depth_map is not None:
        rows = tuple(replace(row, targets=row.targets[:1]) for row in result.depth_map.stops)
        result = replace(result, depth_map=replace(result.depth_map, stops=rows))
        details = _content(result, station)["details"]
        assert {len(row["cells"]) for row in details["rows"]} == {len(details["head"])}
    assert _pdf(result, station).startswith(b"%PDF")


@pytest.mark.parametrize(
    ("clipped", "sharpness", "title"),
    [(STOPS, 1.0, "The best found"), ((), 0.4, "The best found"), ((), 1.0, "To be set")],
)
def test_nothing_is_to_be_set_that_does_not_serve(clipped: tuple[float, ...], sharpness: float, title: str) -> None:
    station = a_station()
    result = a_result(station, clipped=clipped, sharpness=sharpness)
    assert _content(result, station)["set_title"] == title
    assert _pdf(result, station).startswith(b"%PDF")


def test_a_forecast_claims_no_measurement() -> None:
    station = a_station()
    forecast = replace(a_result(station), readings=(), source=SourceFacts(0, ""))
    page = _content(forecast, station)
    assert page["title"] == "Forecast for an aperture sweep"
    assert page["footer"].endswith("a forecast")
    assert page["readings"]["rows"] == []
    assert page["sign"] == ()
    assert "measured" not in " ".join(page["cautions"])
    assert "edges" not in " ".join(page["method"])
    assert ("Frames used", "none: a forecast") in page["source"]
    assert _pdf(forecast, station).startswith(b"%PDF")


def test_a_long_sweep_flows_over_pages() -> None:
    station = a_station([(f"shelf {i}", -12.0 + 3.0 * i) for i in range(9)])
    pages = len(re.findall(rb"/Type\s*/Page\b", _plain(_pdf(a_result(station), station))))
    assert pages >= 3


def _plain(pdf: bytes) -> bytes:
    streams = re.findall(rb"stream\r?\n(.*?)\r?\nendstream", pdf, re.DOTALL)
    return pdf + b"".join(zlib.decompress(s) for s in streams if s.startswith(b"x"))


def test_figures_carry_the_digits_that_their_uncertainty_bears() -> None:
    # Two significant digits of the uncertainty, the value to the same place (JCGM 100:2008, 7.2.6).
    assert _value(2.6123, 0.0121, "") == "2.612 ± 0.024"
    assert _value(1234.56, 30.0, " mm") == "1235 ± 60 mm"
    assert _value(None, None, " mm") == "unknown"
    assert _value(1.2345, None, " px") == "1.23 px"
