"""Diffraction, defocus and spherical aberration of a circular pupil, by exact quadrature.

Wavefront coefficients are in waves at the pupil's edge: W(rho) = W020 rho^2 + W040 rho^4 + W060 rho^6, rho from 0 to 1.
The frequency s of a transfer function is a fraction of the diffraction cut-off 1 / (wavelength x working f-number).
"""

from collections.abc import Iterator
from functools import lru_cache
from typing import Literal, overload

import numpy as np
from numpy.polynomial import Chebyshev, Polynomial
from numpy.typing import ArrayLike, NDArray
from scipy.special import roots_legendre

Floats = NDArray[np.float64]
OtfAndSlopes = tuple[Floats, Floats, Floats, Floats, Floats]


def cutoff_cy_mm(working_f_number: ArrayLike, wavelength_nm: ArrayLike) -> Floats:
    """Diffraction cut-off in the image plane, 1 / (wavelength x N_w), cycles/mm.

    Source: Goodman, Introduction to Fourier Optics, incoherent imaging; circular pupil.
    """
    return 1e6 / (np.asarray(working_f_number, dtype=np.float64) * np.asarray(wavelength_nm, dtype=np.float64))


@overload
def otf(
    s: ArrayLike, w020: ArrayLike, w040: ArrayLike, w060: ArrayLike = 0.0, *, derivatives: Literal[False] = False
) -> Floats: ...


@overload
def otf(
    s: ArrayLike, w020: ArrayLike, w040: ArrayLike, w060: ArrayLike = 0.0, *, derivatives: Literal[True]
) -> OtfAndSlopes: ...


