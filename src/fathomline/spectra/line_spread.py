"""Line-spread functions: what the spectrograph makes of an infinitely narrow line.

A Gaussian of constant width in velocity has constant resolving power R = λ/FWHM(λ) = c/FWHM(v),
with FWHM = 2 √(2 ln 2) σ. The width excludes the pixel: the forward model integrates over pixels
itself, so a width measured on pixelised data must have the pixel removed first.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, TypeAlias

from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError

__all__ = ["FWHM_PER_SIGMA", "GaussianLineSpread", "LineSpread"]

FWHM_PER_SIGMA: float = 2.0 * math.sqrt(2.0 * math.log(2.0))
"""Full width at half maximum of a Gaussian of unit standard deviation."""


def _finite_number(value: object, name: str) -> float:
    if isinstance(value, bool) or not hasattr(value, "__float__"):
        raise SpectrumError(f"line-spread function: {name} must be a number, found {value!r}")
    number = float(value)
    if not math.isfinite(number):
        raise SpectrumError(f"line-spread function: {name} must be finite, found {number!r}")
    return number


@dataclass(frozen=True, slots=True)
class GaussianLineSpread:
    """A Gaussian line-spread function of constant velocity width.

    Parameters
    ----------
    fwhm
        Full width at half maximum, km/s, positive and finite.
    error
        One-sigma error of ``fwhm``, km/s, not negative, or None when it is not known.

    Raises
    ------
    SpectrumError
        If a number is out of its range.

    """

    fwhm: float
    error: float | None = None

    def __post_init__(self) -> None:
        fwhm = _finite_number(self.fwhm, "fwhm (km/s)")
        if fwhm <= 0.0:
            raise SpectrumError(f"line-spread function: fwhm must be positive, found {fwhm} km/s")
        object.__setattr__(self, "fwhm", fwhm)
        if self.error is not None:
            error = _finite_number(self.error, "error (km/s)")
            if error < 0.0:
                raise SpectrumError(
                    f"line-spread function: the error of fwhm must not be negative, "
                    f"found {error} km/s"
                )
            object.__setattr__(self, "error", error)

    @classmethod
    def from_resolving_power(
        cls, resolving_power: float, error: float | None = None
    ) -> GaussianLineSpread:
        """Return the line spread of resolving power R = λ/FWHM (fwhm = c/R).

        Parameters
        ----------
        resolving_power
            R, dimensionless, positive and finite.
        error
            One-sigma error of R; carried over as σ(fwhm) = fwhm σ(R)/R.

        Raises
        ------
        SpectrumError
            If a number is out of its range.

        """
        power = _finite_number(resolving_power, "the resolving power")
        if power <= 0.0:
            raise SpectrumError(
                f"line-spread function: the resolving power must be positive, found {power}"
            )
        fwhm = C_KMS / power
        if error is None:
            return cls(fwhm)
        return cls(fwhm, fwhm * _finite_number(error, "the error of the resolving power") / power)

    @property
    def sigma(self) -> float:
        """Standard deviation, km/s."""
        return self.fwhm / FWHM_PER_SIGMA

    @property
    def resolving_power(self) -> float:
        """R = c/fwhm, dimensionless."""
        return C_KMS / self.fwhm

    def to_dict(self) -> dict[str, Any]:
        """Return a description that `json` can write."""
        return {"kind": "gaussian", "fwhm": self.fwhm, "error": self.error}


# every line-spread function that a spectrum may carry
LineSpread: TypeAlias = GaussianLineSpread
