"""The command `sweep`: parse, call, print, exit status; nothing else.

Heavy modules are imported where they are used, so that `--help` answers at once.
"""

import os
import sys
import tomllib
import traceback
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from sweep import __version__
from sweep.errors import InputError, Interrupted, SourceError, StationError, SweepError

os.environ.setdefault(
    "OPENBLAS_NUM_THREADS", "1"
)  # small matrices: more threads cost time, and bytes must not depend on them

if TYPE_CHECKING:
    from sweep.cameras import Camera
    from sweep.capture import Show
    from sweep.probe import Tell
    from sweep.result import Result
    from sweep.screens import Screen
    from sweep.screens.page import Door
    from sweep.station import Station

NEED_NOT_MET = 1
NOT_FIT = 1
LOOPBACK = "127.0.0.1"
PATH = click.Path(path_type=Path)
DEMO_SEED = 1
DEMO_FOLDER = "sweep-demo"
RESULT_FOLDER = "result"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command and return its exit status; the message of an error goes to stderr."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    debug = "--debug" in words
    try:
        return int(sweep.main([w for w in words if w != "--debug"], "sweep", standalone_mode=False) or 0)
    except click.UsageError as error:
        where = error.ctx.command_path if error.ctx else "sweep"
        return _failed(InputError(f"{error.format_message()} See {where} --help."), debug)
    except (KeyboardInterrupt, click.Abort):
        return _failed(Interrupted("Interrupted."), debug)
    except SweepError as error:
        return _failed(error, debug)
    except SystemExit:  # click's own way out where the reader of the output has gone
        return 0
    except Exception as error:  # noqa: BLE001 - the one place where a fault of the tool becomes a line
        what = " ".join(f"{type(error).__name__}: {error}".split())
        return _failed(SweepError(f"This is a fault of the tool ({what}). Run again with --debug to see where."), debug)


def _failed(error: SweepError, debug: bool) -> int:
    if debug:
        traceback.print_exc()
    click.echo(f"sweep: {error}", err=True)
    return error.exit_status


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, message="%(prog)s %(version)s")
@click.option("--debug", is_flag=True, expose_value=False, help="Show where an error arose.")
def sweep() -> None:
    """Find, prove and record the f-stop and exposure of an inspection station.

    Exit status: 0 the need is met, 1 no setting meets it, 2 bad usage or input, 3 camera or capture fault, 130
    interrupted, 70 fault of the tool.
    """


out_option = click.option("--out", type=PATH, metavar="DIR", help="Write record, plot, result.json and tables to DIR.")
camera_option = click.option(
    "--camera", "camera_name", metavar="SOURCE", help="Camera, if not camera.source of the station file."
)
page_option = click.option("--page", is_flag=True, help="Show it in browsers too, as on a tablet beside the lens.")
bind_option = click.option(
    "--bind", metavar="ADDRESS", help=f"Where the page listens, if not at {LOOPBACK} (this computer only); asks for it."
)
set_option = click.option(
    "--set", "changes", multiple=True, metavar="KEY=VALUE", help="Change a key, as need.feature_um=140."
)
json_option = click.option("--json", "as_json", is_flag=True, help="Print result.json instead of the answer in words.")


@sweep.command()
@click.argument("source", type=PATH)
@click.option("--station", "station_file", type=PATH, metavar="FILE", help="Station file, if not SOURCE/station.toml.")
@out_option
@json_option
@click.option("--leave-out-bad-frames", is_flag=True, help="Go on without frames that are missing or damaged.")
@set_option
def replay(
    source: Path,
    station_file: Path | None,
    out: Path | None,
    as_json: bool,
    leave_out_bad_frames: bool,
    changes: tuple[str, ...],
) -> int:
    """Analyse the frames in the folder SOURCE: a recording, or images with a shots.csv."""
    if not source.is_dir():
        raise SourceError(f"{source} is not a folder: name a folder with images and shots.csv.")
    if (source / "result.json").is_file() and not (source / "shots.csv").exists():
        raise SourceError(f"{source} holds an answer, not frames: name the folder that it came from, with --set too.")
    if station_file is None and not (source / "station.toml").is_file():
        raise SourceError(f"{source} holds no station.toml. Name the station file with --station FILE.")
    if out is not None and out.resolve().is_relative_to(source.resolve()):
        raise InputError(f"--out {out} lies in {source}, which replay leaves as it is. Name a folder elsewhere.")
    _see_that_results_fit(out)
    station = _changed(_load(station_file or source / "station.toml"), changes)
    return _replay(source, station, out, as_json, leave_out_bad_frames)


