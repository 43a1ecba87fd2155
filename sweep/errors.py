"""What can go wrong, as a tree; each class carries the exit status of the command that meets it.

    SweepError            70  a fault of the tool itself
    |- InputError          2  bad usage or bad input; nothing has been written
    |  |- StationError        the station file
    |  |- SourceError         a folder, its table of shots, or a result to start from
    |  `- FrameError          one image file
    |- CaptureError        3  a device or capture fault; what was captured so far is kept
    |  `- CameraError         the camera is absent, stalled, or refuses a setting
    |     `- FormatError         it delivers samples of another kind than the station file says
    `- Interrupted       130  the user ended the run; what was captured so far is kept

A message is a short sentence or two: what is wrong, where (file, row, key), what to do.
"""


class SweepError(Exception):
    """A fault of the tool itself."""

    exit_status = 70


class InputError(SweepError):
    """Bad usage or bad input."""

    exit_status = 2


class StationError(InputError):
    """The station file cannot be used."""


class SourceError(InputError):
    """A source of frames, or its table of shots, cannot be used."""


class FrameError(InputError):
    """One image file is missing or cannot be read."""


class CaptureError(SweepError):
    """A device or capture fault."""

    exit_status = 3


class CameraError(CaptureError):
    """The camera is absent, has stalled, or refuses what it is asked."""


class FormatError(CameraError):
    """The camera delivers samples of another kind than the station file says."""


class Interrupted(SweepError):
    """The user ended the run."""

    exit_status = 130
