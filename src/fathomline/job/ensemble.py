"""Many structure searches of one absorber: how much the answer depends on the model.

Velocity structures are not unique (Lee et al. 2021, arXiv:2102.11648). An ensemble repeats the
search from other random orders, with other criteria, broadening laws and prices of a place
(`fathomline.fit.structure`), and keeps every structure whose AICc with the price of its places lies
within `ACCEPTED` of the best. Searches without the price find structures that the others do not
reach: with it clouds that blend into others are missed, and Δα/α may move by more than its
statistical error. The average weighs structures by exp(−Δ/2) (Burnham & Anderson 2002, Model
Selection, §2.9); the *between-model σ* is the scatter of Δα/α over all accepted structures alike,
about that average, because differences of a few units do not tell which structure is true.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor
from dataclasses import dataclass, replace

import numpy as np

from fathomline.atomic import AtomicData
from fathomline.fit import Cloud, Found, Interloper, SearchSettings, search_structure
from fathomline.fit.covariance import covariance_from_jacobian
from fathomline.fit.result import aicc
from fathomline.fit.structure import price_of_places
from fathomline.job.building import ALPHA, build_template
from fathomline.job.schema import Job
from fathomline.job.structure import given_clouds
from fathomline.spectra import Spectrum

__all__ = ["ACCEPTED", "Ensemble", "Member", "run_ensemble"]

ACCEPTED = 10.0
"""AICc with the price of places, above the best, that a structure may have to be accepted."""

_SAME_CRITERION = 0.05
_SAME_SIGMA = 0.02


@dataclass(frozen=True, slots=True)
class Member:
    """One structure of an ensemble.

    Attributes
    ----------
    seed : int
    criterion : str
        That the search followed.
    thermal : bool
    clouds, interlopers : tuple
    aicc, chi2, n_free : float, float, int
    dalpha, stat : float, float or None
        Δα/α and its statistical error, ppm.
    count : int
        How many searches ended here.

    """

    seed: int
    criterion: str
    thermal: bool
    clouds: tuple[Cloud, ...]
    interlopers: tuple[Interloper, ...]
    aicc: float
    chi2: float
    n_free: int
    dalpha: float
    stat: float | None
    count: int = 1

    @property
    def cost(self) -> float:
        """AICc with the price of the places."""
        return self.aicc + price_of_places(self.clouds, self.interlopers)


@dataclass(frozen=True, slots=True)
class Ensemble:
    """What an ensemble of searches found.

    Attributes
    ----------
    members : tuple of Member
        Different structures, the best first.
    mean : float
        Average of Δα/α over the accepted ones, ppm.
    between : float
        Between-model σ, ppm.
    failures : tuple of str
        Searches that ended with an error.

    """

    members: tuple[Member, ...]
    mean: float
    between: float
    failures: tuple[str, ...] = ()

    @property
    def accepted(self) -> tuple[Member, ...]:
        """Members within `ACCEPTED` of the best."""
        return tuple(_accepted(self.members))


def _accepted(members: Sequence[Member]) -> list[Member]:
    least = min(m.cost for m in members)
    return [m for m in members if m.cost <= least + ACCEPTED]


def member_of(found: Found, settings: SearchSettings) -> Member:
    """The record of a search."""
    best = found.minimum
    names = found.model.parameters.free_names
    covariance = covariance_from_jacobian(best.jacobian, names, best.at_bound)
    return Member(
        settings.seed,
        settings.criterion,
        settings.thermal,
        found.clouds,
        found.interlopers,
        aicc(best.chi2, best.residual.size, best.x.size),
        best.chi2,
        best.x.size,
        found.values[ALPHA],
        covariance.sigma(ALPHA) if ALPHA in names else None,
    )


def _plan(job: Job, count: int) -> list[SearchSettings]:
    """Settings of the searches: the job's own first, then other laws, orders, prices, criteria."""
    own = job.structure
    plan = []
    for k in range(count):
        thermal = (own.broadening == "thermal") != (k % 2 == 1)
        plan.append(
            SearchSettings(
                criterion="BIC" if k % 6 == 5 else own.criterion,
                max_components=own.max_components,
                seed=0 if k < 2 else own.seed + k,
                thermal=thermal,
                price=0.0 if k % 6 in (2, 3) else 1.0,
            )
        )
    return plan


