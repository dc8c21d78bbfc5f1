"""Exchange of spectra with specutils (an optional dependency).

specutils spectra do not say whether wavelengths are in air or vacuum, nor which frame they are in;
both directions take them as vacuum and barycentric, and the reading says so.
"""

from __future__ import annotations

from types import ModuleType
from typing import Any

import numpy as np

from fathomline.errors import MissingExtraError, SpectrumError
from fathomline.spectra.line_spread import LineSpread
from fathomline.spectra.reading import Reading
from fathomline.spectra.spectrum import Spectrum

__all__ = ["from_specutils", "to_specutils"]


def _specutils() -> ModuleType:
    try:
        import specutils
    except ImportError as exc:
        raise MissingExtraError("specutils", "specutils") from exc
    module: ModuleType = specutils
    return module


def from_specutils(spectrum: Any, *, lsf: LineSpread | None = None, name: str = "") -> Spectrum:
    """Make a spectrum from a one-dimensional specutils spectrum.

    Parameters
    ----------
    spectrum
        With flux of shape (n,), a spectral axis that converts to a wavelength, and an uncertainty
        (standard deviation, variance or inverse variance). Its mask (True = bad) is kept.
    lsf, name
        As in `Spectrum`.

    Raises
    ------
    MissingExtraError
        If specutils is not installed.
    SpectrumError
        If there is no uncertainty, or the arrays make no spectrum.

    """
    _specutils()
    from astropy import units
    from astropy.nddata import StdDevUncertainty

    where = f"specutils spectrum {name!r}"
    if spectrum.uncertainty is None:
        raise SpectrumError(f"{where}: it has no uncertainty; set one, one-sigma errors are needed")
    try:
        wavelength = spectrum.spectral_axis.to_value("Angstrom", equivalencies=units.spectral())
        # zero inverse variance becomes an infinite error, which is masked below
        with np.errstate(divide="ignore"):
            sigma = spectrum.uncertainty.represent_as(StdDevUncertainty).quantity
    except Exception as exc:
        raise SpectrumError(f"{where}: axis or uncertainty cannot be converted: {exc}") from exc
    mask = getattr(spectrum, "mask", None)
    reading = Reading(
        format="specutils",
        medium_source="guess",
        frame_source="guess",
        guesses=("the wavelengths were assumed to be vacuum and barycentric",),
    )
    return Spectrum.from_arrays(
        np.asarray(wavelength),
        spectrum.flux,
        sigma,
        good=None if mask is None else ~np.asarray(mask, dtype=bool),
        lsf=lsf,
        name=name,
        reading=reading,
        where=where,
    )


def to_specutils(spectrum: Spectrum) -> Any:
    """Return a specutils spectrum in Å with the errors as standard deviations and the mask set.

    The flux is dimensionless, because the flux unit of a `Spectrum` is arbitrary. The continuum
    goes into ``meta["continuum"]``, the reading into ``meta["reading"]``.

    Raises
    ------
    MissingExtraError
        If specutils is not installed.

    """
    module = _specutils()
    from astropy import units
    from astropy.nddata import StdDevUncertainty

    # the class was renamed in version 2
    make = getattr(module, "Spectrum", None) or module.Spectrum1D
    return make(
        flux=np.array(spectrum.flux) * units.dimensionless_unscaled,
        spectral_axis=np.array(spectrum.wavelength) * units.AA,
        uncertainty=StdDevUncertainty(np.array(spectrum.error)),
        mask=~spectrum.good,
        meta={
            "name": spectrum.name,
            "continuum": None if spectrum.continuum is None else np.array(spectrum.continuum),
            "reading": spectrum.reading.to_dict(),
        },
    )
