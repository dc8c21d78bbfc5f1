"""The front door of the readers: one call from a file to a vacuum barycentric `Spectrum`.

The format is found from the content, not from the name of the file. Whatever the file does not say
and no argument says is assumed and recorded as a guess, or refused when nothing can be assumed.
Order of the conversions: unit to Å, air to vacuum (air wavelengths belong to the observatory),
then the barycentric shift.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from fathomline.errors import SpectrumError
from fathomline.spectra.columns import GZIP_MAGIC, FloatArray, RawSpectrum, check_columns
from fathomline.spectra.companions import add_companion
from fathomline.spectra.frames import header_velocity, to_barycentric
from fathomline.spectra.line_spread import LineSpread
from fathomline.spectra.media import air_to_vacuum
from fathomline.spectra.read_fits import read_fits
from fathomline.spectra.read_text import read_text
from fathomline.spectra.reading import Reading
from fathomline.spectra.spectrum import Spectrum
from fathomline.spectra.units import guess_unit, parse_unit

__all__ = ["FRAMES", "MEDIA", "read_spectrum"]

MEDIA: tuple[str, ...] = ("vacuum", "air")
"""Media that wavelengths can be measured in."""

FRAMES: tuple[str, ...] = ("barycentric", "topocentric")
"""Frames that wavelengths can be measured in."""

_AIR_FORMULA = "morton2000"


def read_spectrum(
    path: str | Path,
    *,
    columns: Mapping[str, str | int] | None = None,
    unit: str | None = None,
    medium: str | None = None,
    frame: str | None = None,
    velocity: float | None = None,
    lsf: LineSpread | None = None,
    name: str | None = None,
    error_file: str | Path | None = None,
    continuum_file: str | Path | None = None,
) -> Spectrum:
    """Read a spectrum from a FITS file (also gzipped), ASCII columns, CSV or ECSV.

    Parameters
    ----------
    path
        The file.
    columns
        Role (``wavelength``, ``flux``, ``error``, ``continuum``) to the name of the column, or its
        position counted from 1; of a FITS image to the EXTNAME. Only where not recognised.
    unit
        Unit of the wavelengths, only where the file does not state it.
    medium
        ``"vacuum"`` or ``"air"``; overrides the file, default vacuum.
    frame
        ``"barycentric"`` or ``"topocentric"``; overrides the file, default barycentric.
    velocity
        Barycentric correction velocity, km/s, of topocentric wavelengths (multiplied in as
        1 + v/c). Default: computed from the header.
    lsf
        Line-spread function.
    name
        Identifier; default: the name of the file without its ending.
    error_file, continuum_file
        Further files that hold the errors or the continuum on the same pixels.

    Returns
    -------
    The spectrum; its ``reading`` says what was recognised, assumed and converted.

    Raises
    ------
    SpectrumError
        If the file is missing, empty, damaged, or does not make a spectrum; or if an argument is
        unknown or contradicts the file.

    """
    path = Path(path)
    where = str(path)
    given = check_columns(columns)
    _check_choice(medium, MEDIA, "medium", where)
    _check_choice(frame, FRAMES, "frame", where)
    if error_file is not None and "error" in given:
        raise SpectrumError(f"{where}: give either an error column or an error file, not both")
    digest, is_fits = _probe(path, where)
    reader = read_fits if is_fits else read_text
    raw = reader(path, where, given, error_elsewhere=error_file is not None)
    companions: dict[str, dict[str, str]] = {}
    for role, further in (("error", error_file), ("continuum", continuum_file)):
        if further is not None:
            other = Path(further)
            other_digest, other_is_fits = _probe(other, str(other))
            add_companion(raw, other, role, str(other), is_fits=other_is_fits)
            companions[role] = {"file": str(other), "digest": other_digest}

    _check_finite(raw.wavelength, where)
    wavelength, unit_name, unit_source = _settle_unit(raw, unit, where)
    medium_name, medium_source = _settle_medium(raw, medium)
    frame_name, frame_source = _settle_frame(raw, frame, where)
    if medium_name == "air":
        try:
            wavelength = air_to_vacuum(wavelength, _AIR_FORMULA)
        except SpectrumError as exc:
            raise SpectrumError(f"{where}: {exc}") from exc
        raw.steps.append(f"air wavelengths were converted to vacuum (formula {_AIR_FORMULA})")
    shift = _settle_velocity(raw, frame_name, velocity, where)
    if shift is not None:
        try:
            wavelength = to_barycentric(wavelength, shift)
        except SpectrumError as exc:
            raise SpectrumError(f"{where}: {exc}") from exc
        raw.steps.append(f"wavelengths were multiplied by 1 + v/c with v = {shift:+.4f} km/s")
    if raw.error is None:
        raise SpectrumError(f"{where}: the file has no errors")
    return Spectrum.from_arrays(
        wavelength,
        raw.flux,
        raw.error,
        raw.continuum,
        lsf=lsf,
        name=path.name.split(".")[0] if name is None else name,
        where=where,
        reading=Reading(
            file=where,
            file_digest=digest,
            companions=companions,
            format=raw.format,
            columns=raw.columns,
            units={**raw.units, "wavelength": unit_name},
            unit_source=unit_source,
            medium=medium_name,
            medium_source=medium_source,
            frame=frame_name,
            frame_source=frame_source,
            barycentric_velocity=shift,
            guesses=tuple(raw.guesses),
            warnings=tuple(raw.warnings),
            steps=tuple(raw.steps),
        ),
    )


def _check_choice(value: str | None, allowed: tuple[str, ...], key: str, where: str) -> None:
    if value is not None and value not in allowed:
        raise SpectrumError(f"{where}: {key} must be one of {', '.join(allowed)}, found {value!r}")


def _probe(path: Path, where: str) -> tuple[str, bool]:
    """Return the SHA-256 of a file and whether its content is FITS."""
    if path.is_dir():
        raise SpectrumError(f"{where}: this is a directory; expected a spectrum file")
    try:
        content = path.read_bytes()
    except FileNotFoundError as exc:
        raise SpectrumError(
            f"{where}: there is no such file; a relative path counts from the current directory, "
            "in a job file from the job file"
        ) from exc
    except OSError as exc:
        raise SpectrumError(f"{where}: the file cannot be read: {exc}") from exc
    if not content.strip():
        raise SpectrumError(
            f"{where}: the file is empty; expected a FITS file, or text with wavelength, flux and "
            "error columns"
        )
    digest = hashlib.sha256(content).hexdigest()
    if content[:2] == GZIP_MAGIC:
        import gzip
        import zlib

        try:
            # the beginning is enough to tell the format
            content = zlib.decompressobj(wbits=31).decompress(content, 80)
        except (zlib.error, gzip.BadGzipFile) as exc:
            raise SpectrumError(f"{where}: the gzip compression is damaged: {exc}") from exc
    return digest, content.startswith(b"SIMPLE  =")


def _check_finite(wavelength: FloatArray, where: str) -> None:
    finite = np.isfinite(wavelength)
    if not finite.all():
        row = int(np.argmin(finite))
        raise SpectrumError(
            f"{where}: the wavelength of row {row + 1} is {wavelength[row]}; every pixel needs a "
            "finite wavelength. Remove the row; to mask a pixel, set its error to -1"
        )


def _settle_unit(raw: RawSpectrum, unit: str | None, where: str) -> tuple[FloatArray, str, str]:
    """Return the wavelengths in Å, the unit as written, and where it came from."""
    stated = raw.units.get("wavelength")
    if stated is not None:
        parsed = parse_unit(stated, where)
        if unit is not None and parse_unit(unit, f"{where}: unit") != parsed:
            raise SpectrumError(
                f"{where}: the file states the wavelength unit {stated}, which contradicts unit = "
                f'"{unit}"; leave unit out, or correct the file'
            )
        return parsed.to_angstrom(raw.wavelength), stated, "file"
    if unit is not None:
        return parse_unit(unit, f"{where}: unit").to_angstrom(raw.wavelength), unit, "argument"
    guessed, sentence = guess_unit(raw.wavelength, where)
    raw.guesses.append(sentence)
    return guessed.to_angstrom(raw.wavelength), str(guessed), "guess"


def _stated_medium(raw: RawSpectrum) -> tuple[str, str] | None:
    """Return the medium that the file states, and by what."""
    header: Mapping[str, Any] = raw.header
    for key in ("AIRORVAC", "MEDIUM"):
        value = str(header.get(key, "")).strip().casefold()
        if value.startswith("air"):
            return "air", key
        if value.startswith("vac"):
            return "vacuum", key
    # a FITS logical arrives as bool, the same keyword in a text file as text
    text = str(header.get("VACUUM", "")).strip().casefold()
    if text in ("t", "true", "1", "yes"):
        return "vacuum", "VACUUM"
    if text in ("f", "false", "0", "no"):
        return "air", "VACUUM"
    return None


def _settle_medium(raw: RawSpectrum, medium: str | None) -> tuple[str, str]:
    by_header = _stated_medium(raw)
    stated = raw.medium or by_header
    if raw.medium and by_header and raw.medium[0] != by_header[0]:
        raw.warnings.append(
            f"{raw.medium[1]} says {raw.medium[0]} wavelengths, but {by_header[1]} says "
            f"{by_header[0]}; {raw.medium[0] if medium is None else medium} was used"
        )
    if medium is not None:
        if stated and stated[0] != medium:
            raw.warnings.append(
                f"the file says {stated[0]} wavelengths ({stated[1]}), but {medium} was asked for"
            )
        return medium, "argument"
    if stated:
        return stated
    raw.guesses.append("the file does not state the medium; vacuum wavelengths were assumed")
    return "vacuum", "guess"


def _settle_frame(raw: RawSpectrum, frame: str | None, where: str) -> tuple[str, str]:
    key = "SPECSYS" if "SPECSYS" in raw.header else "FRAME"
    value = str(raw.header.get(key, "")).strip().upper()
    stated: str | None = None
    if value.startswith("BARYCENT"):
        stated = "barycentric"
    elif value.startswith("HELIOCEN"):
        stated = "heliocentric"
    elif value.startswith("TOPOCENT"):
        stated = "topocentric"
    elif value and key == "SPECSYS" and frame is None:
        raise SpectrumError(
            f"{where}: SPECSYS = {value!r} is not supported; expected BARYCENT, HELIOCEN or "
            f"TOPOCENT. Convert the wavelengths, then give frame = one of {', '.join(FRAMES)}"
        )
    if frame is not None:
        if stated and stated != frame:
            raw.warnings.append(
                f"the file says {stated} wavelengths ({key}), but {frame} was asked for"
            )
        return frame, "argument"
    if stated == "heliocentric":
        raw.warnings.append(
            "the wavelengths are heliocentric; they were used as barycentric, which shifts the "
            "whole spectrum by up to 0.015 km/s"
        )
        return "barycentric", key
    if stated:
        return stated, key
    raw.guesses.append("the file does not state the frame; barycentric wavelengths were assumed")
    return "barycentric", "guess"


def _settle_velocity(
    raw: RawSpectrum, frame: str, velocity: float | None, where: str
) -> float | None:
    """Return the velocity to apply, km/s, or None."""
    if frame == "barycentric":
        if velocity is not None:
            raise SpectrumError(
                f"{where}: a barycentric correction of {velocity} km/s was given, but the "
                'wavelengths are barycentric already; leave it out, or give frame = "topocentric"'
            )
        return None
    if velocity is not None:
        return float(velocity)
    computed, reason = header_velocity(raw.header)
    if computed is None:
        raise SpectrumError(
            f"{where}: the wavelengths are topocentric and {reason}; give the barycentric "
            "correction velocity in km/s (berv in a job file), or wavelengths that are corrected"
        )
    raw.steps.append(f"the barycentric correction was {reason}")
    return computed
