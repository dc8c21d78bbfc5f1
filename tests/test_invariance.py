"""What must not change a measurement: how the same data and the same absorber are written down.

The spectrum is invented and comes from the independent simulator. The bounds are in units of the
statistical error σ of Δα/α; a fit stops within 1e-4 σ of its minimum.
"""

from __future__ import annotations

import tomllib
from collections.abc import Sequence
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy import units as u
from astropy.table import Table
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fathomline.fit import FitResult, FitSettings, fit_model
from fathomline.job import Job, build_job, parse_job
from fathomline.job.building import ALPHA, build_model
from fathomline.job.demo import DEMO_DALPHA, DEMO_NOISE, demo_clouds, demo_text
from fathomline.job.inputs import load_atoms
from fathomline.job.measurement import Measurement, measure
from fathomline.job.simulation import simulate, synthetic_grid
from fathomline.spectra import GaussianLineSpread, Spectrum, write_spectrum

C_KMS = 299792.458
STOP = 1e-3  # σ; ten times what the stopping rule leaves
FITS = settings(
    max_examples=5, deadline=None, suppress_health_check=[HealthCheck.too_slow], derandomize=True
)


def demo_data() -> dict[str, Any]:
    return tomllib.loads(demo_text())


def job_of(data: dict[str, Any]) -> Job:
    return build_job(data)


@cache
def demo_spectrum() -> Spectrum:
    job = parse_job(demo_text(), "halden-a.toml", check_files=False)
    edges = synthetic_grid(job, load_atoms(job), "red", 2.0)
    (spectrum,) = simulate(
        job,
        load_atoms(job),
        [edges],
        DEMO_NOISE,
        dalpha_ppm=DEMO_DALPHA,
        clouds=demo_clouds(),
    )
    return replace(spectrum, lsf=GaussianLineSpread(5.2))


def fitted(data: dict[str, Any], spectra: Sequence[Spectrum]) -> FitResult:
    job = job_of(data)
    fit = fit_model(build_model(job, spectra, load_atoms(job)).model, FitSettings(restarts=0))
    assert fit.converged
    return fit


@cache
def reference(continuum: int = 1) -> FitResult:
    data = demo_data()
    for region in data["region"]:
        region["continuum"] = continuum
    return fitted(data, [demo_spectrum()])


def assert_same(
    fit: FitResult, other: FitResult, *, sigmas: float = STOP, relative: float = 1e-3
) -> None:
    sigma = other.sigma(ALPHA)
    change = (fit.values[ALPHA] - other.values[ALPHA]) / sigma
    ratio = fit.sigma(ALPHA) / sigma
    print(f"Δα/α moved by {change:+.1e} σ, its error by a factor of 1 {ratio - 1.0:+.1e}")
    assert abs(change) < sigmas
    assert ratio == pytest.approx(1.0, abs=relative)


def named(spectrum: Spectrum, name: str, **changes: object) -> Spectrum:
    return replace(spectrum, name=name, **changes)


def two_spectra(data: dict[str, Any]) -> dict[str, Any]:
    return {**data, "spectrum": [{**data["spectrum"][0], "id": name} for name in ("odd", "even")]}


# -- the same pixels in other spectra ---------------------------------------------------------


def masked_pair(chosen: np.ndarray) -> list[Spectrum]:
    """The spectrum twice, each pixel good in one of the copies.

    A spectrum of every other pixel alone would be one with pixels twice as wide: a pixel has no
    width of its own but reaches half way to its neighbours. Masked pixels keep their place.
    """
    whole = demo_spectrum()
    return [
        named(whole, "odd", good=whole.good & chosen),
        named(whole, "even", good=whole.good & ~chosen),
    ]


def test_pixels_shared_out_alternately():
    data = two_spectra(demo_data())
    for region in data["region"]:
        region["continuum"] = -1
    alternate = np.arange(len(demo_spectrum())) % 2 == 0
    assert_same(fitted(data, masked_pair(alternate)), reference(-1), sigmas=0.01, relative=0.01)


@FITS
@given(seed=st.integers(0, 2**31), share=st.floats(0.05, 0.95))
def test_pixels_shared_out_at_random(seed, share):
    data = two_spectra(demo_data())
    for region in data["region"]:
        region["continuum"] = -1
    chosen = np.random.default_rng(seed).random(len(demo_spectrum())) < share
    assert_same(fitted(data, masked_pair(chosen)), reference(-1))


def test_each_part_has_its_own_continuum():
    """Fourteen more continuum coefficients: flux levels tell nothing about places of lines."""
    alternate = np.arange(len(demo_spectrum())) % 2 == 0
    fit = fitted(two_spectra(demo_data()), masked_pair(alternate))
    assert fit.n_free == reference().n_free + 2 * len(demo_data()["region"])
    assert_same(fit, reference(), sigmas=0.01, relative=0.01)


