"""Errors or a continuum that come in a file of their own, on the pixels of the spectrum."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from fathomline.errors import SpectrumError
from fathomline.spectra.columns import (
    COLUMN_NAMES,
    FloatArray,
    RawSpectrum,
    error_from,
    error_kind,
    fold,
    role_of,
)
from fathomline.spectra.read_fits import header_values, image_wavelength, open_fits
from fathomline.spectra.read_text import read_text_table

__all__ = ["add_companion"]

_SAME_SCALE = 1e-6
"""Relative difference of wavelengths (0.3 km/s) up to which two files share their pixels."""


@dataclass
class _Companion:
    values: FloatArray
    name: str
    wavelength: FloatArray | None


def add_companion(raw: RawSpectrum, path: Path, role: str, where: str, *, is_fits: bool) -> None:
    """Put the errors or the continuum of a further file into ``raw``.

    Parameters
    ----------
    raw
        The spectrum; changed in place.
    path
        FITS image or table, or text with one column, with named columns, or with the two columns
        wavelength and value.
    role
        ``"error"`` or ``"continuum"``.
    where
        Beginning of error messages.
    is_fits
        Whether the content is FITS.

    Raises
    ------
    SpectrumError
        If the file cannot be understood, or has other pixels than the spectrum.

    """
    found = _from_fits(path, role, where, raw) if is_fits else _from_text(path, role, where, raw)
    n = raw.wavelength.size
    if found.values.size != n:
        raise SpectrumError(
            f"{where}: the {role} file has {found.values.size} pixels, but the spectrum has {n}"
        )
    if found.wavelength is not None and raw.wavelength.size:
        with np.errstate(invalid="ignore"):
            apart = np.abs(found.wavelength - raw.wavelength) > _SAME_SCALE * np.abs(raw.wavelength)
        if apart.any():
            row = int(np.argmax(apart))
            raise SpectrumError(
                f"{where}: the {role} file has another wavelength scale than the spectrum; "
                f"pixel {row + 1} is at {found.wavelength[row]:.10g}, not at "
                f"{raw.wavelength[row]:.10g}"
            )
    if role == "error":
        kind = error_kind(found.name)
        raw.error = error_from(found.values, kind)
        if kind != "error":
            raw.steps.append(f"the {kind} of {path.name} was made an error")
    else:
        raw.continuum = found.values
    raw.columns[role] = f"{path.name}: {found.name}" if found.name else path.name


def _preferred(names: list[str], role: str) -> int | None:
    folded = [fold(name) for name in names]
    return next((folded.index(known) for known in COLUMN_NAMES[role] if known in folded), None)


def _from_text(path: Path, role: str, where: str, raw: RawSpectrum) -> _Companion:
    table = read_text_table(path, where)
    names = table.names
    if names is None:
        if table.width > 2:
            raise SpectrumError(
                f"{where}: expected one column, or wavelength and {role}, found {table.width} "
                "columns without names; give the columns names"
            )
        wavelength = table.numbers(0, where) if table.width == 2 else None
        if wavelength is not None:
            raw.guesses.append(f"the columns of {path.name} were taken as wavelength, {role}")
        return _Companion(table.numbers(table.width - 1, where), "", wavelength)
    index = _preferred(names, role)
    if index is None and len(names) == 1:
        index = 0
    if index is None:
        raise SpectrumError(
            f"{where}: no {role} column was recognised; the columns are: {', '.join(names)}"
        )
    roles = [role_of(name) for name in names]
    wavelength = None
    if "wavelength" in roles:
        wavelength = table.numbers(roles.index("wavelength"), where)
    return _Companion(table.numbers(index, where), names[index], wavelength)


def _from_fits(path: Path, role: str, where: str, raw: RawSpectrum) -> _Companion:
    notes: list[str] = []
    with open_fits(path, where, notes) as hdus:
        found = _search(hdus, role, where, notes)
    raw.warnings.extend(notes)
    return found


def _search(hdus: Iterable[Any], role: str, where: str, notes: list[str]) -> _Companion:
    images: list[tuple[str, FloatArray, FloatArray | None]] = []
    for hdu in hdus:
        data = getattr(hdu, "data", None)
        if data is None or not np.size(data):
            continue
        header = header_values(notes, hdu)
        names = list(hdu.columns.names) if hasattr(hdu, "columns") else None
        if names is not None:
            index = _preferred(names, role)
            if index is not None:
                values = np.asarray(data.field(index), dtype=np.float64).reshape(-1)
                roles = [role_of(name) for name in names]
                wavelength = None
                if "wavelength" in roles:
                    wavelength = np.asarray(data.field(roles.index("wavelength")))
                    wavelength = wavelength.astype(np.float64).reshape(-1)
                return _Companion(values, names[index], wavelength)
            continue
        values = np.asarray(data, dtype=np.float64).reshape(-1)
        wavelength = None
        if "CRVAL1" in header:
            wavelength = image_wavelength(header, values.size, where)[0]
        images.append((str(getattr(hdu, "name", "")), values, wavelength))
    titles = [name for name, _, _ in images]
    index = _preferred(titles, role)
    if index is None and len(images) == 1:
        index = 0  # the only image of a file that was named as the error or continuum file
    if index is None:
        raise SpectrumError(
            f"{where}: expected one image, or an image or column named like "
            f"{', '.join(COLUMN_NAMES[role][:3])}; found the images {', '.join(titles) or 'none'}"
        )
    name, values, wavelength = images[index]
    return _Companion(values, "" if name == "PRIMARY" else name, wavelength)
