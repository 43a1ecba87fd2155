"""GenICam cameras, by the library aravis: GigE Vision and USB3 Vision devices, over ctypes.

The library is free software of its own and found at run time; no compiler or header is needed. Tried on its own
simulated camera over the real protocol, not on devices.
"""

import contextlib
import ctypes
import ctypes.util
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from sweep.cameras import Facts
from sweep.cameras.owner import OwnedCamera
from sweep.errors import CameraError, FormatError
from sweep.frames import Pixels
from sweep.station import Layout, Station

BUFFERS = 4
READ_TIMEOUT_S = 2.0
DEEP = ("16", "14", "12", "10")
SIGNED_OFF = 0  # ARV_AUTO_OFF
MISSING = (
    "GenICam cameras need the library aravis 0.8, which is not here. Install it: on Debian and Ubuntu the package "
    "libaravis-0.8-0."
)

_Pointer = ctypes.c_void_p
_Text = ctypes.c_char_p
_Number = ctypes.c_double
_Whole = ctypes.c_int

# What is called: the result, and the arguments without the last one, which takes the error.
CALLS: dict[str, tuple[Any, tuple[Any, ...]]] = {
    "arv_camera_new": (_Pointer, (_Text,)),
    "arv_camera_get_vendor_name": (_Text, (_Pointer,)),
    "arv_camera_get_model_name": (_Text, (_Pointer,)),
    "arv_camera_dup_available_pixel_formats_as_strings": (
        ctypes.POINTER(_Text),
        (_Pointer, ctypes.POINTER(ctypes.c_uint)),
    ),
    "arv_camera_set_pixel_format_from_string": (None, (_Pointer, _Text)),
    "arv_camera_set_acquisition_mode": (None, (_Pointer, _Whole)),
    "arv_camera_is_exposure_time_available": (_Whole, (_Pointer,)),
    "arv_camera_is_exposure_auto_available": (_Whole, (_Pointer,)),
    "arv_camera_set_exposure_time_auto": (None, (_Pointer, _Whole)),
    "arv_camera_get_exposure_time_bounds": (None, (_Pointer, ctypes.POINTER(_Number), ctypes.POINTER(_Number))),
    "arv_camera_set_exposure_time": (None, (_Pointer, _Number)),
    "arv_camera_get_exposure_time": (_Number, (_Pointer,)),
    "arv_camera_is_gain_available": (_Whole, (_Pointer,)),
    "arv_camera_is_gain_auto_available": (_Whole, (_Pointer,)),
    "arv_camera_set_gain_auto": (None, (_Pointer, _Whole)),
    "arv_camera_get_gain_bounds": (None, (_Pointer, ctypes.POINTER(_Number), ctypes.POINTER(_Number))),
    "arv_camera_set_gain": (None, (_Pointer, _Number)),
    "arv_camera_get_gain": (_Number, (_Pointer,)),
    "arv_camera_get_payload": (ctypes.c_uint, (_Pointer,)),
    "arv_camera_create_stream": (_Pointer, (_Pointer, _Pointer, _Pointer)),
    "arv_camera_start_acquisition": (None, (_Pointer,)),
    "arv_camera_stop_acquisition": (None, (_Pointer,)),
}
PLAIN_CALLS: dict[str, tuple[Any, tuple[Any, ...]]] = {
    "arv_update_device_list": (None, ()),
    "arv_get_n_devices": (ctypes.c_uint, ()),
    "arv_get_device_address": (_Text, (ctypes.c_uint,)),
    "arv_get_device_vendor": (_Text, (ctypes.c_uint,)),
    "arv_get_device_model": (_Text, (ctypes.c_uint,)),
    "arv_get_device_serial_nbr": (_Text, (ctypes.c_uint,)),
    "arv_buffer_new_allocate": (_Pointer, (ctypes.c_size_t,)),
    "arv_stream_push_buffer": (None, (_Pointer, _Pointer)),
    "arv_stream_timeout_pop_buffer": (_Pointer, (_Pointer, ctypes.c_uint64)),
    "arv_buffer_get_status": (_Whole, (_Pointer,)),
    "arv_buffer_get_data": (_Pointer, (_Pointer, ctypes.POINTER(ctypes.c_size_t))),
    "arv_buffer_get_image_width": (_Whole, (_Pointer,)),
    "arv_buffer_get_image_height": (_Whole, (_Pointer,)),
}


