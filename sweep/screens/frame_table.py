"""The set-up of the patches in a terminal: one row a patch, and below what to do."""

from collections.abc import Iterator

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from sweep.framing import PatchCheck, Sight, Status

VERDICT: dict[Status, tuple[str, str]] = {
    "fine": ("fine", "green"),
    "better": ("could be better", "yellow"),
    "bad": ("cannot be read", "bold red"),
}
COLUMNS = ("light", "angle", "room", "size", "contrast")


def frame_table(sight: Sight) -> RenderableType:
    """A sight for `Console.print`; what falls short of what is wanted has an exclamation mark."""
    return Group(*_pieces(sight))


def _pieces(sight: Sight) -> Iterator[RenderableType]:
    yield Text(sight.station.station.name, style="bold")
    light = "" if sight.tone is None else f", light tone at {sight.tone:.0%} of full scale"
    exposure = "" if sight.exposure_ms is None else f", {sight.exposure_ms:.4g} ms"
    yield Text(f"Frame of {sight.pixels.shape[1]} × {sight.pixels.shape[0]} px{exposure}{light}.")
    if sight.trouble:
        yield Text(sight.trouble, style="bold red")
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")
    table.add_column("patch", overflow="fold")
    for head in ("kind", *COLUMNS):
        table.add_column(head, no_wrap=True)
    table.add_column("", no_wrap=True)
    for check in sight.checks:
        verdict, style = VERDICT[check.status]
        cells = [Text(cell) for cell in _cells(check)]
        table.add_row(*cells, Text(verdict, style=style))
    yield table
    for check in sight.checks:
        for work in check.work:
            yield Text.assemble((f"{check.name}: ", "bold"), work.text)
    yield Text(summary(sight), style="bold")


def summary(sight: Sight) -> str:
    """How the patches stand, in a sentence."""
    count = {status: sum(check.status == status for check in sight.checks) for status in VERDICT}
    of = len(sight.checks)
    if count["fine"] == of:
        return "All patches can be read."
    parts = [f"{count['fine']} of {of} patches are fine"]
    if count["better"]:
        parts.append(f"{count['better']} could be better")
    if count["bad"]:
        parts.append(f"{count['bad']} cannot be read")
    return ", ".join(parts) + "."


def _cells(check: PatchCheck) -> Iterator[str]:
    yield check.name
    yield check.patch.kind
    for name in COLUMNS:
        figure = check.figure(name)
        yield "–" if figure is None else f"{figure.value}{' !' if figure.ok is False else ''}"
