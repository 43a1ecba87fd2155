"""The station file `station.toml` as records: attribute names are the file's keys (docs/station-file.md).

One mistake never hides another: all of them are collected, each with its key, and told in one message of at most
four lines.
"""

import itertools
import re
import tomllib
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    GetCoreSchemaHandler,
    ValidationError,
    ValidationInfo,
    field_validator,
)
from pydantic_core import CoreSchema, ErrorDetails, PydanticCustomError, core_schema

from sweep.errors import StationError


@dataclass(frozen=True, slots=True)
class Allowed:
    """What a key may hold, in words; any mistake in its value is told by them."""

    what: str

    def __get_pydantic_core_schema__(self, source: object, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.custom_error_schema(
            handler(source),
            custom_error_type="not_allowed",
            custom_error_message="{what}",
            custom_error_context={"what": self.what},
        )


def _increasing(values: tuple[float, ...]) -> tuple[float, ...]:
    if any(b <= a for a, b in itertools.pairwise(values)):
        raise ValueError
    return values


def _some(values: tuple[Any, ...]) -> tuple[Any, ...]:
    if not values:
        raise PydanticCustomError("none_listed", "none listed")
    return values


def _plain_line(text: str) -> str:
    if not text.strip() or any(ord(c) < 32 or ord(c) == 127 or c in "\x85\u2028\u2029" for c in text):
        raise ValueError
    return text


# The far bounds keep every later product and quotient finite.
Number = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=-1e9, le=1e9)]
Finite = Annotated[Number, Allowed("a number")]
Positive = Annotated[Number, Field(ge=1e-9), Allowed("a number above 0 (from 1e-9 to 1e9)")]
NotNegative = Annotated[Number, Field(ge=0), Allowed("a number, 0 or more")]
Fraction = Annotated[Number, Field(ge=1e-9, le=1), Allowed("a number above 0, at most 1")]
Name = Annotated[str, AfterValidator(_plain_line), Allowed("a text of one line, not empty")]
Count = Annotated[int, Field(strict=True, ge=1, le=10_000), Allowed("a whole number from 1 to 10000")]
Group = Annotated[int, Field(strict=True, ge=-10, le=20), Allowed("a whole number from -10 to 20")]
Place = Annotated[int, Field(strict=True, ge=0, le=1_000_000)]
Extent = Annotated[int, Field(strict=True, ge=1, le=1_000_000)]
Region = Annotated[
    tuple[Place, Place, Extent, Extent],
    Allowed("[x, y, width, height] in whole pixels, x and y from 0, width and height from 1"),
]
Stops = Annotated[
    tuple[Annotated[Number, Field(ge=1e-9)], ...],
    Field(min_length=1),
    AfterValidator(_increasing),
    Allowed("a list of at least two different f-numbers, widest (smallest) first"),
]
Depths = Annotated[
    tuple[Number, Number], AfterValidator(_increasing), Allowed("[nearest, farthest] in mm, the smaller number first")
]

LAYOUTS = ("mono", "bgr", "rggb", "grbg", "gbrg", "bggr")
KINDS = ("edge", "star", "flat", "bars", "tribar")
Layout = Literal["mono", "bgr", "rggb", "grbg", "gbrg", "bggr"]
Kind = Literal["edge", "star", "flat", "bars", "tribar"]


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class StationName(_Table):
    name: Name


class Lens(_Table):
    focal_length_mm: Positive
    stops: Stops
    pupil_magnification: Positive = 1.0


class Camera(_Table):
    source: Name | None = None
    pixel_pitch_um: Positive
    bit_depth: (
        Annotated[int, Field(strict=True, ge=8, le=16), Allowed("a whole number of bits from 8 to 16")] | None
    ) = None
    layout: Annotated[Layout, Allowed("one of " + ", ".join(f'"{name}"' for name in LAYOUTS))] = "mono"
    response: Annotated[
        Literal["linear", "srgb"] | Annotated[Number, Field(ge=0.1, le=10)],
        Allowed('"linear", "srgb" or a display gamma as a number from 0.1 to 10'),
    ] = "linear"
    black_level_dn: NotNegative = 0.0
    exposure_step_ms: Positive | None = None

    @field_validator("black_level_dn")
    @classmethod
    def _below_full_scale(cls, value: float, info: ValidationInfo) -> float:
        full_dn = 2 ** (info.data.get("bit_depth") or 16) - 1
        if value >= full_dn:
            raise PydanticCustomError("not_allowed", "{what}", {"what": f"a level below full scale, {full_dn} DN"})
        return value


