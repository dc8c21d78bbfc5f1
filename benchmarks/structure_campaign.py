"""How well the structure search recovers Δα/α in a population of invented absorbers.

    python -m benchmarks.structure_campaign [--cases N] [--ensemble M] [--blends] [--out FILE]

Spectra come from `fathomline.job.synthesis`, which shares no code with the fitted model. Each
finished case is one line of JSON in FILE; cases that are already there are not run again. The
tables of docs/structure-campaign.md are printed at the end (with --table they alone).
"""

from __future__ import annotations

import argparse
import json
import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from fathomline.atomic import load_atomic_data
from fathomline.constants import C_KMS
from fathomline.fit import Cloud, FitResult, FitSettings, Interloper, fit_model
from fathomline.fit.result import aicc
from fathomline.job import Job, build_job
from fathomline.job.building import ALPHA, build_model
from fathomline.job.ensemble import run_ensemble
from fathomline.job.simulation import Noise, simulate, synthetic_grid
from fathomline.job.structure import job_with_structure, search_job
from fathomline.spectra import GaussianLineSpread, Spectrum

ATOMS = load_atomic_data()
CASES = 60
MOST_COMPONENTS = 15
MARGIN = 60.0  # km/s of a window beyond the outermost component
SENSITIVE = (*("Fe II 2344", "Fe II 2374", "Fe II 2382", "Fe II 2586", "Fe II 2600", "Fe II 1608"),)
ANCHORS = ("Mg II 2796", "Mg II 2803", "Al II 1670", "Si II 1526")
OTHERS = ("Si II 1808",)
SHARES = {"Mg II": 0.0, "Fe II": -0.2, "Al II": -1.2, "Si II": 0.1}  # dex relative to Mg II
PIXELS_PER_FWHM = 2.5
_DEPTH = 1.497e-15  # τ at the centre of a line of b = 1 km/s, λ = 1 Å and N f = 1 cm⁻²

Row = dict[str, Any]


@dataclass(frozen=True)
class Case:
    """An invented absorber: the job that made it, the job to search, its truth and spectrum."""

    number: int
    truth: float
    snr: float
    fwhm: float
    full: Job
    asked: Job
    spectrum: Spectrum


def draw(number: int, *, blended: bool = False, ensemble: int = 0) -> Case:
    """Absorber `number` of the population."""
    rng = np.random.default_rng([2718, number])
    count = int(math.exp(rng.uniform(0.0, math.log(MOST_COMPONENTS + 1))))
    snr = math.exp(rng.uniform(math.log(30.0), math.log(200.0)))
    fwhm = C_KMS / rng.uniform(45_000.0, 140_000.0)
    redshift = round(rng.uniform(1.0, 1.9), 5)
    truth = rng.uniform(-30.0, 30.0)
    lines = [str(rng.choice(SENSITIVE)), str(rng.choice(ANCHORS))]
    rest = [t for t in (*SENSITIVE, *ANCHORS, *OTHERS) if t not in lines]
    lines += [str(t) for t in rng.permutation(rest)[: rng.integers(1, 7)]]
    ions = dict.fromkeys(line.rpartition(" ")[0] for line in lines)
    gaps = rng.exponential(9.0, count - 1) + 1.5
    places = np.concatenate([[0.0], np.cumsum(gaps)])
    places -= places.mean()
    share = {ion: SHARES[ion] + 0.2 * rng.standard_normal() for ion in SHARES}
    strength = np.clip(rng.normal(12.7, 0.5, count), 11.7, 14.2)
    strength[strength.argmax()] = max(strength.max(), 12.7)  # nothing is measured in faint ones
    components = []
    for velocity, column in zip(places, strength, strict=True):
        scatter = {ion: 0.2 * rng.standard_normal() for ion in SHARES}
        components.append(
            {
                "velocity": round(float(velocity), 3),
                "b": round(float(rng.uniform(1.5, 9.0)), 3),
                "logN": {ion: round(float(column + share[ion] + scatter[ion]), 3) for ion in ions},
            }
        )
    window = [round(float(places[0] - MARGIN), 1), round(float(places[-1] + MARGIN), 1)]
    data: Row = {
        "schema": 1,
        "absorber": {"name": f"invented {number}", "redshift": redshift},
        "spectrum": [{"id": "one", "file": "x.fits", "resolution": {"fwhm": round(fwhm, 4)}}],
        "region": [{"transition": line, "window": window} for line in lines],
    }
    blends: Row = {}
    if blended:
        line, place = str(rng.choice(lines)), rng.uniform(places[0] - 8.0, places[-1] + 8.0)
        wavelength = ATOMS[line].wavelength * (1.0 + redshift) * (1.0 + place / C_KMS)
        b, depth = rng.uniform(4.0, 12.0), math.exp(rng.uniform(math.log(0.05), math.log(0.5)))
        column = math.log10(depth * b / (_DEPTH * wavelength))
        blends = {"blend": [{"wavelength": wavelength, "b": b, "logN": column}]}
    full = build_job({**data, "component": components, **blends})
    asked = build_job({**data, "structure": {"search": True, "ensemble": ensemble}})
    edges = synthetic_grid(full, ATOMS, "one", fwhm / PIXELS_PER_FWHM)
    (made,) = simulate(full, ATOMS, [edges], Noise(snr, 1000 + number), dalpha_ppm=truth)
    spectrum = Spectrum.from_arrays(
        made.wavelength,
        made.flux,
        made.error,
        made.continuum,
        lsf=GaussianLineSpread(round(fwhm, 4)),
        name="one",
    )
    return Case(number, truth, snr, fwhm, full, asked, spectrum)


