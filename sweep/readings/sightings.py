"""What the pixels say: the records, from one patch at one stop up to the whole sweep."""

from dataclasses import dataclass

from sweep.measure.bars import BarsContrast, BarsMeasure
from sweep.measure.edge import EdgeMeasure
from sweep.measure.linear import Floats, Scale, Sites
from sweep.measure.mtf import Transfer
from sweep.measure.noise import NoisePoint, PhotonTransfer
from sweep.measure.star import StarMeasure
from sweep.measure.star_level import StarCurve
from sweep.measure.tribar import TribarMeasure
from sweep.result import PatchKind
from sweep.station import Patch

CLIPPED_SHARE = 0.005
CLIPPED_SHARE_FOR_LIGHT = 0.01


@dataclass(frozen=True, slots=True)
class PatchSite:
    """One patch of the station: where it is listed, what it is, and its sharpness samples."""

    target: int
    patch: int
    spec: Patch
    sites: Sites


@dataclass(frozen=True, slots=True)
class Sighting:
    """What one patch said at one stop.

    `frame_light`: mean linear light of the patch (DN per ms at 0 dB), frame by frame, with the frames' place in time in
    `frame_order`; `tone_per_ms`: the light tone in the brightest channel, None where the kind
    has none; `exposures`: of the frames, ms at 0 dB; `noise`: of its even areas; `saturated_fraction`: over the
    frames used; `frames`: how many were used.
    """

    stop: float
    site: PatchSite
    ok: bool
    why_not: tuple[str, ...]
    saturated_fraction: float
    frames: int
    frame_light: Floats
    frame_order: Floats
    tone_per_ms: float | None
    exposures: Floats
    edge: EdgeMeasure | None = None
    star: StarMeasure | None = None
    star_curve: StarCurve | None = None
    bars: BarsMeasure | None = None
    tribar: TribarMeasure | None = None
    bars_contrast: BarsContrast | None = None
    bars_reversed: bool = False
    noise: tuple[NoisePoint, ...] = ()

    @property
    def shifts_px(self) -> tuple[Floats, float] | None:
        """How far each frame's pattern lies from their mean, (n, axes) px, and the u of one figure; None: not told."""
        if self.edge is not None and self.edge.ok and self.edge.shift_px is not None:
            return self.edge.shift_px[:, None], self.edge.shift_u_px
        if self.star is not None and self.star.ok:
            return self.star.shift_px, self.star.shift_u_px
        if self.bars is not None and self.bars.ok:
            return self.bars.shift_px[:, None], self.bars.shift_u_px
        return None

    @property
    def half_found(self) -> bool:
        """Whether a sharper view of the same patch could help: no pattern, a star without its rim, a tri-bar target."""
        rimless = self.star is not None and self.star.ok and self.star.rim_px is None
        return rimless or self.tribar is not None or "pattern-not-found" in self.why_not

    @property
    def strength(self) -> float:
        """How clearly a star or bars stand out: amplitude over level."""
        if self.star is not None and self.star.rings is not None:
            return float(self.star.rings.amplitude[0] / self.star.rings.level[0])
        if self.tribar is not None:
            return float(len([e for e in self.tribar.elements if e.chance > 0.5]))
        return self.bars.relative[0] if self.bars is not None else 0.0

    @property
    def position_px(self) -> tuple[float, ...] | None:
        """Where the pattern lies in the region, px: an edge across itself, a star's centre."""
        if self.edge is not None and self.edge.ok and self.edge.curve is not None:
            return (self.edge.curve.coefficients[0],)
        if self.star is not None and self.star.ok:
            return self.star.centre_px
        return None

    @property
    def transfer(self) -> Transfer | None:
        """The signed transfer of lens and camera that the patch shows by itself."""
        if self.star_curve is not None:
            return self.star_curve.transfer
        return self.edge.transfer if self.edge is not None else None

    @property
    def kind(self) -> PatchKind:
        """The kind of the patch."""
        return self.site.spec.kind


@dataclass(frozen=True, slots=True)
class Black:
    """The level without light: from dark frames, or as the station file says; and the dark frames' noise."""

    level_dn: float
    from_dark_frames: bool
    noise: tuple[NoisePoint, ...]


@dataclass(frozen=True, slots=True)
class Sweep:
    """All that the pixels say: the sightings, the camera's noise, and what was noticed on the way.

    `identical`: groups of target frames that are the same bit for bit; `row_light`: for each stop (n, rows), each
    frame's mean light of every row against the stop's mean frame; `idle_bits`: low bits that are 0 in every pixel.
    """

    stops: tuple[float, ...]
    sightings: tuple[Sighting, ...]
    black: Black
    scale: Scale
    photon_transfer: PhotonTransfer | None
    frames: int
    identical: tuple[tuple[str, ...], ...]
    frame_shape: tuple[int, ...]
    row_light: tuple[Floats, ...]
    idle_bits: int

    def at(self, stop: float) -> list[Sighting]:
        """The sightings at one stop."""
        return [s for s in self.sightings if s.stop == stop]
