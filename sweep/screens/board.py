"""What a screen shows of a guided run: the events so far, gathered into one record, and the words for it."""

from dataclasses import dataclass, replace

from sweep.capture import Ask, Begin, Event, Exposed, Finished, Seen, StepDone, Taken, Trouble
from sweep.ring import RingView

CAUTIONS_TITLE = "Before you begin"


@dataclass(frozen=True, slots=True)
class Board:
    """The state of the run as shown; `do` and `hint` are what to do now, large and small.

    `take`, `go_on`: what to press for these.
    """

    title: str
    stops: tuple[float, ...]
    need: float
    step: Begin | Ask | None = None
    seen: Seen | None = None
    taken: Taken | None = None
    done: tuple[float, ...] = ()
    trouble: str = ""
    lost: bool = False
    finished: Finished | None = None
    take: str = "SPACE"
    go_on: str = "p"

    def after(self, event: Event) -> "Board":
        """The board with one more event on it."""
        match event:
            case Begin():
                return replace(self, step=event)
            case Ask(stop=stop):
                # A stop that is asked for again is so because of its trouble.
                trouble = self.trouble if stop == self.stop else ""
                # Nor has it any frames.
                done = tuple(other for other in self.done if other != stop)
                return replace(self, step=event, taken=None, trouble=trouble, done=done)
            case Seen():
                return replace(self, seen=event, trouble="" if self.lost else self.trouble, lost=False)
            case Taken():
                return replace(self, taken=event)
            case StepDone(stop=stop):
                return replace(self, taken=None, done=self.done if stop is None else (*self.done, stop))
            case Trouble(text=text, lost=lost):
                return replace(self, trouble=text, lost=lost, taken=None)
            case Finished():
                return replace(self, finished=event, step=None)
            case Exposed():
                return self

    @property
    def stop(self) -> float | None:
        """The stop that is asked for."""
        return self.step.stop if isinstance(self.step, Ask) else None

    def do(self) -> str:
        """What to do now, in a line."""
        match self.step:
            case Begin():
                return CAUTIONS_TITLE
            case Ask(stop=None):
                return "Put the cap on the lens"
            case Ask(stop=float(stop), leaving=None):
                return f"Set the ring to f/{stop:g}"
            case Ask(stop=float(stop), leaving=float(leaving)):
                return f"{'Close' if stop > leaving else 'Open'} the ring from f/{leaving:g} to f/{stop:g}"
            case _:
                return "Done"

    def hint(self) -> str:
        """How it goes, in a line."""
        if self.seen is not None and self.seen.paused:
            return f"Paused. Press {self.go_on} to go on."
        if self.taken is not None:
            return f"Taking frames: {self.taken.number} of {self.taken.of}. Hands off."
        if isinstance(self.step, Ask) and self.seen is not None:
            if self.step.stop is None:
                return "Waiting for the dark. The frames without light tell the camera's black level."
            if self.step.confirm:
                return f"Take your hand off, then press {self.take}."
            return hint_for(self.seen.view, self.step.stop, self.take)
        return ""


def hint_for(view: RingView, stop: float, take: str) -> str:
    """One line on where the ring stands, for the hand."""
    off = view.off_stops or 0.0
    there = f"f/{stop:g}"
    match view.state:
        case "waiting":
            return "Looking at the light."
        case "dark":
            return "No light. Is the lamp on, and the cap off?"
        case "turning":
            return f"Turning: {_away(off)}."
        case "shaking":
            return "The light is unsteady. Take your hand off the ring."
        case "resting":
            return f"At rest. Press {take} if this is {there}."
        case "arrived":
            return f"There: {there}. Hands off the ring."
        case "not turned":
            return f"Turn the ring to {there}."
        case "wrong way":
            return f"Wrong way. {'Close' if off < 0 else 'Open'} the ring: {_away(off)}."
        case "past":
            where = f"Too far, at f/{view.at:g}" if view.at else f"Too far by {abs(off):.1f} stop"
            return f"{where}. Turn back beyond {there}, then come to it again."
        case "between":
            return f"Not there yet: {_away(off)}."


def _away(off_stops: float) -> str:
    if abs(off_stops) < 0.05:
        return "at the mark"
    return f"{abs(off_stops):.1f} stop to {'close' if off_stops < 0 else 'open'}"
