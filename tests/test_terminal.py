"""The terminal screen: everything in 80 x 24 characters, the right words, plain lines in a pipe, keys."""

import io
import os
import sys
from pathlib import Path

import numpy as np
import pytest
from guided import STOPS, Run, small_station
from rich.console import Console

from sweep.capture import Action, Ask, Begin, Finished, Score, Seen, StepDone, Taken, Trouble
from sweep.ring import RingView
from sweep.screens.board import Board, hint_for
from sweep.screens.terminal import Terminal, picture

FRAME = np.zeros((4, 4), np.uint16)
LONG_RING = (1.0, 1.2, 1.4, 1.7, 2.0, 2.4, 2.8, 3.4, 4.0, 4.8, 5.6, 6.7, 8.0, 9.5, 11.0, 13.0, 16.0, 19.0, 22.0)


def seen(state="turning", off=-0.6, tone=0.4, **changes):
    scores = (Score("tray floor, far end of the lane", 0.42), Score("cap top", None))
    return Seen(FRAME, RingView(state, off), tone, 0.72, False, 12.345, 0.0, **({"scores": scores} | changes))


def board(*events, stops=STOPS):
    shown = Board("Vial cap lane", stops, 0.5)
    for event in events:
        shown = shown.after(event)
    return shown


def drawn(shown, width=80, encoding="utf-8"):
    """The screen's lines as text."""
    raw = io.TextIOWrapper(io.BytesIO(), encoding=encoding)
    console = Console(file=raw, width=width, height=24, force_terminal=True, color_system=None, legacy_windows=False)
    console.print(picture(shown, console))
    raw.flush()
    return raw.buffer.getvalue().decode(encoding).splitlines()


LONG_TROUBLE = "The light goes up and down by 45% from frame to frame. Use a steady lamp, or state need.flicker_hz."


@pytest.mark.parametrize(
    "events",
    [
        (Begin(("Moving machinery: stop it.",) * 3, STOPS),),
        (Ask(2.8, 2, 5, False, 2.0), seen()),
        (Ask(22.0, 19, 20, False, 19.0), seen(), Trouble(LONG_TROUBLE)),
        (Ask(2.0, 1, 5, True), seen("resting", None), Taken(2.0, 3, 8)),
        (Ask(None, 5, 5, False, 5.6), seen("dark", None)),
        (Ask(2.8, 2, 5, False, 2.0), seen(scores=tuple(Score(f"target {i}", 0.1 * i) for i in range(9)))),
    ],
    ids=["begin", "turning", "trouble", "taking", "cap", "many targets"],
)
def test_everything_fits_80_by_24(events):
    for encoding in ("utf-8", "ascii"):
        lines = drawn(board(*events, stops=LONG_RING), encoding=encoding)
        assert len(lines) <= 24
        assert max(map(len, lines)) <= 80


def test_what_to_do_is_large_and_the_way_is_said():
    lines = drawn(board(Ask(2.8, 2, 5, False, 2.0), seen()))
    text = "\n".join(lines)
    assert "Close the ring from f/2 to f/2.8" in text
    assert sum("█" in line for line in lines[2:9]) == 5
    assert "0.6 stop to close" in text
    assert "40% of full scale, wanted 72%" in text
    assert "contrast 0.42, needed 0.5" in text
    assert "step 2 of 5" in text


def test_opening_the_ring_is_called_so():
    assert board(Ask(2.0, 2, 5, False, 2.8)).do() == "Open the ring from f/2.8 to f/2"


@pytest.mark.parametrize(
    ("view", "words"),
    [
        (RingView("not turned", -1.0), "Turn the ring to f/4"),
        (RingView("wrong way", -1.5), "Wrong way. Close the ring: 1.5 stop to close"),
        (RingView("past", 1.0, 5.6), "Too far, at f/5.6"),
        (RingView("past", 0.5), "Too far by 0.5 stop"),
        (RingView("between", -0.4), "Not there yet: 0.4 stop to close"),
        (RingView("arrived", 0.02, 4.0), "There: f/4"),
        (RingView("shaking", 0.0), "Take your hand off"),
        (RingView("dark"), "Is the lamp on"),
    ],
)
def test_hints(view, words):
    assert words in hint_for(view, 4.0, "SPACE")


def test_a_trouble_stays_until_the_next_stop_and_a_lost_camera_until_a_frame():
    asked = Ask(2.8, 2, 5, False, 2.0)
    kept = board(asked, Trouble("This stop is taken again."), asked, seen(), Taken(2.8, 1, 3))
    assert kept.trouble
    assert not kept.after(Ask(4.0, 3, 5, False, 2.8)).trouble
    lost = board(asked, Trouble("The camera is away.", lost=True))
    assert lost.trouble
    assert not lost.after(seen()).trouble


def test_done_stops_are_marked():
    text = "\n".join(drawn(board(Ask(2.0, 1, 5, True), StepDone(2.0, 1.0, 0.7), Ask(2.8, 2, 5, False, 2.0))))
    assert "2✓ [2.8] 4 5.6" in text


def test_in_a_pipe_plain_lines_and_nothing_waits_for_a_key():
    out = io.StringIO()
    with Terminal(small_station(), Console(file=out, width=80)) as screen:
        run = Run(lambda event, events: screen(event))
    assert run.finished.taken == STOPS
    lines = out.getvalue().splitlines()
    assert any("lock out its energy" in line for line in lines)
    assert "[2/5] Close the ring from f/2 to f/2.8." in lines
    assert sum("taken:" in line for line in lines) == len(STOPS) + 1
    assert "\x1b" not in out.getvalue()


@pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are a POSIX thing")
def test_keys_become_actions(monkeypatch):
    import pty

    keyboard, terminal = pty.openpty()
    with os.fdopen(terminal, "r", closefd=True) as stdin:
        monkeypatch.setattr(sys, "stdin", stdin)
        out = io.StringIO()
        console = Console(file=out, force_terminal=True, width=80, height=24)
        with Terminal(small_station(), console) as screen:
            assert screen(Ask(2.0, 1, 5, True)) is Action.NONE
            for key, action in ((b" ", "TAKE"), (b"s", "SKIP"), (b"B", "BACK"), (b"p", "PAUSE"), (b"e", "END")):
                os.write(keyboard, key)
                assert screen(seen()) is Action[action]
            os.write(keyboard, b"x")
            assert screen(seen()) is Action.NONE
            screen(Finished(Path("kept"), STOPS, (), False))
    os.close(keyboard)
