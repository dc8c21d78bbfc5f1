"""Spectra in FITS files: tables and one-dimensional images with a wavelength scale.

(a) a binary table with one row per pixel;
(b) a binary table with one row, whose cells are arrays (the convention of the ESO science data
    products, which also label columns with TUTYPn and TUCDn);
(c) an image of one axis with the world coordinates of Greisen et al. (2006, A&A 446, 747),
    w = (p − CRPIX1) CDELT1 and

    ``WAVE``, ``AWAV``          λ = CRVAL1 + w            (``A``: wavelengths in air)
    ``WAVE-LOG``, ``AWAV-LOG``  λ = CRVAL1 exp(w/CRVAL1)  (their equation 5)

    or with the older DC-FLAG = 1, log10 λ = CRVAL1 + w. Errors and continuum are further
    extensions, recognised by EXTNAME with the same names as table columns.
"""

from __future__ import annotations

import gzip
import io
import warnings
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from fathomline.errors import FathomlineError, SpectrumError
from fathomline.spectra.columns import (
    COLUMN_NAMES,
    GZIP_MAGIC,
    ROLES,
    FloatArray,
    RawSpectrum,
    choose_columns,
    error_from,
    error_kind,
    fold,
    is_logarithm,
    medium_of_name,
    nearest,
    role_of,
)

__all__ = ["header_values", "image_wavelength", "open_fits", "read_fits"]

_TRUNCATED = ("truncated", "unexpected end of file")

# ends of the labels of the IVOA spectrum data model; "eso:" marks the secondary arrays
_TUTYP_ENDS = {
    "spectralaxis.value": "wavelength",
    "fluxaxis.value": "flux",
    "fluxaxis.accuracy.staterror": "error",
}


@contextmanager
def open_fits(path: Path, where: str, notes: list[str]) -> Iterator[Any]:
    """Open a FITS file completely in memory; astropy's warnings are appended to ``notes``.

    Raises
    ------
    SpectrumError
        If the file cannot be opened or is truncated.

    """
    from astropy.io import fits

    def fault(exc: Exception) -> SpectrumError:
        return SpectrumError(
            f"{where}: the FITS file cannot be read, it may be truncated or damaged; copy it again "
            f"from its origin ({type(exc).__name__}: {' '.join(str(exc).split())})"
        )

    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        try:
            content = path.read_bytes()
            if content[:2] == GZIP_MAGIC:
                content = gzip.decompress(content)
            # from memory, because astropy leaves the files open that it fails on
            hdus = fits.open(io.BytesIO(content), lazy_load_hdus=False)
            for hdu in hdus:
                _ = hdu.data  # a truncated file shows only when its data are read
        except Exception as exc:  # astropy raises many types for a damaged file
            raise fault(exc) from exc
        texts = [str(entry.message) for entry in caught]
        if any(word in text for text in texts for word in _TRUNCATED):
            raise SpectrumError(
                f"{where}: the FITS file is truncated; copy it again from its origin"
            )
        try:
            yield hdus
        except FathomlineError:
            raise
        except Exception as exc:  # columns and cards are parsed late
            raise fault(exc) from exc
    for entry in caught:
        text = " ".join(str(entry.message).split())
        note = f"while the FITS file was read: {text}"
        if note not in notes:
            notes.append(note)


def header_values(notes: list[str], *hdus: Any) -> dict[str, Any]:
    """Return upper-case keyword to value of all HDUs; cards that cannot be parsed become notes.

    Later HDUs override, because extensions state more precisely than the primary header.
    """
    result: dict[str, Any] = {}
    for hdu in hdus:
        for card in hdu.header.cards:
            try:
                if card.keyword and card.keyword not in ("COMMENT", "HISTORY"):
                    result[card.keyword.upper()] = card.value
            except Exception as exc:  # one bad card does not spoil the numbers
                notes.append(f"a header card was not used: {' '.join(str(exc).split())}")
    return result


