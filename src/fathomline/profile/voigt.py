"""The Voigt function and its first derivatives, from one Faddeeva value.

With z = u + i a and the Faddeeva function w(z) = exp(−z²) erfc(−i z) (DLMF 7.2.3, 7.19),

    H(a, u) = Re w(z),    L(a, u) = Im w(z).

w' = −2 z w + 2i/√π (DLMF 7.10.2) gives every first derivative from the same value:

    ∂H/∂u = −2 (u H − a L),    ∂H/∂a = 2 (u L + a H) − 2/√π.

The value is scipy's `wofz` (S. G. Johnson's Faddeeva package, relative error below 1e-13 in the
half plane a ≥ 0); tests compare it with 40-digit arithmetic.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import wofz

__all__ = ["voigt", "voigt_with_derivatives"]

_TWO_OVER_SQRT_PI = 2.0 / math.sqrt(math.pi)


def voigt(a: ArrayLike, u: ArrayLike) -> NDArray[np.float64]:
    """Voigt function H(a, u), dimensionless, broadcast over `a` ≥ 0 and `u`."""
    value: NDArray[np.float64] = wofz(np.asarray(u) + 1j * np.asarray(a)).real
    return value


def voigt_with_derivatives(
    a: NDArray[np.float64] | float, u: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """H, ∂H/∂u and ∂H/∂a at (a, u).

    Parameters
    ----------
    a : float or array, broadcastable to `u`
        Damping parameter, ≥ 0.
    u : array
        Distance from the line centre in Doppler widths.

    Returns
    -------
    tuple of three arrays of the shape of `u`
    """
    w = wofz(u + 1j * a)
    h, ell = w.real, w.imag
    h_u = -2.0 * (u * h - a * ell)
    h_a = 2.0 * (u * ell + a * h) - _TWO_OVER_SQRT_PI
    return h, h_u, h_a
