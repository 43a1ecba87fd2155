"""The station file `station.toml` as records.

Attribute names are the file's keys; see docs/station-file.md.
"""

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field

Layout = Literal["mono", "bgr", "rggb", "grbg", "gbrg", "bggr"]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Fraction = Annotated[float, Field(gt=0, le=1, allow_inf_nan=False)]
Region = tuple[int, int, int, int]


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=False)


class StationName(_Table):
    name: str


class Lens(_Table):
    focal_length_mm: Positive
    stops: tuple[Positive, ...]
    pupil_magnification: Positive = 1.0


class Camera(_Table):
    source: str | None = None
    pixel_pitch_um: Positive
    bit_depth: Annotated[int, Field(ge=8, le=16)] | None = None
    layout: Layout = "mono"
    response: Literal["linear", "srgb"] | Positive = "linear"
    black_level_dn: NotNegative = 0.0
    exposure_step_ms: Positive | None = None


class Scene(_Table):
    object_um_per_px: Positive
    wavelength_nm: Positive
    bandwidth_nm: NotNegative = 0.0


class Patch(_Table):
    kind: Literal["edge", "star", "flat", "bars", "tribar"]
    region: Region
    cycles: int | None = None
    period_um: Positive | None = None
    group: int | None = None
    modulation: Fraction = 1.0


class Target(_Table):
    name: str
    depth_mm: Finite
    patches: tuple[Patch, ...]


class Need(_Table):
    feature_um: Positive
    contrast: Fraction
    level: Fraction
    max_exposure_ms: Positive | None = None
    speed_mm_s: NotNegative | None = None
    blur_px: Positive | None = None
    max_gain_db: NotNegative = 0.0
    min_snr_db: Finite | None = None
    flicker_hz: NotNegative = 0.0
    confidence: Annotated[float, Field(gt=0.5, lt=1)] = 0.95
    depth_range_mm: tuple[Finite, Finite] | None = None


class Station(_Table):
    """One inspection position: lens, camera, light, targets, and what the job needs."""

    station: StationName
    lens: Lens
    camera: Camera
    scene: Scene
    targets: tuple[Target, ...]
    need: Need
