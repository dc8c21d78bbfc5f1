"""The fit of one model: minimise, then show that the minimum does not depend on the start.

After convergence the fit is repeated from perturbed values: all parameters drawn together from
their covariance about the best values, and then Δα/α alone moved to ±10 σ in turn. A restart has
returned when Δα/α agrees to 0.02 σ and χ² to 0.01. One that converges at a higher χ² has found
another, worse minimum, which is told but proves nothing against the better one. When a restart
finds a lower χ² it becomes the result, and the restarts begin anew. A fit is called converged only
when the minimiser converged and every restart returned or ended in a worse minimum.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.errors import FitError
from fathomline.fit.covariance import SINGULAR, Covariance, covariance_from_jacobian
from fathomline.fit.least_squares import Minimum, minimise
from fathomline.fit.lmfit_bridge import minimise_with_lmfit
from fathomline.fit.result import FitResult, Outcome, Restart
from fathomline.model import AbsorberModel

__all__ = ["CAUTIONS", "FLAGS", "FitSettings", "fit_model"]

Array = NDArray[np.float64]
Progress = Callable[[str, float], None]

FLAGS = {
    "not-converged": "the minimiser stopped before it reached the minimum",
    "restart-differs": "a restart from other values ended elsewhere at no higher χ²",
    "no-error": "Δα/α has no error: the data do not constrain it alone",
    "alpha-at-bound": "Δα/α lies at a bound",
    "poor-fit": "χ²/ν is above 1.5",
    "no-freedom": "there are no more data than free parameters",
}
"""Flags of a result that should not be trusted, and what they mean."""

CAUTIONS = {
    "other-minimum": "a restart ended in another minimum, with a higher χ²",
    "at-bound": "a component parameter lies at a bound",
    "singular": "a parameter other than Δα/α is not constrained by the data",
}
"""Flags that ask for a look but leave Δα/α valid."""

RESTART_SHIFT = 10.0  # σ of Δα/α
_RETURN_SIGMA = 0.02
_RETURN_CHI2 = 0.01
_FARTHEST_DEX = 0.5  # that a restart moves a column density
_MAX_ROUNDS = 5
_POOR_CHI2_NU = 1.5


@dataclass(frozen=True, slots=True)
class FitSettings:
    """How to fit.

    Attributes
    ----------
    solver : {"default", "lmfit"}
    restarts : int
        Number of restarts after convergence.
    max_iterations : int
    seed : int
        Of the restarts' random draws.

    """

    solver: str = "default"
    restarts: int = 4
    max_iterations: int = 200
    seed: int = 1


def _solve(
    model: AbsorberModel,
    start: Array,
    settings: FitSettings,
    report: Callable[[int, float], None] | None = None,
) -> Minimum:
    parameters = model.parameters
    if settings.solver == "lmfit":
        return minimise_with_lmfit(model.residuals_and_jacobian, parameters, start)[0]
    if settings.solver != "default":
        raise FitError(f"unknown solver {settings.solver!r}; use 'default' or 'lmfit'")
    return minimise(
        model.residuals_and_jacobian,
        start,
        parameters.lower,
        parameters.upper,
        max_iterations=settings.max_iterations,
        report=report,
    )


def fit_model(
    model: AbsorberModel,
    settings: FitSettings | None = None,
    *,
    start: Array | None = None,
    progress: Progress | None = None,
) -> FitResult:
    """Fit a model from its start values and prove the convergence by restarts.

    Parameters
    ----------
    model : AbsorberModel
    settings : FitSettings, optional
    start : array (n_free,), optional
        Start instead of the values in the model's parameters.
    progress : callable, optional
        Called with a text and χ² as the fit goes on.

    Raises
    ------
    FitError
        Nothing is free, or the solver is unknown.

    """
    settings = settings or FitSettings()
    parameters = model.parameters
    if not parameters.free_names:
        raise FitError(
            "nothing is free in this fit: every parameter is fixed or tied to a fixed one"
        )

    def tell(stage: str) -> Callable[[int, float], None] | None:
        if progress is None:
            return None
        return lambda iteration, chi2: progress(f"{stage}, iteration {iteration}", chi2)

    best = _solve(model, parameters.start if start is None else start, settings, tell("fit"))
    rng = np.random.default_rng(settings.seed)
    restarts: list[Restart] = []
    for _ in range(_MAX_ROUNDS):
        covariance = covariance_from_jacobian(best.jacobian, parameters.free_names, best.at_bound)
        restarts, better = _restart(model, best, covariance, settings, rng, tell)
        if better is None:
            break
        best = better
    covariance = covariance_from_jacobian(best.jacobian, parameters.free_names, best.at_bound)
    return _record(model, best, covariance, tuple(restarts), settings)


def _restart(
    model: AbsorberModel,
    best: Minimum,
    covariance: Covariance,
    settings: FitSettings,
    rng: np.random.Generator,
    tell: Callable[[str], Callable[[int, float], None] | None],
) -> tuple[list[Restart], Minimum | None]:
    """All restarts from around `best`; stops early with a better minimum if one is found."""
    parameters = model.parameters
    sigmas, spread = covariance.sigmas, covariance.root()
    alpha = _free_alpha(model)
    # the error of a blended column may be dexes: a start there is in another absorber
    farthest = np.array(
        [
            _FARTHEST_DEX if parameters[i].unit.startswith("log10") else np.inf
            for i in parameters.free_positions
        ]
    )
    records: list[Restart] = []
    for k in range(settings.restarts):
        draw = spread @ rng.standard_normal(best.x.size)
        start = best.x + np.clip(draw, -farthest, farthest)
        if alpha is not None:
            start[alpha] = best.x[alpha] + (-1) ** k * RESTART_SHIFT * sigmas[alpha]
        start = np.clip(start, parameters.lower, parameters.upper)
        found = _solve(model, start, settings, tell(f"restart {k + 1} of {settings.restarts}"))
        shift = 0.0
        if alpha is not None and sigmas[alpha] > 0.0:
            shift = float((found.x[alpha] - best.x[alpha]) / sigmas[alpha])
        change = found.chi2 - best.chi2
        close = abs(shift) <= _RETURN_SIGMA and abs(change) <= _RETURN_CHI2
        outcome: Outcome = "differs"
        if not found.converged:
            outcome = "not converged"
        elif close:
            outcome = "returned"
        elif change > _RETURN_CHI2:
            outcome = "worse minimum"
        records.append(
            Restart(
                start_dalpha=float(start[alpha]) if alpha is not None else 0.0,
                shift_sigma=shift,
                chi2_change=change,
                outcome=outcome,
                n_evaluations=found.n_evaluations,
            )
        )
        if change < -_RETURN_CHI2 or (found.converged and not best.converged and change <= 0.0):
            return records, found
    return records, None


def _free_alpha(model: AbsorberModel) -> int | None:
    """Index of Δα/α among the free parameters, if it is free."""
    if model.parameters.ratio[model.alpha] == 0.0:
        return None
    return int(model.parameters.index[model.alpha])


def _record(
    model: AbsorberModel,
    best: Minimum,
    covariance: Covariance,
    restarts: tuple[Restart, ...],
    settings: FitSettings,
) -> FitResult:
    parameters = model.parameters
    n_priors = best.residual.size - model.n_data
    ndof = best.residual.size - best.x.size
    flags = []
    if not best.converged:
        flags.append("not-converged")
    outcomes = {restart.outcome for restart in restarts}
    proved = outcomes <= {"returned", "worse minimum"}
    if not proved:
        flags.append("restart-differs")
    if "worse minimum" in outcomes:
        flags.append("other-minimum")
    alpha = _free_alpha(model)
    if alpha is not None:
        if best.at_bound[alpha]:
            flags.append("alpha-at-bound")
        elif parameters.free_names[alpha] in covariance.reasons:
            flags.append("no-error")
    others = [i for i in np.flatnonzero(best.at_bound) if i != alpha]
    if others:
        flags.append("at-bound")
    if any(covariance.reasons[name] == SINGULAR for name in covariance.reasons):
        flags.append("singular")
    if ndof <= 0:
        flags.append("no-freedom")
    elif best.chi2 / ndof > _POOR_CHI2_NU:
        flags.append("poor-fit")
    return FitResult(
        values=dict(zip(parameters.names, parameters.expand(best.x).tolist(), strict=True)),
        free=best.x,
        covariance=covariance,
        chi2=best.chi2,
        n_data=model.n_data,
        n_priors=n_priors,
        edm=best.edm,
        converged=best.converged and proved,
        message=best.message,
        flags=tuple(flags),
        restarts=restarts,
        solver=settings.solver,
        n_evaluations=best.n_evaluations,
        n_iterations=best.n_iterations,
    )
