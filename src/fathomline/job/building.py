"""From a job to the model that is fitted: spectra are read, regions cut, parameters named.

Parameters are named as references in a job name them: ``alpha.dalpha``, ``component[2].b``,
``component[2].logN["Fe II"]``, ``spectrum[1].fwhm``, ``region[3].zero_level``, and, for the
polynomials, ``region[3].continuum["red"][1]``. Numbers count from 1.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import AtomicData, Transition, load_atomic_data
from fathomline.constants import C_KMS, DOPPLER_KMS2
from fathomline.errors import AtomicDataError, JobError, SpectrumError
from fathomline.job.number import QUANTITIES, Number, Reference
from fathomline.job.schema import Component, Job, Region
from fathomline.job.schema import Spectrum as SpectrumTable
from fathomline.model import (
    AbsorberModel,
    ComponentTerms,
    Parameter,
    ParameterSet,
    Prior,
    SegmentTerms,
    Tie,
)
from fathomline.profile import TransitionLines
from fathomline.spectra import GaussianLineSpread, Spectrum, local_level, read_spectrum

__all__ = ["ALPHA", "BuiltModel", "build_model", "load_atoms", "load_spectra", "load_spectrum"]

ALPHA = "alpha.dalpha"
"""Name of Δα/α (ppm) among the parameters."""

_NEGLIGIBLE_DEPTH = 1e-5  # optical depth below which a line is left out of a region
_GROWTH = 1.0  # dex that a column density may gain during the fit before that matters


@dataclass(frozen=True)
class BuiltModel:
    """A model with what it was built from.

    Attributes
    ----------
    job : Job
    spectra : tuple of Spectrum
        In the order of the job.
    atoms : AtomicData
    model : AbsorberModel
    transitions : tuple of Transition
        The transition of each region, in the order of the job.

    """

    job: Job
    spectra: tuple[Spectrum, ...]
    atoms: AtomicData
    model: AbsorberModel
    transitions: tuple[Transition, ...]


def load_atoms(job: Job) -> AtomicData:
    """The transition tables that the job asks for."""
    return load_atomic_data(job.atomic.structure)


def _line_spread(table: SpectrumTable, job: Job, index: int) -> GaussianLineSpread:
    resolution = table.resolution
    if resolution.R is not None:
        return GaussianLineSpread.from_resolving_power(resolution.R, resolution.error)
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
    return read_spectrum(
        job.spectrum_path(index),
        columns=_columns(table),
        unit=table.unit,
        medium=table.medium,
        frame=table.frame,
        velocity=table.berv,
        lsf=_line_spread(table, job, index),
        name=table.id,
        error_file=job.error_path(index),
        continuum_file=job.continuum_path(index),
    )


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


class _Builder:
    """Collects parameters, segments and faults."""

    def __init__(self, job: Job, spectra: Sequence[Spectrum], atoms: AtomicData) -> None:
        self.job, self.spectra, self.atoms = job, spectra, atoms
        self.start = job.start_values()
        self.parameters: list[Parameter] = []
        self.faults: list[str] = []
        self.bounds = {s.name: s.bounds() for s in spectra}
        self.used: dict[str, NDArray[np.intp]] = {
            s.name: np.full(len(s), -1, dtype=np.intp) for s in spectra
        }

    def fault(self, text: str, *path: str | int) -> None:
        self.faults.append(f"{self.job.locate(*path)}: {text}")

    def put(self, parameter: Parameter) -> int:
        self.parameters.append(parameter)
        return len(self.parameters) - 1

    def number(
        self,
        name: str,
        number: Number,
        quantity: str,
        *,
        bounds: tuple[float, float] | None = None,
        prior: Prior | None = None,
    ) -> int:
        """Add a number of the job; `bounds` replace those of the quantity where none are given."""
        unit = QUANTITIES[quantity].unit
        if number.same_as is not None:
            tie = Tie(number.same_as, number.ratio, number.offset)
            return self.put(Parameter(name, 0.0, unit, tie=tie))
        low, high = number.bounds(quantity)
        if bounds is not None:
            low = bounds[0] if number.min is None else low
            high = bounds[1] if number.max is None else high
        value = 0.0 if number.value is None else number.value
        return self.put(Parameter(name, value, unit, low, high, fixed=number.fixed, prior=prior))

    # -- components -------------------------------------------------------------------------

    def component(self, k: int, table: Component, windows: Sequence[Region]) -> ComponentTerms:
        name = f"component[{k + 1}]"
        mine = [region for region in windows if region.ion in table.logN]
        low = min((region.window[0] for region in mine), default=-math.inf)
        high = max((region.window[1] for region in mine), default=math.inf)
        for ion in table.logN:
            if ion not in {region.ion for region in windows}:
                self.fault(
                    f"[[component]] {k + 1}: logN of {ion} is not constrained: no region has a "
                    f"transition of {ion}; add one or remove the entry",
                    "component",
                    k,
                    "logN",
                    ion,
                )
        velocity = self.start[Reference("component", k, "velocity")]
        inside = any(r.window[0] <= velocity <= r.window[1] for r in mine)
        if mine and not inside:
            self.fault(
                f"[[component]] {k + 1}: velocity {velocity:g} km/s lies outside every window of "
                f"its ions; the widest reaches from {low:g} to {high:g} km/s",
                "component",
                k,
                "velocity",
            )
            low, high = -math.inf, math.inf
        width: dict[str, int] = {}
        for quantity in ("b", "temperature", "b_turb"):
            value = getattr(table, quantity)
            if value is not None:
                width[quantity] = self.number(f"{name}.{quantity}", value, quantity)
        return ComponentTerms(
            velocity=self.number(
                f"{name}.velocity", table.velocity, "velocity", bounds=(low, high)
            ),
            log_columns={
                ion: self.number(f'{name}.logN["{ion}"]', value, "logN")
                for ion, value in table.logN.items()
            },
            **width,
        )

    # -- regions ----------------------------------------------------------------------------

    def transition(self, i: int, region: Region) -> Transition | None:
        try:
            transition = self.atoms[region.transition]
        except AtomicDataError as error:
            self.fault(f"[[region]] {i + 1}: {error}", "region", i, "transition")
            return None
        if transition.q is None:
            self.fault(
                f"[[region]] {i + 1}: {transition.name} has no sensitivity coefficient q, so it "
                "cannot take part in a measurement; `fathomline lines` lists those that can",
                "region",
                i,
                "transition",
            )
            return None
        return transition

    def segments(
        self, i: int, region: Region, transition: Transition, fwhm: Mapping[str, int]
    ) -> list[SegmentTerms]:
        centre = transition.observed_wavelength(self.job.absorber.redshift)
        low, high = (centre * (1.0 + v / C_KMS) for v in region.window)
        named = None if region.spectra is None else set(region.spectra)
        found, reasons = [], []
        zero_level: int | None = None
        for spectrum in self.spectra:
            if named is not None and spectrum.name not in named:
                continue
            first, last = np.searchsorted(spectrum.wavelength, [low, high])
            if last - first < 2:
                wave = spectrum.wavelength
                reasons.append(f"{spectrum.name!r} covers {wave[0]:.1f} to {wave[-1]:.1f} Å")
                continue
            velocity = spectrum.velocity(centre)[first:last]
            good = spectrum.good[first:last].copy()
            for lower, upper in region.exclude:
                good &= ~((velocity >= lower) & (velocity <= upper))
            if not good.any():
                reasons.append(
                    f"{spectrum.name!r} has {last - first} pixels there, all masked or excluded"
                )
                continue
            if region.zero_level is not None and zero_level is None:
                zero_level = self.number(
                    f"region[{i + 1}].zero_level", region.zero_level, "zero_level"
                )
            segment = self.segment(
                i,
                region,
                transition,
                spectrum,
                slice(first, last),
                good,
                fwhm[spectrum.name],
                zero_level,
            )
            if segment is not None:
                found.append(segment)
        if not found and reasons:
            covered = any("all masked" in reason for reason in reasons)
            problem = "has no good pixel in" if covered else "is not covered by"
            self.fault(
                f"[[region]] {i + 1}: {transition.name} at {centre:.2f} Å {problem} the "
                f"{'named ' if named is not None else ''}spectra: {'; '.join(reasons)}",
                "region",
                i,
                "transition",
            )
        return found

    def segment(
        self,
        i: int,
        region: Region,
        transition: Transition,
        spectrum: Spectrum,
        cut: slice,
        good: NDArray[np.bool_],
        fwhm: int,
        zero_level: int | None,
    ) -> SegmentTerms | None:
        owner = self.used[spectrum.name][cut]
        shared = np.unique(owner[(owner >= 0) & good])
        if shared.size:
            other = int(shared[0])
            n = int(((owner == other) & good).sum())
            self.fault(
                f"[[region]] {i + 1} and {other + 1} share {n} pixels of spectrum "
                f"{spectrum.name!r}, which would count twice; narrow a window, or keep one region "
                "that holds both lines",
                "region",
                i,
                "window",
            )
            return None
        owner[good] = i
        flux, error = spectrum.flux[cut], spectrum.error[cut]
        try:
            level = (
                spectrum.continuum[cut]
                if spectrum.continuum is not None
                else np.full(flux.size, local_level(flux, error, good))
            )
        except SpectrumError as problem:
            self.fault(
                f"[[region]] {i + 1}: {transition.name} in spectrum {spectrum.name!r}: {problem}",
                "region",
                i,
                "transition",
            )
            return None
        with np.errstate(divide="ignore", invalid="ignore"):  # masked pixels may have no continuum
            data, sigma = flux / level, error / level
        low, high = self.bounds[spectrum.name]
        return SegmentTerms(
            region=i,
            name=transition.name,
            spectrum=spectrum.name,
            wavelength=spectrum.wavelength[cut],
            edges_low=low[cut],
            edges_high=high[cut],
            data=data,
            error=sigma,
            good=good,
            lines=self.lines(transition, spectrum.wavelength[cut]),
            continuum=tuple(
                self.put(
                    Parameter(
                        f'region[{i + 1}].continuum["{spectrum.name}"][{n}]', 1.0 if n == 0 else 0.0
                    )
                )
                for n in range(region.continuum + 1)
            ),
            zero_level=zero_level,
            fwhm=fwhm,
            window=region.window,
            rest=transition.wavelength,
        )

    def lines(
        self, own: Transition, wavelength: NDArray[np.float64]
    ) -> tuple[tuple[str, TransitionLines], ...]:
        """Every line of the components' ions that can absorb at these wavelengths."""
        z = self.job.absorber.redshift
        out = {own.name: (own.ion, TransitionLines(own))}
        components = list(enumerate(self.job.components))
        for ion in dict.fromkeys(ion for _, c in components for ion in c.logN):
            for line in self.atoms.find(ion=ion, extra=True):
                if line.name in out or not line.ground:
                    continue
                terms = TransitionLines(line)
                centre = line.observed_wavelength(z)
                for k, component in components:
                    if ion in component.logN and self._reaches(
                        k, component, ion, line.mass, terms, centre, wavelength
                    ):
                        out[line.name] = (ion, terms)
                        break
        return tuple(out.values())

    def _reaches(
        self,
        k: int,
        component: Component,
        ion: str,
        mass: float,
        terms: TransitionLines,
        centre: float,
        wavelength: NDArray[np.float64],
    ) -> bool:
        def value(quantity: str, ion: str | None = None) -> float:
            return self.start[Reference("component", k, quantity, ion)]

        if component.b is not None:
            b = value("b")
        else:
            b = math.sqrt(DOPPLER_KMS2 * value("temperature") / mass)
            if component.b_turb is not None:
                b = math.hypot(b, value("b_turb"))
        column = 10.0 ** (value("logN", ion) + _GROWTH)
        reach = terms.reach(b, column, _NEGLIGIBLE_DEPTH) + 10.0 * b
        place = centre * (1.0 + value("velocity") / C_KMS)
        return bool(
            wavelength[0] * (1.0 - reach / C_KMS) <= place <= wavelength[-1] * (1.0 + reach / C_KMS)
        )


