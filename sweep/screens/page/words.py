"""The run as the page tells it: where the hand should go, what just happened, what can be pressed."""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any, Literal

from sweep.capture import Action, Ask, Begin, Event, Finished, Seen, StepDone, Taken, Trouble
from sweep.screens.board import Board
from sweep.station import Station

RING_SPAN_STOPS = 1.5
AT_MARK, AT_MARK_STOPS = "at the mark", 0.1
CALM_S = 1.5  # between two words for the ear that come from the ring alone
KEPT_SOUNDS = 4
WRONG_STATES = ("past", "wrong way", "dark")

Sound = Literal["arrived", "taken", "wrong"]
SPOKEN_STATES = {
    "arrived": "There. Hands off the ring.",
    "past": "Too far. Turn back.",
    "wrong way": "Wrong way.",
    "shaking": "The light is unsteady. Take your hand off.",
    "dark": "No light.",
    "resting": "At rest.",
}


@dataclass(frozen=True, slots=True)
class Telling:
    """A run so far, as a page tells it.

    `step` counts what was asked for; `first` is the number of the first step asked for in this run; `skipped`: stops
    that were passed over; `sounds`: the latest, each with its number; `spoken`: for a screen reader, `spoken_s` when;
    `answer`, `fault`, `ended`: what came of the run, what stopped it, and what is said where somebody ended it.
    """

    board: Board
    station: Station
    step: int = 0
    first: int | None = None
    skipped: tuple[float, ...] = ()
    sounds: tuple[tuple[int, Sound], ...] = ()
    spoken: str = ""
    spoken_s: float = 0.0
    answer: tuple[str, ...] = ()
    fault: str = ""
    ended: str = ""

    def after(self, event: Event, now_s: float) -> "Telling":
        """The telling with one more event in it."""
        before = self.board
        told = replace(self, board=before.after(event))
        if isinstance(event, Begin) and not isinstance(before.step, Begin):
            return replace(told, step=self.step + 1)
        if isinstance(event, Ask):
            told = replace(told, step=self.step + 1, first=self.first or event.number, skipped=told._passed_over())
        sound = _sound(event, before)
        if sound is not None:
            number = self.sounds[-1][0] + 1 if self.sounds else 1
            told = replace(told, sounds=(*self.sounds, (number, sound))[-KEPT_SOUNDS:])
        spoken = _spoken(event, told.board)
        soft = isinstance(event, Seen) and event.view.state in ("turning", "between")
        if spoken and spoken != self.spoken and not (soft and now_s - self.spoken_s < CALM_S):
            told = replace(told, spoken=spoken, spoken_s=now_s)
        return told

    def can(self, action: Action) -> bool:
        """Whether the run would heed this action now."""
        return any(button["action"] == action.name.lower() and button["on"] for button in self._buttons())

    def state(self) -> dict[str, Any]:
        """Everything that the page shows, ready for JSON."""
        board = self.board
        return {
            "mode": "run",
            "title": board.title,
            "phase": self._phase(),
            "step": self.step,
            "do": self._do(),
            "stop": None if board.stop is None or self._phase() == "over" else f"f/{board.stop:g}",
            "hint": self._hint(),
            "trouble": self.fault or ("" if self._phase() == "over" else board.trouble),
            "spoken": self.spoken,
            "sounds": [{"number": number, "kind": kind} for number, kind in self.sounds],
            "cautions": list(board.step.cautions) if isinstance(board.step, Begin) else [],
            "progress": self._progress(),
            "ring": self._ring(),
            "light": self._light(),
            "scored": f"Contrast of a feature of {self.station.need.feature_um:g} µm, live",
            "scores": [_score(score.target, score.contrast, board.need) for score in board.seen.scores]
            if board.seen and board.stop is not None
            else [],
            "frame": self._frame(),
            "patches": _patches(self.station),
            "buttons": list(self._buttons()),
            "answer": list(self.answer),
        }

    def _phase(self) -> str:
        board = self.board
        if board.finished is not None or self.fault or self.ended or self.answer:
            return "over"
        if isinstance(board.step, Begin):
            return "begin"
        if board.seen is not None and board.seen.paused:
            return "paused"
        return "taking" if board.taken is not None else "ask" if isinstance(board.step, Ask) else "wait"

    def _do(self) -> str:
        if self.fault:
            return "The run has stopped"
        if self.ended:
            return "The run was ended"
        if self.answer:
            return "The answer"
        match self.board.finished:
            case Finished(ended=True):
                return "The run was ended"
            case Finished():
                return "All frames are taken"
            case _:
                return self.board.do() if self.board.step is not None else "One moment"

    def _hint(self) -> str:
        if self.answer:
            return ""
        if self.ended:
            return self.ended
        if self.fault:
            return "What was taken is kept. The same command takes the run up again."
        match self.board.finished:
            case Finished(ended=True):
                return "What was taken is kept. The same command takes the run up again."
            case Finished():
                return "Take the cap off. The answer is being worked out."
            case _:
                return self.board.hint()

    def _progress(self) -> dict[str, Any]:
        board = self.board
        number, of = (board.step.number, board.step.of) if isinstance(board.step, Ask) else (None, None)
        stops = []
        for place, stop in enumerate(sorted(board.stops)):
            state = "to come"
            if stop == board.stop:
                state = "now"
            elif stop in board.done or (self.first is not None and place + 1 < self.first):
                state = "done"
            elif stop in self.skipped:
                state = "skipped"
            stops.append({"name": f"f/{stop:g}", "state": state})
        return {"number": number, "of": of, "stops": stops}

    def _passed_over(self) -> tuple[float, ...]:
        """Stops before the one that is asked for, that have no frames of this run."""
        stops = sorted(self.board.stops)
        first = self.first or 1
        here = len(stops) if self.board.stop is None else stops.index(self.board.stop)
        return tuple(
            stop for place, stop in enumerate(stops[:here]) if place + 1 >= first and stop not in self.board.done
        )

    def _ring(self) -> dict[str, Any] | None:
        seen, stop = self.board.seen, self.board.stop
        if seen is None or stop is None or seen.view.off_stops is None:
            return None
        off, there = seen.view.off_stops, seen.view.state == "arrived"
        place = 0.5 + max(-RING_SPAN_STOPS, min(RING_SPAN_STOPS, off)) / (2 * RING_SPAN_STOPS)
        return {
            "place": round(place, 4),
            "goal": f"f/{stop:g}",
            "words": AT_MARK if there else way(off),
            "there": there,
        }

    def _light(self) -> dict[str, Any] | None:
        seen = self.board.seen
        if seen is None:
            return None
        words = f"{seen.tone:.0%} of full scale, wanted {seen.wanted:.0%}"
        if seen.clipped:
            words = "Too bright: pixels are at the top of the scale"
        return {
            "tone": round(min(1.0, max(0.0, seen.tone)), 4),
            "wanted": seen.wanted,
            "words": words,
            "setting": f"{seen.exposure_ms:.4g} ms" + (f", {seen.gain_db:g} dB" if seen.gain_db else ""),
        }

    def _frame(self) -> dict[str, Any] | None:
        seen = self.board.seen
        return None if seen is None else {"width": seen.pixels.shape[1], "height": seen.pixels.shape[0]}

    def _buttons(self) -> Iterator[dict[str, Any]]:
        """What can be pressed, the first one being the one that leads on."""
        phase, step = self._phase(), self.board.step
        if phase == "begin":
            yield _button("take", "Start", main=True)
            yield _button("end", "End run")
            return
        if phase == "over" or not isinstance(step, Ask):
            return
        # All of them in every phase: a button that moves under a gloved finger does what was not meant.
        taking, paused, darks = phase == "taking", phase == "paused", step.stop is None
        stop = "darks" if darks else f"f/{step.stop:g}"
        # Most stops lead on by themselves; then "Take now" is for the one who knows better than the light.
        leads_on = paused or (not taking and (step.confirm or darks))
        yield _button("take", "Go on" if paused else "Take now", main=leads_on, on=not taking)
        back = f"Take {stop} again" if taking else "Undo" if step.leaving is None else f"Undo f/{step.leaving:g}"
        yield _button("back", back, on=not paused and not darks and (taking or step.leaving is not None))
        yield _button("skip", "Leave darks out" if darks else f"Skip {stop}", on=not paused and not (darks and taking))
        yield _button("pause", "Pause", on=not paused)
        yield _button("end", "End run")