def _numbers(values: Any, name: str, where: str) -> FloatArray:
    array = np.ma.filled(np.ma.asarray(values), 0) if np.ma.isMaskedArray(values) else values
    array = np.asarray(array)
    if array.dtype.kind not in "fiub":
        raise SpectrumError(
            f"{where}: expected numbers in {name}, found the type {array.dtype.name}"
        )
    return array.astype(np.float64)  # native byte order, a copy


def _is_table(hdu: Any) -> bool:
    return hasattr(hdu, "columns") and hdu.columns is not None


def _is_image(hdu: Any) -> bool:
    return not _is_table(hdu) and hdu.data is not None and hdu.data.size > 0


def read_fits(
    path: Path, where: str, columns: Mapping[str, str], *, error_elsewhere: bool = False
) -> RawSpectrum:
    """Read a spectrum from a FITS file; arguments and errors as `read_text.read_text`."""
    notes: list[str] = []
    with open_fits(path, where, notes) as hdus:
        tables = [hdu for hdu in hdus if _is_table(hdu)]
        images = [hdu for hdu in hdus if _is_image(hdu)]
        if images and images[0].data.size > 1 and not _has_spectrum_table(tables):
            raw = _read_image(images, hdus[0], where, columns, error_elsewhere)
        elif tables:
            raw = _read_table(tables, hdus[0], where, columns, error_elsewhere)
        elif images:
            raw = _read_image(images, hdus[0], where, columns, error_elsewhere)
        else:
            raise SpectrumError(
                f"{where}: the FITS file holds no data; expected a table with wavelength, flux and "
                "error columns, or a one-dimensional image"
            )
    raw.warnings.extend(notes)
    return raw


def _has_spectrum_table(tables: list[Any]) -> bool:
    roles = [{role_of(name) for name in table.columns.names} for table in tables]
    return any({"wavelength", "flux"} <= found for found in roles)


def _read_table(
    tables: list[Any],
    primary: Any,
    where: str,
    columns: Mapping[str, str],
    error_elsewhere: bool,
) -> RawSpectrum:
    # the first table with a recognised wavelength column, else the first: its message then tells
    table = next(
        (hdu for hdu in tables if "wavelength" in [role_of(n) for n in hdu.columns.names]),
        tables[0],
    )
    names = list(table.columns.names)
    required = ROLES[:2] if error_elsewhere else ROLES[:3]
    notes: list[str] = []
    header = header_values(notes, primary, table)
    chosen, guesses, more = choose_columns(
        names, columns, where, required=required, hints=_hints(header, names)
    )
    notes.extend(more)
    rows = len(table.data)
    if rows == 0:
        raise SpectrumError(f"{where}: the table {table.name or 'in the file'} has zero rows")
    values: dict[str, FloatArray] = {}
    for role, index in chosen.items():
        array = _numbers(table.data.field(index), f"column {names[index]}", where)
        if array.ndim > 1 and rows == 1:
            array = array[0]
        if array.ndim != 1:
            raise SpectrumError(
                f"{where}: column {names[index]} has arrays in each of {rows} rows; expected one "
                "row per pixel, or one row with arrays. Merge the orders first"
            )
        values[role] = array
    in_cells = rows == 1 and values["wavelength"].size > 1
    error, steps = values.get("error"), []
    if error is not None:
        kind = error_kind(names[chosen["error"]])
        error = error_from(error, kind)
        if kind != "error":
            steps.append(f"the {kind} of column {names[chosen['error']]} was made an error")
    units = {
        role: str(table.columns[index].unit)
        for role, index in chosen.items()
        if table.columns[index].unit
    }
    index = chosen["wavelength"]
    name = names[index]
    if is_logarithm(name):
        unit = units.get("wavelength", "Angstrom")
        if "wavelength" not in units:
            guesses.append(f"the column {name} was taken as log10 of the wavelength in Å")
        units["wavelength"] = unit if "(" in unit else f"log10({unit})"
    return RawSpectrum(
        wavelength=values["wavelength"],
        flux=values["flux"],
        error=error,
        continuum=values.get("continuum"),
        format="FITS table, arrays in one row" if in_cells else "FITS table, one row per pixel",
        columns={role: names[i] for role, i in chosen.items()},
        units=units,
        medium=_table_medium(header, name, index),
        header=header,
        guesses=guesses,
        warnings=notes,
        steps=steps,
    )


