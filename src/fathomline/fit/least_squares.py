"""Bounded nonlinear least squares by a trust region on the singular values of the Jacobian.

Minimise χ²(x) = |r(x)|² with l ≤ x ≤ u. In each iteration the columns of J are scaled to unit
length, so that a step of length 1 is about 1σ of an uncorrelated parameter. The scaled Jacobian
is reduced by QR and the triangle by SVD, R = U S Vᵀ; the step with |s| ≤ Δ is then

    s(λ) = −V diag(S/(S² + λ)) Uᵀ Qᵀ r,

with λ ≥ 0 found from |s(λ)| = Δ without another factorisation (Moré 1978, Lecture Notes in
Mathematics 630, 105; Nocedal & Wright 2006, Numerical Optimization, §4.3 and §10.3). Parameters at
a bound whose gradient pushes outwards are held in that iteration, the step of the others is cut
at their bounds, and the radius follows the ratio of actual to predicted decrease.

The iteration stops on the *estimated distance to the minimum*, the decrease of χ² that a full
Gauss–Newton step still promises,

    edm = gᵀ (JᵀJ)⁻¹ g,   g = Jᵀ r,

over the parameters that are not held. An edm of 1e-8 means that no linear combination of the
parameters is farther than 1e-4 σ from the minimum of the local quadratic model: the stopping
rule is a statement about the answer and not about the size of the last step.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["EDM_TOLERANCE", "Minimum", "minimise"]

Array = NDArray[np.float64]

EDM_TOLERANCE = 1e-8
"""Default stopping rule: all parameters within 1e-4 σ of the local minimum."""

_RANK = 1e-10  # singular values below this share of the largest carry no information
_FIRST_RADIUS = 100.0
_SMALLEST_RADIUS = 1e-10
_ROUNDING = 1e-11  # of χ²: a smaller difference is rounding of the model
_MAX_BLIND_STEPS = 20
_NEAR_ENOUGH = 1e-6  # edm that still counts as converged when rounding hides any decrease


@dataclass(frozen=True, slots=True)
class Minimum:
    """Where a minimisation ended.

    Attributes
    ----------
    x : array (n,)
    residual : array (m,)
    jacobian : array (m, n)
        At `x`.
    chi2 : float
    edm : float
        Estimated distance to the minimum, in units of χ².
    at_bound : bool array (n,)
        Parameters held at a bound.
    converged : bool
    message : str
    n_evaluations, n_iterations : int
        An evaluation is one residual with its Jacobian.

    """

    x: Array
    residual: Array
    jacobian: Array
    chi2: float
    edm: float
    at_bound: NDArray[np.bool_]
    converged: bool
    message: str
    n_evaluations: int
    n_iterations: int


class _Step:
    """The trust-region subproblem of one Jacobian."""

    def __init__(self, residual: Array, jacobian: Array) -> None:
        norm = np.sqrt(np.einsum("ij,ij->j", jacobian, jacobian))
        self.scale = np.where(norm > 0.0, norm, 1.0)
        scaled = jacobian / self.scale
        q, r = np.linalg.qr(scaled)
        u, self.singular, vt = np.linalg.svd(r)
        self.v = vt.T
        rank = self.singular > _RANK * max(self.singular[0], np.finfo(float).tiny)
        self.projected = np.where(rank, u.T @ (q.T @ residual), 0.0)
        self.singular = np.where(rank, self.singular, 1.0)
        self.edm = float(self.projected @ self.projected)

    def solve(self, radius: float) -> Array:
        """Step in scaled parameters with length at most `radius`."""
        s, p = self.singular, self.projected
        newton = -p / s
        if np.linalg.norm(newton) <= radius:
            full: Array = self.v @ newton
            return full
        # Newton iteration on 1/Δ − 1/|s(λ)|, safeguarded; it converges from below
        lam = 0.0
        for _ in range(30):
            filtered = p * s / (s**2 + lam)
            length = float(np.linalg.norm(filtered))
            if abs(length - radius) <= 0.05 * radius:
                break
            slope = float(np.sum(filtered**2 / (s**2 + lam))) / length
            lam = max(lam + (length - radius) / radius * length / slope, 0.0)
        filtered = p * s / (s**2 + lam)
        cut: Array = self.v @ -filtered
        return cut


def _held(x: Array, gradient: Array, lower: Array, upper: Array) -> NDArray[np.bool_]:
    return ((x <= lower) & (gradient > 0.0)) | ((x >= upper) & (gradient < 0.0))


def minimise(
    function: Callable[[Array], tuple[Array, Array]],
    start: Array,
    lower: Array,
    upper: Array,
    *,
    max_iterations: int = 200,
    edm_tolerance: float = EDM_TOLERANCE,
    report: Callable[[int, float], None] | None = None,
) -> Minimum:
    """Minimise |r(x)|² inside bounds.

    Parameters
    ----------
    function : callable
        x (n,) → residual (m,) and Jacobian (m, n).
    start, lower, upper : array (n,)
        Start and inclusive bounds; the start is clipped to them.
    max_iterations : int
        Largest number of evaluations after the first.
    edm_tolerance : float
        See the module.
    report : callable, optional
        Called with the iteration number and χ² after each accepted step.

    Returns
    -------
    Minimum
        `converged` is False with a message when the iteration did not reach the tolerance.

    """
    x = np.clip(start, lower, upper)
    residual, jacobian = function(x)
    chi2 = float(residual @ residual)
    if not math.isfinite(chi2):
        raise FloatingPointError("the residuals at the start values are not finite")
    radius, evaluations, iterations, blind_steps = _FIRST_RADIUS, 1, 0, 0

    def ended(converged: bool, message: str) -> Minimum:
        return Minimum(
            x, residual, jacobian, chi2, edm, held, converged, message, evaluations, iterations
        )

    while True:
        held = _held(x, jacobian.T @ residual, lower, upper)
        step, edm = _reduced_step(residual, jacobian, held)
        if step is None or edm < edm_tolerance:
            return ended(True, "converged")
        accepted = False
        while not accepted:
            if iterations >= max_iterations:
                return ended(False, "stopped at the largest number of iterations")
            if radius < _SMALLEST_RADIUS or blind_steps > _MAX_BLIND_STEPS:
                if edm < max(edm_tolerance, _NEAR_ENOUGH):
                    return ended(True, "converged to the rounding of χ²")
                return ended(False, "no step decreases χ²")
            iterations += 1
            trial, length = _bounded_trial(step, radius, residual, jacobian, x, held, lower, upper)
            predicted = chi2 - _square(residual + jacobian @ (trial - x))
            new_residual, new_jacobian = function(trial)
            evaluations += 1
            new_chi2 = float(new_residual @ new_residual)
            ratio = (chi2 - new_chi2) / predicted if predicted > 0.0 else -1.0
            if predicted > 0.0 and abs(chi2 - new_chi2) < _ROUNDING * chi2:
                # too close to the minimum for χ² to tell: trust the quadratic model
                blind_steps += 1
                accepted = True
                break
            if not math.isfinite(new_chi2) or ratio < 0.25:
                radius = 0.25 * min(radius, length) if length > 0.0 else 0.25 * radius
            elif ratio > 0.75 and length > 0.8 * radius:
                radius *= 3.0
            accepted = math.isfinite(new_chi2) and ratio > 1e-4
        x, residual, jacobian, chi2 = trial, new_residual, new_jacobian, new_chi2
        if report is not None:
            report(iterations, chi2)


def _square(vector: Array) -> float:
    return float(vector @ vector)


def _bounded_trial(
    step: _Step,
    radius: float,
    residual: Array,
    jacobian: Array,
    x: Array,
    held: NDArray[np.bool_],
    lower: Array,
    upper: Array,
) -> tuple[Array, float]:
    """Trial point inside the bounds and the scaled length of the step.

    A parameter that the step would carry beyond its bound is put on the bound, and the others
    are solved for again with it there.
    """
    trial, blocked, squared = x.copy(), held.copy(), 0.0
    while True:
        free = np.flatnonzero(~blocked)
        scaled = step.solve(radius)
        target = x[free] + scaled / step.scale
        beyond = (target < lower[free]) | (target > upper[free])
        inside = np.clip(target, lower[free], upper[free])
        if not beyond.any():
            trial[free] = target
            return trial, math.sqrt(squared + _square(scaled))
        trial[free[beyond]] = inside[beyond]
        squared += _square((inside - x[free])[beyond] * step.scale[beyond])
        blocked[free[beyond]] = True
        if blocked.all():
            return trial, math.sqrt(squared)
        moved = np.where(blocked, trial - x, 0.0)
        step = _Step(residual + jacobian @ moved, jacobian[:, ~blocked])


def _reduced_step(
    residual: Array, jacobian: Array, held: NDArray[np.bool_]
) -> tuple[_Step | None, float]:
    if held.all():
        return None, 0.0
    step = _Step(residual, jacobian[:, ~held] if held.any() else jacobian)
    return step, step.edm
