"""Rules by which people choose a stop, on the same frames (common practice, no source)."""

import math
from collections.abc import Sequence

import cv2
import numpy as np

from sweep.cameras.simulated import RenderedSweep, TrueStop, full_scale_dn, transfer_along
from tests.trials.effects import Case

BLUR_CIRCLE_PX = 1.0
SEEN_MODULATION = 0.2
ROWS_A_BAR = 5
PERIODS_PX = 2.05 * 2 ** (np.arange(0, 30) / 6)
EYES = 20

RULES = {
    "f/5.6 always": "the usable stop nearest to f/5.6",
    "two stops down": "the usable stop nearest to two stops from the widest",
    "variance of the Laplacian": "highest over the whole first frame of a stop",
    "variance of the Laplacian, worst target": "highest at the target where it is lowest",
    "depth-of-field formula": "the widest stop that blurs no target beyond a circle of 1 px, else the smallest",
    "chart by eye": "the finest bars told apart (modulation 0.2, one raw frame) at the target with the coarsest",
}


def chosen_by_rules(
    case: Case, truth: Sequence[TrueStop], sweep: RenderedSweep, usable: Sequence[bool], rng: np.random.Generator
) -> dict[str, float]:
    """The stop that each rule takes among the usable ones."""
    stops = case.stated.lens.stops
    places = [k for k, yes in enumerate(usable) if yes]

    def nearest(wanted: float) -> float:
        return min((stops[k] for k in places), key=lambda stop: abs(math.log(stop / wanted)))

    first = {shot.stop: sweep.read(shot) for shot in reversed(sweep.shots)}
    sharp = [_laplacians(case, first[stops[k]]) for k in places]
    fits = [stops[k] for k in places if _blur_circle_px(case, stops[k]) <= BLUR_CIRCLE_PX]
    eye = [_finest_by_eye(case, truth, k, rng) for k in places]
    answers = (
        nearest(5.6),
        nearest(2 * stops[0]),
        stops[places[int(np.argmax([whole for whole, _ in sharp]))]],
        stops[places[int(np.argmax([worst for _, worst in sharp]))]],
        fits[0] if fits else stops[places[-1]],
        stops[places[int(np.argmin(eye))]],
    )
    return dict(zip(RULES, answers, strict=True))


def _laplacians(case: Case, frame: np.ndarray) -> tuple[float, float]:
    """Variance of the Laplacian over a frame, and over the target where it is lowest."""
    grey = frame.astype(np.float32)
    edges = cv2.Laplacian(grey, cv2.CV_32F)
    targets = []
    for target in case.stated.targets:
        parts = [edges[y : y + h, x : x + w].ravel() for x, y, w, h in (p.region for p in target.patches)]
        targets.append(float(np.concatenate(parts).var()))
    return float(edges.var()), min(targets)


def _blur_circle_px(case: Case, stop: float) -> float:
    """The largest geometric blur circle over the targets: pupil x |depth| / distance, in pixels."""
    lens, pitch_um = case.stated.lens, case.stated.camera.pixel_pitch_um
    magnification = pitch_um / case.stated.scene.object_um_per_px
    distance_mm = lens.focal_length_mm * (1 + 1 / magnification)
    pupil_mm = lens.focal_length_mm / stop
    circles = [pupil_mm * abs(t.depth_mm) / (distance_mm + t.depth_mm) for t in case.stated.targets]
    return max(circles) * magnification * 1000 / pitch_um


def _finest_by_eye(case: Case, truth: Sequence[TrueStop], place: int, rng: np.random.Generator) -> float:
    """Period of the finest bars told apart at the worst target, with all coarser ones, in one raw frame."""
    sim = case.at(place)
    v = np.concatenate([np.zeros(1), np.geomspace(0.02, 1.0, 200)])
    worst = 0.0
    electrons = 0.65 * (full_scale_dn(case.real) - case.real.camera.black_level_dn) * sim.electrons_per_dn
    for target, prints in zip(case.real.targets, sim.prints, strict=True):
        sharp = [k for k, patch in enumerate(target.patches) if patch.kind != "flat"]
        if not sharp:
            continue
        direction = 0.0 if target.patches[sharp[0]].region[3] > target.patches[sharp[0]].region[2] else 90.0
        curve = transfer_along(case.real, sim, truth[place].true_f_number, target.depth_mm, v, direction)[0].real
        print_ = prints[sharp[0]]
        finest = 2 * PERIODS_PX[-1]
        for period in PERIODS_PX[::-1]:
            if not _told_apart(period, v, curve, print_.dark / print_.light, electrons, sim.read_noise_e, rng):
                break
            finest = float(period)
        worst = max(worst, finest * sim.lens.scale(target.depth_mm))
    return worst


def _told_apart(
    period: float,
    v: np.ndarray,
    curve: np.ndarray,
    dark: float,
    electrons: float,
    read_e: float,
    rng: np.random.Generator,
) -> bool:
    """Whether the pixels over two periods of bars show the modulation, in the middle of random places on the pixels."""
    pixels = np.arange(math.ceil(2 * period))
    shown = []
    for phase in rng.uniform(0, 1, EYES):
        wave = np.full(pixels.size, (1 + dark) / 2)
        for order, sign in ((1, 1), (3, -1), (5, 1)):
            transfer = float(np.interp(order / period, v, curve)) if order / period <= 1 else 0.0
            amplitude = sign * (1 - dark) * 2 / (np.pi * order) * transfer
            wave += amplitude * np.cos(2 * np.pi * order * (pixels / period + phase))
        noise = np.sqrt(electrons * np.maximum(wave, 0) + read_e**2) / electrons / math.sqrt(ROWS_A_BAR)
        line = wave + noise * rng.standard_normal(pixels.size)
        shown.append((line.max() - line.min()) / (line.max() + line.min()))
    return float(np.median(shown)) >= SEEN_MODULATION
