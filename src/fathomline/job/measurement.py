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
from fathomline.atomic import AtomicData
from fathomline.errors import JobError
from fathomline.fit import CAUTIONS, FLAGS, FitResult, FitSettings, Step, fit_model
from fathomline.job.adequacy import Adequacy, judge
from fathomline.job.building import ALPHA, BuiltModel, build_model
from fathomline.job.digest import job_digest
from fathomline.job.ensemble import Ensemble, run_ensemble
from fathomline.job.inputs import load_atoms, load_spectra
from fathomline.job.schema import Job
from fathomline.job.structure import job_with_structure, search_job
from fathomline.model import SegmentPrediction, SegmentTerms
from fathomline.spectra import Spectrum, noise_correlation

__all__ = ["STAT_ONLY", "Measurement", "RegionShare", "measure"]

Array = NDArray[np.float64]
Progress = Callable[[str, float | None], None]

STAT_ONLY = "stat-only"
"""Flag of a result without a systematic error budget."""

STRUCTURE_ONLY = "structure-only"
"""Flag of a result whose error budget has the velocity structure and nothing else."""

INTERRUPTED = "interrupted"
"""Flag of a result whose structure search was interrupted."""

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
    telluric : str
        Telluric ranges that touch the region, empty where there are none.

    """

    transition: str
    n_pixels: int
    snr: float
    information: float
    chi2: float
    telluric: str


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
    correlation : dict
        Correlation of neighbouring pixels that the job states or asks to measure, by spectrum.
    correlated_stat : float or None
        Statistical error of Δα/α, ppm, if the noise has that correlation; None where nothing is
        stated. `stat` does not include it.
    asked : Job
        The job as it was given; `built.job` has the structure that was found.
    history : tuple of Step
        The structure search, empty where components were given.
    ensemble : Ensemble or None
    interrupted : bool
        Whether the search was stopped before it was done.
    adequacy : Adequacy
        Tests of the residuals, and signs of overfitting.
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
    correlation: dict[str, float]
    correlated_stat: float | None
    asked: Job
    history: tuple[Step, ...]
    ensemble: Ensemble | None
    interrupted: bool
    adequacy: Adequacy
    timings: dict[str, float]
    started: datetime
    warnings: list[str] = field(default_factory=list)

    @property
    def job(self) -> Job:
        """The job that was fitted; components that were found are in it."""
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
        stopped = (INTERRUPTED,) if self.interrupted else ()
        budget = STAT_ONLY if self.ensemble is None else STRUCTURE_ONLY
        return (*self.fit.flags, *stopped, budget)

    def flag_meanings(self) -> dict[str, str]:
        """The flags of this measurement and what they mean."""
        meanings = {
            **FLAGS,
            **CAUTIONS,
            STAT_ONLY: "no systematic error budget was made",
            STRUCTURE_ONLY: "of the systematic errors only that of the velocity structure is known",
            INTERRUPTED: "the structure search was interrupted; this is the best model until then",
        }
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
        return not self.interrupted and not any(flag in FLAGS for flag in self.fit.flags)

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
                "changes": list(self.built.atoms.changes),
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
            "pixel_correlation": {
                "by_spectrum": self.correlation,
                "stat_ppm_with_it": self.correlated_stat,
            },
            "structure": {
                "searched": bool(self.history),
                "steps": len(self.history),
                "interrupted": self.interrupted,
                "ensemble": None
                if self.ensemble is None
                else {
                    "members": len(self.ensemble.members),
                    "accepted": len(self.ensemble.accepted),
                    "mean_ppm": self.ensemble.mean,
                    "between_models_ppm": self.ensemble.between,
                    "failures": list(self.ensemble.failures),
                },
            },
            "adequacy": {
                "composite_runs_sigma": self.adequacy.composite.runs,
                "composite_correlation": self.adequacy.composite.correlation,
                "overfitting": list(self.adequacy.overfitting),
            },
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
                telluric=_telluric(built, [model.segments[k] for k in own]),
            )
        )
    return shares


def _telluric(built: BuiltModel, segments: list[SegmentTerms]) -> str:
    """Telluric ranges that touch the segments, shifted where the velocity is known."""
    found: dict[str, None] = {}
    for segment in segments:
        spectrum = next(s for s in built.spectra if s.name == segment.spectrum)
        velocity = spectrum.reading.barycentric_velocity or 0.0
        limits = float(segment.edges_low[0]), float(segment.edges_high[-1])
        for band in built.atoms.telluric_overlap(limits, velocity):
            found[f"{band.molecule} ({band.strength})"] = None
    return ", ".join(found)


def _correlation(built: BuiltModel, warnings: list[str]) -> dict[str, float]:
    """Correlation of neighbouring pixels by spectrum, where the job has one."""
    found: dict[str, float] = {}
    for table, spectrum in zip(built.job.spectra, built.spectra, strict=True):
        if table.correlation == "measured":
            measured = noise_correlation(spectrum)
            if measured is None:
                warnings.append(
                    f"{table.id}: too few quiet pixels to measure the correlation of neighbours"
                )
            else:
                found[table.id] = measured[0]
        elif table.correlation is not None:
            found[table.id] = float(table.correlation)
    return found


def _correlated_stat(
    built: BuiltModel, fit: FitResult, correlation: dict[str, float]
) -> float | None:
    """σ of the same least-squares estimate if the noise of neighbouring pixels is correlated.

    With weights w, the row of (JᵀJ)⁻¹Jᵀ of Δα/α, the variance is wᵀ R w, where R has the
    correlation beside its diagonal (for instance Press et al. 2007, Numerical Recipes, §15.4).
    """
    names = fit.covariance.names
    if not correlation or fit.sigma(ALPHA) is None:
        return None
    model = built.model
    _, jacobian = model.residuals_and_jacobian(fit.free)
    weights = jacobian @ fit.covariance.matrix[names.index(ALPHA)]
    variance = float(weights @ weights)
    for k, segment in enumerate(model.segments):
        rho = correlation.get(segment.spectrum, 0.0)
        neighbours = np.diff(np.flatnonzero(segment.good)) == 1
        own = weights[model.rows[k] : model.rows[k + 1]]
        variance += 2.0 * rho * float(np.sum((own[1:] * own[:-1])[neighbours]))
    return float(np.sqrt(max(variance, 0.0)))


def _degeneracies(fit: FitResult) -> list[str]:
    """One sentence for each set of parameters that only move together, with the cure."""
    sentences = []
    for names in fit.covariance.degenerate:
        shifts = [name for name in names if name.startswith("distortion")]
        cure = "fix one of them or give it a prior"
        if shifts:
            cure = f"fix {shifts[0]} (sigma = 0) or give it a prior (for instance sigma = 200)"
        shown = ", ".join(names[:6]) + (f" and {len(names) - 6} more" if len(names) > 6 else "")
        sentences.append(
            f"the data do not tell these parameters apart, so they have no errors: {shown}; {cure}"
        )
    return sentences


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


def measure(
    job: Job, *, progress: Progress | None = None, workers: int | None = None
) -> Measurement:
    """Measure Δα/α for one absorber.

    Reads the spectra, searches the velocity structure where the job asks for it, builds the model,
    fits it, proves the convergence by restarts, and repeats the fit on a finer grid if the fitted
    lines turn out to need one.

    Parameters
    ----------
    job : Job
    progress : callable, optional
        Called with a text and, during fits, χ².
    workers : int, optional
        Processes for an ensemble of structure searches; default: the number of cores.

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
    atoms, asked = load_atoms(job), job
    history: tuple[Step, ...] = ()
    ensemble, interrupted = None, False
    if job.searches:
        job, history, ensemble, interrupted = _structure(job, spectra, atoms, tell, workers)
        lap("structure")
    built = build_model(job, spectra, atoms)
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
    warnings += _degeneracies(fit)
    correlation = _correlation(built, warnings)
    adequacy = judge(built, fit, predictions, correlation)
    warnings += adequacy.overfitting
    problems = adequacy.composite.problems()
    if problems:
        warnings.append(
            f"residuals averaged over the regions are not noise: {', '.join(problems)}; "
            "a component may be missing"
        )
    return Measurement(
        built,
        fit,
        predictions,
        shares,
        resamplings,
        job_digest(asked),
        correlation,
        _correlated_stat(built, fit, correlation),
        asked,
        history,
        ensemble,
        interrupted,
        adequacy,
        timings,
        started,
        warnings,
    )


def _structure(
    job: Job,
    spectra: tuple[Spectrum, ...],
    atoms: AtomicData,
    tell: Progress,
    workers: int | None,
) -> tuple[Job, tuple[Step, ...], Ensemble | None, bool]:
    """The job with the structure that was found, and how it was found."""

    def told(step: Step) -> None:
        text = f"structure: {step.n_components} components, {step.action}, {step.seconds:.0f} s"
        tell(text, step.chi2)

    found = search_job(job, spectra, atoms, told)
    if not found.clouds:
        raise JobError(
            f"{job.locate('structure')}: the structure search found no absorption in the regions; "
            "check the redshift and the windows"
        )
    best = found.clouds, found.interlopers, found.values[ALPHA]
    ensemble = None
    if job.structure.ensemble and found.complete:
        ensemble = run_ensemble(
            job,
            spectra,
            atoms,
            workers=workers,
            report=lambda done, of: tell(f"ensemble: {done} of {of} searches done", None),
        )
        first = ensemble.members[0]
        best = first.clouds, first.interlopers, first.dalpha
    return job_with_structure(job, *best), found.history, ensemble, not found.complete


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
