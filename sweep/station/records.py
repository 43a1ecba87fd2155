"""The records of the station file: attribute names are the file's keys, each with what it may hold."""

import itertools
from dataclasses import dataclass
from typing import Annotated, Any, Literal, get_args

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    GetCoreSchemaHandler,
    ValidationInfo,
    field_validator,
)
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from sweep.result import PatchKind


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
ResultPath = Annotated[str, AfterValidator(_plain_line), Allowed("the path of a result.json of an earlier sweep")]
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

Layout = Literal["mono", "bgr", "rggb", "grbg", "gbrg", "bggr"]
LAYOUTS: tuple[Layout, ...] = get_args(Layout)
KINDS: tuple[PatchKind, ...] = get_args(PatchKind)


class Table(BaseModel):
    """A table of the file: frozen, without room for unknown keys."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class StationName(Table):
    name: Name


class Lens(Table):
    focal_length_mm: Positive
    stops: Stops
    pupil_magnification: Positive = 1.0
    model: ResultPath | None = None


class Camera(Table):
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


class Scene(Table):
    object_um_per_px: Positive
    wavelength_nm: Positive
    bandwidth_nm: NotNegative = 0.0

    @field_validator("bandwidth_nm")
    @classmethod
    def _narrower_than_the_wavelength(cls, value: float, info: ValidationInfo) -> float:
        if value >= info.data.get("wavelength_nm", 1e9):
            raise PydanticCustomError("not_allowed", "{what}", {"what": "a number from 0 to below scene.wavelength_nm"})
        return value


class Patch(Table):
    kind: Annotated[PatchKind, Allowed("one of " + ", ".join(f'"{name}"' for name in KINDS))]
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
            raise PydanticCustomError("key_missing", "{what}", {"what": what_belongs_at(Patch, key)})
        if value is not None and key != _OWN_KEY.get(kind) and not (key == "modulation" and kind in _OWN_KEY):
            raise PydanticCustomError("key_of_another_kind", "{kind}", {"kind": kind})
        return value


_OWN_KEY = {"star": "cycles", "bars": "period_um", "tribar": "group"}


class Target(Table):
    name: Name
    depth_mm: Finite
    patches: Annotated[tuple[Patch, ...], AfterValidator(_some)]


class Need(Table):
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


class Station(Table):
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


TABLES: dict[str, type[Table]] = {
    "station": StationName,
    "lens": Lens,
    "camera": Camera,
    "scene": Scene,
    "targets": Target,
    "patches": Patch,
    "need": Need,
}


def what_belongs_at(table: type[Table], key: str) -> str:
    """What may stand at a key of a table, in words."""
    if key in ("targets", "patches"):
        return "at least one [[targets]] table" if key == "targets" else "a list of at least one { kind, region } patch"
    if table is Station or key not in table.model_fields:
        return f"a table with the keys {', '.join(TABLES[key].model_fields)}" if key in TABLES else "a table of keys"
    found = table.model_fields[key]
    parts = getattr(found.annotation, "__args__", ())
    stated = [*found.metadata, *(m for part in parts for m in getattr(part, "__metadata__", ()))]
    return next(m.what for m in stated if isinstance(m, Allowed))
