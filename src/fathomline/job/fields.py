"""Field types that the tables of a job file share: ranges, names, arrays.

Each type checks one value, and says what was expected and what was found.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from typing import Annotated

from pydantic import AfterValidator, BeforeValidator

from fathomline.constants import C_KMS
from fathomline.job.table import Real, Text, Whole, describe, fault
from fathomline.job.table import plain as plain_number

__all__ = [
    "ANY",
    "IDENTIFIER",
    "MAXIMUM_ENTRIES",
    "Count",
    "Identifier",
    "Ion",
    "NotNegative",
    "Positive",
    "Redshift",
    "TransitionName",
    "VelocityRange",
    "Wavelength",
    "WavelengthRange",
    "array_of",
    "between",
    "entries_of",
    "fixed_by_default",
    "matching",
    "written_once",
]

#: More entries of an array of tables than this are a mistake, not a job.
MAXIMUM_ENTRIES = 2000

ANY = math.inf
IDENTIFIER = re.compile(r"[A-Za-z0-9_.-]+")
_ION = r"[A-Z][a-z]? [IVX]+"


def matching(pattern: re.Pattern[str], expected: str) -> AfterValidator:
    """A validator for text that a pattern has to match as a whole."""

    def check(text: str) -> str:
        if pattern.fullmatch(text) is None:
            raise fault(f"expected {expected}, found {describe(text)}")
        return text

    return AfterValidator(check)


def between(
    lower: float, upper: float, expected: str, *, open_ends: tuple[bool, bool] = (False, False)
) -> AfterValidator:
    """A validator for numbers in a range; an open end does not belong to the range."""

    def check(value: float) -> float:
        too_low = value <= lower if open_ends[0] else value < lower
        too_high = value >= upper if open_ends[1] else value > upper
        if too_low or too_high:
            raise fault(f"expected {expected}, found {plain_number(value)}")
        return value

    return AfterValidator(check)


Positive = Annotated[Real, between(0.0, ANY, "a number above 0", open_ends=(True, False))]
NotNegative = Annotated[Real, between(0.0, ANY, "a number from 0")]
#: A vacuum wavelength in Å.
Wavelength = Annotated[
    Real, between(0.0, ANY, "a wavelength above 0 Angstrom", open_ends=(True, False))
]
Redshift = Annotated[Real, between(-1.0, ANY, "a number above -1", open_ends=(True, False))]
#: A number by which an entry of an array of tables is counted, from 1.
Count = Annotated[Whole, between(1, ANY, "a number counted from 1")]
Identifier = Annotated[
    Text, matching(IDENTIFIER, "an id of letters, digits and the characters _ . -")
]
Ion = Annotated[Text, matching(re.compile(_ION), 'an ion such as "Fe II"')]
TransitionName = Annotated[
    Text, matching(re.compile(rf"({_ION}) (\S+)"), 'an ion and a label such as "Fe II 2382"')
]


def _pair(unit: str) -> BeforeValidator:
    def check(value: object) -> object:
        if not isinstance(value, list | tuple) or len(value) != 2:
            count = f" of {len(value)}" if isinstance(value, list | tuple) else ""
            raise fault(f"expected [lower, upper] in {unit}, found {describe(value)}{count}")
        return tuple(value)

    return BeforeValidator(check)


def _ordered(unit: str) -> AfterValidator:
    def check(value: tuple[float, float]) -> tuple[float, float]:
        lower, upper = value
        if not lower < upper:
            raise fault(
                f"lower edge {plain_number(lower)} must be below upper edge "
                f"{plain_number(upper)}; write [lower, upper] in {unit}"
            )
        return value

    return AfterValidator(check)


def _slower_than_light(value: tuple[float, float]) -> tuple[float, float]:
    if max(abs(edge) for edge in value) >= C_KMS:
        raise fault("an edge is beyond the speed of light; write [lower, upper] in km/s")
    return value


#: Lower and upper velocity in km/s.
VelocityRange = Annotated[
    tuple[Real, Real], _pair("km/s"), _ordered("km/s"), AfterValidator(_slower_than_light)
]

#: Lower and upper vacuum wavelength in Å.
WavelengthRange = Annotated[tuple[Wavelength, Wavelength], _pair("Angstrom"), _ordered("Angstrom")]


def array_of(expected: str, cure: str | None = None) -> BeforeValidator:
    """A validator for an array; with a `cure`, an empty one is a fault that says it."""

    def check(value: object) -> object:
        if not isinstance(value, list | tuple):
            raise fault(f"expected {expected}, found {describe(value)}")
        if cure is not None and not value:
            raise fault(f"expected {expected}, found an empty one; {cure}")
        return tuple(value)

    return BeforeValidator(check)


def written_once(what: Callable[[object], str]) -> AfterValidator:
    """A validator for an array whose elements differ; `what` names an element in the message."""

    def check(values: tuple[object, ...]) -> tuple[object, ...]:
        for index, value in enumerate(values):
            if value in values[:index]:
                raise fault(f"{what(value)} is named twice")
        return values

    return AfterValidator(check)


def entries_of(section: str) -> BeforeValidator:
    """A validator for an array of tables."""

    def check(value: object) -> object:
        if isinstance(value, Mapping):
            raise fault(f"expected an array of tables; write [[{section}]] with two brackets")
        if not isinstance(value, list | tuple):
            raise fault(f"expected an array of tables [[{section}]], found {describe(value)}")
        if len(value) > MAXIMUM_ENTRIES:
            raise fault(f"{len(value)} entries; a job has at most {MAXIMUM_ENTRIES}")
        return tuple(value)

    return BeforeValidator(check)


def fixed_by_default(data: object) -> object:
    """The form of a number that is known, not fitted, unless the job says ``fixed = false``."""
    if isinstance(data, int | float) and not isinstance(data, bool):
        return {"value": data, "fixed": True}
    if isinstance(data, Mapping) and "fixed" not in data and data.get("same_as") is None:
        if "min" in data or "max" in data:
            raise fault("min and max need a free number; add fixed = false")
        return {**data, "fixed": True}
    return data
