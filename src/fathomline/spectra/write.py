"""Write a spectrum as a FITS binary table, one row per pixel, that `read_spectrum` reads back."""

from __future__ import annotations

import os
from pathlib import Path

from fathomline.spectra.spectrum import Spectrum

__all__ = ["write_spectrum"]

_UNMEASURED = -1.0  # error of a pixel that must not be used


def write_spectrum(spectrum: Spectrum, path: Path, *, comment: str = "") -> None:
    """Write WAVE (Å, vacuum, barycentric), FLUX, ERR and, where there is one, CONT.

    Masked pixels get an error of −1. The file appears under its name only when it is complete.

    Parameters
    ----------
    spectrum : Spectrum
    path : Path
        Replaced if it exists.
    comment : str
        One line for the header.

    """
    from astropy.io import fits

    error = spectrum.error.copy()
    error[~spectrum.good] = _UNMEASURED
    columns = [
        fits.Column("WAVE", "D", unit="Angstrom", array=spectrum.wavelength),
        fits.Column("FLUX", "D", array=spectrum.flux),
        fits.Column("ERR", "D", array=error),
    ]
    if spectrum.continuum is not None:
        columns.append(fits.Column("CONT", "D", array=spectrum.continuum))
    table = fits.BinTableHDU.from_columns(columns, name="SPECTRUM")
    table.header["SPECSYS"] = ("BARYCENT", "frame of the wavelengths")
    table.header["VACUUM"] = (True, "wavelengths are vacuum wavelengths")
    if comment:
        table.header["COMMENT"] = comment
    partial = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        fits.HDUList([fits.PrimaryHDU(), table]).writeto(partial, overwrite=True)
        partial.replace(path)
    finally:
        partial.unlink(missing_ok=True)