def build_model(job: Job, spectra: Sequence[Spectrum], atoms: AtomicData) -> BuiltModel:
    """Build the model of a job from its spectra and atomic data.

    Raises
    ------
    JobError
        All faults at once, each with the line of the job: a transition that is unknown, without q
        or not covered, a region without a good pixel, regions that share pixels, a component
        outside every window, a column density that nothing constrains.

    """
    builder = _Builder(job, spectra, atoms)
    alpha = builder.number(ALPHA, job.alpha.dalpha, "dalpha")
    fwhm = {table.id: _put_fwhm(builder, i, table) for i, table in enumerate(job.spectra)}
    components = [
        builder.component(k, table, job.regions) for k, table in enumerate(job.components)
    ]
    segments: list[SegmentTerms] = []
    transitions: list[Transition] = []
    for i, region in enumerate(job.regions):
        transition = builder.transition(i, region)
        if transition is not None:
            transitions.append(transition)
            segments += builder.segments(i, region, transition, fwhm)
    if builder.faults:
        raise JobError(builder.faults)
    model = AbsorberModel(
        job.absorber.redshift, ParameterSet(builder.parameters), alpha, components, segments
    )
    return BuiltModel(job, tuple(spectra), atoms, model, tuple(transitions))


def _put_fwhm(builder: _Builder, i: int, table: SpectrumTable) -> int:
    name = f"spectrum[{i + 1}].fwhm"
    resolution = table.resolution
    if resolution.fwhm is None:
        value = _line_spread(table, builder.job, i).fwhm
        return builder.put(Parameter(name, value, "km/s", fixed=True))
    prior = None
    if resolution.error is not None and resolution.fwhm.is_free:
        prior = Prior(float(resolution.fwhm.value or 0.0), resolution.error)
    return builder.number(name, resolution.fwhm, "fwhm", prior=prior)