class Scene(_Table):
    object_um_per_px: Positive
    wavelength_nm: Positive
    bandwidth_nm: NotNegative = 0.0

    @field_validator("bandwidth_nm")
    @classmethod
    def _narrower_than_the_wavelength(cls, value: float, info: ValidationInfo) -> float:
        if value >= info.data.get("wavelength_nm", 1e9):
            raise PydanticCustomError("not_allowed", "{what}", {"what": "a number from 0 to below scene.wavelength_nm"})
        return value


class Patch(_Table):
    kind: Annotated[Kind, Allowed("one of " + ", ".join(f'"{name}"' for name in KINDS))]
    region: Region
    cycles: Annotated[Count | None, Field(validate_default=True)] = None
    period_um: Annotated[Positive | None, Field(validate_default=True)] = None
    group: Annotated[Group | None, Field(validate_default=True)] = None
    modulation: Fraction = 1.0

    @field_validator("cycles", "period_um", "group", "modulation")
    @classmethod
    def _fits_the_kind(cls, value: float | None, info: ValidationInfo) -> float | None:
        kind, key = info.data.get("kind"), str(info.field_name)
        if kind is None:  # wrong itself, and said there
            return value
        if value is None and key == _OWN_KEY.get(kind):
            raise PydanticCustomError("key_missing", "{what}", {"what": _what(Patch, key)})
        if value is not None and key != _OWN_KEY.get(kind) and not (key == "modulation" and kind in _OWN_KEY):
            raise PydanticCustomError("key_of_another_kind", "{kind}", {"kind": kind})
        return value


_OWN_KEY = {"star": "cycles", "bars": "period_um", "tribar": "group"}


class Target(_Table):
    name: Name
    depth_mm: Finite
    patches: Annotated[tuple[Patch, ...], AfterValidator(_some)]


class Need(_Table):
    feature_um: Positive
    contrast: Fraction
    level: Fraction
    max_exposure_ms: Positive | None = None
    speed_mm_s: NotNegative | None = None
    blur_px: Positive | None = None
    max_gain_db: Annotated[Number, Field(ge=0, le=100), Allowed("a number from 0 to 100")] = 0.0
    min_snr_db: Finite | None = None
    flicker_hz: NotNegative = 0.0
    confidence: Annotated[Number, Field(gt=0.5, lt=1), Allowed("a number above 0.5 and below 1")] = 0.95
    depth_range_mm: Depths | None = None
    part_contrast: Fraction = 1.0


class Station(_Table):
    """One inspection position: lens, camera, light, targets, and what the job needs."""

    station: StationName
    lens: Lens
    camera: Camera
    scene: Scene
    targets: Annotated[tuple[Target, ...], AfterValidator(_some)]
    need: Need

    @property
    def magnification(self) -> float:
        """Image size over object size at the plane of focus."""
        return self.camera.pixel_pitch_um / self.scene.object_um_per_px

    @property
    def pupil_distance_mm(self) -> float:
        """From the entrance pupil to the plane of focus: e = f (1/P + 1/m), by the thin-lens equation with pupils."""
        return self.lens.focal_length_mm * (1 / self.lens.pupil_magnification + 1 / self.magnification)

    def object_um_per_px_at(self, depth_mm: float) -> float:
        """Object-space pixel size (um) at a depth, the sensor staying put: the chief ray through the entrance pupil."""
        return self.scene.object_um_per_px * (1 + depth_mm / self.pupil_distance_mm)

    def feature_cy_px_at(self, depth_mm: float) -> float:
        """Spatial frequency (cycles/px) of the smallest feature at a depth: a bar is half a period."""
        return self.object_um_per_px_at(depth_mm) / (2 * self.need.feature_um)

    def full_scale_dn(self, bit_depth: int | None = None) -> int:
        """The top code; `bit_depth` is the file's, for where the station file states none (then 8 if absent too)."""
        return int(2 ** (self.camera.bit_depth or bit_depth or 8)) - 1


