"""The data that a job names: atomic data with its changes, spectra, profiles, distortion tables."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import (
    AtomicData,
    NumberChange,
    load_atomic_data,
    with_abundances,
    with_numbers,
)
from fathomline.errors import AtomicDataError, JobError, SpectrumError
from fathomline.job.instrument_tables import Distortion, Resolution
from fathomline.job.instrument_tables import Spectrum as SpectrumTable
from fathomline.job.number import Reference
from fathomline.job.schema import Job
from fathomline.spectra import (
    GaussianLineSpread,
    LineSpread,
    Spectrum,
    read_distortion_table,
    read_line_spread,
    read_spectrum,
    sawtooth_basis,
    shift_basis,
    slope_basis,
    table_basis,
)

__all__ = ["distortion_bases", "load_atoms", "load_spectra", "load_spectrum"]

Array = NDArray[np.float64]
Basis = Callable[[Array], Array]


def load_atoms(job: Job) -> AtomicData:
    """The transition tables that the job asks for, with its changes.

    Raises
    ------
    JobError
        A table is malformed, or a change names a transition or isotope that is not there.

    """
    atomic = job.atomic
    try:
        atoms = load_atomic_data(atomic.structure, job.atomic_path())
    except AtomicDataError as fault:
        raise JobError(f"{job.locate('atomic', 'folder')}: {fault}") from None
    try:
        atoms = with_abundances(atoms, atomic.abundances)
    except AtomicDataError as fault:
        raise JobError(f"{job.locate('atomic', 'abundances')}: {fault}") from None
    changes = []
    for i, override in enumerate(atomic.overrides):
        try:
            changes.append(
                NumberChange(
                    atoms[override.transition].name,
                    override.wavenumber,
                    override.f,
                    override.gamma,
                    override.q,
                )
            )
        except AtomicDataError as fault:
            place = job.locate("atomic", "override", i, "transition")
            raise JobError(f"{place}: [[atomic.override]] {i + 1}: {fault}") from None
    return with_numbers(atoms, changes)


def line_spread(resolution: Resolution, job: Job, index: int) -> LineSpread:
    """Line-spread function of spectrum `index` at the start values."""
    if resolution.R is not None:
        return GaussianLineSpread.from_resolving_power(resolution.R, resolution.error)
    path = job.line_spread_path(index)
    if path is not None:
        return read_line_spread(path)
    return GaussianLineSpread(
        job.start_values()[Reference("spectrum", index, "fwhm")], resolution.error
    )


def load_spectrum(job: Job, index: int) -> Spectrum:
    """Read spectrum `index` (from 0) of a job.

    Raises
    ------
    SpectrumError
        The file cannot be read.

    """
    table = job.spectra[index]
    spectrum = read_spectrum(
        job.spectrum_path(index),
        columns=_columns(table),
        unit=table.unit,
        medium=table.medium,
        frame=table.frame,
        velocity=table.berv,
        lsf=line_spread(table.resolution, job, index),
        name=table.id,
        error_file=job.error_path(index),
        continuum_file=job.continuum_path(index),
    )
    if not table.exclude:
        return spectrum
    good = spectrum.good.copy()
    for low, high in table.exclude:
        good &= ~((spectrum.wavelength >= low) & (spectrum.wavelength <= high))
    return replace(spectrum, good=good)


def load_spectra(job: Job) -> tuple[Spectrum, ...]:
    """Read the spectra of a job.

    Raises
    ------
    JobError
        One message for each file that cannot be read, with the line of the job.

    """
    spectra: list[Spectrum] = []
    faults: list[str] = []
    for index in range(len(job.spectra)):
        try:
            spectra.append(load_spectrum(job, index))
        except SpectrumError as fault:
            faults.append(f"{job.locate('spectrum', index, 'file')}: {fault}")
    if faults:
        raise JobError(faults)
    return tuple(spectra)


def _columns(table: SpectrumTable) -> dict[str, str] | None:
    if table.columns is None:
        return None
    return {key: name for key, name in table.columns.model_dump().items() if name is not None}


def distortion_bases(job: Job) -> list[Basis]:
    """For each distortion of a job the velocity (m/s) per unit of its value.

    Raises
    ------
    JobError
        A table cannot be read; all such faults at once.

    """
    bases: list[Basis] = []
    faults: list[str] = []
    for i, distortion in enumerate(job.distortions):
        try:
            bases.append(_basis(job, i, distortion))
        except SpectrumError as fault:
            faults.append(f"{job.locate('distortion', i, 'file')}: [[distortion]] {i + 1}: {fault}")
    if faults:
        raise JobError(faults)
    return bases


def _basis(job: Job, index: int, distortion: Distortion) -> Basis:
    pivot = 0.0 if distortion.pivot is None else distortion.pivot
    if distortion.kind == "shift":
        return shift_basis
    if distortion.kind == "slope":
        return lambda wavelength: slope_basis(wavelength, pivot)
    if distortion.kind == "sawtooth":
        spacing = distortion.order_spacing
        edges = np.array(distortion.order_edges if spacing is None else (pivot, pivot + spacing))
        return lambda wavelength: sawtooth_basis(wavelength, edges)
    path = job.distortion_path(index)
    if path is None:
        raise SpectrumError("a distortion of kind table needs a file")
    points, velocity, _ = read_distortion_table(path)
    return lambda wavelength: table_basis(wavelength, points, velocity)