@pytest.mark.parametrize("names", [["odd", "even"], ["even", "odd"]])
def test_order_of_spectra_in_a_region(names):
    alternate = np.arange(len(demo_spectrum())) % 2 == 0
    data = two_spectra(demo_data())
    plain = fitted(data, masked_pair(alternate))
    for region in data["region"]:
        region["spectra"] = names
    assert_same(fitted(data, masked_pair(alternate)), plain)


def test_order_of_spectra():
    alternate = np.arange(len(demo_spectrum())) % 2 == 0
    data = two_spectra(demo_data())
    plain = fitted(data, masked_pair(alternate))
    data["spectrum"].reverse()
    assert_same(fitted(data, masked_pair(alternate)[::-1]), plain)


def test_a_spectrum_that_covers_nothing():
    data = demo_data()
    data["spectrum"].append({**data["spectrum"][0], "id": "far"})
    whole = demo_spectrum()
    # beyond the reddest window
    far = named(whole, "far", wavelength=whole.wavelength * 1.5)
    assert far.wavelength[0] > whole.wavelength[-1]
    fit = fitted(data, [whole, far])
    assert_same(fit, reference())
    assert fit.n_data == reference().n_data
    assert fit.n_free == reference().n_free


# -- the same job written in another order, or about another zero -----------------------------


@FITS
@given(order=st.permutations(range(7)))
def test_order_of_regions(order):
    data = demo_data()
    data["region"] = [data["region"][i] for i in order]
    assert_same(fitted(data, [demo_spectrum()]), reference())


@FITS
@given(order=st.permutations(range(4)))
def test_order_of_components(order):
    data = demo_data()
    data["component"] = [data["component"][i] for i in order]
    assert_same(fitted(data, [demo_spectrum()]), reference())


def about(data: dict[str, Any], velocity: float) -> tuple[dict[str, Any], Any]:
    """The job about a redshift `velocity` (km/s) away, and the map of its velocities.

    (1 + z')(1 + v'/c) = (1 + z)(1 + v/c).
    """
    z = data["absorber"]["redshift"]
    ours = (1.0 + z) * (1.0 + velocity / C_KMS) - 1.0

    def moved(v: float) -> float:
        return C_KMS * ((1.0 + z) / (1.0 + ours) * (1.0 + v / C_KMS) - 1.0)

    data["absorber"]["redshift"] = ours
    for region in data["region"]:
        region["window"] = [moved(v) for v in region["window"]]
    for component in data["component"]:
        component["velocity"] = moved(component["velocity"])
    return data, moved


@FITS
@given(velocity=st.floats(-3000.0, 3000.0))
def test_zero_of_the_velocities(velocity):
    data, moved = about(demo_data(), velocity)
    fit = fitted(data, [demo_spectrum()])
    assert_same(fit, reference())
    for k in range(1, 5):
        name = f"component[{k}].velocity"
        assert abs(fit.values[name] - moved(reference().values[name])) < STOP * fit.sigma(name)


# -- the same spectrum in other units ---------------------------------------------------------


def measured(folder: Path, table: Table) -> Measurement:
    table.write(folder / "halden-a.fits", overwrite=True)
    text = demo_text() + "\n[fit]\nrestarts = 0\n"
    return measure(parse_job(text, folder / "halden-a.toml"))


def table_of(scale: float = 1.0, unit: u.UnitBase = u.Angstrom, *, continuum: bool = True) -> Table:
    whole = demo_spectrum()
    table = Table(
        {
            "WAVE": (whole.wavelength * u.Angstrom).to(unit),
            "FLUX": scale * whole.flux,
            "ERR": scale * whole.error,
        }
    )
    if continuum:
        table["CONT"] = scale * whole.continuum
    table.meta["SPECSYS"], table.meta["VACUUM"] = "BARYCENT", True
    return table


@pytest.mark.parametrize("unit", [u.Angstrom, u.nm, u.um], ids=str)
def test_unit_of_the_wavelengths(tmp_path, unit):
    assert_same(measured(tmp_path, table_of(unit=unit)).fit, reference())


@pytest.mark.parametrize("continuum", [True, False], ids=["with continuum", "without continuum"])
def test_scale_of_the_flux(tmp_path, continuum):
    one = measured(tmp_path, table_of(continuum=continuum)).fit
    assert_same(measured(tmp_path, table_of(1e-17, continuum=continuum)).fit, one)


@FITS
@given(factor=st.floats(0.2, 5.0))
def test_errors_scale_with_those_of_the_pixels(factor):
    whole = demo_spectrum()
    fit = fitted(demo_data(), [named(whole, "red", error=factor * whole.error)])
    sigma = reference().sigma(ALPHA)
    assert abs(fit.values[ALPHA] - reference().values[ALPHA]) < 2.0 * STOP * sigma
    for name in fit.covariance.names:
        assert fit.sigma(name) == pytest.approx(factor * reference().sigma(name), rel=1e-3), name
    assert fit.chi2 == pytest.approx(reference().chi2 / factor**2)