def parse_station(text: str, where: str = "station.toml") -> Station:
    """Read a station file's text; `where` names it in messages. Raises StationError with every mistake in it."""
    try:
        data = tomllib.loads(text.removeprefix("\ufeff"))
    except tomllib.TOMLDecodeError as error:
        raise StationError(f"{where} is not valid TOML: {_line_first(str(error))}. Mend that line.") from None
    except (ValueError, RecursionError):  # numbers of thousands of digits, thousands of nested brackets
        raise StationError(f"{where} is not valid TOML: a value is far too long or too deeply nested.") from None
    return build_station(data, where)


def build_station(data: Mapping[str, Any], where: str = "station.toml") -> Station:
    """Make a station from the tables of its file. Raises StationError with every mistake in them."""
    mistakes: list[str] = []
    station = None
    try:
        station = Station.model_validate(data)
    except ValidationError as error:
        errors = error.errors(include_url=False)
        misspelt = {_meant(e) for e in errors if e["type"] == "extra_forbidden"}
        mistakes = [_sentence(e) for e in errors if _key(e["loc"]) not in misspelt or "missing" not in e["type"]]
    mistakes += _across_keys(data)
    if station is not None:
        mistakes += _behind_the_lens(station)
    if mistakes or station is None:
        raise StationError(_message(mistakes, where))
    return station


def check_regions(station: Station, width: int, height: int) -> None:
    """See that every patch lies inside a frame of that size (px). Raises StationError that names those that don't."""
    outside = []
    for i, target in enumerate(station.targets):
        for j, patch in enumerate(target.patches):
            x, y, across, down = patch.region
            if x + across > width or y + down > height:
                outside.append(
                    f"targets[{i}].patches[{j}].region = {list(patch.region)} of {target.name!r} reaches outside the "
                    f"frame of {width} x {height} pixels: move or shrink it"
                )
    if outside:
        raise StationError(_message(outside, "The station file"))


def _across_keys(data: Mapping[str, Any]) -> Iterator[str]:
    """What one key says about another, on values that may be wrong by themselves."""
    targets = data.get("targets")
    names = [t.get("name") for t in targets if isinstance(t, dict)] if isinstance(targets, list | tuple) else []
    for name, count in Counter(n.strip() for n in names if isinstance(n, str)).items():
        if count > 1:
            yield f"targets: {count} targets have the name {_shown(name)}: give each its own"
    lens, need = data.get("lens"), data.get("need")
    stops = lens.get("stops") if isinstance(lens, dict) else None
    if isinstance(stops, list | tuple) and len(stops) == 1:
        yield f"lens.stops = {_shown(stops)} has one stop only: a sweep needs at least two, widest (smallest) first"
    if not isinstance(need, dict) or "max_exposure_ms" in need:
        return
    if "speed_mm_s" not in need or "blur_px" not in need:
        yield "need.max_exposure_ms is missing: state it in ms, or speed_mm_s and blur_px, from which it follows"
    elif need["speed_mm_s"] == 0:
        yield "need.max_exposure_ms is missing: a part at speed_mm_s = 0 sets no limit, so state it in ms"


def _behind_the_lens(station: Station) -> Iterator[str]:
    """Depths at which nothing can stand: at the entrance pupil and behind it."""
    nearest = -station.pupil_distance_mm
    depths = [(f"targets[{i}].depth_mm", t.depth_mm) for i, t in enumerate(station.targets)]
    if station.need.depth_range_mm is not None:
        depths.append(("need.depth_range_mm", station.need.depth_range_mm[0]))
    for key, depth_mm in depths:
        if depth_mm <= nearest:
            yield (
                f"{key} = {depth_mm:g} lies behind the lens: its entrance pupil is {-nearest:.4g} mm from the plane of "
                "focus, by focal_length_mm, pixel_pitch_um and object_um_per_px; positive depths lead away from it"
            )


_TABLES: dict[str, type[_Table]] = {
    "station": StationName,
    "lens": Lens,
    "camera": Camera,
    "scene": Scene,
    "targets": Target,
    "patches": Patch,
    "need": Need,
}


