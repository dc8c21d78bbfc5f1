"""The tables that describe the instrument: spectra, their resolution, their distortions."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from itertools import pairwise
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Field

from fathomline.job.fields import (
    IDENTIFIER,
    Count,
    Identifier,
    Positive,
    Wavelength,
    WavelengthRange,
    array_of,
    between,
    fixed_by_default,
    written_once,
)
from fathomline.job.number import Number, checked_as
from fathomline.job.table import (
    Fault,
    Real,
    RealOrInfinite,
    Table,
    Text,
    choice,
    describe,
    fault,
    plain,
)

__all__ = ["Columns", "Distortion", "DistortionKind", "Resolution", "Spectrum"]


class Columns(Table):
    """Names of the columns of a spectrum file, where they are not recognised by themselves."""

    wavelength: Text | None = None
    flux: Text | None = None
    error: Text | None = None
    continuum: Text | None = None


class Resolution(Table):
    """The line-spread function: a Gaussian of FWHM in km/s or of R = c/FWHM, or a table.

    `error` is one sigma of the FWHM or of R, in the same unit. It is the width of the Gaussian
    prior if the FWHM is free. A FWHM is fixed unless it is written with ``fixed = false``.

    With `slope`, in km/s per 1000 Å, the FWHM varies with wavelength:
    ``fwhm + slope × (wavelength − pivot)/1000 Å``; `pivot` is a wavelength in Å.

    `table` is the name of a file, kept as written; `Job.line_spread_path` gives the real path.
    """

    fwhm: Annotated[Number, BeforeValidator(fixed_by_default), checked_as("fwhm")] | None = None
    R: Positive | None = None
    error: Positive | None = None
    slope: Real | None = None
    pivot: Wavelength | None = None
    table: Text | None = None

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Exactly one of FWHM, R and a table, each with its own keys."""
        given = [key for key in ("fwhm", "R", "table") if data.get(key) is not None]
        if len(given) != 1:
            found = " and ".join(map(repr, given)) if given else "none"
            yield Fault((), f"expected one of 'fwhm' (km/s), 'R' and 'table', found {found}")
        if given == ["table"] and data.get("error") is not None:
            yield Fault(("error",), "'error' does not go with a table; it is that of fwhm or R")
        slope, pivot = (data.get(key) is not None for key in ("slope", "pivot"))
        if slope and "fwhm" not in given:
            yield Fault(("slope",), "'slope' goes only with fwhm; write fwhm at the pivot in km/s")
        if slope and not pivot:
            yield Fault(
                ("slope",), "'slope' needs a pivot, the wavelength in Angstrom at which fwhm holds"
            )
        if pivot and not slope:
            yield Fault(("pivot",), "'pivot' goes only with slope; remove it, or add the slope")

    def value_faults(self) -> Iterator[Fault]:
        """A tied FWHM has the error of its target."""
        if self.error is not None and self.fwhm is not None and self.fwhm.same_as is not None:
            yield Fault(("error",), "does not go with a tied fwhm; give it at the tie's target")


def _correlation(value: object) -> object:
    if isinstance(value, str) and value == "measured":
        return value
    if isinstance(value, int | float) and not isinstance(value, bool) and -0.5 < value < 0.5:
        return float(value)
    if value is None:
        return None
    raise fault(f'expected a number between -0.5 and 0.5 or "measured", found {describe(value)}')


