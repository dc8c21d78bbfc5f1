"""What all tables of a job file have in common: simple values, and faults reported all at once.

Each table of the job file is a frozen model derived from `Table`. Its faults carry the key path of
the place that has to be changed, and a text that is written for the user; `faults_of` gets them
back from the exception of a failed validation.
"""

from __future__ import annotations

import datetime
import difflib
import math
from collections.abc import Iterable, Iterator, Mapping
from typing import Annotated, Any, ClassVar, NamedTuple, Self

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    ModelWrapValidatorHandler,
    ValidationError,
    model_validator,
)
from pydantic_core import InitErrorDetails, PydanticCustomError

from fathomline.job.toml_source import KeyPath

__all__ = [
    "Fault",
    "Flag",
    "Real",
    "RealOrInfinite",
    "Table",
    "Text",
    "Whole",
    "choice",
    "describe",
    "fault",
    "faults_of",
    "key_path_text",
    "plain",
    "validation_error",
]

#: A table with more unknown keys than this is not a job; the rest are only counted.
_UNKNOWN_KEYS_SHOWN = 20
_LARGEST_WHOLE = 2**63 - 1
_ARRAYS = (
    *("spectrum", "distortion", "region", "component", "blend", "covering"),
    "atomic.override",
)
_TABLES = ("absorber", "atomic", "alpha", "fit", "structure", "budget")


class Fault(NamedTuple):
    """A fault at a key path."""

    path: KeyPath
    message: str


def plain(number: float) -> str:
    """A number as a user would write it: no trailing ``.0``, no lost digits."""
    text = repr(float(number))
    return text.removesuffix(".0")


