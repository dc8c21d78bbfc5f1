"""Synthetic absorption by a route of its own, to test the fitted model against.

Nothing here is shared with `fathomline.model` or `fathomline.profile`: the optical depth is formed
in frequency from SI constants and scipy's Faddeeva function on a grid much finer than any line,
smoothed by a sampled kernel with the fast Fourier transform, and integrated over pixels in
wavelength through the antiderivative of a cubic spline. A distortion moves the pixel edges to the
true wavelengths of the light that they record. The atomic data are shared, of course.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import scipy.constants as si
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.signal import fftconvolve
from scipy.special import wofz

from fathomline.atomic import Transition

__all__ = ["Cloud", "equivalent_width", "synthetic_transmission"]

Array = NDArray[np.float64]

_POINTS_PER_WIDTH = 20  # of the narrowest line or the line-spread function
_REACH = 9.0  # of the line-spread function in σ


@dataclass(frozen=True, slots=True)
class Cloud:
    """One absorbing cloud.

    Attributes
    ----------
    velocity : float
        km/s about `redshift`, or about that of the absorber where it is None.
    log_columns : mapping
        log10 N/cm⁻² by ion.
    b_turb : float
        Turbulent Doppler parameter, km/s.
    temperature : float
        Kinetic temperature, K.
    redshift : float or None
    covering : (int, float) or None
        Number of a group of clouds, and the part of the source that the group covers.

    """

    velocity: float
    log_columns: Mapping[str, float]
    b_turb: float = 0.0
    temperature: float = 0.0
    redshift: float | None = None
    covering: tuple[int, float] | None = None

    def width(self, mass: float) -> float:
        """Doppler parameter, m/s, of atoms of `mass` u."""
        thermal = 2.0 * si.k * self.temperature / (mass * si.atomic_mass)
        return math.sqrt(thermal + (1e3 * self.b_turb) ** 2)


def _optical_depth(
    wavelength: Array,
    transitions: Sequence[Transition],
    clouds: Sequence[Cloud],
    redshift: float,
    dalpha_ppm: float,
) -> Array:
    frequency = si.c / (wavelength * 1e-10)
    ratio = 1.0 + dalpha_ppm * 1e-6
    cross_section = si.e**2 / (4.0 * si.epsilon_0 * si.m_e * si.c)  # m² Hz, times f
    tau = np.zeros_like(wavelength)
    for cloud in clouds:
        zero = redshift if cloud.redshift is None else cloud.redshift
        stretch = (1.0 + zero) * (1.0 + 1e3 * cloud.velocity / si.c)
        rest_frequency = frequency * stretch
        for transition in transitions:
            if transition.ion not in cloud.log_columns:
                continue
            column = 10.0 ** cloud.log_columns[transition.ion] * 1e4  # m⁻²
            shift = (transition.q or 0.0) * (ratio**2 - 1.0)
            for line in transition.components:
                centre = si.c * 100.0 * (line.wavenumber + shift)
                doppler = centre * cloud.width(line.mass) / si.c
                z = (rest_frequency - centre) / doppler + 0.25j / math.pi * (
                    transition.gamma or 0.0
                ) / doppler
                profile = wofz(z).real / (math.sqrt(math.pi) * doppler)
                tau += column * transition.f * line.fraction * cross_section * profile
    return tau


def _narrowest(transitions: Sequence[Transition], clouds: Sequence[Cloud]) -> float:
    widths = [
        cloud.width(line.mass) / 1e3
        for cloud in clouds
        for transition in transitions
        if transition.ion in cloud.log_columns
        for line in transition.components
    ]
    return min(widths, default=math.inf)


def synthetic_transmission(
    edges: Array,
    transitions: Sequence[Transition],
    clouds: Sequence[Cloud],
    *,
    redshift: float,
    fwhm: float,
    dalpha_ppm: float = 0.0,
    distortion: Callable[[Array], Array] | None = None,
    profile: Callable[[Array], Array] | None = None,
) -> Array:
    """Mean transmission of each pixel behind a line-spread function.

    Parameters
    ----------
    edges : array (n + 1,)
        Pixel edges, vacuum Å, contiguous.
    transitions : sequence of Transition
    clouds : sequence of Cloud
    redshift : float
        Zero of the clouds' velocities.
    fwhm : float
        Full width at half maximum of the line-spread function, km/s; also the scale of `profile`.
    dalpha_ppm : float
        Δα/α, ppm.
    distortion : callable, optional
        True wavelength (n,), Å → velocity (n,), m/s, by which it is recorded too red.
    profile : callable, optional
        Line-spread function against recorded minus true velocity, km/s, in place of the Gaussian;
        its area does not matter.

    Returns
    -------
    array (n,)

    """
    if distortion is not None:
        edges = _true_wavelength(np.asarray(edges, dtype=np.float64), distortion)
    sigma = fwhm / math.sqrt(8.0 * math.log(2.0))
    step = min(sigma, _narrowest(transitions, clouds)) / _POINTS_PER_WIDTH
    reach = _REACH * sigma
    c_kms = si.c / 1e3
    span = c_kms * math.log(edges[-1] / edges[0]) + 2.0 * reach
    grid = edges[0] * np.exp((np.arange(math.ceil(span / step) + 2) * step - reach) / c_kms)
    lost = _absorbed(grid, transitions, clouds, redshift, dalpha_ppm)
    half = math.ceil(reach / step)
    offset: Array = np.arange(-half, half + 1, dtype=np.float64) * step
    kernel = np.exp(-0.5 * (offset / sigma) ** 2) if profile is None else profile(offset)
    # the far ends of the grid see zeros outside it; they lie beyond the reach of every pixel
    smooth = 1.0 - fftconvolve(lost, kernel / kernel.sum(), mode="same")
    primitive = CubicSpline(grid, smooth).antiderivative()
    mean: Array = np.diff(primitive(edges)) / np.diff(edges)
    return mean


def _absorbed(
    grid: Array,
    transitions: Sequence[Transition],
    clouds: Sequence[Cloud],
    redshift: float,
    dalpha_ppm: float,
) -> Array:
    """1 − T: clouds that cover a part C of the source together let 1 − C + C e^{−τ} pass."""
    groups = dict.fromkeys(cloud.covering for cloud in clouds)
    transmission = np.ones_like(grid)
    for group in groups:
        own = [cloud for cloud in clouds if cloud.covering == group]
        through = np.exp(-_optical_depth(grid, transitions, own, redshift, dalpha_ppm))
        part = 1.0 if group is None else group[1]
        transmission *= 1.0 - part + part * through
    lost: Array = 1.0 - transmission
    return lost


def _true_wavelength(recorded: Array, distortion: Callable[[Array], Array]) -> Array:
    """Wavelengths whose light is recorded at `recorded`: λ (1 + v_d(λ)/c) = recorded."""
    true: Array = recorded
    for _ in range(20):
        true = recorded / (1.0 + distortion(true) / si.c)
    return true


def equivalent_width(transition: Transition, cloud: Cloud, *, reach: float) -> float:
    """Rest equivalent width, Å, of one line integrated over ±`reach` km/s."""
    step = _narrowest([transition], [cloud]) / 50.0
    velocity = np.arange(-math.ceil(reach / step), math.ceil(reach / step) + 1) * step
    wavelength = transition.wavelength * np.exp(velocity / (si.c / 1e3))
    tau = _optical_depth(wavelength, [transition], [cloud], 0.0, 0.0)
    return float(np.trapezoid(-np.expm1(-tau), wavelength))
