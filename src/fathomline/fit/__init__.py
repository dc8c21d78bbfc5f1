"""Least squares, covariance, and the proof of convergence."""

from fathomline.fit.covariance import Covariance, covariance_from_jacobian
from fathomline.fit.fitting import CAUTIONS, FLAGS, FitSettings, fit_model
from fathomline.fit.least_squares import Minimum, minimise
from fathomline.fit.lmfit_bridge import free_vector, minimise_with_lmfit, to_lmfit
from fathomline.fit.result import FitResult, Restart, aicc
from fathomline.fit.structure import (
    CRITERIA,
    Found,
    SearchSettings,
    Step,
    search_structure,
)
from fathomline.fit.template import WIDTH_LIMITS, Cloud, Interloper, Template

__all__ = [
    "CAUTIONS",
    "CRITERIA",
    "FLAGS",
    "WIDTH_LIMITS",
    "Cloud",
    "Covariance",
    "FitResult",
    "FitSettings",
    "Found",
    "Interloper",
    "Minimum",
    "Restart",
    "SearchSettings",
    "Step",
    "Template",
    "aicc",
    "covariance_from_jacobian",
    "fit_model",
    "free_vector",
    "minimise",
    "minimise_with_lmfit",
    "search_structure",
    "to_lmfit",
]
