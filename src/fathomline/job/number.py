"""Numbers of a job that can be free, fixed, bounded or tied to each other.

Any number of the model may be written plainly (then it is the start value of a free parameter,
unless its key says otherwise), or as a table::

    { value = 4.2, fixed = true }
    { value = 4.2, min = 0.5, max = 20 }
    { same_as = "component[2].b" }
    { same_as = "component[2].b", ratio = 1.5, offset = 0.2 }

A tied number is ratio × target + offset. The target is a *reference*::

    reference = section "[" count "]" "." key [ "[" quote ion quote "]" ] | "atomic.heavy_magnesium"
    section   = "component" | "blend" | "covering" | "spectrum" | "region" | "distortion"
    count     = 1, 2, 3 ... in the order of the job file
    key       = "velocity" | "b" | "temperature" | "b_turb" | "logN"      of a component
              | "velocity" | "b" | "logN"                                 of a blend
              | "value"                                                   of a covering
              | "fwhm"                                                    of a spectrum
              | "zero_level"                                              of a region
              | "value"                                                   of a distortion
    quote     = " or '

The ion goes with the logN of a component, and only with it: ``component[2].logN["Fe II"]``. Both
ends of a tie have the same quantity (ions may differ, and a component may be tied to a blend). A
target may itself be tied; chains end at an untied number, so they may not close to a circle. The
value of a distortion is a plain number: it has a reference, and takes no part in ties.
"""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Annotated, Any, NamedTuple

from pydantic import AfterValidator

from fathomline.job.table import Fault, Flag, Real, Table, Text, describe, fault, plain
from fathomline.job.toml_source import KeyPath

__all__ = [
    "QUANTITIES",
    "Number",
    "Quantity",
    "Reference",
    "checked_as",
    "start_values",
    "tie_faults",
]


class Quantity(NamedTuple):
    """A kind of number: its unit, the range that has a meaning, and the range a fit may search.

    `bounds` hold for free numbers whose job gives no `min` or `max`; they are there to keep a fit
    out of places where the absorption no longer depends on the number.
    """

    unit: str
    bounds: tuple[float, float] = (-math.inf, math.inf)
    #: Smallest value with a meaning, and whether that value itself has one.
    least: float = -math.inf
    least_included: bool = False
    #: Largest value with a meaning.
    most: float = math.inf

    def is_meaningful(self, value: float) -> bool:
        """Whether the value is in the range that has a meaning."""
        if self.least_included and value == self.least:
            return True
        return self.least < value <= self.most

    def range_text(self, value: float) -> str:
        """What a value without a meaning must be instead, such as ``"above 0 km/s"``."""
        if value > self.most:
            relation, limit = "at most", self.most
        else:
            relation, limit = "at least" if self.least_included else "above", self.least
        return f"{relation} {plain(limit)} {self.unit}".rstrip()


#: The quantities that a `Number` can be, by the `quantity` of their reference.
QUANTITIES: Mapping[str, Quantity] = MappingProxyType(
    {
        # The windows confine a velocity; the model, which knows them, sets those bounds.
        "velocity": Quantity("km/s"),
        # Below 0.3 km/s a line is unresolved at any R in use; above 100 km/s it is a continuum.
        "b": Quantity("km/s", (0.3, 100.0), least=0.0),
        # From the coldest molecular gas to the hottest that still holds low ions.
        "temperature": Quantity("K", (10.0, 1e6), least=0.0),
        "b_turb": Quantity("km/s", (0.0, 100.0), least=0.0, least_included=True),
        # From an undetectable trace to beyond the strongest damped hydrogen absorber.
        "logN": Quantity("log10 cm^-2", (5.0, 23.0)),
        # R from 300 to 3 million.
        "fwhm": Quantity("km/s", (0.1, 1000.0), least=0.0),
        # Fraction of the continuum; beyond these the recorded flux is not a spectrum.
        "zero_level": Quantity("continuum", (-1.0, 1.0)),
        # −1e6 ppm would be α = 0.
        "dalpha": Quantity("ppm", least=-1e6),
        # Fraction of the source.
        "covering": Quantity("", (0.0, 1.0), least=0.0, least_included=True, most=1.0),
        # Factor on the terrestrial abundances of 25Mg and 26Mg; at 1/0.2101 there is no 24Mg left.
        "heavy_magnesium": Quantity("", (0.0, 4.7), least=0.0, least_included=True, most=4.7),
        # The unit is that of the kind of distortion: `Distortion.unit`.
        "distortion": Quantity(""),
    }
)

_SECTION_KEYS = MappingProxyType(
    {
        "component": ("velocity", "b", "temperature", "b_turb", "logN"),
        "blend": ("velocity", "b", "logN"),
        "covering": ("value",),
        "spectrum": ("fwhm",),
        "region": ("zero_level",),
        "distortion": ("value",),
    }
)
#: Sections whose one number is called "value", and has the section's name as its quantity.
_VALUE_SECTIONS = ("covering", "distortion")
#: Tables that a job has once; their numbers are not counted.
_SINGLE_SECTIONS = ("alpha", "atomic")
_REFERENCE = re.compile(
    rf"(?P<section>{'|'.join(_SECTION_KEYS)})\[(?P<count>[1-9][0-9]{{0,8}})\]\.(?P<key>[A-Za-z_]+)"
    r"(?:\[(?P<quote>[\"'])(?P<ion>[^\"'\]]+)(?P=quote)\])?"
)


