"""From a job to the model that is fitted: spectra are read, regions cut, parameters named.

Parameters are named as references in a job name them: ``alpha.dalpha``, ``component[2].b``,
``component[2].logN["Fe II"]``, ``blend[1].b``, ``spectrum[1].fwhm``, ``region[3].zero_level``,
``distortion[1].value``, ``covering[1].value``, ``atomic.heavy_magnesium``, and, for polynomials,
``region[3].continuum["red"][1]``. Numbers count from 1.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import AtomicData, Transition
from fathomline.constants import C_KMS, DOPPLER_KMS2
from fathomline.errors import AtomicDataError, JobError, SpectrumError
from fathomline.fit import Template
from fathomline.job.absorption_tables import Blend, Component, Region
from fathomline.job.inputs import distortion_bases, line_spread
from fathomline.job.instrument_tables import Spectrum as SpectrumTable
from fathomline.job.number import QUANTITIES, Number, Reference
from fathomline.job.schema import Job
from fathomline.model import (
    AbsorberModel,
    ComponentTerms,
    DistortionTerm,
    Parameter,
    ParameterSet,
    Prior,
    SegmentTerms,
    Tie,
)
from fathomline.profile import TransitionLines
from fathomline.spectra import Spectrum, TabulatedLineSpread, local_level

__all__ = ["ALPHA", "UNKNOWN", "BuiltModel", "build_model", "build_template", "unknown_line"]

Array = NDArray[np.float64]

ALPHA = "alpha.dalpha"
"""Name of Δα/α (ppm) among the parameters."""

UNKNOWN = "unknown"
"""Stands for the ion of a line of which only the wavelength is known."""

_NEGLIGIBLE_DEPTH = 1e-5  # optical depth below which a line is left out of a region
_BLEND_REACH = 100.0  # km/s that a blend may move from its redshift
_PROBE_B, _PROBE_COLUMN = 5.0, 13.5  # km/s and log10 cm⁻² of a cloud that may lie anywhere
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


class _Builder:
    """Collects parameters, segments and faults."""

    def __init__(self, job: Job, spectra: Sequence[Spectrum], atoms: AtomicData) -> None:
        self.job, self.spectra, self.atoms = job, spectra, atoms
        self.start = job.start_values()
        self.parameters: list[Parameter] = []
        self.faults: list[str] = []
        self.absorptions: list[_Absorption] = []
        self.distortions: list[DistortionTerm] = []
        self.heavy_element: str | None = None
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

    def heavy_magnesium(self) -> int | None:
        """The abundance of heavy magnesium relative to terrestrial, where it is not 1 and fixed."""
        atomic = self.job.atomic
        number = atomic.heavy_magnesium
        if number.fixed and number.value == 1.0:
            return None
        self.heavy_element = "Mg"
        prior = None
        if atomic.heavy_magnesium_sigma is not None and number.value is not None:
            prior = Prior(number.value, atomic.heavy_magnesium_sigma)
        return self.number("atomic.heavy_magnesium", number, "heavy_magnesium", prior=prior)

    def put_distortions(self) -> None:
        """One parameter for each distortion term, with its prior."""
        bases = distortion_bases(self.job)
        for i, (table, basis) in enumerate(zip(self.job.distortions, bases, strict=True)):
            prior = Prior(table.value, table.sigma) if table.has_prior else None
            position = self.put(
                Parameter(
                    f"distortion[{i + 1}].value",
                    table.value,
                    table.unit,
                    fixed=not table.is_free,
                    prior=prior,
                )
            )
            self.distortions.append(DistortionTerm(position, basis))

    def check_blends(self, segments: Sequence[SegmentTerms]) -> None:
        """A blend that absorbs in no region cannot be fitted."""
        used = {key for segment in segments for key, _ in segment.lines}
        for k in range(len(self.job.blends)):
            if f"blend {k + 1}" not in used and not self.faults:
                self.fault(
                    f"[[blend]] {k + 1}: absorbs in no region; remove it, or check its line, "
                    "redshift and velocity",
                    "blend",
                    k,
                )

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
        groups = [g for g, group in enumerate(self.job.coverings) if k + 1 in group.components]
        return ComponentTerms(
            velocity=self.number(
                f"{name}.velocity", table.velocity, "velocity", bounds=(low, high)
            ),
            log_columns={
                ion: self.number(f'{name}.logN["{ion}"]', value, "logN")
                for ion, value in table.logN.items()
            },
            covering=groups[0] if groups else None,
            **width,
        )

    def blend(self, k: int, table: Blend) -> _Absorption | None:
        """The component of a blend, with its lines."""
        name, key = f"blend[{k + 1}]", f"blend {k + 1}"
        if table.wavelength is not None:
            lines = [unknown_line(table.wavelength)]
            redshift = 0.0
        else:
            redshift = table.redshift or 0.0
            try:
                lines = [self.atoms[transition] for transition in table.transitions]
            except AtomicDataError as error:
                which = "line" if table.line is not None else "lines"
                self.fault(f"[[blend]] {k + 1}: {error}", "blend", k, which)
                return None
        terms = ComponentTerms(
            velocity=self.number(
                f"{name}.velocity", table.velocity, "velocity", bounds=(-_BLEND_REACH, _BLEND_REACH)
            ),
            log_columns={key: self.number(f"{name}.logN", table.logN, "logN")},
            b=self.number(f"{name}.b", table.b, "b"),
            redshift=redshift,
        )
        start = [self.start[Reference("blend", k, q)] for q in ("velocity", "b", "logN")]
        return _Absorption(terms, key, lines, redshift, *start)

    def absorber(self, k: int, terms: ComponentTerms, table: Component) -> list[_Absorption]:
        """What a component absorbs, ion by ion."""
        z = self.job.absorber.redshift
        velocity = self.start[Reference("component", k, "velocity")]
        found = []
        for ion in table.logN:
            lines = [line for line in self.atoms.find(ion=ion, extra=True) if line.ground]
            if not lines:
                continue
            if table.b is not None:
                b = self.start[Reference("component", k, "b")]
            else:
                temperature = self.start[Reference("component", k, "temperature")]
                b = math.sqrt(DOPPLER_KMS2 * temperature / lines[0].mass)
                if table.b_turb is not None:
                    b = math.hypot(b, self.start[Reference("component", k, "b_turb")])
            column = self.start[Reference("component", k, "logN", ion)]
            found.append(_Absorption(terms, ion, lines, z, velocity, b, column))
        return found

    # -- regions ----------------------------------------------------------------------------

    def transition(self, i: int, region: Region) -> Transition | None:
        try:
            transition = self.atoms[region.transition]
        except AtomicDataError as error:
            self.fault(f"[[region]] {i + 1}: {error}", "region", i, "transition")
            return None
        if transition.q is None and region.redshift is None:
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
        redshift = self.job.absorber.redshift if region.redshift is None else region.redshift
        centre = transition.observed_wavelength(redshift)
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
                centre,
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
        centre: float,
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
            centre=centre,
            distortions=tuple(
                term
                for term, table in zip(self.distortions, self.job.distortions, strict=True)
                if spectrum.name in table.spectra
                and (table.regions is None or i + 1 in table.regions)
            ),
            fwhm_slope=self.fwhm_slope(spectrum.name, spectrum.wavelength[cut]),
            line_spread=spectrum.lsf if isinstance(spectrum.lsf, TabulatedLineSpread) else None,
        )

    def fwhm_slope(self, name: str, wavelength: Array) -> Array | None:
        """What the FWHM of a spectrum gains with wavelength (n,), km/s."""
        resolution = next(table.resolution for table in self.job.spectra if table.id == name)
        if resolution.slope is None or resolution.pivot is None:
            return None
        gain: Array = resolution.slope * (wavelength - resolution.pivot) / 1000.0
        return gain

    def lines(self, own: Transition, wavelength: Array) -> tuple[tuple[str, TransitionLines], ...]:
        """Every line of the components and blends that can absorb at these wavelengths."""
        found: dict[tuple[str, str], TransitionLines] = {}
        for absorption in self.absorptions:
            for line in absorption.lines:
                key = (absorption.key, line.name)
                if key in found:
                    continue
                terms = TransitionLines(line, self.heavy_element)
                if (absorption.key == own.ion and line is own) or absorption.reaches(
                    line, terms, wavelength
                ):
                    found[key] = terms
        return tuple((key, terms) for (key, _), terms in found.items())


@dataclass(frozen=True)
class _Absorption:
    """Start values of one ion of a component, or of a blend, and the lines it may have."""

    terms: ComponentTerms
    key: str
    lines: list[Transition]
    redshift: float
    velocity: float
    b: float
    log_column: float

    def reaches(self, line: Transition, terms: TransitionLines, wavelength: Array) -> bool:
        """Whether the line can absorb at some of the wavelengths, also after it has grown."""
        column = 10.0 ** (self.log_column + _GROWTH)
        reach = terms.reach(self.b, column, _NEGLIGIBLE_DEPTH) + 10.0 * self.b
        place = line.observed_wavelength(self.redshift) * (1.0 + self.velocity / C_KMS)
        return bool(
            wavelength[0] * (1.0 - reach / C_KMS) <= place <= wavelength[-1] * (1.0 + reach / C_KMS)
        )


def unknown_line(wavelength: float) -> Transition:
    """A line of which only the observed wavelength is known; its column density is N f."""
    return Transition(
        UNKNOWN, f"{wavelength:g}", "", 1.0, 1e8 / wavelength, None, 1.0, None, None, None
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
    heavy = builder.heavy_magnesium()
    fwhm = {table.id: _put_fwhm(builder, i, table) for i, table in enumerate(job.spectra)}
    builder.put_distortions()
    components = [
        builder.component(k, table, job.regions) for k, table in enumerate(job.components)
    ]
    for k, (terms, table) in enumerate(zip(components, job.components, strict=True)):
        builder.absorptions += builder.absorber(k, terms, table)
    blends = [b for k, t in enumerate(job.blends) if (b := builder.blend(k, t)) is not None]
    builder.absorptions += blends
    components += [blend.terms for blend in blends]
    coverings = [
        builder.number(f"covering[{g + 1}].value", group.value, "covering")
        for g, group in enumerate(job.coverings)
    ]
    segments: list[SegmentTerms] = []
    transitions: list[Transition] = []
    for i, region in enumerate(job.regions):
        transition = builder.transition(i, region)
        if transition is not None:
            transitions.append(transition)
            segments += builder.segments(i, region, transition, fwhm)
    builder.check_blends(segments)
    if builder.faults:
        raise JobError(builder.faults)
    model = AbsorberModel(
        job.absorber.redshift,
        ParameterSet(builder.parameters),
        alpha,
        components,
        segments,
        coverings=coverings,
        heavy=heavy,
    )
    return BuiltModel(job, tuple(spectra), atoms, model, tuple(transitions))


def build_template(job: Job, spectra: Sequence[Spectrum], atoms: AtomicData) -> Template:
    """Everything of a job's model but its components and blends, for the structure search.

    Every ion that a region is about may absorb anywhere in the windows of its regions.

    Raises
    ------
    JobError
        As `build_model`.

    """
    builder = _Builder(job, spectra, atoms)
    alpha = builder.number(ALPHA, job.alpha.dalpha, "dalpha")
    heavy = builder.heavy_magnesium()
    fwhm = {table.id: _put_fwhm(builder, i, table) for i, table in enumerate(job.spectra)}
    builder.put_distortions()
    windows: dict[str, tuple[float, float]] = {}
    for region in job.regions:
        if region.redshift is None:
            low, high = windows.get(region.ion, region.window)
            windows[region.ion] = min(low, region.window[0]), max(high, region.window[1])
    nothing = ComponentTerms(0, {})
    for ion, window in windows.items():
        lines = [line for line in atoms.find(ion=ion, extra=True) if line.ground]
        for velocity in window:
            builder.absorptions.append(
                _Absorption(
                    nothing, ion, lines, job.absorber.redshift, velocity, _PROBE_B, _PROBE_COLUMN
                )
            )
    segments: list[SegmentTerms] = []
    for i, region in enumerate(job.regions):
        transition = builder.transition(i, region)
        if transition is not None:
            segments += builder.segments(i, region, transition, fwhm)
    if builder.faults:
        raise JobError(builder.faults)
    return Template(
        job.absorber.redshift,
        tuple(builder.parameters),
        alpha,
        tuple(segments),
        windows,
        heavy,
    )


def _put_fwhm(builder: _Builder, i: int, table: SpectrumTable) -> int:
    name = f"spectrum[{i + 1}].fwhm"
    resolution = table.resolution
    if resolution.fwhm is None:
        value = line_spread(resolution, builder.job, i).fwhm
        return builder.put(Parameter(name, value, "km/s", fixed=True))
    prior = None
    if resolution.error is not None and resolution.fwhm.is_free:
        prior = Prior(float(resolution.fwhm.value or 0.0), resolution.error)
    return builder.number(name, resolution.fwhm, "fwhm", prior=prior)
