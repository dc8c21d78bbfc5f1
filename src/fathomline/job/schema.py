"""The tables of a job file, version 1, as frozen models.

Attribute names are the keys of the file, except that `Job` calls its arrays of tables `spectra`,
`regions` and `components`. Velocities are in km/s about the absorber redshift, angles in degrees,
temperatures in K, column densities log10 of cm⁻², Δα/α in parts per million.

Building a model by hand raises pydantic's ValidationError, a ValueError; `build_job` turns it into
a `JobError`. `model_copy(update=...)` checks nothing.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, ClassVar, Literal, TypeVar

from pydantic import AfterValidator, BeforeValidator, Field, PrivateAttr, ValidationError

from fathomline.constants import C_KMS
from fathomline.errors import JobError
from fathomline.job.number import Number, Reference, checked_as, start_values, tie_faults
from fathomline.job.paths import absolute_path
from fathomline.job.table import Fault, Flag, Real, Table, Text, Whole, choice, describe, fault
from fathomline.job.table import plain as plain_number
from fathomline.job.toml_source import TomlSource

__all__ = [
    "MAXIMUM_ENTRIES",
    "SUPPORTED_SCHEMAS",
    "Absorber",
    "Alpha",
    "Atomic",
    "Columns",
    "Component",
    "Fit",
    "Job",
    "Region",
    "Resolution",
    "Spectrum",
    "attach",
    "unsupported_schema",
]

#: Versions of the job file that can be read.
SUPPORTED_SCHEMAS = (1,)

#: Highest continuum polynomial; above it a continuum can fill in absorption lines.
MAXIMUM_CONTINUUM_ORDER = 20

#: More spectra, regions or components than this are a mistake, not a job.
MAXIMUM_ENTRIES = 2000

_NOT_YET = "not available in this version"
_IDENTIFIER = re.compile(r"[A-Za-z0-9_.-]+")
_ION = r"[A-Z][a-z]? [IVX]+"
_ION_NAME = re.compile(_ION)
_TRANSITION = re.compile(rf"({_ION}) (\S+)")


def _matching(pattern: re.Pattern[str], expected: str) -> AfterValidator:
    def check(text: str) -> str:
        if pattern.fullmatch(text) is None:
            raise fault(f"expected {expected}, found {describe(text)}")
        return text

    return AfterValidator(check)


def _between(
    lower: float, upper: float, expected: str, *, open_ends: tuple[bool, bool] = (False, False)
) -> AfterValidator:
    def check(value: float) -> float:
        too_low = value <= lower if open_ends[0] else value < lower
        too_high = value >= upper if open_ends[1] else value > upper
        if too_low or too_high:
            raise fault(f"expected {expected}, found {plain_number(value)}")
        return value

    return AfterValidator(check)


_ANY = float("inf")
Positive = Annotated[Real, _between(0.0, _ANY, "a number above 0", open_ends=(True, False))]
Identifier = Annotated[
    Text, _matching(_IDENTIFIER, "an id of letters, digits and the characters _ . -")
]
Ion = Annotated[Text, _matching(_ION_NAME, 'an ion such as "Fe II"')]


def _velocity_range(value: object) -> object:
    if not isinstance(value, list | tuple) or len(value) != 2:
        count = f" of {len(value)}" if isinstance(value, list | tuple) else ""
        raise fault(f"expected [lower, upper] in km/s, found {describe(value)}{count}")
    return tuple(value)


def _ordered(value: tuple[float, float]) -> tuple[float, float]:
    lower, upper = value
    if not lower < upper:
        raise fault(
            f"lower edge {plain_number(lower)} must be below upper edge {plain_number(upper)}; "
            "write [lower, upper] in km/s"
        )
    if max(abs(lower), abs(upper)) >= C_KMS:
        raise fault("an edge is beyond the speed of light; write [lower, upper] in km/s")
    return value


#: Lower and upper velocity in km/s.
VelocityRange = Annotated[
    tuple[Real, Real], BeforeValidator(_velocity_range), AfterValidator(_ordered)
]


def _array_of(expected: str) -> BeforeValidator:
    def check(value: object) -> object:
        if not isinstance(value, list | tuple):
            raise fault(f"expected {expected}, found {describe(value)}")
        return tuple(value)

    return BeforeValidator(check)


def _column_densities(value: object) -> object:
    if not isinstance(value, Mapping):
        raise fault(
            f'expected a table of ions such as {{ "Fe II" = 12.9 }}, found {describe(value)}'
        )
    return value


def _entries_of(section: str) -> BeforeValidator:
    def check(value: object) -> object:
        if isinstance(value, Mapping):
            raise fault(f"expected an array of tables; write [[{section}]] with two brackets")
        if not isinstance(value, list | tuple):
            raise fault(f"expected an array of tables [[{section}]], found {describe(value)}")
        if len(value) > MAXIMUM_ENTRIES:
            raise fault(f"{len(value)} entries; a job has at most {MAXIMUM_ENTRIES}")
        return tuple(value)

    return BeforeValidator(check)


class Absorber(Table):
    """The absorption system: its name, the zero of the velocity scale, and its place on the sky."""

    name: Text
    redshift: Annotated[Real, _between(-1.0, _ANY, "a number above -1", open_ends=(True, False))]
    #: ICRS right ascension and declination in degrees; both or none.
    ra: (
        Annotated[Real, _between(0.0, 360.0, "0 <= ra < 360 deg", open_ends=(False, True))] | None
    ) = None
    dec: Annotated[Real, _between(-90.0, 90.0, "-90 <= dec <= 90 deg")] | None = None
    blind: Flag = False

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """A position has two coordinates; blinding is not there yet."""
        for given, absent in (("ra", "dec"), ("dec", "ra")):
            if data.get(given) is not None and data.get(absent) is None:
                yield Fault((given,), f"given without {absent!r}; give both or none")
        if data.get("blind") is True:
            yield Fault(("blind",), "blinding is not available in this version; write false")


class Columns(Table):
    """Names of the columns of a spectrum file, where they are not recognised by themselves."""

    wavelength: Text | None = None
    flux: Text | None = None
    error: Text | None = None
    continuum: Text | None = None


def _fixed_by_default(data: object) -> object:
    """A resolution is known, not fitted, unless the job says ``fixed = false``."""
    if isinstance(data, int | float) and not isinstance(data, bool):
        return {"value": data, "fixed": True}
    if isinstance(data, Mapping) and "fixed" not in data and data.get("same_as") is None:
        if "min" in data or "max" in data:
            raise fault("min and max need a free number; add fixed = false")
        return {**data, "fixed": True}
    return data


class Resolution(Table):
    """Width of the Gaussian line-spread function: FWHM in km/s, or R = c/FWHM.

    `error` is one sigma in the same unit. It is the width of the Gaussian prior if the FWHM is
    free. A FWHM is fixed unless it is written with ``fixed = false``.
    """

    later_keys: ClassVar[frozenset[str]] = frozenset({"table"})

    fwhm: Annotated[Number, BeforeValidator(_fixed_by_default), checked_as("fwhm")] | None = None
    R: Positive | None = None
    error: Positive | None = None

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Exactly one of FWHM and R."""
        given = [key for key in ("fwhm", "R") if data.get(key) is not None]
        if len(given) != 1:
            found = "both" if given else "none"
            yield Fault((), f"expected one of 'fwhm' (km/s) and 'R', found {found}")

    def value_faults(self) -> Iterator[Fault]:
        """A tied FWHM has the error of its target."""
        if self.error is not None and self.fwhm is not None and self.fwhm.same_as is not None:
            yield Fault(("error",), "does not go with a tied fwhm; give it at the tie's target")


