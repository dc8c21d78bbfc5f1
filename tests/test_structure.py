"""The structure search: finds what was simulated, recognises interlopers, repeats itself."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchmarks.structure_campaign import draw, final_fit
from fathomline.atomic import load_atomic_data
from fathomline.fit import (
    CRITERIA,
    FitSettings,
    Interloper,
    SearchSettings,
    aicc,
    fit_model,
    search_structure,
)
from fathomline.job import build_job, job_digest, job_to_data, parse_job
from fathomline.job.building import ALPHA, build_model, build_template
from fathomline.job.demo import demo_clouds, demo_text
from fathomline.job.ensemble import Member, run_ensemble, summarise_members
from fathomline.job.simulation import Noise, simulate, synthetic_grid
from fathomline.job.structure import job_with_structure
from fathomline.spectra import GaussianLineSpread, Spectrum

ATOMS = load_atomic_data()


def data(seed: int = 3, blend: dict | None = None):
    """The demo's regions without components, and its simulated spectrum."""
    full = job_to_data(parse_job(demo_text(), "halden-a.toml", check_files=False))
    if blend is not None:
        full["blend"] = [blend]
    job = build_job(full)
    edges = synthetic_grid(job, ATOMS, "red", 2.0)
    (s,) = simulate(job, ATOMS, [edges], Noise(100, seed), dalpha_ppm=8.0, clouds=demo_clouds())
    full.pop("component")
    full.pop("blend", None)
    spectrum = Spectrum.from_arrays(
        s.wavelength, s.flux, s.error, s.continuum, lsf=GaussianLineSpread(5.2), name="red"
    )
    return build_job(full), [spectrum]


def test_finds_the_clouds_that_were_simulated():
    job, spectra = data()
    assert job.searches
    found = search_structure(build_template(job, spectra, ATOMS))
    truth = sorted(demo_clouds(), key=lambda c: c.velocity)
    clouds = sorted(found.clouds, key=lambda c: c.velocity)
    assert len(clouds) == len(truth)
    assert found.interlopers == ()
    assert found.complete
    for cloud, true in zip(clouds, truth, strict=True):
        # errors of the demo: 0.03 km/s in v, 0.05 in b, 0.007 in log N; five times that
        assert cloud.velocity == pytest.approx(true.velocity, abs=0.15)
        assert cloud.b == pytest.approx(true.b_turb, abs=0.25)
        assert cloud.log_columns["Mg II"] == pytest.approx(true.log_columns["Mg II"], abs=0.035)
    # Δα/α was free throughout and ends within its error of 1.14 ppm
    assert abs(found.values[ALPHA] - 8.0) < 3.5 * 1.14
    assert all(
        a.criterion > b.criterion
        for a, b in zip(found.history, found.history[1:], strict=False)
        if b.action == "add"
    )


def test_the_same_seed_gives_the_same_structure():
    job, spectra = data()
    template = build_template(job, spectra, ATOMS)
    settings = SearchSettings(seed=7)
    first, second = (search_structure(template, settings) for _ in range(2))
    assert first.clouds == second.clouds
    assert [s.criterion for s in first.history] == [s.criterion for s in second.history]


def test_an_interloper_becomes_a_blend_and_not_a_component():
    # a line in the window of Fe II 2600 that no other transition has
    wavelength = ATOMS["Fe II 2600"].wavelength * 2.15085 * (1.0 + 52.0 / 299792.458)
    job, spectra = data(blend={"wavelength": wavelength, "b": 6.0, "logN": 12.3})
    found = search_structure(build_template(job, spectra, ATOMS))
    assert len(found.clouds) == 4
    assert len(found.interlopers) == 1
    line = found.interlopers[0]
    assert line.wavelength == pytest.approx(wavelength, abs=0.02)
    new = job_with_structure(job, found.clouds, found.interlopers, found.values[ALPHA])
    assert not new.searches
    assert len(new.blends) == 1
    built = build_model(new, spectra, ATOMS)  # what was found can be built and fitted as a job
    again = fit_model(built.model, FitSettings(restarts=0))
    assert again.chi2 == pytest.approx(found.minimum.chi2, abs=0.01)
    assert job_digest(new) != job_digest(job)


def test_a_search_goes_on_from_given_components():
    job, spectra = data()
    template = build_template(job, spectra, ATOMS)
    whole = search_structure(template)
    fewer = search_structure(template, clouds=whole.clouds[:2])
    assert fewer.criterion == pytest.approx(whole.criterion, abs=0.1)


