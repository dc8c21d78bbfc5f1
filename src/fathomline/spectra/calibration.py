"""Distortion terms from measured velocity shifts.

The shifts y_i at wavelengths λ_i, with errors σ_i, are modelled as a sum of the basis functions of
`fathomline.spectra.distortion` with coefficients θ, plus an intrinsic scatter s that stands for all
that the terms do not describe:

    y_i = Σ_k θ_k B_k(λ_i) + noise,      Var(noise_i) = σ_i² + s² = 1/w_i.

For a given s the best θ and its covariance are those of weighted least squares,
θ = (BᵀWB)⁻¹ BᵀW y and (BᵀWB)⁻¹. The scatter maximises the likelihood of those combinations of the
y_i that do not depend on θ (restricted maximum likelihood; Harville 1977, J. Am. Stat. Assoc. 72,
320), so that fitting θ does not make it too small:

    ln L(s) = −½ [Σ ln(σ_i² + s²) + ln det(BᵀWB) + Σ w_i r_i²].

Its error follows from the curvature of ln L, its limit (95 %, one-sided) from ln L having
dropped by 1.353 from the maximum. A scatter is called significant when ln L(0) lies more than
that below the maximum; otherwise it has a limit only.

**Robust fit.** Points further than four standard deviations √(σ² + s²) from the fit are set aside.
The start is the fit of least absolute deviations, with the scatter from the median absolute
residual, so that outliers do not hide behind the scatter that they cause; fit and selection are
repeated until the selection stays.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq, minimize_scalar

from fathomline.errors import SpectrumError
from fathomline.spectra.distortion import (
    order_edges_from_spacing,
    sawtooth_basis,
    shift_basis,
    slope_basis,
)

__all__ = ["TERMS", "DistortionFit", "FittedTerm", "fit_distortion"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

TERMS: tuple[str, ...] = ("shift", "slope", "sawtooth")
"""Kinds of terms that can be fitted."""

_DROP = 1.3527  # half the 90 % point of χ² with one degree of freedom: 95 % one-sided
_FAR = 4.0
_MOST_SET_ASIDE = 0.25
_MAD = 1.4826


@dataclass(frozen=True, slots=True)
class FittedTerm:
    """One fitted coefficient.

    Attributes
    ----------
    kind
        Of `TERMS`.
    value, error
        m/s, or m/s per 1000 Å for the slope; the error contains the intrinsic scatter through the
        weights.
    sigma
        For a Gaussian prior: the error, and for the shift the scatter added in quadrature. A single
        line of an absorber is displaced like a single point, not like the mean of all.

    """

    kind: str
    value: float
    error: float
    sigma: float


@dataclass(frozen=True, slots=True)
class DistortionFit:
    """Result of `fit_distortion`.

    Attributes
    ----------
    terms
        The coefficients, in the order asked for.
    covariance
        Of the coefficients, shape (k, k), in their units.
    chi2_nu
        χ² per degree of freedom with the errors as given, before any scatter; None without a
        degree of freedom.
    ndof
        Number of points used minus number of terms.
    scatter
        Intrinsic scatter of best likelihood, m/s, 0 or more.
    scatter_error
        Its 1σ error, m/s; None where the scatter is not significant.
    scatter_limit
        95 % upper limit, m/s; None without a degree of freedom.
    pivot
        Zero of the slope, and an order edge where the orders have a spacing, Å.
    order_edges, order_spacing
        Å; as given, or None.
    used
        Points used, shape (n,), bool.

    """

    terms: tuple[FittedTerm, ...]
    covariance: FloatArray
    chi2_nu: float | None
    ndof: int
    scatter: float
    scatter_error: float | None
    scatter_limit: float | None
    pivot: float
    order_edges: tuple[float, ...] | None
    order_spacing: float | None
    used: BoolArray

    def basis(self, wavelength: ArrayLike) -> FloatArray:
        """Basis functions at wavelengths (Å) of shape (n,): shape (n, k)."""
        wave = np.asarray(wavelength, dtype=np.float64)
        kinds = [term.kind for term in self.terms]
        edges = _edges(wave, self.pivot, self.order_edges, self.order_spacing)
        return _basis(wave, kinds, self.pivot, edges)

    def velocity(self, wavelength: ArrayLike) -> FloatArray:
        """Fitted distortion velocity, m/s, at wavelengths (Å) of shape (n,)."""
        result: FloatArray = self.basis(wavelength) @ np.array([t.value for t in self.terms])
        return result

    def velocity_error(self, wavelength: ArrayLike) -> FloatArray:
        """1σ error of `velocity`, m/s, shape (n,)."""
        basis = self.basis(wavelength)
        variance: FloatArray = np.einsum("ij,jk,ik->i", basis, self.covariance, basis)
        return np.sqrt(variance)


def fit_distortion(
    wavelength: ArrayLike,
    velocity: ArrayLike,
    error: ArrayLike,
    *,
    terms: Sequence[str] = ("shift", "slope"),
    pivot: float | None = None,
    order_edges: Sequence[float] | None = None,
    order_spacing: float | None = None,
    scatter: bool = True,
    robust: bool = False,
) -> DistortionFit:
    """Fit distortion terms and an intrinsic scatter to measured velocity shifts.

    Parameters
    ----------
    wavelength
        Å, shape (n,).
    velocity, error
        Shifts and their 1σ errors, m/s, shape (n,); errors positive.
    terms
        Kinds to fit, of `TERMS`, each once.
    pivot
        Zero of the slope, Å; also an order edge where a spacing is given. Default: the mean
        wavelength with the weights 1/error², rounded to 1 Å.
    order_edges, order_spacing
        Echelle orders, Å: the sawtooth needs one of the two.
    scatter
        Whether there is an intrinsic scatter; otherwise it is 0.
    robust
        Set outliers aside, see the module docstring.

    Returns
    -------
    DistortionFit

    Raises
    ------
    SpectrumError
        If an argument is out of range, there are too few points, or the points cannot tell the
        terms apart.

    """
    wave, y, sigma = _points(wavelength, velocity, error)
    kinds = _check_terms(terms, order_edges, order_spacing)
    if wave.size < len(kinds):
        raise SpectrumError(
            f"distortion fit: {wave.size} points cannot determine {len(kinds)} terms"
        )
    if pivot is None:
        pivot = float(np.round(np.sum(wave / sigma**2) / np.sum(1.0 / sigma**2)))
    if not (math.isfinite(pivot) and pivot > 0.0):
        raise SpectrumError(f"distortion fit: the pivot must be a positive wavelength in Å, "
                            f"found {pivot!r}")  # fmt: skip
    basis = _basis(wave, kinds, pivot, _edges(wave, pivot, order_edges, order_spacing))
    _check_rank(basis / sigma[:, None], kinds)
    used = np.ones(wave.size, dtype=bool)
    if robust:
        used = _without_outliers(basis, y, sigma, scatter)
        _check_rank((basis / sigma[:, None])[used], kinds)
    basis, y, sigma = basis[used], y[used], sigma[used]

    ndof = y.size - len(kinds)
    theta, _ = _solve(basis, y, sigma**-2.0)
    chi2_nu = float(np.sum(((y - basis @ theta) / sigma) ** 2)) / ndof if ndof else None
    best, best_error, limit = 0.0, None, None
    if scatter and ndof:
        best, best_error, limit = _scatter(basis, y, sigma)
    theta, covariance = _solve(basis, y, 1.0 / (sigma**2 + best**2))
    errors = np.sqrt(np.diag(covariance))
    return DistortionFit(
        terms=tuple(
            FittedTerm(
                kind, float(v), float(e), math.hypot(float(e), best if kind == "shift" else 0.0)
            )
            for kind, v, e in zip(kinds, theta, errors, strict=True)
        ),
        covariance=covariance,
        chi2_nu=chi2_nu,
        ndof=ndof,
        scatter=best,
        scatter_error=best_error,
        scatter_limit=limit,
        pivot=pivot,
        order_edges=None if order_edges is None else tuple(float(e) for e in order_edges),
        order_spacing=order_spacing,
        used=used,
    )


def _points(
    wavelength: ArrayLike, velocity: ArrayLike, error: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray]:
    arrays = [np.asarray(values, dtype=np.float64) for values in (wavelength, velocity, error)]
    shapes = {values.shape for values in arrays}
    if len(shapes) != 1 or arrays[0].ndim != 1:
        raise SpectrumError(
            "distortion fit: wavelength, velocity and error must have one shape (n,), found "
            + ", ".join(str(values.shape) for values in arrays)
        )
    wave, y, sigma = arrays
    bad = ~(np.isfinite(wave) & np.isfinite(y) & np.isfinite(sigma) & (wave > 0) & (sigma > 0))
    if bad.any():
        at = int(np.argmax(bad))
        raise SpectrumError(
            f"distortion fit: point {at + 1} is wavelength {wave[at]:g}, velocity {y[at]:g}, error "
            f"{sigma[at]:g}; expected finite numbers, wavelength and error positive"
        )
    return wave, y, sigma


def _check_terms(
    terms: Sequence[str], edges: Sequence[float] | None, spacing: float | None
) -> list[str]:
    kinds = list(terms)
    for kind in kinds:
        if kind not in TERMS:
            raise SpectrumError(
                f"distortion fit: unknown term {kind!r}; expected some of {', '.join(TERMS)}"
            )
    if not kinds or len(set(kinds)) != len(kinds):
        raise SpectrumError(f"distortion fit: each term once, at least one; found {kinds}")
    if edges is not None and spacing is not None:
        raise SpectrumError("distortion fit: give order edges or an order spacing, not both")
    if "sawtooth" in kinds and edges is None and spacing is None:
        raise SpectrumError(
            "distortion fit: a sawtooth needs the echelle orders: their edges or their spacing in Å"
        )
    return kinds


def _edges(
    wave: FloatArray, pivot: float, edges: Sequence[float] | None, spacing: float | None
) -> FloatArray | None:
    if edges is not None:
        return np.asarray(edges, dtype=np.float64)
    if spacing is not None and wave.size:
        low, high = float(wave.min()), float(wave.max())
        return order_edges_from_spacing(low, max(high, low + 0.5 * spacing), pivot, spacing)
    return None


def _basis(
    wave: FloatArray, kinds: Sequence[str], pivot: float, edges: FloatArray | None
) -> FloatArray:
    makers: Mapping[str, Callable[[], FloatArray]] = {
        "shift": lambda: shift_basis(wave),
        "slope": lambda: slope_basis(wave, pivot),
        "sawtooth": lambda: sawtooth_basis(wave, np.empty(0) if edges is None else edges),
    }
    return np.column_stack([makers[kind]() for kind in kinds])


def _check_rank(matrix: FloatArray, kinds: Sequence[str]) -> None:
    size = np.sqrt(np.sum(matrix**2, axis=0))
    if np.all(size > 0.0):
        values = np.linalg.svd(matrix / size, compute_uv=False)
        if matrix.shape[0] >= len(kinds) and values[-1] > 1e-6 * values[0]:
            return
    raise SpectrumError(
        f"distortion fit: the points cannot tell the terms {', '.join(kinds)} apart; add "
        "points at other wavelengths, or fit fewer terms"
    )


def _solve(basis: FloatArray, y: FloatArray, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    root = np.sqrt(weight)
    q, r = np.linalg.qr(root[:, None] * basis)
    inverse = np.linalg.inv(r)
    theta: FloatArray = inverse @ (q.T @ (root * y))
    return theta, inverse @ inverse.T


def _log_likelihood(s: float, basis: FloatArray, y: FloatArray, sigma: FloatArray) -> float:
    weight = 1.0 / (sigma**2 + s**2)
    theta, covariance = _solve(basis, y, weight)
    residual = y - basis @ theta
    determinant = np.linalg.slogdet(covariance)[1]
    return float(0.5 * (np.sum(np.log(weight)) + determinant - np.sum(weight * residual**2)))


def _scatter(
    basis: FloatArray, y: FloatArray, sigma: FloatArray
) -> tuple[float, float | None, float]:
    """Scatter of best likelihood, its error, and its 95 % limit, m/s."""

    def value(s: float) -> float:
        return _log_likelihood(s, basis, y, sigma)

    theta, _ = _solve(basis, y, np.ones_like(y))
    # far above any plausible scatter, so that the limit lies below
    unit = float(np.median(sigma))
    top = 100.0 * (float(np.std(y - basis @ theta)) + unit)
    # ln L can have two maxima when few points have very different errors: look everywhere first
    grid = np.concatenate(([0.0], np.geomspace(1e-3 * unit, top, 80)))
    likelihood = np.array([value(s) for s in grid])
    at = int(np.argmax(likelihood))
    best = 0.0
    if at > 0:
        bounds = (float(grid[at - 1]), float(grid[min(at + 1, grid.size - 1)]))
        found = minimize_scalar(
            lambda s: -value(s), bounds=bounds, method="bounded", options={"xatol": 1e-6 * unit}
        )
        best = float(found.x)
    highest = value(best)
    if likelihood[0] >= highest:
        best, highest = 0.0, float(likelihood[0])
    if value(top) > highest - _DROP:
        limit = top  # one degree of freedom or so: the data hardly limit the scatter
    else:
        limit = float(brentq(lambda s: value(s) - highest + _DROP, best, top))
    error = None
    if highest - likelihood[0] > _DROP:
        step = 0.02 * best
        curvature = (value(best + step) - 2.0 * highest + value(best - step)) / step**2
        error = float((-curvature) ** -0.5) if curvature < 0.0 else None
    return best, error, limit


def _without_outliers(
    basis: FloatArray, y: FloatArray, sigma: FloatArray, scatter: bool
) -> BoolArray:
    weight = sigma**-2.0
    theta, _ = _solve(basis, y, weight)
    for _ in range(100):  # least absolute deviations by reweighting
        z = np.abs(y - basis @ theta) / sigma
        theta, _ = _solve(basis, y, weight / np.maximum(z, 1e-3))
    residual = np.abs(y - basis @ theta)
    typical = (_MAD * float(np.median(residual))) ** 2 - float(np.median(sigma)) ** 2
    s = math.sqrt(max(typical, 0.0)) if scatter else 0.0
    used = np.ones(y.size, dtype=bool)
    for _ in range(20):
        keep = residual <= _FAR * np.sqrt(sigma**2 + s**2)
        if np.count_nonzero(keep) < (1.0 - _MOST_SET_ASIDE) * y.size:
            raise SpectrumError(
                f"distortion fit: {np.count_nonzero(~keep)} of {y.size} points are outliers; the "
                "errors are too small or the terms do not describe the shifts"
            )
        if np.array_equal(keep, used):
            break
        used = keep
        if scatter and np.count_nonzero(used) > basis.shape[1]:
            s = _scatter(basis[used], y[used], sigma[used])[0]
        theta, _ = _solve(basis[used], y[used], 1.0 / (sigma[used] ** 2 + s**2))
        residual = np.abs(y - basis @ theta)
    return used
