"""What happens in a guided run, as the screens see it, and what they may answer."""

from collections.abc import Callable
from dataclasses import dataclass
from enum import Enum, auto
from pathlib import Path

from sweep.frames import Pixels
from sweep.ring import RingView


class Action(Enum):
    """What a screen answers to an event."""

    NONE = auto()
    TAKE = auto()  # go on; take the frames now
    SKIP = auto()  # leave this stop out
    BACK = auto()  # take this stop from the start, or the last one again
    PAUSE = auto()  # hold, or go on again
    END = auto()


@dataclass(frozen=True, slots=True)
class Begin:
    """Before the first step, with the cautions; comes again and again until the answer is TAKE or END."""

    cautions: tuple[str, ...]
    stops: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Ask:
    """Turn the ring to `stop`, or cap the lens where it is None: step `number` of `of`.

    `confirm`: the run waits for TAKE, since the light alone cannot tell yet. `leaving`: the stop last taken.
    """

    stop: float | None
    number: int
    of: int
    confirm: bool
    leaving: float | None = None


@dataclass(frozen=True, slots=True)
class Score:
    """One target's contrast at the feature, by one frame; None where it cannot be read."""

    target: str
    contrast: float | None


@dataclass(frozen=True, slots=True)
class Seen:
    """One live frame. `tone`: the light tone as a fraction of full scale less black, of which `wanted` is aimed at."""

    pixels: Pixels
    view: RingView
    tone: float
    wanted: float
    clipped: bool
    exposure_ms: float
    gain_db: float
    paused: bool = False
    scores: tuple[Score, ...] = ()


@dataclass(frozen=True, slots=True)
class Exposed:
    """The exposure was set anew."""

    exposure_ms: float
    gain_db: float


@dataclass(frozen=True, slots=True)
class Taken:
    """One frame is safe on disk: `number` of `of` at this stop (None: darks)."""

    stop: float | None
    number: int
    of: int


@dataclass(frozen=True, slots=True)
class StepDone:
    """All frames of a stop (None: the darks) are on disk; the hand may move on."""

    stop: float | None
    exposure_ms: float
    tone: float


@dataclass(frozen=True, slots=True)
class Trouble:
    """Something is wrong; the run goes on once it is mended. `lost`: the camera is away until a frame comes."""

    text: str
    lost: bool = False


@dataclass(frozen=True, slots=True)
class Finished:
    """The end. `ended`: by the user, before every stop had been asked for."""

    folder: Path
    taken: tuple[float, ...]
    skipped: tuple[float, ...]
    ended: bool


Event = Begin | Ask | Seen | Exposed | Taken | StepDone | Trouble | Finished
Show = Callable[[Event], Action]
