"""Bounded nonlinear least squares by a trust region on two quadratic models.

Minimise χ²(x) = |r(x)|² with l ≤ x ≤ u. With g = Jᵀ r the change of χ² by a step s is, to second
order,

    2 gᵀ s + sᵀ (JᵀJ + C) s,    C = Σ_i r_i ∇² r_i.

The Gauss–Newton model leaves C out. It is enough where lines are well separated; blends and
saturated lines bend the valley of χ², and Gauss–Newton then creeps along it. The second model has
an estimate of C that every accepted step improves from the change of the gradient (Dennis, Gay &
Welsch 1981, ACM Transactions on Mathematical Software 7, 348); whichever of the two predicted the
last change of χ² better makes the next step.

J is reduced to its triangle first (QR), so that all that follows costs n³ and not m n². Its
columns are scaled to unit length: a step of length 1 is about 1σ of an uncorrelated parameter. With
the eigenvalues e and eigenvectors V of the scaled matrix of the model (for Gauss–Newton from the
SVD, which does not square the condition number) the step with |s| ≤ Δ is

    s(λ) = −V diag(1/(e + λ)) Vᵀ g,

with λ ≥ 0 found from |s(λ)| = Δ without another factorisation (Moré 1978, Lecture Notes in
Mathematics 630, 105; Nocedal & Wright 2006, Numerical Optimization, §4.3 and §10.3). Parameters at
a bound whose gradient pushes outwards are held in that iteration, the step of the others is cut
at their bounds, and the radius follows the ratio of actual to predicted decrease.

The iteration stops on the *estimated distance to the minimum*, the decrease of χ² that a full
step still promises,

    edm = gᵀ (JᵀJ + C)⁻¹ g,

over the parameters that are not held, for both models. An edm of 1e-8 means that no linear
combination of the parameters is farther than 1e-4 σ from the minimum of the local quadratic model:
the stopping rule is a statement about the answer and not about the size of the last step.
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


class _Local:
    """A quadratic model of χ² at one point, in scaled parameters.

    Parameters
    ----------
    residual : array (m,)
    jacobian : array (m, n)
    curvature : array (n, n), optional
        Estimate of C; None for the Gauss–Newton model.
    bias : array (n,), optional
        Added to the gradient.

    """

    def __init__(
        self,
        residual: Array,
        jacobian: Array,
        curvature: Array | None = None,
        bias: Array | None = None,
    ) -> None:
        norm = np.sqrt(np.einsum("ij,ij->j", jacobian, jacobian))
        self.scale = np.where(norm > 0.0, norm, 1.0)
        scaled = jacobian / self.scale
        u, singular, vt = np.linalg.svd(scaled, full_matrices=False)
        known = singular > _RANK * max(singular[0], np.finfo(float).tiny)
        if curvature is None or not known.any():
            projected = np.where(known, u.T @ residual, 0.0)
            self.vectors, self.values = vt.T, np.where(known, singular**2, 1.0)
            self.gradient = singular * projected
            self.edm = float(projected @ projected)  # p²/e without the square
            return
        # along what J knows nothing of, the estimate of C is rounding and must not lead the way
        basis = vt[known].T
        bent = basis.T @ (curvature / np.outer(self.scale, self.scale)) @ basis
        self.values, turned = np.linalg.eigh(np.diag(singular[known] ** 2) + bent)
        self.vectors = basis @ turned
        gradient = scaled.T @ residual
        if bias is not None:
            gradient = gradient + bias / self.scale
        self.gradient = self.vectors.T @ gradient
        positive = bool(self.values[0] > _RANK**2)
        self.edm = float(np.sum(self.gradient**2 / self.values)) if positive else math.inf

    def solve(self, radius: float) -> Array:
        """Step in scaled parameters with length at most `radius`."""
        e, p = self.values, self.gradient
        least = float(e.min())
        lam = 0.0 if least > 0.0 else -1.001 * least + 1e-12
        # Newton iteration on 1/Δ − 1/|s(λ)|, safeguarded; it converges from below
        for _ in range(30):
            step = p / (e + lam)
            length = float(np.linalg.norm(step))
            if length <= 1.05 * radius:
                break
            slope = float(np.sum(step**2 / (e + lam))) / length
            lam += (length - radius) / radius * length / slope
        cut: Array = self.vectors @ -step
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
    curvature, augmented = np.zeros((x.size, x.size)), False

    def ended(converged: bool, message: str) -> Minimum:
        return Minimum(
            x, residual, jacobian, chi2, edm, held, converged, message, evaluations, iterations
        )

    while True:
        held = _held(x, jacobian.T @ residual, lower, upper)
        edm = 0.0
        if held.all():
            return ended(True, "converged")
        point = _Point(x, residual, jacobian, held, lower, upper)
        step = point.model(curvature if augmented else None)
        edm = step.edm
        if edm < edm_tolerance:
            # the other model must agree
            edm = max(edm, point.model(None if augmented else curvature).edm)
            if edm < edm_tolerance:
                return ended(True, "converged")
            if math.isfinite(edm):
                augmented = not augmented
                step = point.model(curvature if augmented else None)
        accepted = False
        while not accepted:
            if iterations >= max_iterations:
                return ended(False, "stopped at the largest number of iterations")
            if radius < _SMALLEST_RADIUS or blind_steps > _MAX_BLIND_STEPS:
                if edm < max(edm_tolerance, _NEAR_ENOUGH):
                    return ended(True, "converged to the rounding of χ²")
                return ended(False, "no step decreases χ²")
            iterations += 1
            trial, length = point.trial(step, radius, curvature if augmented else None)
            moved = trial - x
            gauss_newton = chi2 - _square(residual + jacobian @ moved)
            with_curvature = gauss_newton - float(moved @ curvature @ moved)
            predicted = with_curvature if augmented else gauss_newton
            new_residual, new_jacobian = function(trial)
            evaluations += 1
            new_chi2 = float(new_residual @ new_residual)
            actual = chi2 - new_chi2
            ratio = actual / predicted if predicted > 0.0 else -1.0
            if predicted > 0.0 and abs(actual) < _ROUNDING * chi2:
                # too close to the minimum for χ² to tell: trust the quadratic model
                blind_steps += 1
                accepted = True
                break
            if not math.isfinite(new_chi2) or ratio < 0.25:
                radius = 0.25 * min(radius, length) if length > 0.0 else 0.25 * radius
            elif ratio > 0.75 and length > 0.8 * radius:
                radius *= 3.0
            accepted = math.isfinite(new_chi2) and ratio > 1e-4
            if not accepted and augmented:
                augmented = False  # fall back on the model that is always downhill
                step = point.model(None)
        if abs(actual) >= _ROUNDING * chi2:
            augmented = abs(with_curvature - actual) < abs(gauss_newton - actual)
        curvature = _updated(curvature, moved, residual, jacobian, new_residual, new_jacobian)
        if evaluations == 2:
            augmented = False  # nothing was known about C before this step
        x, residual, jacobian, chi2 = trial, new_residual, new_jacobian, new_chi2
        if report is not None:
            report(iterations, chi2)


def _updated(
    curvature: Array,
    moved: Array,
    residual: Array,
    jacobian: Array,
    new_residual: Array,
    new_jacobian: Array,
) -> Array:
    """The estimate of C after a step, by the sized update of Dennis, Gay & Welsch (1981)."""
    gradient = new_jacobian.T @ new_residual
    y = gradient - jacobian.T @ residual
    change = gradient - jacobian.T @ new_residual  # ≈ C s
    ys = float(y @ moved)
    if ys <= 1e-12 * float(np.linalg.norm(y) * np.linalg.norm(moved)):
        return curvature
    product = curvature @ moved
    own = float(moved @ product)
    size = min(abs(float(moved @ change)) / abs(own), 1.0) if own != 0.0 else 1.0
    error = change - size * product
    outer = np.outer(error, y)
    update: Array = (
        size * curvature + (outer + outer.T) / ys - float(error @ moved) / ys**2 * np.outer(y, y)
    )
    return update


class _Point:
    """Where the minimisation is, with what holds it there."""

    def __init__(
        self,
        x: Array,
        residual: Array,
        jacobian: Array,
        held: NDArray[np.bool_],
        lower: Array,
        upper: Array,
    ) -> None:
        # every model of this point, and every part of one, needs only the triangle of J and Qᵀ r
        triangle = np.asarray(np.linalg.qr(np.column_stack([jacobian, residual]), mode="r"))
        self.x, self.residual, self.jacobian = x, triangle[:, -1], triangle[:, :-1]
        self.held, self.lower, self.upper = held, lower, upper

    def model(self, curvature: Array | None) -> _Local:
        """Quadratic model of the parameters that are not held."""
        return self._model(curvature, self.held, np.zeros_like(self.x))

    def _model(self, curvature: Array | None, blocked: NDArray[np.bool_], moved: Array) -> _Local:
        free = np.flatnonzero(~blocked)
        residual = self.residual + self.jacobian @ moved if moved.any() else self.residual
        if curvature is None:
            return _Local(residual, self.jacobian[:, free])
        return _Local(
            residual,
            self.jacobian[:, free],
            curvature[np.ix_(free, free)],
            (curvature @ moved)[free],
        )

    def trial(self, step: _Local, radius: float, curvature: Array | None) -> tuple[Array, float]:
        """Trial point inside the bounds and the scaled length of the step.

        A parameter that the step would carry beyond its bound is put on the bound, and the others
        are solved for again with it there.
        """
        x, lower, upper = self.x, self.lower, self.upper
        trial, blocked, squared = x.copy(), self.held.copy(), 0.0
        while True:
            free = np.flatnonzero(~blocked)
            scaled = step.solve(radius)
            target = x[free] + scaled / step.scale
            beyond = (target < lower[free]) | (target > upper[free])
            if not beyond.any():
                trial[free] = target
                return trial, math.sqrt(squared + _square(scaled))
            inside = np.clip(target, lower[free], upper[free])
            trial[free[beyond]] = inside[beyond]
            squared += _square((inside - x[free])[beyond] * step.scale[beyond])
            blocked[free[beyond]] = True
            if blocked.all():
                return trial, math.sqrt(squared)
            step = self._model(curvature, blocked, np.where(blocked, trial - x, 0.0))


def _square(vector: Array) -> float:
    return float(vector @ vector)