class Spectrum(Table):
    """One spectrum file and what the file does not say about itself.

    File names are kept as written; `Job.spectrum_path` and its siblings give real paths. `berv` is
    the barycentric Earth radial velocity in km/s of a topocentric spectrum.
    """

    id: Identifier
    file: Text
    columns: Columns | None = None
    unit: Text | None = None
    medium: Annotated[Literal["vacuum", "air"], choice("vacuum", "air")] | None = None
    frame: (
        Annotated[Literal["barycentric", "topocentric"], choice("barycentric", "topocentric")]
        | None
    ) = None
    berv: Annotated[Real, _between(-1000.0, 1000.0, "a velocity in km/s")] | None = None
    error_file: Text | None = None
    continuum_file: Text | None = None
    resolution: Resolution

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """The velocity of the Earth and the topocentric frame need each other."""
        if data.get("frame") == "topocentric" and data.get("berv") is None:
            yield Fault(("frame",), "a topocentric spectrum needs berv = velocity in km/s")
        if data.get("berv") is not None and data.get("frame") != "topocentric":
            yield Fault(("berv",), 'berv goes only with frame = "topocentric"')


class Atomic(Table):
    """How the transition table is used.

    ``structure = "isotopic"`` fits the isotopic and hyperfine components of each line,
    ``"composite"`` one line at their mean.
    """

    structure: Annotated[Literal["isotopic", "composite"], choice("isotopic", "composite")] = (
        "isotopic"
    )


