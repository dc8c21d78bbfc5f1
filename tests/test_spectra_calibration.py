"""Distortion fits against numpy.polyfit, closed forms and simulations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

from fathomline.errors import SpectrumError
from fathomline.spectra import order_edges_from_spacing, sawtooth_basis, slope_basis
from fathomline.spectra.calibration import fit_distortion

RNG = np.random.default_rng(12)
WAVE = np.sort(RNG.uniform(4500.0, 6800.0, 40))
ERROR = RNG.uniform(20.0, 60.0, 40)
VELOCITY = 100.0 + 0.2 * (WAVE - 5600.0) + ERROR * RNG.standard_normal(40)


def values(fit):
    return np.array([term.value for term in fit.terms])


def test_shift_and_slope_are_those_of_polyfit():
    fit = fit_distortion(WAVE, VELOCITY, ERROR, pivot=5600.0, scatter=False)
    slope, covariance = np.polyfit(
        (WAVE - 5600.0) / 1000.0, VELOCITY, 1, w=1.0 / ERROR, cov="unscaled"
    )
    np.testing.assert_allclose(values(fit), slope[::-1], rtol=1e-9)
    np.testing.assert_allclose(fit.covariance, covariance[::-1, ::-1], rtol=1e-9)
    residual = (VELOCITY - fit.velocity(WAVE)) / ERROR
    assert fit.chi2_nu == pytest.approx(np.sum(residual**2) / 38)
    assert fit.ndof == 38
    assert fit.scatter == 0.0
    assert fit.used.all()
    at = np.array([5000.0, 6500.0])
    basis = np.column_stack([np.ones(2), (at - 5600.0) / 1000.0])
    expected = np.sqrt(np.diag(basis @ covariance[::-1, ::-1] @ basis.T))
    np.testing.assert_allclose(fit.velocity_error(at), expected, rtol=1e-9)


def test_default_pivot_makes_shift_and_slope_independent():
    fit = fit_distortion(WAVE, VELOCITY, ERROR, scatter=False)
    correlation = fit.covariance[0, 1] / np.sqrt(np.prod(np.diag(fit.covariance)))
    assert fit.pivot == np.round(np.average(WAVE, weights=ERROR**-2.0))
    assert abs(correlation) < 1e-3  # the rounding to 1 Å


def test_scatter_of_equal_errors_has_a_closed_form():
    # ln L = −½[ν ln(σ² + s²) + R/(σ² + s²)] has its maximum at s² = R/ν − σ², and there
    # d²lnL/ds² = −2 ν s²/(σ² + s²)²
    rng = np.random.default_rng(3)
    n, sigma = 60, 20.0
    wave = np.linspace(5000.0, 6000.0, n)
    y = rng.normal(50.0, np.hypot(sigma, 45.0), n)
    fit = fit_distortion(wave, y, np.full(n, sigma), terms=("shift",))
    rss, nu = np.sum((y - y.mean()) ** 2), n - 1
    total = rss / nu
    s = np.sqrt(total - sigma**2)
    assert fit.scatter == pytest.approx(s, rel=1e-6)
    assert fit.scatter_error == pytest.approx(total / np.sqrt(2 * nu) / s, rel=2e-3)

    def log_likelihood(s):
        return -0.5 * (nu * np.log(sigma**2 + s**2) + rss / (sigma**2 + s**2))

    limit = brentq(lambda x: log_likelihood(x) - log_likelihood(s) + 1.3527, s, 10 * s)
    assert fit.scatter_limit == pytest.approx(limit, rel=1e-4)
    [term] = fit.terms
    assert term.error == pytest.approx(np.sqrt(total / n), rel=1e-6)
    assert term.sigma == pytest.approx(np.hypot(term.error, s), rel=1e-6)


def test_no_scatter_gives_a_limit():
    y = np.tile([10.0, -10.0], 10)  # half the scatter that errors of 20 would cause
    fit = fit_distortion(np.linspace(5000, 6000, 20), y, np.full(20, 20.0))
    assert fit.scatter == 0.0
    assert fit.scatter_error is None
    assert 0.0 < fit.scatter_limit < 20.0
    assert fit.terms[0].sigma == fit.terms[0].error


def test_pulls_with_scatter_and_sawtooth():
    rng = np.random.default_rng(4)
    truth = np.array([80.0, -150.0, 60.0])
    edges = order_edges_from_spacing(4500.0, 6800.0, 5600.0, 80.0)
    basis = np.column_stack([np.ones(40), slope_basis(WAVE, 5600.0), sawtooth_basis(WAVE, edges)])
    pull, scatter = [], []
    for _ in range(150):
        y = basis @ truth + np.hypot(ERROR, 50.0) * rng.standard_normal(40)
        fit = fit_distortion(
            WAVE, y, ERROR, terms=("shift", "slope", "sawtooth"), pivot=5600.0, order_spacing=80.0
        )
        pull.append([(t.value - v) / t.error for t, v in zip(fit.terms, truth, strict=True)])
        scatter.append(fit.scatter)
    pull = np.array(pull)
    # three sampling errors; the scatter is itself estimated from 37 degrees of freedom, which
    # widens pulls like Student's t by 3 %
    assert np.all(np.abs(pull.mean(axis=0)) < 3.0 / np.sqrt(150))
    assert np.all(np.abs(pull.std(axis=0) - 1.03) < 3.0 / np.sqrt(300))
    assert np.mean(scatter) == pytest.approx(50.0, abs=3.0)


def test_order_edges_and_spacing_agree():
    edges = order_edges_from_spacing(4500.0, 6800.0, 5600.0, 80.0)
    common = {"terms": ("sawtooth",), "pivot": 5600.0}
    a = fit_distortion(WAVE, VELOCITY, ERROR, order_edges=edges, **common)
    b = fit_distortion(WAVE, VELOCITY, ERROR, order_spacing=80.0, **common)
    np.testing.assert_allclose(values(a), values(b))
    assert b.order_spacing == 80.0
    assert a.order_edges == tuple(edges)
    np.testing.assert_allclose(a.velocity([9000.0]), b.velocity([9000.0]))


def test_robust_sets_outliers_aside():
    y = VELOCITY.copy()
    y[[5, 20, 33]] += [900.0, -1500.0, 2000.0]
    fit = fit_distortion(WAVE, y, ERROR, pivot=5600.0, robust=True)
    assert np.flatnonzero(~fit.used).tolist() == [5, 20, 33]
    kept = fit.used
    alone = fit_distortion(WAVE[kept], y[kept], ERROR[kept], pivot=5600.0)
    np.testing.assert_allclose(values(fit), values(alone))
    clean = fit_distortion(WAVE, VELOCITY, ERROR, pivot=5600.0, robust=True)
    assert clean.used.all()
    with pytest.raises(SpectrumError, match="are outliers"):
        fit_distortion(WAVE, 100.0 * VELOCITY**3, ERROR, robust=True, scatter=False)


def test_as_many_points_as_terms():
    fit = fit_distortion([5000.0, 6000.0], [10.0, 30.0], [1.0, 1.0], pivot=5000.0)
    np.testing.assert_allclose(values(fit), [10.0, 20.0])
    assert fit.chi2_nu is None
    assert fit.scatter_limit is None


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"terms": ("shift", "curve")}, "unknown term 'curve'"),
        ({"terms": ()}, "at least one"),
        ({"terms": ("shift", "shift")}, "each term once"),
        ({"terms": ("sawtooth",)}, "needs the echelle orders"),
        ({"order_spacing": 50.0, "order_edges": [1.0, 2.0]}, "not both"),
        ({"pivot": -1.0}, "pivot"),
        ({"error": np.zeros(40)}, "point 1 is wavelength"),
        ({"error": np.ones(39)}, "one shape"),
        ({"wavelength": np.full(40, 5000.0)}, "cannot tell the terms shift, slope apart"),
    ],
)
def test_bad_arguments(change, message):
    arguments = {"wavelength": WAVE, "velocity": VELOCITY, "error": ERROR, **change}
    with pytest.raises(SpectrumError, match=message):
        fit_distortion(**arguments)


def test_too_few_points():
    with pytest.raises(SpectrumError, match="1 points cannot determine 2 terms"):
        fit_distortion([5000.0], [1.0], [1.0])