# -- shifts of the wavelength scale -----------------------------------------------------------


def test_distortions_of_nothing():
    data = demo_data()
    data["distortion"] = [
        {"spectrum": "red", "kind": "shift"},
        {"spectrum": "red", "kind": "slope", "pivot": 5500.0},
        {"spectrum": "red", "kind": "sawtooth", "pivot": 5000.0, "order_spacing": 70.0},
    ]
    fit = fitted(data, [demo_spectrum()])
    assert_same(fit, reference())
    assert fit.n_free == reference().n_free


@FITS
@given(shift=st.floats(-5000.0, 5000.0))
def test_a_known_shift_of_everything(shift):
    """(1 + v'/c)(1 + shift/c) = 1 + v/c for each component; Δα/α stays."""
    data = demo_data()
    data["distortion"] = [{"spectrum": "red", "kind": "shift", "value": shift}]
    fit = fitted(data, [demo_spectrum()])
    assert_same(fit, reference())
    for k in range(1, 5):
        name = f"component[{k}].velocity"
        ratio = (1.0 + reference().values[name] / C_KMS) / (1.0 + shift / 1e3 / C_KMS)
        expected = C_KMS * (ratio - 1.0)
        assert abs(fit.values[name] - expected) < STOP * fit.sigma(name)


def test_a_shift_that_nothing_tells_from_the_velocities(tmp_path):
    write_spectrum(demo_spectrum(), tmp_path / "halden-a.fits")
    text = demo_text() + '\n[[distortion]]\nspectrum = "red"\nkind = "shift"\nsigma = inf\n'
    result = measure(parse_job(text, tmp_path / "halden-a.toml"))
    assert_same(result.fit, reference(), sigmas=0.01, relative=0.01)
    for name in ("distortion[1].value", *(f"component[{k}].velocity" for k in range(1, 5))):
        assert result.error(name) == "singular", name
    assert set(result.fit.covariance.reasons) == {
        "distortion[1].value",
        *(f"component[{k}].velocity" for k in range(1, 5)),
    }
    assert result.trustworthy
    (warning,) = result.warnings
    print(warning)
    assert "distortion[1].value" in warning
    assert "fix distortion[1].value (sigma = 0) or give it a prior" in warning


# -- noise of neighbouring pixels that is correlated ------------------------------------------

CORRELATION = 0.15
SEEDS = 600


@pytest.mark.slow
def test_the_error_with_correlation_is_the_scatter(tmp_path):
    """Moving averages of two draws have the correlation ab at lag 1 with a² + b² = 1."""
    clean_job = parse_job(demo_text(), "halden-a.toml", check_files=False)
    edges = synthetic_grid(clean_job, load_atoms(clean_job), "red", 2.0)
    (clean,) = simulate(
        clean_job,
        load_atoms(clean_job),
        [edges],
        replace(DEMO_NOISE, snr=np.inf),
        dalpha_ppm=DEMO_DALPHA,
        clouds=demo_clouds(),
    )
    # a² is a root of x (1 − x) = CORRELATION²
    a = np.sqrt((1.0 + np.sqrt(1.0 - 4.0 * CORRELATION**2)) / 2.0)
    b = np.sqrt(1.0 - a**2)
    snr = DEMO_NOISE.snr
    atoms = load_atoms(clean_job)

    def noisy(seed: int) -> Spectrum:
        draws = np.random.default_rng(seed).standard_normal(len(clean) + 1)
        return replace(
            clean,
            flux=clean.flux + (a * draws[1:] + b * draws[:-1]) / snr,
            error=np.full(len(clean), 1.0 / snr),
            lsf=GaussianLineSpread(5.2),
        )

    values = []
    for seed in range(SEEDS):
        fit = fit_model(build_model(clean_job, [noisy(seed)], atoms).model, FitSettings(restarts=0))
        assert fit.converged
        values.append(fit.values[ALPHA])
    write_spectrum(noisy(0), tmp_path / "halden-a.fits")
    text = demo_text().replace(
        "resolution = { fwhm = 5.2 }", f"resolution = {{ fwhm = 5.2 }}\ncorrelation = {CORRELATION}"
    )
    result = measure(parse_job(text + "\n[fit]\nrestarts = 0\n", tmp_path / "halden-a.toml"))
    scatter = np.std(values, ddof=1)
    print(
        f"{SEEDS} seeds: scatter {scatter:.3f} ppm, error with correlation "
        f"{result.correlated_stat:.3f}, without {result.stat:.3f} ppm"
    )
    # the width of 600 values has a sampling error of 2.9 %
    tolerance = 2.5 / np.sqrt(2.0 * SEEDS)
    assert scatter == pytest.approx(result.correlated_stat, rel=tolerance)
    assert result.correlated_stat > (1.0 + tolerance) * result.stat
