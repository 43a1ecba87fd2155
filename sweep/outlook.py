"""Readings and lens model together: the best estimate of the contrast at every stop and place, with draws.

A reading is the model's value plus a discrepancy plus its own error. The discrepancy's size is estimated from the
readings themselves: where the model describes them it is nothing and the model decides; where not, the readings take
over by degrees. The draws (n, stops, places) come from the fit's covariance, linearised, and from what the discrepancy
leaves open.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from sweep.choose.evidence import Cause, Outlook, Place
from sweep.fit import Frequencies, LensFit, Optics, View, transfer, transfer_slopes
from sweep.lens import Pupil, lens_transfer, pixel_box
from sweep.measure.linear import Floats

DRAWS = 400
CURVE_POINTS = 49
CURVE_MARGIN = 1.19
MODEL_FLOOR = 0.0005
"""Contrast that the model's own simplifications may be off by (thin lens, round pupil; our trials)."""


@dataclass(frozen=True, slots=True)
class Discrepancy:
    """How far the model is off the readings beyond their uncertainty: `deviation` (stops,), and its chi-square."""

    deviation: Floats
    chi2: float
    readings: int


@dataclass(frozen=True, slots=True)
class Estimate:
    """The outlook for the choice, with what stands beside the readings: model contrast and its u, (stops, places)."""

    outlook: Outlook
    model: Floats | None
    model_u: Floats | None
    discrepancy: Discrepancy


def estimate(
    places: Sequence[Place],
    reading: Floats,
    reading_u: Floats,
    fit: LensFit | None,
    rng: np.random.Generator,
) -> Estimate:
    """Combine the readings' contrasts (stops, places; signed, NaN where there is none) with the model.

    `fit` None: the readings alone, a stop without one staying NaN.
    """
    if fit is None:
        draws = reading + reading_u * rng.standard_normal((DRAWS, *reading.shape))
        nothing = Discrepancy(np.zeros(len(reading)), 0.0, 0)
        return Estimate(Outlook(tuple(places), reading, draws), None, None, nothing)
    lens = FittedLens(fit)
    model, slopes = lens.at_stops(places, len(reading))
    steps = _parameter_draws(fit, rng)
    spread = np.einsum("np,pks->nks", steps, slopes)
    model_u = np.sqrt(np.einsum("pks,pq,qks->ks", slopes, fit.covariance, slopes) + MODEL_FLOOR**2)
    discrepancy = _discrepancy(reading - model, np.hypot(reading_u, 0.3 * model_u))
    tau2 = discrepancy.deviation[:, None] ** 2
    there = np.isfinite(reading)
    safe_u = np.where(there, reading_u, 1.0)
    weight = np.where(there, tau2 / np.maximum(tau2 + safe_u**2, 1e-12), 0.0)
    best = model + weight * np.where(there, reading - model, 0.0)
    left = np.sqrt(np.where(there, weight * safe_u**2, tau2))
    own = np.hypot(left, MODEL_FLOOR) * rng.standard_normal((DRAWS, *model.shape))
    draws = best + (1.0 - weight) * spread + own
    draws = _with_rivals(draws, fit, lens, places, model, rng)
    f_numbers = np.geomspace(
        fit.light.f_number.min() / CURVE_MARGIN, fit.light.f_number.max() * CURVE_MARGIN, CURVE_POINTS
    )
    curve, curve_slopes = lens.between(places, f_numbers)
    curve_draws = curve + np.einsum("np,pgs->ngs", steps, curve_slopes)
    outlook = Outlook(tuple(places), best, draws, f_numbers, curve, curve_draws)
    return Estimate(outlook, model, model_u, discrepancy)


def _parameter_draws(fit: LensFit, rng: np.random.Generator) -> Floats:
    """Steps from the fitted parameters, (n, parameters), normal with the fit's covariance."""
    values, vectors = np.linalg.eigh(fit.covariance)
    return np.asarray((rng.standard_normal((DRAWS, len(fit.theta))) * np.sqrt(np.maximum(values, 0.0))) @ vectors.T)


def _with_rivals(
    draws: Floats, fit: LensFit, lens: "FittedLens", places: Sequence[Place], model: Floats, rng: np.random.Generator
) -> Floats:
    """Let other solutions that fit nearly as well have their share of the draws."""
    shares = _shares(fit)
    pick = rng.choice(len(shares), size=len(draws), p=shares)
    out = draws.copy()
    for i, (_, theta) in enumerate(fit.rivals, start=1):
        other, _ = FittedLens(replace(fit, theta=theta)).at_stops(places, len(model))
        out[pick == i] += other - model
    return out


