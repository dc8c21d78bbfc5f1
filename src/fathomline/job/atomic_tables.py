"""The tables that say which atomic data are used, and where a job departs from them."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, ValidationError

from fathomline.job.fields import (
    NotNegative,
    Positive,
    TransitionName,
    entries_of,
    fixed_by_default,
    matching,
)
from fathomline.job.number import Number, checked_as
from fathomline.job.table import (
    Fault,
    Real,
    Table,
    Text,
    choice,
    describe,
    fault,
    plain,
    validation_error,
)

__all__ = ["Abundance", "Atomic", "Override"]

#: Abundances that add up to 1 within this are complete; published ones have six digits or fewer.
_SUM_TOLERANCE = 1e-6

_MASS_NUMBER = re.compile(r"[1-9][0-9]{0,2}")
_OVERRIDDEN = ("wavenumber", "f", "gamma", "q")

#: ``"terrestrial"``, the mass number of the only isotope as text, or fractions by mass number.
Abundance = str | dict[str, float]


def _is_fraction(value: object) -> bool:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    return 0.0 <= value <= 1.0 + _SUM_TOLERANCE


def _abundance(value: object) -> str | dict[str, float]:
    if isinstance(value, str):
        if value != "terrestrial" and _MASS_NUMBER.fullmatch(value) is None:
            raise fault(
                f'expected "terrestrial" or a mass number such as "24", found {describe(value)}'
            )
        return value
    if not isinstance(value, Mapping):
        raise fault(
            'expected "terrestrial", a mass number such as "24", or a table such as '
            f'{{ "24" = 0.8, "26" = 0.2 }}, found {describe(value)}'
        )
    faults = []
    fractions = {}
    for key, given in value.items():
        if not isinstance(key, str) or _MASS_NUMBER.fullmatch(key) is None:
            place = key if isinstance(key, str) else str(key)
            faults.append(
                Fault((place,), f'expected a mass number such as "24", found {describe(key)}')
            )
        elif not _is_fraction(given):
            found = describe(given)
            faults.append(Fault((key,), f"expected a fraction from 0 to 1, found {found}"))
        else:
            fractions[key] = float(given)
    if faults:
        raise validation_error("abundances", faults)
    total = sum(fractions.values())
    if abs(total - 1.0) > _SUM_TOLERANCE:
        raise fault(f"the fractions add up to {plain(round(total, 9))}; they must add up to 1")
    return fractions


def _elements(value: object) -> object:
    if not isinstance(value, Mapping):
        raise fault(
            f'expected a table of elements such as {{ Mg = "24" }}, found {describe(value)}'
        )
    return value


_Element = Annotated[
    Text, matching(re.compile(r"[A-Z][a-z]?"), 'the symbol of an element such as "Mg"')
]


class Override(Table):
    """Numbers of one transition that replace those of the transition table.

    `wavenumber` (cm⁻¹) is that of the whole line: its isotopic and hyperfine components move along.
    `f` is the oscillator strength, `gamma` the damping constant in s⁻¹, `q` the sensitivity in
    cm⁻¹.
    """

    transition: TransitionName
    wavenumber: Positive | None = None
    f: Positive | None = None
    gamma: NotNegative | None = None
    q: Real | None = None

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Something is overridden."""
        if all(data.get(key) is None for key in _OVERRIDDEN):
            keys = ", ".join(map(repr, _OVERRIDDEN))
            yield Fault((), f"overrides nothing; write at least one of {keys}")


class Atomic(Table):
    """Which atomic data are used.

    ``structure = "isotopic"`` fits the isotopic and hyperfine components of each line,
    ``"composite"`` one line at their mean.

    `folder` holds transition tables with the columns of the program's own; it is kept as written,
    `Job.atomic_path` gives the real path. `overrides` replace single numbers.

    `abundances` of the isotopes by element are ``"terrestrial"``, also where nothing is said; or
    the mass number of the only isotope, as text; or a table of mass numbers and fractions.

    `heavy_magnesium` multiplies the terrestrial abundances of ²⁵Mg and ²⁶Mg; ²⁴Mg takes the rest,
    and is gone at 1/(0.1000 + 0.1101) = 4.76. It is fixed unless it is written with
    ``fixed = false``; `heavy_magnesium_sigma` is then the width of its Gaussian prior, if any.
    """

    structure: Annotated[Literal["isotopic", "composite"], choice("isotopic", "composite")] = (
        "isotopic"
    )
    folder: Text | None = None
    abundances: Annotated[
        dict[_Element, Annotated[Abundance, BeforeValidator(_abundance)]],
        BeforeValidator(_elements),
    ] = {}  # noqa: RUF012 (pydantic copies it for each instance)
    heavy_magnesium: Annotated[
        Number, BeforeValidator(fixed_by_default), checked_as("heavy_magnesium")
    ] = Number(value=1.0, fixed=True)
    heavy_magnesium_sigma: Positive | None = None
    overrides: Annotated[tuple[Override, ...], entries_of("atomic.override")] = Field(
        default=(), alias="override"
    )

    def value_faults(self) -> Iterator[Fault]:
        """Magnesium is described once, so is each transition; a prior belongs to a free number."""
        standard = self.heavy_magnesium == Number(value=1.0, fixed=True)
        if "Mg" in self.abundances and not standard:
            yield Fault(
                ("heavy_magnesium",),
                "does not go with abundances.Mg, which it would change; remove one of the two",
            )
        if self.heavy_magnesium_sigma is not None and not self.heavy_magnesium.is_free:
            yield Fault(
                ("heavy_magnesium_sigma",),
                "needs a free heavy_magnesium; write "
                "heavy_magnesium = { value = 1.0, fixed = false }",
            )
        yield from _repeated(self.overrides)

    @classmethod
    def partial_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Repeated transitions, among the overrides that are valid in themselves."""
        entries = data.get("override")
        overrides: list[Override | None] = []
        for entry in entries if isinstance(entries, list | tuple) else ():
            try:
                overrides.append(Override.model_validate(entry))
            except ValidationError:
                overrides.append(None)
        yield from _repeated(overrides)


def _repeated(overrides: Any) -> Iterator[Fault]:
    first: dict[str, int] = {}
    for index, override in enumerate(overrides):
        if override is None:
            continue
        name = override.transition
        if name in first:
            yield Fault(
                ("override", index, "transition"),
                f"{name} is already overridden in entry {first[name] + 1}; put both together",
            )
        first.setdefault(name, index)