def _sentence(error: ErrorDetails) -> str:
    """One mistake: its key, what is wrong, what is allowed."""
    key, table, last = _key(error["loc"]), _table(error), error["loc"][-1]
    kind, context = error["type"], error.get("ctx", {})
    if kind == "extra_forbidden":
        return f"{key} is not a key of the station file: {_nearest(str(last), table)}"
    if kind == "key_of_another_kind":
        return f"{key} does not belong to a patch of kind {context['kind']!r}: take it out"
    if kind == "key_missing":
        return f"{key} is missing: it must be {context['what']}"
    if kind == "missing":
        return f"{key} is missing: it must be {_what(table, str(last))}"
    if kind == "not_allowed":
        return f"{key} = {_shown(error['input'])}: must be {context['what']}"
    return f"{key} = {_shown(error['input'])}: must be {_what(table, str(last))}"


def _table(error: ErrorDetails) -> type[_Table]:
    """The table that the mistaken key stands in."""
    above = [part for part in error["loc"][:-1] if isinstance(part, str)]
    return _TABLES[above[-1]] if above else Station


def _meant(error: ErrorDetails) -> str:
    """The full name of the key that an unknown one stands for; empty where none is near."""
    *above, last = error["loc"]
    near = _near(str(last), _table(error))
    return _key((*above, near)) if near else ""


def _what(table: type[_Table], key: str) -> str:
    """What may stand at a key, or in a table of that name."""
    if key in ("targets", "patches"):
        return "at least one [[targets]] table" if key == "targets" else "a list of at least one { kind, region } patch"
    if table is Station or key not in table.model_fields:
        return f"a table with the keys {', '.join(_TABLES[key].model_fields)}" if key in _TABLES else "a table of keys"
    found = table.model_fields[key]
    stated = [
        *found.metadata,
        *(m for a in getattr(found.annotation, "__args__", ()) for m in getattr(a, "__metadata__", ())),
    ]
    return next(m.what for m in stated if isinstance(m, Allowed))


def _nearest(key: str, table: type[_Table]) -> str:
    near = _near(key, table)
    if near:
        return f"use {near}, if that is meant"
    homes = [name for name, other in _TABLES.items() if key in other.model_fields]
    if homes:
        return f"it belongs to {homes[0]}"
    return f"the keys here are {', '.join(table.model_fields)}"


def _near(key: str, table: type[_Table]) -> str | None:
    return next(iter(get_close_matches(key, table.model_fields, n=1, cutoff=0.6)), None)


def _key(loc: tuple[int | str, ...]) -> str:
    """A place in the file as `targets[1].patches[0].region`."""
    text = ""
    for part in loc:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            text += ("." if text else "") + (part if re.fullmatch(r"[\w-]{1,60}", part) else _shown(part))
    return text


def _shown(value: object) -> str:
    """A value on one line, cut to a readable length."""
    text = f'"{value}"' if isinstance(value, str) else str(value).lower() if isinstance(value, bool) else repr(value)
    text = "".join(c if c.isprintable() else "?" for c in text)
    return text if len(text) <= 60 else text[:57] + "..."


def _line_first(text: str) -> str:
    """A TOML message with its place in front: `line 3, column 5: what`."""
    found = re.fullmatch(r"(.*) \(at (?:line (\d+), column (\d+)|(end of document))\)", text, re.DOTALL)
    what = "".join(c if c.isprintable() else "?" for c in (found[1] if found else text))
    if found is None:
        return what
    return f"at its end: {what}" if found[4] else f"line {found[2]}, column {found[3]}: {what}"


def _message(mistakes: list[str], where: str) -> str:
    """All mistakes in at most four lines; those that don't fit are counted and their keys named."""
    if len(mistakes) == 1:
        return f"{where}: {mistakes[0]}."
    shown, rest = (mistakes, []) if len(mistakes) <= 3 else (mistakes[:2], mistakes[2:])
    lines = [f"{where} has {len(mistakes)} mistakes:", *(f"  {m}." for m in shown)]
    if rest:
        keys = list(dict.fromkeys(re.split(r" = | is | does |: ", m)[0] for m in rest))
        more = ", ".join(keys[:8]) + (", ..." if len(keys) > 8 else "")
        lines.append(f"  and {len(rest)} more, at {more}.")
    return "\n".join(lines)
