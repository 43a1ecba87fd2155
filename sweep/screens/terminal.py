"""The guided run in a terminal: what to do now, large; the ring and the light against where they should be; keys.

On a terminal of 80 x 24 characters everything is in view. In a pipe it becomes plain lines, and nothing waits for a
key: the first stop counts as set once the light rests.
"""

import contextlib
import os
import sys
import time
from collections.abc import Iterator
from types import TracebackType
from typing import Self

from rich.console import Console, Group, RenderableType
from rich.live import Live as LiveDisplay
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from sweep.capture import Action, Ask, Begin, Event, Finished, Seen, StepDone, Trouble
from sweep.screens.board import Board
from sweep.station import Station

REDRAW_S = 0.1
BAR = 25
KEYS = {" ": Action.TAKE, "\r": Action.TAKE, "\n": Action.TAKE, "s": Action.SKIP, "b": Action.BACK, "p": Action.PAUSE}
KEYS |= {"e": Action.END, "q": Action.END, "\x1b": Action.NONE}
KEY_LINE = "SPACE take now   b back one stop   s skip   p pause   e end"
RING_SPAN_STOPS = 1.5
PLAIN_STATES = ("past", "between", "wrong way", "shaking", "dark")

# Figures of five lines, for what must be read from a step away.
FIGURES = {
    "0": ("███", "█ █", "█ █", "█ █", "███"),
    "1": (" █ ", "██ ", " █ ", " █ ", "███"),
    "2": ("███", "  █", "███", "█  ", "███"),
    "3": ("███", "  █", "███", "  █", "███"),
    "4": ("█ █", "█ █", "███", "  █", "  █"),
    "5": ("███", "█  ", "███", "  █", "███"),
    "6": ("███", "█  ", "███", "█ █", "███"),
    "7": ("███", "  █", "  █", "  █", "  █"),
    "8": ("███", "█ █", "███", "█ █", "███"),
    "9": ("███", "█ █", "███", "  █", "███"),
    ".": (" ", " ", " ", " ", "█"),
    "/": ("  █", "  █", " █ ", "█  ", "█  "),
    "f": (" ██", " █ ", "███", " █ ", " █ "),
}


class Terminal:
    """A screen on standard output, with keys from standard input where both are terminals."""

    def __init__(self, station: Station, console: Console | None = None) -> None:
        self._console = console or Console()
        self._board = Board(station.station.name, station.lens.stops, station.need.contrast)
        self._display: LiveDisplay | None = None
        self._keys = contextlib.ExitStack()
        self._has_keys = False
        self._drawn_s = 0.0
        self._said = ""

    def __enter__(self) -> Self:
        if self._console.is_terminal:
            self._has_keys = self._keys.enter_context(_raw_keys())
            self._display = LiveDisplay(console=self._console, screen=True, auto_refresh=False)
            self._display.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._display is not None:
            self._display.stop()
        self._keys.close()

    def __call__(self, event: Event) -> Action:
        """Show one event, and return the key that was pressed meanwhile as an action."""
        self._board = self._board.after(event)
        if self._display is None:
            self._say(event)
            return _by_itself(event)
        if not isinstance(event, Seen) or time.monotonic() - self._drawn_s > REDRAW_S:
            self._drawn_s = time.monotonic()
            self._display.update(picture(self._board, self._console), refresh=True)
        if isinstance(event, Begin) and self._has_keys:
            time.sleep(REDRAW_S / 2)  # asked again and again until a key comes
        return self._key() if self._has_keys else _by_itself(event)

    def _key(self) -> Action:
        return next((KEYS[key] for key in _pressed() if key in KEYS), Action.NONE)

    def _say(self, event: Event) -> None:
        """Plain lines, each thing once."""
        match event:
            case Begin(cautions=cautions):
                lines = [self._board.title, *cautions]
            case Ask(number=number, of=of):
                lines = [f"[{number}/{of}] {self._board.do()}."]
            case StepDone(stop=stop, exposure_ms=exposure_ms, tone=tone):
                what = "Dark frames" if stop is None else f"f/{stop:g}"
                light = "" if stop is None else f", light tone at {tone:.0%} of full scale"
                lines = [f"{what} taken: {exposure_ms:g} ms{light}."]
            case Trouble(text=text):
                lines = [text]
            case Finished(folder=folder, taken=taken):
                lines = [f"{len(taken)} stops are in {folder}."]
            case Seen(view=view) if self._board.stop is not None and view.state in PLAIN_STATES:
                lines = [] if view.state == self._said else [self._board.hint()]
                self._said = view.state
            case _:
                return
        for line in lines:
            self._console.print(line, markup=False, highlight=False, soft_wrap=True)


