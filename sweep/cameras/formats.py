"""Opening a camera of which no station file tells what its samples are: by trial, the deepest and plainest first."""

from collections.abc import Iterator

from sweep.cameras import DEVICE, Camera, Grab, open_camera
from sweep.errors import CameraError, FormatError
from sweep.station import Camera as Stated
from sweep.station import Layout, Station

FIRST_S = 10.0
LOOK_S = 0.5
UNTOLD = {"bit_depth": None, "response": "linear", "black_level_dn": 0.0, "exposure_step_ms": None}
MOSAICS: tuple[Layout, ...] = ("rggb", "grbg", "gbrg", "bggr")


def open_untold(source: str, station: Station) -> tuple[Camera, Stated]:
    """Open a camera by name in the first format in which it delivers a frame; what can be stated of its samples then.

    station: gives what else a camera needs to be opened. Raises CameraError.
    """
    refused: CameraError | None = None
    for layout, bit_depth in _formats(source):
        stated = station.camera.model_copy(update={"layout": layout, "bit_depth": bit_depth})
        try:
            camera = open_camera(source, station.model_copy(update={"camera": stated}))
        except FormatError as error:
            refused = error
            continue
        try:
            first = _first(camera)
        except FormatError as error:
            refused = error
            camera.close()
        except CameraError:
            camera.close()
            raise
        else:
            known = {"layout": "bgr" if first.pixels.ndim == 3 else layout, **UNTOLD}
            return camera, stated.model_copy(update=known)
    assert refused is not None
    raise refused


def _formats(source: str) -> Iterator[tuple[Layout, int]]:
    """Layouts and least bits to ask for."""
    if source.partition(":")[0] == "genicam":
        for layout in ("mono", *MOSAICS):
            for bit_depth in (12, 10, 8):
                yield layout, bit_depth
    else:
        if DEVICE.fullmatch(source):  # streams come as deep as they are
            yield "mono", 16
        yield "mono", 8
    yield "bgr", 8


def _first(camera: Camera) -> Grab:
    """The first frame; a refusal of its format does not let wait for it. Raises CameraError."""
    waited_s = 0.0
    while True:
        try:
            return camera.grab(LOOK_S)
        except FormatError:
            raise
        except CameraError:
            waited_s += LOOK_S
            if waited_s >= FIRST_S:
                raise
