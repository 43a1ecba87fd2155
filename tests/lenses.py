"""Lenses of known aberrations, and the profiles that edges behind them would give, for the tests of the fit.

The profiles come from the simulated lens, a two-dimensional pupil transform that shares no formula with the fit.
"""

from dataclasses import replace
from functools import lru_cache

import numpy as np
from choosing import a_station

from sweep.cameras.simulated_lens import SimulatedLens
from sweep.cameras.simulated_print import Optics, edge_spread
from sweep.fit import EdgeData, LensFit, Problem, StopLight, View, fit_lens
from sweep.lens import Bench
from sweep.measure.mtf import Transfer

STOPS = (1.4, 2.0, 2.8, 4.0, 5.6, 8.0)
DEPTHS = (-8.0, 0.0, 10.0)
PITCH_UM, OBJECT_UM, WAVELENGTH_NM, BANDWIDTH_NM = 3.45, 58.0, 530.0, 30.0
BLUR_PX = 0.3
DARK, LIGHT = 200.0, 2000.0
V_CY_PX = np.linspace(0.0, 1.0, 201)
TRUTH = SimulatedLens(
    16.0,
    PITCH_UM / OBJECT_UM,
    STOPS[0],
    WAVELENGTH_NM,
    bandwidth_nm=BANDWIDTH_NM,
    w040_waves=1.0,
    w060_waves=-0.1,
    focus_offset_mm=1.5,
)


def the_station(depths=DEPTHS, stops=STOPS, **need):
    """The vial cap lane in light of the bandwidth of TRUTH."""
    plain = a_station(stops=stops, depths=depths, **need)
    return plain.model_copy(update={"scene": plain.scene.model_copy(update={"bandwidth_nm": BANDWIDTH_NM})})


def seen_through(lens, stop, depth_mm, blur_px=BLUR_PX):
    """The simulated lens, pixels and charge at one stop and depth."""
    return Optics(lens, PITCH_UM, blur_px, stop, depth_mm)


def true_contrast(lens, stop, depth_mm, v_cy_px, direction_deg=5.0):
    """Signed transfer at one frequency."""
    return float(seen_through(lens, stop, depth_mm).transfer(np.array([v_cy_px]), direction_deg)[0, 0].real)


@lru_cache(maxsize=512)
def _profile(lens, stop, depth_mm, direction_deg):
    optics = seen_through(lens, stop, depth_mm)
    distance = np.arange(-20.0, 20.0, 0.25) + 0.125
    share = np.interp(distance, *edge_spread(optics, direction_deg))
    return distance, share, optics.transfer(V_CY_PX, direction_deg)[0].real


def an_edge(lens, stop, depth_mm, view, *, relative_u=1e-3, rng=None):
    """One edge's profile, sampled every quarter pixel; `relative_u` of the step, as noise too where `rng` is given."""
    distance, share, curve = _profile(lens, stop, depth_mm, view.direction_deg)
    u = np.full(distance.size, relative_u * (LIGHT - DARK))
    value = DARK + (LIGHT - DARK) * share
    if rng is not None:
        value = value + u * rng.standard_normal(value.size)
    reading = Transfer(V_CY_PX, curve, np.full(V_CY_PX.size, 0.005))
    none = np.zeros(distance.size)
    return EdgeData(view, distance, none, value, u, distance * value, DARK / LIGHT, 1e-3, reading)


def a_problem(lens=TRUTH, *, depths=DEPTHS, stops=STOPS, directions=(5.0,), ln_u=0.003, later=None, **noise):
    """All edges of one sweep; `later`: (stop index, lens) that takes the lens's place from that stop on."""
    edges = [
        an_edge(later[1] if later and k >= later[0] else lens, stop, depth, View(k, t, direction), **noise)
        for k, stop in enumerate(stops)
        for t, depth in enumerate(depths)
        for direction in directions
    ]
    light = StopLight(np.array(stops), np.full(len(stops), ln_u))
    return Problem.of(Bench.of(the_station(depths, stops)), np.array(depths), light, edges, ())


@lru_cache(maxsize=1)
def the_fit() -> LensFit:
    """The fit to noise-free profiles of TRUTH."""
    return fit_lens(a_problem())


def a_known_fit(deviation=1e-4, depths=DEPTHS, stops=STOPS, **values) -> LensFit:
    """A lens of stated parameters, as if fitted; those not stated are 0."""
    light = StopLight(np.array(stops), np.full(len(stops), 1e-3))
    p = Problem.of(Bench.of(the_station(depths, stops)), np.array(depths), light, (), ())
    theta = np.array([values.get(name, 0.0) for name in p.names])
    covariance = np.diag(np.full(theta.size, deviation**2))
    return LensFit(p.bench, p.depths_mm, p.light, p.names, theta, covariance, 1.0, np.zeros(0), ())


def in_one_wavelength(fit: LensFit) -> LensFit:
    """The same in light of one wavelength."""
    return replace(fit, bench=fit.bench.of_one_wavelength())
