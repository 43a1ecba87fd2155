"""A watched folder: only whole files, each once, in order."""

import threading
import time

import cv2
import numpy as np
import pytest

from sweep.cameras.folder import FolderCamera
from sweep.errors import CameraError


def encoded(value: int, suffix: str = ".png", depth: type = np.uint16) -> bytes:
    frame = np.arange(4800, dtype=np.uint32).reshape(60, 80) % 200 + value
    return cv2.imencode(suffix, frame.astype(depth))[1].tobytes()


def test_what_was_there_before_is_left_alone_and_new_files_come_in_order(tmp_path):
    (tmp_path / "old.png").write_bytes(encoded(1))
    with FolderCamera(tmp_path) as camera:
        (tmp_path / "a.png").write_bytes(encoded(1000))
        time.sleep(0.02)
        (tmp_path / "b.bmp").write_bytes(encoded(5, ".bmp", np.uint8))
        (tmp_path / "notes.txt").write_text("no picture")
        frames = [camera.grab(2).pixels for _ in range(2)]
        assert [frame.dtype for frame in frames] == [np.uint16, np.uint8]
        assert [int(frame[0, 0]) for frame in frames] == [1000, 5]
        with pytest.raises(CameraError, match="No new picture"):
            camera.grab(0.3)


def test_a_file_that_is_still_being_written_is_waited_for(tmp_path):
    data = encoded(7)

    def write_slowly():
        with (tmp_path / "slow.png").open("wb") as file:
            for start in range(0, len(data), 1 + len(data) // 5):
                file.write(data[start : start + 1 + len(data) // 5])
                file.flush()
                time.sleep(0.15)

    with FolderCamera(tmp_path) as camera:
        writer = threading.Thread(target=write_slowly)
        writer.start()
        assert int(camera.grab(5).pixels[0, 0]) == 7
        writer.join()


def test_a_damaged_file_is_named_once_and_left_out(tmp_path):
    with FolderCamera(tmp_path) as camera:
        (tmp_path / "half.png").write_bytes(encoded(7)[:200])
        with pytest.raises(CameraError, match=r"half\.png is no whole picture"):
            camera.grab(5)
        (tmp_path / "next.png").write_bytes(encoded(8))
        assert int(camera.grab(2).pixels[0, 0]) == 8


def test_nothing_can_be_set(tmp_path):
    with FolderCamera(tmp_path) as camera:
        assert camera.set(exposure_ms=3).exposure_ms is None