def way(off_stops: float) -> str:
    """Where the ring should go, in words; off_stops positive: closed too far."""
    away = abs(off_stops)
    side = "open" if off_stops > 0 else "closed"
    if away < AT_MARK_STOPS:
        return AT_MARK
    if away < 0.4:
        return f"a little more {side}"
    if away < 0.75:
        return f"half a stop more {side}"
    if away < 1.25:
        return f"one stop more {side}"
    return f"about {away:.0f} stops more {side}"


def _sound(event: Event, before: Board) -> Sound | None:
    """What the event sounds like; a state sounds when it begins."""
    match event:
        case Seen(view=view) if isinstance(before.step, Ask) and before.step.stop is not None and before.taken is None:
            was = before.seen.view.state if before.seen is not None else None
            if view.state == was:
                return None
            return "arrived" if view.state == "arrived" else "wrong" if view.state in WRONG_STATES else None
        case StepDone():
            return "taken"
        case Trouble(text=text) if text != before.trouble:
            return "wrong"
        case _:
            return None


def _spoken(event: Event, board: Board) -> str:
    match event:
        case Ask():
            return f"{board.do()}."
        case Seen(view=view) if board.stop is not None and board.taken is None and not board.trouble:
            if view.state in ("turning", "between") and view.off_stops is not None:
                return f"{way(view.off_stops).capitalize()}."
            return SPOKEN_STATES.get(view.state, "")
        case Taken(number=1):
            return "Taking frames."
        case StepDone(stop=stop):
            return "Dark frames taken." if stop is None else f"f/{stop:g} taken."
        case Trouble(text=text):
            return text
        case Finished():
            return "The run is over."
        case _:
            return ""


def _button(action: str, label: str, *, main: bool = False, on: bool = True) -> dict[str, Any]:
    return {"action": action, "label": label, "main": main, "on": on}


def _score(target: str, contrast: float | None, need: float) -> dict[str, Any]:
    words = "cannot be read yet"
    if contrast is not None:
        words = f"{contrast:.2f}, {'enough' if contrast >= need else 'too little'}: {need:g} needed"
    return {"target": target, "contrast": contrast, "need": need, "words": words}


def _patches(station: Station) -> list[dict[str, Any]]:
    return [
        {"name": target.name if len(target.patches) == 1 else f"{target.name} {number}", "region": list(patch.region)}
        for target in station.targets
        for number, patch in enumerate(target.patches, 1)
    ]
