"""Line-spread functions: what the spectrograph makes of an infinitely narrow line.

A Gaussian of constant width in velocity has constant resolving power R = λ/FWHM(λ) = c/FWHM(v),
with FWHM = 2 √(2 ln 2) σ. The width excludes the pixel: the forward model integrates over pixels
itself, so a width measured on pixelised data must have the pixel removed first.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.spectra.read_text import read_text_table

__all__ = [
    "FWHM_PER_SIGMA",
    "GaussianLineSpread",
    "LineSpread",
    "TabulatedLineSpread",
    "read_line_spread",
]

FWHM_PER_SIGMA: float = 2.0 * math.sqrt(2.0 * math.log(2.0))
"""Full width at half maximum of a Gaussian of unit standard deviation."""


def _finite_number(value: object, name: str) -> float:
    if isinstance(value, bool) or not hasattr(value, "__float__"):
        raise SpectrumError(f"line-spread function: {name} must be a number, found {value!r}")
    number = float(value)
    if not math.isfinite(number):
        raise SpectrumError(f"line-spread function: {name} must be finite, found {number!r}")
    return number


@dataclass(frozen=True, slots=True)
class GaussianLineSpread:
    """A Gaussian line-spread function of constant velocity width.

    Parameters
    ----------
    fwhm
        Full width at half maximum, km/s, positive and finite.
    error
        One-sigma error of ``fwhm``, km/s, not negative, or None when it is not known.

    Raises
    ------
    SpectrumError
        If a number is out of its range.

    """

    fwhm: float
    error: float | None = None

    def __post_init__(self) -> None:
        fwhm = _finite_number(self.fwhm, "fwhm (km/s)")
        if fwhm <= 0.0:
            raise SpectrumError(f"line-spread function: fwhm must be positive, found {fwhm} km/s")
        object.__setattr__(self, "fwhm", fwhm)
        if self.error is not None:
            error = _finite_number(self.error, "error (km/s)")
            if error < 0.0:
                raise SpectrumError(
                    f"line-spread function: the error of fwhm must not be negative, "
                    f"found {error} km/s"
                )
            object.__setattr__(self, "error", error)

    @classmethod
    def from_resolving_power(
        cls, resolving_power: float, error: float | None = None
    ) -> GaussianLineSpread:
        """Return the line spread of resolving power R = λ/FWHM (fwhm = c/R).

        Parameters
        ----------
        resolving_power
            R, dimensionless, positive and finite.
        error
            One-sigma error of R; carried over as σ(fwhm) = fwhm σ(R)/R.

        Raises
        ------
        SpectrumError
            If a number is out of its range.

        """
        power = _finite_number(resolving_power, "the resolving power")
        if power <= 0.0:
            raise SpectrumError(
                f"line-spread function: the resolving power must be positive, found {power}"
            )
        fwhm = C_KMS / power
        if error is None:
            return cls(fwhm)
        return cls(fwhm, fwhm * _finite_number(error, "the error of the resolving power") / power)

    @property
    def sigma(self) -> float:
        """Standard deviation, km/s."""
        return self.fwhm / FWHM_PER_SIGMA

    @property
    def resolving_power(self) -> float:
        """R = c/fwhm, dimensionless."""
        return C_KMS / self.fwhm

    def to_dict(self) -> dict[str, Any]:
        """Return a description that `json` can write."""
        return {"kind": "gaussian", "fwhm": self.fwhm, "error": self.error}


@dataclass(frozen=True, eq=False)
class TabulatedLineSpread:
    """A measured line-spread function, asymmetric or not, that may change with wavelength.

    Between the tabulated velocities the profile is a cubic spline, between the tabulated
    wavelengths its integral is interpolated linearly (constant beyond them), and it is zero outside
    the tabulated velocities. Profiles are normalised to unit area.

    Parameters
    ----------
    velocity : array (n,)
        Recorded minus true velocity, km/s, increasing.
    profiles : array (m, n)
        Profile at each of m wavelengths; not negative beyond noise.
    wavelengths : array (m,)
        Å, increasing.

    Raises
    ------
    SpectrumError
        If shapes differ, numbers are not finite, or a profile has no positive area.

    """

    velocity: NDArray[np.float64]
    profiles: NDArray[np.float64]
    wavelengths: NDArray[np.float64]

    def __post_init__(self) -> None:
        v = np.array(self.velocity, dtype=np.float64)
        p = np.atleast_2d(np.array(self.profiles, dtype=np.float64))
        w = np.atleast_1d(np.array(self.wavelengths, dtype=np.float64))
        what = "line-spread function"
        if v.ndim != 1 or v.size < 5 or p.shape != (w.size, v.size):
            raise SpectrumError(
                f"{what}: expected at least 5 velocities and a profile for each wavelength, found "
                f"{v.size} velocities and profiles of shape {p.shape}"
            )
        if not (np.isfinite(v).all() and np.isfinite(p).all() and np.isfinite(w).all()):
            raise SpectrumError(f"{what}: every number of the table must be finite")
        if np.any(np.diff(v) <= 0.0) or np.any(np.diff(w) <= 0.0):
            raise SpectrumError(f"{what}: velocities and wavelengths must increase strictly")
        from scipy.interpolate import CubicSpline

        primitive = CubicSpline(v, p, axis=1).antiderivative()
        area = primitive(v[-1]) - primitive(v[0])
        if np.any(area <= 0.0):
            raise SpectrumError(f"{what}: a profile has no positive area")
        for name, value in (("velocity", v), ("profiles", p / area[:, None]), ("wavelengths", w)):
            value.flags.writeable = False
            object.__setattr__(self, name, value)
        object.__setattr__(self, "_primitive", primitive)
        object.__setattr__(self, "_area", area)

    def cumulative(
        self, velocity: NDArray[np.float64], wavelength: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Integral of the profile up to `velocity` (n,), km/s, at `wavelength` (n,), Å."""
        low, high = self.velocity[0], self.velocity[-1]
        primitive: Any = self._primitive  # type: ignore[attr-defined]
        area: NDArray[np.float64] = self._area  # type: ignore[attr-defined]
        values = (primitive(np.clip(velocity, low, high)) - primitive(low)[:, None]) / area[:, None]
        if self.wavelengths.size == 1:
            only: NDArray[np.float64] = values[0]
            return only
        place = np.interp(wavelength, self.wavelengths, np.arange(self.wavelengths.size))
        below = np.minimum(place.astype(np.intp), self.wavelengths.size - 2)
        part = place - below
        pixel = np.arange(velocity.size)
        mixed: NDArray[np.float64] = (1.0 - part) * values[below, pixel] + part * values[
            below + 1, pixel
        ]
        return mixed

    def profile_at(self, wavelength: float) -> Callable[[NDArray[np.float64]], NDArray[np.float64]]:
        """The profile at a wavelength (Å) as a function of velocity (n,), km/s; zero outside."""
        from scipy.interpolate import CubicSpline

        place = np.interp(wavelength, self.wavelengths, np.arange(self.wavelengths.size))
        below = min(int(place), max(self.wavelengths.size - 2, 0))
        above = min(below + 1, self.wavelengths.size - 1)
        part = place - below
        spline = CubicSpline(
            self.velocity, (1.0 - part) * self.profiles[below] + part * self.profiles[above]
        )
        low, high = self.velocity[0], self.velocity[-1]

        def profile(velocity: NDArray[np.float64]) -> NDArray[np.float64]:
            inside = (velocity >= low) & (velocity <= high)
            return np.where(inside, spline(np.clip(velocity, low, high)), 0.0)

        return profile

    @property
    def reach(self) -> float:
        """Largest tabulated distance, km/s."""
        return float(max(abs(self.velocity[0]), abs(self.velocity[-1])))

    @property
    def fwhm(self) -> float:
        """Full width at half maximum of the narrowest profile, km/s."""
        widths = []
        for profile in self.profiles:
            above = np.flatnonzero(profile >= 0.5 * profile.max())
            first, last = above[0], above[-1]
            half = 0.5 * profile.max()
            left, right = self.velocity[first], self.velocity[last]
            if first > 0:
                left = np.interp(
                    half, profile[first - 1 : first + 1], self.velocity[first - 1 : first + 1]
                )
            if last < profile.size - 1:
                right = np.interp(-half, -profile[last : last + 2], self.velocity[last : last + 2])
            widths.append(float(right - left))
        return min(widths)

    @property
    def finest(self) -> float:
        """Scale that a numerical integral must resolve, km/s: half of that of the FWHM.

        An asymmetric profile has sharper flanks than the Gaussian of its FWHM.
        """
        return 0.5 * self.fwhm / FWHM_PER_SIGMA

    def to_dict(self) -> dict[str, Any]:
        """Return a description that `json` can write."""
        return {"kind": "table", "fwhm": self.fwhm, "wavelengths": self.wavelengths.tolist()}


