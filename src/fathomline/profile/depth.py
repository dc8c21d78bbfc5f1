"""Optical depth of one velocity component in one transition, with its derivatives.

For a component of Doppler parameter b and column density N, summed over the isotopic and
hyperfine lines j of the transition (wavelength λ_j, fraction φ_j of the oscillator strength f),

    τ(λ) = Σ_j K N f φ_j (λ_j/b) H(a_j, u_j),    K = π e² / (m_e c √π),
    u_j = (c/b) (λ_j s/λ − 1),    a_j = Γ λ_j / (4π b),    s = 1 + z of the component,

which is the Voigt profile in frequency (for instance Mihalas 1978, Stellar Atmospheres, §9-2).
The rest wavelengths follow α: λ_j = 1e8/(ω_j + q x), so ∂λ_j/∂x = −λ_j² q/1e8.

Arrays have one row per line j and one column per point of the fine grid. The grid is given as
g = 1/λ, so a shift of the wavelength scale is a factor on g and costs nothing here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import Transition
from fathomline.constants import C_KMS, DEPTH_CONSTANT
from fathomline.profile.voigt import voigt, voigt_with_derivatives

__all__ = ["DepthDerivatives", "TransitionLines"]

Array = NDArray[np.float64]

# Γ [1/s] λ [Å] / (4π b [km/s]) without unit: 1e-10 m per Å, 1e3 m/s per km/s
_DAMPING = 1e-13 / (4.0 * math.pi)


@dataclass(frozen=True, slots=True)
class DepthDerivatives:
    """Derivatives of τ, each an array over the grid (the second is over lines and grid).

    Attributes
    ----------
    scale : array (n,)
        s ∂τ/∂s = ∂τ/∂ln(1+z): also the derivative to a shift of the wavelength scale.
    b : array (n_lines, n)
        ∂τ_j/∂b by line, per km/s; lines of different mass may differ in b.
    x : array (n,)
        ∂τ/∂x with x = (α/α0)² − 1.
    """

    scale: Array
    b: Array
    x: Array


class TransitionLines:
    """The lines of one transition, ready to be evaluated many times.

    Parameters
    ----------
    transition : Transition
        With its isotopic and hyperfine components, or as a composite.
    """

    __slots__ = ("_gamma", "_omega", "_q", "_strength", "masses", "name")

    def __init__(self, transition: Transition) -> None:
        components = transition.components
        self.name = transition.name
        self.masses: Array = np.array([c.mass for c in components])
        self._omega: Array = np.array([c.wavenumber for c in components])
        self._strength: Array = np.array([transition.f * c.fraction for c in components])
        self._gamma = transition.gamma or 0.0
        self._q = transition.q or 0.0

    def _geometry(self, g: Array, s: float, b: Array, x: float) -> tuple[Array, Array, Array]:
        rest = 1e8 / (self._omega + self._q * x)
        u = (C_KMS / b)[:, None] * ((rest * s)[:, None] * g - 1.0)
        a = self._gamma * _DAMPING * rest / b
        return rest, u, a

    def peak_depth(self, b: Array, column: float) -> float:
        """Central optical depth if all lines of the transition coincided (an upper bound)."""
        return float(DEPTH_CONSTANT * column * np.sum(self._strength * 1e8 / self._omega / b))

    def reach(self, b: float, column: float, depth: float) -> float:
        """Distance from the line centre, km/s, beyond which τ stays below `depth`.

        The larger of the Gaussian core and of the Lorentzian wing, τ ≈ τ0 a b²/(√π v²).
        """
        centre = self.peak_depth(np.full(self.masses.size, b), column)
        core = b * math.sqrt(max(math.log(max(centre / depth, 1.0)), 0.0))
        rest = 1e8 / self._omega.min()
        wing = math.sqrt(centre * self._gamma * _DAMPING * rest * b / (depth * math.sqrt(math.pi)))
        return max(core, float(wing))

    def depth(self, g: Array, s: float, b: Array, column: float, x: float) -> Array:
        """Optical depth τ (n,).

        Parameters
        ----------
        g : array (n,)
            1/λ, Å⁻¹.
        s : float
            1 + z of the component.
        b : array (n_lines,)
            Doppler parameter of each line, km/s.
        column : float
            Column density N, cm⁻².
        x : float
            (α/α0)² − 1.
        """
        rest, u, a = self._geometry(g, s, b, x)
        amplitude = DEPTH_CONSTANT * column * self._strength * rest / b
        tau: Array = amplitude @ voigt(a[:, None], u)
        return tau

    def depth_with_derivatives(
        self, g: Array, s: float, b: Array, column: float, x: float
    ) -> tuple[Array, DepthDerivatives]:
        """Optical depth and its derivatives; parameters as in `depth`."""
        rest, u, a = self._geometry(g, s, b, x)
        h, h_u, h_a = voigt_with_derivatives(a[:, None], u)
        amplitude = DEPTH_CONSTANT * column * self._strength * rest / b
        tau: Array = amplitude @ h
        # ∂u/∂ln s = (c/b) λ_j s g = u + c/b
        u_scale = u + (C_KMS / b)[:, None]
        tau_u = amplitude[:, None] * h_u
        tau_a = amplitude[:, None] * h_a
        shifted = tau_u * u_scale
        scale: Array = shifted.sum(axis=0)
        by_b = (amplitude[:, None] * h + tau_u * u + tau_a * a[:, None]) / -b[:, None]
        if self._q == 0.0:
            return tau, DepthDerivatives(scale, by_b, np.zeros_like(tau))
        # λ_j enters the amplitude, u and a, each in proportion
        dln_rest = -rest * self._q / 1e8
        by_x: Array = dln_rest @ (amplitude[:, None] * h + shifted + tau_a * a[:, None])
        return tau, DepthDerivatives(scale, by_b, by_x)