def picture(board: Board, console: Console) -> RenderableType:
    """The whole screen for one board, at most 24 lines of 80 characters."""
    full = console.encoding.lower().startswith("utf")
    number = f"step {board.step.number} of {board.step.of}" if isinstance(board.step, Ask) else ""
    head = Table.grid(expand=True)
    head.add_column(overflow="crop", no_wrap=True)
    head.add_column(justify="right", no_wrap=True)
    head.add_row(Text(board.title, style="bold"), Text(number))
    rows: list[RenderableType] = [head, Text("-" * min(console.width, 80), style="dim")]
    if isinstance(board.step, Begin):
        rows += [Text(board.do(), style="bold"), Text("")]
        rows += [Padding(Text(f"- {caution}"), (0, 0, 1, 0)) for caution in board.step.cautions]
        rows += [Text("Have the lens focused on the plane that the station file calls depth 0, and locked."), Text("")]
        return Group(*rows, Text("SPACE begin   e end", style="bold"))
    rows.append(Text(board.do(), style="bold"))
    if board.stop is not None:
        rows += [Text(""), *(_inked(line, full) for line in _large(f"f/{board.stop:g}")), Text("")]
    rows.append(Text(board.hint(), style="bold", overflow="fold"))
    rows.append(Text(board.trouble, style="bold reverse"))
    if board.seen is not None:
        rows += list(_gauges(board, board.seen, full))
    return Group(*rows, Text(""), _progress(board, full), Text(KEY_LINE, style="dim", no_wrap=True, overflow="crop"))


def _gauges(board: Board, seen: Seen, full: bool) -> Iterator[RenderableType]:
    """The ring against its mark, the light against where it is wanted, the live contrast of each target."""
    block, thin = ("█", "─") if full else ("#", "-")
    if board.stop is not None and seen.view.off_stops is not None:
        place = round((seen.view.off_stops / RING_SPAN_STOPS + 1) / 2 * (BAR - 1))
        cells = [thin] * BAR
        cells[(BAR - 1) // 2] = "|"
        cells[min(BAR - 1, max(0, place))] = block
        yield _row("ring", "".join(cells), f"open <  f/{board.stop:g}  > close")
    note = "clipped" if seen.clipped else f"{seen.tone:.0%} of full scale, wanted {seen.wanted:.0%}"
    yield _row("light", _bar(seen.tone, seen.wanted, block, thin), f"{note}; {seen.exposure_ms:.4g} ms")
    for score in seen.scores[:6]:
        text = (
            "cannot be read yet" if score.contrast is None else f"contrast {score.contrast:.2f}, needed {board.need:g}"
        )
        yield _row(score.target, _bar(score.contrast or 0.0, board.need, block, thin), text)


def _row(name: str, bar: str, text: str) -> Text:
    return Text(f"{name[:11]:<12}{bar}  {text}", no_wrap=True, overflow="crop")


def _bar(value: float, wanted: float, block: str, thin: str) -> str:
    filled = round(min(1.0, max(0.0, value)) * BAR)
    cells = [block] * filled + [thin] * (BAR - filled)
    cells[min(BAR - 1, round(wanted * BAR))] = "|"
    return "".join(cells)


def _progress(board: Board, full: bool) -> Text:
    """Every stop: done, now in brackets, or still to come."""
    line = Text("stops       ", no_wrap=True, overflow="crop")
    for stop in board.stops:
        if stop in board.done:
            line.append(f"{stop:g}{'✓' if full else 'x'} ")
        elif stop == board.stop:
            line.append(f"[{stop:g}] ", style="bold")
        else:
            line.append(f"{stop:g} ", style="dim")
    return line


def _large(text: str) -> list[str]:
    return ["    " + " ".join(FIGURES[character][line] for character in text) for line in range(5)]


def _inked(line: str, full: bool) -> Text:
    return Text(line if full else line.replace("█", "#"), style="bold", no_wrap=True)


def _by_itself(event: Event) -> Action:
    """Without keys: begin at once, and take a first stop at its word once the light rests."""
    if isinstance(event, Begin) or (isinstance(event, Seen) and event.view.state == "resting"):
        return Action.TAKE
    return Action.NONE


if sys.platform == "win32":
    import msvcrt

    @contextlib.contextmanager
    def _raw_keys() -> Iterator[bool]:
        """Whether there are keys; the console hands them over one by one anyway."""
        yield sys.stdin.isatty()

    def _pressed() -> Iterator[str]:
        while msvcrt.kbhit():
            yield msvcrt.getwch().lower()

else:
    import select
    import termios
    import tty

    @contextlib.contextmanager
    def _raw_keys() -> Iterator[bool]:
        """Whether there are keys; while it lasts they come one by one, not shown and not line by line."""
        if not sys.stdin.isatty():
            yield False
            return
        before = termios.tcgetattr(sys.stdin)
        try:
            tty.setcbreak(sys.stdin)
            yield True
        finally:
            termios.tcsetattr(sys.stdin, termios.TCSADRAIN, before)

    def _pressed() -> Iterator[str]:
        while select.select([sys.stdin], [], [], 0)[0]:
            key = os.read(sys.stdin.fileno(), 1).decode("ascii", "ignore").lower()
            if not key:
                return
            yield key
