"""The main job: from a job file to a measurement, without writing anything."""

from __future__ import annotations

import platform
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from importlib import metadata
from typing import Any

import numpy as np
from numpy.typing import NDArray

import fathomline
from fathomline.fit import CAUTIONS, FLAGS, FitResult, FitSettings, fit_model
from fathomline.job.building import ALPHA, BuiltModel, build_model, load_atoms, load_spectra
from fathomline.job.digest import job_digest
from fathomline.job.schema import Job
from fathomline.model import SegmentPrediction

__all__ = ["STAT_ONLY", "Measurement", "RegionShare", "measure"]

Array = NDArray[np.float64]
Progress = Callable[[str, float | None], None]

STAT_ONLY = "stat-only"
"""Flag of a result without a systematic error budget."""

_MAX_RESAMPLINGS = 4


@dataclass(frozen=True, slots=True)
class RegionShare:
    """What one transition contributes to the measurement.

    Attributes
    ----------
    transition : str
    n_pixels : int
        Fitted pixels.
    snr : float
        Median signal-to-noise ratio of a pixel at the fitted continuum.
    information : float
        Share of the information on Δα/α: of the squared length of the Jacobian column of Δα/α after
        projection on what no other parameter can imitate. The shares sum to 1.
    chi2 : float
        χ² of its pixels.

    """

    transition: str
    n_pixels: int
    snr: float
    information: float
    chi2: float


@dataclass(frozen=True)
class Measurement:
    """A measured absorber.

    Attributes
    ----------
    built : BuiltModel
        Job, spectra, atomic data and the model as fitted.
    fit : FitResult
    predictions : list of SegmentPrediction
        In the order of the model's segments.
    shares : list of RegionShare
        In the order of the job's regions.
    resamplings : int
        How often the fine grid was made finer during the fit.
    digest : str
        Of the job.
    timings : dict
        Seconds by stage.
    started : datetime
    warnings : list of str

    """

    built: BuiltModel
    fit: FitResult
    predictions: list[SegmentPrediction]
    shares: list[RegionShare]
    resamplings: int
    digest: str
    timings: dict[str, float]
    started: datetime
    warnings: list[str] = field(default_factory=list)

    @property
    def job(self) -> Job:
        """The job as it was read."""
        return self.built.job

    @property
    def dalpha(self) -> float:
        """Δα/α, ppm."""
        return self.fit.values[ALPHA]

    @property
    def stat(self) -> float | None:
        """Statistical error of Δα/α, ppm; None when `flags` say why there is none."""
        return self.fit.sigma(ALPHA)

    @property
    def flags(self) -> tuple[str, ...]:
        """All flags of the row in the measurement table."""
        return (*self.fit.flags, STAT_ONLY)

    def flag_meanings(self) -> dict[str, str]:
        """The flags of this measurement and what they mean."""
        meanings = {**FLAGS, **CAUTIONS, STAT_ONLY: "no systematic error budget was made"}
        return {flag: meanings[flag] for flag in self.flags}

    def error(self, name: str) -> float | str:
        """1σ error of a parameter, or the reason why it has none.

        The reason is ``fixed``, ``at bound`` or ``singular``. The error of a tied parameter is that
        of its target times the ratio.
        """
        parameters = self.built.model.parameters
        i = parameters.position(name)
        if parameters.ratio[i] == 0.0:
            return "fixed"
        root = parameters.free_names[parameters.index[i]]
        sigma = self.fit.covariance.sigma(root)
        if sigma is None:
            return self.fit.covariance.reasons[root]
        return abs(float(parameters.ratio[i])) * sigma

    @property
    def trustworthy(self) -> bool:
        """Whether no flag says that the result should not be trusted."""
        return not any(flag in FLAGS for flag in self.fit.flags)

    def versions(self) -> dict[str, str]:
        """Versions of this program, of Python and of the numerical packages."""
        packages = ("numpy", "scipy", "astropy", "lmfit", "matplotlib", "pydantic")
        found: dict[str, str] = {
            "fathomline": fathomline.__version__,
            "python": platform.python_version(),
        }
        for package in packages:
            found[package] = metadata.version(package)
        return found

    def provenance(self) -> dict[str, Any]:
        """Everything that run.json records."""
        model = self.built.model
        return {
            "job": self.job.absorber.name,
            "job_digest": self.digest,
            "started": self.started.isoformat(timespec="seconds"),
            "versions": self.versions(),
            "inputs": [s.reading.to_dict() for s in self.built.spectra],
            "atomic_data": {
                "structure": self.job.atomic.structure,
                "tables": self.built.atoms.digests,
            },
            "fit": {
                "solver": self.fit.solver,
                "seed": self.job.fit.seed,
                "message": self.fit.message,
                "edm": self.fit.edm,
                "condition": self.fit.covariance.condition,
                "n_iterations": self.fit.n_iterations,
                "n_evaluations": self.fit.n_evaluations,
                "restarts": [
                    {
                        "start_dalpha_ppm": r.start_dalpha,
                        "shift_sigma": r.shift_sigma,
                        "chi2_change": r.chi2_change,
                        "outcome": r.outcome,
                    }
                    for r in self.fit.restarts
                ],
                "errors_withheld": self.fit.covariance.reasons,
            },
            "sampling": {"fine_grid_kms": list(model.spacings), "resamplings": self.resamplings},
            "timings_s": {name: round(value, 3) for name, value in self.timings.items()},
            "warnings": self.warnings,
        }


