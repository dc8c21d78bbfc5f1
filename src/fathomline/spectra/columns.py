"""Which column is what: explicit names, no cleverness.

Roles are ``wavelength``, ``flux``, ``error`` and ``continuum``. A wavelength column may hold log10
of the wavelength, an error column the variance or the inverse variance; its name says so. Names
compare without case and with spaces and hyphens as underscores.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fathomline.errors import SpectrumError

__all__ = [
    "COLUMN_NAMES",
    "GZIP_MAGIC",
    "ROLES",
    "RawSpectrum",
    "check_columns",
    "choose_columns",
    "error_from",
    "error_kind",
    "fold",
    "is_logarithm",
    "medium_of_name",
    "nearest",
    "role_of",
]

FloatArray = NDArray[np.float64]

GZIP_MAGIC = b"\x1f\x8b"
"""First bytes of a file compressed with gzip."""

ROLES: tuple[str, ...] = ("wavelength", "flux", "error", "continuum")
"""Roles that a column can play, in the order of files without column names."""

_LOG_NAMES = ("loglam", "log_lam", "log_lambda", "loglambda", "log_wave", "log_wavelength")
_LOG_NAMES_10 = ("log10_wave", "log10_wavelength", "log10_lambda", "log10lam")
_AIR_NAMES = ("awav", "wave_air", "wavelength_air", "lambda_air", "air_wavelength")
_VACUUM_NAMES = ("wave_vac", "wavelength_vac", "lambda_vac", "vac_wavelength", "wavelength_vacuum")
_INVERSE_VARIANCE_NAMES = ("ivar", "inverse_variance", "inv_var", "invvar", "flux_ivar")
_VARIANCE_NAMES = ("variance", "var", "flux_variance", "flux_var")

COLUMN_NAMES: dict[str, tuple[str, ...]] = {
    "wavelength": (
        "wave",
        "wavelength",
        "wavelengths",
        "lambda",
        "lam",
        "wl",
        "wlen",
        *_VACUUM_NAMES,
        *_AIR_NAMES,
        *_LOG_NAMES,
        *_LOG_NAMES_10,
    ),
    "flux": ("flux", "fluxes", "flx", "flux_reduced", "spectrum", "spec", "intensity", "counts"),
    "error": (
        "err",
        "error",
        "errors",
        "sigma",
        "sig",
        "std",
        "stdev",
        "uncertainty",
        "unc",
        "flux_err",
        "flux_error",
        "err_flux",
        "error_flux",
        "flux_sigma",
        "sigma_flux",
        "flux_uncertainty",
        "err_reduced",
        "e_flux",
        *_INVERSE_VARIANCE_NAMES,
        *_VARIANCE_NAMES,
    ),
    "continuum": ("cont", "continuum", "contin", "flux_cont", "flux_continuum"),
}
"""Role to the names recognised, in order of preference."""

# names of the FITS extensions and keywords use the same table
_QUALITY_NAMES = ("qual", "quality", "mask", "dq", "flags", "flag", "bpmap")


@dataclass
class RawSpectrum:
    """What a file holds, before units, media and frames are settled; arrays of shape (n,).

    Attributes
    ----------
    wavelength, flux, error, continuum
        Numbers as in the file; ``error`` is one-sigma already, None when it has to come from a
        further file.
    format
        As in `Reading`.
    columns, units
        Role to name and to unit as written in the file.
    medium, frame
        As the file states them, with the source, or None when it does not.
    header
        Upper-case keyword to value, for what else has to be looked up.
    guesses, warnings, steps
        As in `Reading`.

    """

    wavelength: FloatArray
    flux: FloatArray
    error: FloatArray | None
    continuum: FloatArray | None
    format: str
    columns: dict[str, str] = field(default_factory=dict)
    units: dict[str, str] = field(default_factory=dict)
    medium: tuple[str, str] | None = None
    header: dict[str, Any] = field(default_factory=dict)
    guesses: list[str] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)
    steps: list[str] = field(default_factory=list)


def fold(name: str) -> str:
    """Return a column name in the form in which names compare."""
    return name.strip().casefold().replace(" ", "_").replace("-", "_")


def role_of(name: str) -> str | None:
    """Return the role that a name stands for, or None."""
    folded = fold(name)
    return next((role for role in ROLES if folded in COLUMN_NAMES[role]), None)


def error_kind(name: str) -> str:
    """Return ``"inverse variance"``, ``"variance"`` or ``"error"``, as the name says."""
    folded = fold(name)
    if folded in _INVERSE_VARIANCE_NAMES:
        return "inverse variance"
    return "variance" if folded in _VARIANCE_NAMES else "error"


def is_logarithm(name: str) -> bool:
    """Tell whether a wavelength column of this name holds log10 of the wavelength."""
    return fold(name) in _LOG_NAMES + _LOG_NAMES_10


def medium_of_name(name: str) -> str | None:
    """Return the medium that the name of a wavelength column states, or None."""
    folded = fold(name)
    if folded in _AIR_NAMES:
        return "air"
    return "vacuum" if folded in _VACUUM_NAMES else None


def error_from(values: FloatArray, kind: str) -> FloatArray:
    """Return one-sigma errors of errors, variances or inverse variances, shape (n,).

    An inverse variance of zero means no information and becomes an infinite error; negative
    variances become the error −1. The mask drops both.
    """
    if kind == "error":
        return values
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = 1.0 / values if kind == "inverse variance" else values
        # 1/(−0.0) is −inf: a zero of either sign carries no information
        variance = np.where(values == 0.0, np.inf, variance) if kind != "variance" else variance
        return np.where(variance < 0.0, -1.0, np.sqrt(np.abs(variance)))


def nearest(name: str, names: Sequence[str]) -> str:
    """Return `` (did you mean ...?)`` with the nearest valid name, or nothing."""
    folded = {fold(known): known for known in names}
    found = difflib.get_close_matches(fold(name), folded, n=1, cutoff=0.6)
    return f" (did you mean {folded[found[0]]!r}?)" if found else ""


def check_columns(columns: Mapping[str, str | int] | None) -> dict[str, str]:
    """Check the keys of a columns map given by the user; return it with text values.

    Raises
    ------
    SpectrumError
        If a key is no role, or a value is neither a name nor a position.

    """
    result: dict[str, str] = {}
    for role, name in (columns or {}).items():
        if role not in ROLES:
            raise SpectrumError(
                f"columns: unknown key {role!r}{nearest(str(role), ROLES)}; expected "
                f"{', '.join(ROLES)}"
            )
        if isinstance(name, bool) or not isinstance(name, str | int) or name == "":
            raise SpectrumError(
                f"columns: {role} must be the name or the position (from 1) of a column, "
                f"found {name!r}"
            )
        result[role] = str(name)
    return result


def _find(name: str, names: Sequence[str]) -> int | None:
    if name in names:
        return names.index(name)
    folded = [fold(known) for known in names]
    if folded.count(fold(name)) == 1:
        return folded.index(fold(name))
    if name.isdigit() and 1 <= int(name) <= len(names):
        return int(name) - 1
    return None


def choose_columns(
    names: Sequence[str],
    given: Mapping[str, str],
    where: str,
    *,
    required: Sequence[str] = ROLES[:3],
    hints: Mapping[str, int] | None = None,
) -> tuple[dict[str, int], list[str], list[str]]:
    """Choose the column of each role.

    Parameters
    ----------
    names
        Names of all columns of the file.
    given
        Role to name or position as the user gave it; comes first.
    where
        Beginning of error messages.
    required
        Roles without which a file is refused.
    hints
        Role to index as metadata of the file states it; comes before the names.

    Returns
    -------
    Role to index, the guesses, and the warnings.

    Raises
    ------
    SpectrumError
        If a column named by the user does not exist, or a required role has no column.

    """
    chosen: dict[str, int] = {}
    guesses: list[str] = []
    listing = ", ".join(names) or "none"
    for role, name in given.items():
        index = _find(name, names)
        if index is None:
            raise SpectrumError(
                f"{where}: there is no column {name!r} for {role}{nearest(name, names)}; "
                f"the columns are: {listing}"
            )
        chosen[role] = index
    folded = [fold(name) for name in names]
    for role in ROLES:
        if role in chosen:
            continue
        if hints and role in hints:
            chosen[role] = hints[role]
            continue
        taken = set(chosen.values())
        found = [
            i
            for known in COLUMN_NAMES[role]
            for i, name in enumerate(folded)
            if name == known and i not in taken
        ]
        if found:
            chosen[role] = found[0]
        if len(found) > 1:
            others = ", ".join(names[i] for i in found[1:])
            guesses.append(
                f"{names[found[0]]} was taken as the {role}; {others} could be meant as well"
            )
    for role in required:
        if role not in chosen:
            raise SpectrumError(
                f"{where}: no {role} column was recognised; the columns are: {listing}. "
                f'Name one with columns = {{ {role} = "..." }}'
            )
    used = set(chosen.values())
    warnings = [
        f"the column {name} was not used: pixels are masked by their errors only"
        for i, name in enumerate(names)
        if fold(name) in _QUALITY_NAMES and i not in used
    ]
    return chosen, guesses, warnings
