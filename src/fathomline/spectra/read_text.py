"""Spectra in text files: columns parted by blanks, tabs, commas or semicolons; CSV and ECSV.

Lines beginning with ``#`` are comments. Column names are taken from the first line of data when it
is not numeric, else from the last comment before the data when that names as many columns as there
are. Comments of the form ``KEYWORD = value`` (or ``:``) may state the medium and the frame with the
FITS keywords. Without names the columns are wavelength, flux, error and, if there is a fourth,
continuum; that is recorded as a guess.
"""

from __future__ import annotations

import csv
import gzip
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from fathomline.errors import SpectrumError
from fathomline.spectra.columns import (
    GZIP_MAGIC,
    ROLES,
    FloatArray,
    RawSpectrum,
    choose_columns,
    error_from,
    error_kind,
    is_logarithm,
    medium_of_name,
    role_of,
)

__all__ = ["TextTable", "read_text", "read_text_table"]

_KEYWORD = re.compile(r"^\s*([A-Za-z][\w-]*)\s*[=:]\s*(.+?)\s*$")
_NAME_WITH_UNIT = re.compile(r"^(.*?)\s*[\[(]\s*([^\])]*?)\s*[\])]$")


@dataclass
class TextTable:
    """A parsed text file.

    Attributes
    ----------
    names
        Column names, or None when the file has none.
    units
        Index of the column to the unit in the file.
    fields
        One list of text fields per row, all of one length.
    lines
        Line number (from 1) of each row.
    header
        Upper-case keyword to value.
    format
        As in `Reading`.

    """

    names: list[str] | None
    units: dict[int, str]
    fields: list[list[str]]
    lines: list[int]
    header: dict[str, Any] = field(default_factory=dict)
    format: str = "text"

    @property
    def width(self) -> int:
        """Number of columns."""
        return len(self.fields[0])

    def numbers(self, index: int, where: str) -> FloatArray:
        """Return one column as float64, shape (n,); an empty field is NaN.

        Raises `SpectrumError` naming the file and the line of the first field that is no number.
        """
        result = np.empty(len(self.fields))
        for row, fields in enumerate(self.fields):
            try:
                result[row] = _number(fields[index])
            except ValueError:
                title = f"{self.names[index]!r}" if self.names else f"{index + 1}"
                raise SpectrumError(
                    f"{where}, line {self.lines[row]}: expected a number in column {title}, "
                    f"found {fields[index]!r}"
                ) from None
        return result


def _number(text: str) -> float:
    plain = text.strip().strip('"')
    if not plain or plain == "--":  # both are written for masked values of tables
        return float("nan")
    try:
        return float(plain)
    except ValueError:
        # Fortran programs write 1.0D+03
        return float(plain.replace("D", "e").replace("d", "e"))


def _is_number(text: str) -> bool:
    try:
        _number(text)
    except ValueError:
        return False
    return True


def _split(line: str, delimiter: str | None) -> list[str]:
    if delimiter is None:
        return line.split()
    return [part.strip() for part in line.split(delimiter)]


def _delimiter(line: str) -> str | None:
    return next((mark for mark in (",", ";", "\t") if mark in line), None)


def _ecsv_header(comments: list[str], where: str) -> tuple[dict[str, str], dict[str, Any]]:
    """Return column name to unit, and the metadata, of the YAML header of an ECSV file."""
    from astropy.table.meta import get_header_from_yaml

    try:
        header = get_header_from_yaml([line.removeprefix(" ") for line in comments[1:]])
        units = {
            str(column["name"]): str(column["unit"])
            for column in header["datatype"]
            if column.get("unit") is not None
        }
        metadata = dict(header.get("meta") or {})
    except Exception as exc:  # the YAML library has its own tree of exceptions
        raise SpectrumError(
            f"{where}: the ECSV header (the lines beginning with #) cannot be read "
            f"({type(exc).__name__} {exc}); write the file again, or remove its comment lines"
        ) from exc
    return units, {str(key).upper(): value for key, value in metadata.items()}


