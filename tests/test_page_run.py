"""The guided run on the page: its words, sounds and buttons, and a whole run by a scripted browser."""

import json
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from guided import PLAN, STOPS, MemoryKeeper, small_camera, small_station
from results import a_result, a_station
from test_page import News, ask, press

from sweep.capture import (
    Action,
    Ask,
    Begin,
    Event,
    Exposed,
    Finished,
    Live,
    Score,
    Seen,
    Show,
    StepDone,
    Taken,
    Trouble,
    conduct,
)
from sweep.demo import SimulatedHand, with_hand
from sweep.errors import CameraError, Interrupted
from sweep.ring import RingView, State
from sweep.screens.board import Board
from sweep.screens.page import Door, RunPage, open_door
from sweep.screens.page.preview import LONGEST_PX, preview
from sweep.screens.page.words import Telling, way
from sweep.station import Camera

STATION = small_station()
BEGIN = Begin(("Mind the lamp.", "Mind the machine."), STOPS)


def seen(state: State = "turning", off: float | None = None, **changes: Any) -> Seen:
    pixels = np.zeros((120, 160), np.uint16)
    usual = {"tone": 0.6, "wanted": 0.72, "clipped": False, "exposure_ms": 2.0, "gain_db": 0.0}
    return Seen(pixels, RingView(state, off), **{**usual, **changes})


def ask_for(stop: float | None, number: int, leaving: float | None = None, confirm: bool = False) -> Ask:
    return Ask(stop, number, 5, confirm, leaving)


def after(*events: Event, step_s: float = 1.0) -> Telling:
    board = Board("Vial cap lane", STOPS, 0.5, take="“Take now”", go_on="“Go on”")
    telling = Telling(board, STATION)
    for place, event in enumerate(events):
        telling = telling.after(event, place * step_s)
    return telling


def sounds(*events: Event) -> list[str]:
    return [kind for _, kind in after(*events).sounds]


def buttons(telling: Telling) -> dict[str, str]:
    return {b["action"]: b["label"] for b in telling.state()["buttons"] if b["on"]}


# ---- words


@pytest.mark.parametrize(
    ("off", "words"),
    [
        (0.05, "at the mark"),
        (0.2, "a little more open"),
        (-0.2, "a little more closed"),
        (0.5, "half a stop more open"),
        (-1.1, "one stop more closed"),
        (-2.6, "about 3 stops more closed"),
    ],
)
def test_where_the_ring_should_go_in_words(off, words):
    assert way(off) == words


def test_the_ring_stands_right_of_the_goal_when_it_is_closed_too_far():
    ring = after(BEGIN, ask_for(2.8, 2), seen("past", 0.75)).state()["ring"]
    assert ring == {"place": 0.75, "goal": "f/2.8", "words": "one stop more open", "there": False}
    assert after(BEGIN, ask_for(2.8, 2), seen("arrived", 0.2)).state()["ring"]["there"]
    assert after(BEGIN, ask_for(2.8, 2), seen("past", 9.0)).state()["ring"]["place"] == 1.0
    assert after(BEGIN, ask_for(2.0, 1), seen("resting")).state()["ring"] is None


def test_light_is_told_in_words_and_figures_never_beyond_the_scale():
    light = after(BEGIN, ask_for(2.0, 1), seen(tone=1.3, clipped=True)).state()["light"]
    assert light["tone"] == 1.0
    assert "Too bright" in light["words"]
    assert after(BEGIN, ask_for(2.0, 1), seen()).state()["light"]["words"] == "60% of full scale, wanted 72%"


def test_scores_say_whether_they_are_enough():
    scores = (Score("tray floor", 0.61), Score("cap top", 0.31), Score("cap rim", None))
    told = after(BEGIN, ask_for(2.0, 1), seen(scores=scores)).state()["scores"]
    assert [score["words"] for score in told] == [
        "0.61, enough: 0.5 needed",
        "0.31, too little: 0.5 needed",
        "cannot be read yet",
    ]


