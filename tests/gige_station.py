"""The simulated station behind a real GigE Vision protocol: run as a program, it serves one camera on an address.

The library aravis answers for the camera (its simulated one, filled by a callback); the picture is that of the
tests' small station. Lines on standard input move things: `turn 2.8`, `cap on`, `cap off`, `lamp 0.5`.
"""

import ctypes
import sys
import threading
import time

import numpy as np
from guided import small_camera, small_station

SIZE_PX = (512, 512)
MONO16 = 0x01100007
P = ctypes.c_void_p
FILL = ctypes.CFUNCTYPE(None, P, P, ctypes.c_uint32, ctypes.c_uint32, ctypes.c_uint32)


class Station:
    """The scene, its ring, its cap and its lamp, in real time."""

    def __init__(self) -> None:
        self.camera = small_camera(small_station(), size_px=SIZE_PX)
        self.lock = threading.Lock()
        self.lamp = 1.0

    def frame(self, exposure_us: int) -> np.ndarray:
        with self.lock:
            self.camera._exposure_ms = exposure_us / 1000
            self.camera._time_s = time.monotonic()
            pixels = self.camera.grab(1.0).pixels
        dim = 64 + (pixels.astype(np.float64) - 64) * self.lamp
        return np.clip(np.rint(dim), 0, 4095).astype(np.uint16)

    def do(self, line: str) -> None:
        what, value = line.split()
        with self.lock:
            if what == "turn":
                self.camera._time_s = time.monotonic()
                self.camera.turn(float(value), after_s=0.2, lasts_s=0.6)
            elif what == "cap":
                self.camera.cap(value == "on")
            else:
                self.lamp = float(value)


def serve(address: str) -> None:
    """Serve until standard input ends."""
    aravis = ctypes.CDLL("libaravis-0.8.so.0")

    def function(name, result, *arguments):
        found = getattr(aravis, name)
        found.restype, found.argtypes = result, arguments
        return found

    data = function("arv_buffer_get_data", P, P, ctypes.POINTER(ctypes.c_size_t))
    station = Station()

    def fill(buffer, _, exposure_us, gain, pixel_format):
        pixels = station.frame(exposure_us)
        if pixel_format != MONO16:
            pixels = (pixels >> 4).astype(np.uint8)
        ctypes.memmove(data(buffer, ctypes.byref(ctypes.c_size_t())), pixels.ctypes.data, pixels.nbytes)

    callback = FILL(fill)
    camera = function("arv_gv_fake_camera_new", P, ctypes.c_char_p, ctypes.c_char_p)(address.encode(), b"SIM01")
    inner = function("arv_gv_fake_camera_get_fake_camera", P, P)(camera)
    function("arv_fake_camera_set_fill_pattern", None, P, FILL, P)(inner, callback, None)
    sys.stdout.write("ready\n")
    sys.stdout.flush()
    for line in sys.stdin:
        station.do(line)


if __name__ == "__main__":
    serve(sys.argv[1])
