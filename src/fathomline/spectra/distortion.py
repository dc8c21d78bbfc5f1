"""Basis functions of a distortion of the wavelength scale, and tables of measured shifts.

Light of true wavelength λ is recorded at λ (1 + v_d(λ)/c): a positive distortion velocity v_d moves
lines to the red. A distortion is a sum of coefficient × basis function:

=========  ==========================================  =====================
kind       basis B(λ)                                  coefficient
=========  ==========================================  =====================
shift      1                                           m/s
slope      (λ − pivot) / 1000 Å                        m/s per 1000 Å
sawtooth   −1 to +1 across each echelle order          m/s, half peak to peak
table      linear between the points of a table (m/s)  a factor
=========  ==========================================  =====================

The kinds describe what comparisons with asteroids, solar twins and laser combs have shown of
slit spectrographs: slopes over an arm, and a pattern that repeats with the orders (Whitmore &
Murphy 2015, MNRAS 447, 446; Griest et al. 2010, ApJ 708, 158).
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fathomline.errors import SpectrumError
from fathomline.spectra.columns import fold
from fathomline.spectra.read_text import TextTable, read_text_table
from fathomline.spectra.units import guess_unit, parse_unit

__all__ = [
    "SLOPE_UNIT",
    "order_edges_from_spacing",
    "read_distortion_table",
    "sawtooth_basis",
    "shift_basis",
    "slope_basis",
    "table_basis",
]

FloatArray = NDArray[np.float64]

SLOPE_UNIT: float = 1000.0
"""Å over which a slope coefficient is the change of velocity."""

_MOST_ORDERS = 1000

_NAMES: dict[str, tuple[str, ...]] = {
    "wavelength": ("wavelength", "wave", "lambda", "wavelength_vacuum", "wave_vacuum"),
    "velocity": ("velocity", "shift", "v", "dv", "velocity_shift", "rv"),
    "error": ("error", "err", "sigma", "velocity_error", "error_velocity", "uncertainty"),
}

_VELOCITY_UNITS: dict[str, float] = {
    "m/s": 1.0,
    "ms-1": 1.0,
    "m s-1": 1.0,
    "m s^-1": 1.0,
    "m.s-1": 1.0,
    "m s**-1": 1.0,
    "km/s": 1e3,
    "kms-1": 1e3,
    "km s-1": 1e3,
    "km s^-1": 1e3,
    "km.s-1": 1e3,
    "km s**-1": 1e3,
}


def shift_basis(wavelength: ArrayLike) -> FloatArray:
    """Return 1 for each wavelength (Å), shape (n,)."""
    return np.ones(np.shape(wavelength), dtype=np.float64)


def slope_basis(wavelength: ArrayLike, pivot: float) -> FloatArray:
    """Return (λ − pivot)/1000 Å, shape (n,), of wavelengths and a pivot in Å."""
    return (np.asarray(wavelength, dtype=np.float64) - pivot) / SLOPE_UNIT


def sawtooth_basis(wavelength: ArrayLike, edges: ArrayLike) -> FloatArray:
    """Return the sawtooth that rises from −1 to +1 across each echelle order.

    Parameters
    ----------
    wavelength
        Å, shape (n,).
    edges
        Edges of contiguous orders, Å, shape (m + 1,) with m ≥ 1, increasing. Beyond them the
        pattern goes on with the width of the first and of the last order.

    Returns
    -------
    Shape (n,); on an edge the value is −1, the beginning of the order above.

    Raises
    ------
    SpectrumError
        If the edges are not at least two finite increasing numbers.

    """
    wave = np.asarray(wavelength, dtype=np.float64)
    bounds = np.asarray(edges, dtype=np.float64)
    if bounds.ndim != 1 or bounds.size < 2 or not np.all(np.isfinite(bounds)):
        raise SpectrumError(
            f"sawtooth: expected at least two finite order edges in Å, found {edges!r:.80}"
        )
    widths = np.diff(bounds)
    if np.any(widths <= 0.0):
        at = int(np.argmax(widths <= 0.0))
        raise SpectrumError(
            f"sawtooth: order edges must increase, found {bounds[at]:.10g} Å and then "
            f"{bounds[at + 1]:.10g} Å"
        )
    order = np.clip(np.searchsorted(bounds, wave, side="right") - 1, 0, widths.size - 1)
    # the remainder is the pattern beyond the edges, and changes nothing between them
    phase = np.mod((wave - bounds[order]) / widths[order], 1.0)
    return 2.0 * phase - 1.0


def order_edges_from_spacing(low: float, high: float, pivot: float, spacing: float) -> FloatArray:
    """Return the edges pivot + k × spacing (k whole) of the orders that cover [low, high], Å.

    Raises
    ------
    SpectrumError
        If a number is not finite, the spacing is not positive, the range is empty, or more than
        a thousand orders would be needed.

    """
    if not all(math.isfinite(value) for value in (low, high, pivot, spacing)) or spacing <= 0.0:
        raise SpectrumError(
            f"order spacing: expected finite numbers and a positive spacing, found the range "
            f"{low!r} to {high!r} Å, pivot {pivot!r} Å, spacing {spacing!r} Å"
        )
    if not low < high:
        raise SpectrumError(f"order spacing: the range {low!r} to {high!r} Å is empty")
    if (high - low) / spacing > _MOST_ORDERS:
        raise SpectrumError(
            f"order spacing: {spacing!r} Å makes more than {_MOST_ORDERS} orders between "
            f"{low:.6g} and {high:.6g} Å; is the unit Å?"
        )
    first = math.floor((low - pivot) / spacing)
    last = math.ceil((high - pivot) / spacing)
    return pivot + spacing * np.arange(first, max(last, first + 1) + 1, dtype=np.float64)


def table_basis(
    wavelength: ArrayLike, table_wavelength: ArrayLike, table_velocity: ArrayLike
) -> FloatArray:
    """Return the velocity of a table, linear between its points and constant beyond them.

    Parameters
    ----------
    wavelength
        Å, shape (n,).
    table_wavelength, table_velocity
        Points of the table, Å (strictly increasing) and m/s, shape (m,) each, m ≥ 1.

    Returns
    -------
    m/s, shape (n,).

    Raises
    ------
    SpectrumError
        If the table is empty, not finite, or its wavelengths do not increase strictly.

    """
    x = np.asarray(table_wavelength, dtype=np.float64)
    y = np.asarray(table_velocity, dtype=np.float64)
    if x.ndim != 1 or x.shape != y.shape or x.size == 0:
        raise SpectrumError(
            f"distortion table: expected two columns of one length, found the shapes {x.shape} "
            f"and {y.shape}"
        )
    if not (np.all(np.isfinite(x)) and np.all(np.isfinite(y))):
        raise SpectrumError("distortion table: all numbers must be finite")
    if np.any(np.diff(x) <= 0.0):
        at = int(np.argmax(np.diff(x) <= 0.0))
        raise SpectrumError(
            f"distortion table: wavelengths must increase strictly, found {x[at]:.10g} Å and then "
            f"{x[at + 1]:.10g} Å"
        )
    return np.interp(np.asarray(wavelength, dtype=np.float64), x, y)


def read_distortion_table(path: str | Path) -> tuple[FloatArray, FloatArray, FloatArray | None]:
    """Read velocity shifts against wavelength from ECSV, CSV or text columns.

    Parameters
    ----------
    path
        Columns ``wavelength``, ``velocity`` and, optionally, ``error``, recognised by name; without
        names they are taken in this order. Units are converted where the file states them
        (wavelengths as in a spectrum, velocities m/s or km/s); otherwise the unit of the wavelength
        follows from its size, and velocities are m/s. Wavelengths are those of the spectra the
        distortion belongs to (vacuum; the frame matters little to a smooth distortion).

    Returns
    -------
    wavelength, velocity, error
        Å, m/s and m/s (None without such a column), shape (n,) each, sorted by wavelength.

    Raises
    ------
    SpectrumError
        If the file is missing or malformed; the message names the file and, where it can, the line.

    """
    path = Path(path)
    where = str(path)
    if not path.is_file():
        raise SpectrumError(f"{where}: there is no such file; expected a table of velocity shifts")
    table = read_text_table(path, where)
    chosen = _columns(table, where)
    values = {role: table.numbers(index, where) for role, index in chosen.items()}
    for role, numbers in values.items():
        bad = ~np.isfinite(numbers)
        if role == "wavelength":
            bad |= ~(numbers > 0.0)
        if role == "error":
            bad |= ~(numbers > 0.0)
        if bad.any():
            row = int(np.argmax(bad))
            kind = "a finite" if role == "velocity" else "a positive"
            raise SpectrumError(
                f"{where}, line {table.lines[row]}: the {role} must be {kind} number, "
                f"found {table.fields[row][chosen[role]]!r}"
            )
    stated = table.units.get(chosen["wavelength"])
    unit = (
        parse_unit(stated, where) if stated is not None else guess_unit(values["wavelength"], where)
    )
    # a guess comes with the sentence that records it
    unit = unit[0] if isinstance(unit, tuple) else unit
    wavelength = unit.to_angstrom(values["wavelength"])
    velocity_unit = table.units.get(chosen["velocity"], "m/s")
    velocity = values["velocity"] * _velocity_factor(velocity_unit, where)
    error = values.get("error")
    if error is not None:
        error = error * _velocity_factor(table.units.get(chosen["error"], velocity_unit), where)
    order = np.argsort(wavelength, kind="stable")
    return wavelength[order], velocity[order], None if error is None else error[order]


def _columns(table: TextTable, where: str) -> dict[str, int]:
    if table.names is None:
        if table.width not in (2, 3):
            raise SpectrumError(
                f"{where}: expected the columns wavelength, velocity[, error], found "
                f"{table.width} columns without names; give the columns names"
            )
        return dict(zip(_NAMES, range(table.width), strict=False))
    folded = [fold(name) for name in table.names]
    chosen = {}
    for role, known in _NAMES.items():
        found = next((folded.index(name) for name in known if name in folded), None)
        if found is not None:
            chosen[role] = found
        elif role != "error":
            raise SpectrumError(
                f"{where}: no column {role!r} was found; the columns are "
                f"{', '.join(table.names)}; expected wavelength, velocity[, error]"
            )
    return chosen


def _velocity_factor(unit: str, where: str) -> float:
    factor = _VELOCITY_UNITS.get(" ".join(unit.split()).replace(" / ", "/"))
    if factor is None:
        raise SpectrumError(f"{where}: unknown unit of velocity {unit!r}; expected m/s or km/s")
    return factor
