"""Tests of residuals against the distributions that they claim, and signs of overfitting."""

from __future__ import annotations

import numpy as np
import pytest

from fathomline.job import build_job, job_to_data, parse_job
from fathomline.job.adequacy import residual_tests
from fathomline.job.demo import demo_text, write_demo
from fathomline.job.measurement import measure


def test_white_noise_has_the_distributions_that_are_claimed():
    # Wald & Wolfowitz 1940: the number of runs is asymptotically normal; correlation ~ 1/√n
    rng = np.random.default_rng(5)
    tests = [residual_tests(rng.standard_normal(120)) for _ in range(2000)]
    runs = np.array([t.runs for t in tests])
    assert abs(runs.mean()) < 3.0 / np.sqrt(2000)
    assert runs.std() == pytest.approx(1.0, abs=0.05)
    correlation = np.array([t.correlation for t in tests]) * np.sqrt(120)
    assert correlation.std() == pytest.approx(1.0, abs=0.05)
    probability = np.array([t.probability for t in tests])
    assert probability.mean() == pytest.approx(0.5, abs=0.02)  # uniform
    problems = sum(bool(t.problems()) for t in tests)
    assert problems < 2000 * 0.01  # three tests at 0.1 to 0.15 % each


def test_wandering_residuals_are_seen():
    wave = 1.5 * np.sin(np.arange(100) / 5.0)
    found = residual_tests(wave + 0.3 * np.random.default_rng(1).standard_normal(100)).problems()
    assert "too few runs" in found
    assert "neighbouring residuals correlated" in found
    assert residual_tests(np.full(50, 2.0)).problems() == [
        "chi2 too high",
        "neighbouring residuals correlated",
    ]


def test_runs_of_a_hand_count():
    # + + − − + − : 4 runs of 3 and 3; with n < 10 no statistic is given
    assert residual_tests(np.array([1.0, 1.0, -1.0, -1.0, 1.0, -1.0])).runs == 0.0
    series = np.array([1.0, -1.0] * 6)  # 12 runs of 6 and 6: expectation 7, variance 6·5/11
    assert residual_tests(series).runs == pytest.approx((12 - 7) / np.sqrt(30 / 11))


def test_a_missing_component_and_a_spurious_one_are_told(tmp_path):
    job = write_demo(tmp_path / "d")
    data = job_to_data(parse_job(demo_text(), job))
    good = measure(build_job(data, folder=job.parent))
    assert good.adequacy.overfitting == ()
    assert not good.adequacy.composite.problems()
    spurious = {"velocity": 60.0, "b": 0.9, "logN": {"Fe II": 9.5, "Mg II": 9.5}}
    more = measure(
        build_job({**data, "component": [*data["component"], spurious]}, folder=job.parent)
    )
    assert any("component 5" in sentence for sentence in more.adequacy.overfitting)
    fewer = measure(build_job({**data, "component": data["component"][:3]}, folder=job.parent))
    assert all(fewer.adequacy.region_problems)
    assert any("a component may be missing" in text for text in fewer.warnings)
