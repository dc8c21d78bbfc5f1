"""The structure search of a job: from regions alone to a job with components."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

from fathomline.atomic import AtomicData
from fathomline.fit import (
    WIDTH_LIMITS,
    Cloud,
    Found,
    Interloper,
    SearchSettings,
    Step,
    search_structure,
)
from fathomline.job.building import build_template
from fathomline.job.number import Reference
from fathomline.job.reading import build_job
from fathomline.job.schema import Job
from fathomline.job.writing import job_to_data
from fathomline.spectra import Spectrum

__all__ = ["given_clouds", "job_with_structure", "search_job"]

_THERMAL_START = 8000.0  # K


def given_clouds(job: Job) -> list[Cloud]:
    """The components of a job as clouds to start from; ties and fixed numbers are not kept."""
    start = job.start_values()

    def value(k: int, quantity: str, ion: str | None = None) -> float:
        return start[Reference("component", k, quantity, ion)]

    thermal = job.structure.broadening == "thermal"
    clouds = []
    for k, component in enumerate(job.components):
        columns = {ion: value(k, "logN", ion) for ion in component.logN}
        temperature = None
        if component.temperature is not None:
            temperature = value(k, "temperature")
        width = 1.0
        if component.b is not None:
            width = value(k, "b")
        elif component.b_turb is not None:
            width = value(k, "b_turb")
        if thermal and temperature is None:
            temperature, width = _THERMAL_START, 0.8 * width
        if not thermal and temperature is not None:
            width, temperature = max(width, 0.1 * math.sqrt(temperature / 100.0)), None
        clouds.append(Cloud(value(k, "velocity"), width, columns, temperature))
    return clouds


def search_job(
    job: Job,
    spectra: Sequence[Spectrum],
    atoms: AtomicData,
    report: Callable[[Step], None] | None = None,
) -> Found:
    """Search the structure of a job's absorber.

    Raises
    ------
    JobError
        The regions do not fit the spectra.

    """
    settings = SearchSettings(
        criterion=job.structure.criterion,
        max_components=job.structure.max_components,
        seed=job.structure.seed - 1,  # the first seed is the plain search: best place first
        thermal=job.structure.broadening == "thermal",
    )
    template = build_template(job, spectra, atoms)
    return search_structure(template, settings, clouds=given_clouds(job), report=report)


def _width(b: float) -> float | dict[str, float]:
    """A width; at a limit of the search it keeps that limit."""
    low, high = WIDTH_LIMITS
    if b <= 1.05 * low:
        return {"value": max(round(b, 5), low), "min": low}
    if b >= 0.95 * high:
        return {"value": min(round(b, 5), high), "max": high}
    return round(b, 5)


def job_with_structure(
    job: Job, clouds: Sequence[Cloud], interlopers: Sequence[Interloper], dalpha: float
) -> Job:
    """The job with components and interlopers that were found, and without a search.

    Numbers are rounded far below their errors, so that the file stays readable.

    Parameters
    ----------
    job : Job
    clouds, interlopers : sequences
    dalpha : float
        Δα/α to start from, ppm.

    """
    data: dict[str, Any] = job_to_data(job)
    data["component"] = [
        {
            "velocity": round(cloud.velocity, 5),
            **(
                {"b": _width(cloud.b)}
                if cloud.temperature is None
                else {"temperature": round(cloud.temperature, 1), "b_turb": _width(cloud.b)}
            ),
            "logN": {ion: round(n, 5) for ion, n in sorted(cloud.log_columns.items())},
        }
        for cloud in sorted(clouds, key=lambda cloud: cloud.velocity)
    ]
    blends = list(data.get("blend", []))
    blends += [
        {
            "wavelength": round(line.wavelength, 5),
            "b": round(line.b, 4),
            "logN": round(line.log_strength, 5),
        }
        for line in interlopers
    ]
    if blends:
        data["blend"] = blends
    data["structure"] = {**data.get("structure", {}), "search": False}
    if job.alpha.dalpha.is_free:
        data["alpha"] = {"dalpha": round(dalpha, 5)}
    return build_job(data, name=job.name, folder=job.folder)
