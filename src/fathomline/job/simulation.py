"""Synthetic spectra of a job's model, with noise: for demos, tests and planning.

The absorption comes from `fathomline.job.synthesis`, which shares no code with the fitted model.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import AtomicData, Transition, with_abundances
from fathomline.constants import C_KMS
from fathomline.errors import JobError, ResultError
from fathomline.job.building import unknown_line
from fathomline.job.inputs import distortion_bases, line_spread, load_atoms, load_spectrum
from fathomline.job.number import Reference
from fathomline.job.schema import Component, Job
from fathomline.job.schema import Spectrum as SpectrumTable
from fathomline.job.synthesis import Cloud, synthetic_transmission
from fathomline.job.writing import write_job
from fathomline.spectra import Spectrum, TabulatedLineSpread, write_spectrum

__all__ = ["Noise", "clouds_of", "simulate", "simulate_to_folder", "synthetic_grid"]

Array = NDArray[np.float64]

_BLOCK_KMS = 500.0  # absorption is computed to this distance from each line
_REGION_MARGIN_KMS = 20.0  # a distortion of one region reaches so far beyond its window
_MARGIN_KMS = 60.0  # of a synthetic spectrum beyond its windows


@dataclass(frozen=True, slots=True)
class Noise:
    """Noise of a synthetic spectrum.

    Attributes
    ----------
    snr : float
        Signal-to-noise ratio per pixel in the continuum; `math.inf` for none (then the error
        column is that of a ratio of 1e4).
    seed : int

    """

    snr: float = 100.0
    seed: int = 1


def clouds_of(job: Job) -> list[Cloud]:
    """The components of a job at their start values."""
    start = job.start_values()

    def value(k: int, quantity: str, ion: str | None = None) -> float:
        return start[Reference("component", k, quantity, ion)]

    covering = {
        k - 1: (g, start[Reference("covering", g, "covering")])
        for g, group in enumerate(job.coverings)
        for k in group.components
    }

    def cloud(k: int, component: Component) -> Cloud:
        width = "b" if component.b is not None else "b_turb"
        return Cloud(
            velocity=value(k, "velocity"),
            log_columns={ion: value(k, "logN", ion) for ion in component.logN},
            b_turb=value(k, width) if getattr(component, width) is not None else 0.0,
            temperature=value(k, "temperature") if component.temperature is not None else 0.0,
            covering=covering.get(k),
        )

    return [cloud(k, component) for k, component in enumerate(job.components)]


def synthetic_grid(job: Job, atoms: AtomicData, spectrum: str, pixel: float) -> Array:
    """Edges (n + 1,) in Å of log-linear pixels of `pixel` km/s over the job's regions.

    Raises
    ------
    JobError
        No region draws on the spectrum.

    """
    z = job.absorber.redshift
    limits = [
        atoms[region.transition].observed_wavelength(
            z if region.redshift is None else region.redshift
        )
        * (1.0 + v / C_KMS)
        for region in job.regions
        if region.spectra is None or spectrum in region.spectra
        for v in (region.window[0] - _MARGIN_KMS, region.window[1] + _MARGIN_KMS)
    ]
    if not limits:
        raise JobError(f"no region draws on spectrum {spectrum!r}: there is nothing to simulate")
    low, high = min(limits), max(limits)
    count = math.ceil(C_KMS * math.log(high / low) / pixel)
    edges: Array = low * np.exp(np.arange(count + 1) * (pixel / C_KMS))
    return edges


def _blocks(centres: Sequence[float], half_width: float) -> list[tuple[float, float]]:
    """Wavelength ranges about line centres, merged where they touch."""
    merged: list[list[float]] = []
    for centre in sorted(centres):
        low, high = centre * (1.0 - half_width / C_KMS), centre * (1.0 + half_width / C_KMS)
        if merged and low <= merged[-1][1]:
            merged[-1][1] = high
        else:
            merged.append([low, high])
    return [(low, high) for low, high in merged]


def _lines_of(job: Job, atoms: AtomicData) -> list[Transition]:
    """All lines that the job's components can have."""
    ions = dict.fromkeys(ion for component in job.components for ion in component.logN)
    return [t for ion in ions for t in atoms.find(ion=ion, extra=True) if t.ground]


