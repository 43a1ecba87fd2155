"""The answer on a terminal: what to set and whether it serves, then why, then the stops, the warnings, the files.

Made for 80 columns and 24 rows: where a terminal is too low for all, the reasons give way first. Colour only stresses
what the words say.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from rich.console import Console, ConsoleOptions, RenderableType, RenderResult
from rich.table import Table
from rich.text import Text

from sweep.choose.wording import number
from sweep.result import Result, Stop
from sweep.station import Station
from sweep.verdict import WHY_NOT, contrast_line, headline, stop_name, stop_verdict, told, with_u

_FEWEST_REASONS = 2
_PROMPT_ROWS = 1
_WIDE = 100  # columns from which a stop's verdict names every fault


@dataclass(frozen=True, slots=True)
class Answer:
    """The answer as something that rich can print; it looks at the room that the console has."""

    result: Result
    station: Station
    files: tuple[Path, ...] = ()

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        """Everything where there is room, or no screen at all; else as many reasons as fit."""
        wide = options.max_width >= _WIDE
        shown = len(self.result.recommendation.reasons)
        blocks = list(self._blocks(shown, wide))
        while console.is_terminal and shown > _FEWEST_REASONS:
            if sum(len(console.render_lines(b, options, pad=False)) for b in blocks) < console.height:
                break
            shown -= 1
            blocks = list(self._blocks(shown, wide))
        yield from blocks

    def _blocks(self, shown: int, wide: bool) -> Iterator[RenderableType]:
        found = self.result.recommendation
        style = "bold green" if found.meets_need else "bold red"
        yield Text(f"{headline(self.result, self.station)}.", style=style)
        if not found.reasons:
            yield Text(contrast_line(self.result, self.station))
        yield from _items("", found.shortfalls)
        left_out = len(found.reasons) - shown
        more = (f"{left_out} more reasons in the record.",) if left_out else ()
        yield from _items("Why" if found.shortfalls else "", [*found.reasons[:shown], *more])
        yield _stops(self.result, self.station, wide)
        yield from _items("Warnings", [told(w) for w in self.result.warnings], "bold yellow")
        if self.files:
            yield Text(f"Written to {self.files[0].parent}: {_listed([f.name for f in self.files])}.")


def answer(result: Result, station: Station, files: Sequence[Path] | None = None) -> RenderableType:
    """The answer for `Console.print`; `files` are the report's, to say where they are."""
    return Answer(result, station, tuple(files or ()))


def _items(title: str, texts: Sequence[str], style: str = "bold") -> Iterator[RenderableType]:
    """A heading, where there is one, and sentences with a hanging indent."""
    if not texts:
        return
    if title:
        yield Text(title, style=style)
    grid = Table.grid(padding=(0, 1, 0, 0))
    for text in texts:
        grid.add_row("-", Text(text))
    yield grid


def _stops(result: Result, station: Station, wide: bool) -> RenderableType:
    """One row a stop, the recommended one marked by an arrow."""
    table = Table(box=None, pad_edge=False, padding=(0, 2 if wide else 1, 0, 0), header_style="bold")
    table.add_column("  stop", no_wrap=True)
    for head in ("by light", "ms", "dB", "S/N", "contrast ± 2u"):
        table.add_column(head, justify="right", no_wrap=True)
    table.add_column("worst target", no_wrap=True, overflow="ellipsis", max_width=30 if wide else 14)
    table.add_column(f"need: {station.need.contrast:g} at {number(station.need.feature_um)} um", overflow="fold")
    for stop in result.stops:
        chosen = stop.stop == result.recommendation.stop
        table.add_row(*(Text(cell) for cell in _cells(stop, chosen, wide)), style="bold" if chosen else "")
    return table


def _cells(stop: Stop, chosen: bool, wide: bool) -> Iterator[str]:
    yield f"{'>' if chosen else ' '} {stop_name(stop.stop)}"
    yield _fixed(stop.f_number_by_light, 2)
    yield "-" if stop.exposure_ms is None else number(stop.exposure_ms)
    yield _fixed(stop.gain_db, 1)
    yield _fixed(stop.snr_db, 1)
    yield with_u(stop.worst_contrast, stop.worst_contrast_u)
    yield stop.worst_target or "-"
    yield stop_verdict(stop) if wide or not stop.why_not else WHY_NOT.get(stop.why_not[0], stop.why_not[0])


def _fixed(value: float | None, digits: int) -> str:
    return "-" if value is None else f"{value:.{digits}f}"


def _listed(names: Sequence[str]) -> str:
    """The two files that people open first, and how many there are beside them."""
    first = sorted(names, key=lambda n: (not n.endswith(".pdf"), not n.endswith(".png")))[:2]
    rest = len(names) - len(first)
    return ", ".join(first) + (f" and {rest} more" if rest else "")