def describe(value: object) -> str:
    """What was found in the place of something else."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return f"the number {value}" if value.bit_length() <= 64 else "a number out of range"
    if isinstance(value, float):
        return f"the number {plain(value)}" if math.isfinite(value) else str(value)
    if isinstance(value, str):
        return f"text {value if len(value) <= 40 else value[:37] + '...'!r}"
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, list | tuple):
        return "an array"
    if isinstance(value, datetime.date | datetime.time):
        return "a date or time"
    return f"a value of type {type(value).__name__}"


def key_path_text(path: KeyPath) -> str:
    """A key path as the user knows it: ``[[region]] 2 'exclude[1]'``."""
    if not path:
        return ""
    section, *rest = path
    if path[:2] == ("atomic", "override"):
        section, rest = "atomic.override", rest[1:]
    if section in _ARRAYS:
        table = f"[[{section}]]"
        if rest and isinstance(rest[0], int):
            table += f" {rest[0] + 1}"
            del rest[0]
    elif len(path) == 1 and section not in _TABLES:
        return _shown(section)
    else:
        table = f"[{section}]"
    words = ""
    for previous, part in zip([None, *rest], rest, strict=False):
        if isinstance(part, int):
            words += f"[{part + 1}]"
        elif previous == "logN" and section == "component":
            words += f'["{part}"]'  # as references write ions
        else:
            words += f".{part}" if words else part
    return f"{table} {_shown(words)}" if words else table


def _shown(words: str | int) -> str:
    text = str(words)
    return repr(text if len(text) <= 60 else text[:57] + "...")


def fault(message: str) -> PydanticCustomError:
    """The exception by which a validator reports a fault at its own place."""
    # The text goes in as context: it may contain braces, which a template would interpret.
    return PydanticCustomError("fault", "{text}", {"text": message})


def validation_error(title: str, faults: Iterable[Fault]) -> ValidationError:
    """The exception by which a validator reports several faults at places below its own."""
    details = [
        InitErrorDetails(type=fault(message), loc=path, input=None) for path, message in faults
    ]
    return ValidationError.from_exception_data(title, details)


def faults_of(error: ValidationError) -> list[Fault]:
    """The faults that a failed validation found."""
    found = []
    for detail in error.errors(include_url=False, include_context=False, include_input=False):
        path = detail["loc"]
        if path and path[-1] == "[key]":
            path = path[:-1]  # pydantic's mark for the key, not the value, of a mapping
        missing = detail["type"] == "missing"
        found.append(Fault(path, "missing" if missing else detail["msg"]))
    return found


def _real(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise fault(f"expected a number, found {describe(value)}")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise fault(f"expected a finite number, found {describe(value)}")
    return number


def _real_or_infinite(value: object) -> float:
    # A whole number too large for a float is a slip of the keyboard, not infinity.
    return value if isinstance(value, float) and math.isinf(value) else _real(value)


def _whole(value: object) -> int:
    if isinstance(value, bool) or not isinstance(value, int):
        raise fault(f"expected a whole number, found {describe(value)}")
    if abs(value) > _LARGEST_WHOLE:
        raise fault("expected a whole number of at most 63 bits")
    return value


def _flag(value: object) -> bool:
    if not isinstance(value, bool):
        raise fault(f"expected true or false, found {describe(value)}")
    return value


def _text(value: object) -> str:
    if not isinstance(value, str):
        raise fault(f"expected text, found {describe(value)}")
    if not value.strip():
        raise fault("expected text, found nothing between the quotes")
    if any("\ud800" <= character <= "\udfff" for character in value):
        raise fault("expected text, found half of a surrogate pair")
    return value


#: A finite float; whole numbers are converted, booleans and text refused.
Real = Annotated[float, BeforeValidator(_real)]
#: Like `Real`, but ``inf`` and ``-inf`` are accepted as well.
RealOrInfinite = Annotated[float, BeforeValidator(_real_or_infinite)]
#: An int of at most 63 bits; booleans and floats are refused.
Whole = Annotated[int, BeforeValidator(_whole)]
#: A bool; numbers and text are refused.
Flag = Annotated[bool, BeforeValidator(_flag)]
#: A str that is not blank.
Text = Annotated[str, BeforeValidator(_text)]


def choice(*allowed: str) -> BeforeValidator:
    """A validator that accepts only the given texts."""

    def check(value: object) -> str:
        if not isinstance(value, str) or value not in allowed:
            words = " or ".join(f'"{word}"' for word in allowed)
            raise fault(f"expected {words}, found {describe(value)}")
        return value

    return BeforeValidator(check)


class Table(BaseModel):
    """Base of the models of the job file's tables: frozen, strict, and complete in its complaints.

    Derived classes report what pydantic's field types do not cover through the hooks `key_faults`,
    `value_faults` and `partial_faults`. All faults of a table, and of the tables in it, are
    reported together.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    #: Keys that a later version of the schema will have.
    later_keys: ClassVar[frozenset[str]] = frozenset()

    @classmethod
    def keys(cls) -> list[str]:
        """The keys that the table may have in a job file."""
        return [entry.alias or name for name, entry in cls.model_fields.items()]

    @classmethod
    def prepared(cls, data: object) -> object:
        """The table that a short form stands for; the data itself if it is no short form."""
        return data

    @classmethod
    def key_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Faults in which keys are given together; the values are not yet checked."""
        yield from ()

    def value_faults(self) -> Iterator[Fault]:
        """Faults in how the values, each valid in itself, fit together."""
        yield from ()

    @classmethod
    def partial_faults(cls, data: Mapping[str, Any]) -> Iterator[Fault]:
        """Like `value_faults`, for a table that has other faults and so no instance."""
        yield from ()

    @model_validator(mode="wrap")
    @classmethod
    def _report_all(cls, data: Any, handler: ModelWrapValidatorHandler[Self]) -> Self:
        if isinstance(data, cls):
            return data
        data = cls.prepared(data)
        if not isinstance(data, Mapping):
            raise fault(cls.wrong_shape(data))
        keys = set(cls.keys())
        known = {key: value for key, value in data.items() if key in keys}
        found = [*cls._unknown_keys(data), *cls.key_faults(known)]
        result = None
        try:
            result = handler(known)
        except ValidationError as error:
            found += faults_of(error)
            found += cls.partial_faults(known)
        else:
            found += result.value_faults()
        if found or result is None:
            raise validation_error(cls.__name__, found)
        return result

    @classmethod
    def wrong_shape(cls, data: object) -> str:
        """The message for something that is not a table."""
        return f"expected a table, found {describe(data)}"

    @classmethod
    def _unknown_keys(cls, data: Mapping[Any, Any]) -> Iterator[Fault]:
        keys = cls.keys()
        unknown = [key for key in data if key not in keys]
        for key in unknown[:_UNKNOWN_KEYS_SHOWN]:
            if not isinstance(key, str):
                yield Fault((), f"expected text as a key, found {describe(key)}")
                continue
            if key in cls.later_keys:
                yield Fault((key,), "not available in this version")
                continue
            # A key may be of any length; the distance to a valid one does not need all of it.
            shown = key if len(key) <= 40 else key[:37] + "..."
            near = difflib.get_close_matches(shown.lower(), [k.lower() for k in keys], 1, 0.5)
            if near:
                nearest = next(k for k in keys if k.lower() == near[0])
                cure = f"did you mean {nearest!r}?"
            else:
                cure = "valid keys: " + ", ".join(keys)
            yield Fault((key,), f"unknown key {shown!r}; {cure}")
        if len(unknown) > _UNKNOWN_KEYS_SHOWN:
            rest = len(unknown) - _UNKNOWN_KEYS_SHOWN
            yield Fault(
                (str(unknown[_UNKNOWN_KEYS_SHOWN]),), f"{rest} more unknown keys from here on"
            )