class _Error(ctypes.Structure):
    _fields_ = (("domain", ctypes.c_uint32), ("code", ctypes.c_int), ("message", ctypes.c_char_p))


def open_genicam(address: str, station: Station) -> OwnedCamera:
    """Open a camera by its address, serial number or name; empty means the first one. Raises CameraError."""
    return OwnedCamera(_Aravis(address, station))


def found_genicam() -> Sequence[tuple[str, str]]:
    """The cameras that answer within a second: address, and maker, model and serial number. Raises CameraError."""
    call, _ = _library()
    call["arv_update_device_list"]()
    found = []
    for number in range(call["arv_get_n_devices"]()):
        address, *words = (
            (call[f"arv_get_device_{what}"](number) or b"").decode(errors="replace")
            for what in ("address", "vendor", "model", "serial_nbr")
        )
        found.append((address, " ".join(word for word in words if word)))
    return found


class _Aravis:
    """One camera through the library; see sweep.cameras.owner.Device."""

    def __init__(self, address: str, station: Station) -> None:
        self.name = f"GenICam camera {address}" if address else "The first GenICam camera"
        self._address = address
        self._layout: Layout = station.camera.layout
        self._bit_depth = station.camera.bit_depth or 8
        self._call, self._unref = _library()
        self._camera: int | None = None
        self._stream: int | None = None
        self._format = ""
        self._exposure_ms = 0.0

    def open(self) -> None:
        """Open, choose the pixel format, switch the automatics off, start."""
        # Left to find the first one itself, the library may listen for its frames on another network interface.
        address = self._address or next((found for found, _ in found_genicam()), "")
        self._camera = self._ask("arv_camera_new", address.encode() or None)
        if not self._camera:
            raise CameraError(f"{self.name} is not there. Check cable, power and address.")
        self._format = self._choose_format()
        self._ask("arv_camera_set_pixel_format_from_string", self._camera, self._format.encode())
        self._ask("arv_camera_set_acquisition_mode", self._camera, 0)  # continuous
        for what in ("exposure_time", "gain"):
            if self._ask(f"arv_camera_is_{what.removesuffix('_time')}_auto_available", self._camera):
                self._ask(f"arv_camera_set_{what}_auto", self._camera, SIGNED_OFF)
        self._stream = self._ask("arv_camera_create_stream", self._camera, None, None)
        size = self._ask("arv_camera_get_payload", self._camera)
        for _ in range(BUFFERS):
            self._call["arv_stream_push_buffer"](self._stream, self._call["arv_buffer_new_allocate"](size))
        self._ask("arv_camera_start_acquisition", self._camera)

    def read(self) -> Pixels | None:
        """The next whole frame; those with packets missing are passed over."""
        for _ in range(BUFFERS):
            wait_us = int((READ_TIMEOUT_S + 2 * self._exposure_ms / 1000) * 1e6)
            buffer = self._call["arv_stream_timeout_pop_buffer"](self._stream, wait_us)
            if not buffer:
                return None
            try:
                if self._call["arv_buffer_get_status"](buffer) == 0:
                    return self._pixels(buffer)
            finally:
                self._call["arv_stream_push_buffer"](self._stream, buffer)
        return None

    def apply(self, exposure_ms: float | None, gain_db: float | None) -> tuple[float | None, float | None]:
        """Set and read back; what is beyond the camera's bounds becomes their nearest."""
        if exposure_ms is not None and self._ask("arv_camera_is_exposure_time_available", self._camera):
            self._ask("arv_camera_set_exposure_time", self._camera, self._within("exposure_time", exposure_ms * 1000))
        has_gain = self._ask("arv_camera_is_gain_available", self._camera)
        if gain_db is not None and has_gain:
            self._ask("arv_camera_set_gain", self._camera, self._within("gain", gain_db))
        self._exposure_ms = self._ask("arv_camera_get_exposure_time", self._camera) / 1000
        return self._exposure_ms, float(self._ask("arv_camera_get_gain", self._camera)) if has_gain else 0.0

    def facts(self) -> Facts:
        """Maker, model and pixel format."""
        vendor = self._ask("arv_camera_get_vendor_name", self._camera) or b""
        model = self._ask("arv_camera_get_model_name", self._camera) or b""
        return {
            "device": f"{vendor.decode(errors='replace')} {model.decode(errors='replace')}".strip(),
            "address": self._address,
            "pixel_format": self._format,
        }

    def close(self) -> None:
        """Stop and let go; a camera that is gone may complain, which changes nothing."""
        if self._camera and self._stream:
            with contextlib.suppress(CameraError):
                self._ask("arv_camera_stop_acquisition", self._camera)
        for thing in (self._stream, self._camera):
            if thing:
                self._unref(thing)
        self._camera = self._stream = None

    def _within(self, what: str, value: float) -> float:
        """The value that the camera can be set to, nearest to one that is wanted."""
        least, most = _Number(), _Number()
        self._ask(f"arv_camera_get_{what}_bounds", self._camera, ctypes.byref(least), ctypes.byref(most))
        return min(most.value, max(least.value, value))

    def _choose_format(self) -> str:
        """The first of the wanted formats that the camera has."""
        count = ctypes.c_uint()
        names = self._ask("arv_camera_dup_available_pixel_formats_as_strings", self._camera, ctypes.byref(count))
        there = [names[i].decode() for i in range(count.value)]
        wanted = formats_for(self._layout, self._bit_depth)
        for name in wanted:
            if name in there:
                return name
        raise FormatError(
            f"{self.name} has none of the pixel formats {', '.join(wanted)} that camera.layout and camera.bit_depth "
            f"ask for; it has {', '.join(there)}."
        )

    def _pixels(self, buffer: int) -> Pixels:
        size = ctypes.c_size_t()
        data = self._call["arv_buffer_get_data"](buffer, ctypes.byref(size))
        width = self._call["arv_buffer_get_image_width"](buffer)
        height = self._call["arv_buffer_get_image_height"](buffer)
        kind = np.uint8 if self._format.endswith("8") else np.uint16
        shape = (height, width, 3) if self._layout == "bgr" else (height, width)
        length = int(np.prod(shape)) * np.dtype(kind).itemsize
        if size.value < length:
            raise CameraError(f"{self.name} sends frames that are too short for {self._format}.")
        frame = np.frombuffer(ctypes.string_at(data, length), kind).reshape(shape)
        return np.ascontiguousarray(frame[..., ::-1]) if self._format.startswith("RGB") else frame

    def _ask(self, name: str, *arguments: Any) -> Any:
        """Call the library; its error becomes a CameraError."""
        fault = ctypes.POINTER(_Error)()
        answer = self._call[name](*arguments, ctypes.byref(fault))
        if fault:
            message = (fault.contents.message or b"").decode(errors="replace")
            raise CameraError(f"{self.name}: {message}. Check cable, power and address.")
        return answer