@dataclass(frozen=True)
class Reference:
    """The name of one number of a job; `str` gives it as the user writes it.

    `index` counts from 0, the text counts from 1; it is 0 for alpha and atomic. `quantity` is a key
    of `QUANTITIES`. `ion` is None for all quantities but the logN of a component.
    """

    section: str
    index: int
    quantity: str
    ion: str | None = None

    @classmethod
    def parse(cls, text: str) -> Reference:
        """Read a reference; the grammar is in the module's documentation.

        Raises
        ------
        ValueError
            The text does not follow the grammar. The message says what would.

        """
        if text == "atomic.heavy_magnesium":
            return cls("atomic", 0, "heavy_magnesium")
        match = _REFERENCE.fullmatch(text)
        if match is None:
            raise ValueError(
                f"{describe(text)} names no number; write for example component[2].b, "
                "component[2].logN['Fe II'] or spectrum[1].fwhm"
            )
        section, key, ion = match["section"], match["key"], match["ion"]
        allowed = _SECTION_KEYS[section]
        if key not in allowed:
            raise ValueError(f"a {section} has no {key!r}; it may have {', '.join(allowed)}")
        needs_ion = section == "component" and key == "logN"
        if needs_ion and ion is None:
            raise ValueError(f"logN needs an ion: {text}['Fe II']")
        if not needs_ion and ion is not None:
            owner = "shared by all ions" if section == "component" else f"one number of a {section}"
            raise ValueError(f"{key!r} is {owner}; write {section}[{match['count']}].{key}")
        quantity = section if section in _VALUE_SECTIONS else key
        return cls(section, int(match["count"]) - 1, quantity, ion)

    @property
    def key(self) -> str:
        """The key that holds the number in its table of the job file."""
        return "value" if self.section in _VALUE_SECTIONS else self.quantity

    @property
    def path(self) -> KeyPath:
        """The key path of the number in the job file."""
        if self.section in _SINGLE_SECTIONS:
            return (self.section, self.key)
        if self.section == "spectrum":
            return ("spectrum", self.index, "resolution", self.key)
        path: KeyPath = (self.section, self.index, self.key)
        return path if self.ion is None else (*path, self.ion)

    def __str__(self) -> str:
        if self.section in _SINGLE_SECTIONS:
            return f"{self.section}.{self.key}"
        name = f"{self.section}[{self.index + 1}].{self.key}"
        return name if self.ion is None else f'{name}["{self.ion}"]'


def _canonical(text: str) -> str:
    """A reference in one spelling, so that equal ties compare equal; faults are reported later."""
    try:
        return str(Reference.parse(text))
    except ValueError:
        return text


