"""The records that flow down the pipeline, and the one table of note codes.

Units stand in the names; `_u` is a standard uncertainty (k = 1). What cannot be known is None,
never NaN. `Result` holds what `result.json` holds, under the same names.
"""

from dataclasses import dataclass, field
from typing import Literal

SCHEMA = "sweep/result/1"

PatchKind = Literal["edge", "star", "flat", "bars", "tribar"]
Limit = Literal["depth", "aberration", "diffraction", "sampling", "exposure", "noise"]


@dataclass(frozen=True, slots=True)
class Note:
    """A warning: its code (a key of NOTE_CODES), and a text that names the stop, target or file."""

    code: str
    text: str

    def __post_init__(self) -> None:
        if self.code not in NOTE_CODES:
            raise ValueError(f"unknown note code {self.code!r}")


@dataclass(frozen=True, slots=True)
class Reading:
    """What one patch says at one stop; MTF figures along the edge normal or the mean over a star's directions."""

    stop: float
    target: str
    patch: int
    kind: PatchKind
    depth_mm: float
    ok: bool
    why_not: tuple[str, ...] = ()
    mtf50_cy_px: float | None = None
    mtf50_cy_px_u: float | None = None
    contrast_at_feature: float | None = None
    contrast_at_feature_u: float | None = None
    reversed: bool = False
    smallest_feature_um: float | None = None
    smallest_feature_um_u: float | None = None
    model_contrast: float | None = None
    model_contrast_u: float | None = None
    model_mtf50_cy_px: float | None = None
    model_mtf50_cy_px_u: float | None = None
    contrast_at_bars: float | None = None
    contrast_at_bars_u: float | None = None
    bars_cy_px: float | None = None
    astigmatic_contrast: float | None = None
    astigmatic_contrast_u: float | None = None
    smallest_element: str | None = None
    smallest_element_um: float | None = None
    element_chances: tuple[str, ...] = ()
    saturated_fraction: float = 0.0


@dataclass(frozen=True, slots=True)
class Stop:
    """One engraved stop: what it would be used at, and how the worst target fares there.

    `exposure_needed_ms`: what the level needs at 0 dB, whatever the limits say.
    """

    stop: float
    f_number_by_light: float | None
    f_number_by_light_u: float | None
    exposure_ms: float | None
    gain_db: float | None
    worst_target: str | None
    worst_contrast: float | None
    worst_contrast_u: float | None
    snr_db: float | None
    meets_need: bool
    why_not: tuple[str, ...] = ()
    chance_meets: float | None = None
    chance_best: float | None = None
    exposure_needed_ms: float | None = None


@dataclass(frozen=True, slots=True)
class CameraNoise:
    """The camera by photon transfer (EMVA 1288 quantities), at 0 dB and per linear DN."""

    electrons_per_dn: float | None
    read_noise_e: float | None
    black_level_dn: float
    full_scale_dn: int
    electrons_per_dn_u: float | None = None
    read_noise_e_u: float | None = None


@dataclass(frozen=True, slots=True)
class LensModel:
    """The fitted lens. `best_focus_mm`: the depth, from the plane of focus, sharpest at the recommended stop.

    The rest serves a forecast at another station: aberrations of fourth and sixth order are in waves of `wavelength_nm`
    at the pupil's edge of `widest_f_number`; `colour_um_per_nm`: how the focus moves in the image with the wavelength.
    """

    best_focus_mm: float | None
    spherical_waves: float | None
    blur_px: float | None
    reduced_chi2: float | None
    best_focus_mm_u: float | None = None
    spherical_waves_u: float | None = None
    blur_px_u: float | None = None
    sixth_order_waves: float | None = None
    sixth_order_waves_u: float | None = None
    colour_um_per_nm: float | None = None
    colour_um_per_nm_u: float | None = None
    widest_f_number: float | None = None
    wavelength_nm: float | None = None
    focal_length_mm: float | None = None
    magnification: float | None = None
    pixel_pitch_um: float | None = None


