"""Direct comparison of two spectra: known shifts, pulls, and what it refuses."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from calibration_support import C_MS, PIVOT, log_edges, noisy, recorded
from fathomline.errors import SpectrumError
from fathomline.spectra import Spectrum
from fathomline.spectra.comparison import ChunkShift, compare_spectra, mean_shift

SHIFT, SLOPE = 250.0, 300.0
EDGES = log_edges()
OTHER = log_edges(step=2.4, phase=0.37)


def truth(chunk: ChunkShift, shift: float = SHIFT) -> float:
    return shift + SLOPE * (chunk.wavelength - PIVOT) / 1000.0


@pytest.fixture(scope="module")
def clean():
    """Noise-free spectra by the independent route of `fathomline.job.synthesis`."""
    return {
        "shifted": recorded(EDGES, SHIFT, SLOPE),
        "far": recorded(EDGES, 4000.0, SLOPE),
        "plain": recorded(EDGES),
        "other": recorded(OTHER),
    }


def pulls(
    clean, first="shifted", *, other=False, rho=0.0, shift=SHIFT, snr=(80, 60), n=20, **options
):
    rng = np.random.default_rng(20261201)
    edges, second = (OTHER, "other") if other else (EDGES, "plain")
    found = []
    for _ in range(n):
        one = noisy(EDGES, clean[first], snr[0], rng, correlation=rho)
        two = noisy(edges, clean[second], snr[1], rng, correlation=rho)
        found += compare_spectra(one, two, exclude_telluric=False, **options)
    return np.array([(c.velocity - truth(c, shift)) / c.error for c in found]), found


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"rho": 0.15},
        {"rho": 0.15, "correlation": 0.15},
        {"other": True},
        {"other": True, "rho": 0.15},
        {"first": "far", "shift": 4000.0},  # 1.6 pixels
        {"snr": (100, 50)},
        {"snr": (15, 20), "n": 25},  # a third of ⟨g²⟩ is noise in the weakest chunks
        {"chunk": 100.0, "n": 12},
        {"order": 3},
    ],
    ids=lambda o: "-".join(f"{k}={v}" for k, v in o.items()) or "default",
)
def test_pulls_have_mean_zero_and_width_one(clean, options):
    pull, found = pulls(clean, **options)
    n = pull.size
    assert n >= 100
    # three times the sampling errors 1/√n and 1/√(2n)
    assert abs(pull.mean()) < 3.0 / np.sqrt(n)
    assert abs(pull.std() - 1.0) < 3.0 / np.sqrt(2.0 * n)
    assert np.mean([c.chi2_nu for c in found]) == pytest.approx(1.0, abs=0.06)


def test_ignoring_the_correlation_makes_errors_wrong(clean):
    known, _ = pulls(clean, rho=0.3, correlation=0.3)
    ignored, _ = pulls(clean, rho=0.3, correlation=0.0)
    # the noise of neighbours enters D with one sign on each flank: correlation adds there
    assert abs(known.std() - 1.0) < 3.0 / np.sqrt(2.0 * known.size)
    assert ignored.std() > 1.1 * known.std()


def test_noise_free_shift_is_recovered(clean):
    # errors so small that the correction for noise, which is not there, does nothing
    error = np.full(EDGES.size - 1, 1e-3)
    wave = np.sqrt(EDGES[:-1] * EDGES[1:])
    one, two = (Spectrum.from_arrays(wave, clean[k], error) for k in ("shifted", "plain"))
    found = compare_spectra(one, two, exclude_telluric=False, correlation=0.0)
    assert len(found) == 7
    for chunk in found:
        # the limits of sampling: lines of FWHM 2.6 to 4 pixels
        assert chunk.velocity == pytest.approx(truth(chunk), rel=0.015)
        # at a signal-to-noise of 100 what the method neglects adds below 0.01 to χ²/ν
        assert chunk.chi2_nu * 0.1**2 < 0.01


def test_exchange_changes_the_sign(clean):
    rng = np.random.default_rng(2)
    one, two = noisy(EDGES, clean["shifted"], 80, rng), noisy(EDGES, clean["plain"], 60, rng)
    ahead = compare_spectra(one, two, exclude_telluric=False)
    back = compare_spectra(two, one, exclude_telluric=False)
    for a, b in zip(ahead, back, strict=True):
        assert a.velocity == pytest.approx(-b.velocity, abs=0.1 * a.error)
        assert a.error == pytest.approx(b.error, rel=0.01)


def test_errors_scale_with_those_of_the_data(clean):
    rng = np.random.default_rng(3)
    one, two = noisy(EDGES, clean["shifted"], 200, rng), noisy(EDGES, clean["plain"], 200, rng)
    plain = compare_spectra(one, two, exclude_telluric=False, correlation=0.0)
    doubled = compare_spectra(
        replace(one, error=2 * one.error),
        replace(two, error=2 * two.error),
        exclude_telluric=False,
        correlation=0.0,
        min_significance=1.5,
    )
    for a, b in zip(plain, doubled, strict=True):
        assert b.error == pytest.approx(2.0 * a.error, rel=0.1)


def test_error_is_that_of_the_gradient(clean):
    # ⟨v²⟩ = 1/Σ w g² with the noise-free gradient and w = 1/(σ1² + σ2²), up to the scale terms
    wave = np.sqrt(EDGES[:-1] * EDGES[1:])
    error = np.full(wave.size, 1e-3)
    one = Spectrum.from_arrays(wave, clean["plain"], error)
    g = np.gradient(clean["plain"], np.log(wave)) / C_MS
    for chunk in compare_spectra(one, one, exclude_telluric=False, correlation=0.0):
        inside = (wave >= chunk.low) & (wave <= chunk.high)
        bound = np.sqrt(2.0e-6 / np.sum(g[inside] ** 2))
        assert chunk.velocity == pytest.approx(0.0, abs=1e-6)
        # numpy's gradient is of second order and too small, the scale terms cost a little
        assert 0.75 * bound < chunk.error < 1.1 * bound
        assert chunk.wavelength == pytest.approx(
            np.average(wave[inside], weights=g[inside] ** 2), abs=0.03
        )


def test_flux_scales_without_a_continuum(clean):
    rng = np.random.default_rng(4)
    wave = np.sqrt(EDGES[:-1] * EDGES[1:])
    levels = 3.0 * (1.0 + 0.3 * np.sin(wave / 200.0)), 70.0 * (1.0 + wave / 6000.0)
    pull = []
    for _ in range(16):
        one = noisy(EDGES, clean["shifted"], 80, rng, level=levels[0], continuum=False)
        two = noisy(EDGES, clean["plain"], 60, rng, level=levels[1], continuum=False)
        for c in compare_spectra(one, two, exclude_telluric=False):
            pull.append((c.velocity - truth(c)) / c.error)
    assert len(pull) >= 100
    assert abs(np.mean(pull)) < 3.0 / np.sqrt(len(pull))
    assert abs(np.std(pull) - 1.0) < 3.0 / np.sqrt(2.0 * len(pull))


def test_cosmic_rays_and_masked_pixels(clean):
    rng = np.random.default_rng(5)
    one, two = noisy(EDGES, clean["shifted"], 80, rng), noisy(EDGES, clean["plain"], 60, rng)
    plain = compare_spectra(one, two, exclude_telluric=False, correlation=0.0)
    at = int(np.searchsorted(one.wavelength, plain[0].wavelength)) + 4
    flux = one.flux.copy()
    flux[at] += 0.5
    hit = replace(one, flux=flux)
    [found] = [
        c
        for c in compare_spectra(hit, two, exclude_telluric=False, correlation=0.0)
        if c.low < one.wavelength[at] < c.high
    ]
    assert found.clipped == 1
    assert found.pixels <= plain[0].pixels - 7
    assert abs(found.velocity - truth(found)) < 3.5 * found.error

    bad = one.error.copy()
    bad[at - 2 : at + 3] = -1.0
    flux[at - 2 : at + 3] = np.nan
    masked = Spectrum.from_arrays(one.wavelength, flux, bad, one.continuum)
    [found] = [
        c
        for c in compare_spectra(masked, two, exclude_telluric=False, correlation=0.0)
        if c.low < one.wavelength[at] < c.high
    ]
    assert found.clipped == 0
    assert abs(found.velocity - truth(found)) < 3.5 * found.error


def test_window_telluric_and_significance(clean):
    rng = np.random.default_rng(6)
    one, two = noisy(EDGES, clean["shifted"], 80, rng), noisy(EDGES, clean["plain"], 60, rng)
    everything = compare_spectra(one, two, exclude_telluric=False)
    part = compare_spectra(one, two, exclude_telluric=False, window=(5500.0, 5600.0))
    assert [c.wavelength for c in part] == [
        c.wavelength for c in everything if 5500 < c.wavelength < 5600
    ]
    # Mg II at 6012 and 6028 Å: H2O is listed from 5870 to 6010 Å
    left = compare_spectra(one, two)
    assert all(not 5870.0 <= c.low <= 6010.0 for c in left)
    assert compare_spectra(one, two, window=(5700.0, 5850.0)) == []
    strong = compare_spectra(one, two, exclude_telluric=False, min_significance=12.0)
    assert 0 < len(strong) < len(everything)


def test_fixed_chunks_are_disjoint_and_short(clean):
    rng = np.random.default_rng(7)
    one, two = noisy(EDGES, clean["shifted"], 80, rng), noisy(EDGES, clean["plain"], 60, rng)
    found = compare_spectra(one, two, exclude_telluric=False, chunk=60.0)
    assert len(found) > 15
    for a, b in pairwise(found):
        assert a.high < b.low
    for c in found:
        assert c.low <= c.wavelength <= c.high
        assert C_MS * np.log(c.high / c.low) <= 60.0e3


def test_spectra_of_pure_noise_have_no_features():
    rng = np.random.default_rng(8)
    flat = np.ones(EDGES.size - 1)
    one, two = noisy(EDGES, flat, 80, rng), noisy(EDGES, flat, 60, rng)
    assert compare_spectra(one, two) == []


def test_mean_shift_is_the_weighted_mean():
    rng = np.random.default_rng(9)
    v, e = rng.normal(0, 50, 6), rng.uniform(20, 60, 6)
    chunks = [
        ChunkShift(5000.0 + i, 5001.0 + i, 5000.5 + i, v[i], e[i], 1.0, 30, 0, 0.9)
        for i in range(6)
    ]
    mean, error, chi2, n = mean_shift(chunks)
    coefficient, covariance = np.polyfit(np.arange(6), v, 0, w=1 / e, cov="unscaled")
    assert mean == pytest.approx(coefficient[0])
    assert error == pytest.approx(np.sqrt(covariance[0, 0]))
    assert chi2 == pytest.approx(np.sum(((v - mean) / e) ** 2) / 5)
    assert n == 6
    assert mean_shift(chunks, 5000.0, 5001.0)[2:] == (None, 1)
    with pytest.raises(SpectrumError, match="no measured chunk"):
        mean_shift(chunks, 6000.0, 7000.0)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"chunk": 0.0}, "chunk length"),
        ({"window": (2.0, 1.0)}, "is empty"),
        ({"min_significance": 0.0}, "min_significance"),
        ({"order": 9}, "order"),
        ({"correlation": 0.7}, "correlation"),
        ({"clip": 1.0}, "cut the noise"),
        ({"window": (7000.0, 7100.0)}, "no good pixels in common within 7000 to 7100"),
    ],
)
def test_bad_arguments(options, message):
    flat = np.ones(EDGES.size - 1)
    one = noisy(EDGES, flat, 80, np.random.default_rng(1), name="a")
    with pytest.raises(SpectrumError, match=message):
        compare_spectra(one, one, **options)


def test_spectra_apart():
    one = Spectrum.from_arrays(np.linspace(4000, 4100, 500), np.ones(500), np.ones(500), name="a")
    two = Spectrum.from_arrays(np.linspace(5000, 5100, 500), np.ones(500), np.ones(500), name="b")
    with pytest.raises(SpectrumError, match=r"'a' and 'b'.*4000\.00-4100\.00.*5000\.00-5100\.00"):
        compare_spectra(one, two)
