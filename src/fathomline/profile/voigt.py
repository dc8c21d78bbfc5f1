"""The Voigt function and its first derivatives, from one Faddeeva value.

With z = u + i a and the Faddeeva function w(z) = exp(−z²) erfc(−i z) (DLMF 7.2.3, 7.19),

    H(a, u) = Re w(z),    L(a, u) = Im w(z).

w' = −2 z w + 2i/√π (DLMF 7.10.2) gives every first derivative from the same value:

    ∂H/∂u = Re w' = −2 (u H − a L),    ∂H/∂a = −Im w' = 2 (u L + a H) − 2/√π.

Metal lines live close to the real axis (a ≲ 0.01). There w is summed as a Taylor series about the
nearest node of a fixed grid on the real axis,

    w(z) = Σ_n c_n(u_0) (z − u_0)^n,    (n+2)(n+1) c_{n+2} = −2 u_0 (n+1) c_{n+1} − 2 (n+1) c_n,

the recurrence being that of the derivatives (DLMF 7.10.1). With nodes 1/64 apart and a ≤ 0.01 the
distance |z − u_0| is below 0.0127, and the seven terms kept leave less than 1e-14. Elsewhere the
value is scipy's `wofz` (S. G. Johnson's Faddeeva package, relative error below 1e-13 for a ≥ 0).
Far from the centre of a line the asymptotic series in 1/u² is enough (`voigt_wing`).
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import wofz

__all__ = ["CORE", "SERIES_A", "faddeeva", "voigt", "voigt_core", "voigt_wing"]

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

SERIES_A = 0.01
"""Largest a of the series about the real axis."""

CORE = 8.0
"""Distance in Doppler widths beyond which `voigt_wing` may replace the full function."""

_NODES_PER_UNIT = 64
_LAST_NODE = 12
_ORDER = 6
_SQRT_PI = math.sqrt(math.pi)


@cache
def _series() -> tuple[ComplexArray, ...]:
    """Taylor coefficients c_n at all nodes from −12 to 12, one array for each n."""
    u = np.arange(-_LAST_NODE * _NODES_PER_UNIT, _LAST_NODE * _NODES_PER_UNIT + 1) / _NODES_PER_UNIT
    c = [wofz(u + 0j)]
    c.append(-2.0 * u * c[0] + 2j / _SQRT_PI)
    for n in range(_ORDER - 1):
        c.append(-2.0 * (u * c[n + 1] + c[n]) / (n + 2))
    return tuple(c)


def faddeeva(a: Array, u: Array) -> ComplexArray:
    """w(u + i a) with a small and |u| ≤ 12: the series of the module.

    Parameters
    ----------
    a, u : array, of one shape
        0 ≤ a ≤ `SERIES_A`, −12 ≤ u ≤ 12.

    Returns
    -------
    complex array of the shape of `u`

    """
    coefficients = _series()
    scaled = u * _NODES_PER_UNIT
    node = np.rint(scaled)
    scaled -= node
    scaled *= 1.0 / _NODES_PER_UNIT
    index = node.astype(np.intp)
    index += _LAST_NODE * _NODES_PER_UNIT
    z = scaled + 1j * a
    value: ComplexArray = coefficients[_ORDER].take(index)
    for n in range(_ORDER - 1, -1, -1):
        value *= z
        value += coefficients[n].take(index)
    return value


def _general(a: Array, u: Array) -> ComplexArray:
    """w(u + i a) anywhere in the half plane a ≥ 0."""
    far = (np.abs(u) > _LAST_NODE) | (a > SERIES_A)
    if not far.any():
        return faddeeva(a, u)
    value = np.empty(u.shape, dtype=np.complex128)
    value[far] = wofz(u[far] + 1j * a[far])
    value[~far] = faddeeva(a[~far], u[~far])
    return value


def voigt(a: ArrayLike, u: ArrayLike) -> Array:
    """Voigt function H(a, u), dimensionless, broadcast over `a` ≥ 0 and `u`."""
    damping, distance = np.broadcast_arrays(
        np.asarray(a, dtype=np.float64), np.asarray(u, dtype=np.float64)
    )
    return np.ascontiguousarray(_general(damping, distance).real)


def voigt_core(a: Array, u: Array, *, derivatives: bool) -> Array:
    """H and its derivatives.

    Parameters
    ----------
    a, u : array (n,)
        Damping parameters, ≥ 0, and distances from the line centres in Doppler widths.
    derivatives : bool
        Whether more than H is wanted.

    Returns
    -------
    array (4, n), or (1, n) without derivatives
        H, ∂H/∂u, u ∂H/∂u and ∂H/∂a.

    """
    w = _general(a, u)
    out = np.empty((4 if derivatives else 1, u.size))
    out[0] = w.real
    if derivatives:
        w *= u + 1j * a
        w *= -2.0
        out[1] = w.real
        np.multiply(out[1], u, out=out[2])
        np.subtract(-2.0 / _SQRT_PI, w.imag, out=out[3])
    return out


def voigt_wing(a: Array, u: Array, *, derivatives: bool) -> Array:
    """The same far from the centre, |u| ≥ 8 and a ≤ 0.01, by the asymptotic series.

    H = a/(√π u²) (1 + (3/2)/u² + (15/4)/u⁴ + (105/8)/u⁶), DLMF 7.12.1 with the Gaussian part left
    out (exp(−64) = 2e-28); the terms dropped are below 4e-6 of H, that is 1e-9 of the
    value at the centre. Parameters and returns as for `voigt_core`.
    """
    out = np.empty((4 if derivatives else 1, u.size))
    t = 1.0 / (u * u)
    amplitude = a / _SQRT_PI
    np.multiply(t, 1.0 + t * (1.5 + t * (3.75 + t * 13.125)), out=out[0])
    if derivatives:
        out[3] = out[0] / _SQRT_PI
        np.multiply(t, -2.0 - t * (6.0 + t * (22.5 + t * 105.0)), out=out[2])
        out[2] *= amplitude
        np.divide(out[2], u, out=out[1])
    out[0] *= amplitude
    return out
