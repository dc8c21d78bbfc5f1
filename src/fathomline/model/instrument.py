"""From the fine grid to pixels: line-spread function and pixel integration as one operator.

The recorded flux of pixel i is the mean over the pixel of LSF ⊗ T, with T = exp(−τ). Both steps
are one integral with the kernel K_i, the line-spread function integrated over the pixel,

    F_i = ∫ K_i(v) T(v) dv,
    K_i(v) = [Φ((v_i⁺ − v)/σ) − Φ((v_i⁻ − v)/σ)] / (v_i⁺ − v_i⁻),

where Φ is the normal distribution, v_i± are the edges of the pixel and v = c ln(λ/λ_ref). For a
Gaussian line-spread function this is exact. The integral is a sum over a uniform fine grid of
spacing h. For smooth integrands the trapezoidal rule converges faster than any power of h
(Trefethen & Weideman 2014, SIAM Review 56, 385): its error is the Fourier transform of K T at
2π/h. A line of Doppler parameter b smoothed by σ has Gaussian width s with 1/s² = 1/σ² + 2/b²,
so the error falls as exp(−2π² s²/h²). Saturated lines have sharper flanks: the flux of a line of
central depth τ0 falls within about b/√ln τ0, which replaces b above where it is smaller.
`fine_spacing` is that rule. Over b from 0.5 to 4 km/s, τ0 from 0.5 to 1e5 and σ from 0.8 to
3 km/s the worst shift of a line at a fraction of 0.9 is 0.1 m/s; at 0.8 it is below 0.02 m/s, that
is 0.001 ppm for an Fe II line against a Mg II line. A test repeats the scan.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.special import ndtr

from fathomline.constants import C_KMS

__all__ = [
    "SAMPLING_FRACTION",
    "InstrumentOperator",
    "fine_spacing",
    "fine_velocity_grid",
    "log_velocity",
]

Array = NDArray[np.float64]

SAMPLING_FRACTION = 0.8
"""Fine-grid spacing over the effective width s; exp(−2π²/0.8²) = 4e-14 for a weak line."""

_REACH = 6.0  # of the kernel in σ; the tails beyond hold 2e-9 of it
_INV_SQRT_2PI = 1.0 / math.sqrt(2.0 * math.pi)


def fine_spacing(b: float, sigma: float, peak_depth: float = 1.0) -> float:
    """Spacing of the fine grid, km/s.

    Parameters
    ----------
    b : float
        Smallest Doppler parameter, km/s.
    sigma : float
        Standard deviation of the line-spread function, km/s.
    peak_depth : float
        Largest central optical depth.

    """
    flank = b / max(1.0, math.sqrt(math.log(max(peak_depth, 1.0))))
    width = 1.0 / math.sqrt(1.0 / sigma**2 + 2.0 / flank**2)
    return SAMPLING_FRACTION * width


def fine_velocity_grid(low: float, high: float, sigma: float, spacing: float) -> Array:
    """Uniform grid, km/s, over [low, high] plus the reach of the line-spread function."""
    start = low - _REACH * sigma - spacing
    count = math.ceil((high + _REACH * sigma + spacing - start) / spacing) + 1
    grid: Array = start + spacing * np.arange(count, dtype=np.float64)
    return grid


class InstrumentOperator:
    """Sparse operator from the fine grid to pixels, and its derivative to the LSF width.

    Parameters
    ----------
    edges_low, edges_high : array (n_pixels,)
        Lower and upper edge of each pixel, km/s.
    grid : array (n_fine,)
        Uniform fine grid, km/s, wide enough for the largest `sigma` that will be asked for.

    """

    def __init__(self, edges_low: Array, edges_high: Array, grid: Array) -> None:
        self._low, self._high, self._grid = edges_low, edges_high, grid
        self._spacing = float(grid[1] - grid[0])

    def _band(
        self, below: float, above: float
    ) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.intp]]:
        """Row pointers, column indices and rows of the entries within reach of each pixel."""
        first = np.searchsorted(self._grid, self._low - below)
        last = np.searchsorted(self._grid, self._high + above)
        counts = last - first
        pointers = np.concatenate([[0], np.cumsum(counts)])
        indices = np.arange(pointers[-1]) - np.repeat(pointers[:-1] - first, counts)
        return pointers, indices, np.repeat(np.arange(self._low.size), counts)

    def matrix(self, sigma: float | Array) -> csr_array:
        """Operator (n_pixels, n_fine) for a Gaussian line-spread function.

        `sigma` is its standard deviation, km/s: one for all pixels or one for each.
        """
        return self.matrix_with_derivative(sigma)[0]

    def matrix_with_derivative(self, sigma: float | Array) -> tuple[csr_array, csr_array]:
        """Operator and its derivative to `sigma`, per km/s."""
        reach = _REACH * float(np.max(sigma))
        pointers, indices, row = self._band(reach, reach)
        width = np.broadcast_to(sigma, self._low.shape)[row]
        v = self._grid[indices]
        high = (self._high[row] - v) / width
        low = (self._low[row] - v) / width
        weight = self._spacing / (self._high - self._low)[row]
        shape = (self._low.size, self._grid.size)
        operator = csr_array((weight * (ndtr(high) - ndtr(low)), indices, pointers), shape=shape)
        slope = low * np.exp(-0.5 * low**2) - high * np.exp(-0.5 * high**2)
        data = weight * slope * (_INV_SQRT_2PI / width)
        return operator, csr_array((data, indices, pointers), shape=shape)

    def tabulated(
        self, cumulative: Callable[[Array, NDArray[np.intp]], Array], below: float, above: float
    ) -> csr_array:
        """Operator for any line-spread function, from its integral.

        Parameters
        ----------
        cumulative : callable
            (v, pixel) → ∫ of the line-spread function of that pixel up to v, km/s, where v is the
            recorded minus the true velocity; 0 below, 1 above.
        below, above : float
            How far light is spread to larger and to smaller recorded velocities, km/s.

        """
        pointers, indices, row = self._band(below, above)
        v = self._grid[indices]
        weight = self._spacing / (self._high - self._low)[row]
        data = weight * (cumulative(self._high[row] - v, row) - cumulative(self._low[row] - v, row))
        return csr_array((data, indices, pointers), shape=(self._low.size, self._grid.size))


def log_velocity(wavelength: Array, reference: float) -> Array:
    """V = c ln(λ/λ_ref), km/s: the uniform coordinate of the fine grid."""
    velocity: Array = C_KMS * np.log(wavelength / reference)
    return velocity