@sweep.command()
@click.argument("station_file", type=PATH, metavar="STATION.toml")
@click.option(
    "--into",
    "folder",
    type=PATH,
    metavar="DIR",
    required=True,
    help="New folder for the recording, or one to take up again.",
)
@camera_option
@click.option(
    "--out",
    type=PATH,
    metavar="DIR",
    help=f"Write record, plot and tables to DIR instead of {RESULT_FOLDER} in --into.",
)
@click.option(
    "--exposure-ms",
    type=click.FloatRange(min=0, min_open=True),
    metavar="MS",
    help="Exposure set by hand, for a camera that cannot be set from here.",
)
@page_option
@bind_option
def record(
    station_file: Path,
    folder: Path,
    camera_name: str | None,
    out: Path | None,
    exposure_ms: float | None,
    page: bool,
    bind: str | None,
) -> int:
    """Guide through all stops at the camera, keep the frames, then answer as replay does.

    SOURCE: a device number, a URL, a video file, folder:PATH, genicam:ADDRESS or simulated (its ring turns by itself).
    """
    station = _load(station_file)
    source = _camera_source(camera_name, station, station_file)
    out = out or folder / RESULT_FOLDER
    _see_that_results_fit(out)
    from sweep.cameras import open_camera
    from sweep.record import record as run
    from sweep.screens.terminal import Terminal

    with ExitStack() as stack:
        screen: Screen = Terminal(station)
        tell = None
        if page or bind:
            from sweep.screens.page import Beside, RunPage

            run_page = stack.enter_context(RunPage(station, _door(bind)))
            tell = run_page.show_answer
            screen = Beside(run_page, screen, has_keys=sys.stdin.isatty() and sys.stdout.isatty())
        with open_camera(source, station) as camera, screen:
            text = station_file.read_text(encoding="utf-8-sig")
            show = _with_simulated_hand(camera, station, screen, begins=tell is None)
            run(camera, station, text, folder, show, exposure_ms)
        return _replay(folder, station, out, tell=tell)


@sweep.command()
@click.argument("station_file", type=PATH, metavar="STATION.toml")
@camera_option
@page_option
@bind_option
def frame(station_file: Path, camera_name: str | None, page: bool, bind: str | None) -> int:
    """Point the camera and place the patches: say what each patch shows, and what to do about it.

    With --page the patches can be moved in a browser, and saved in the station file. Status 1: a patch cannot be read.
    """
    station = _load(station_file)
    source = _camera_source(camera_name, station, station_file)
    from rich.console import Console

    from sweep.cameras import open_camera
    from sweep.frame import look, set_up
    from sweep.screens.frame_table import frame_table

    with ExitStack() as stack:
        if page or bind:
            from sweep.screens.page import FramePage

            frame_page = stack.enter_context(FramePage(_door(bind)))
            sight = set_up(stack.enter_context(open_camera(source, station)), station_file, frame_page)
        else:
            sight = look(stack.enter_context(open_camera(source, station)), station_file)
    Console().print(frame_table(sight))
    return NEED_NOT_MET if any(check.status == "bad" for check in sight.checks) else 0