def _hints(header: Mapping[str, Any], names: list[str]) -> dict[str, int]:
    """Return roles stated by TUTYPn keywords."""
    hints: dict[str, int] = {}
    for i in range(len(names)):
        label = str(header.get(f"TUTYP{i + 1}", "")).strip().casefold()
        if label.startswith("eso:"):
            continue
        for end, role in _TUTYP_ENDS.items():
            if label.endswith(end):
                hints.setdefault(role, i)
    return hints


def _table_medium(header: Mapping[str, Any], name: str, index: int) -> tuple[str, str] | None:
    stated = medium_of_name(name)
    if stated:
        return stated, f"the column name {name}"
    meaning = str(header.get(f"TUCD{index + 1}", "")).casefold().replace(" ", "")
    if "em.wl" in meaning and "obs.atmos" in meaning:
        return "air", f"TUCD{index + 1}"
    return None


def _axis(hdu: Any, name: str, where: str) -> FloatArray:
    """Return the numbers of an image of one axis (axes of length one are dropped)."""
    values = _numbers(hdu.data, name, where)
    squeezed = values.reshape(-1) if max(values.shape) == values.size else values
    if squeezed.ndim != 1:
        raise SpectrumError(
            f"{where}: {name} is an image of the shape {values.shape}; expected one axis. Extract "
            "the spectrum, or write it as a table with wavelength, flux and error columns"
        )
    return squeezed


def _keyword(
    header: Mapping[str, Any], key: str, where: str, default: float | None = None
) -> float:
    value = header.get(key, default)
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise SpectrumError(
            f"{where}: the image has no wavelength scale: expected a number in {key}, found "
            f"{value!r}. Write the spectrum as a table with a wavelength column"
        )
    return float(value)


def image_wavelength(
    header: Mapping[str, Any], n: int, where: str
) -> tuple[FloatArray, str | None, str | None, str]:
    """Return the spectral axis of an image from its header.

    Parameters
    ----------
    header
        Upper-case keyword to value.
    n
        Number of pixels.
    where
        Beginning of error messages.

    Returns
    -------
    values
        Numbers of the axis, shape (n,), in ``unit``.
    unit
        Unit as written, with the logarithm if the axis is logarithmic; None when not stated.
    medium
        Medium that CTYPE1 states, or None.
    note
        Description of the scale.

    Raises
    ------
    SpectrumError
        If keywords are missing or the axis is of a kind that is not understood.

    """
    ctype = str(header.get("CTYPE1", "")).strip().upper()
    unit = str(header.get("CUNIT1", "")).strip() or None
    start = _keyword(header, "CRVAL1", where)
    reference = _keyword(header, "CRPIX1", where, 1.0)
    if "CD1_1" in header:
        step = _keyword(header, "CD1_1", where)
    else:
        step = _keyword(header, "CDELT1", where) * _keyword(header, "PC1_1", where, 1.0)
    if step == 0:
        raise SpectrumError(f"{where}: the wavelength step (CDELT1 or CD1_1) is zero")
    w = (np.arange(1, n + 1, dtype=np.float64) - reference) * step
    kind, _, algorithm = ctype.partition("-")
    algorithm = algorithm.strip("-")
    medium = {"AWAV": "air", "WAVE": "vacuum"}.get(kind)
    if kind not in ("", "WAVE", "AWAV", "LINEAR", "LAMBDA", "WAVELENGTH", "PIXEL", "MULTISPE"):
        raise SpectrumError(
            f"{where}: CTYPE1 = {ctype!r} is no wavelength axis that is understood; expected WAVE, "
            "AWAV, WAVE-LOG or AWAV-LOG. Write the spectrum as a table with a wavelength column"
        )
    if kind in ("PIXEL", "MULTISPE") or algorithm not in ("", "LOG"):
        raise SpectrumError(
            f"{where}: CTYPE1 = {ctype!r} is not supported; write the spectrum as a table with a "
            "wavelength column"
        )
    if algorithm == "LOG":
        if start == 0:
            raise SpectrumError(f"{where}: CRVAL1 = 0 is impossible with CTYPE1 = {ctype!r}")
        return start * np.exp(w / start), unit, medium, "log-linear (CTYPE1)"
    if header.get("DC-FLAG") in (1, "1"):
        if unit is None or "(" not in unit:
            unit = f"log10({unit})" if unit else "log10(Angstrom)"
        return start + w, unit, medium, "log-linear (DC-FLAG)"
    return start + w, unit, medium, "linear"


