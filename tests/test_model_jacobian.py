"""Every analytic derivative, entrywise, against an adaptive numerical one."""

from __future__ import annotations

import numpy as np
import pytest

from fathomline.profile import LineTable
from support import ridders, small_model

# Steps: about a tenth of the distance over which the model changes its shape
STEPS = {
    "dalpha_ppm": 20.0,
    "fwhm": 0.2,
    "v": 0.3,
    "b": 0.3,
    "T": 2e3,
    "M": 0.05,
    "F": 0.05,
    "c": 0.1,
    "z": 0.1,
}


def step_of(name: str) -> float:
    return STEPS.get(name, STEPS.get(name[0], 0.1))


@pytest.mark.parametrize("structure", ["isotopic", "composite"])
@pytest.mark.parametrize("seed", [1, 2])
def test_each_entry_agrees_with_an_adaptive_derivative(structure, seed, monkeypatch):
    model = small_model(structure=structure)
    rng = np.random.default_rng(seed)
    x = model.parameters.start * (1.0 + 0.02 * rng.standard_normal(model.parameters.start.size))
    calls = []
    original = LineTable.evaluate

    def watched(self, inverse, s, column, b, x, slopes=None, **more):
        if slopes is not None:
            calls.append(slopes.shape)
        return original(self, inverse, s, column, b, x, slopes, **more)

    monkeypatch.setattr(LineTable, "evaluate", watched)
    residual, jacobian = model.residuals_and_jacobian(x)
    assert len(calls) == 1  # the analytic path ran
    np.testing.assert_allclose(model.residuals(x), residual, rtol=0, atol=1e-12)
    calls.clear()
    for j, name in enumerate(model.parameters.free_names):

        def along(value, j=j):
            moved = x.copy()
            moved[j] = value
            return model.residuals(moved)

        numerical = ridders(along, x[j], step_of(name))
        largest = np.abs(jacobian[:, j]).max()
        assert largest > 0.0, name
        # 1e-6 of the column's largest entry: the promise of the design
        np.testing.assert_allclose(
            jacobian[:, j], numerical, rtol=0, atol=1e-6 * largest, err_msg=name
        )
    assert not calls  # and the numerical one did not use it