def formats_for(layout: Layout, bit_depth: int) -> Sequence[str]:
    """Pixel formats (Standard Features Naming Convention) that carry a layout at a depth, the plainest first."""
    if layout == "bgr":
        return ("BGR8", "RGB8")
    stem = "Mono" if layout == "mono" else f"Bayer{layout[:2].upper()}"
    if bit_depth == 8:
        return (f"{stem}8",)
    return tuple(f"{stem}{depth}" for depth in (str(bit_depth), *DEEP) if int(depth) >= bit_depth)


def _library() -> tuple[dict[str, Callable[..., Any]], Callable[[int], None]]:
    """The library's functions, and the one that lets go of an object. Raises CameraError where it isn't there."""
    try:
        aravis = ctypes.CDLL(ctypes.util.find_library("aravis-0.8") or "libaravis-0.8.so.0")
        objects = ctypes.CDLL(ctypes.util.find_library("gobject-2.0") or "libgobject-2.0.so.0")
    except OSError:
        raise CameraError(MISSING) from None
    functions: dict[str, Callable[..., Any]] = {}
    for table, last in ((CALLS, (ctypes.POINTER(ctypes.POINTER(_Error)),)), (PLAIN_CALLS, ())):
        for name, (result, arguments) in table.items():
            function = getattr(aravis, name)
            function.restype, function.argtypes = result, (*arguments, *last)
            functions[name] = function
    objects.g_object_unref.argtypes = (_Pointer,)
    objects.g_object_unref.restype = None
    return functions, objects.g_object_unref
