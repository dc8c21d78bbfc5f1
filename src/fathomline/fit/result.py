"""Frozen records of what a fit found."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fathomline.fit.covariance import Covariance

__all__ = ["FitResult", "Outcome", "Restart", "aicc"]

Array = NDArray[np.float64]

Outcome = Literal["returned", "worse minimum", "differs", "not converged"]


def aicc(chi2: float, n_data: int, n_free: int) -> float:
    """Akaike's criterion with the small-sample term (Hurvich & Tsai 1989, Biometrika 76, 297).

    χ² + 2p + 2p(p+1)/(n − p − 1); infinite when there are too few data.
    """
    left = n_data - n_free - 1
    return chi2 + 2 * n_free + (2 * n_free * (n_free + 1) / left if left > 0 else math.inf)


@dataclass(frozen=True, slots=True)
class Restart:
    """One fit again from perturbed start values.

    Attributes
    ----------
    start_dalpha : float
        Δα/α at the start, ppm.
    shift_sigma : float
        (Δα/α found − Δα/α of the result)/σ.
    chi2_change : float
        χ² found − χ² of the result.
    outcome : {"returned", "worse minimum", "differs", "not converged"}
        Whether it came back to the same answer, or where else it ended.
    n_evaluations : int

    """

    start_dalpha: float
    shift_sigma: float
    chi2_change: float
    outcome: Outcome
    n_evaluations: int

    @property
    def returned(self) -> bool:
        """Whether it came back to the same answer."""
        return self.outcome == "returned"


@dataclass(frozen=True)
class FitResult:
    """A fit: best values, named covariance, and how far it can be trusted.

    Attributes
    ----------
    values : dict
        Best value of every parameter, free or not, by name.
    free : array (n_free,)
        Best free vector, in the order of `covariance.names`.
    covariance : Covariance
    chi2, n_data : float, int
        χ² of the pixels plus priors; number of fitted pixels.
    n_priors : int
    edm : float
        Estimated distance to the minimum, in units of χ².
    converged : bool
        The minimiser converged and every restart came back or ended in a worse minimum.
    message : str
    flags : tuple of str
        Reasons not to trust the result, as short codes; empty is good.
    restarts : tuple of Restart
    solver : str
    n_evaluations, n_iterations : int
        Of the main fit; restarts keep their own.

    """

    values: Mapping[str, float]
    free: Array
    covariance: Covariance
    chi2: float
    n_data: int
    n_priors: int
    edm: float
    converged: bool
    message: str
    flags: tuple[str, ...]
    restarts: tuple[Restart, ...]
    solver: str
    n_evaluations: int
    n_iterations: int

    @property
    def n_free(self) -> int:
        """Number of free parameters."""
        return len(self.covariance.names)

    @property
    def ndof(self) -> int:
        """Degrees of freedom: pixels plus priors minus free parameters."""
        return self.n_data + self.n_priors - self.n_free

    @property
    def chi2_nu(self) -> float | None:
        """χ² per degree of freedom; None without any degree of freedom."""
        return self.chi2 / self.ndof if self.ndof > 0 else None

    @property
    def aicc(self) -> float:
        """Akaike's criterion with the small-sample term."""
        return aicc(self.chi2, self.n_data + self.n_priors, self.n_free)

    def sigma(self, name: str) -> float | None:
        """1σ error of a free parameter; None when it is not free or has no error."""
        return self.covariance.sigma(name) if name in self.covariance.names else None

    def __repr__(self) -> str:
        return (
            f"FitResult(chi2={self.chi2:.2f}, ndof={self.ndof}, "
            f"converged={self.converged}, flags={list(self.flags)})"
        )