@dataclass(frozen=True, slots=True)
class Recommendation:
    """The answer. `stop` is None where no reading was sound."""

    stop: float | None
    exposure_ms: float | None
    gain_db: float | None
    meets_need: bool
    limited_by: Limit | None
    chance_best: float | None
    optimum_f_number: float | None
    reasons: tuple[str, ...] = ()
    shortfalls: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class CurvePoint:
    """The model between the stops, for the plot: contrast at the feature of one target at an f-number by light."""

    target: str
    f_number: float
    contrast: float
    contrast_u: float | None


@dataclass(frozen=True, slots=True)
class SourceFacts:
    """What was analysed: the number of frames used, and one hash over shots and files."""

    frames: int
    sha256: str


@dataclass(frozen=True, slots=True)
class TargetDetail:
    """The smallest features told apart at one target and stop, as bar widths: detected, and at the needed contrast."""

    target: str
    smallest_detected_um: float | None
    smallest_at_need_um: float | None


@dataclass(frozen=True, slots=True)
class DepthStop:
    """One stop over the depths of the map, at its own setting, by the lens model with motion blur.

    `usable_mm`: from which to which depth the contrast need is kept with the wanted confidence, None for nowhere, an
    end None where it lies farther out than the sweep can tell. Of the lists, one entry for each depth: contrast at the
    feature with its u, and the smallest features told apart, None where there is none or the noise is unknown.
    """

    stop: float
    usable_mm: tuple[float | None, float | None] | None
    contrast: tuple[float, ...]
    contrast_u: tuple[float, ...]
    smallest_detected_um: tuple[float | None, ...]
    smallest_at_need_um: tuple[float | None, ...]
    targets: tuple[TargetDetail, ...]


@dataclass(frozen=True, slots=True)
class DepthMap:
    """Contrast and the smallest feature told apart over depth (from the plane of focus) and stop."""

    part_contrast: float
    depths_mm: tuple[float, ...]
    stops: tuple[DepthStop, ...]


@dataclass(frozen=True, slots=True)
class Result:
    """All that the analysis says. `curve` feeds the plot and is not part of `result.json`.

    `depth_map` is None where there is no lens model.
    """

    recommendation: Recommendation
    stops: tuple[Stop, ...]
    readings: tuple[Reading, ...]
    camera: CameraNoise
    model: LensModel
    warnings: tuple[Note, ...]
    source: SourceFacts
    curve: tuple[CurvePoint, ...] = field(default=())
    depth_map: DepthMap | None = None


@dataclass(frozen=True, slots=True)
class NoteCode:
    """A kind of note: what it means, and what to do about it."""

    meaning: str
    remedy: str