def test_progress_knows_done_skipped_and_kept_from_before():
    # Taken up again at the second stop; the second done, the third skipped.
    telling = after(BEGIN, ask_for(2.8, 2), StepDone(2.8, 1.0, 0.7), ask_for(4.0, 3, 2.8), ask_for(5.6, 4, 2.8))
    progress = telling.state()["progress"]
    assert [stop["state"] for stop in progress["stops"]] == ["done", "done", "skipped", "now"]
    assert (progress["number"], progress["of"]) == (4, 5)
    # Undone: asked for again, it is neither done nor skipped.
    telling = telling.after(ask_for(2.8, 2), 9.0)
    assert [stop["state"] for stop in telling.state()["progress"]["stops"]] == ["done", "now", "to come", "to come"]


@pytest.mark.parametrize(
    ("events", "expected"),
    [
        ((BEGIN,), {"take": "Start", "end": "End run"}),
        (
            (BEGIN, ask_for(2.0, 1, confirm=True), seen()),
            {"take": "Take now", "skip": "Skip f/2", "pause": "Pause", "end": "End run"},
        ),
        (
            (BEGIN, ask_for(2.8, 2, 2.0), seen()),
            {"take": "Take now", "back": "Undo f/2", "skip": "Skip f/2.8", "pause": "Pause", "end": "End run"},
        ),
        (
            (BEGIN, ask_for(2.8, 2, 2.0), seen(), Taken(2.8, 1, 3)),
            {"back": "Take f/2.8 again", "skip": "Skip f/2.8", "pause": "Pause", "end": "End run"},
        ),
        ((BEGIN, ask_for(2.8, 2, 2.0), seen(paused=True)), {"take": "Go on", "end": "End run"}),
        (
            (BEGIN, ask_for(None, 5, 5.6), seen()),
            {"take": "Take now", "skip": "Leave darks out", "pause": "Pause", "end": "End run"},
        ),
        ((BEGIN, ask_for(2.8, 2), Finished(Path("kept"), (2.0,), (), False)), {}),
    ],
)
def test_buttons_fit_what_the_run_would_hear(events, expected):
    assert buttons(after(*events)) == expected


def test_buttons_keep_their_places_while_stops_are_taken():
    # A button that moves under a gloved finger does what was not meant.
    usual = ["take", "back", "skip", "pause", "end"]
    for events in (
        (ask_for(2.0, 1, confirm=True), seen()),
        (ask_for(2.8, 2, 2.0), seen()),
        (ask_for(2.8, 2, 2.0), seen(), Taken(2.8, 1, 3)),
        (ask_for(2.8, 2, 2.0), seen(paused=True)),
        (ask_for(None, 5, 5.6), seen(), Taken(None, 1, 2)),
    ):
        assert [button["action"] for button in after(BEGIN, *events).state()["buttons"]] == usual


def test_hints_name_what_is_on_the_page_not_keys_of_a_keyboard():
    for events in (
        (BEGIN, ask_for(2.0, 1, confirm=True), seen("resting")),
        (BEGIN, ask_for(2.8, 2), seen("resting")),
        (BEGIN, ask_for(2.8, 2), seen(paused=True)),
    ):
        hint = after(*events).state()["hint"]
        assert "“" in hint
        assert "SPACE" not in hint
        assert " p " not in hint


# ---- sounds, and words for the ear


