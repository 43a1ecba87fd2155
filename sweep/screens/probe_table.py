"""A probe's findings on a terminal: the verdict, one row a question, and below what to do; made for 80 columns."""

from collections.abc import Iterator, Sequence

from rich.console import RenderableType
from rich.table import Table
from rich.text import Text

from sweep.cameras.present import Present
from sweep.choose.wording import number
from sweep.probe import VERDICTS, Probe, Verdict

STYLE: dict[Verdict, str] = {"good": "green", "not told": "cyan", "take care": "yellow", "not fit": "bold red"}
HEADLINE: dict[Verdict, str] = {
    "good": "This camera is fit to measure.",
    "take care": "This camera can measure; take care of what is said below.",
    "not fit": "This camera is not fit to measure as it is.",
}


def probe_table(probe: Probe) -> Iterator[RenderableType]:
    """The findings for `Console.print`, piece by piece."""
    yield Text(HEADLINE[probe.verdict], style=STYLE[probe.verdict])
    yield Text(_conditions(probe), style="dim")
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")
    table.add_column("asked", no_wrap=True)
    table.add_column("found", overflow="fold")
    table.add_column("verdict", no_wrap=True)
    waiting: dict[str, list[str]] = {}
    for finding in probe.findings:
        if finding.hidden_by:
            waiting.setdefault(finding.hidden_by, []).append(finding.name)
        else:
            table.add_row(Text(finding.name), Text(finding.found), _verdict(finding.verdict))
    for by, names in waiting.items():
        table.add_row(Text("The rest"), Text(f"{', '.join(names)}: hidden by {by}"), _verdict("not told"))
    yield table
    yield from _work(probe)


def _verdict(verdict: Verdict) -> Text:
    return Text(verdict, style=STYLE[verdict])


def _work(probe: Probe) -> Iterator[RenderableType]:
    """What to do, the worst first; what several findings ask for is said once."""
    work: dict[str, list[str]] = {}
    for finding in sorted(probe.findings, key=lambda f: -VERDICTS.index(f.verdict)):
        if finding.to_do and not finding.hidden_by:
            work.setdefault(finding.to_do, []).append(finding.name)
    if work:
        yield Text("What to do", style="bold")
        grid = Table.grid(padding=(0, 1, 0, 0))
        for to_do, names in work.items():
            grid.add_row("-", Text.assemble((f"{', '.join(names)}: ", "bold"), to_do))
        yield grid


def present_table(cameras: Sequence[Present], missing: str) -> Iterator[RenderableType]:
    """The cameras that are there; `missing`: why some kind could not be looked for."""
    if cameras:
        table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="bold")
        table.add_column("source", no_wrap=True)
        table.add_column("what it is", overflow="fold")
        for camera in cameras:
            table.add_row(Text(camera.source, style="bold"), Text(camera.what))
        yield table
        yield Text(f"Probe one with: sweep probe {cameras[0].source}")
    else:
        yield Text("No camera is found here. Streams and folders are not looked for: name a URL or folder:PATH.")
    if missing:
        yield Text(missing, style="dim")


def _conditions(probe: Probe) -> str:
    at = "" if probe.exposure_ms is None else f" at {number(probe.exposure_ms)} ms"
    device = str(probe.device.get("device") or "camera")
    return f"{device}: {probe.frames} frames, light tone at {100 * probe.tone:.0f} % of full scale{at}."
