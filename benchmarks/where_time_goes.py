"""Where the time of a fit goes: ``python -m benchmarks.where_time_goes`` prints shares."""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import cProfile
import pstats

from benchmarks import absorbers
from fathomline.fit import FitSettings, fit_model

STEPS = {
    "Voigt function near the centres": ["voigt_core"],
    "wings": ["voigt_wing"],
    "laying out points": ["_spread"],
    "summing lines": ["_collect"],
    "all of the line table": ["evaluate"],
    "all of an evaluation": ["residuals_and_jacobian"],
    "sparse products (sums, instrument)": ["_matmul_multivector", "_matmul_vector"],
    "factorisations": ["qr", "svd", "eigh"],
    "whole fit": ["fit_model"],
}


def shares(n_components: int, n_transitions: int, repeats: int = 40) -> list[tuple[str, float]]:
    """Cumulative share of each step in the time of a fit without restarts."""
    model = absorbers.built(n_components, n_transitions).model
    settings = FitSettings(restarts=0)
    fit_model(model, settings)
    profile = cProfile.Profile()
    profile.enable()
    for _ in range(repeats):
        fit_model(model, settings)
    profile.disable()
    times: dict[str, float] = {}
    for (_, _, name), (_, _, _, cumulative, _) in pstats.Stats(profile).stats.items():
        times[name] = times.get(name, 0.0) + cumulative
    total = times["fit_model"]
    return [(step, sum(times.get(n, 0.0) for n in names) / total) for step, names in STEPS.items()]


def main() -> None:
    """Print a Markdown table."""
    sizes = ((4, 7), (15, 8), (40, 6))
    columns = [dict(shares(*size)) for size in sizes]
    print("| step | " + " | ".join(f"{a} × {b}" for a, b in sizes) + " |")
    print("| --- |" + " ---: |" * len(sizes))
    for step in STEPS:
        print(f"| {step} | " + " | ".join(f"{column[step]:.0%}" for column in columns) + " |")


if __name__ == "__main__":
    main()
