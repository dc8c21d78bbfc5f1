"""Units of a wavelength axis, as files and users write them, and their guess from the numbers.

The list is explicit rather than a general unit parser: a wavelength axis in electronvolt or hertz
must be refused with a plain message and not be taken for something else.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.errors import SpectrumError

__all__ = ["ALLOWED_UNITS", "WavelengthUnit", "guess_unit", "parse_unit"]

ALLOWED_UNITS: tuple[str, ...] = (
    "Angstrom",
    "nm",
    "um",
    "mm",
    "cm",
    "m",
    "log10(Angstrom)",
    "ln(Angstrom)",
    "log10(nm)",
    "log10(um)",
)
"""Units that may be named; spellings such as Å, micron or nanometer are understood as well."""

_IN_ANGSTROM: dict[str, float] = {
    "Angstrom": 1.0,
    "nm": 10.0,
    "um": 1e4,
    "mm": 1e7,
    "cm": 1e8,
    "m": 1e10,
}

_SPELLINGS: dict[str, str] = {
    "angstrom": "Angstrom",
    "angstroms": "Angstrom",
    "ångström": "Angstrom",
    "ångstrom": "Angstrom",
    "angstroem": "Angstrom",
    "0.1nm": "Angstrom",
    "0.1 nm": "Angstrom",
    "a": "Angstrom",
    "aa": "Angstrom",
    "ang": "Angstrom",
    "å": "Angstrom",
    "nm": "nm",
    "nanometer": "nm",
    "nanometers": "nm",
    "nanometre": "nm",
    "nanometres": "nm",
    "um": "um",
    "μm": "um",
    "micron": "um",
    "microns": "um",
    "micrometer": "um",
    "micrometers": "um",
    "micrometre": "um",
    "micrometres": "um",
    "mm": "mm",
    "cm": "cm",
    "m": "m",
    "meter": "m",
    "metre": "m",
}

_LOGARITHMS: dict[str, str] = {"log10": "log10", "log": "log10", "dex": "log10", "ln": "ln"}

# medians that one unit only can explain, for ground-based optical and near-infrared spectra
_GUESSES: tuple[tuple[float, float, str], ...] = (
    (2500.0, 30000.0, "Angstrom"),
    (250.0, 2500.0, "nm"),
    (0.25, 2.5, "um"),
)


@dataclass(frozen=True, slots=True)
class WavelengthUnit:
    """A length unit, or the logarithm of a number of such units.

    Attributes
    ----------
    name
        One of the plain names of `ALLOWED_UNITS`, without the logarithm.
    logarithm
        ``""``, ``"log10"`` or ``"ln"``.

    """

    name: str
    logarithm: str = ""

    def __str__(self) -> str:
        return f"{self.logarithm}({self.name})" if self.logarithm else self.name

    def to_angstrom(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the wavelengths in Å of the numbers of an axis in this unit (any shape)."""
        # a wild number on a logarithmic axis becomes inf, which the spectrum then refuses by row
        with np.errstate(over="ignore"):
            if self.logarithm == "log10":
                values = 10.0**values
            elif self.logarithm == "ln":
                values = np.exp(values)
        return values * _IN_ANGSTROM[self.name]


def parse_unit(text: str, where: str) -> WavelengthUnit:
    """Return the unit that a text names.

    Parameters
    ----------
    text
        The unit as written.
    where
        File and place, for the message.

    Raises
    ------
    SpectrumError
        If the text is no wavelength unit that is understood.

    """
    # NFKC would do more than wanted; the micro sign and the Ångström sign are the only doubles
    plain = text.strip().replace("\N{MICRO SIGN}", "μ").replace("\N{ANGSTROM SIGN}", "Å").casefold()
    if plain in _SPELLINGS:
        return WavelengthUnit(_SPELLINGS[plain])
    head, bracket, tail = plain.replace("[", "(").replace("]", ")").partition("(")
    inner = tail.rstrip(")").strip()
    if bracket and head.strip() in _LOGARITHMS and inner in _SPELLINGS:
        return WavelengthUnit(_SPELLINGS[inner], _LOGARITHMS[head.strip()])
    raise SpectrumError(
        f"{where}: unknown wavelength unit {text!r}; expected one of {', '.join(ALLOWED_UNITS)}. "
        f'If the file states a wrong unit, correct the file; if it states none, give unit = "..."'
    )


def guess_unit(values: NDArray[np.float64], where: str) -> tuple[WavelengthUnit, str]:
    """Guess the unit of wavelengths (shape (n,)) from their median.

    Returns
    -------
    The unit, and the sentence that records the guess.

    Raises
    ------
    SpectrumError
        If the median fits no unit.

    """
    finite = values[np.isfinite(values)]
    median = float(np.median(finite)) if finite.size else float("nan")
    for low, high, name in _GUESSES:
        if low <= median < high:
            return WavelengthUnit(name), (
                f"the file states no wavelength unit; {name} was assumed, because the median of "
                f"the wavelengths is {median:.6g}"
            )
    raise SpectrumError(
        f"{where}: no wavelength unit is stated, and the median {median:.6g} of the wavelengths "
        f'fits neither Angstrom, nm nor um; give unit = "..." (one of {", ".join(ALLOWED_UNITS)})'
    )
