"""What a forward model is made of: components, regions in spectra, and what it predicts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.constants import DOPPLER_KMS2
from fathomline.profile import TransitionLines
from fathomline.spectra import FWHM_PER_SIGMA, TabulatedLineSpread

__all__ = ["ComponentTerms", "DistortionTerm", "SegmentPrediction", "SegmentTerms"]

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ComponentTerms:
    """Places of a component's parameters in the full vector.

    The velocity is about `redshift`, or about that of the absorber where it is None. `covering` is
    the number of the group of components that covers the source in part, or None. Either `b`
    (turbulent broadening, shared by all ions) or `temperature` (thermal, with `b_turb` added in
    quadrature when given).
    """

    velocity: int
    log_columns: dict[str, int]
    b: int | None = None
    temperature: int | None = None
    b_turb: int | None = None
    redshift: float | None = None
    covering: int | None = None

    def widths(self, theta: Array, masses: Array) -> Array:
        """Doppler parameter, km/s, for each mass in u."""
        if self.b is not None:
            return np.full(masses.size, theta[self.b])
        assert self.temperature is not None
        square = DOPPLER_KMS2 * theta[self.temperature] / masses
        if self.b_turb is not None:
            square = square + theta[self.b_turb] ** 2
        widths: Array = np.sqrt(square)
        return widths

    @property
    def width_parameters(self) -> tuple[int, ...]:
        """Places of the parameters of the width."""
        return tuple(p for p in (self.b, self.temperature, self.b_turb) if p is not None)


@dataclass(frozen=True)
class DistortionTerm:
    """One term of the distortion of the wavelength scale.

    Attributes
    ----------
    position : int
        Place of its coefficient in the full vector.
    basis : callable
        Recorded wavelengths (n,), Å → velocity (n,) per unit of the coefficient, m/s.

    """

    position: int
    basis: Callable[[Array], Array]


@dataclass(frozen=True)
class SegmentTerms:
    """One region in one spectrum: its pixels, lines and nuisance parameters.

    Attributes
    ----------
    region : int
        Number of the region, from 0.
    name : str
        The transition that the region is about.
    spectrum : str
        The id of the spectrum.
    wavelength, edges_low, edges_high : array (n,)
        Pixel centres and edges, Å.
    data, error : array (n,)
        Flux and its error divided by the continuum of the file.
    good : bool array (n,)
        Pixels to fit.
    lines : tuple of (str, TransitionLines)
        Ion and lines of every transition that can absorb here.
    continuum : tuple of int
        Places of the Legendre coefficients; empty for a continuum held at that of the file.
    zero_level : int or None
        Place of the zero level, in units of the file's continuum.
    fwhm : int
        Place of the FWHM of the line-spread function, km/s.
    window : (float, float)
        Limits of the region in km/s, for plots.
    rest : float
        Composite rest wavelength of the region's transition, Å.
    redshift : float or None
        Zero of the velocities of the window; None for that of the absorber.
    distortions : tuple of DistortionTerm
    fwhm_slope : array (n,), optional
        What the FWHM at each pixel exceeds the parameter by, km/s.
    line_spread : TabulatedLineSpread, optional
        A measured profile in place of the Gaussian.

    """

    region: int
    name: str
    spectrum: str
    wavelength: Array
    edges_low: Array
    edges_high: Array
    data: Array
    error: Array
    good: NDArray[np.bool_]
    lines: tuple[tuple[str, TransitionLines], ...]
    continuum: tuple[int, ...]
    zero_level: int | None
    fwhm: int
    window: tuple[float, float]
    rest: float
    redshift: float | None = None
    distortions: tuple[DistortionTerm, ...] = ()
    fwhm_slope: Array | None = None
    line_spread: TabulatedLineSpread | None = None

    def sigma(self, fwhm: float) -> Array:
        """Standard deviation of the line-spread function at each pixel (n,), km/s."""
        extra = 0.0 if self.fwhm_slope is None else self.fwhm_slope
        sigma: Array = np.broadcast_to((fwhm + extra) / FWHM_PER_SIGMA, self.wavelength.shape)
        return sigma


@dataclass(frozen=True, slots=True)
class SegmentPrediction:
    """What the model predicts for every pixel of a segment, masked ones included.

    Attributes
    ----------
    flux, continuum, residual : array (n,)
        In units of the file's continuum; the residual is (data − flux)/error, nan where the pixel
        is not fitted.
    components : array (n_components, n)
        Transmission of each component alone, e^{−τ_k} after the instrument.

    """

    flux: Array
    continuum: Array
    residual: Array
    components: Array
