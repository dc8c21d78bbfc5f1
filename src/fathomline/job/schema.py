"""The tables of a job file, version 1, as frozen models.

Attribute names are the keys of the file, except that arrays of tables have the plural: `Job` calls
them `spectra`, `distortions`, `regions`, `components`, `blends` and `coverings`. Velocities are in
km/s about the absorber redshift, those of the instrument in m/s, angles in degrees, temperatures in
K, column densities log10 of cm⁻², wavelengths in Å, Δα/α in parts per million.

Building a model by hand raises pydantic's ValidationError, a ValueError; `build_job` turns it into
a `JobError`. `model_copy(update=...)` checks nothing.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any, ClassVar, Literal, TypeVar

from pydantic import Field, PrivateAttr, ValidationError

from fathomline.errors import JobError
from fathomline.job.absorption_tables import Blend, Component, Covering, Region
from fathomline.job.atomic_tables import Atomic, Override
from fathomline.job.cross_checks import Tables, cross_faults, numbers_of
from fathomline.job.fields import MAXIMUM_ENTRIES, Redshift, between, entries_of
from fathomline.job.instrument_tables import Columns, Distortion, Resolution, Spectrum
from fathomline.job.number import Number, Reference, checked_as, start_values
from fathomline.job.paths import absolute_path
from fathomline.job.table import (
    Fault,
    Flag,
    Real,
    Table,
    Text,
    Whole,
    choice,
    describe,
    key_path_text,
)
from fathomline.job.toml_source import TomlSource

__all__ = [
    "SUPPORTED_SCHEMAS",
    "Absorber",
    "Alpha",
    "Atomic",
    "Blend",
    "Columns",
    "Component",
    "Covering",
    "Distortion",
    "Fit",
    "Job",
    "Override",
    "Region",
    "Resolution",
    "Spectrum",
    "Structure",
    "attach",
    "unsupported_schema",
]

#: Versions of the job file that can be read.
SUPPORTED_SCHEMAS = (1,)


class Absorber(Table):
    """The absorption system: its name, the zero of the velocity scale, and its place on the sky."""

    name: Text
    redshift: Redshift
    #: ICRS right ascension and declination in degrees; both or none.
    ra: (
        Annotated[Real, between(0.0, 360.0, "0 <= ra < 360 deg", open_ends=(False, True))] | None
    ) = None
    dec: Annotated[Real, between(-90.0, 90.0, "-90 <= dec <= 90 deg")] | None = None
    blind: Flag = False

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """A position has two coordinates; blinding is not there yet."""
        for given, absent in (("ra", "dec"), ("dec", "ra")):
            if data.get(given) is not None and data.get(absent) is None:
                yield Fault((given,), f"given without {absent!r}; give both or none")
        if data.get("blind") is True:
            yield Fault(("blind",), "blinding is not available in this version; write false")


class Alpha(Table):
    """Δα/α itself, in parts per million."""

    dalpha: Annotated[Number, checked_as("dalpha")] = Number(value=0.0)


class Fit(Table):
    """How the fit is run. The same seed gives the same numbers."""

    solver: Annotated[Literal["default", "lmfit"], choice("default", "lmfit")] = "default"
    restarts: Annotated[Whole, between(0, 10_000, "a count from 0 to 10000")] = 4
    max_iterations: Annotated[Whole, between(1, 1_000_000, "a count from 1 to 1000000")] = 200
    seed: Annotated[Whole, between(0, 2.0**63, "a whole number from 0")] = 1


class Structure(Table):
    """How components are found where none, or only some, are given.

    `search` None stands for: only where no component is given. `criterion` decides what pays;
    `broadening` is the law of the components that are found; `seed` is that of the order in which
    places are tried, and 0 takes the best place first.
    """

    search: Flag | None = None
    criterion: Annotated[Literal["AICc", "AIC", "BIC"], choice("AICc", "AIC", "BIC")] = "AICc"
    broadening: Annotated[Literal["turbulent", "thermal"], choice("turbulent", "thermal")] = (
        "turbulent"
    )
    max_components: Annotated[Whole, between(1, 1000, "a count from 1 to 1000")] = 60
    ensemble: Annotated[Whole, between(0, 1000, "a count from 0 to 1000")] = 0
    seed: Annotated[Whole, between(0, 2.0**63, "a whole number from 0")] = 1


class Job(Table):
    """A whole job: one absorber, its spectra, regions and components, and how to fit them.

    In memory, `Job(schema=1, absorber=..., spectrum=[...], region=[...], component=[...])` takes
    the keys of the file. Equality does not depend on where a job was read from.
    """

    later_keys: ClassVar[frozenset[str]] = frozenset({"budget"})

    schema_version: Whole = Field(alias="schema")
    absorber: Absorber
    spectra: Annotated[tuple[Spectrum, ...], entries_of("spectrum")] = Field(
        default=(), alias="spectrum"
    )
    distortions: Annotated[tuple[Distortion, ...], entries_of("distortion")] = Field(
        default=(), alias="distortion"
    )
    atomic: Atomic = Atomic()
    alpha: Alpha = Alpha()
    regions: Annotated[tuple[Region, ...], entries_of("region")] = Field(default=(), alias="region")
    components: Annotated[tuple[Component, ...], entries_of("component")] = Field(
        default=(), alias="component"
    )
    blends: Annotated[tuple[Blend, ...], entries_of("blend")] = Field(default=(), alias="blend")
    coverings: Annotated[tuple[Covering, ...], entries_of("covering")] = Field(
        default=(), alias="covering"
    )
    structure: Structure = Structure()
    fit: Fit = Fit()

    _source: TomlSource = PrivateAttr(default_factory=TomlSource)

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """A supported schema, at least one entry of each array of tables."""
        unsupported = unsupported_schema(data)
        if unsupported is not None:
            yield unsupported
        for section in ("spectrum", "region"):
            if data.get(section, []) in ([], ()):
                yield Fault((section,), "missing; at least one is needed")
        structure = data.get("structure")
        if (
            data.get("component", []) in ([], ())
            and isinstance(structure, Mapping)
            and structure.get("search") is False
        ):
            yield Fault(
                ("component",), "missing; give at least one, or write search = true in [structure]"
            )

    def value_faults(self) -> Iterator[Fault]:
        """Names are unique and known, ties lead somewhere."""
        yield from cross_faults(self._tables())

    @classmethod
    def partial_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """The cross-checks among those tables that are valid in themselves."""
        yield from cross_faults(
            Tables(
                dalpha=(_built(Alpha, data.get("alpha", {})) or Alpha()).dalpha,
                atomic=_built(Atomic, data.get("atomic", {})) or Atomic(),
                spectra=_built_entries(Spectrum, data.get("spectrum")),
                distortions=_built_entries(Distortion, data.get("distortion")),
                regions=_built_entries(Region, data.get("region")),
                components=_built_entries(Component, data.get("component")),
                blends=_built_entries(Blend, data.get("blend")),
                coverings=_built_entries(Covering, data.get("covering")),
            )
        )

    def _tables(self) -> Tables:
        return Tables(
            dalpha=self.alpha.dalpha,
            atomic=self.atomic,
            spectra=self.spectra,
            distortions=self.distortions,
            regions=self.regions,
            components=self.components,
            blends=self.blends,
            coverings=self.coverings,
        )

    @property
    def searches(self) -> bool:
        """Whether the structure is to be searched for."""
        return not self.components if self.structure.search is None else self.structure.search

    def numbers(self) -> dict[Reference, Number]:
        """All numbers of the model by reference.

        The order is: alpha, atomic, then spectra, regions, components, blends and coverings as in
        the file. Distortions are not among them, since their values are plain numbers.
        """
        return numbers_of(self._tables())

    def start_values(self) -> dict[Reference, float]:
        """The start value of each of the `numbers`, ties followed, in the units of the keys."""
        values = start_values(self.numbers())
        return {reference: value for reference, value in values.items() if value is not None}

    @property
    def name(self) -> str:
        """What messages call the job: the file name as it was given."""
        return self._source.name

    @property
    def folder(self) -> Path:
        """Folder that relative file names start at."""
        return self._source.folder

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
        return self._path(self.spectra[index].file, "spectrum", index, "file")

    def error_path(self, index: int) -> Path | None:
        """Absolute path of the error file of spectrum `index`, None if it has none."""
        text = self.spectra[index].error_file
        return None if text is None else self._path(text, "spectrum", index, "error_file")

    def continuum_path(self, index: int) -> Path | None:
        """Absolute path of the continuum file of spectrum `index`, None if it has none."""
        text = self.spectra[index].continuum_file
        return None if text is None else self._path(text, "spectrum", index, "continuum_file")

    def line_spread_path(self, index: int) -> Path | None:
        """Absolute path of the line-spread table of spectrum `index`, None if it has none."""
        text = self.spectra[index].resolution.table
        return None if text is None else self._path(text, "spectrum", index, "resolution", "table")

    def distortion_path(self, index: int) -> Path | None:
        """Absolute path of the table of distortion `index` (from 0), None if it is no table."""
        text = self.distortions[index].file
        return None if text is None else self._path(text, "distortion", index, "file")

    def atomic_path(self) -> Path | None:
        """Absolute path of the folder of transition tables, None for the program's own."""
        text = self.atomic.folder
        return None if text is None else self._path(text, "atomic", "folder")

    def _path(self, text: str, *path: str | int) -> Path:
        try:
            return absolute_path(text, self._source.folder)
        except ValueError as error:
            raise JobError(f"{self.locate(*path)}: {key_path_text(path)}: {error}") from None


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
