"""GenICam cameras over the real protocol, against the simulated camera that comes with the library aravis."""

import shutil
import subprocess
import time

import numpy as np
import pytest
from guided import ADDRESS, address_to_itself

from sweep.cameras import open_camera
from sweep.cameras.genicam import formats_for
from sweep.cameras.owner import WAITING_FRAMES
from sweep.demo import demo_station
from sweep.errors import CameraError
from sweep.station import Station

SERVER = shutil.which("arv-fake-gv-camera-0.8")


def station(bit_depth: int) -> Station:
    demo = demo_station()
    return demo.model_copy(update={"camera": demo.camera.model_copy(update={"bit_depth": bit_depth})})


@pytest.fixture
def served():
    if SERVER is None:
        pytest.skip("arv-fake-gv-camera-0.8 is not installed (Debian package aravis-tools)")
    servers = []

    def serve():
        servers.append(subprocess.Popen([SERVER, "-i", ADDRESS], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL))
        time.sleep(0.5)
        return servers[-1]

    with address_to_itself():
        yield serve
        for server in servers:
            server.kill()
            server.wait()


def drained(camera):
    """Take what still waits, then one more."""
    for _ in range(WAITING_FRAMES + 1):
        camera.grab(0.3)


@pytest.mark.parametrize(("bit_depth", "kind", "name"), [(8, np.uint8, "Mono8"), (12, np.uint16, "Mono16")])
def test_frames_and_settings(served, bit_depth, kind, name):
    served()
    with open_camera(f"genicam:{ADDRESS}", station(bit_depth)) as camera:
        assert camera.facts()["pixel_format"] == name
        settings = camera.set(exposure_ms=5.0, gain_db=0.0)
        assert settings.exposure_ms == pytest.approx(5.0)
        levels = {}
        for exposure_ms in (5.0, 20.0):
            at_s = camera.set(exposure_ms=exposure_ms).at_s
            grabs = [camera.grab(2) for _ in range(6)]
            assert grabs[-1].pixels.dtype == kind
            levels[exposure_ms] = [g.pixels.mean() for g in grabs if g.arrived_s > at_s + 0.1][-1]
        assert levels[20.0] > 1.3 * levels[5.0]


def test_a_camera_that_dies_is_named_and_taken_up_again(served):
    server = served()
    with open_camera(f"genicam:{ADDRESS}", station(8)) as camera:
        camera.grab(2)
        server.kill()
        server.wait()
        began = time.monotonic()
        while camera.facts()["times_lost"] == 0 and time.monotonic() < began + 5:
            time.sleep(0.05)
        with pytest.raises(CameraError, match=r"sends no picture|connect"):
            drained(camera)
        served()
        back = None
        while back is None and time.monotonic() < began + 30:
            try:
                back = camera.grab(2)
            except CameraError:
                continue
        assert back is not None


def test_an_address_without_a_camera(served):
    with pytest.raises(CameraError, match=r"127\.0\.0\.7"):
        open_camera("genicam:127.0.0.7", station(8))


def test_formats_carry_all_bits_and_the_mosaic():
    # Names by the GenICam Pixel Format Naming Convention.
    assert formats_for("mono", 8) == ("Mono8",)
    assert formats_for("mono", 12)[0] == "Mono12"
    assert "Mono10" not in formats_for("mono", 12)
    assert formats_for("grbg", 8) == ("BayerGR8",)
    assert formats_for("bgr", 8) == ("BGR8", "RGB8")
