"""Physical constants (CODATA 2022, as in `scipy.constants`), spelled out so that importing is free.

A test compares every value with `scipy.constants`. Symbols: c speed of light, e elementary
charge, m_e electron mass, ε0 vacuum permittivity, k Boltzmann constant, u atomic mass constant.
"""

from __future__ import annotations

import math

__all__ = [
    "BOLTZMANN",
    "C_KMS",
    "C_MS",
    "DEPTH_CONSTANT",
    "DOPPLER_KMS2",
    "PPM",
    "UNIFIED_MASS",
]

C_MS: float = 299_792_458.0
"""Speed of light, m/s (exact)."""

C_KMS: float = C_MS / 1e3
"""Speed of light, km/s."""

PPM: float = 1e-6
"""One part per million."""

BOLTZMANN: float = 1.380649e-23
"""Boltzmann constant, J/K (exact)."""

UNIFIED_MASS: float = 1.66053906892e-27
"""Atomic mass constant, kg (CODATA 2022)."""

DOPPLER_KMS2: float = 2.0 * BOLTZMANN / UNIFIED_MASS * 1e-6
"""2k/u in (km/s)² u/K: the thermal part of b² is ``DOPPLER_KMS2 * T / mass``."""

_ELEMENTARY_CHARGE = 1.602176634e-19  # C (exact)
_ELECTRON_MASS = 9.1093837139e-31  # kg (CODATA 2022)
_EPSILON_0 = 8.8541878188e-12  # F/m (CODATA 2022)

DEPTH_CONSTANT: float = (
    # π e² / (m_e c) in Gaussian units is e² / (4 ε0 m_e c) in SI, in m²/s
    _ELEMENTARY_CHARGE**2
    / (4.0 * _EPSILON_0 * _ELECTRON_MASS * C_MS)
    * 1e4  # m² -> cm², with N in cm⁻²
    * 1e-10  # λ in Å -> m
    / 1e3  # b in km/s -> m/s
    / math.sqrt(math.pi)
)
"""K in τ = K · N f λ / b · H(a, u), with N in cm⁻², λ in Å, b in km/s (K = 1.497e-15)."""
