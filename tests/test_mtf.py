"""Figures of a transfer curve. Half-modulation of closed forms is held to its table in test_references.py."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from sweep.measure.mtf import Transfer

V = np.linspace(0.0, 1.0, 201)


def straight(start=1.0, end=0.0, u=0.01):
    """A curve that falls straight from 0 to 1 cycle per pixel."""
    return Transfer(V, start + (end - start) * V, np.full(V.size, u))


def test_value_between_and_at_the_ends():
    curve = straight()
    assert_allclose(curve.at(0.1234), (0.8766, 0.01), rtol=1e-12)
    assert_allclose(curve.at(0.0), (1.0, 0.01))
    assert_allclose(curve.at(1.0), (0.0, 0.01), atol=1e-15)


@pytest.mark.parametrize("v", [-0.01, 1.01])
def test_nothing_is_said_outside_of_the_curve(v):
    assert straight().at(v) is None


def test_first_fall_of_a_straight_line_and_its_uncertainty():
    # v = (1 - level) / slope; u(v) = u / slope (GUM, 5.1.2)
    found = straight(1.0, -1.0).first_fall_to(0.25)
    assert_allclose(found, (0.375, 0.005), rtol=1e-9)


def test_the_first_fall_counts_and_not_a_later_one():
    # A defocused transfer comes back beyond its zeros (spurious resolution).
    curve = Transfer(V, np.abs(np.cos(2.5 * np.pi * V)), np.zeros(V.size))
    assert_allclose(curve.first_fall_to(0.5)[0], np.arccos(0.5) / (2.5 * np.pi), rtol=1e-3)


@pytest.mark.parametrize("curve", [straight(1.0, 0.6), straight(0.4, 0.0)])
def test_a_curve_that_does_not_fall_through_the_level_has_no_such_frequency(curve):
    assert curve.first_fall_to(0.5) is None


def test_where_the_curve_is_level_the_uncertainty_is_a_step_of_it():
    bumpy = np.ones(V.size)
    bumpy[100] = 0.49
    frequency, u = Transfer(V, bumpy, np.zeros(V.size)).first_fall_to(0.5)
    assert 0.49 < frequency < 0.5
    assert_allclose(u, V[1])
