"""What the set-up hands to its screens, and what they may wish."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Literal

from sweep.frames import Pixels
from sweep.station import Patch, Region, Station

Status = Literal["fine", "better", "bad"]


@dataclass(frozen=True, slots=True)
class Figure:
    """One figure of a patch in words: as it is, and what is wanted (may be empty); `ok` None where none is judged."""

    name: str
    value: str
    wanted: str = ""
    ok: bool | None = None


@dataclass(frozen=True, slots=True)
class Work:
    """Something to do about a patch; `needed`: without it the patch cannot be read."""

    text: str
    needed: bool


@dataclass(frozen=True, slots=True)
class PatchCheck:
    """What one patch shows: `name` says target and, where it has several, the number in its list."""

    name: str
    patch: Patch
    figures: tuple[Figure, ...]
    work: tuple[Work, ...]

    @property
    def status(self) -> Status:
        """Whether the patch can stay as it is, could be better, or cannot be read."""
        if not self.work:
            return "fine"
        return "bad" if any(work.needed for work in self.work) else "better"

    def figure(self, name: str) -> Figure | None:
        """The figure of that name."""
        return next((figure for figure in self.figures if figure.name == name), None)


@dataclass(frozen=True, slots=True)
class Sight:
    """The set-up as it stands: the latest frame, the station with its patches as placed so far, what they show.

    `changed`: patches are placed otherwise than in the file; `told`: what came of the last wish; `trouble`: what
    is wrong with the camera or its light.
    """

    station: Station
    checks: tuple[PatchCheck, ...]
    pixels: Pixels
    exposure_ms: float | None
    tone: float | None
    changed: bool = False
    told: str = ""
    trouble: str = ""


@dataclass(frozen=True, slots=True)
class Move:
    """Place a patch, by its number over all targets from 0, somewhere else."""

    number: int
    region: Region


@dataclass(frozen=True, slots=True)
class Save:
    """Write the places into the station file."""


@dataclass(frozen=True, slots=True)
class Revert:
    """Place all patches as the file has them."""


@dataclass(frozen=True, slots=True)
class Done:
    """Leave the set-up."""


Wish = Move | Save | Revert | Done
Show = Callable[[Sight], Sequence[Wish]]
