"""The set-up of the patches on a page: live readings, and patches that can be dragged or typed to their places."""

import threading
import time
from collections.abc import Mapping, Sequence
from types import TracebackType
from typing import Any, Self

from sweep.errors import SweepError
from sweep.framing import Done, Move, PatchCheck, Revert, Save, Sight, Wish
from sweep.screens.frame_table import VERDICT, summary
from sweep.screens.page.gate import Door
from sweep.screens.page.preview import preview
from sweep.screens.page.server import PageServer, Refused
from sweep.station import Region

LEAST_PX = 16
PICTURE_S = 0.15
CLOSER_SHARE = 0.25  # of a patch's size is shown around it
WISHES: dict[str, Wish] = {"save": Save(), "revert": Revert(), "done": Done()}


class FramePage:
    """A screen of the set-up in every browser that has the address."""

    def __init__(self, door: Door) -> None:
        self._sight: Sight | None = None
        self._fault = ""
        self._over = False
        self._version = 0
        self._wishes: dict[object, Wish] = {}
        self._lock = threading.Lock()
        self._pictured: tuple[float, bytes] | None = None
        self._server = PageServer(self, door)

    def __enter__(self) -> Self:
        self._server.__enter__()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._over = True
        self._fault = str(error) if isinstance(error, SweepError) else ""
        self._version += 1
        self._server.__exit__(kind, error, trace)

    def __call__(self, sight: Sight) -> Sequence[Wish]:
        """Show a sight, and return what was wished meanwhile, of the moves of a patch the last."""
        self._sight = sight
        self._version += 1
        with self._lock:
            wishes, self._wishes = list(self._wishes.values()), {}
        return wishes

    @property
    def version(self) -> int:
        """Grows with every sight."""
        return self._version

    def state(self) -> dict[str, Any]:
        """All that the page shows."""
        sight = self._sight
        if sight is None:
            return {"mode": "wait", "title": "Set-up", "do": "Waiting for a picture", "trouble": self._fault}
        height, width = sight.pixels.shape[:2]
        light = "" if sight.tone is None else f"Light tone at {sight.tone:.0%} of full scale"
        light += "." if sight.exposure_ms is None else f", {sight.exposure_ms:.4g} ms."
        return {
            "mode": "frame",
            "title": sight.station.station.name,
            "do": "The set-up is over" if self._over else "Point the camera, place the patches",
            "hint": f"{summary(sight)} The ring belongs wide open here: the blur is largest there.",
            "trouble": self._fault or sight.trouble,
            "light": light,
            "told": sight.told,
            "changed": sight.changed,
            "frame": {"width": width, "height": height},
            "patches": [_shown(check) for check in sight.checks],
        }

    def picture(self, part: int | None) -> bytes | None:
        """The latest frame, or one patch of it with what is around."""
        sight = self._sight
        if sight is None:
            return None
        camera = sight.station.camera
        if part is not None:
            return preview(sight.pixels, camera, _around(sight, part)) if part < len(sight.checks) else None
        if self._pictured is None or time.monotonic() - self._pictured[0] > PICTURE_S:
            self._pictured = (time.monotonic(), preview(sight.pixels, camera))
        return self._pictured[1]

    def act(self, wish: Mapping[str, Any]) -> None:
        """Keep a wish for the set-up."""
        if wish["action"] != "move":
            made: Wish = WISHES[wish["action"]]
        elif self._sight is None:
            raise Refused("There is no picture yet.")
        else:
            made = Move(_number(wish["patch"], len(self._sight.checks)), _region(wish["region"], self._sight))
        key = made.number if isinstance(made, Move) else type(made)
        with self._lock:
            self._wishes.pop(key, None)
            self._wishes[key] = made


def _shown(check: PatchCheck) -> dict[str, Any]:
    return {
        "name": check.name,
        "kind": check.patch.kind,
        "region": list(check.patch.region),
        "status": check.status,
        "verdict": VERDICT[check.status][0],
        "figures": [{"name": f.name, "value": f.value, "wanted": f.wanted, "ok": f.ok} for f in check.figures],
        "work": [{"text": work.text, "needed": work.needed} for work in check.work],
    }


def _around(sight: Sight, part: int) -> Region:
    left, top, width, height = sight.checks[part].patch.region
    rows, columns = sight.pixels.shape[:2]
    across, down = round(CLOSER_SHARE * width), round(CLOSER_SHARE * height)
    x, y = min(max(0, left - across), columns - 1), min(max(0, top - down), rows - 1)
    return (x, y, max(1, min(columns, left + width + across) - x), max(1, min(rows, top + height + down) - y))


def _number(value: Any, below: int) -> int:
    if type(value) is not int or not 0 <= value < below:
        raise ValueError
    return value


def _region(value: Any, sight: Sight) -> Region:
    """Four whole numbers within the frame. Raises ValueError."""
    x, y, width, height = value
    if any(type(number) is not int for number in value):
        raise ValueError
    rows, columns = sight.pixels.shape[:2]
    if min(x, y) < 0 or min(width, height) < LEAST_PX or x + width > columns or y + height > rows:
        raise ValueError
    return (x, y, width, height)
