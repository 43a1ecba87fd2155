"""Page and terminal side by side: how the page is found, and a run that is shown on both."""

import contextlib
import io
from types import TracebackType
from typing import Self

import segno
from rich.console import Console, Group, RenderableType
from rich.text import Text

from sweep.capture import Action, Begin, Event
from sweep.screens import Screen
from sweep.screens.page.gate import Door
from sweep.screens.page.run_page import RunPage


class Beside:
    """A screen: the page, and a terminal once the page has begun the run; either of them answers.

    Until then the terminal keeps the page's address in view. A terminal without keys only shows.
    """

    def __init__(self, page: RunPage, terminal: Screen, *, has_keys: bool) -> None:
        self._page = page
        self._terminal = terminal
        self._has_keys = has_keys
        self._opened: contextlib.ExitStack | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._opened is not None:
            self._opened.close()

    def __call__(self, event: Event) -> Action:
        """Show one event on both; what the page answers comes first."""
        answer = self._page(event)
        if isinstance(event, Begin):
            return answer
        if self._opened is None:
            self._opened = contextlib.ExitStack()
            self._opened.enter_context(self._terminal)
        own = self._terminal(event)
        return answer if answer is not Action.NONE or not self._has_keys else own


def invitation(door: Door, console: Console) -> RenderableType:
    """The page's address; for other devices as a code to photograph too, and what goes with it."""
    address = Text.assemble("The page is at  ", (door.address, "bold"))
    if door.is_local:
        return Group(
            address,
            Text("Open it in a browser on this computer. For a phone or tablet on the same network: --bind 0.0.0.0"),
        )
    code = io.StringIO()
    segno.make(door.address, error="l", micro=False).terminal(out=code, compact=True, border=2)
    warning = Text(
        "Whoever on this network has this address can see the picture and act. It is not encrypted: use a network that "
        "you trust."
    )
    # Drawn in fixed colours: a code with light and dark exchanged is not read by every camera.
    drawn = (
        [Text(code.getvalue().rstrip("\n"), style="#ffffff on #000000", no_wrap=True)] if console.is_terminal else []
    )
    return Group(address, *drawn, warning)
