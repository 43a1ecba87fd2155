"""A guided run at a camera, kept as a recording that says how it ended."""

from pathlib import Path

from sweep.cameras import Camera
from sweep.capture import Finished, Live, Plan, Show, conduct
from sweep.errors import Interrupted, SweepError
from sweep.recording import record_into
from sweep.station import Station


def record(
    camera: Camera, station: Station, station_text: str, folder: Path, show: Show, fixed_ms: float | None = None
) -> Finished:
    """Guide through all stops that the recording in `folder` still lacks, and close it whatever happens.

    fixed_ms: the exposure that was set by hand on a camera that cannot be set from here.
    Raises Interrupted where the user ends the run, CaptureError for a device or disk fault; the frames until then
    are kept, and the same call takes the run up again. Raises SourceError where the folder holds something else.
    """
    live = Live(camera, station, fixed_ms)
    recorder = record_into(folder, station_text, camera.facts())
    try:
        finished = conduct(live, recorder, station, Plan(), show)
    except KeyboardInterrupt:
        recorder.close("interrupted")
        raise _interrupted(folder) from None
    except SweepError as error:
        recorder.close("fault", str(error))
        raise
    if finished.ended:
        recorder.close("interrupted")
        raise _interrupted(folder)
    recorder.close("done")
    return finished


def _interrupted(folder: Path) -> Interrupted:
    return Interrupted(f"The run was ended early; its frames are kept in {folder}. Record into it again to go on.")