_shared: tuple[Job, tuple[Spectrum, ...], AtomicData] | None = None


def _prepare(job: Job, spectra: tuple[Spectrum, ...], atoms: AtomicData) -> None:
    global _shared
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    _shared = job, spectra, atoms


def _one(settings: SearchSettings) -> Member | str:
    assert _shared is not None
    job, spectra, atoms = _shared
    try:
        template = build_template(job, spectra, atoms)
        law = "thermal" if settings.thermal else "turbulent"
        start = given_clouds(
            job.model_copy(
                update={"structure": job.structure.model_copy(update={"broadening": law})}
            )
        )
        return member_of(search_structure(template, settings, clouds=start), settings)
    except Exception as error:  # one failed search must not end the others; it is told
        return f"seed {settings.seed}, {settings.criterion}: {type(error).__name__}: {error}"


def _distinct(members: Sequence[Member]) -> list[Member]:
    """Members without repetitions, the best first."""
    kept: list[Member] = []
    for member in sorted(members, key=lambda m: m.cost):
        for i, other in enumerate(kept):
            close = abs(member.aicc - other.aicc) < _SAME_CRITERION
            sigma = other.stat or 1.0
            if (
                close
                and len(member.clouds) == len(other.clouds)
                and member.thermal == other.thermal
                and abs(member.dalpha - other.dalpha) < _SAME_SIGMA * sigma
            ):
                kept[i] = replace(other, count=other.count + 1)
                break
        else:
            kept.append(member)
    return kept


def summarise_members(members: Sequence[Member], failures: Sequence[str] = ()) -> Ensemble:
    """Average and between-model σ of the members.

    Raises
    ------
    ValueError
        There is no member.

    """
    if not members:
        raise ValueError(f"no structure search succeeded: {'; '.join(failures)}")
    distinct = _distinct(members)
    best = distinct[0].cost
    accepted = _accepted(distinct)
    values = np.array([m.dalpha for m in accepted])
    weights = np.array([math.exp(-0.5 * (m.cost - best)) for m in accepted])
    mean = float(weights @ values / weights.sum())
    between = float(np.sqrt(np.mean((values - mean) ** 2)))
    return Ensemble(tuple(distinct), mean, between, tuple(failures))


def run_ensemble(
    job: Job,
    spectra: Sequence[Spectrum],
    atoms: AtomicData,
    *,
    workers: int | None = None,
    executor: Executor | None = None,
    report: Callable[[int, int], None] | None = None,
) -> Ensemble:
    """Run the searches that a job's ``[structure] ensemble`` asks for.

    Parameters
    ----------
    job : Job
    spectra, atoms
        As for `build_template`.
    workers : int, optional
        Processes; default: the number of cores; 1 stays in this process.
    executor : Executor, optional
        Runs the searches in place of processes made here.
    report : callable, optional
        Called with how many searches are done and how many there are.

    """
    plan = _plan(job, job.structure.ensemble)
    shared = job, tuple(spectra), atoms
    results: list[Member | str] = []

    def collect(outcomes: object) -> None:
        for outcome in outcomes:  # type: ignore[attr-defined]
            results.append(outcome)
            if report is not None:
                report(len(results), len(plan))

    count = workers or os.cpu_count() or 1
    if executor is not None:
        collect(executor.map(_with_shared, [(shared, settings) for settings in plan]))
    elif count == 1:
        _prepare(*shared)
        collect(map(_one, plan))
    else:
        with ProcessPoolExecutor(count, initializer=_prepare, initargs=shared) as pool:
            collect(pool.map(_one, plan))
    members = [r for r in results if isinstance(r, Member)]
    return summarise_members(members, [r for r in results if isinstance(r, str)])


def _with_shared(
    task: tuple[tuple[Job, tuple[Spectrum, ...], AtomicData], SearchSettings],
) -> Member | str:
    shared, settings = task
    _prepare(*shared)
    return _one(settings)
