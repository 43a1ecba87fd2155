"""The answer on a terminal: the answer first, within one screen of 80 columns and 24 rows."""

from pathlib import Path

import pytest
from results import STOPS, a_result, a_station
from rich.console import Console

from sweep.report import FILES
from sweep.result import Note, Result
from sweep.screens.answer import answer
from sweep.station import Station

PATHS = [Path("results") / "lane2" / name for name in FILES]
NOTE = Note(
    "frames-saturated", "f/1.4: up to 31 % of the pixels are clipped (tray floor). Take this stop again darker."
)


def _shown(
    result: Result, station: Station, width: int = 80, height: int = 24, terminal: bool = True, colour: bool = False
) -> list[str]:
    console = Console(
        width=width,
        height=height,
        force_terminal=terminal,
        color_system="standard" if colour else None,
        no_color=not colour,
    )
    with console.capture() as caught:
        console.print(answer(result, station, PATHS))
    return caught.get().splitlines()


def test_the_answer_comes_first_and_all_fits_one_screen() -> None:
    station = a_station()
    shown = _shown(a_result(station, warnings=[NOTE], clipped=(1.4,)), station)
    assert shown[0].rstrip() == "f/5.6, 3.92 ms, 0 dB: meets the need at all three targets."
    assert len(shown) < 24
    assert all(len(line) <= 80 for line in shown)
    text = " ".join(" ".join(shown).split())
    assert "Chance that f/5.6 meets the need" in text
    assert "Take this stop again darker." in text
    assert shown[-1].rstrip() == "Written to results/lane2: record.pdf, plot.png and 4 more."


def test_every_stop_has_its_row_with_a_verdict_in_words() -> None:
    station = a_station()
    shown = _shown(a_result(station), station)
    rows = [line for line in shown if line[:4] in ("  f/", "> f/")]
    assert [line.split()[1 if line[0] == ">" else 0] for line in rows] == [f"f/{s:g}" for s in STOPS]
    assert [line for line in rows if line[0] == ">"] == [line for line in rows if "meets the need" in line]
    assert "0.441 ± 0.008" in next(line for line in rows if line[0] == ">")
    assert sum("too little light" in line for line in rows) == 3


def test_a_low_screen_drops_reasons_never_warnings_or_stops() -> None:
    station = a_station(stops=(1.0, *STOPS, 22.0))
    result = a_result(station, warnings=[NOTE] * 3, ms_at_f4=0.8)
    text = " ".join(" ".join(_shown(result, station)).split())
    assert "more reasons in the record" in text
    assert text.count("Take this stop again darker.") == 3
    assert text.count(" f/") >= 10


def test_a_pipe_and_a_high_screen_get_every_reason() -> None:
    station = a_station(stops=(1.0, *STOPS, 22.0))
    result = a_result(station, warnings=[NOTE] * 3, ms_at_f4=0.8)
    for shown in (_shown(result, station, terminal=False), _shown(result, station, height=60)):
        text = " ".join(" ".join(shown).split())
        assert all(reason in text for reason in result.recommendation.reasons)


def test_a_wide_screen_names_every_fault() -> None:
    station = a_station(contrast=0.6)
    result = a_result(station)
    assert not any("too little light, too little contrast" in line for line in _shown(result, station))
    assert any("too little light, too little contrast" in line for line in _shown(result, station, width=130))


def test_a_failed_need_shows_what_would_cure_it_before_why() -> None:
    station = a_station(contrast=0.8)
    shown = _shown(a_result(station), station, height=60)
    assert shown[0].startswith("No stop meets the need; the best is f/5.6")
    text = "\n".join(shown)
    assert text.index("Move the plane of focus") < text.index("Why") < text.index("by light")


def test_nothing_sound_is_said_with_the_need() -> None:
    station = a_station()
    shown = _shown(a_result(station, clipped=STOPS), station)
    assert shown[0].rstrip() == "No stop can be recommended: none has a sound reading at every target."
    assert "A contrast of 0.3 is needed at a feature of 180 um." in shown[1]


@pytest.mark.parametrize("contrast", [0.3, 0.8])
def test_colour_adds_no_meaning(contrast: float) -> None:
    station = a_station(contrast=contrast)
    plain = "\n".join(_shown(a_result(station), station))
    coloured = "\n".join(_shown(a_result(station), station, colour=True))
    assert "\x1b[" in coloured
    assert "meets the need" in plain or "No stop meets" in plain


def test_markup_in_a_name_stays_text() -> None:
    station = a_station([("[red]cap[/red] :smile:", 3.0)], stops=(2.8, 5.6))
    assert "[red]cap[/red] :smile:" in " ".join(_shown(a_result(station), station, width=120))
