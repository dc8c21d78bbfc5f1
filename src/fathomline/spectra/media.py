"""Wavelengths in air and in vacuum.

The refractive index n of standard air (15 °C, 101 325 Pa, dry) is a function of the vacuum
wavenumber s = 1/λ_vac in µm⁻¹, and λ_vac = n(s) λ_air. Two published formulas:

``morton2000``  Morton (2000, ApJS 130, 403), after Birch & Downs (1994, Metrologia 31, 315):
    n − 1 = 8.34254e-5 + 2.406147e-2/(130 − s²) + 1.5998e-4/(38.9 − s²)
``ciddor1996``  Ciddor (1996, Appl. Opt. 35, 1566):
    n − 1 = 5.792105e-2/(238.0185 − s²) + 1.67917e-3/(57.362 − s²)

Vacuum to air is therefore explicit. Air to vacuum is solved by fixed-point iteration of
λ ← n(1/λ) λ_air: the error shrinks by |dn/d ln λ| ≈ 1e-5 per step, so four steps reach machine
precision. A shortcut with the air wavelength in place of the vacuum one would be wrong by
up to 1 m/s.

By convention wavelengths below 2000 Å are always vacuum ones; the formulas are refused there.
Wavelengths are measured in the air of the observatory, so this conversion comes before any change
of frame. For a file whose air wavelengths are barycentric already the order is lost; the error is
n's change over the shift of 30 km/s, below 1 m/s.
"""

from __future__ import annotations

from collections.abc import Callable
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fathomline.errors import SpectrumError

__all__ = ["AIR_FORMULAS", "air_to_vacuum", "refractive_index", "vacuum_to_air"]

_SHORTEST = 1995.0  # Å; a little below the conventional 2000 Å, so that both media of it convert
_MAX_ITERATIONS = 30


def _morton2000(s2: NDArray[np.float64]) -> NDArray[np.float64]:
    return 1.0 + 8.34254e-5 + 2.406147e-2 / (130.0 - s2) + 1.5998e-4 / (38.9 - s2)


def _ciddor1996(s2: NDArray[np.float64]) -> NDArray[np.float64]:
    return 1.0 + 5.792105e-2 / (238.0185 - s2) + 1.67917e-3 / (57.362 - s2)


AIR_FORMULAS: MappingProxyType[str, Callable[[NDArray[np.float64]], NDArray[np.float64]]] = (
    MappingProxyType({"morton2000": _morton2000, "ciddor1996": _ciddor1996})
)
"""Name to n(s²), s in 1/µm."""


def _checked(wavelength: ArrayLike, formula: str) -> NDArray[np.float64]:
    if formula not in AIR_FORMULAS:
        raise SpectrumError(
            f"unknown formula {formula!r} for the refractive index of air; "
            f"expected one of {', '.join(AIR_FORMULAS)}"
        )
    values = np.asarray(wavelength, dtype=np.float64)
    if not np.all(np.isfinite(values)):
        raise SpectrumError("air-vacuum conversion: the wavelengths must be finite")
    if np.any(values < _SHORTEST):
        raise SpectrumError(
            f"air-vacuum conversion: the shortest wavelength is {values.min():.3f} Å, but air "
            "wavelengths are used above 2000 Å only; check the unit, or state that the medium "
            "is vacuum"
        )
    return values


def refractive_index(wavelength: ArrayLike, formula: str = "morton2000") -> NDArray[Any]:
    """Return the refractive index of standard air.

    Parameters
    ----------
    wavelength
        Vacuum wavelength, Å, any shape.
    formula
        ``"morton2000"`` or ``"ciddor1996"``, see the module docstring.

    Returns
    -------
    n, the shape of ``wavelength``.

    Raises
    ------
    SpectrumError
        If the formula is unknown or a wavelength is not finite or below 2000 Å.

    """
    values = _checked(wavelength, formula)
    return AIR_FORMULAS[formula]((1e4 / values) ** 2)


def vacuum_to_air(wavelength: ArrayLike, formula: str = "morton2000") -> NDArray[Any]:
    """Return air wavelengths (Å) of vacuum wavelengths (Å, any shape).

    Raises `SpectrumError` as `refractive_index` does.
    """
    values = _checked(wavelength, formula)
    return np.asarray(values / AIR_FORMULAS[formula]((1e4 / values) ** 2))


def air_to_vacuum(wavelength: ArrayLike, formula: str = "morton2000") -> NDArray[Any]:
    """Return vacuum wavelengths (Å) of air wavelengths (Å, any shape), to machine precision.

    Raises `SpectrumError` as `refractive_index` does.
    """
    air = _checked(wavelength, formula)
    index = AIR_FORMULAS[formula]
    vacuum = air * index((1e4 / air) ** 2)
    for _ in range(_MAX_ITERATIONS):
        improved = air * index((1e4 / vacuum) ** 2)
        done = bool(np.all(np.abs(improved - vacuum) <= np.spacing(vacuum)))
        vacuum = improved
        if done:
            break
    return np.asarray(vacuum)