class Alpha(Table):
    """Δα/α itself, in parts per million."""

    dalpha: Annotated[Number, checked_as("dalpha")] = Number(value=0.0)


def _zero_level(value: object) -> object:
    """``true`` is a free zero level that starts at 0, ``false`` is none."""
    if value is True:
        return Number(value=0.0)
    if value is False:
        return None
    return value


class Region(Table):
    """One transition in a velocity window, and what is fitted there besides the absorption.

    `spectra` None means every spectrum that covers the region. `continuum` is the order of the
    polynomial that multiplies the file's continuum; −1 holds the file's continuum. `zero_level` is
    a fraction of the continuum, None if there is none.
    """

    transition: Annotated[Text, _matching(_TRANSITION, 'an ion and a label such as "Fe II 2382"')]
    window: VelocityRange
    spectra: Annotated[tuple[Identifier, ...], _array_of("an array of spectrum ids")] | None = None
    continuum: Annotated[
        Whole,
        _between(-1, MAXIMUM_CONTINUUM_ORDER, f"an order from -1 to {MAXIMUM_CONTINUUM_ORDER}"),
    ] = 1
    zero_level: Annotated[
        Annotated[Number, checked_as("zero_level")] | None, BeforeValidator(_zero_level)
    ] = None
    exclude: Annotated[
        tuple[VelocityRange, ...], _array_of("an array of [lower, upper] ranges")
    ] = ()

    @property
    def ion(self) -> str:
        """The ion of the transition, such as ``"Fe II"``."""
        return self.transition.rpartition(" ")[0]

    @property
    def label(self) -> str:
        """The label of the transition within its ion, such as ``"2382"``."""
        return self.transition.rpartition(" ")[2]

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """A list of spectra is not empty."""
        if data.get("spectra") in ([], ()):
            yield Fault(("spectra",), "names no spectrum; leave it out to use all that cover it")

    def value_faults(self) -> Iterator[Fault]:
        """Excluded ranges lie in the window, spectra are named once."""
        lower, upper = self.window
        for index, (start, end) in enumerate(self.exclude):
            if start < lower or end > upper:
                yield Fault(
                    ("exclude", index),
                    f"{plain_number(start)} to {plain_number(end)} km/s reaches outside the "
                    f"window {plain_number(lower)} to {plain_number(upper)}",
                )
        for index, name in enumerate(self.spectra or ()):
            if self.spectra is not None and name in self.spectra[:index]:
                yield Fault(("spectra", index), f"spectrum {name!r} is named twice")


class Component(Table):
    """One velocity component, shared by all ions.

    Broadening is either turbulent (`b`, km/s), or thermal (`temperature`, K), or thermal with a
    turbulent part (`b_turb`, km/s). `logN` holds log10 of the column density in cm⁻² per ion.
    """

    velocity: Annotated[Number, checked_as("velocity")]
    b: Annotated[Number, checked_as("b")] | None = None
    temperature: Annotated[Number, checked_as("temperature")] | None = None
    b_turb: Annotated[Number, checked_as("b_turb")] | None = None
    logN: Annotated[  # noqa: N815 (the key of the job file)
        dict[Ion, Annotated[Number, checked_as("logN")]], BeforeValidator(_column_densities)
    ]

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """One broadening law, at least one ion."""
        given = {key for key in ("b", "temperature", "b_turb") if data.get(key) is not None}
        if not given:
            yield Fault((), "no width; write b (km/s), or temperature (K) with or without b_turb")
        elif "b" in given and len(given) > 1:
            yield Fault(
                ("b",),
                "b does not go with temperature and b_turb; write b_turb for the turbulent part",
            )
        elif given == {"b_turb"}:
            yield Fault(("b_turb",), "b_turb needs a temperature; write b for turbulence alone")
        if data.get("logN") == {}:
            yield Fault(("logN",), 'names no ion; write for example { "Fe II" = 12.9 }')


