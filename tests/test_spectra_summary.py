"""Summaries of made-up spectra of known properties, and of a real one when it is at hand."""

from __future__ import annotations

import json
import os
from pathlib import Path

import numpy as np
import pytest

from fathomline.constants import C_KMS
from fathomline.spectra import GaussianLineSpread, Spectrum, read_spectrum, summarise

REAL = os.environ.get("FATHOMLINE_REAL_DATA")


def noisy(n=20000, t=0.0, seed=1, signal=80.0, **more):
    """White noise, or the moving average e_i + t e_{i-1}, whose lag-1 correlation is t/(1 + t²)."""
    rng = np.random.default_rng(seed)
    e = rng.standard_normal(n + 1)
    noise = (e[1:] + t * e[:-1]) / np.sqrt(1 + t * t)
    wave = 4000.0 * (1 + 2.5 / C_KMS) ** np.arange(n)
    return Spectrum.from_arrays(wave, 1 + noise / signal, np.full(n, 1 / signal), **more)


def test_sampling_noise_and_masks():
    good = np.ones(20000, dtype=bool)
    good[500:520] = False
    good[700] = False
    spectrum = noisy(good=good, lsf=GaussianLineSpread(5.0), name="made up")
    summary = summarise(spectrum)
    assert summary.log_linear
    for size in (summary.pixel_min, summary.pixel_median, summary.pixel_max):
        assert size == pytest.approx(2.5, rel=1e-8)
    assert (summary.start, summary.end) == (spectrum.wavelength[0], spectrum.wavelength[-1])
    assert summary.masked_fraction == pytest.approx(21 / 20000)
    assert summary.masked_by_reason == {"masked by the user": 21 / 20000}
    [gap] = summary.gaps
    assert gap.pixels == 20
    assert gap.start == pytest.approx(spectrum.edges[500])
    assert gap.end == pytest.approx(spectrum.edges[520])
    assert len(summary.noise) == 10
    # the error of a median of 2000 values of scatter 1 is 0.03
    for level in summary.noise:
        assert level.signal_to_noise == pytest.approx(80.0, abs=0.15)
    text = json.dumps(summary.to_dict())
    assert json.loads(text)["lsf"] == {"kind": "gaussian", "fwhm": 5.0, "error": None}


@pytest.mark.parametrize("rho", [0.0, 0.12, 0.3])
def test_correlation_of_a_moving_average(rho):
    t = 0.0 if rho == 0.0 else (1 - np.sqrt(1 - 4 * rho**2)) / (2 * rho)
    # 20 000 pixels give a standard error of 0.008; the quiet limit lowers the value by 8 %
    for scale in (1.0, 3.0):  # wrong errors must not matter
        spectrum = noisy(t=t)
        spectrum = Spectrum.from_arrays(spectrum.wavelength, spectrum.flux, spectrum.error * scale)
        lag1, lag2 = summarise(spectrum).correlation
        assert lag1 == pytest.approx(rho, abs=0.03 + 0.08 * rho)
        assert lag2 == pytest.approx(0.0, abs=0.03)


def test_correlation_withstands_absorption():
    spectrum = noisy()
    velocity = np.arange(20000) * 2.5
    depth = sum(np.exp(-(((velocity - c) / 10.0) ** 2)) for c in range(500, 50000, 700))
    flux = spectrum.flux * np.exp(-2.0 * depth)
    lag1, _ = summarise(Spectrum.from_arrays(spectrum.wavelength, flux, spectrum.error)).correlation
    assert abs(lag1) < 0.03


def test_few_pixels_give_no_correlation():
    assert summarise(noisy(100)).correlation is None
    tiny = Spectrum.from_arrays([4000, 4001], [1, 1], [-1, -1])
    summary = summarise(tiny)
    assert summary.noise[0].signal_to_noise is None
    assert summary.masked_fraction == 1.0
    constant = Spectrum.from_arrays(np.arange(4000.0, 5000.0), np.zeros(1000), np.ones(1000))
    assert summarise(constant).correlation is None


def test_linear_grid_and_holes():
    wave = np.concatenate([np.arange(4000.0, 4100.0, 0.5), np.arange(4200.0, 4300.0, 0.5)])
    summary = summarise(Spectrum.from_arrays(wave, np.ones(400), np.ones(400)))
    assert not summary.log_linear
    assert summary.pixel_max == pytest.approx(C_KMS * 0.5 / 4000.0, rel=1e-6)
    assert summary.pixel_min == pytest.approx(C_KMS * 0.5 / 4299.0, rel=1e-6)
    [gap] = summary.gaps
    assert gap.pixels == 0
    assert gap.start == pytest.approx(4099.75, abs=0.01)
    assert gap.end == pytest.approx(4199.75, abs=0.01)


# the numbers of the following tests are those of the description that comes with the data
needs_real_data = pytest.mark.skipif(
    REAL is None, reason="FATHOMLINE_REAL_DATA does not name the data folder"
)


@pytest.fixture(scope="module")
def real():
    return read_spectrum(Path(REAL) / "he2217_full.fits")


@needs_real_data
def test_real_reading(real):
    assert real.reading.guesses == real.reading.warnings == ()
    assert real.reading.frame == "barycentric"
    assert real.reading.medium == "vacuum"
    assert real.continuum is not None


@needs_real_data
def test_real_summary(real):
    summary = summarise(real)
    assert summary.start == pytest.approx(4160.03, abs=0.01)
    assert summary.end == pytest.approx(8400.0, abs=0.01)
    assert round(100 * summary.masked_fraction, 1) == 2.4
    assert summary.log_linear
    assert summary.pixel_median == pytest.approx(2.5, rel=1e-5)
    longest = max(summary.gaps, key=lambda gap: gap.end - gap.start)
    assert longest.start == pytest.approx(7531.9, abs=0.1)
    assert longest.end == pytest.approx(7659.7, abs=0.1)
    assert 0.08 < summary.correlation[0] < 0.18
    assert abs(summary.correlation[1]) < 0.04


@needs_real_data
def test_real_signal_to_noise(real):
    for low, high, expected in ((4190, 4260, 160), (6390, 6415, 150), (7350, 7360, 118)):
        part = real.slice_range(low, high)
        ratio = np.median((part.continuum / part.error)[part.good])
        assert ratio == pytest.approx(expected, rel=0.1)
    levels = [n.signal_to_noise for n in summarise(real.slice_range(4190, 4260)).noise]
    assert np.median(levels) == pytest.approx(160, rel=0.05)


@needs_real_data
def test_real_text_segment_agrees_with_the_fits_file(real):
    segment = read_spectrum(Path(REAL) / "he2217_full_segment.csv", unit="Angstrom")
    assert segment.continuum is not None
    at = np.searchsorted(real.wavelength, segment.wavelength - 1e-3)
    # the text has five decimals of the wavelength and six of the flux
    np.testing.assert_allclose(segment.wavelength, real.wavelength[at], atol=6e-6)
    np.testing.assert_allclose(segment.flux, real.flux[at], atol=6e-7)
    np.testing.assert_array_equal(segment.good, real.good[at])