NOTE_CODES: dict[str, NoteCode] = {
    "frames-saturated": NoteCode(
        "Pixels of a patch sit at the top of the scale or at a full well.", "Take the stop again at a shorter exposure."
    ),
    "low-signal": NoteCode(
        "The light tone is too dark to measure well.", "Take the stop again at a longer exposure or with more light."
    ),
    "too-few-frames": NoteCode(
        "A stop has fewer than two usable frames, so noise cannot be told from detail.",
        "Take at least two frames, better eight, at every stop.",
    ),
    "frames-identical": NoteCode(
        "Frames that should differ by noise are the same bit for bit.",
        "Check that the camera delivers new frames and that no file was copied.",
    ),
    "frame-unreadable": NoteCode(
        "An image file cannot be read and was left out.",
        "Copy the file again from the camera's computer, or take the frame again.",
    ),
    "frame-missing": NoteCode(
        "A file named in shots.csv is not there and was left out.",
        "Put the file back, or take its row out of shots.csv.",
    ),
    "recording-changed": NoteCode(
        "The table of shots or the station file of a recording is not the one that was recorded.",
        "Put the recorded file back if the change was not meant; state another station file by --station.",
    ),
    "light-unchanged": NoteCode(
        "Two different stops let the same light through.",
        "Turn the ring to each mark and take those stops again; check that no files were mixed up.",
    ),
    "stop-order": NoteCode(
        "The light does not follow the order of the stop labels.",
        "Check the stop column of shots.csv against the ring.",
    ),
    "ring-off": NoteCode(
        "The light says that the ring stood clearly away from its mark.",
        "Come to the mark from the wide side and take that stop again.",
    ),
    "light-drift": NoteCode(
        "The lamp changed during the sweep.",
        "Warm the lamp up for 20 to 30 minutes, and visit the first stop once more at the end.",
    ),
    "flicker": NoteCode(
        "The light ripples from frame to frame or over the rows of a frame.",
        "Use a steady lamp, or whole periods of the ripple as exposure, and set need.flicker_hz.",
    ),
    "vibration": NoteCode(
        "The image moves between frames of one stop.",
        "Hold the camera and the parts firmly, take the hand off the ring, and take the stop again.",
    ),
    "target-moved": NoteCode(
        "A target stands elsewhere than at the other stops.", "Fix the target and take the sweep again from that stop."
    ),
    "focus-moved": NoteCode("The focus changed during the sweep.", "Lock the focus ring and take the sweep again."),
    "edge-angle": NoteCode(
        "The edge is not tilted by 2 to 12 degrees from an axis.",
        "Turn the target by some 5 degrees, or move the region.",
    ),
    "edge-not-straight": NoteCode(
        "The edge is bent, ragged or dirty.",
        "Clean or replace the target, or move the region to a clean part of the edge.",
    ),
    "edge-not-found": NoteCode(
        "The region does not hold one dark/light edge with room on both sides.",
        "Move or enlarge the region so that one edge crosses it from side to side.",
    ),
    "pattern-not-found": NoteCode(
        "The region does not hold the star, bars or tri-bar target that the station file names.",
        "Check region, cycles, period and group in the station file.",
    ),
    "processed-image": NoteCode(
        "The camera sharpens or smooths its images.",
        "Turn sharpening, denoising and enhancement off in the camera and take the sweep again.",
    ),
    "response-not-linear": NoteCode(
        "The pixel values do not follow the light as camera.response says.",
        "Set the camera's gamma to 1, or state its true response in the station file.",
    ),
    "compressed-source": NoteCode(
        "Frames are JPEG files; the compression changes detail and noise.", "Record PNG or TIFF files."
    ),
    "bit-depth": NoteCode(
        "The pixel values do not use the bits that the station file or the file format says.",
        "State camera.bit_depth as the camera delivers it.",
    ),
    "beyond-nyquist": NoteCode(
        "The feature is finer than two pixels per period.", "Use a larger magnification or smaller pixels."
    ),
    "model-misfit": NoteCode(
        "The lens model does not describe the readings within their uncertainty.",
        "Trust the readings more than the model; look for tilt, dirt, movement or processing at the places named.",
    ),
    "optimum-outside": NoteCode(
        "The best stop is at the end of the sweep.", "Sweep further stops beyond that end, where the ring has them."
    ),
    "no-reading": NoteCode(
        "There is no sound reading to judge by.", "Take the stop again so that every target gives a sound reading."
    ),
    "exposure": NoteCode(
        "The exposure or gain that this stop needs exceeds the limits.",
        "More light, a longer allowed exposure, or more allowed gain.",
    ),
    "noise": NoteCode(
        "The light tone is noisier than need.min_snr_db allows.", "More light or exposure and less gain."
    ),
    "contrast": NoteCode(
        "The feature's contrast falls short of the need at the worst target.",
        "See the shortfalls for what would cure it.",
    ),
    "unproven": NoteCode(
        "The contrast may meet the need, but not with the wanted confidence.", "Take more frames at that stop."
    ),
    "ripple-not-averaged": NoteCode(
        "An exposure is shorter than one period of the light's ripple, so brightness changes from frame to frame.",
        "Use a steady lamp, or less light so that the exposure reaches a whole period.",
    ),
    "gain-spent": NoteCode(
        "Gain has to make up for exposure, or the wanted level gives way.", "More light, or a longer allowed exposure."
    ),
}
