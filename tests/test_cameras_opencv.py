"""Streams and files that OpenCV opens, served by ffmpeg on loopback."""

import contextlib
import shutil
import socket
import subprocess
import time

import numpy as np
import pytest

from sweep.cameras import open_camera
from sweep.cameras.opencv import plain
from sweep.demo import demo_station
from sweep.errors import CameraError
from sweep.station import Station

FFMPEG = shutil.which("ffmpeg")
SIZE = (320, 240)
NOISE = f"nullsrc=s={SIZE[0]}x{SIZE[1]}:r=20,geq=lum='random(1)*60+90':cb=128:cr=128"


def station(bit_depth: int) -> Station:
    demo = demo_station()
    return demo.model_copy(update={"camera": demo.camera.model_copy(update={"bit_depth": bit_depth})})


@pytest.fixture
def ffmpeg():
    if FFMPEG is None:
        pytest.skip("ffmpeg is not installed")
    running = []

    def start(*arguments: str) -> subprocess.Popen:
        source = ["-re", "-f", "lavfi", "-i", NOISE]
        command = [FFMPEG, "-loglevel", "quiet", *source, *arguments]
        running.append(subprocess.Popen(command, stdin=subprocess.DEVNULL))
        return running[-1]

    yield start
    for process in running:
        process.kill()
        process.wait()


def free_port() -> int:
    with contextlib.closing(socket.socket()) as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def opened(address: str, bit_depth: int):
    """Open as soon as the server listens."""
    until = time.monotonic() + 10
    while True:
        try:
            return open_camera(address, station(bit_depth))
        except CameraError:
            if time.monotonic() > until:
                raise
            time.sleep(0.2)


def drained(camera):
    """Take what still waits, here and in the driver, then one more."""
    for _ in range(200):
        camera.grab(3)


def test_motion_jpeg_over_http(ffmpeg):
    address = f"http://127.0.0.1:{free_port()}/v"
    server = ffmpeg("-c:v", "mjpeg", "-q:v", "2", "-pix_fmt", "yuvj420p", "-f", "mpjpeg", "-listen", "1", address)
    with opened(address, 8) as camera:
        grabs = [camera.grab(3) for _ in range(12)]
        assert grabs[-1].pixels.shape == (SIZE[1], SIZE[0])
        assert grabs[-1].pixels.dtype == np.uint8
        gaps_s = np.diff([grab.arrived_s for grab in grabs[4:]])
        assert 0.02 < gaps_s.mean() < 0.1  # 20 frames a second are sent
        assert camera.set(exposure_ms=3).exposure_ms is None
        server.kill()
        server.wait()
        with pytest.raises(CameraError):
            drained(camera)


def test_sixteen_bit_lossless_stream(ffmpeg):
    address = f"tcp://127.0.0.1:{free_port()}"
    ffmpeg("-c:v", "rawvideo", "-pix_fmt", "gray16le", "-f", "nut", f"{address}?listen=1")
    with opened(address, 16) as camera:
        frame = camera.grab(5).pixels
        assert frame.dtype == np.uint16
        assert frame.shape == (SIZE[1], SIZE[0])
        assert frame.max() > 255


def test_a_video_file_plays_at_its_own_rate(ffmpeg, tmp_path):
    movie = tmp_path / "movie.mkv"
    assert ffmpeg("-t", "1", "-c:v", "ffv1", "-pix_fmt", "gray", str(movie)).wait() == 0
    with open_camera(str(movie), station(8)) as camera:
        grabs = [camera.grab(2) for _ in range(10)]
        assert 0.3 < grabs[-1].arrived_s - grabs[0].arrived_s < 0.9  # 9 frames at 20 Hz: 0.45 s


def test_no_device_and_no_server_are_named():
    with pytest.raises(CameraError, match="Camera 97 cannot be opened"):
        open_camera("97", station(8))
    with pytest.raises(CameraError, match="cannot be opened"):
        open_camera(f"http://127.0.0.1:{free_port()}/v", station(8))


def test_what_the_driver_delivers_must_be_what_the_station_says():
    grey = np.repeat(np.arange(12, dtype=np.uint8).reshape(3, 4, 1), 3, axis=2)
    assert plain(grey, "mono", 8, "It").shape == (3, 4)
    assert plain(grey, "bgr", 8, "It").shape == (3, 4, 3)
    colour = grey.copy()
    colour[..., 2] += 1
    colour[..., 1] += 1
    with pytest.raises(CameraError, match="delivers colour"):
        plain(colour, "mono", 8, "It")
    with pytest.raises(CameraError, match="delivers 8 bits"):
        plain(grey, "mono", 12, "It")