def test_each_state_sounds_once_when_it_begins():
    there = seen("arrived", 0.0)
    assert sounds(BEGIN, ask_for(2.8, 2), seen("turning", -0.5), there, there, there) == ["arrived"]
    assert sounds(BEGIN, ask_for(2.8, 2), seen("turning", 0.5), seen("past", 1.0), seen("past", 1.0)) == ["wrong"]
    assert sounds(BEGIN, ask_for(2.8, 2), seen("turning"), seen("wrong way", -1.0), there) == ["wrong", "arrived"]
    assert sounds(BEGIN, ask_for(2.8, 2), StepDone(2.8, 1.0, 0.7)) == ["taken"]
    assert sounds(BEGIN, ask_for(2.8, 2), Trouble("Gone."), Trouble("Gone.")) == ["wrong"]
    assert sounds(BEGIN, ask_for(2.8, 2), seen("turning"), Exposed(1.0, 0.0), seen("between", -0.5)) == []


def test_darks_make_no_false_alarm():
    assert sounds(BEGIN, ask_for(None, 5), seen("turning"), seen("dark")) == []


def test_sounds_are_counted_so_that_none_is_lost_or_heard_twice():
    events = [BEGIN, ask_for(2.8, 2)]
    for _ in range(6):
        events += [seen("turning"), seen("past", 1.0)]
    assert [number for number, _ in after(*events).sounds] == [3, 4, 5, 6]


def test_a_screen_reader_hears_what_matters_and_no_chatter():
    spoken = []
    events = [BEGIN, ask_for(2.8, 2, 2.0)]
    # 20 frames a second of turning: at most one word each 1.5 s, and only a new one.
    events += [seen("turning", -1.0 + 0.01 * k) for k in range(100)]
    events += [seen("arrived", 0.0), Taken(2.8, 1, 3), Taken(2.8, 2, 3), StepDone(2.8, 1.0, 0.7)]
    telling = after()
    for place, event in enumerate(events):
        telling = telling.after(event, place * 0.05)
        if not spoken or telling.spoken != spoken[-1]:
            spoken.append(telling.spoken)
    assert spoken == [
        "",
        "Close the ring from f/2 to f/2.8.",
        "Half a stop more closed.",
        "A little more closed.",
        "At the mark.",
        "There. Hands off the ring.",
        "Taking frames.",
        "f/2.8 taken.",
    ]


# ---- the picture