@sweep.command()
@click.argument("source", required=False)
@click.option("--station", "station_file", type=PATH, metavar="FILE", help="Station file: what its samples are.")
@click.option("--json", "as_json", is_flag=True, help="Print the findings as JSON.")
def probe(source: str | None, station_file: Path | None, as_json: bool) -> int:
    """Ask whether the camera SOURCE is fit to measure; without SOURCE, list the cameras that are there.

    Point it at any still scene in steady light; it takes some 20 seconds, and changes exposure and gain. SOURCE as for
    record. Exit status: 0 fit, 1 not fit, 2 bad usage, 3 camera fault.
    """
    station = _load(station_file) if station_file is not None else None
    source = source or (station.camera.source if station is not None else None)
    if source is None:
        return _list_cameras(as_json)
    from sweep.cameras import open_camera
    from sweep.cameras.formats import open_untold
    from sweep.demo import demo_station
    from sweep.probe import probe as run

    if station is not None or source == "simulated":
        station = station or demo_station()
        camera, stated = open_camera(source, station), station.camera
    else:
        camera, stated = open_untold(source, demo_station())
    patches = [patch for target in (station.targets if station else ()) for patch in target.patches]
    with camera, _probe_progress() as tell:
        found = run(camera, stated, tell, [patch.region for patch in patches if patch.kind == "edge"])
    with _reader_may_leave():
        if as_json:
            from sweep.report.probe_json import probe_json

            click.echo(probe_json(found, source), nl=False)
        else:
            from rich.console import Console

            from sweep.screens.probe_table import probe_table

            Console().print(*probe_table(found), sep="\n")
    return NOT_FIT if found.verdict == "not fit" else 0


@sweep.command()
@click.argument("station_file", type=PATH, metavar="STATION.toml")
@out_option
@json_option
@set_option
def plan(station_file: Path, out: Path | None, as_json: bool, changes: tuple[str, ...]) -> int:
    """Say what to expect of a station before any frame: by a usual lens, or the one that lens.model names."""
    _see_that_results_fit(out)
    station = _changed(_load(station_file), changes)
    from sweep.forecast import forecast
    from sweep.report import earlier_lens

    return _answer(forecast(station, earlier_lens(station, station_file)), station, out, as_json)


@sweep.command()
@click.option(
    "--into", "folder", type=PATH, metavar="DIR", help=f"New folder for the recording (default: {DEMO_FOLDER})."
)
def demo(folder: Path | None) -> int:
    """Show a whole run at a simulated station, answer and files included."""
    from sweep.demo import DEMO_STATION, demo_camera, demo_station, with_hand
    from sweep.record import record as run
    from sweep.screens.terminal import Terminal

    folder = folder or _free(DEMO_FOLDER)
    if folder.exists():
        raise InputError(f"{folder} is there already: the demo wants a new folder. Name another with --into DIR.")
    station = demo_station()
    camera, hand = demo_camera(DEMO_SEED)
    with camera, Terminal(station) as screen:
        run(camera, station, DEMO_STATION, folder, with_hand(hand, screen))
    return _replay(folder, station, folder / RESULT_FOLDER)


def _camera_source(name: str | None, station: "Station", station_file: Path) -> str:
    source = name or station.camera.source
    if source is None:
        raise StationError(f"{station_file} names no camera. Add camera.source, or --camera SOURCE.")
    return source


def _door(bind: str | None) -> "Door":
    """Listen for browsers, and say where."""
    from rich.console import Console

    from sweep.screens.page import invitation, open_door

    door = open_door(bind or LOOPBACK)
    console = Console()
    console.print(invitation(door, console))
    return door


def _list_cameras(as_json: bool) -> int:
    from sweep.cameras.present import cameras_present

    cameras, missing = cameras_present()
    with _reader_may_leave():
        if as_json:
            from sweep.report.probe_json import cameras_json

            click.echo(cameras_json(cameras, missing), nl=False)
        else:
            from rich.console import Console

            from sweep.screens.probe_table import present_table

            Console().print(*present_table(cameras, missing), sep="\n")
    return 0