# every line-spread function that a spectrum may carry
LineSpread: TypeAlias = GaussianLineSpread | TabulatedLineSpread


def read_line_spread(path: str | Path) -> TabulatedLineSpread:
    """Read a tabulated line-spread function.

    Parameters
    ----------
    path
        ECSV, CSV or text with named columns: ``velocity`` (recorded minus true velocity, km/s) and
        either one column ``profile``, or one column for each wavelength whose name is that
        wavelength in Å (for instance ``4500``).

    Raises
    ------
    SpectrumError
        If the file is missing or malformed; the message names the file.

    """
    path = Path(path)
    where = str(path)
    if not path.is_file():
        raise SpectrumError(f"{where}: there is no such file; expected a line-spread table")
    table = read_text_table(path, where, first_name="velocity")
    names = table.names
    if names is None or "velocity" not in names or len(names) < 2:
        raise SpectrumError(
            f"{where}: expected named columns 'velocity' and 'profile', or 'velocity' and one "
            f"column for each wavelength in Å; found {', '.join(names or ['no names'])}"
        )
    others = [name for name in names if name != "velocity"]
    if others == ["profile"]:
        wavelengths = [1.0]
    else:
        try:
            wavelengths = [float(name) for name in others]
        except ValueError:
            raise SpectrumError(
                f"{where}: expected one column 'profile', or columns named by their wavelength in "
                f"Å; found {', '.join(others)}"
            ) from None
    order = np.argsort(wavelengths)
    columns = [table.numbers(names.index(others[i]), where) for i in order]
    try:
        return TabulatedLineSpread(
            table.numbers(names.index("velocity"), where),
            np.array(columns),
            np.array(wavelengths)[order],
        )
    except SpectrumError as fault:
        raise SpectrumError(f"{where}: {fault}") from None
