"""The set-up at the station: a camera's live frames, the patches as they are placed, and the station file."""

import os
import shutil
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from sweep.cameras import Camera, Grab, Settings
from sweep.errors import CameraError, StationError
from sweep.framing import (
    Done,
    Move,
    Revert,
    Save,
    Show,
    Sight,
    Wish,
    check_patch,
    check_patches,
    light_tone,
    patches_of,
    with_region,
    write_regions,
)
from sweep.recording import load_station
from sweep.station import Station

WANTED_TONE = 0.7
TONE_RANGE = (0.55, 0.85)
SHORTEST_MS, LONGEST_MS = 0.001, 1000.0
GRAB_S = 0.25  # wishes are heard at least so often
PATIENCE_S = 3.0
FIRST_S = 10.0
LATENCY_S = 0.1
SETTLED_FRAMES = 2
TOO_BRIGHT = "The picture is too bright. Dim the lamp, or set a shorter exposure on the camera."
TOO_DARK = "The picture is too dark. Give it more light, open the ring, or set a longer exposure on the camera."
LOOKS = 60


def set_up(camera: Camera, station_file: Path, show: Show) -> Sight:
    """Show live frames and checks, and heed what the screen wishes, until it is done; the last sight.

    Raises CaptureError where no frame comes at the beginning, StationError for the file or frames that do not fit it;
    later losses of the camera are told on the screen and waited for.
    """
    desk = _Desk(station_file)
    light = _Light(camera, desk.saved)
    pixels = camera.grab(FIRST_S).pixels
    checks = list(check_patches(pixels, desk.station))
    waited_s, turn, trouble = 0.0, 0, ""
    while True:
        try:
            grab = camera.grab(GRAB_S)
        except CameraError as error:
            waited_s += GRAB_S
            if waited_s > PATIENCE_S:
                trouble, light.lost = str(error), True
        else:
            pixels, waited_s = grab.pixels, 0.0
            light.follow(grab)
            trouble = light.trouble
            # One patch a frame, so that no wish waits for all of them.
            turn = (turn + 1) % len(checks)
            checks[turn] = check_patch(pixels, desk.station, turn)
        sight = Sight(
            desk.station,
            tuple(checks),
            pixels,
            light.exposure_ms,
            light.tone,
            desk.station != desk.saved,
            desk.told,
            trouble,
        )
        wishes = show(sight)
        desk.heed(wishes)
        for number, (_, _, patch) in enumerate(patches_of(desk.station)):
            if patch != checks[number].patch:
                checks[number] = check_patch(pixels, desk.station, number)
        if any(isinstance(wish, Done) for wish in wishes):
            last = replace(sight, station=desk.station, checks=tuple(checks))
            last = replace(last, changed=desk.station != desk.saved, told=desk.told)
            show(last)
            return last


def look(camera: Camera, station_file: Path) -> Sight:
    """One sight once the exposure has settled. Raises CaptureError and StationError as `set_up` does."""
    looks, good = 0, 0

    def settled(sight: Sight) -> Sequence[Wish]:
        nonlocal looks, good
        looks += 1
        in_range = sight.tone is not None and TONE_RANGE[0] <= sight.tone <= TONE_RANGE[1]
        good = good + 1 if in_range else 0
        return (Done(),) if good >= SETTLED_FRAMES or looks >= LOOKS else ()

    sight = set_up(camera, station_file, settled)
    return replace(sight, checks=check_patches(sight.pixels, sight.station))


@dataclass
class _Desk:
    """The station file, as it is and as its patches are placed now."""

    file: Path

    def __post_init__(self) -> None:
        self.saved = self.station = load_station(self.file)
        self._text = self._read()
        self.told = ""

    def heed(self, wishes: Sequence[Wish]) -> None:
        """Do what the screen wishes; what comes of it is told."""
        for wish in wishes:
            try:
                match wish:
                    case Move(number=number, region=region):
                        self.station, self.told = with_region(self.station, number, region), ""
                    case Revert():
                        self.station, self.told = self.saved, "All patches are where the file has them."
                    case Save():
                        self._save()
                        self.told = f"Saved in {self.file}. The file as it was is {_backup(self.file).name}."
            except StationError as error:
                self.told = str(error)

    def _save(self) -> None:
        """Write the file anew in one step, the old one kept beside it. Raises StationError."""
        if self._read() != self._text:
            raise StationError(
                f"{self.file} has been changed by somebody else meanwhile. Nothing was saved: leave the set-up and "
                "begin again."
            )
        regions = [patch.region for _, _, patch in patches_of(self.station)]
        text = write_regions(self._text, regions)
        place = self.file.resolve()  # a link stays a link
        new = place.with_name(f".{place.name}.new")
        try:
            shutil.copy2(place, _backup(place))
            with new.open("w", encoding="utf-8", newline="") as out:
                out.write(text)
                out.flush()
                os.fsync(out.fileno())
            shutil.copymode(place, new)
            new.replace(place)
        except OSError as error:
            new.unlink(missing_ok=True)
            raise StationError(f"{self.file} cannot be written: {error.strerror}. Nothing was saved.") from None
        self._text, self.saved = text, self.station

    def _read(self) -> str:
        try:
            return self.file.read_bytes().decode("utf-8")
        except OSError as error:
            raise StationError(f"{self.file} cannot be read: {error.strerror}. Check path and permissions.") from None
        except UnicodeDecodeError:
            raise StationError(f"{self.file} is not a text file in UTF-8. Name a station file.") from None


class _Light:
    """Keeps the frame's light tone where detail shows, by the exposure; a camera that cannot be set is left alone."""

    def __init__(self, camera: Camera, station: Station) -> None:
        self._camera = camera
        self._station = station
        self._settings: Settings = camera.set(exposure_ms=10.0, gain_db=0.0)
        self.exposure_ms = self._settings.exposure_ms
        self.tone: float | None = None
        self.trouble = ""
        self.lost = False

    def follow(self, grab: Grab) -> None:
        """Look at one frame, and set the exposure anew where it asks for it; `trouble` is what cannot be helped so."""
        if self.lost:  # a camera that was opened again has forgotten its settings
            self.lost = not self._set(self.exposure_ms)
            return
        if grab.arrived_s <= self._settings.at_s + (self.exposure_ms or 0) / 1000 + LATENCY_S:
            return
        self.tone = light_tone(grab.pixels, self._station.camera)
        self.trouble = ""
        if TONE_RANGE[0] <= self.tone <= TONE_RANGE[1]:
            return
        before_ms = self.exposure_ms
        if before_ms is not None:
            factor = 0.25 if self.tone >= 1 else min(20.0, WANTED_TONE / max(self.tone, 0.01))
            wanted_ms = min(LONGEST_MS, max(SHORTEST_MS, before_ms * factor))
            if wanted_ms != before_ms and self._set(wanted_ms) and self.exposure_ms != before_ms:
                return
        bright = self.tone > TONE_RANGE[1]
        self.trouble = TOO_BRIGHT if bright else TOO_DARK

    def _set(self, exposure_ms: float | None) -> bool:
        try:
            self._settings = self._camera.set(exposure_ms=exposure_ms, gain_db=0.0)
        except CameraError:
            return False
        self.exposure_ms = self._settings.exposure_ms
        return True


def _backup(file: Path) -> Path:
    return file.with_name(f"{file.name}.bak")
