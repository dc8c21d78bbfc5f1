"""Read the transition tables: comma- or space-separated ECSV or CSV text, with checks.

The tables are small and are read on every start of the program, so they are read with the csv
module of the standard library, which is fifty times faster than importing a table package. Only
the part of ECSV that such tables need is understood: ``#`` comment lines, an optional
``delimiter`` line in them, one row of column names, then the rows.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Iterator, Mapping, Sequence
from importlib.resources import files
from pathlib import Path

from fathomline.errors import AtomicDataError

__all__ = ["Row", "built_in_folder", "read_rows"]


def built_in_folder() -> Path:
    """Folder of the built-in tables: inside the installed package, or in the source tree."""
    packaged = Path(str(files("fathomline.atomic"))) / "data"
    if packaged.is_dir():
        return packaged
    return Path(__file__).resolve().parents[3] / "data" / "transitions"


class Row:
    """One row of a table: typed access by column, with errors that name file, line and column.

    Parameters
    ----------
    file : str
        Name of the file, for messages.
    line : int
        Line number in the file, from 1.
    fields : mapping of str to str
        The row as read.

    """

    def __init__(self, file: str, line: int, fields: Mapping[str, str]) -> None:
        self.file, self.line, self.fields = file, line, fields

    def _fault(self, column: str, text: str) -> AtomicDataError:
        return AtomicDataError(f"{self.file}:{self.line}: column {column!r}: {text}")

    def text(self, column: str, default: str | None = None) -> str:
        """Text of a column; `default` when the table does not have the column."""
        value = self.fields.get(column, default)
        if value is None:
            raise self._fault(column, "the table has no such column")
        return value

    def number(self, column: str) -> float:
        """Finite number of a column; raises `AtomicDataError` when it is missing."""
        value = self.number_or_none(column)
        if value is None:
            raise self._fault(column, "a number is needed here, the field is empty or nan")
        return value

    def number_or_none(self, column: str) -> float | None:
        """Number of a column, or None where the table says nan or nothing."""
        text = self.fields.get(column, "")
        if text == "":
            return None
        try:
            value = float(text)
        except ValueError:
            raise self._fault(column, f"expected a number, found {text!r}") from None
        return value if math.isfinite(value) else None

    def integer(self, column: str) -> int:
        """Integer of a column."""
        value = self.number(column)
        if value != int(value):
            raise self._fault(column, f"expected a whole number, found {value}")
        return int(value)


def read_rows(path: Path, required: Sequence[str]) -> Iterator[Row]:
    """Rows of a table that must have the columns `required`.

    Raises
    ------
    AtomicDataError
        The file is missing, is not text, lacks a column, or a row has the wrong length.

    """
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except FileNotFoundError:
        raise AtomicDataError(f"{path.name}: transition table not found") from None
    except (OSError, UnicodeDecodeError) as fault:
        raise AtomicDataError(f"{path.name}: cannot be read as a text table: {fault}") from None
    delimiter = "," if path.suffix == ".csv" else " "
    for line in lines:
        if line.startswith("# delimiter:"):
            delimiter = line.partition(":")[2].strip().strip("'\"") or " "
    numbered = [
        (number, line)
        for number, line in enumerate(lines, start=1)
        if line.strip() and not line.startswith("#")
    ]
    if not numbered:
        raise AtomicDataError(f"{path.name}: the table is empty")
    reader = csv.reader((line for _, line in numbered), delimiter=delimiter, skipinitialspace=True)
    header = next(reader)
    absent = [column for column in required if column not in header]
    if absent:
        raise AtomicDataError(
            f"{path.name}:{numbered[0][0]}: missing column(s) {', '.join(absent)}; "
            f"the table has {', '.join(header)}"
        )
    for (number, _), fields in zip(numbered[1:], reader, strict=True):
        if len(fields) != len(header):
            raise AtomicDataError(
                f"{path.name}:{number}: expected {len(header)} fields, found {len(fields)}"
            )
        yield Row(path.name, number, dict(zip(header, fields, strict=True)))
