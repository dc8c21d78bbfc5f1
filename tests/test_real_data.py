"""Three absorbers of a real quasar spectrum, fitted with the jobs in ``examples``.

The folder of the spectra is named by the environment variable FATHOMLINE_REAL_DATA.
Based on observations collected at the European Southern Observatory, public archive, UVES,
2010-06 (programme 185.A-0745).
"""

from __future__ import annotations

import os
import time
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from fathomline.job import parse_job
from fathomline.job.building import ALPHA
from fathomline.job.measurement import Measurement, measure
from fathomline.job.synthesis import Cloud, synthetic_transmission

FOLDER = "FATHOMLINE_REAL_DATA"
EXAMPLES = Path(__file__).parent.parent / "examples"
C_KMS = 299792.458
CASES = [
    (name, aligned)
    for name in ("he2217-z0.9424", "he2217-z1.5558", "he2217-z1.6279")
    for aligned in (False, True)
]

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(FOLDER not in os.environ, reason=f"{FOLDER} is not set"),
    pytest.mark.parametrize(
        ("name", "aligned"), CASES, ids=[f"{n}{'-aligned' * a}" for n, a in CASES]
    ),
]


def job_text(name: str, *, aligned: bool) -> str:
    """The job of an example; the aligned spectrum has the same grid and another file name."""
    text = (EXAMPLES / f"{name}.toml").read_text(encoding="utf-8")
    assert "/he2217_full.fits" in text
    return text.replace("/he2217_full.fits", "/he2217_full_aligned.fits") if aligned else text


@cache
def measured(name: str, aligned: bool) -> tuple[Measurement, float]:
    job = parse_job(job_text(name, aligned=aligned), str(EXAMPLES / f"{name}.toml"))
    start = time.perf_counter()
    result = measure(job)
    return result, time.perf_counter() - start


def clouds_of(measurement: Measurement, changed: tuple[str, float] | None = None) -> list[Cloud]:
    values = dict(measurement.fit.values)
    if changed is not None:
        values[changed[0]] += changed[1]
    return [
        Cloud(
            values[f"component[{k}].velocity"],
            {ion: values[f'component[{k}].logN["{ion}"]'] for ion in table.logN},
            b_turb=values.get(f"component[{k}].b", values.get(f"component[{k}].b_turb", 0.0)),
            temperature=values.get(f"component[{k}].temperature", 0.0),
        )
        for k, table in enumerate(measurement.job.components, start=1)
    ]


def fisher_sigma(measurement: Measurement) -> dict[str, float]:
    """1σ of α and of the components from derivatives of the independent simulator.

    Central differences of its transmission, times the fitted polynomial; the columns of the
    polynomial's own coefficients are powers of the pixel's place times the transmission.
    """
    fit, model = measurement.fit, measurement.built.model
    fitted = clouds_of(measurement)
    lines = [name for name in fit.covariance.names if name.startswith(("alpha", "component"))]
    blocks, n_polynomial = [], 0
    for segment, prediction in zip(model.segments, measurement.predictions, strict=True):
        transition = measurement.built.transitions[segment.region]
        edges = np.append(segment.edges_low, segment.edges_high[-1])
        centre = segment.centre
        velocity = C_KMS * (segment.wavelength / centre - 1.0)

        def transmission(
            pixels,
            clouds,
            dalpha,
            transition=transition,
            edges=edges,
            fwhm=fit.values[model.parameters.names[segment.fwhm]],
        ):
            # pixels without absorption by the changed cloud need no simulation
            first, last = pixels
            return synthetic_transmission(
                edges[first : last + 1],
                [transition],
                clouds,
                redshift=measurement.job.absorber.redshift,
                fwhm=fwhm,
                dalpha_ppm=dalpha,
            )

        everywhere = (0, segment.wavelength.size)
        alpha = fit.values[ALPHA]
        columns = np.zeros((segment.wavelength.size, len(lines)))
        for i, name in enumerate(lines):
            if name == ALPHA:
                step, pixels = 2.0, everywhere
                above = transmission(pixels, fitted, alpha + step)
                below = transmission(pixels, fitted, alpha - step)
            else:
                k = int(name[len("component[") : name.index("]")]) - 1
                ion = transition.ion
                if ion not in fitted[k].log_columns or ('"' in name and f'"{ion}"' not in name):
                    continue
                # dex for a column density, K for a temperature, km/s for the others
                step = 0.01 if "logN" in name else 100.0 if "temperature" in name else 0.02
                reach = 20.0 + 4e-3 * fitted[k].width(transition.mass)
                place = fitted[k].velocity
                first, last = np.searchsorted(velocity, [place - reach, place + reach])
                pixels = int(first), int(last)
                if last - first < 2:
                    continue
                above = transmission(pixels, clouds_of(measurement, (name, step)), alpha)
                below = transmission(pixels, clouds_of(measurement, (name, -step)), alpha)
            columns[slice(*pixels), i] = (above - below) / (2.0 * step)
        columns *= prediction.continuum[:, None]
        powers = np.vander(velocity / 100.0, len(segment.continuum), increasing=True)
        own = powers * transmission(everywhere, fitted, alpha)[:, None]
        good = segment.good
        blocks.append(
            (columns[good] / segment.error[good, None], own[good] / segment.error[good, None])
        )
        n_polynomial += own.shape[1]
    size = len(lines)
    fisher = np.zeros((size + n_polynomial, size + n_polynomial))
    place = size
    for shared, own in blocks:
        used = np.r_[0:size, place : place + own.shape[1]]
        place += own.shape[1]
        jacobian = np.hstack([shared, own])
        fisher[np.ix_(used, used)] += jacobian.T @ jacobian
    scale = 1.0 / np.sqrt(np.diag(fisher))
    covariance = np.linalg.inv(fisher * np.outer(scale, scale)) * np.outer(scale, scale)
    return dict(zip(lines, np.sqrt(np.diag(covariance)), strict=False))


