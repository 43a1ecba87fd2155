"""The guided run on a page: the terminal's equal, for a tablet or phone that leans beside the lens."""

import threading
import time
from collections.abc import Mapping
from dataclasses import replace
from types import TracebackType
from typing import Any, Self

from sweep.capture import Action, Ask, Begin, Event, Seen
from sweep.errors import Interrupted, SweepError
from sweep.result import Result
from sweep.screens.board import Board
from sweep.screens.page.gate import Door
from sweep.screens.page.preview import preview
from sweep.screens.page.server import PageServer, Refused
from sweep.screens.page.words import Telling
from sweep.station import Station
from sweep.verdict import contrast_line, headline, told

BEGIN_WAIT_S = 0.05
PICTURE_S = 0.15  # a picture is made no more often than this, however many browsers ask
ACTIONS = {action.name.lower(): action for action in Action if action is not Action.NONE}


class RunPage:
    """A screen (see sweep.screens) in every browser that has the address."""

    def __init__(self, station: Station, door: Door) -> None:
        board = Board(
            station.station.name, station.lens.stops, station.need.contrast, take="“Take now”", go_on="“Go on”"
        )
        self._telling = Telling(board, station)
        self._version = 0
        self._wish = Action.NONE
        self._wished = threading.Condition()
        self._pictured: tuple[float, bytes] | None = None
        self._server = PageServer(self, door)

    def __enter__(self) -> Self:
        self._server.__enter__()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if isinstance(error, Interrupted):
            self._tell(replace(self._telling, ended=str(error)))
        elif isinstance(error, SweepError):
            self._tell(replace(self._telling, fault=str(error)))
        self._server.__exit__(kind, error, trace)

    def __call__(self, event: Event) -> Action:
        """Take in one event, and return what was pressed meanwhile, where the run hears it."""
        self._tell(self._telling.after(event, time.monotonic()))
        with self._wished:
            if isinstance(event, Ask) and self._wish is not Action.END:
                self._wish = Action.NONE  # it was meant for the step before
            if isinstance(event, Begin):  # comes again and again until somebody answers
                self._wished.wait_for(lambda: self._wish is not Action.NONE, BEGIN_WAIT_S)
            if self._wish is not Action.END and not isinstance(event, Begin | Seen):
                return Action.NONE
            wish, self._wish = self._wish, Action.NONE
            return wish

    def show_answer(self, result: Result, station: Station) -> None:
        """Show what came of the run."""
        found = result.recommendation
        lines = (f"{headline(result, station)}.", contrast_line(result, station))
        more = (*found.shortfalls, *found.reasons, *(told(note) for note in result.warnings))
        self._tell(replace(self._telling, answer=(*lines, *more)))

    @property
    def browsers(self) -> int:
        """How many look at the page now."""
        return self._server.browsers

    @property
    def version(self) -> int:
        """Grows with every event."""
        return self._version

    def state(self) -> dict[str, Any]:
        """All that the page shows."""
        return self._telling.state()

    def picture(self, part: int | None) -> bytes | None:
        """The latest frame, or one a moment old."""
        seen = self._telling.board.seen
        if seen is None or part is not None:
            return None
        if self._pictured is None or time.monotonic() - self._pictured[0] > PICTURE_S:
            self._pictured = (time.monotonic(), preview(seen.pixels, self._telling.station.camera))
        return self._pictured[1]

    def act(self, wish: Mapping[str, Any]) -> None:
        """Keep what was pressed for the run; it hears it at its next frame."""
        action, telling = ACTIONS[wish["action"]], self._telling
        if wish["step"] != telling.step and action not in (Action.END, Action.PAUSE):
            raise Refused("The run has gone on meanwhile. Nothing was done.")
        if not telling.can(action):
            raise Refused("That cannot be done now.")
        with self._wished:
            if self._wish is not Action.END:
                self._wish = action
            self._wished.notify_all()

    def _tell(self, telling: Telling) -> None:
        self._telling = telling
        self._version += 1