def _blends_of(job: Job, atoms: AtomicData) -> tuple[list[Cloud], list[Transition]]:
    """Clouds and lines of the job's blends; each line is renamed to belong to its cloud alone."""
    start = job.start_values()
    clouds, lines = [], []
    for k, blend in enumerate(job.blends):
        name = f"blend {k + 1}"
        if blend.wavelength is not None:
            own = [unknown_line(blend.wavelength)]
        else:
            own = [atoms[transition] for transition in blend.transitions]
        lines += [replace(line, ion=name) for line in own]
        clouds.append(
            Cloud(
                velocity=start[Reference("blend", k, "velocity")],
                log_columns={name: start[Reference("blend", k, "logN")]},
                b_turb=start[Reference("blend", k, "b")],
                redshift=0.0 if blend.redshift is None else blend.redshift,
            )
        )
    return clouds, lines


def _transmission(
    redshift: float,
    clouds: Sequence[Cloud],
    lines: Sequence[Transition],
    edges: Array,
    fwhm: float,
    dalpha: float,
    distortion: Callable[[Array], Array] | None,
    profile: Callable[[Array], Array] | None,
) -> Array:
    places = [
        (
            line,
            line.observed_wavelength(redshift if cloud.redshift is None else cloud.redshift)
            * (1.0 + cloud.velocity / C_KMS),
        )
        for line in lines
        for cloud in clouds
        if line.ion in cloud.log_columns
    ]
    out = np.ones(edges.size - 1)
    inside = [(line, place) for line, place in places if edges[0] < place < edges[-1]]
    for low, high in _blocks([place for _, place in inside], _BLOCK_KMS):
        first, last = np.searchsorted(edges, [low, high])
        first, last = max(first - 1, 0), min(last + 1, edges.size)
        near = {line.name: line for line, place in places if low <= place <= high}
        out[first : last - 1] = synthetic_transmission(
            edges[first:last],
            list(near.values()),
            clouds,
            redshift=redshift,
            fwhm=fwhm,
            dalpha_ppm=dalpha,
            distortion=distortion,
            profile=profile,
        )
    return out


def _distortion_of(job: Job, atoms: AtomicData, spectrum: str) -> Callable[[Array], Array] | None:
    """Distortion velocity (m/s) of a spectrum at the job's values.

    A term of some regions only holds in their windows and `_REGION_MARGIN_KMS` around.
    """
    terms = [
        (table.value, basis, _ranges(job, atoms, table.regions))
        for table, basis in zip(job.distortions, distortion_bases(job), strict=True)
        if spectrum in table.spectra and table.value != 0.0
    ]
    if not terms:
        return None

    def velocity(wavelength: Array) -> Array:
        total = np.zeros_like(wavelength)
        for value, basis, ranges in terms:
            inside = np.zeros(wavelength.shape, dtype=bool)
            for low, high in ranges:
                inside |= (wavelength >= low) & (wavelength <= high)
            total += np.where(inside, value * basis(wavelength), 0.0)
        return total

    return velocity


def _ranges(
    job: Job, atoms: AtomicData, regions: Sequence[int] | None
) -> list[tuple[float, float]]:
    """Wavelengths (Å) of regions, counted from 1; everything for None."""
    if regions is None:
        return [(0.0, math.inf)]
    found = []
    for number in regions:
        region = job.regions[number - 1]
        z = job.absorber.redshift if region.redshift is None else region.redshift
        centre = atoms[region.transition].observed_wavelength(z)
        low, high = region.window
        found.append(
            (
                centre * (1.0 + (low - _REGION_MARGIN_KMS) / C_KMS),
                centre * (1.0 + (high + _REGION_MARGIN_KMS) / C_KMS),
            )
        )
    return found


def _with_heavy_magnesium(job: Job, atoms: AtomicData) -> AtomicData:
    """The job's abundance of heavy magnesium, as fractions of the isotopes."""
    heavy = job.start_values()[Reference("atomic", 0, "heavy_magnesium")]
    if heavy == 1.0:
        return atoms
    isotopes = atoms.isotopes_of("Mg")
    lightest = min(isotope.mass_number for isotope in isotopes)
    parts = {
        str(isotope.mass_number): heavy * isotope.abundance
        for isotope in isotopes
        if isotope.mass_number != lightest
    }
    return with_abundances(atoms, {"Mg": {str(lightest): 1.0 - sum(parts.values()), **parts}})


