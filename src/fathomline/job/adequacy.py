"""Is the model adequate? Tests of the residuals of each region, and signs of too many components.

For the normalised residuals r_1 … r_n of a region, in order of wavelength:

* χ² with the probability that noise alone exceeds it, for n degrees of freedom (the parameters that
  a region uses up are shared with the others, so a small probability is on the safe side);
* the number of runs of equal sign against its expectation, in units of its scatter (Wald &
  Wolfowitz 1940, Annals of Mathematical Statistics 11, 147); negative: the residuals wander;
* the correlation of neighbours, Σ r_i r_{i+1}/Σ r_i², whose scatter is about 1/√n for white noise;
* the same for residuals averaged over all regions in bins of velocity (the composite residual),
  where a component that is missing in every transition adds up.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2 as chi2_distribution

from fathomline.fit import FitResult
from fathomline.job.building import BuiltModel
from fathomline.model import SegmentPrediction
from fathomline.spectra import FWHM_PER_SIGMA

__all__ = ["Adequacy", "ResidualTests", "composite_residual", "judge", "residual_tests"]

Array = NDArray[np.float64]

_UNLIKELY = 1e-3  # probability of χ² below which a region is called poor
_WANDERING = 3.0  # σ of runs or of the correlation
_NARROW = 1.0 / 3.0  # of the line-spread function


@dataclass(frozen=True, slots=True)
class ResidualTests:
    """Tests of a series of normalised residuals.

    Attributes
    ----------
    n : int
    chi2, probability : float
        χ², and the chance that noise exceeds it.
    runs : float
        (runs − expected)/scatter; 0 when all have one sign or there are fewer than 10.
    correlation : float
        Of neighbours.

    """

    n: int
    chi2: float
    probability: float
    runs: float
    correlation: float

    def problems(self, expected_correlation: float = 0.0) -> list[str]:
        """What speaks against noise, in words; `expected_correlation` is that of the data."""
        found = []
        if self.probability < _UNLIKELY:
            found.append("chi2 too high")
        excess = self.correlation - expected_correlation
        if self.n >= 10 and excess * math.sqrt(self.n) > _WANDERING:
            found.append("neighbouring residuals correlated")
        if expected_correlation == 0.0 and self.runs < -_WANDERING:
            found.append("too few runs")
        return found


@dataclass(frozen=True)
class Adequacy:
    """How adequate a model is.

    Attributes
    ----------
    regions : tuple of ResidualTests
        In the order of the job's regions.
    region_problems : tuple of tuple of str
    composite : ResidualTests
        Of the composite residual.
    overfitting : tuple of str
        One sentence for each sign of too many or too narrow components.

    """

    regions: tuple[ResidualTests, ...]
    region_problems: tuple[tuple[str, ...], ...]
    composite: ResidualTests
    overfitting: tuple[str, ...]


def residual_tests(residuals: Array) -> ResidualTests:
    """Tests of normalised residuals (n,), in order."""
    n = residuals.size
    chi2 = float(residuals @ residuals)
    positive = residuals > 0.0
    n_up, n_down = int(positive.sum()), int((~positive).sum())
    runs = 0.0
    if n >= 10 and n_up and n_down:
        count = 1 + int(np.count_nonzero(positive[1:] != positive[:-1]))
        expected = 1.0 + 2.0 * n_up * n_down / n
        variance = (expected - 1.0) * (expected - 2.0) / (n - 1.0)
        runs = (count - expected) / math.sqrt(variance) if variance > 0.0 else 0.0
    correlation = float(residuals[1:] @ residuals[:-1]) / chi2 if n > 1 and chi2 > 0.0 else 0.0
    return ResidualTests(n, chi2, float(chi2_distribution.sf(chi2, n)), runs, correlation)


def composite_residual(
    built: BuiltModel, predictions: Sequence[SegmentPrediction], width: float
) -> tuple[Array, Array, Array]:
    """Residuals of the absorber's regions averaged in bins of velocity.

    Parameters
    ----------
    built, predictions
        Of one measurement.
    width : float
        Of a bin, km/s.

    Returns
    -------
    array (m,), array (m,), array (m,)
        Middle of each bin (km/s), mean residual times the square root of the number of residuals
        (unit scatter for noise), and that number.

    """
    velocity, residual = [], []
    for segment, prediction in zip(built.model.segments, predictions, strict=True):
        if built.job.regions[segment.region].redshift is None:
            velocity.append(segment.velocity[segment.good])
            residual.append(prediction.residual[segment.good])
    bins = np.floor(np.concatenate(velocity) / width).astype(int)
    values = np.concatenate(residual)
    labels, place = np.unique(bins, return_inverse=True)
    count = np.bincount(place).astype(np.float64)
    scaled = np.bincount(place, values) / np.sqrt(count)
    return (labels + 0.5) * width, scaled, count


def judge(
    built: BuiltModel,
    fit: FitResult,
    predictions: Sequence[SegmentPrediction],
    correlation: dict[str, float],
) -> Adequacy:
    """Judge a fitted model; `correlation` is that of neighbouring pixels by spectrum, if known."""
    model = built.model
    tests, problems = [], []
    for i in range(len(built.job.regions)):
        own = [k for k, segment in enumerate(model.segments) if segment.region == i]
        series = np.concatenate(
            [predictions[k].residual[model.segments[k].good] for k in own] or [np.zeros(0)]
        )
        expected = max((correlation.get(model.segments[k].spectrum, 0.0) for k in own), default=0.0)
        test = residual_tests(series)
        tests.append(test)
        problems.append(tuple(test.problems(expected)))
    pixel = np.median(
        [
            np.median(np.diff(segment.velocity))
            for segment in model.segments
            if segment.good.size > 1
        ]
    )
    _, composite, _ = composite_residual(built, predictions, float(pixel))
    return Adequacy(
        tuple(tests), tuple(problems), residual_tests(composite), _overfitting(built, fit)
    )


def _overfitting(built: BuiltModel, fit: FitResult) -> tuple[str, ...]:
    """Signs of too many components."""
    sentences = []
    model = built.model
    narrowest = min(float(fit.values[model.parameters.names[s.fwhm]]) for s in model.segments)
    places: list[tuple[float, float, int]] = []
    for k, component in enumerate(built.job.components, start=1):
        name = f"component[{k}]"
        width = fit.values.get(f"{name}.b")
        if (
            width is not None
            and width * math.sqrt(2.0) / 2.0 * FWHM_PER_SIGMA < _NARROW * narrowest
        ):
            sentences.append(
                f"component {k} is narrower (b = {width:.2f} km/s) than a third of the line-spread "
                "function"
            )
        sigma = fit.sigma(f"{name}.velocity") or 0.0
        places.append((fit.values[f"{name}.velocity"], sigma, k))
        for ion in component.logN:
            error = fit.sigma(f'{name}.logN["{ion}"]')
            if error is not None and error > 1.0 / math.log(10.0) / 2.0:
                sentences.append(
                    f"component {k}: the column density of {ion} is below its detection limit "
                    f"(error {error:.2f} dex)"
                )
    places.sort()
    for (v, sigma, k), (v2, sigma2, k2) in pairwise(places):
        if v2 - v < math.hypot(sigma, sigma2):
            sentences.append(
                f"components {k} and {k2} are closer ({v2 - v:.2f} km/s) than the error of their "
                "distance"
            )
    return tuple(sentences)