class Fit(Table):
    """How the fit is run. The same seed gives the same numbers."""

    solver: Annotated[Literal["default", "lmfit"], choice("default", "lmfit")] = "default"
    restarts: Annotated[Whole, _between(0, 10_000, "a count from 0 to 10000")] = 4
    max_iterations: Annotated[Whole, _between(1, 1_000_000, "a count from 1 to 1000000")] = 200
    seed: Annotated[Whole, _between(0, 2.0**63, "a whole number from 0")] = 1


class Job(Table):
    """A whole job: one absorber, its spectra, regions and components, and how to fit them.

    In memory, `Job(schema=1, absorber=..., spectrum=[...], region=[...], component=[...])` takes
    the keys of the file. Equality does not depend on where a job was read from.
    """

    later_keys: ClassVar[frozenset[str]] = frozenset({"distortion", "blend", "structure", "budget"})

    schema_version: Whole = Field(alias="schema")
    absorber: Absorber
    spectra: Annotated[tuple[Spectrum, ...], _entries_of("spectrum")] = Field(
        default=(), alias="spectrum"
    )
    atomic: Atomic = Atomic()
    alpha: Alpha = Alpha()
    regions: Annotated[tuple[Region, ...], _entries_of("region")] = Field(
        default=(), alias="region"
    )
    components: Annotated[tuple[Component, ...], _entries_of("component")] = Field(
        default=(), alias="component"
    )
    fit: Fit = Fit()

    _source: TomlSource = PrivateAttr(default_factory=TomlSource)

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """A supported schema, at least one entry of each array of tables."""
        unsupported = unsupported_schema(data)
        if unsupported is not None:
            yield unsupported
        for section, reason in (
            ("spectrum", ""),
            ("region", ""),
            ("component", f" (structure search is {_NOT_YET})"),
        ):
            if data.get(section, []) in ([], ()):
                yield Fault((section,), f"missing; at least one is needed{reason}")

    def value_faults(self) -> Iterator[Fault]:
        """Names are unique and known, ties lead somewhere."""
        yield from _cross_faults(self.alpha, self.spectra, self.regions, self.components)

    @classmethod
    def partial_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """The cross-checks among those tables that are valid in themselves."""
        yield from _cross_faults(
            _built(Alpha, data.get("alpha", {})) or Alpha(),
            _built_entries(Spectrum, data.get("spectrum")),
            _built_entries(Region, data.get("region")),
            _built_entries(Component, data.get("component")),
        )

    def numbers(self) -> dict[Reference, Number]:
        """All numbers of the model by reference: alpha, spectra, regions, components in order."""
        return _numbers(self.alpha, self.spectra, self.regions, self.components)

    def start_values(self) -> dict[Reference, float]:
        """The start value of each of the `numbers`, ties followed, in the units of the keys."""
        values = start_values(self.numbers())
        return {reference: value for reference, value in values.items() if value is not None}

    def locate(self, *path: str | int) -> str:
        """Where a key was written, such as ``"halden.toml:23"``.

        The path consists of keys of the job file and indices from 0:
        ``locate("region", 1, "window")``. A key that was not written is located at its table.
        """
        return self._source.place(path)

    def spectrum_path(self, index: int) -> Path:
        """Absolute path of the file of spectrum `index` (from 0), variables expanded.

        Raises
        ------
        JobError
            An environment variable is not defined any more.

        """
        return self._path(index, "file", self.spectra[index].file)

    def error_path(self, index: int) -> Path | None:
        """Absolute path of the error file of spectrum `index`, None if it has none."""
        text = self.spectra[index].error_file
        return None if text is None else self._path(index, "error_file", text)

    def continuum_path(self, index: int) -> Path | None:
        """Absolute path of the continuum file of spectrum `index`, None if it has none."""
        text = self.spectra[index].continuum_file
        return None if text is None else self._path(index, "continuum_file", text)

    def _path(self, index: int, key: str, text: str) -> Path:
        try:
            return absolute_path(text, self._source.folder)
        except ValueError as error:
            place = self.locate("spectrum", index, key)
            raise JobError(f"{place}: [[spectrum]] {index + 1} '{key}': {error}") from None


