"""Pulls and errors over noise seeds; the spectra come from the independent simulator."""

from __future__ import annotations

import numpy as np
import pytest

from fathomline.atomic import load_atomic_data
from fathomline.fit import FitSettings, fit_model
from fathomline.job import parse_job
from fathomline.job.building import ALPHA, build_model
from fathomline.job.demo import demo_clouds, demo_text
from fathomline.job.simulation import Noise, simulate, synthetic_grid
from fathomline.job.synthesis import Cloud, synthetic_transmission
from fathomline.spectra import GaussianLineSpread, Spectrum

TRUTH = 8.0  # ppm
SNR = 100.0
SEEDS = 800  # four times what the promise is about, so that chance does not decide
ATOMS = load_atomic_data()


@pytest.fixture(scope="module")
def ensemble():
    """Δα/α and its error for each noise seed, and the noise-free spectrum."""
    job = parse_job(demo_text(), "halden-a.toml", check_files=False)
    edges = synthetic_grid(job, ATOMS, "red", 2.0)
    clean = simulate(job, ATOMS, [edges], Noise(np.inf), dalpha_ppm=TRUTH, clouds=demo_clouds())[0]
    values, errors, chi2 = [], [], []
    for seed in range(SEEDS):
        noise = np.random.default_rng(seed).standard_normal(len(clean)) / SNR
        spectrum = Spectrum.from_arrays(
            clean.wavelength,
            clean.flux + noise,
            np.full(len(clean), 1.0 / SNR),
            clean.continuum,
            lsf=GaussianLineSpread(5.2),
            name="red",
        )
        built = build_model(job, [spectrum], ATOMS)
        fit = fit_model(built.model, FitSettings(restarts=0))
        assert fit.converged
        values.append(fit.values[ALPHA])
        errors.append(fit.sigma(ALPHA))
        chi2.append(fit.chi2_nu)
    return job, edges, np.array(values), np.array(errors), np.array(chi2)


def test_pulls_have_mean_zero_and_width_one(ensemble):
    _, _, values, errors, chi2 = ensemble
    pulls = (values - TRUTH) / errors
    print(
        f"{SEEDS} seeds: mean pull {pulls.mean():+.3f}, width {pulls.std(ddof=1):.3f}, "
        f"σ {errors.mean():.3f} ppm, χ²/ν {chi2.mean():.4f}"
    )
    # sampling errors of 800 pulls: 0.035 and 0.025
    assert abs(pulls.mean()) < 0.07
    assert abs(pulls.std(ddof=1) - 1.0) < 0.06
    # χ²/ν of 774 degrees of freedom scatters by 0.051; its mean over 800 by 0.0018
    assert abs(chi2.mean() - 1.0) < 0.006


def test_error_is_the_cramer_rao_bound(ensemble):
    """σ against the Fisher information at the truth, by finite differences of the simulator."""
    job, edges, _, errors, _ = ensemble
    bound = cramer_rao(job, edges)
    print(f"Cramér–Rao bound {bound:.4f} ppm, mean σ {errors.mean():.4f} ppm")
    assert errors.mean() == pytest.approx(bound, rel=0.02)


def cramer_rao(job, edges) -> float:
    """Bound on σ(Δα/α), ppm, with all clouds and a straight continuum per region free."""
    z, clouds = job.absorber.redshift, demo_clouds()
    steps = {"v": 0.02, "b": 0.02, "Fe II": 0.005, "Mg II": 0.005}

    def moved(k: int, what: str, step: float) -> list[Cloud]:
        c = clouds[k]
        columns = dict(c.log_columns)
        if what in columns:
            columns[what] += step
        new = Cloud(
            c.velocity + step * (what == "v"), columns, b_turb=c.b_turb + step * (what == "b")
        )
        return [*clouds[:k], new, *clouds[k + 1 :]]

    blocks = []
    for i, region in enumerate(job.regions):
        transition = ATOMS[region.transition]
        centre = transition.observed_wavelength(z)
        middle = np.sqrt(edges[:-1] * edges[1:])
        inside = np.flatnonzero(
            (middle >= centre * (1 + region.window[0] / 299792.458))
            & (middle <= centre * (1 + region.window[1] / 299792.458))
        )
        cut = edges[inside[0] : inside[-1] + 2]

        def flux(clouds, dalpha, cut=cut, transition=transition):
            return synthetic_transmission(
                cut, [transition], clouds, redshift=z, fwhm=5.2, dalpha_ppm=dalpha
            )

        columns = [(flux(clouds, TRUTH + 1.0) - flux(clouds, TRUTH - 1.0)) / 2.0]
        for k in range(len(clouds)):
            for what, step in steps.items():
                columns.append(
                    (flux(moved(k, what, step), TRUTH) - flux(moved(k, what, -step), TRUTH))
                    / (2 * step)
                )
        continuum = np.zeros((inside.size, 2 * len(job.regions)))
        continuum[:, 2 * i] = flux(clouds, TRUTH)
        continuum[:, 2 * i + 1] = flux(clouds, TRUTH) * np.linspace(-1, 1, inside.size)
        blocks.append(np.column_stack([*columns, continuum]))
    design = np.vstack(blocks) * SNR
    scale = np.linalg.norm(design, axis=0)
    covariance = np.linalg.inv((design / scale).T @ (design / scale))
    return float(np.sqrt(covariance[0, 0]) / scale[0])
