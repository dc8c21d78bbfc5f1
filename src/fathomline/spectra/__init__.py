"""Spectra: reading, wavelength media and frames, masks, line-spread functions, summaries."""

from __future__ import annotations

from fathomline.spectra.continuum import local_level, spectrum_level
from fathomline.spectra.distortion import (
    order_edges_from_spacing,
    read_distortion_table,
    sawtooth_basis,
    shift_basis,
    slope_basis,
    table_basis,
)
from fathomline.spectra.frames import barycentric_velocity, to_barycentric
from fathomline.spectra.line_spread import (
    FWHM_PER_SIGMA,
    GaussianLineSpread,
    LineSpread,
    TabulatedLineSpread,
)
from fathomline.spectra.media import AIR_FORMULAS, air_to_vacuum, vacuum_to_air
from fathomline.spectra.read import FRAMES, MEDIA, read_spectrum
from fathomline.spectra.reading import Reading
from fathomline.spectra.spectrum import Spectrum
from fathomline.spectra.summary import SpectrumSummary, summarise
from fathomline.spectra.units import ALLOWED_UNITS
from fathomline.spectra.write import write_spectrum

__all__ = [
    "AIR_FORMULAS",
    "ALLOWED_UNITS",
    "FRAMES",
    "FWHM_PER_SIGMA",
    "MEDIA",
    "GaussianLineSpread",
    "LineSpread",
    "Reading",
    "Spectrum",
    "SpectrumSummary",
    "TabulatedLineSpread",
    "air_to_vacuum",
    "barycentric_velocity",
    "local_level",
    "order_edges_from_spacing",
    "read_distortion_table",
    "read_spectrum",
    "sawtooth_basis",
    "shift_basis",
    "slope_basis",
    "spectrum_level",
    "summarise",
    "table_basis",
    "to_barycentric",
    "vacuum_to_air",
    "write_spectrum",
]
