"""How much work a fit does, in counts, and what its short cuts cost in Δα/α."""

from __future__ import annotations

import numpy as np
import pytest

import fathomline.profile.depth as depth
from benchmarks import absorbers
from fathomline.fit import FitSettings, fit_model, minimise
from fathomline.job import build_job
from fathomline.job.building import ALPHA, build_model
from fathomline.profile import LineTable


@pytest.fixture(scope="module")
def built():
    return absorbers.built(4, 7)


@pytest.mark.parametrize(("n_components", "n_transitions", "most"), [(4, 7, 6), (15, 8, 9)])
def test_a_fit_takes_few_evaluations(n_components, n_transitions, most):
    """From start values rounded to 0.1: each evaluation gives the Jacobian too."""
    model = absorbers.built(n_components, n_transitions).model
    result = fit_model(model, FitSettings(restarts=0))
    assert result.converged
    assert result.n_evaluations == model.n_evaluations  # nothing is evaluated beside the count
    assert result.n_evaluations <= most


def test_points_near_the_lines_are_few(built, monkeypatch):
    """The full function is evaluated near the lines only."""
    counted = []
    original = depth.voigt_core

    def watched(a, u, *, derivatives):
        counted.append(u.size)
        return original(a, u, derivatives=derivatives)

    monkeypatch.setattr(depth, "voigt_core", watched)
    model = built.model
    model.residuals(model.parameters.start)
    lines = sum(
        lines.masses.size * grid.size * len(built.job.components)
        for segment, grid in zip(model.segments, model.grids, strict=True)
        for _, lines in segment.lines
    )
    # 16 Doppler widths of 4 km/s are 64 of 250 km/s; the isotopes widen them a little
    assert sum(counted) < 0.4 * lines


@pytest.mark.parametrize("log_column", [0.0, 1.5])
def test_wings_by_series_do_not_move_alpha(log_column, monkeypatch):
    """Against the full function of every line everywhere: Δα/α moves by less than 0.001 ppm."""
    job = absorbers.job(4, 7)
    data = job.model_dump(by_alias=True, exclude_none=True)
    for component in data["component"]:
        for ion in component["logN"]:
            component["logN"][ion] = component["logN"][ion]["value"] + log_column
    strong = build_job(
        {
            "schema": 1,
            "absorber": data["absorber"],
            "spectrum": [{"id": "s0", "file": "s0.fits", "resolution": {"fwhm": absorbers.FWHM}}],
            "region": [
                {"transition": r["transition"], "window": list(r["window"])} for r in data["region"]
            ],
            "component": [
                {
                    "velocity": c["velocity"]["value"],
                    "b": c["b"]["value"],
                    "logN": c["logN"],
                }
                for c in data["component"]
            ],
        }
    )
    spectra = absorbers.spectra(strong)
    found = []
    for everywhere in (False, True):
        if everywhere:
            monkeypatch.setattr(depth, "CORE", 1e6)
        model = build_model(strong, spectra, absorbers.load_atomic_data()).model
        result = minimise(
            model.residuals_and_jacobian,
            model.parameters.start,
            model.parameters.lower,
            model.parameters.upper,
            edm_tolerance=1e-13,
        )
        found.append(result.x)
    alpha = model.parameters.free_names.index(ALPHA)
    moved = found[1][alpha] - found[0][alpha]
    print(f"log N + {log_column}: wings by series move Δα/α by {moved:+.1e} ppm")
    assert abs(moved) < 1e-3


def test_work_does_not_depend_on_how_it_is_cut(built, monkeypatch):
    """Blocks are for the cache of the processor: the same numbers with any size."""
    model = built.model
    start = model.parameters.start
    r, jacobian = model.residuals_and_jacobian(start)
    for size in (1, 500, 10**9):
        monkeypatch.setattr(depth, "_BLOCK_POINTS", size)
        r2, jacobian2 = model.residuals_and_jacobian(start)
        np.testing.assert_array_equal(r2, r)
        np.testing.assert_array_equal(jacobian2, jacobian)


def test_a_table_without_lines():
    assert LineTable([], []).evaluate(
        np.zeros((0, 0)), np.zeros(0), np.zeros(0), np.zeros(0), 0.0
    ).shape == (1, 0, 0)