def test_measurement(name, aligned):
    result, seconds = measured(name, aligned)
    fit = result.fit
    print(
        f"\n{name}{' aligned' * aligned}: Δα/α = {result.dalpha:+.2f} ± {result.stat:.2f} ppm, "
        f"χ²/ν {fit.chi2_nu:.3f} (ν = {fit.ndof}), {len(result.job.components)} components, "
        f"{fit.n_free} free, {seconds:.1f} s, flags {list(result.flags)}"
    )
    assert fit.converged
    assert fit.flags == ()
    assert len(fit.restarts) >= 4
    assert all(restart.returned for restart in fit.restarts)
    assert fit.chi2_nu < 1.3
    # no line is narrower than cold iron or wider than the groups of lines
    widths = [cloud.width(55.845) / 1e3 for cloud in clouds_of(result)]
    assert min(widths) > 1.0
    assert max(widths) < 25.0


def test_errors_are_those_of_an_independent_fisher_matrix(name, aligned):
    result, _ = measured(name, aligned)
    expected = fisher_sigma(result)
    assert result.stat == pytest.approx(expected[ALPHA], rel=0.02)
    for parameter, sigma in expected.items():
        assert result.fit.sigma(parameter) == pytest.approx(sigma, rel=0.02), parameter


def test_residuals_have_no_structure(name, aligned):
    result, _ = measured(name, aligned)
    velocity, residual = [], []
    for segment, prediction in zip(result.built.model.segments, result.predictions, strict=True):
        centre = segment.centre
        good = segment.good
        r = prediction.residual
        velocity.append(C_KMS * (segment.wavelength / centre - 1.0)[good])
        residual.append(r[good])
        # the reduction correlates neighbouring pixels by +0.10 to +0.17
        pairs = good[1:] & good[:-1]
        lag1 = np.mean(r[1:][pairs] * r[:-1][pairs]) / np.mean(r[good] ** 2)
        assert lag1 < 0.3, segment.name
    bins = np.floor(np.concatenate(velocity) / 10.0)
    residual = np.concatenate(residual)
    for b in np.unique(bins):
        inside = residual[bins == b]
        # the mean of n independent normalised residuals has an error of 1/√n
        assert abs(inside.mean()) * np.sqrt(inside.size) < 4.0, f"{10 * b:.0f} km/s"


def test_lmfit_gives_the_same_answer(name, aligned):
    """The second solver on one real absorber: the same Δα/α to 0.01 σ."""
    if (name, aligned) != ("he2217-z1.6279", False):
        pytest.skip("one absorber is enough for the slower solver")
    first, _ = measured(name, aligned)
    text = job_text(name, aligned=aligned) + '\n[fit]\nsolver = "lmfit"\nrestarts = 0\n'
    second = measure(parse_job(text, str(EXAMPLES / f"{name}.toml")))
    difference = (second.dalpha - first.dalpha) / first.stat
    print(f"lmfit − default: {difference:+.1e} σ, χ² {second.fit.chi2 - first.fit.chi2:+.1e}")
    assert abs(difference) < 0.01
    assert second.stat == pytest.approx(first.stat, rel=0.01)