def _shares(fit: LensFit) -> Floats:
    """What the fit and its rivals count for, by their likelihood."""
    shares = np.array([1.0, *(np.exp(-0.5 * cost) for cost, _ in fit.rivals)])
    return np.asarray(shares / shares.sum())


def _discrepancy(off: Floats, u: Floats) -> Discrepancy:
    """The model's error beyond the readings' u, by moments, for each stop with the whole sweep behind it.

    DerSimonian and Laird's estimator (Controlled Clinical Trials 7, 177-188, 1986) less its own standard error, so that
    noise does not pass for misfit.
    """
    there = np.isfinite(off) & np.isfinite(u)
    n = int(there.sum())
    if n == 0:
        return Discrepancy(np.zeros(len(off)), 0.0, 0)
    z2 = (off / u) ** 2
    chi2 = float(np.mean(z2[there]))
    whole = _moment(off[there], u[there])
    deviation = np.zeros(len(off))
    for k in range(len(off)):
        near = there[k]
        count = int(near.sum())
        own = _moment(off[k][near], u[k][near]) if count else whole
        deviation[k] = np.sqrt((count * own + _BORROWED * whole) / (count + _BORROWED))
    return Discrepancy(deviation, chi2, n)


_BORROWED = 6
"""As many readings' worth of the whole sweep stand behind a stop's own estimate."""


def _moment(off: Floats, u: Floats) -> float:
    weight = 1.0 / u**4
    excess = float(np.sum(weight * (off**2 - u**2)) / np.sum(weight))
    error = float(np.sqrt(2.0 * np.sum(weight**2 * u**4)) / np.sum(weight))
    return max(excess - error, 0.0)


