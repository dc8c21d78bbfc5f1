"""Shared by the calibration tests: two noisy spectra of one invented absorber."""

from __future__ import annotations

import numpy as np

from fathomline.atomic import load_atomic_data
from fathomline.job.synthesis import Cloud, synthetic_transmission
from fathomline.spectra import Spectrum

C_MS = 299792458.0
REDSHIFT = 1.15
NAMES = ("Fe II 2344", "Fe II 2374", "Fe II 2382", "Fe II 2586", "Fe II 2600", "Mg II 2796",
         "Mg II 2803")  # fmt: skip
PIVOT = 5500.0
CLOUDS = (
    Cloud(-62.0, {"Fe II": 12.7, "Mg II": 12.9}, b_turb=4.0),
    Cloud(-21.0, {"Fe II": 13.2, "Mg II": 13.3}, b_turb=3.2),
    Cloud(4.0, {"Fe II": 13.0, "Mg II": 13.2}, b_turb=5.5),
    Cloud(38.0, {"Fe II": 12.9, "Mg II": 13.0}, b_turb=2.8),
)


def transmission(edges: np.ndarray, fwhm: float = 5.2) -> np.ndarray:
    """Noise-free pixels of the invented absorber, only computed around its lines."""
    atoms = load_atomic_data()
    result = np.ones(edges.size - 1)
    for name in NAMES:
        centre = atoms[name].wavelength * (1.0 + REDSHIFT)
        low, high = centre * (1.0 - 0.0012), centre * (1.0 + 0.0012)  # ± 360 km/s
        first, last = np.searchsorted(edges, [low, high])
        if last - first > 20:
            result[first : last - 1] *= synthetic_transmission(
                edges[first:last], [atoms[name]], CLOUDS, redshift=REDSHIFT, fwhm=fwhm
            )
    return result


def log_edges(low: float = 5000.0, high: float = 6060.0, step: float = 2.5, phase: float = 0.0):
    """Edges of log-linear pixels of ``step`` km/s; ``phase`` in pixels."""
    dx = step * 1e3 / C_MS
    return low * np.exp(dx * (np.arange(int(np.log(high / low) / dx) + 1) + phase))


def recorded(edges: np.ndarray, shift: float = 0.0, slope: float = 0.0) -> np.ndarray:
    """Pixels whose scale is distorted: light of λ is recorded at λ (1 + v_d/c)."""
    true = edges.copy()
    for _ in range(3):  # λ_true from λ_recorded; v_d varies by 1e-9 per step
        true = edges / (1.0 + (shift + slope * (true - PIVOT) / 1000.0) / C_MS)
    return transmission(true)


def noisy(
    edges: np.ndarray,
    clean: np.ndarray,
    snr: float,
    rng: np.random.Generator,
    *,
    level: np.ndarray | float = 1.0,
    continuum: bool = True,
    correlation: float = 0.0,
    name: str = "",
) -> Spectrum:
    """A spectrum with noise of unit variance per pixel and a lag-1 correlation."""
    # x_i = (e_i + a e_{i+1})/√(1+a²) has the correlation a/(1+a²) at lag 1 and 0 beyond
    a = (
        0.0
        if correlation == 0.0
        else (1.0 - np.sqrt(1.0 - 4.0 * correlation**2)) / (2.0 * correlation)
    )
    white = rng.standard_normal(clean.size + 1)
    noise = (white[:-1] + a * white[1:]) / np.sqrt(1.0 + a * a)
    wave = np.sqrt(edges[:-1] * edges[1:])
    flat = np.broadcast_to(np.asarray(level, dtype=float), clean.shape)
    error = flat / snr * np.sqrt(0.15 + 0.85 * clean)
    return Spectrum.from_arrays(
        wave, flat * clean + error * noise, error, flat if continuum else None, name=name
    )
