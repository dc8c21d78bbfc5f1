"""Covariance of the free parameters from the singular values of the scaled Jacobian.

At the minimum the covariance is (JᵀJ)⁻¹. It is formed from J with columns of unit length,
J = U S Vᵀ D, as D⁻¹ V S⁻² Vᵀ D⁻¹, which does not square the condition number (Golub & Van Loan
2013, Matrix Computations, §5.3). Errors are those that the statistic defines: doubling every
pixel error doubles every σ, and nothing is rescaled by χ²/ν.

A parameter without an error has a reason instead: ``at bound`` or ``singular`` (the data do not
constrain it, or only its sum with others).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["AT_BOUND", "SINGULAR", "Covariance", "covariance_from_jacobian"]

Array = NDArray[np.float64]

AT_BOUND = "at bound"
SINGULAR = "singular"

_SINGULAR_RATIO = 1e-9  # of singular values of the scaled Jacobian, below which nothing is known
_SHARE = 1e-3  # a parameter with this part of a null direction has no error


@dataclass(frozen=True)
class Covariance:
    """Named covariance matrix of the free parameters.

    Attributes
    ----------
    names : tuple of str
        All free parameters.
    matrix : array (n, n)
        In the units of the parameters; rows and columns of parameters without an error are 0.
    reasons : dict
        Why a parameter has no error, by name.
    condition : float
        Condition number of the scaled Jacobian.

    """

    names: tuple[str, ...]
    matrix: Array
    reasons: dict[str, str]
    condition: float

    def sigma(self, name: str) -> float | None:
        """1σ error of a parameter; None when `reasons` says why there is none."""
        if name in self.reasons:
            return None
        i = self.names.index(name)
        return float(np.sqrt(self.matrix[i, i]))

    @property
    def sigmas(self) -> Array:
        """1σ errors of all free parameters; 0 where there is none."""
        result: Array = np.sqrt(np.diag(self.matrix))
        return result

    def root(self) -> Array:
        """A matrix R (n, n) with R Rᵀ the covariance: R times unit normals is a draw from it."""
        scale = np.where(self.sigmas > 0.0, self.sigmas, 1.0)
        values, vectors = np.linalg.eigh(self.matrix / np.outer(scale, scale))
        root: Array = scale[:, None] * vectors * np.sqrt(np.maximum(values, 0.0))
        return root


def covariance_from_jacobian(
    jacobian: Array, names: tuple[str, ...], at_bound: NDArray[np.bool_]
) -> Covariance:
    """Covariance from the Jacobian (m, n) of the residuals at the minimum.

    Parameters that are held at a bound (`at_bound`) are treated as known, which is stated as the
    reason for their missing error.
    """
    n = len(names)
    matrix = np.zeros((n, n))
    reasons = {names[i]: AT_BOUND for i in np.flatnonzero(at_bound)}
    free = np.flatnonzero(~at_bound)
    if free.size == 0:
        return Covariance(names, matrix, reasons, 1.0)
    norm = np.sqrt(np.einsum("ij,ij->j", jacobian[:, free], jacobian[:, free]))
    dead = norm == 0.0
    for i in free[dead]:
        reasons[names[i]] = SINGULAR
    free, norm = free[~dead], norm[~dead]
    if free.size == 0:
        return Covariance(names, matrix, reasons, 1.0)
    singular, vt = np.linalg.svd(np.linalg.qr(jacobian[:, free] / norm, mode="r"))[1:]
    null = singular < _SINGULAR_RATIO * singular[0]
    lost = (vt[null] ** 2).sum(axis=0) > _SHARE**2
    for i in free[lost]:
        reasons[names[i]] = SINGULAR
    inverse = (vt[~null].T / singular[~null] ** 2) @ vt[~null]
    block = inverse / np.outer(norm, norm)
    block[lost, :] = 0.0
    block[:, lost] = 0.0
    matrix[np.ix_(free, free)] = block
    condition = float(singular[0] / max(singular[-1], np.finfo(float).tiny))
    return Covariance(names, matrix, reasons, condition)