@pytest.mark.parametrize(
    ("shape", "dtype", "depth", "layout"),
    [
        ((2048, 2448), np.uint16, 12, "mono"),
        ((120, 160), np.uint8, None, "mono"),
        ((120, 160, 3), np.uint8, None, "bgr"),
        ((1200, 1920), np.uint16, 12, "rggb"),
    ],
)
def test_a_preview_is_a_jpeg_of_bounded_size(shape, dtype, depth, layout):
    camera = Camera(pixel_pitch_um=3.45, bit_depth=depth, layout=layout, black_level_dn=10)
    full = 255 if dtype == np.uint8 else 4095
    frame = np.full(shape, full // 2, dtype)
    jpeg = preview(frame, camera)
    shown = cv2.imdecode(np.frombuffer(jpeg, np.uint8), cv2.IMREAD_UNCHANGED)
    assert max(shown.shape[:2]) == min(LONGEST_PX, max(shape[:2]))
    # The share of full scale, both less black, by a display's gamma of 2.2.
    assert abs(float(shown.mean()) - 255 * ((full // 2 - 10) / (full - 10)) ** (1 / 2.2)) < 2
    part = preview(frame, camera, (10, 20, 60, 40))
    assert cv2.imdecode(np.frombuffer(part, np.uint8), cv2.IMREAD_UNCHANGED).shape[:2] == (40, 60)


def test_a_preview_of_samples_at_the_top_of_their_words_is_not_blown_out():
    camera = Camera(pixel_pitch_um=3.45, bit_depth=12)
    jpeg = preview(np.full((120, 160), 2048 << 4, np.uint16), camera)
    # 255 x 0.5^(1/2.2) = 186
    assert abs(float(cv2.imdecode(np.frombuffer(jpeg, np.uint8), 0).mean()) - 186) < 3


# ---- whole runs


class Person(threading.Thread):
    """A browser that answers the news; `decide(state)` gives the action to press, or None."""

    def __init__(self, door: Door, decide: Callable[[dict[str, Any]], str | None]) -> None:
        super().__init__(daemon=True)
        self._door, self._decide = door, decide
        self.states: list[dict[str, Any]] = []
        self.start()

    def run(self) -> None:
        news = News(self._door, "person")
        name, data = news.next()
        while name != "farewell":
            if name == "message":
                self.states.append(data["state"])
                action = self._decide(data["state"])
                if action is not None:
                    press(self._door, "person", action=action, step=data["state"]["step"])
            name, data = news.next()
        news.close()


def whole_run(decide: Callable[[dict[str, Any]], str | None]) -> tuple[Finished, MemoryKeeper, list[dict[str, Any]]]:
    """A run at the small simulated station, whose ring a simulated hand turns; only the page answers."""
    door, keeper, camera = open_door("127.0.0.1"), MemoryKeeper(), small_camera(STATION)
    hand = SimulatedHand(camera, STOPS)
    with RunPage(STATION, door) as page:
        person = Person(door, decide)

        def show(event: Event) -> Action:
            assert person.is_alive()
            answer = page(event)
            if not isinstance(event, Begin):
                hand(event)
            return answer

        finished = conduct(Live(camera, STATION), keeper, STATION, PLAN, show)
    person.join(20)
    return finished, keeper, person.states


def plain(state: dict[str, Any]) -> str | None:
    """Begin, and take a stop when the page asks to."""
    if state["phase"] == "begin" or (state["phase"] == "ask" and "“Take now”" in state["hint"]):
        return "take"
    return None


def test_a_whole_run_by_the_page_alone():
    finished, keeper, states = whole_run(plain)
    assert finished.taken == STOPS
    assert not finished.ended
    assert len(keeper.shots) == len(STOPS) * PLAN.frames + PLAN.darks
    assert {state["mode"] for state in states} == {"run"}
    begun = next(state for state in states if state["phase"] != "wait")
    assert (begun["phase"], bool(begun["cautions"])) == ("begin", True)
    assert (states[-1]["phase"], states[-1]["do"]) == ("over", "All frames are taken")
    assert "taken" in {sound["kind"] for state in states for sound in state["sounds"]}


def test_end_on_the_page_ends_the_run():
    finished, _, _ = whole_run(lambda state: "end" if state["progress"]["number"] == 1 else plain(state))
    assert finished.ended
    assert finished.taken == ()


def test_what_was_meant_for_the_step_before_is_refused(monkeypatch):
    door = open_door("127.0.0.1")
    with RunPage(STATION, door) as page:
        news = News(door)
        for event in (BEGIN, ask_for(2.0, 1, confirm=True), seen("resting")):
            page(event)
        step = news.next()[1]["state"]["step"]
        page(ask_for(2.8, 2, 2.0))
        assert press(door, action="skip", step=step)[0] == 409
        assert press(door, action="skip", step=True)[0] in (400, 409)
        assert press(door, action="skip")[0] == 400
        assert press(door, action="dance", step=step)[0] == 400
        assert page(seen()) is Action.NONE
        assert press(door, action="end", step=step)[0] == 204  # the way out is open at any step
        assert page(Exposed(1.0, 0.0)) is Action.END
        news.close()


def test_a_press_waits_for_a_frame_and_does_not_outlive_its_step():
    door = open_door("127.0.0.1")
    with RunPage(STATION, door) as page:
        news = News(door)
        news.next()
        for event in (BEGIN, ask_for(2.8, 2, 2.0)):
            page(event)
        page(seen())
        step = page.state()["step"]
        assert press(door, action="skip", step=step)[0] == 204
        assert page(Exposed(1.0, 0.0)) is Action.NONE
        assert page(seen()) is Action.SKIP
        assert page(seen()) is Action.NONE
        assert press(door, action="skip", step=step)[0] == 204
        page(ask_for(4.0, 3, 2.0))
        assert page(seen()) is Action.NONE
        news.close()


def test_the_page_comes_back_to_the_same_state_after_a_reload():
    door = open_door("127.0.0.1")
    with RunPage(STATION, door) as page:
        for event in (BEGIN, ask_for(2.8, 2, 2.0), seen("between", -0.5), Trouble("Hold still.")):
            page(event)
        views = []
        for client in ("one", "one", "two"):
            news = News(door, client)
            views.append(news.next()[1]["state"])
            news.close()
        assert views[0] == views[1] == views[2] == json.loads(json.dumps(page.state()))
        assert views[0]["trouble"] == "Hold still."
        status, picture, _ = ask(door, "picture")
        assert status == 200
        assert cv2.imdecode(np.frombuffer(picture, np.uint8), 0).shape == (120, 160)


def test_a_fault_is_told_on_the_page_before_it_goes():
    door = open_door("127.0.0.1")
    page = RunPage(STATION, door)
    page.__enter__()
    page(BEGIN)
    news = News(door)
    news.next()
    page.__exit__(CameraError, CameraError("The camera has gone."), None)
    last = news.next()[1]["state"]
    assert (last["phase"], last["trouble"]) == ("over", "The camera has gone.")
    assert "taken is kept" in last["hint"]
    news.close()


def test_an_end_by_somebody_is_no_fault():
    page = RunPage(STATION, open_door("127.0.0.1"))
    page.__enter__()
    page(BEGIN)
    page.__exit__(Interrupted, Interrupted("Ended early; frames are kept in run-1."), None)
    state = page.state()
    assert (state["do"], state["trouble"]) == ("The run was ended", "")
    assert "run-1" in state["hint"]


def test_the_answer_is_shown():
    door, station = open_door("127.0.0.1"), a_station()
    with RunPage(STATION, door) as page:
        page(Finished(Path("kept"), (2.0,), (), False))
        result = a_result(station)
        page.show_answer(result, station)
        state = page.state()
        assert state["phase"] == "over"
        assert f"f/{result.recommendation.stop:g}" in state["answer"][0]


# ---- beside a terminal


class Terminal:
    """A terminal screen that answers what it is told to."""

    def __init__(self, answer: Action) -> None:
        self.answer, self.events, self.open = answer, [], False

    def __enter__(self) -> "Terminal":
        self.open = True
        return self

    def __exit__(self, *_: object) -> None:
        self.open = False

    def __call__(self, event: Event) -> Action:
        self.events.append(event)
        return self.answer


@pytest.fixture
def page() -> Iterator[RunPage]:
    with RunPage(STATION, open_door("127.0.0.1")) as opened:
        yield opened


def beside(page: RunPage, terminal: Terminal, has_keys: bool) -> Show:
    from sweep.screens.page import Beside

    return Beside(page, terminal, has_keys=has_keys)


@pytest.mark.parametrize("has_keys", [True, False])
def test_the_terminal_joins_once_the_page_has_begun_and_answers_where_it_has_keys(page, has_keys):
    terminal = Terminal(Action.SKIP)
    with beside(page, terminal, has_keys) as screen:
        assert screen(BEGIN) is Action.NONE
        assert not terminal.open
        assert screen(ask_for(2.0, 1)) is (Action.SKIP if has_keys else Action.NONE)
        assert terminal.open
        assert screen(seen()) is (Action.SKIP if has_keys else Action.NONE)
    assert not terminal.open
    assert len(terminal.events) == 2


def test_a_simulated_hand_may_leave_the_beginning_to_the_page():
    hand = SimulatedHand(small_camera(STATION), STOPS)
    assert with_hand(hand, lambda event: Action.NONE)(BEGIN) is Action.TAKE
    assert with_hand(hand, lambda event: Action.NONE, begins=False)(BEGIN) is Action.NONE
