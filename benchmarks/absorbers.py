"""Invented absorbers of any size for the benchmarks."""

from __future__ import annotations

import numpy as np

from fathomline.atomic import load_atomic_data
from fathomline.job import Job, build_job
from fathomline.job.building import BuiltModel, build_model
from fathomline.job.simulation import Noise, simulate, synthetic_grid
from fathomline.spectra import GaussianLineSpread, Spectrum

TRANSITIONS = (
    "Mg II 2796",
    "Fe II 2382",
    "Fe II 2600",
    "Fe II 2344",
    "Fe II 2586",
    "Fe II 2374",
    "Mg II 2803",  # 770 km/s from 2796: only for absorbers narrower than that
    "Fe II 1608",
    "Fe II 2260",
    "Fe II 2249",
)
FWHM = 5.2
TRUTH_PPM = 4.0


def job(n_components: int, n_transitions: int, *, n_spectra: int = 1, seed: int = 1) -> Job:
    """A job with components spread over 9 km/s each, and rounded start values."""
    rng = np.random.default_rng(seed)
    width = 9.0 * n_components
    places = np.linspace(-width / 2, width / 2, n_components) + rng.uniform(-1.5, 1.5, n_components)
    limit = float(np.ceil(width / 2 + 70.0))
    components = [
        {
            "velocity": round(float(v), 1),
            "b": round(float(rng.uniform(2.5, 5.5)), 1),
            "logN": {
                "Fe II": round(float(rng.uniform(12.4, 13.2)), 1),
                "Mg II": round(float(rng.uniform(12.1, 12.9)), 1),
            },
        }
        for v in places
    ]
    return build_job(
        {
            "schema": 1,
            "absorber": {"name": "benchmark", "redshift": 1.15085},
            "spectrum": [
                {"id": f"s{k}", "file": f"s{k}.fits", "resolution": {"fwhm": FWHM}}
                for k in range(n_spectra)
            ],
            "region": [
                {"transition": name, "window": [-limit, limit]}
                for name in TRANSITIONS[:n_transitions]
            ],
            "component": components,
        }
    )


def spectra(a_job: Job, *, pixel: float = 2.0, snr: float = 100.0) -> list[Spectrum]:
    """Simulated spectra of a job, by the independent route, with an error column and continuum."""
    atoms = load_atomic_data()
    edges = [synthetic_grid(a_job, atoms, table.id, pixel) for table in a_job.spectra]
    made = simulate(a_job, atoms, edges, Noise(snr, 7), dalpha_ppm=TRUTH_PPM)
    return [
        Spectrum.from_arrays(
            s.wavelength, s.flux, s.error, s.continuum, lsf=GaussianLineSpread(FWHM), name=s.name
        )
        for s in made
    ]


def built(n_components: int, n_transitions: int, **more: float) -> BuiltModel:
    """The model of an invented absorber with its simulated data."""
    pixel = more.pop("pixel", 2.0)
    a_job = job(n_components, n_transitions, n_spectra=int(more.pop("n_spectra", 1)))
    return build_model(a_job, spectra(a_job, pixel=pixel), load_atomic_data())