def test_interrupting_keeps_the_best_until_then():
    job, spectra = data()
    steps = []

    def stop(step):
        steps.append(step)
        if step.n_components >= 3:
            raise KeyboardInterrupt

    found = search_structure(build_template(job, spectra, ATOMS), report=stop)
    assert not found.complete
    assert len(steps) >= 2


def test_criteria_are_those_of_their_papers():
    # χ² = 100, 50 data, 4 parameters
    assert CRITERIA["AIC"](100.0, 50, 4) == 108.0
    assert CRITERIA["AICc"](100.0, 50, 4) == aicc(100.0, 50, 4) == pytest.approx(108 + 40 / 45)
    assert CRITERIA["BIC"](100.0, 50, 4) == pytest.approx(100 + 4 * np.log(50))


def test_ensemble_is_the_same_with_one_and_two_workers():
    job, spectra = data()
    full = job_to_data(job)
    full["structure"] = {"ensemble": 3}
    job = build_job(full)
    one = run_ensemble(job, spectra, ATOMS, workers=1)
    two = run_ensemble(job, spectra, ATOMS, workers=2)
    assert one == two
    assert sum(member.count for member in one.members) == 3
    assert abs(one.mean - 8.0) < 3.5 * 1.14
    assert one.between < 0.5  # well separated lines: the structure hardly matters


def member(aicc_value: float, dalpha: float) -> Member:
    line = Interloper(0, 5000.0, 5.0, 12.0)
    return Member(1, "AICc", False, (), (line,), aicc_value, 0.0, 5, dalpha, 1.0)


def test_average_and_scatter_of_an_ensemble():
    # weights exp(−ΔAICc/2): 1, exp(−1), and the third is not accepted
    result = summarise_members([member(100.0, 2.0), member(102.0, 4.0), member(111.0, 50.0)])
    w = np.exp(-1.0)
    mean = (2.0 + 4.0 * w) / (1.0 + w)
    assert result.mean == pytest.approx(mean)
    assert result.between == pytest.approx(np.sqrt(((2 - mean) ** 2 + (4 - mean) ** 2) / 2))
    assert len(result.accepted) == 2
    repeated = summarise_members([member(100.0, 2.0), member(100.01, 2.001)])
    assert [m.count for m in repeated.members] == [2]
    with pytest.raises(ValueError, match="no structure search succeeded"):
        summarise_members([], ["seed 1: failed"])


def test_halves_of_a_cloud_with_one_ion_each_are_merged():
    job, spectra = data()
    template = build_template(job, spectra, ATOMS)
    whole = search_structure(template)
    *others, last = whole.clouds
    halves = [
        replace(last, velocity=last.velocity + shift, log_columns={ion: last.log_columns[ion]})
        for ion, shift in (("Fe II", -0.2), ("Mg II", 0.2))
    ]
    found = search_structure(template, clouds=[*others, *halves])
    assert len(found.clouds) == len(whole.clouds)
    assert all(len(cloud.log_columns) == 2 for cloud in found.clouds)
    assert found.criterion == pytest.approx(whole.criterion, abs=0.1)


def test_two_clouds_that_one_in_the_wrong_place_hides():
    # the components are 2.3 km/s apart behind an instrument of 5.9 km/s, and the score test puts
    # the second 11 km/s away, at an AICc 6.3 above that of the fit from the true components
    case = draw(17)
    found = search_structure(build_template(case.asked, [case.spectrum], ATOMS))
    known = final_fit(case.full, case.spectrum, 0)
    assert len(found.clouds) == len(case.full.components) == 2
    assert found.criterion <= aicc(known.chi2, known.n_data, len(known.free)) + 0.1


def test_an_ion_that_is_seen_nowhere_leaves_a_job_that_can_be_built():
    full = job_to_data(parse_job(demo_text(), "halden-a.toml", check_files=False))
    window = full["region"][0]["window"]
    full["region"].append({"transition": "Al II 1670", "window": window})
    for component in full["component"]:
        component["logN"]["Al II"] = 9.0
    job = build_job(full)
    edges = synthetic_grid(job, ATOMS, "red", 2.0)
    (s,) = simulate(job, ATOMS, [edges], Noise(100, 3), dalpha_ppm=8.0)
    spectrum = Spectrum.from_arrays(
        s.wavelength, s.flux, s.error, s.continuum, lsf=GaussianLineSpread(5.2), name="red"
    )
    full.pop("component")
    asked = build_job(full)
    found = search_structure(build_template(asked, [spectrum], ATOMS))
    assert sum("Al II" in cloud.log_columns for cloud in found.clouds) >= 1
    new = job_with_structure(asked, found.clouds, found.interlopers, found.values[ALPHA])
    build_model(new, [spectrum], ATOMS)
