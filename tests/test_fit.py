"""The minimiser against problems with known answers, and the covariance against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.optimize

from fathomline.fit import (
    FitSettings,
    aicc,
    covariance_from_jacobian,
    fit_model,
    free_vector,
    minimise,
    to_lmfit,
)
from fathomline.fit.covariance import AT_BOUND, SINGULAR
from support import small_model

INF = np.inf


def unbounded(n):
    return np.full(n, -INF), np.full(n, INF)


def rosenbrock(x):
    # Moré, Garbow & Hillstrom 1981, ACM TOMS 7, 17, problem 1: minimum 0 at (1, 1)
    r = np.array([10.0 * (x[1] - x[0] ** 2), 1.0 - x[0]])
    return r, np.array([[-20.0 * x[0], 10.0], [-1.0, 0.0]])


def powell_singular(x):
    # problem 13 of the same paper: minimum 0 at 0, singular Jacobian there
    a, b = np.sqrt(5.0), np.sqrt(10.0)
    r = np.array(
        [x[0] + 10 * x[1], a * (x[2] - x[3]), (x[1] - 2 * x[2]) ** 2, b * (x[0] - x[3]) ** 2]
    )
    j = np.array(
        [
            [1, 10, 0, 0],
            [0, 0, a, -a],
            [0, 2 * (x[1] - 2 * x[2]), -4 * (x[1] - 2 * x[2]), 0],
            [2 * b * (x[0] - x[3]), 0, 0, -2 * b * (x[0] - x[3])],
        ]
    )
    return r, j


def test_rosenbrock():
    found = minimise(rosenbrock, np.array([-1.2, 1.0]), *unbounded(2), edm_tolerance=1e-18)
    np.testing.assert_allclose(found.x, [1.0, 1.0], atol=1e-8)
    assert found.converged
    assert found.n_evaluations < 40  # a count, so that a change for the worse is seen


def test_powell_singular():
    found = minimise(powell_singular, np.array([3.0, -1.0, 0.0, 1.0]), *unbounded(4))
    assert found.converged
    assert found.chi2 < 1e-7


# NIST StRD nonlinear regression, "Misra1a" (lower difficulty), certified values:
# b1 = 2.3894212918E+02 (sd 2.7070075241E+00), b2 = 5.5015643181E-04 (7.2668688436E-06),
# residual sum of squares 1.2455138894E-01, 12 degrees of freedom; from memory of the NIST page,
# confirmed here by scipy below
MISRA_Y = np.array(
    [
        10.07,
        14.73,
        17.94,
        23.93,
        29.61,
        35.18,
        40.02,
        44.82,
        50.76,
        55.05,
        61.01,
        66.40,
        75.47,
        81.78,
    ]
)
MISRA_X = np.array(
    [
        77.6,
        114.9,
        141.1,
        190.8,
        239.9,
        289.0,
        332.8,
        378.4,
        434.8,
        477.3,
        536.8,
        593.1,
        689.1,
        760.0,
    ]
)


def misra(p):
    decay = np.exp(-p[1] * MISRA_X)
    residual = MISRA_Y - p[0] * (1.0 - decay)
    return residual, -np.column_stack([1.0 - decay, p[0] * MISRA_X * decay])


@pytest.mark.parametrize("start", [[500.0, 1e-4], [250.0, 5e-4]])
def test_nist_misra1a(start):
    found = minimise(misra, np.array(start), *unbounded(2), edm_tolerance=1e-16)
    certified = [2.3894212918e2, 5.5015643181e-4]
    np.testing.assert_allclose(found.x, certified, rtol=1e-7)
    assert found.chi2 == pytest.approx(1.2455138894e-1, rel=1e-8)
    covariance = covariance_from_jacobian(found.jacobian, ("b1", "b2"), found.at_bound)
    # NIST quotes standard deviations scaled by the residual scatter
    scaled = covariance.sigmas * np.sqrt(found.chi2 / 12)
    np.testing.assert_allclose(scaled, [2.7070075241, 7.2668688436e-6], rtol=1e-5)


@pytest.mark.parametrize("seed", range(8))
def test_bounded_problems_agree_with_scipy(seed):
    """Random bounded problems: the same minimum as scipy.optimize.least_squares."""
    rng = np.random.default_rng(seed)
    n, m = 5, 30
    design, target = rng.standard_normal((m, n)), rng.standard_normal(m)
    lower, upper = -rng.uniform(0.01, 0.1, n), rng.uniform(0.01, 0.1, n)

    def function(x):
        return np.tanh(design @ x) + 0.1 * (design @ x) - target, (
            (1 - np.tanh(design @ x) ** 2 + 0.1)[:, None] * design
        )

    ours = minimise(function, np.zeros(n), lower, upper)
    theirs = scipy.optimize.least_squares(
        lambda x: function(x)[0],
        np.zeros(n),
        lambda x: function(x)[1],
        (lower, upper),
        xtol=1e-14,
        ftol=1e-14,
        gtol=1e-14,
    )
    assert ours.converged
    assert np.all((ours.x >= lower) & (ours.x <= upper))
    assert ours.chi2 <= 2 * theirs.cost * (1 + 1e-8)
    np.testing.assert_allclose(ours.x, theirs.x, atol=2e-4)
    assert ours.at_bound.any()


def test_stopped_early_is_not_converged():
    found = minimise(rosenbrock, np.array([-1.2, 1.0]), *unbounded(2), max_iterations=3)
    assert not found.converged
    assert "largest number" in found.message


def test_covariance_of_a_straight_line():
    # closed form, for instance Press et al. 2007, Numerical Recipes §15.2
    x = np.linspace(0.0, 1e4, 50)
    jacobian = np.column_stack([np.ones(50), x]) / 0.3
    covariance = covariance_from_jacobian(jacobian, ("a", "b"), np.zeros(2, dtype=bool))
    s, sx, sxx = 50 / 0.09, x.sum() / 0.09, (x**2).sum() / 0.09
    delta = s * sxx - sx**2
    np.testing.assert_allclose(
        covariance.matrix, np.array([[sxx, -sx], [-sx, s]]) / delta, rtol=1e-12
    )
    doubled = covariance_from_jacobian(jacobian / 2, ("a", "b"), np.zeros(2, dtype=bool))
    np.testing.assert_allclose(doubled.sigmas, 2 * covariance.sigmas, rtol=1e-12)


def test_parameters_without_an_error_have_a_reason():
    rng = np.random.default_rng(0)
    jacobian = rng.standard_normal((40, 5))
    jacobian[:, 1] = 3.0 * jacobian[:, 0]  # only a sum of the first two is known
    jacobian[:, 4] = 0.0  # no influence at all
    covariance = covariance_from_jacobian(
        jacobian, ("a", "b", "c", "d", "e"), np.array([0, 0, 0, 1, 0], dtype=bool)
    )
    assert covariance.reasons == {"a": SINGULAR, "b": SINGULAR, "d": AT_BOUND, "e": SINGULAR}
    assert covariance.sigma("a") is None
    # c is as well known as without the unknowable ones
    good = covariance_from_jacobian(jacobian[:, [0, 2]], ("a", "c"), np.zeros(2, dtype=bool))
    assert covariance.sigma("c") == pytest.approx(good.sigma("c"), rel=1e-10)
    assert np.all(np.isfinite(covariance.matrix))


def test_draws_from_the_covariance_have_it():
    # a draw R z has covariance R Rᵀ
    jacobian = np.random.default_rng(4).standard_normal((30, 4)) * [1.0, 1e3, 1e-3, 1.0]
    names = ("a", "b", "c", "d")
    covariance = covariance_from_jacobian(jacobian, names, np.array([0, 0, 0, 1], dtype=bool))
    root = covariance.root()
    np.testing.assert_allclose(root @ root.T, covariance.matrix, rtol=1e-9, atol=1e-20)


def test_aicc():
    # Hurvich & Tsai 1989: χ² + 2p + 2p(p+1)/(n − p − 1)
    assert aicc(100.0, 50, 4) == pytest.approx(100 + 8 + 40 / 45)
    assert aicc(1.0, 5, 4) == INF


def test_doubling_all_pixel_errors_doubles_sigma():
    one, two = small_model(noise=0.01), small_model(noise=0.02)
    x = one.parameters.start
    free = [i for i, name in enumerate(one.parameters.free_names) if name != "fwhm"]
    sigmas = []
    for model in (one, two):
        jacobian = model.residuals_and_jacobian(x)[1][: model.n_data][:, free]  # without priors
        names = tuple(model.parameters.free_names[i] for i in free)
        sigmas.append(covariance_from_jacobian(jacobian, names, np.zeros(len(free), bool)).sigmas)
    np.testing.assert_allclose(sigmas[1], 2 * sigmas[0], rtol=1e-9)


def test_lmfit_parameters_there_and_back():
    parameters = small_model().parameters
    values = to_lmfit(parameters)
    assert [p.user_data for p in values.values()] == list(parameters.free_names)
    np.testing.assert_array_equal(free_vector(parameters, values), parameters.start)
    assert values["p0"].min == -1e3


def test_flag_when_stopped_before_the_minimum():
    model = small_model()
    result = fit_model(model, FitSettings(restarts=0, max_iterations=1))
    assert "not-converged" in result.flags
    assert not result.converged