def _read_image(
    images: list[Any],
    primary: Any,
    where: str,
    columns: Mapping[str, str],
    error_elsewhere: bool,
) -> RawSpectrum:
    if "wavelength" in columns:
        raise SpectrumError(
            f"{where}: the file is a FITS image, whose wavelengths come from its header; only "
            "flux, error and continuum can be named in columns (by EXTNAME)"
        )
    found: dict[str, Any] = {}
    titles = [hdu.name or f"extension {i}" for i, hdu in enumerate(images)]
    for role, name in columns.items():
        match = [h for h, title in zip(images, titles, strict=True) if fold(title) == fold(name)]
        if not match:
            raise SpectrumError(
                f"{where}: there is no image extension {name!r} for {role}{nearest(name, titles)}; "
                f"the extensions are: {', '.join(titles)}"
            )
        found[role] = match[0]
    for role in ("error", "continuum", "flux"):
        for known in COLUMN_NAMES[role]:
            for hdu in images:
                if role not in found and fold(hdu.name) == known:
                    found[role] = hdu
    if "flux" not in found:
        rest = [hdu for hdu in images if all(hdu is not other for other in found.values())]
        if not rest:
            raise SpectrumError(f"{where}: there is no flux image, only {', '.join(titles)}")
        found["flux"] = rest[0]
    if "error" not in found and not error_elsewhere:
        raise SpectrumError(
            f"{where}: no error extension was recognised; the image extensions are: "
            f'{", ".join(titles)}. Name one with columns = {{ error = "..." }}, or name a further '
            "file that holds the errors"
        )
    main = found["flux"]
    flux = _axis(main, "the flux image", where)
    notes: list[str] = []
    header = header_values(notes, primary, *([] if main is primary else [main]))
    wavelength, unit, medium, scale = image_wavelength(header, flux.size, where)
    guesses, steps = [], []
    values: dict[str, FloatArray] = {}
    for role in ("error", "continuum"):
        if role in found:
            values[role] = _axis(found[role], f"the {role} image", where)
    if "error" in values:
        kind = error_kind(found["error"].name)
        values["error"] = error_from(values["error"], kind)
        if kind != "error":
            steps.append(f"the {kind} of extension {found['error'].name} was made an error")
    if scale == "log-linear (DC-FLAG)" and not str(header.get("CUNIT1", "")).strip():
        guesses.append("the logarithmic wavelength scale was taken as log10 of Å")
    units = {"wavelength": unit} if unit else {}
    if header.get("BUNIT"):
        units["flux"] = str(header["BUNIT"])
    return RawSpectrum(
        wavelength=wavelength,
        flux=flux,
        error=values.get("error"),
        continuum=values.get("continuum"),
        format=f"FITS image, {scale} wavelength scale",
        columns={role: hdu.name or "PRIMARY" for role, hdu in found.items()},
        units=units,
        medium=(medium, "CTYPE1") if medium else None,
        header=header,
        guesses=guesses,
        warnings=notes,
        steps=steps,
    )
