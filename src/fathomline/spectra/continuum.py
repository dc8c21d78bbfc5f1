"""A robust local continuum level for spectra that come without a continuum.

The level of a window is the median of those pixels that absorption does not touch. Absorption only
lowers the flux, so pixels are dropped asymmetrically:

1. start with all good pixels;
2. level m = median of the kept pixels; scatter s = max of the median pixel error and of the robust
   scatter of the kept pixels above m (1.4826 × their median distance from m). The pixels above m
   are used because absorption widens the distribution on the other side only;
3. keep the good pixels with m − 2 s ≤ flux ≤ m + 3 s; repeat from 2 until the set stays as it is.

The asymmetric limits lift the median of pure Gaussian noise by 0.03 s, negligible beside the
continuum error of any real spectrum. With more than about 60 % of the pixels absorbed the
level is too low: a starting value for a fit, not a measurement.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from fathomline.errors import SpectrumError
from fathomline.spectra.spectrum import Spectrum

__all__ = ["local_level", "spectrum_level"]

_MAX_ITERATIONS = 100
_FEWEST_KEPT = 3


def local_level(
    flux: ArrayLike,
    error: ArrayLike,
    good: ArrayLike | None = None,
    *,
    below: float = 2.0,
    above: float = 3.0,
) -> float:
    """Return a positive continuum level of a window of pixels.

    Parameters
    ----------
    flux, error
        Flux and its one-sigma error, shape (n,), in one unit.
    good
        Pixels to use, shape (n,), bool; default: finite flux and finite positive error.
    below, above
        Pixels more than so many scatters below or above the level are dropped, both positive.

    Returns
    -------
    The level, in the unit of the flux. The algorithm is in the module docstring.

    Raises
    ------
    SpectrumError
        If shapes differ, no pixel is good, or the level is not positive.

    """
    values = np.asarray(flux, dtype=np.float64)
    sigma = np.asarray(error, dtype=np.float64)
    if values.ndim != 1 or sigma.shape != values.shape:
        raise SpectrumError(
            f"local level: flux and error must have one shape (n,), found {values.shape} "
            f"and {sigma.shape}"
        )
    if not (below > 0.0 and above > 0.0):
        raise SpectrumError(f"local level: clip limits must be positive, found {below}, {above}")
    usable = np.isfinite(values) & np.isfinite(sigma) & (sigma > 0.0)
    if good is not None:
        chosen = np.asarray(good, dtype=bool)
        if chosen.shape != values.shape:
            raise SpectrumError(
                f"local level: good must have the shape {values.shape}, found {chosen.shape}"
            )
        usable &= chosen
    values, sigma = values[usable], sigma[usable]
    if values.size == 0:
        raise SpectrumError("local level: the window has no good pixel")

    keep = np.ones(values.size, dtype=bool)
    level = float(np.median(values))
    for _ in range(_MAX_ITERATIONS):
        kept = values[keep]
        level = float(np.median(kept))
        higher = kept[kept > level]
        scatter = float(np.median(sigma[keep]))
        if higher.size:
            scatter = max(scatter, 1.4826 * float(np.median(higher - level)))
        update = (values >= level - below * scatter) & (values <= level + above * scatter)
        if np.count_nonzero(update) < _FEWEST_KEPT or np.array_equal(update, keep):
            break
        keep = update
    if level <= 0.0:
        raise SpectrumError(
            f"local level: the level {level:.6g} is not positive; the window is absorbed "
            "completely, or the flux has a zero-level error. Give a continuum column"
        )
    return level


def spectrum_level(spectrum: Spectrum) -> float:
    """Return `local_level` of all good pixels of a spectrum (cut it with `slice_range` first)."""
    return local_level(spectrum.flux, spectrum.error, spectrum.good)
