"""One exception family: each member also is the builtin that a Python user would expect.

Messages of `FathomlineError` are written for the user: they name the file and the line, column or
key, what was expected, what was found, and the cure. The command line prints them as they are.
"""

from __future__ import annotations

from collections.abc import Sequence

__all__ = [
    "AtomicDataError",
    "FathomlineError",
    "FitError",
    "JobError",
    "MissingExtraError",
    "ResultError",
    "SpectrumError",
]


class FathomlineError(Exception):
    """Base of all errors that a user's input can cause."""


class AtomicDataError(FathomlineError, LookupError):
    """A transition table is malformed, or a transition is not in it."""


class SpectrumError(FathomlineError, ValueError):
    """A spectrum cannot be read or makes no sense."""


class JobError(FathomlineError, ValueError):
    """A job file has one or more faults; `faults` lists them, one message each."""

    def __init__(self, faults: str | Sequence[str]) -> None:
        self.faults: tuple[str, ...] = (faults,) if isinstance(faults, str) else tuple(faults)
        super().__init__("\n".join(self.faults))


class FitError(FathomlineError, RuntimeError):
    """A fit cannot be set up or cannot go on."""


class ResultError(FathomlineError, OSError):
    """A result folder cannot be written or read."""


class MissingExtraError(FathomlineError, ImportError):
    """An optional dependency is not installed."""

    def __init__(self, package: str, extra: str) -> None:
        super().__init__(
            f"this needs the package {package!r}, which is not installed: "
            f"pip install 'fathomline[{extra}]'"
        )