def otf(
    s: ArrayLike, w020: ArrayLike, w040: ArrayLike, w060: ArrayLike = 0.0, *, derivatives: bool = False
) -> Floats | OtfAndSlopes:
    """OTF of a circular pupil with defocus and spherical aberration, with its sign.

    s: fraction of the cut-off, >= 0 (the OTF is 0 from 1 on); w020, w040, w060: waves; all broadcast.
    Returns the OTF, real because the pupil is even; with `derivatives` a tuple of the OTF and its
    derivatives with respect to w020, w040, w060 and s.

    With two pupils shifted by +-s, a = x^2 + y^2 + s^2 and b = 2 s x, the wavefront difference is
    dW = 2 b (w020 + 2 a w040 + (3 a^2 + b^2) w060), and over a quarter of the overlap
    OTF = (4 / pi) int_0^(1-s) dx int_0^sqrt(1-(x+s)^2) dy cos(2 pi dW).
    x + s = cos u, y = t sin u make the integrand smooth and even in u and t, so that half of a
    Gauss-Legendre rule converges fast. Points of like |dW| share a rule. The error is below 1e-9
    (1e-7 in the derivatives) up to 10 waves; the time grows in proportion to |W| beyond.
    Source: Hopkins, Proc. R. Soc. Lond. A 231 (1955) 91-103; Goodman, Introduction to Fourier Optics.
    """
    arrays = np.broadcast_arrays(*(np.asarray(v, dtype=np.float64) for v in (s, w020, w040, w060)))
    shape = arrays[0].shape
    points = np.stack([a.ravel() for a in arrays])
    points[0] = np.minimum(np.abs(points[0]), 1.0)
    nodes_u, nodes_t = _node_counts(*points)
    out = np.empty((5 if derivatives else 1, points.shape[1]))
    for group in _groups(nodes_u, nodes_t):
        n = int(nodes_u[group].max())
        rules = (_half_rule(n), _half_rule(int(nodes_t[group].max())))
        size = max(1, _BLOCK // n)
        for start in range(0, group.size, size):
            block = group[start : start + size]
            out[:, block] = _quadrature(points[:, block], *rules, derivatives)
    rows = [row.reshape(shape) for row in out]
    return (rows[0], rows[1], rows[2], rows[3], rows[4]) if derivatives else rows[0]


_BLOCK = 8192  # numbers a block: its dozen arrays stay in the second-level cache
_WORTH_A_GROUP = 10_000  # cosines; fewer are computed faster than another group of calls is made


def _groups(nodes_u: NDArray[np.int64], nodes_t: NDArray[np.int64]) -> Iterator[NDArray[np.intp]]:
    """Indices of the points that share a rule: those of one count of nodes, and few of lower counts."""
    counts = np.unique(nodes_u)[::-1]
    last = 0
    for k, n in enumerate(counts):
        spared = (counts[last] - n) * nodes_t[nodes_u == n].sum()
        if spared > _WORTH_A_GROUP:
            yield np.flatnonzero((nodes_u <= counts[last]) & (nodes_u > n))
            last = k
    if counts.size:
        yield np.flatnonzero(nodes_u <= counts[last])


def _quadrature(points: Floats, rule_u: tuple[Floats, Floats], rule_t: tuple[Floats, Floats], slopes: bool) -> Floats:
    """Rows OTF, and with `slopes` its four derivatives, of the columns (s, w020, w040, w060) of `points`."""
    s, w2, w4, w6 = points
    end = np.arccos(s)
    cos_u = np.cos(rule_u[0][:, None] * end)
    sin2_u = 1.0 - cos_u * cos_u
    weight = rule_u[1][:, None] * sin2_u * (end * (4.0 / np.pi))
    x = cos_u - s
    b = 2.0 * s * x
    a_axis = x * x + s * s
    w6_present = bool(w6.any())
    first = w2 + w6 * (b * b) if w6_present else w2
    twice_b = 2.0 * b
    cosines, sines, sines_a, sines_aa = (np.zeros_like(b) for _ in range(4))
    for t, wt in zip(*rule_t, strict=True):
        a = sin2_u * (t * t)
        a += a_axis
        if w6_present:
            wave = a * (3.0 * w6)
            wave += 2.0 * w4
            wave *= a
        else:
            wave = a * (2.0 * w4)
        wave += first
        wave *= twice_b
        cosine, sine = _cos_sin_of_waves(wave, slopes)
        cosine *= wt
        cosines += cosine
        if sine is not None:
            sine *= wt
            sines += sine
            sine *= a
            sines_a += sine
            sine *= a
            sines_aa += sine
    value: Floats = (weight * cosines).sum(axis=0)
    if not slopes:
        return value[None]
    down = -4.0 * np.pi * weight * b
    # At fixed u, d(dW)/ds = 4 (x - s) (w020 + 2 (a - b) w040 + 3 (a - b)^2 w060); the rest is the moving edge x = 0.
    turn = w2 * sines + 2.0 * w4 * (sines_a - b * sines) + 3.0 * w6 * (sines_aa - 2.0 * b * sines_a + b * b * sines)
    return np.stack(
        [
            value,
            (down * sines).sum(axis=0),
            2.0 * (down * sines_a).sum(axis=0),
            (down * (3.0 * sines_aa + b * b * sines)).sum(axis=0),
            8.0 * np.pi * (weight * (s - x) * turn).sum(axis=0) - 4.0 / np.pi * np.sqrt(1.0 - s * s),
        ]
    )


def _node_counts(s: Floats, w2: Floats, w4: Floats, w6: Floats) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Nodes along u (rounded up to a few levels) and along t that keep the error below 1e-9.

    The numbers were found by trial against rules four times as dense; the tests hold the error to the bound.
    """
    b = 2.0 * s * (1.0 - s)  # the largest
    along_u2, along_u4, along_u6 = 2.0 * b * np.abs(w2), 4.0 * b * (1.0 - b) * np.abs(w4), _w6_range(b) * np.abs(w6)
    steep = 9.0 * along_u2 + 42.0 * along_u4 + 125.0 * along_u6
    n_u = 6.0 + np.sqrt(steep) + 1.6 * along_u2 + 2.1 * (along_u4 + along_u6)
    x = (np.sqrt(s * s + 3.0) - 2.0 * s) / 3.0  # where the phase turns most along y
    along_t = 8.0 * s * x * (1.0 - (x + s) ** 2) * (np.abs(w4) + 3.3 * np.abs(w6))
    n_t = 2.8 + 3.0 * np.sqrt(along_t) + 1.6 * along_t
    flat = (w4 == 0.0) & (w6 == 0.0)
    return _round_up(n_u), np.where(flat, 2, np.ceil(n_t)).astype(np.int64)


def _w6_range(b: Floats) -> Floats:
    return np.asarray(1.0 - (1.0 - 2.0 * b) ** 3)


def _round_up(count: Floats) -> NDArray[np.int64]:
    """Up to the next even number below 16, to a step of 1/8 of its power of two above."""
    step = np.exp2(np.maximum(1.0, np.floor(np.log2(count)) - 3.0))
    return (np.ceil(count / step) * step).astype(np.int64)


@lru_cache(maxsize=256)
def _half_rule(n: int) -> tuple[Floats, Floats]:
    """Nodes and weights on [0, 1] that integrate even functions as a 2 n point Gauss-Legendre rule does."""
    node, weight = roots_legendre(2 * n)
    return node[n:], weight[n:]


def _even_series(function: np.ufunc, times_r: bool) -> list[float]:
    """Coefficients in z = r^2 of cos(pi r), or of sin(pi r) / r, for |r| <= 1/2, good to 1e-12."""

    def of_z(z: Floats) -> Floats:
        r = np.sqrt(z)
        return np.asarray(function(np.pi * r) / r if times_r else function(np.pi * r))

    return [float(c) for c in Chebyshev.interpolate(of_z, 6, domain=[0.0, 0.25]).convert(kind=Polynomial).coef]


_SIN_SERIES = _even_series(np.sin, times_r=True)
_COS_SERIES = _even_series(np.cos, times_r=False)


def _cos_sin_of_waves(wave: Floats, both: bool) -> tuple[Floats, Floats | None]:
    """cos(2 pi wave) and, where asked, sin(2 pi wave), to 1e-12.

    By whole waves off and half-angle series: three times as fast as NumPy's own cos and sin, which take
    the library's scalar route in double precision. This is where the fit spends its time.
    """
    r = wave - np.rint(wave)
    z = r * r
    half_sine = _horner(z, _SIN_SERIES)
    half_sine *= r
    sine = None
    if both:
        sine = _horner(z, _COS_SERIES)
        sine *= half_sine
        sine += sine
    cosine = half_sine
    cosine *= half_sine
    cosine *= -2.0
    cosine += 1.0
    return cosine, sine


def _horner(z: Floats, series: list[float]) -> Floats:
    value = z * series[-1]
    for c in series[-2:0:-1]:
        value += c
        value *= z
    value += series[0]
    return value