def final_fit(job: Job, spectrum: Spectrum, restarts: int) -> FitResult:
    """The fit of given components, on a grid that is fine enough for its outcome."""
    model, start = build_model(job, [spectrum], ATOMS).model, None
    for _ in range(4):
        fit = fit_model(model, FitSettings(restarts=0), start=start)
        finer = model.resampled(fit.free, refine=1.0)
        start = fit.free
        if finer is None:
            break
        model = finer
    return fit_model(model, FitSettings(restarts=restarts), start=start) if restarts else fit


def summary(fit: FitResult) -> Row:
    """Numbers of a fit."""
    n = fit.n_data + fit.n_priors
    return {
        "dalpha": fit.values[ALPHA],
        "stat": fit.sigma(ALPHA),
        "chi2": fit.chi2,
        "free": len(fit.free),
        "data": n,
        "chi2_nu": fit.chi2 / max(n - len(fit.free), 1),
        "aicc": aicc(fit.chi2, n, len(fit.free)),
        "flags": list(fit.flags),
    }


def fitted_structure(
    case: Case, clouds: Sequence[Cloud], lines: Sequence[Interloper], dalpha: float
) -> Row:
    """Final fit of a structure that was found."""
    row = summary(
        final_fit(job_with_structure(case.asked, clouds, lines, dalpha), case.spectrum, 4)
    )
    row["n"], row["interlopers"] = len(clouds), len(lines)
    row["clouds"] = [
        [c.velocity, c.b, c.log_columns, c.temperature]
        for c in sorted(clouds, key=lambda c: c.velocity)
    ]
    row["lines"] = [[line.segment, line.wavelength, line.b, line.log_strength] for line in lines]
    return row


def run(number: int, ensemble: int, blended: bool) -> Row:
    """Search, ensemble and final fits of one absorber, and the fit that knows the structure."""
    case = draw(number, blended=blended, ensemble=ensemble)
    began = time.perf_counter()
    row: Row = {
        "case": number,
        "ensemble": ensemble,
        "blended": blended,
        "truth": case.truth,
        "snr": case.snr,
        "fwhm": case.fwhm,
        "regions": [region.transition for region in case.full.regions],
        "true_n": len(case.full.components),
    }
    if ensemble:
        many = run_ensemble(case.asked, [case.spectrum], ATOMS, workers=1)
        best = many.members[0]
        row["many"] = fitted_structure(case, best.clouds, best.interlopers, best.dalpha)
        row["many"].update(
            thermal=best.thermal,
            mean=many.mean,
            between=many.between,
            accepted=len(many.accepted),
            failures=list(many.failures),
            members=[
                [m.aicc, m.dalpha, m.stat, len(m.clouds), len(m.interlopers), m.thermal, m.count]
                for m in many.members
            ],
        )
        # the first search of an ensemble is the plain one
        plain = [m for m in many.members if m.seed == 0 and not m.thermal] or [best]
        clouds, lines, dalpha = plain[0].clouds, plain[0].interlopers, plain[0].dalpha
    else:
        found = search_job(case.asked, [case.spectrum], ATOMS)
        clouds, lines, dalpha = found.clouds, found.interlopers, found.values[ALPHA]
    row["search"] = fitted_structure(case, clouds, lines, dalpha)
    row["seconds"] = time.perf_counter() - began
    row["known"] = summary(final_fit(case.full, case.spectrum, 0))
    return row


# -- tables ---------------------------------------------------------------------------------


def pull(row: Row, key: str, *, between: bool = False) -> float:
    """(Δα/α − truth) over the statistical error, or over that and the between-model σ."""
    result = row[key]
    sigma = result["stat"]
    if sigma is None:
        return math.nan
    if between:
        sigma = math.hypot(sigma, result["between"])
    return float((result["dalpha"] - row["truth"]) / sigma)


