"""File names in a job: ``${VARIABLE}`` expands, relative names start at the job file's folder."""

from __future__ import annotations

import os
import re
from pathlib import Path

from fathomline.job.table import describe

__all__ = ["absolute_path", "expand_variables"]

_VARIABLE = re.compile(r"\$\{([^}]*)(\}?)")
_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")


def expand_variables(text: str) -> str:
    """Replace each ``${VARIABLE}`` by the value of the environment variable.

    A dollar sign without a brace stands for itself. Values are not expanded again.

    Raises
    ------
    ValueError
        A variable is not defined, or the braces hold no name.

    """

    def value(match: re.Match[str]) -> str:
        name, closed = match[1], match[2]
        if not closed or _NAME.fullmatch(name) is None:
            raise ValueError(f"{describe(match[0])} is no variable; write ${{NAME}}")
        if name not in os.environ:
            raise ValueError(f"the environment variable {name} is not defined")
        return os.environ[name]

    return _VARIABLE.sub(value, text)


def absolute_path(text: str, folder: Path) -> Path:
    """The path that a file name in a job stands for.

    Raises
    ------
    ValueError
        A variable cannot be expanded.

    """
    # Not Path.resolve: a user who links to a data disk wants to see the name of the link.
    return Path(os.path.abspath(folder / expand_variables(text)))  # noqa: PTH100
