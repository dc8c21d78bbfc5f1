"""The tables that describe the absorption: regions, components, blends, covering fractions."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Annotated, Any

from pydantic import BeforeValidator

from fathomline.job.fields import (
    Count,
    Identifier,
    Ion,
    Redshift,
    TransitionName,
    VelocityRange,
    Wavelength,
    array_of,
    between,
    written_once,
)
from fathomline.job.number import Number, checked_as
from fathomline.job.table import Fault, Table, Whole, describe, fault
from fathomline.job.table import plain as plain_number

__all__ = ["MAXIMUM_CONTINUUM_ORDER", "Blend", "Component", "Covering", "Region"]

#: Highest continuum polynomial; above it a continuum can fill in absorption lines.
MAXIMUM_CONTINUUM_ORDER = 20


def _column_densities(value: object) -> object:
    if not isinstance(value, Mapping):
        raise fault(
            f'expected a table of ions such as {{ "Fe II" = 12.9 }}, found {describe(value)}'
        )
    return value


def _one_column_density(value: object) -> object:
    if isinstance(value, Mapping) and not value.keys() & set(Number.keys()):
        raise fault("a blend has one logN, which all its lines share; write for example 12.9")
    return value


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

    `redshift` is given for the line of another absorber, such as a line of a blend that stands
    clear elsewhere. The velocities of the region are then about this redshift, the transition
    needs no q, and a blend of the job has the redshift and the transition. None is the absorber's
    redshift.
    """

    transition: TransitionName
    redshift: Redshift | None = None
    window: VelocityRange
    spectra: Annotated[tuple[Identifier, ...], array_of("an array of spectrum ids")] | None = None
    continuum: Annotated[
        Whole,
        between(-1, MAXIMUM_CONTINUUM_ORDER, f"an order from -1 to {MAXIMUM_CONTINUUM_ORDER}"),
    ] = 1
    zero_level: Annotated[
        Annotated[Number, checked_as("zero_level")] | None, BeforeValidator(_zero_level)
    ] = None
    exclude: Annotated[
        tuple[VelocityRange, ...], array_of("an array of [lower, upper] ranges")
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


class Blend(Table):
    """One component of absorption that does not belong to the absorber.

    Either it has known transitions, one `line` or several `lines` of one ion or of ions with the
    same column density, at a `redshift`; or it is an unknown line at the observed vacuum
    `wavelength` in Å. `velocity` is in km/s about that redshift or wavelength, `b` in km/s.

    `logN` is log10 of the column density in cm⁻². For a bare wavelength, whose oscillator strength
    nobody knows, it is log10 of the column density times the oscillator strength, N·f, in cm⁻².
    """

    line: TransitionName | None = None
    lines: (
        Annotated[
            tuple[TransitionName, ...],
            written_once(str),
            array_of("an array of transitions", 'write for example ["C IV 1548", "C IV 1550"]'),
        ]
        | None
    ) = None
    wavelength: Wavelength | None = None
    redshift: Redshift | None = None
    velocity: Annotated[Number, checked_as("velocity")] = Number(value=0.0)
    b: Annotated[Number, checked_as("b")]
    logN: Annotated[  # noqa: N815 (the key of the job file)
        Number, BeforeValidator(_one_column_density), checked_as("logN")
    ]

    @property
    def transitions(self) -> tuple[str, ...]:
        """The transitions of the blend, such as ``("C IV 1548",)``; none for a bare wavelength."""
        return (self.line,) if self.line is not None else self.lines or ()

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Transitions with a redshift, or a wavelength without."""
        given = [key for key in ("line", "lines", "wavelength") if data.get(key) is not None]
        redshift = data.get("redshift") is not None
        if len(given) != 1:
            found = " and ".join(map(repr, given)) if given else "none"
            yield Fault(
                (), f"expected one of 'line', 'lines' and 'wavelength' (Angstrom), found {found}"
            )
        elif given == ["wavelength"]:
            if redshift:
                yield Fault(
                    ("redshift",), "'redshift' does not go with a wavelength, which is observed"
                )
        elif not redshift:
            yield Fault((), f"{given[0]!r} needs a redshift, that of the other absorber")


class Covering(Table):
    """A fraction of the source that some components cover, from 0 to 1.

    `components` are counted from 1. A component that is in no such group covers all of the source.
    """

    components: Annotated[
        tuple[Count, ...],
        written_once(lambda count: f"component {count}"),
        array_of("an array of component numbers", "name the components"),
    ]
    value: Annotated[Number, checked_as("covering")]