def _line(title: str, pulls: Sequence[float]) -> str:
    values = np.array([p for p in pulls if math.isfinite(p)])
    width = values.std(ddof=1)
    robust = 1.4826 * np.median(np.abs(values - np.median(values)))
    return (
        f"| {title} | {values.size} | {values.mean():+.2f} ± {width / values.size**0.5:.2f} "
        f"| {width:.2f} | {robust:.2f} | {np.abs(values).max():.1f} "
        f"| {int((np.abs(values) > 3.0).sum())} |"
    )


def overview(rows: Sequence[Row]) -> str:
    """Pulls of Δα/α over the population."""
    out = [
        "| result | cases | mean pull | width | width from the median | largest | beyond 3 |",
        "|---|---|---|---|---|---|---|",
        _line("true components given, stat", [pull(r, "known") for r in rows]),
        _line("one search, stat", [pull(r, "search") for r in rows]),
    ]
    many = [r for r in rows if "many" in r]
    if len(many) > 1:
        out += [
            _line("best of ensemble, stat", [pull(r, "many") for r in many]),
            _line(
                "best of ensemble, stat and between models",
                [pull(r, "many", between=True) for r in many],
            ),
        ]
    return "\n".join(out)


def listing(rows: Sequence[Row]) -> str:
    """One line for each case."""
    out = [
        "| case | transitions | S/N | FWHM, km/s | components true, found | Δα/α true "
        "| Δα/α ± stat ± between models, ppm | pull | χ²/ν | AICc − AICc of true components "
        "| s |",
        "|---|---|---|---|---|---|---|---|---|---|---|",
    ]
    for r in sorted(rows, key=lambda r: r["case"]):
        key = "many" if "many" in r else "search"
        best = r[key]
        lines = f" + {best['interlopers']} blend" if best["interlopers"] else ""
        between = f" ± {best['between']:.2f}" if key == "many" else ""
        stat = "—" if best["stat"] is None else f"{best['stat']:.2f}"
        out.append(
            f"| {r['case']} | {len(r['regions'])} | {r['snr']:.0f} | {r['fwhm']:.1f} "
            f"| {r['true_n']}, {best['n']}{lines} | {r['truth']:+.2f} "
            f"| {best['dalpha']:+.2f} ± {stat}{between} "
            f"| {pull(r, key, between=key == 'many'):+.2f} | {best['chi2_nu']:.3f} "
            f"| {best['aicc'] - r['known']['aicc']:+.1f} | {r['seconds']:.0f} |"
        )
    return "\n".join(out)


def _rows(out: Path) -> list[Row]:
    text = out.read_text(encoding="utf-8") if out.exists() else ""
    return [json.loads(line) for line in text.splitlines() if line]


def campaign(
    numbers: Sequence[int], ensemble: int, blended: bool, out: Path, tell: Callable[[str], None]
) -> list[Row]:
    """Run what is not yet in `out`; return all."""
    rows = _rows(out)
    done = {row["case"] for row in rows}
    for number in numbers:
        if number in done:
            continue
        try:
            row = run(number, ensemble, blended)
        except Exception as error:  # told, so that one failure does not end the others
            row = {"case": number, "failure": f"{type(error).__name__}: {error}"}
        with out.open("a", encoding="utf-8") as file:
            file.write(json.dumps(row) + "\n")
        rows.append(row)
        if "failure" in row:
            tell(f"{number}: {row['failure']}")
            continue
        best = row["search"]
        tell(
            f"{number}: {row['true_n']} true, {best['n']} + {best['interlopers']} found, "
            f"pull {pull(row, 'search'):+.2f} (known {pull(row, 'known'):+.2f}), "
            f"chi2/nu {best['chi2_nu']:.3f}, AICc {best['aicc'] - row['known']['aicc']:+.1f}, "
            f"{row['seconds']:.0f} s {' '.join(best['flags'])}"
        )
    return rows


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--cases", type=int, default=CASES)
    parser.add_argument("--only", type=int, nargs="*", help="these cases and no others")
    parser.add_argument("--ensemble", type=int, default=0)
    parser.add_argument("--blends", action="store_true", help="a blend in every third case")
    parser.add_argument("--out", type=Path, default=Path("structure-campaign.jsonl"))
    parser.add_argument("--table", action="store_true", help="no runs, tables only")
    options = parser.parse_args()
    numbers = options.only if options.only else range(0, options.cases, 3 if options.blends else 1)
    if options.table:
        rows = _rows(options.out)
    else:
        rows = campaign(
            list(numbers),
            options.ensemble,
            options.blends,
            options.out,
            lambda text: print(text, flush=True),
        )
    for row in rows:
        if "failure" in row:
            print(f"case {row['case']} failed: {row['failure']}")
    good = [row for row in rows if "failure" not in row]
    print(overview(good), listing(good), sep="\n\n")


if __name__ == "__main__":
    main()
