"""To and from lmfit: a second opinion on the minimum by an independent minimiser.

`to_lmfit` and `from_lmfit` carry parameters and results across; `minimise_with_lmfit` runs
MINPACK's Levenberg–Marquardt through `lmfit.Minimizer` with the model's analytic Jacobian. Errors
are never rescaled (``scale_covar=False``).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fathomline.fit.least_squares import Minimum
from fathomline.model import ParameterSet

if TYPE_CHECKING:
    import lmfit

__all__ = ["free_vector", "minimise_with_lmfit", "to_lmfit"]

Array = NDArray[np.float64]


def _key(i: int) -> str:
    # lmfit wants Python identifiers; the name of the parameter goes along as user_data
    return f"p{i}"


def to_lmfit(parameters: ParameterSet, free: Array | None = None) -> lmfit.Parameters:
    """`lmfit.Parameters` of the free parameters.

    Parameters
    ----------
    parameters : ParameterSet
    free : array (n_free,), optional
        Values; default: the start values.

    Returns
    -------
    lmfit.Parameters
        Named p0, p1, …; ``user_data`` holds the parameter's own name. Ties and fixed parameters
        stay inside the model: each tied group is one free parameter.

    """
    import lmfit

    values = parameters.start if free is None else free
    out = lmfit.Parameters()
    for i, (name, value) in enumerate(zip(parameters.free_names, values, strict=True)):
        low, high = parameters.lower[i], parameters.upper[i]
        out.add(_key(i), value=float(value), min=float(low), max=float(high))
        out[_key(i)].user_data = name
    return out


def free_vector(parameters: ParameterSet, values: lmfit.Parameters) -> Array:
    """Free vector (n_free,) from `lmfit.Parameters` made by `to_lmfit` (or from a result's)."""
    return np.array([values[_key(i)].value for i in range(len(parameters.free_names))])


def minimise_with_lmfit(
    function: Callable[[Array], tuple[Array, Array]],
    parameters: ParameterSet,
    start: Array,
    *,
    max_evaluations: int = 5000,
) -> tuple[Minimum, Any]:
    """Minimise with `lmfit.minimize(method="leastsq")`.

    Returns
    -------
    Minimum, lmfit.minimizer.MinimizerResult

    """
    import lmfit

    count = 0

    def residual(values: lmfit.Parameters) -> Array:
        nonlocal count
        count += 1
        return function(free_vector(parameters, values))[0]

    def jacobian(values: lmfit.Parameters) -> Array:
        return function(free_vector(parameters, values))[1].T

    # MINPACK evaluates at least twice: started exactly on a bound it would not move
    inside = _inside(start, parameters.lower, parameters.upper)
    minimizer = lmfit.Minimizer(
        residual, to_lmfit(parameters, inside), scale_covar=False, max_nfev=max_evaluations
    )
    outcome = minimizer.minimize(
        method="leastsq", Dfun=jacobian, col_deriv=True, ftol=1e-14, xtol=1e-12, gtol=1e-14
    )
    x = free_vector(parameters, outcome.params)
    r, J = function(x)
    gradient = J.T @ r
    width = np.minimum(x - parameters.lower, parameters.upper - x)
    at_bound = width < 1e-6 * np.maximum(1.0, np.abs(x))
    step = np.linalg.lstsq(J[:, ~at_bound], -r, rcond=None)[0]
    edm = float(-step @ gradient[~at_bound])
    return (
        Minimum(
            x=x,
            residual=r,
            jacobian=J,
            chi2=float(r @ r),
            edm=edm,
            at_bound=at_bound,
            converged=bool(outcome.success) and edm < 1e-4,
            message=str(outcome.message).replace("\n", " "),
            n_evaluations=count,
            n_iterations=count,
        ),
        outcome,
    )


def _inside(x: Array, lower: Array, upper: Array) -> Array:
    span = np.where(np.isfinite(upper - lower), upper - lower, 1.0)
    low = np.where(np.isfinite(lower), lower + 1e-3 * span, -np.inf)
    high = np.where(np.isfinite(upper), upper - 1e-3 * span, np.inf)
    clipped: Array = np.clip(x, low, high)
    return clipped
