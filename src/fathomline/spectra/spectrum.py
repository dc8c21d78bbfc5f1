"""The one-dimensional spectrum that every other room works on.

Wavelengths are vacuum and barycentric, in Å, at pixel centres. Everything else (units, media,
frames, column names) is settled when a `Spectrum` is made and recorded in its `Reading`.

Pixel edges
-----------
With x_i = ln λ_i the inner edges are the midpoints (x_i + x_{i+1})/2 and the outer two lie half a
step beyond the ends. That is exact for a log-linear grid; for any smooth grid λ(i) the midpoint
differs from the true edge λ(i + ½) by second order in the step.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.spectra.line_spread import LineSpread
from fathomline.spectra.reading import Reading
from fathomline.spectra.units import parse_unit

if TYPE_CHECKING:
    from typing import Self

__all__ = ["JUMP_PIXELS", "MASK_REASONS", "Spectrum", "mask_pixels"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

MASK_REASONS: tuple[str, ...] = (
    "error not finite",
    "error not positive",
    "flux not finite",
    "continuum not finite",
    "continuum not positive",
    "masked by the user",
)
"""Reasons for which a pixel is not used."""

JUMP_PIXELS: float = 3.0
"""A step longer than so many neighbouring steps is a hole in the grid, not a pixel."""


def _is_quantity(values: object) -> bool:
    # astropy is heavy and must not be imported only to recognise plain numpy input
    return hasattr(values, "unit") and hasattr(values, "to_value")


def _array(values: object, name: str, unit: object = None) -> FloatArray:
    """Return native float64 of shape (n,), as a copy; quantities are converted to ``unit``."""
    if _is_quantity(values):
        try:
            # a unit of None stands for plain numbers, which only dimensionless quantities match
            values = values.to_value("" if unit is None else unit)  # type: ignore[attr-defined]
        except Exception as exc:  # astropy has several unit errors, none importable cheaply
            raise SpectrumError(f"{name}: the unit cannot be converted: {exc}") from exc
    try:
        result = np.array(values, dtype=np.float64)
    except (TypeError, ValueError) as exc:
        raise SpectrumError(
            f"{name}: expected numbers of shape (n,), found {values!r:.80}"
        ) from exc
    if result.ndim != 1:
        raise SpectrumError(f"{name}: expected the shape (n,), found {result.shape}")
    return result


def _freeze(values: NDArray[Any]) -> NDArray[Any]:
    values.flags.writeable = False
    return values


def _check_increasing(wavelength: FloatArray, reverse: bool, where: str) -> None:
    """Refuse an axis that is not strictly increasing, with the first bad row (counted from 1)."""
    if reverse:  # rows are counted in the order in which they were given
        wavelength = wavelength[::-1]
    finite = np.isfinite(wavelength)
    if not finite.all():
        at = int(np.argmin(finite))
        raise SpectrumError(
            f"{where}: the wavelength of row {at + 1} is {wavelength[at]}; every pixel needs a "
            "finite wavelength. Remove the row; to mask a pixel, set its error to -1"
        )
    if wavelength.min() <= 0.0:
        at = int(np.argmax(wavelength <= 0.0))
        raise SpectrumError(
            f"{where}: the wavelength of row {at + 1} is {wavelength[at]}, but must be positive"
        )
    step = np.diff(wavelength)
    bad = step >= 0.0 if reverse else step <= 0.0
    if bad.any():
        at = int(np.argmax(bad))
        kind = "repeats" if step[at] == 0.0 else "is out of order with"
        raise SpectrumError(
            f"{where}: the wavelength of row {at + 2} {kind} its neighbour "
            f"({wavelength[at]:.10g} then {wavelength[at + 1]:.10g}); wavelengths must change "
            "strictly in one direction. Sort the rows, and merge overlapping orders first"
        )


def mask_pixels(
    flux: FloatArray,
    error: FloatArray,
    continuum: FloatArray | None,
    chosen: BoolArray | None = None,
) -> tuple[BoolArray, dict[str, int]]:
    """Return the mask of good pixels and the number of pixels masked for each reason.

    Parameters
    ----------
    flux, error, continuum
        Shape (n,), in one unit; the continuum may be None.
    chosen
        Pixels that the user wants, shape (n,), bool; None means all.

    Returns
    -------
    good
        Shape (n,), True = use.
    masked
        Reason (of `MASK_REASONS`) to number of pixels, reasons that occur only.

    """
    finite_error = np.isfinite(error)
    bad: dict[str, BoolArray] = {
        "error not finite": ~finite_error,
        "error not positive": finite_error & ~(error > 0.0),
        "flux not finite": ~np.isfinite(flux),
    }
    if continuum is not None:
        finite_continuum = np.isfinite(continuum)
        bad["continuum not finite"] = ~finite_continuum
        bad["continuum not positive"] = finite_continuum & ~(continuum > 0.0)
    if chosen is not None:
        bad["masked by the user"] = ~chosen
    good = np.ones(flux.size, dtype=bool)
    for reason in bad.values():
        good &= ~reason
    counts = {name: int(np.count_nonzero(reason)) for name, reason in bad.items()}
    return good, {name: count for name, count in counts.items() if count}


@dataclass(frozen=True, eq=False, repr=False)
class Spectrum:
    """One spectrum; arrays are read-only, shape (n,), native float64 unless stated otherwise.

    Make one with `Spectrum.from_arrays` or `read_spectrum`: the constructor itself only checks
    that the parts fit together.

    Attributes
    ----------
    wavelength
        Vacuum barycentric wavelength of the pixel centres, Å, strictly increasing.
    flux, error
        Flux and its one-sigma error, in one arbitrary unit.
    continuum
        Continuum in the unit of the flux, or None.
    good
        bool, True = use the pixel.
    lsf
        Line-spread function, or None when it is not known yet.
    name
        Short identifier.
    reading
        How the spectrum was read and what was assumed.

    Raises
    ------
    SpectrumError
        If shapes differ, or the wavelengths are not finite and strictly increasing.

    """

    wavelength: FloatArray
    flux: FloatArray
    error: FloatArray
    good: BoolArray
    continuum: FloatArray | None = None
    lsf: LineSpread | None = None
    name: str = ""
    reading: Reading = field(default_factory=Reading)

    def __post_init__(self) -> None:
        where = f"spectrum {self.name!r}"
        wavelength = _array(self.wavelength, f"{where}: wavelength")
        n = wavelength.size
        if n < 2:
            raise SpectrumError(f"{where}: at least two pixels are needed, found {n}")
        _check_increasing(wavelength, False, where)
        arrays: dict[str, NDArray[Any]] = {"wavelength": wavelength}
        for key in ("flux", "error"):
            arrays[key] = _array(getattr(self, key), f"{where}: {key}")
        if self.continuum is not None:
            arrays["continuum"] = _array(self.continuum, f"{where}: continuum")
        arrays["good"] = np.array(self.good, dtype=bool)
        for key, values in arrays.items():
            if values.shape != (n,):
                raise SpectrumError(
                    f"{where}: {key} has the shape {values.shape}, but the wavelengths have ({n},)"
                )
            object.__setattr__(self, key, _freeze(values))
        if self.lsf is not None and not isinstance(self.lsf, LineSpread):
            raise SpectrumError(f"{where}: lsf must be a line-spread function or None")

    def __setstate__(self, state: dict[str, Any]) -> None:
        # numpy forgets that an array was read-only when it travels to a worker process
        for key, values in state.items():
            if isinstance(values, np.ndarray):
                _freeze(values)
            object.__setattr__(self, key, values)

    @classmethod
    def from_arrays(
        cls,
        wavelength: Any,
        flux: Any,
        error: Any,
        continuum: Any = None,
        *,
        good: ArrayLike | None = None,
        unit: str = "Angstrom",
        lsf: LineSpread | None = None,
        name: str = "",
        reading: Reading | None = None,
        where: str | None = None,
    ) -> Self:
        """Make a spectrum from vacuum barycentric wavelengths, flux and error.

        Parameters
        ----------
        wavelength
            Vacuum barycentric wavelengths of the pixel centres, shape (n,): plain numbers in
            ``unit``, or an astropy quantity of a length. Strictly decreasing input is reversed
            (with all other arrays), which the reading records.
        flux, error, continuum
            Shape (n,), plain numbers in one unit, or astropy quantities of compatible units
            (error and continuum are converted to the unit of the flux).
        good
            Pixels to use, shape (n,), bool, combined with the mask found from the numbers.
        unit
            Unit of plain wavelengths, see `fathomline.spectra.ALLOWED_UNITS`.
        lsf, name, reading
            As in the class.
        where
            Beginning of error messages, such as the file; default: the name.

        Raises
        ------
        SpectrumError
            If shapes differ, a unit does not fit, or wavelengths are not finite, positive and
            strictly monotonic (the message names the first bad row, counted from 1).

        """
        where = f"spectrum {name!r}" if where is None else where
        record = Reading() if reading is None else reading
        if _is_quantity(wavelength):
            waves = _array(wavelength, f"{where}: wavelength", "Angstrom")
            units = {"wavelength": str(wavelength.unit)}
        else:
            waves = parse_unit(unit, where).to_angstrom(_array(wavelength, f"{where}: wavelength"))
            units = {"wavelength": unit}
        flux_unit = flux.unit if _is_quantity(flux) else None
        if flux_unit is not None:
            units["flux"] = str(flux_unit)
        arrays = {"flux": _array(flux, f"{where}: flux", flux_unit)}
        arrays["error"] = _array(error, f"{where}: error", flux_unit)
        if continuum is not None:
            arrays["continuum"] = _array(continuum, f"{where}: continuum", flux_unit)
        n = waves.size
        for key, values in arrays.items():
            if values.shape != (n,):
                raise SpectrumError(
                    f"{where}: {key} has {values.size} pixels, but the wavelengths have {n}"
                )
        chosen = None if good is None else np.array(good, dtype=bool)
        if chosen is not None and chosen.shape != (n,):
            raise SpectrumError(f"{where}: good has the shape {chosen.shape}, expected ({n},)")
        if n < 2:
            raise SpectrumError(f"{where}: at least two pixels are needed, found {n}")

        steps = record.steps
        # the majority decides the direction, so that one bad row is blamed and not all the others
        reverse = bool(np.count_nonzero(np.diff(waves) < 0.0) > (n - 1) / 2)
        if reverse:
            waves = waves[::-1]
            arrays = {key: values[::-1] for key, values in arrays.items()}
            chosen = None if chosen is None else chosen[::-1]
        _check_increasing(waves, reverse, where)
        if reverse:
            steps = (*steps, "the wavelengths decreased: the order of all pixels was reversed")
        mask, masked = mask_pixels(arrays["flux"], arrays["error"], arrays.get("continuum"), chosen)
        return cls(
            wavelength=waves,
            flux=arrays["flux"],
            error=arrays["error"],
            continuum=arrays.get("continuum"),
            good=mask,
            lsf=lsf,
            name=name,
            reading=record.with_changes(
                pixels=n,
                masked=masked,
                masked_pixels=int(n - np.count_nonzero(mask)),
                units=record.units or units,
                steps=steps,
            ),
        )

    def __len__(self) -> int:
        return int(self.wavelength.size)

    def __repr__(self) -> str:
        try:
            return (
                f"<Spectrum {self.name!r}: {self.wavelength.size} pixels, "
                f"{self.wavelength[0]:.2f}-{self.wavelength[-1]:.2f} Å, "
                f"{int(np.count_nonzero(~self.good))} masked>"
            )
        except Exception:  # a repr is called on half-made objects by debuggers and must not raise
            return "<Spectrum, incomplete>"

    @property
    def edges(self) -> FloatArray:
        """Pixel edges, Å, shape (n + 1,); see the module docstring.

        Across a hole in the grid the edge lies in the middle of the hole; `bounds` does not
        stretch pixels in this way.
        """
        x = np.log(self.wavelength)
        result = np.empty(x.size + 1)
        result[1:-1] = 0.5 * (x[1:] + x[:-1])
        result[0] = 1.5 * x[0] - 0.5 * x[1]
        result[-1] = 1.5 * x[-1] - 0.5 * x[-2]
        return np.exp(result)

    @property
    def jumps(self) -> NDArray[np.intp]:
        """Indices i, shape (m,), where the grid has a hole between the pixels i and i + 1.

        A hole is a step longer than `JUMP_PIXELS` times the shorter of the neighbouring steps.
        """
        step = np.diff(np.log(self.wavelength))
        before = np.concatenate(([np.inf], step[:-1]))
        after = np.concatenate((step[1:], [np.inf]))
        return np.flatnonzero(step > JUMP_PIXELS * np.minimum(before, after))

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """Return the lower and upper edge of each pixel, Å, shape (n,) each.

        Equal to the neighbouring `edges`, except beside a hole in the grid, where a pixel reaches
        as far into the hole as the step on its other side says.
        """
        edges = self.edges
        lower, upper = edges[:-1].copy(), edges[1:].copy()
        jumps = self.jumps
        if jumps.size == 0:
            return lower, upper
        step = np.diff(np.log(self.wavelength))
        step[jumps] = np.nan
        # a pixel alone between two holes takes the typical width of the others
        typical = float(np.nanmedian(step))
        for i in jumps:
            before = step[i - 1] if i > 0 and np.isfinite(step[i - 1]) else typical
            after = step[i + 1] if i + 1 < step.size and np.isfinite(step[i + 1]) else typical
            upper[i] = self.wavelength[i] * np.exp(0.5 * before)
            lower[i + 1] = self.wavelength[i + 1] * np.exp(-0.5 * after)
            if i == 0:
                lower[i] = self.wavelength[i] * np.exp(-0.5 * before)
            if i + 1 == step.size:
                upper[i + 1] = self.wavelength[i + 1] * np.exp(0.5 * after)
        return lower, upper

    def velocity(self, lambda0: float) -> FloatArray:
        """Return v = c (λ/λ0 − 1), km/s, shape (n,), of the pixel centres.

        Parameters
        ----------
        lambda0
            Vacuum barycentric wavelength of zero velocity, Å, positive.

        Raises
        ------
        SpectrumError
            If ``lambda0`` is not positive and finite.

        """
        if not (np.isfinite(lambda0) and lambda0 > 0.0):
            raise SpectrumError(f"velocity scale: lambda0 must be positive, found {lambda0!r}")
        return C_KMS * (self.wavelength / lambda0 - 1.0)

    def slice_range(self, wave_lo: float, wave_hi: float) -> Spectrum:
        """Return the part with pixel centres in [wave_lo, wave_hi] (Å).

        Raises
        ------
        SpectrumError
            If the limits are not in order, or fewer than two pixels are left.

        """
        if not wave_lo < wave_hi:
            raise SpectrumError(
                f"spectrum {self.name!r}: the range {wave_lo!r} to {wave_hi!r} Å is empty"
            )
        first = int(np.searchsorted(self.wavelength, wave_lo, side="left"))
        last = int(np.searchsorted(self.wavelength, wave_hi, side="right"))
        if last - first < 2:
            raise SpectrumError(
                f"spectrum {self.name!r} has {max(last - first, 0)} pixels in {wave_lo:.3f}-"
                f"{wave_hi:.3f} Å, at least two are needed; it covers "
                f"{self.wavelength[0]:.3f}-{self.wavelength[-1]:.3f} Å"
            )
        part = slice(first, last)
        return Spectrum(
            wavelength=self.wavelength[part],
            flux=self.flux[part],
            error=self.error[part],
            continuum=None if self.continuum is None else self.continuum[part],
            good=self.good[part],
            lsf=self.lsf,
            name=self.name,
            reading=self.reading,
        )

    def digest(self) -> str:
        """Return the SHA-256 (hexadecimal) of the arrays, the same on every machine."""
        result = hashlib.sha256()
        for key in ("wavelength", "flux", "error", "continuum", "good"):
            values = getattr(self, key)
            size = -1 if values is None else values.size
            result.update(f"{key}:{size};".encode())
            if values is not None:
                result.update(values.astype("u1" if key == "good" else "<f8").tobytes())
        return result.hexdigest()

    @classmethod
    def from_specutils(
        cls, spectrum: Any, *, lsf: LineSpread | None = None, name: str = ""
    ) -> Spectrum:
        """Make a spectrum from a specutils spectrum in vacuum barycentric wavelengths.

        See `fathomline.spectra.exchange.from_specutils`.
        """
        from fathomline.spectra.exchange import from_specutils

        return from_specutils(spectrum, lsf=lsf, name=name)

    def to_specutils(self) -> Any:
        """Return a specutils spectrum; see `fathomline.spectra.exchange.to_specutils`."""
        from fathomline.spectra.exchange import to_specutils

        return to_specutils(self)
