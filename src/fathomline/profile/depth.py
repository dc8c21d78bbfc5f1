"""Optical depth of one velocity component in one transition, with its derivatives.

For a component of Doppler parameter b and column density N, summed over the isotopic and
hyperfine lines j of the transition (wavelength λ_j, fraction φ_j of the oscillator strength f),

    τ(λ) = Σ_j A_j H(a_j, u_j),    A_j = K N f φ_j λ_j/b_j,    K = π e² / (m_e c √π),
    u_j = (c/b_j) (λ_j s/λ − 1),    a_j = Γ λ_j / (4π b_j),    s = 1 + z of the component,

which is the Voigt profile in frequency (for instance Mihalas 1978, Stellar Atmospheres, §9-2).
The rest wavelengths follow α: λ_j = 1e8/(ω_j + q x), so ∂ln λ_j/∂x = −λ_j q/1e8 =: d_j. With
k_j = c/b_j the derivatives are sums over four functions of each line,

                   H_j           ∂H_j/∂u    u ∂H_j/∂u     ∂H_j/∂a
    τ              A
    ∂τ/∂ln s                     A k        A
    ∂τ/∂x          A d           A d k      A d           A d a
    ∂τ/∂p          −A b'/b                  −A b'/b       −A a b'/b

for a parameter p of the width with b' = ∂b_j/∂p, so that one small matrix product forms them all.

Work is done where a line absorbs. Within 8 Doppler widths of the lines the four functions are
evaluated in full; in the wings by the asymptotic series. There one composite line stands for all
when their spread (variance σ² in Doppler widths) changes the wing by less than 1e-8 in τ: the
wing a τ0/(√π u²) of a spread line is larger by the factor 1 + 3σ²/u².
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import Transition
from fathomline.constants import C_KMS, DEPTH_CONSTANT
from fathomline.profile.voigt import CORE, SERIES_A, voigt_core, voigt_wing

__all__ = ["FineGrid", "TransitionLines", "WidthSlopes"]

Array = NDArray[np.float64]

# Γ [1/s] λ [Å] / (4π b [km/s]) without unit: 1e-10 m per Å, 1e3 m/s per km/s
_DAMPING = 1e-13 / (4.0 * math.pi)

_WING_TOLERANCE = 1e-8  # of the optical depth


@dataclass(frozen=True, slots=True)
class FineGrid:
    """A grid uniform in ln λ.

    Attributes
    ----------
    start, step : float
        First ln λ and spacing.
    inverse : array (n,)
        1/λ, Å⁻¹.

    """

    start: float
    step: float
    inverse: Array

    def span(self, low: float, high: float) -> tuple[int, int]:
        """Range of indices whose wavelengths lie in [low, high] Å, clipped to the grid."""
        first = math.ceil((math.log(low) - self.start) / self.step)
        last = math.floor((math.log(high) - self.start) / self.step) + 1
        size = self.inverse.size
        return min(max(first, 0), size), min(max(last, 0), size)


WidthSlopes = Array
"""∂b_j/∂p: array (n_width_parameters, n_lines)."""


class TransitionLines:
    """The lines of one transition, ready to be evaluated many times.

    Parameters
    ----------
    transition : Transition
        With its isotopic and hyperfine components, or as a composite.

    """

    __slots__ = ("_gamma", "_omega", "_q", "_share", "_strength", "masses", "name")

    def __init__(self, transition: Transition) -> None:
        components = transition.components
        self.name = transition.name
        self.masses: Array = np.array([c.mass for c in components])
        self._omega: Array = np.array([c.wavenumber for c in components])
        self._strength: Array = np.array([transition.f * c.fraction for c in components])
        self._share: Array = self._strength / self._strength.sum()
        self._gamma = transition.gamma or 0.0
        self._q = transition.q or 0.0

    def peak_depth(self, b: Array, column: float) -> float:
        """Central optical depth if all lines of the transition coincided (an upper bound)."""
        return float(DEPTH_CONSTANT * column * np.sum(self._strength * 1e8 / self._omega / b))

    def reach(self, b: float, column: float, depth: float) -> float:
        """Distance from the line centre, km/s, beyond which τ stays below `depth`.

        The larger of the Gaussian core and of the Lorentzian wing, τ ≈ τ0 a b²/(√π v²).
        """
        centre = self.peak_depth(np.full(self.masses.size, b), column)
        core = b * math.sqrt(max(math.log(max(centre / depth, 1.0)), 0.0))
        rest = 1e8 / float(self._omega.min())
        wing = math.sqrt(centre * self._gamma * _DAMPING * rest * b / (depth * math.sqrt(math.pi)))
        return max(core, wing)

    def depth(self, grid: FineGrid, s: float, b: Array, column: float, x: float) -> Array:
        """Optical depth τ (n,) on the whole grid.

        Parameters
        ----------
        grid : FineGrid
        s : float
            1 + z of the component.
        b : array (n_lines,)
            Doppler parameter of each line, km/s.
        column : float
            Column density N, cm⁻².
        x : float
            (α/α0)² − 1.

        """
        tau = np.zeros(grid.inverse.size)
        for part, values in self.parts(grid, s, b, column, x):
            tau[part] = values[0]
        return tau

    def parts(
        self,
        grid: FineGrid,
        s: float,
        b: Array,
        column: float,
        x: float,
        slopes: WidthSlopes | None = None,
    ) -> Iterator[tuple[slice, Array]]:
        """Optical depth, and with `slopes` its derivatives, on the parts of the grid.

        Yields
        ------
        slice
            Of the grid.
        array (1, n), or (3 + n_width_parameters, n) with `slopes`
            τ; s ∂τ/∂s (also the derivative to a shift of the wavelength scale); ∂τ/∂x; and ∂τ/∂p
            for each parameter p of the width.

        """
        rest = 1e8 / (self._omega + self._q * x)
        strength = DEPTH_CONSTANT * column * self._strength
        first, last = 0, grid.inverse.size
        if self._gamma * _DAMPING * rest.max() / b.min() <= SERIES_A:
            half = CORE * b.max() / C_KMS
            first, last = grid.span(rest.min() * s / (1.0 + half), rest.max() * s / (1.0 - half))
        if first < last:
            values = self._values(
                grid.inverse[first:last], s, b, x, rest, strength, slopes, core=True
            )
            yield slice(first, last), values
        wings = [w for w in (slice(0, first), slice(last, grid.inverse.size)) if w.stop > w.start]
        if wings and self._merges_in_wings(rest, b, strength):
            share = self._share
            rest, strength = np.array([share @ rest]), np.array([strength.sum()])
            b = np.array([share @ b])
            slopes = None if slopes is None else (slopes @ share)[:, None]
        for wing in wings:
            yield (
                wing,
                self._values(grid.inverse[wing], s, b, x, rest, strength, slopes, core=False),
            )

    def _merges_in_wings(self, rest: Array, b: Array, strength: Array) -> bool:
        mean = self._share @ rest
        spread = C_KMS / b.min() * (rest / mean - 1.0)
        factor = 3.0 * float(self._share @ spread**2) / CORE**4 / math.sqrt(math.pi)
        damped = strength.sum() * (mean / b.min()) ** 2 * self._gamma * _DAMPING
        return bool(factor * damped < _WING_TOLERANCE)

    def _values(
        self,
        inverse: Array,
        s: float,
        b: Array,
        x: float,
        rest: Array,
        strength: Array,
        slopes: WidthSlopes | None,
        *,
        core: bool,
    ) -> Array:
        k = C_KMS / b
        u = (k * rest * s)[:, None] * inverse
        u -= k[:, None]
        a = self._gamma * _DAMPING * rest / b
        amplitude = strength * rest / b
        functions = (voigt_core if core else voigt_wing)(a, u, derivatives=slopes is not None)
        if slopes is None:
            tau: Array = amplitude[None, :] @ functions[0]
            return tau
        coefficients = np.zeros((3 + slopes.shape[0], 4, b.size))
        coefficients[0, 0] = amplitude
        coefficients[1, 1] = amplitude * k
        coefficients[1, 2] = amplitude
        d = amplitude * (-self._q / 1e8) * rest
        coefficients[2] = d, d * k, d, d * a
        relative = -amplitude * slopes / b
        coefficients[3:, 0] = relative
        coefficients[3:, 2] = relative
        coefficients[3:, 3] = relative * a
        values: Array = coefficients.reshape(3 + slopes.shape[0], -1) @ functions.reshape(
            -1, u.shape[1]
        )
        return values