def simulate(
    job: Job,
    atoms: AtomicData,
    edges: Sequence[Array],
    noise: Noise,
    *,
    dalpha_ppm: float | None = None,
    clouds: Sequence[Cloud] | None = None,
) -> tuple[Spectrum, ...]:
    """Synthetic spectra of a job's model.

    Parameters
    ----------
    job : Job
        Components are taken at their start values.
    atoms : AtomicData
    edges : sequence of array
        Pixel edges of each spectrum of the job, Å.
    noise : Noise
    dalpha_ppm : float, optional
        Δα/α; default: the start value of the job.
    clouds : sequence of Cloud, optional
        Absorbing clouds instead of the job's components.

    Returns
    -------
    tuple of Spectrum
        Flux 1 in the continuum, continuum column included.

    """
    start = job.start_values()
    alpha = start[Reference("alpha", 0, "dalpha")] if dalpha_ppm is None else dalpha_ppm
    atoms = _with_heavy_magnesium(job, atoms)
    blends, blend_lines = _blends_of(job, atoms)
    clouds = [*(clouds_of(job) if clouds is None else clouds), *blends]
    lines = [*_lines_of(job, atoms), *blend_lines]
    children = np.random.SeedSequence(noise.seed).spawn(len(job.spectra))
    spectra = []
    for i, (table, pixels) in enumerate(zip(job.spectra, edges, strict=True)):
        spread = line_spread(table.resolution, job, i)
        profile = None
        if isinstance(spread, TabulatedLineSpread):
            middle = np.array([0.5 * (pixels[0] + pixels[-1])])
            profile = spread.profile_at(float(middle[0]))
        flux = _transmission(
            job.absorber.redshift,
            clouds,
            lines,
            pixels,
            spread.fwhm,
            alpha,
            _distortion_of(job, atoms, table.id),
            profile,
        )
        sigma = np.full(flux.size, 1e-4 if math.isinf(noise.snr) else 1.0 / noise.snr)
        if not math.isinf(noise.snr):
            flux = flux + sigma * np.random.default_rng(children[i]).standard_normal(flux.size)
        spectra.append(
            Spectrum.from_arrays(
                np.sqrt(pixels[:-1] * pixels[1:]), flux, sigma, np.ones(flux.size), name=table.id
            )
        )
    return tuple(spectra)


def simulate_to_folder(
    job: Job,
    job_name: str,
    folder: Path,
    noise: Noise,
    *,
    pixel: float,
    dalpha_ppm: float | None = None,
) -> list[Path]:
    """Write synthetic spectra and a job that fits them; return the files.

    Parameters
    ----------
    job : Job
    job_name : str
        File name of the job to write.
    folder : Path
        Made if needed; files in it are never overwritten.
    noise : Noise
    pixel : float
        Pixel size, km/s, for spectra whose file does not exist.
    dalpha_ppm : float, optional
        Δα/α; default: the start value of the job.

    Raises
    ------
    ResultError
        A file is already there, or the folder cannot be written.

    """
    atoms = load_atoms(job)
    files = [folder / f"{table.id}.fits" for table in job.spectra]
    job_path = folder / job_name
    for path in (*files, job_path):
        if path.exists():
            raise ResultError(
                f"{path}: is already there and is not overwritten; use another folder"
            )
    edges = [
        load_spectrum(job, i).edges
        if job.spectrum_path(i).exists()
        else synthetic_grid(job, atoms, table.id, pixel)
        for i, table in enumerate(job.spectra)
    ]
    spectra = simulate(job, atoms, edges, noise, dalpha_ppm=dalpha_ppm)
    tables = tuple(
        SpectrumTable(id=table.id, file=f"{table.id}.fits", resolution=table.resolution)
        for table in job.spectra
    )
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for path, spectrum in zip(files, spectra, strict=True):
            write_spectrum(spectrum, path, comment="simulated by fathomline")
        write_job(job.model_copy(update={"spectra": tables}), job_path)
    except OSError as error:
        raise ResultError(f"{folder}: cannot be written: {error.strerror or error}") from error
    return [*files, job_path]