class FittedLens:
    """The fitted lens as the choice asks it: contrasts at a place with one thing changed, and with slopes.

    `deviation` (stops,): how far the model is off the readings, for the u where there is no reading.
    """

    def __init__(self, fit: LensFit, deviation: Floats | None = None) -> None:
        self.fit = fit
        self.deviation = np.zeros(len(fit.light.f_number)) if deviation is None else deviation

    def at_stops(self, places: Sequence[Place], stops: int) -> tuple[Floats, Floats]:
        """Signed contrast (stops, places) at the feature, and its slopes (parameters, stops, places)."""
        views = [View(k, p.target, p.direction_deg) for k in range(stops) for p in places]
        return self._evaluate(views, places, stops, None)

    def between(self, places: Sequence[Place], f_numbers: Floats) -> tuple[Floats, Floats]:
        """The same at f-numbers (g,) on the scale of the light."""
        views = [View(-1, p.target, p.direction_deg) for _ in f_numbers for p in places]
        return self._evaluate(views, places, len(f_numbers), np.repeat(np.log(f_numbers), len(places)))

    def _evaluate(
        self, views: Sequence[View], places: Sequence[Place], rows: int, ln_f_number: Floats | None
    ) -> tuple[Floats, Floats]:
        depth = np.tile([p.depth_mm for p in places], rows)
        v = np.tile([p.feature_cy_px for p in places], rows)[:, None]
        optics = Optics(self.fit, views, depth, ln_f_number)
        value, slopes = transfer_slopes(optics, Frequencies(views, v), self.fit.theta)
        shape = (rows, len(places))
        return value[:, 0].reshape(shape), slopes[:, :, 0].reshape(len(self.fit.theta), *shape)

    def contrast(
        self,
        stop_index: int,
        place: Place,
        *,
        without: Cause | None = None,
        refocus_mm: float = 0.0,
        pixel_scale: float = 1.0,
    ) -> float:
        """See `LensView.contrast`."""
        theta = self.fit.theta.copy()
        theta[0] += refocus_mm
        view = View(stop_index, place.target, place.direction_deg)
        optics = Optics(self.fit, [view], np.array([place.depth_mm]))
        v = np.array([[place.feature_cy_px]])
        pupil = optics.pupil(theta)
        camera = self._camera(place, pixel_scale)
        lens = float(lens_transfer(self.fit.bench, pupil, v)[0, 0])
        if without == "sampling":
            return lens
        if without == "aberration":
            lens = float(
                lens_transfer(self.fit.bench, replace(pupil, w040=0.0 * pupil.w040, w060=0.0 * pupil.w060), v)[0, 0]
            )
        elif without == "depth":
            lens = self._in_focus(pupil, v)
        elif without == "diffraction":
            nothing = 0.0 * pupil.w020
            perfect = Pupil(pupil.f_number, nothing, nothing, nothing, nothing)
            lens /= max(float(lens_transfer(self.fit.bench, perfect, v)[0, 0]), 1e-6)
        return lens * camera

    def over_frequency(self, stop_index: int, places: Sequence[Place], v_cy_px: Floats) -> Floats:
        """See `DepthView.over_frequency`."""
        views = [View(stop_index, p.target, p.direction_deg) for p in places]
        optics = Optics(self.fit, views, np.array([p.depth_mm for p in places]))
        return transfer(optics, Frequencies(views, np.tile(v_cy_px, (len(views), 1))), self.fit.theta)

    def at_feature(self, stop_index: int, places: Sequence[Place]) -> tuple[Floats, Floats]:
        """See `DepthView.at_feature`."""
        views = [View(stop_index, p.target, p.direction_deg) for p in places]
        value, slopes = (a[..., 0, :] for a in self._evaluate(views, places, 1, None))
        variance = np.einsum("ps,pq,qs->s", slopes, self.fit.covariance, slopes)
        variance += MODEL_FLOOR**2 + self.deviation[stop_index] ** 2
        between = np.array([p.target < 0 for p in places])
        variance += np.where(between, (slopes[0] * self._own_focus_mm()) ** 2, 0.0)
        shares = _shares(self.fit)
        for share, (_, theta) in zip(shares[1:], self.fit.rivals, strict=True):
            other, _ = FittedLens(replace(self.fit, theta=theta))._evaluate(views, places, 1, None)
            variance += share * (other[0] - value) ** 2
        return value, np.sqrt(variance)

    def _own_focus_mm(self) -> float:
        """How far targets were found off the common focus (rms): what lies elsewhere may be as far off, either way."""
        shifts = [self.fit.value(name)[0] for name in self.fit.names if name.startswith("shift ")]
        return float(np.sqrt(np.mean(np.square(shifts))))

    def best_depth_mm(self, stop_index: int, places: Sequence[Place]) -> float:
        """The depth (mm) that is sharpest at a stop, by the mean over the feature's frequencies of all places."""
        depths = np.array([p.depth_mm for p in places])
        reach = max(float(np.ptp(depths)), 1e-3 * self.fit.bench.focal_length_mm / self.fit.bench.magnification)
        trial = np.linspace(depths.min() - reach, depths.max() + reach, 241)
        v = np.full((len(trial), 1), np.mean([p.feature_cy_px for p in places]))
        optics = Optics(self.fit, [View(stop_index, -1, 0.0)] * len(trial), trial)
        sharp = transfer(optics, Frequencies([View(stop_index, -1, 0.0)] * len(trial), v), self.fit.theta)[:, 0]
        return float(trial[int(np.argmax(sharp))])

    def _camera(self, place: Place, pixel_scale: float) -> float:
        """Pixel box and sensor blur at the feature; a smaller pixel shrinks both."""
        v = np.array([place.feature_cy_px * pixel_scale])
        blur = np.exp(-2.0 * np.pi**2 * self.fit.theta[3] * v**2)
        return float((pixel_box(v, place.direction_deg) * blur)[0])

    def _in_focus(self, pupil: Pupil, v: Floats) -> float:
        """The best that any focus gives at this stop, lens errors as they are."""
        trial = np.linspace(-1.0, 1.0, 81) * (1.0 + 2.0 * abs(float(pupil.w040[0])) + 3.0 * abs(float(pupil.w060[0])))
        many = Pupil(
            *(np.repeat(c, len(trial)) for c in (pupil.f_number, pupil.w020, pupil.w040, pupil.w060, pupil.colour))
        )
        swept = lens_transfer(self.fit.bench, replace(many, w020=trial), np.repeat(v, len(trial), axis=0))
        return float(swept.max())


V_CY_PX = np.linspace(0.0, 1.0, 201)


def half_modulation(fit: LensFit, views: Sequence[View], depths_mm: Floats) -> list[tuple[float, float] | None]:
    """The model's half-modulation frequency (cycles/pixel) of each view, and u; None where it doesn't fall so far."""
    optics = Optics(fit, views, depths_mm)
    curves = transfer(optics, Frequencies(views, np.tile(V_CY_PX, (len(views), 1))), fit.theta)
    below = curves <= 0.5
    first = np.where(below.any(axis=1), below.argmax(axis=1), 1)
    row = np.arange(len(views))
    before, after = curves[row, first - 1], curves[row, first]
    step = V_CY_PX[1]
    v = V_CY_PX[first] - step * (0.5 - after) / np.where(before > after, before - after, 1.0)
    _, slopes = transfer_slopes(optics, Frequencies(views, v[:, None]), fit.theta)
    value_u = np.sqrt(np.einsum("pv,pq,qv->v", slopes[:, :, 0], fit.covariance, slopes[:, :, 0]))
    u = value_u * step / np.abs(before - after)
    return [(float(v[i]), float(u[i])) if below[i].any() else None for i in row]