def unsupported_schema(data: Mapping[str, Any]) -> Fault | None:
    """The fault of a job whose schema number is none of `SUPPORTED_SCHEMAS`, if that is so."""
    schema = data.get("schema")
    if not isinstance(schema, int) or isinstance(schema, bool) or schema in SUPPORTED_SCHEMAS:
        return None
    supported = ", ".join(map(str, SUPPORTED_SCHEMAS))
    return Fault(("schema",), f"this version reads schema {supported}, found {describe(schema)}")


def attach(job: Job, source: TomlSource) -> Job:
    """A copy of a job that knows where it was read from."""
    copy = job.model_copy()
    copy._source = source
    return copy


_Model = TypeVar("_Model", bound=Table)


def _built(model: type[_Model], data: object) -> _Model | None:
    """A table, or None if it has faults; those are reported where the whole is validated."""
    try:
        return model.model_validate(data)
    except ValidationError:
        return None


def _built_entries(model: type[_Model], data: object) -> list[_Model | None]:
    if not isinstance(data, list | tuple) or len(data) > MAXIMUM_ENTRIES:
        return []
    return [_built(model, entry) for entry in data]


def _numbers(
    alpha: Alpha,
    spectra: Sequence[Spectrum | None],
    regions: Sequence[Region | None],
    components: Sequence[Component | None],
) -> dict[Reference, Number]:
    found: dict[Reference, Number | None] = {Reference("alpha", 0, "dalpha"): alpha.dalpha}
    for index, spectrum in enumerate(spectra):
        if spectrum is not None:
            found[Reference("spectrum", index, "fwhm")] = spectrum.resolution.fwhm
    for index, region in enumerate(regions):
        if region is not None:
            found[Reference("region", index, "zero_level")] = region.zero_level
    for index, component in enumerate(components):
        if component is not None:
            for quantity in ("velocity", "b", "temperature", "b_turb"):
                found[Reference("component", index, quantity)] = getattr(component, quantity)
            for ion, number in component.logN.items():
                found[Reference("component", index, "logN", ion)] = number
    return {reference: number for reference, number in found.items() if number is not None}


def _cross_faults(
    alpha: Alpha,
    spectra: Sequence[Spectrum | None],
    regions: Sequence[Region | None],
    components: Sequence[Component | None],
) -> Iterator[Fault]:
    """Faults between tables; None stands for a table that has faults of its own."""
    known: dict[str, int] = {}
    for index, spectrum in enumerate(spectra):
        if spectrum is None:
            continue
        if spectrum.id in known:
            yield Fault(
                ("spectrum", index, "id"),
                f"{spectrum.id!r} is already the id of spectrum {known[spectrum.id] + 1}",
            )
        known.setdefault(spectrum.id, index)
    if None not in spectra:
        for index, region in enumerate(regions):
            names = () if region is None or region.spectra is None else region.spectra
            for place, name in enumerate(names):
                if name not in known:
                    yield Fault(
                        ("region", index, "spectra", place),
                        f"there is no spectrum {name!r}; the ids are: {', '.join(known)}",
                    )
    if components and None not in components:
        ions = dict.fromkeys(ion for entry in components if entry for ion in entry.logN)
        for index, region in enumerate(regions):
            if region is not None and region.ion not in ions:
                yield Fault(
                    ("region", index, "transition"),
                    f"no component has a logN of {region.ion}; they have: {', '.join(ions)}",
                )
    tables = {"spectrum": spectra, "region": regions, "component": components}
    yield from tie_faults(
        _numbers(alpha, spectra, regions, components),
        {section: len(entries) for section, entries in tables.items()},
        {
            (section, index)
            for section, entries in tables.items()
            for index, entry in enumerate(entries)
            if entry is None
        },
    )