class Spectrum(Table):
    """One spectrum file and what the file does not say about itself.

    File names are kept as written; `Job.spectrum_path` and its siblings give real paths. `berv` is
    the barycentric Earth radial velocity in km/s of a topocentric spectrum.

    `exclude` holds ranges of vacuum wavelength in Å whose pixels are not used. `correlation` is
    the correlation coefficient of the errors of neighbouring pixels; ``"measured"`` takes it from
    the residuals, None stands for independent errors.
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
    berv: Annotated[Real, between(-1000.0, 1000.0, "a velocity in km/s")] | None = None
    error_file: Text | None = None
    continuum_file: Text | None = None
    resolution: Resolution
    exclude: Annotated[
        tuple[WavelengthRange, ...], array_of("an array of [lower, upper] ranges")
    ] = ()
    correlation: Annotated[float | Literal["measured"] | None, BeforeValidator(_correlation)] = None

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """The velocity of the Earth and the topocentric frame need each other."""
        if data.get("frame") == "topocentric" and data.get("berv") is None:
            yield Fault(("frame",), "a topocentric spectrum needs berv = velocity in km/s")
        if data.get("berv") is not None and data.get("frame") != "topocentric":
            yield Fault(("berv",), 'berv goes only with frame = "topocentric"')


DistortionKind = Literal["shift", "slope", "sawtooth", "table"]

_UNITS = {
    "shift": "m/s",
    "slope": "m/s per 1000 Angstrom",
    "sawtooth": "m/s",
    "table": "factor",
}


def _one_or_several(value: object) -> object:
    """One id stands for an array of one."""
    if isinstance(value, str):
        if IDENTIFIER.fullmatch(value) is None:
            raise fault(
                "expected an id of letters, digits and the characters _ . -, "
                f"found {describe(value)}"
            )
        return (value,)
    return value


def _no_number_table(value: object) -> object:
    if isinstance(value, Mapping):
        raise fault(
            "expected a number, found a table; sigma gives its freedom: 0 fixes it, inf frees it"
        )
    return value


def _increasing(edges: tuple[float, ...]) -> tuple[float, ...]:
    if len(edges) < 2:
        raise fault(f"expected at least two edges in Angstrom, found {len(edges)}")
    for before, after in pairwise(edges):
        if not before < after:
            raise fault(
                f"edge {plain(after)} follows {plain(before)}; write them in increasing order"
            )
    return edges


class Distortion(Table):
    """One term of the wavelength-calibration distortion of one or several spectra.

    Light of wavelength λ is recorded at ``λ (1 + v(λ)/c)``; the terms of a spectrum add up to v.

    - ``"shift"``: `value` in m/s.
    - ``"slope"``: `value` in m/s per 1000 Å, zero at `pivot` (Å).
    - ``"sawtooth"``: `value` is the peak amplitude in m/s. The echelle orders are bounded by
      `order_edges` (Å), or by edges at ``pivot + n × order_spacing`` (Å).
    - ``"table"``: `value` is a factor that multiplies the velocities of the table in `file`.

    `sigma` is in the unit of `value`: 0 fixes the term, ``inf`` frees it, any other value frees it
    with a Gaussian prior about `value`. The term holds in the `regions` (counted from 1), by
    default in all regions of its `spectra`. Absorbers whose jobs have the same text in `shared`
    share the error of the term.
    """

    spectra: Annotated[
        tuple[Identifier, ...],
        written_once(lambda name: f"spectrum {name!r}"),
        array_of("a spectrum id or an array of them", "name the spectra"),
        BeforeValidator(_one_or_several),
    ] = Field(alias="spectrum")
    regions: (
        Annotated[
            tuple[Count, ...],
            written_once(lambda count: f"region {count}"),
            array_of("an array of region numbers", "leave it out to use all"),
        ]
        | None
    ) = None
    kind: Annotated[DistortionKind, choice("shift", "slope", "sawtooth", "table")]
    value: Annotated[Real, BeforeValidator(_no_number_table)] = 0.0
    sigma: Annotated[RealOrInfinite, between(0.0, float("inf"), "a number from 0, or inf")] = 0.0
    pivot: Wavelength | None = None
    order_edges: (
        Annotated[
            tuple[Wavelength, ...],
            AfterValidator(_increasing),
            array_of("an array of wavelengths in Angstrom"),
        ]
        | None
    ) = None
    order_spacing: Wavelength | None = None
    file: Text | None = None
    shared: Text | None = None

    @property
    def unit(self) -> str:
        """The unit of `value` and `sigma`, as text."""
        return _UNITS[self.kind]

    @property
    def is_free(self) -> bool:
        """Whether a fit may change the term."""
        return self.sigma > 0.0

    @property
    def has_prior(self) -> bool:
        """Whether a Gaussian prior of width `sigma` holds the term at `value`."""
        return 0.0 < self.sigma < float("inf")

    @staticmethod
    def default_value(kind: str) -> float:
        """The `value` of a term whose job gives none: 1 for a table, 0 for the others."""
        return 1.0 if kind == "table" else 0.0

    @classmethod
    def prepared(cls, data: object) -> object:
        """A table counts as it is, unless the job says by how much it is multiplied."""
        if isinstance(data, Mapping) and data.get("kind") == "table" and data.get("value") is None:
            return {**data, "value": cls.default_value("table")}
        return data

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Each kind has the keys that it needs, and no others."""
        kind = data.get("kind")
        if not isinstance(kind, str) or kind not in _UNITS:
            return
        given = {
            key
            for key in ("pivot", "order_edges", "order_spacing", "file")
            if data.get(key) is not None
        }
        orders = given & {"order_edges", "order_spacing"}
        if kind == "sawtooth" and len(orders) != 1:
            found = "both" if orders else "none"
            yield Fault(
                (),
                "a sawtooth needs one of 'order_edges' and 'order_spacing' (Angstrom), "
                f"found {found}",
            )
        for key in ("order_edges", "order_spacing"):
            if kind != "sawtooth" and key in given:
                yield Fault((key,), f'{key!r} goes only with kind = "sawtooth"')
        if kind == "slope" and "pivot" not in given:
            yield Fault((), "a slope needs a pivot, the wavelength in Angstrom where it is zero")
        if orders == {"order_spacing"} and kind == "sawtooth" and "pivot" not in given:
            yield Fault((), "order_spacing needs a pivot, the wavelength in Angstrom of one edge")
        if "pivot" in given and not (
            kind == "slope" or (kind == "sawtooth" and orders != {"order_edges"})
        ):
            yield Fault(
                ("pivot",), "'pivot' goes only with a slope, or with a sawtooth's order_spacing"
            )
        if kind == "table" and "file" not in given:
            yield Fault((), "a table needs a file")
        if kind != "table" and "file" in given:
            yield Fault(("file",), "'file' goes only with kind = \"table\"")