def read_text_table(path: Path, where: str, *, first_name: str | None = None) -> TextTable:
    """Parse a text file into fields, names, units and keywords.

    Names hold no number, except in a first row that begins with `first_name`.

    Raises
    ------
    SpectrumError
        If the file is no text, has no rows, or rows of different lengths.

    """
    try:
        data = path.read_bytes()
        if data[:2] == GZIP_MAGIC:
            data = gzip.decompress(data)
        text = data.decode("utf-8-sig")
    except (UnicodeDecodeError, EOFError, OSError) as exc:
        raise SpectrumError(
            f"{where}: the file is neither FITS nor UTF-8 text; expected a FITS file, ASCII "
            f"columns, CSV or ECSV ({exc})"
        ) from exc
    comments: list[str] = []
    rows: list[tuple[int, str]] = []
    for number, line in enumerate(text.splitlines(), start=1):
        stripped = line.strip()
        if stripped.startswith("#"):
            if not rows:
                comments.append(stripped[1:])
        elif stripped:
            rows.append((number, stripped))
    if not rows:
        raise SpectrumError(
            f"{where}: the file has no rows of data; expected one row of wavelength, flux and "
            "error for each pixel"
        )

    ecsv = bool(comments) and comments[0].strip().startswith("%ECSV")
    unit_of: dict[str, str] = {}
    header: dict[str, Any] = {}
    if ecsv:
        unit_of, header = _ecsv_header(comments, where)
    else:
        for comment in comments:
            match = _KEYWORD.match(comment)
            if match:
                header[match[1].upper()] = match[2].strip("'\" ")

    # the last line decides, for a header line may hold a comma in a unit or none at all
    delimiter = _delimiter(rows[-1][1])
    if ecsv:
        # only ECSV quotes fields, and only blanks and commas part them
        mark = "," if delimiter == "," else " "
        fields = list(csv.reader([line for _, line in rows], delimiter=mark))
    else:
        fields = [_split(line, delimiter) for _, line in rows]
    lines = [number for number, _ in rows]
    width = len(fields[-1])
    names: list[str] | None = None
    first = [part.strip('"') for part in fields[0]]
    # a bad number in the first row must not turn it into names: names hold no number at all
    if first[0] == first_name or not any(_is_number(part) for part in first):
        names, fields, lines = first, fields[1:], lines[1:]
        if not fields:
            raise SpectrumError(f"{where}: the file has column names but no rows of data")
    elif comments and not ecsv:
        last = _split(comments[-1].strip(), _delimiter(comments[-1]))
        plain = [_NAME_WITH_UNIT.sub(r"\1", part) for part in last]
        if len(last) == width and "wavelength" in [role_of(part) for part in plain]:
            names = last
    if names is not None:
        width = len(names)
    for number, row in zip(lines, fields, strict=True):
        if len(row) != width:
            raise SpectrumError(
                f"{where}, line {number}: expected {width} columns, found {len(row)}"
            )
    units: dict[int, str] = {}
    if names is not None:
        for i, name in enumerate(names):
            match = _NAME_WITH_UNIT.match(name)
            if name in unit_of:
                units[i] = unit_of[name]
            elif match and not ecsv:
                names[i] = match[1]
                units[i] = match[2]
    kind = "ECSV" if ecsv else "CSV" if delimiter in (",", ";") else "text columns"
    return TextTable(names, units, fields, lines, header, kind)


def read_text(
    path: Path, where: str, columns: Mapping[str, str], *, error_elsewhere: bool = False
) -> RawSpectrum:
    """Read a spectrum from a text file.

    Parameters
    ----------
    path
        The file.
    where
        Beginning of error messages.
    columns
        Role to name (or position from 1) as the user gave it.
    error_elsewhere
        True when the errors come from a further file.

    Raises
    ------
    SpectrumError
        If the file cannot be understood; the message names the line.

    """
    table = read_text_table(path, where)
    required = ROLES[:2] if error_elsewhere else ROLES[:3]
    guesses: list[str] = []
    if table.names is None:
        names = [str(i + 1) for i in range(table.width)]
        chosen, warnings = _positions(names, columns, where, required, guesses)
    else:
        names = table.names
        chosen, guesses, warnings = choose_columns(names, columns, where, required=required)
    values = {role: table.numbers(index, where) for role, index in chosen.items()}
    error = values.get("error")
    steps: list[str] = []
    if error is not None:
        kind = error_kind(names[chosen["error"]])
        error = error_from(error, kind)
        if kind != "error":
            steps.append(f"the {kind} of column {names[chosen['error']]} was made an error")
    units = {role: table.units[i] for role, i in chosen.items() if i in table.units}
    wave_name = names[chosen["wavelength"]]
    if is_logarithm(wave_name):
        unit = units.get("wavelength", "Angstrom")
        if "wavelength" not in units:
            guesses.append(f"the column {wave_name} was taken as log10 of the wavelength in Å")
        units["wavelength"] = unit if "(" in unit else f"log10({unit})"
    medium = medium_of_name(wave_name)
    return RawSpectrum(
        wavelength=values["wavelength"],
        flux=values["flux"],
        error=error,
        continuum=values.get("continuum"),
        format=table.format,
        columns={role: names[i] for role, i in chosen.items()},
        units=units,
        medium=(medium, f"the column name {wave_name}") if medium else None,
        header=table.header,
        guesses=guesses,
        warnings=warnings,
        steps=steps,
    )


def _positions(
    names: list[str],
    columns: Mapping[str, str],
    where: str,
    required: tuple[str, ...],
    guesses: list[str],
) -> tuple[dict[str, int], list[str]]:
    """Choose columns of a file without column names."""
    if columns:
        chosen, _, warnings = choose_columns(names, columns, where, required=required)
        return chosen, warnings
    if len(names) > len(ROLES):
        raise SpectrumError(
            f"{where}: the file has {len(names)} columns without names; say which is which with "
            'columns = { wavelength = "1", flux = "2", error = "3" }'
        )
    if len(names) < len(required):
        raise SpectrumError(
            f"{where}: the file has {len(names)} columns without names; expected wavelength, "
            "flux, error[, continuum]. One-sigma errors are needed: add a column, or name a file "
            "that holds them"
        )
    roles = ROLES[: len(names)]
    guesses.append(f"the file has no column names; the columns were taken as {', '.join(roles)}")
    return {role: i for i, role in enumerate(roles)}, []