def _shares(
    built: BuiltModel, fit: FitResult, predictions: list[SegmentPrediction]
) -> list[RegionShare]:
    model = built.model
    residual, jacobian = model.residuals_and_jacobian(fit.free)
    projected = _alpha_alone(model.parameters.free_names, jacobian)
    total = float(projected @ projected)
    shares = []
    for i, transition in enumerate(built.transitions):
        own = [k for k, segment in enumerate(model.segments) if segment.region == i]
        rows = np.concatenate([np.arange(model.rows[k], model.rows[k + 1]) for k in own])
        snr = np.concatenate(
            [
                predictions[k].continuum[model.segments[k].good]
                / model.segments[k].error[model.segments[k].good]
                for k in own
            ]
        )
        part = float(projected[rows] @ projected[rows])
        shares.append(
            RegionShare(
                transition=transition.name,
                n_pixels=rows.size,
                snr=float(np.median(snr)),
                information=part / total if total > 0.0 else 0.0,
                chi2=float(residual[rows] @ residual[rows]),
            )
        )
    return shares


def _alpha_alone(names: tuple[str, ...], jacobian: Array) -> Array:
    """The column of Δα/α minus its projection on all other columns; zeros if it is not free."""
    if ALPHA not in names:
        return np.zeros(jacobian.shape[0])
    i = names.index(ALPHA)
    column = jacobian[:, i]
    others = np.delete(jacobian, i, axis=1)
    norm = np.sqrt((others**2).sum(axis=0))
    others = others[:, norm > 0.0] / norm[norm > 0.0]
    solution = np.linalg.lstsq(others, column, rcond=1e-10)[0]
    left: Array = column - others @ solution
    return left


def measure(job: Job, *, progress: Progress | None = None) -> Measurement:
    """Measure Δα/α for one absorber.

    Reads the spectra, builds the model, fits it, proves the convergence by restarts, and repeats
    the fit on a finer grid if the fitted lines turn out to need one.

    Parameters
    ----------
    job : Job
    progress : callable, optional
        Called with a text and, during fits, χ².

    Raises
    ------
    JobError
        The job does not fit its spectra; all faults at once.

    """

    def tell(text: str, chi2: float | None = None) -> None:
        if progress is not None:
            progress(text, chi2)

    started, clock = datetime.now(UTC), time.perf_counter()
    timings: dict[str, float] = {}

    def lap(stage: str) -> None:
        nonlocal clock
        now = time.perf_counter()
        timings[stage] = now - clock
        clock = now

    tell("reading spectra")
    spectra = load_spectra(job)
    lap("read")
    built = build_model(job, spectra, load_atoms(job))
    settings = FitSettings(
        solver=job.fit.solver,
        restarts=job.fit.restarts,
        max_iterations=job.fit.max_iterations,
        seed=job.fit.seed,
    )
    lap("build")
    built, fit, resamplings = _fit_with_fine_enough_grid(built, settings, tell)
    lap("fit")
    predictions = built.model.predict(fit.free)
    shares = _shares(built, fit, predictions)
    lap("tables")
    warnings = [
        f"{spectrum.name}: {text}" for spectrum in spectra for text in spectrum.reading.warnings
    ]
    return Measurement(
        built, fit, predictions, shares, resamplings, job_digest(job), timings, started, warnings
    )


def _fit_with_fine_enough_grid(
    built: BuiltModel, settings: FitSettings, tell: Progress
) -> tuple[BuiltModel, FitResult, int]:
    # restarts are for the final model: a first fit without them finds out how fine the grid must be
    model = built.model
    start: Array = model.parameters.start
    resamplings = iterations = evaluations = 0
    while True:
        first = fit_model(model, replace(settings, restarts=0), start=start, progress=tell)
        iterations += first.n_iterations
        evaluations += first.n_evaluations
        finer = model.resampled(first.free, refine=1.0)
        if finer is None or resamplings == _MAX_RESAMPLINGS:
            break
        model, start, resamplings = finer, first.free, resamplings + 1
    fit = fit_model(model, settings, start=first.free, progress=tell)
    fit = replace(
        fit,
        n_iterations=fit.n_iterations + iterations,
        n_evaluations=fit.n_evaluations + evaluations,
    )
    return (
        BuiltModel(built.job, built.spectra, built.atoms, model, built.transitions),
        fit,
        resamplings,
    )