@contextmanager
def _probe_progress() -> "Iterator[Tell]":
    """What shows what a probe looks at; nothing in a pipe."""
    if not sys.stderr.isatty():
        yield lambda what, share: None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("Opening the camera", total=1.0)
        yield lambda what, share: bar.update(task, description=f"Looking at {what}", completed=share)


def _with_simulated_hand(camera: "Camera", station: "Station", screen: "Screen", *, begins: bool) -> "Show":
    """The screen; where the camera is simulated, together with the hand on its ring, which may also begin the run."""
    if camera.facts().get("device") != "simulated station":
        return screen
    from sweep.cameras.simulated_camera import SimulatedCamera
    from sweep.demo import SimulatedHand, with_hand

    assert isinstance(camera, SimulatedCamera)
    return with_hand(SimulatedHand(camera, station.lens.stops), screen, begins=begins)


def _load(station_file: Path) -> "Station":
    from sweep.recording import load_station

    return load_station(station_file)


def _changed(station: "Station", changes: Sequence[str]) -> "Station":
    """The station with keys set anew, each as KEY=VALUE with a value as in the station file."""
    if not changes:
        return station
    from sweep.station import build_station

    data: Any = station.model_dump(mode="json", exclude_unset=True)
    for change in changes:
        key, equals, text = change.partition("=")
        if not equals:
            raise InputError(f"--set {change}: write KEY=VALUE, as need.feature_um=140.")
        *tables, last = (int(name) if name.isdecimal() else name for name in key.strip().split("."))
        try:
            place = data
            for name in tables:
                place = place.setdefault(name, {}) if isinstance(place, dict) else place[name]
            place[last] = _value(text.strip())
        except (TypeError, IndexError):
            raise InputError(f"--set {change}: there is no key {key} in a station file.") from None
    return build_station(data, "the station file with --set")


def _value(text: str) -> Any:
    try:
        return tomllib.loads(f"value = {text}")["value"]
    except tomllib.TOMLDecodeError:
        return text


def _free(name: str) -> Path:
    """A folder of this name here, numbered where the name is taken."""
    number = 1
    while (folder := Path(name if number == 1 else f"{name}-{number}")).exists():
        number += 1
    return folder


def _see_that_results_fit(out: Path | None) -> None:
    """Refuse a folder for results before any work is done."""
    if out is not None:
        from sweep.report import check_out

        check_out(out)


def _replay(
    source: Path,
    station: "Station",
    out: Path | None,
    as_json: bool = False,
    leave_out: bool = False,
    tell: "Callable[[Result, Station], None] | None" = None,
) -> int:
    """Analyse, answer, and `tell` it elsewhere too."""
    from sweep.analyse import analyse
    from sweep.recording import open_source

    frames = open_source(source, leave_out_bad_frames=leave_out, station=station)
    with _progress_bar() as progress:
        result = analyse(frames, station, progress)
    if tell is not None:
        tell(result, station)
    return _answer(result, station, out, as_json)


@contextmanager
def _progress_bar() -> Iterator[Callable[[int, int], None] | None]:
    """What shows (frames done, frames in all) on a terminal; nothing in a pipe."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("Measuring frames", total=None)

        def show(done: int, total: int) -> None:
            bar.update(task, completed=done, total=total)
            if done == total:
                bar.update(task, description="Fitting the lens")

        yield show


def _answer(result: "Result", station: "Station", out: Path | None, as_json: bool) -> int:
    """Write the files, print the answer, and return the exit status."""
    from rich.console import Console

    from sweep.report import result_json, write_report
    from sweep.screens.answer import answer

    files = write_report(out, result, station) if out is not None else ()
    with _reader_may_leave():
        if as_json:
            click.echo(result_json(result), nl=False)
        else:
            Console().print(answer(result, station, files))
    return 0 if result.recommendation.meets_need else NEED_NOT_MET


@contextmanager
def _reader_may_leave() -> Iterator[None]:
    """Print to a reader that may go away, as `head` does."""
    try:
        yield
        sys.stdout.flush()
    except (BrokenPipeError, SystemExit):  # the reader has gone; rich then ends the process, but the status counts
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
