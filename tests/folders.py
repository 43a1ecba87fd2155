"""Small folders of frames for the tests: a table of shots, images, a station file."""

from pathlib import Path

import cv2
import numpy as np

from sweep.station import build_station

HEADER = "file,stop,exposure_ms,gain_db,role"
WIDTH, HEIGHT = 60, 40

STATION_TEXT = """
[station]
name = "Vial cap lane"
[lens]
focal_length_mm = 16
stops = [2, 2.8, 4]
[camera]
pixel_pitch_um = 3.45
layout = "mono"
[scene]
object_um_per_px = 58
wavelength_nm = 530
[[targets]]
name = "tray floor"
depth_mm = 0
patches = [{ kind = "edge", region = [4, 4, 30, 30] }]
[[targets]]
name = "Kappe, Größe 2"
depth_mm = -8
patches = [{ kind = "flat", region = [40, 4, 20, 30] }]
[need]
feature_um = 180
contrast = 0.2
level = 0.7
max_exposure_ms = 4
"""


def a_station(**camera):
    """The vial cap lane with two targets; `camera` overrides keys."""
    return build_station(
        {
            "station": {"name": "Vial cap lane"},
            "lens": {"focal_length_mm": 16, "stops": [2, 2.8, 4]},
            "camera": {"pixel_pitch_um": 3.45} | camera,
            "scene": {"object_um_per_px": 58, "wavelength_nm": 530},
            "targets": [
                {"name": "tray floor", "depth_mm": 0, "patches": [{"kind": "edge", "region": [4, 4, 30, 30]}]},
                {"name": "Kappe, Größe 2", "depth_mm": -8, "patches": [{"kind": "flat", "region": [40, 4, 20, 30]}]},
            ],
            "need": {"feature_um": 180, "contrast": 0.2, "level": 0.7, "max_exposure_ms": 4},
        }
    )


def noise(seed=0, bits=8, shape=(HEIGHT, WIDTH), dtype=None):
    """A frame of random samples that use all bits."""
    pixels = np.random.default_rng(seed).integers(0, 2**bits, shape)
    return pixels.astype(dtype or (np.uint8 if bits <= 8 else np.uint16))


def write(path: Path, pixels, *params):
    """An image file, its name with any letters."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(cv2.imencode(path.suffix, pixels, params)[1].tobytes())


def a_folder(folder: Path, frames=None, *, rows=None, header=HEADER):
    """A loose folder: `frames` is {name: pixels}; without rows they are shared out over f/2 and f/2.8."""
    frames = {f"{k}.png": noise(k) for k in range(4)} if frames is None else frames
    for name, pixels in frames.items():
        write(folder / name, pixels)
    if rows is None:
        rows = [f"{name},{(2, 2.8)[k % 2]},1.5,0,target" for k, name in enumerate(frames)]
    (folder / "shots.csv").write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return folder
