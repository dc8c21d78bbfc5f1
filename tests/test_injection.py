"""Known errors put into spectra of the independent simulator, fitted with and without their term.

The cases are those of `benchmarks/injection.py`; what they mean for a user stands in
docs/injection-and-recovery.md.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchmarks.injection import (
    CASES,
    FWHM,
    PIXEL,
    SEEDS,
    TRUTH,
    recover,
    recovery_table,
    structure_scan,
    structure_table,
)
from fathomline.atomic import load_atomic_data
from fathomline.job.demo import demo_clouds

# The noise-free bias of a fit without the term is at least this, ppm: half of what the table in the
# docs has, rounded. None where it has none, because the error moves or widens all lines alike
DAMAGE = {
    "slope": 3.0,
    "shift": None,
    "partial shift": 3.0,
    "sawtooth": 0.3,
    "line spread": 0.5,
    "thermal": None,
    "magnesium 24": 3.0,
    "heavy magnesium": 3.0,
}


@pytest.fixture(scope="module", params=CASES, ids=lambda case: case.key)
def recovery(request):
    outcome = recover(request.param)
    print(f"\n{recovery_table([outcome]).splitlines()[-1]} {outcome.seconds:.1f} s")
    return outcome


def test_modelled_errors_leave_no_bias(recovery):
    """Pulls of Δα/α and of every injected number over the noise seeds."""
    for ensemble in (recovery.alpha, *recovery.numbers.values()):
        assert ensemble.values.size == SEEDS
        # sampling errors of 50 pulls: 0.14 and 0.10; 2.5 of each
        assert abs(ensemble.pulls.mean()) < 0.35
        assert 0.75 < ensemble.pulls.std(ddof=1) < 1.25
    # χ²/ν of 980 degrees of freedom or more scatters by 0.045 at most; its mean over 50 by 0.0064
    assert abs(recovery.chi2 - 1.0) < 0.025


def test_noise_free_spectra_give_the_truth_back(recovery):
    # what sampling may move Δα/α by is 0.01 ppm, which is 0.01 of its error: so for the others
    assert abs(recovery.alpha.noise_free - TRUTH) < 0.01
    for ensemble in recovery.numbers.values():
        assert abs(ensemble.noise_free - ensemble.truth) < 0.01 * ensemble.errors.mean()


def test_errors_left_out_bias_where_transitions_differ(recovery):
    least = DAMAGE[recovery.case.key]
    bias = recovery.left_out.noise_free - TRUTH
    if least is None:
        # below a fifth of the statistical error: this the fit forgives, at the cost of χ²
        assert abs(bias) < 0.2 * recovery.left_out.errors.mean()
    else:
        assert abs(bias) > least
    # the mean over seeds is the same bias: 3 sampling errors
    assert abs(recovery.left_out.bias - bias) < 3.0 * recovery.left_out.bias_error


def third_moment(name: str) -> float:
    """Third central moment of the structure of a line, (km/s)³, positive towards the blue."""
    structure = load_atomic_data()[name].structure
    fraction = np.array([c.fraction for c in structure])
    wavenumber = np.array([c.wavenumber for c in structure])
    mean = np.sum(fraction * wavenumber) / fraction.sum()
    velocity = 299_792.458 * (wavenumber / mean - 1.0)
    return float(np.sum(fraction * velocity**3) / fraction.sum())


def test_composite_lines_do_for_weak_absorption_only():
    points = structure_scan()
    print("\n" + structure_table(points))
    weak, strong = points[0], [p for p in points if 14.0 <= p.column <= 14.5]
    # A weak line keeps its mean, but a symmetric profile of variance s² fitted to one with a third
    # moment μ3 settles beside it: the first-order change −μ3 f'''/6 projected on f' is a shift of
    # μ3/(4 s²), here 1.1 m/s of Mg II. Fe II hardly has any. 1 ppm moves Fe II against Mg II by
    # 18.5 m/s (mean of the lines). The tables' composites lie within 0.4 m/s of the mean of their
    # structure, which is 0.02 ppm; the clouds have four widths, of which the strongest is taken.
    b = max(demo_clouds(), key=lambda c: c.log_columns["Mg II"]).b_turb
    variance = b**2 / 2.0 + FWHM**2 / (8.0 * math.log(2.0)) + PIXEL**2 / 12.0
    expected = 1e3 * third_moment("Mg II 2796") / (4.0 * variance) / 18.5
    assert weak.bias == pytest.approx(expected, abs=0.03)
    assert all(abs(p.bias) < 0.1 for p in points if p.depth < 1.0)
    # saturated, the edges count instead of the mean: several times as much, with the other sign
    assert all(abs(p.bias) > 3.0 * abs(weak.bias) for p in strong)
    # 0.01 ppm is what sampling may do
    assert all(abs(p.with_structure) < 0.01 for p in points)