class Number(Table):
    """A number of the model: a value with its freedom, or a tie.

    Either `value` is given, in the unit of the key, with `fixed`, `min` and `max`; or `same_as`,
    with `ratio` and `offset` (in the unit of the key). `min` and `max` are inclusive.
    """

    value: Real | None = None
    fixed: Flag = False
    min: Real | None = None
    max: Real | None = None
    same_as: Annotated[Text, AfterValidator(_canonical)] | None = None
    ratio: Real = 1.0
    offset: Real = 0.0

    @property
    def is_free(self) -> bool:
        """Whether a fit may change the number on its own account."""
        return not self.fixed and self.same_as is None

    @property
    def target(self) -> Reference | None:
        """What the number is tied to, if anything."""
        return None if self.same_as is None else Reference.parse(self.same_as)

    def bounds(self, quantity: str) -> tuple[float, float]:
        """Lower and upper bound of a free number, those of the quantity where the job has none."""
        lower, upper = QUANTITIES[quantity].bounds
        return (
            lower if self.min is None else self.min,
            upper if self.max is None else self.max,
        )

    @classmethod
    def prepared(cls, data: object) -> object:
        """A plain number stands for its value."""
        if isinstance(data, int | float) and not isinstance(data, bool):
            return {"value": data}
        return data

    @classmethod
    def wrong_shape(cls, data: object) -> str:
        """The message for something that is neither a number nor a table."""
        return f"expected a number, found {describe(data)}"

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Either a value or a tie, each with its own keys."""
        if data.get("same_as") is None:
            if data.get("value") is None:
                yield Fault((), "no value; write { value = ... } or { same_as = ... }")
            for key, default in (("ratio", 1.0), ("offset", 0.0)):
                if data.get(key, default) != default:
                    yield Fault((key,), f"{key!r} goes only with same_as")
            return
        for key in ("value", "fixed", "min", "max"):
            if data.get(key) not in (None, False):
                yield Fault(
                    (key,),
                    f"{key!r} does not go with same_as: a tied number takes its value and its "
                    "freedom from its target",
                )

    def value_faults(self) -> Iterator[Fault]:
        """The value lies in its bounds, the reference can be read."""
        if self.min is not None and self.max is not None and not self.min < self.max:
            yield Fault(("min",), f"min {plain(self.min)} must be below max {plain(self.max)}")
        elif self.value is not None:
            if self.min is not None and self.value < self.min:
                yield Fault(("value",), f"value {plain(self.value)} is below min {plain(self.min)}")
            if self.max is not None and self.value > self.max:
                yield Fault(("value",), f"value {plain(self.value)} is above max {plain(self.max)}")
        if self.ratio == 0.0:
            yield Fault(("ratio",), "ratio 0 ties to nothing; give a fixed value instead")
        if self.same_as is not None:
            try:
                Reference.parse(self.same_as)
            except ValueError as error:
                yield Fault(("same_as",), str(error))


def checked_as(quantity: str) -> AfterValidator:
    """A validator for a `Number` that is a certain quantity: meaning and default bounds."""
    kind = QUANTITIES[quantity]

    def check(number: Number) -> Number:
        for name, given in (("", number.value), ("min ", number.min), ("max ", number.max)):
            if given is not None and not kind.is_meaningful(given):
                raise fault(f"{name}must be {kind.range_text(given)}, found {plain(given)}")
        if number.value is not None and number.is_free:
            lower, upper = number.bounds(quantity)
            if not lower <= number.value <= upper:
                key = "min" if number.value < lower else "max"
                raise fault(
                    f"{plain(number.value)} is outside the default bounds {plain(lower)} to "
                    f"{plain(upper)} {kind.unit}; set them with "
                    f"{{ value = {plain(number.value)}, {key} = ... }}"
                )
        return number

    return AfterValidator(check)


def tie_faults(
    numbers: Mapping[Reference, Number],
    sizes: Mapping[str, int],
    unknown: Collection[tuple[str, int]] = (),
) -> Iterator[Fault]:
    """Faults in how numbers are tied to each other.

    Parameters
    ----------
    numbers
        All numbers of the job, in the order of the job file.
    sizes
        How many tables each section of the job has.
    unknown
        Section and index of tables whose numbers are not known because they have other faults.

    """
    for reference, number in numbers.items():
        target = number.target
        if target is None:
            continue
        path = (*reference.path, "same_as")
        size = sizes[target.section]
        if target.section == "distortion":
            yield Fault(
                path,
                f"{target} is a plain number, to which nothing can be tied; give one distortion "
                "several spectra to make them move together",
            )
        elif target.quantity != reference.quantity:
            yield Fault(
                path,
                f"{reference.quantity} is tied to {target.quantity} of {target}; a tie joins two "
                "numbers of the same kind",
            )
        elif size == 0:
            yield Fault(path, f"{target} does not exist: the job has no {target.section}")
        elif target.index >= size:
            yield Fault(path, f"{target} does not exist: the last one is {target.section}[{size}]")
        elif target not in numbers and (target.section, target.index) not in unknown:
            yield Fault(path, f"{target} does not exist: that {target.section} has no such number")
    yield from _circles(numbers)
    yield from _meaningless_ties(numbers)


def _circles(numbers: Mapping[Reference, Number]) -> Iterator[Fault]:
    finished: set[Reference] = set()
    for start in numbers:
        chain: dict[Reference, None] = {}
        current: Reference | None = start
        while (
            current is not None
            and current in numbers
            and current not in finished
            and current not in chain
        ):
            chain[current] = None
            current = numbers[current].target
        if current is not None and current in chain:
            members = list(chain)
            circle = members[members.index(current) :]
            names = " → ".join(str(member) for member in [*circle, circle[0]])
            yield Fault((*circle[0].path, "same_as"), f"the ties form a circle: {names}")
        finished.update(chain)


def _meaningless_ties(numbers: Mapping[Reference, Number]) -> Iterator[Fault]:
    for reference, value in start_values(numbers).items():
        if numbers[reference].same_as is None:
            continue
        kind = QUANTITIES[reference.quantity]
        if value is not None and not (math.isfinite(value) and kind.is_meaningful(value)):
            yield Fault(
                reference.path,
                f"the tie gives {plain(value)}; it must be {kind.range_text(value)}",
            )


def start_values(numbers: Mapping[Reference, Number]) -> dict[Reference, float | None]:
    """The start value of each number with its ties followed; None where they lead nowhere.

    The units are those of the quantities.
    """
    values: dict[Reference, float | None] = {}
    for start in numbers:
        chain: dict[Reference, None] = {}
        current = start
        while current in numbers and current not in values and current not in chain:
            target = numbers[current].target
            if target is None:
                values[current] = numbers[current].value
                break
            chain[current] = None
            current = target
        value = values.get(current)
        for member in reversed(chain):
            number = numbers[member]
            value = None if value is None else number.ratio * value + number.offset
            values[member] = value
    return values
