"""Ratios of times in one run: evaluation, whole fit, growth, memory, cold start.

Absolute times are not worth printing: machines differ, and this one may be busy. Every ratio is of
the best of several repetitions of both sides, measured in turn.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import argparse
import shutil
import subprocess
import sys
import time
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import numpy as np
from scipy.special import wofz

from benchmarks import absorbers, general_route
from fathomline.fit import FitSettings, fit_model
from fathomline.job.building import ALPHA, BuiltModel


def best(action: Callable[[], object], repeats: int = 7, at_least: float = 0.02) -> float:
    """Shortest time of one call, s; each repetition lasts at least `at_least` seconds."""
    action()
    start = time.perf_counter()
    action()
    once = max(time.perf_counter() - start, 1e-6)
    calls = max(1, int(at_least / once))
    shortest = np.inf
    for _ in range(repeats):
        start = time.perf_counter()
        for _ in range(calls):
            action()
        shortest = min(shortest, (time.perf_counter() - start) / calls)
    return float(shortest)


def points(built: BuiltModel) -> np.ndarray:
    """u + i a of every line at every fine-grid point of its region: what must be evaluated."""
    rows = []
    model = built.model
    for segment, grid in zip(model.segments, model.grids, strict=True):
        wave = 1.0 / grid.inverse
        for component in built.job.components:
            b = component.b.value
            s = (1 + built.job.absorber.redshift) * (1 + component.velocity.value / 299792.458)
            for _, lines in segment.lines:
                for rest in lines.rest:
                    a = lines.gamma * rest * 1e-13 / (4 * np.pi * b)
                    rows.append(299792.458 / b * (rest * s / wave - 1.0) + 1j * a)
    return np.concatenate(rows)


def evaluation() -> list[tuple[str, str]]:
    """(a) Value and full Jacobian against `wofz` alone on the same points."""
    out = []
    for n_components, n_transitions in ((4, 7), (15, 8)):
        built = absorbers.built(n_components, n_transitions)
        model, start = built.model, built.model.parameters.start
        z = points(built)
        ours, theirs = [], []
        for _ in range(3):  # in turn, so that other work on the machine hits both
            ours.append(best(lambda m=model, x=start: m.residuals_and_jacobian(x), repeats=3))
            theirs.append(best(lambda z=z: wofz(z), repeats=3))
        out.append(
            (
                f"(a) value + Jacobian over wofz alone, {n_components} × {n_transitions}",
                f"{min(ours) / min(theirs):.2f}  ({z.size} points)",
            )
        )
    return out


def whole_fit(cases: tuple[tuple[int, int], ...]) -> list[tuple[str, str]]:
    """(b) Whole fit against the general route, from the same start."""
    out = []
    for n_components, n_transitions in cases:
        built = absorbers.built(n_components, n_transitions)
        settings = FitSettings(restarts=0)
        ours = best(lambda b=built, s=settings: fit_model(b.model, s), repeats=5)
        result = fit_model(built.model, settings)
        start = time.perf_counter()
        value, error, evaluations = general_route.fit(built)
        theirs = time.perf_counter() - start
        sigma = result.sigma(ALPHA)
        shift = (value - result.values[ALPHA]) / sigma
        out.append(
            (
                f"(b) general route over ours, whole fit, {n_components} × {n_transitions}",
                f"{theirs / ours:.0f}  (Δα/α differs by {shift:+.4f} σ, "
                f"σ by {100 * (error / sigma - 1):+.2f} %, {evaluations} against "
                f"{result.n_evaluations} evaluations)",
            )
        )
    return out


def _exponent(sizes: list[float], times: list[float]) -> float:
    return float(np.polyfit(np.log(sizes), np.log(times), 1)[0])


def growth() -> list[tuple[str, str]]:
    """(c) Growth of one evaluation with components (and so pixels), transitions and pixels."""
    out = []
    work, whole = [], []
    counts = [5, 10, 20, 40, 80]
    for n in counts:
        built = absorbers.built(n, 6)
        model, start = built.model, built.model.parameters.start
        theta = model.parameters.expand(start)
        work.append(n * built.model.n_data)
        whole.append(
            (
                best(lambda m=model, t=theta: m.line_rows(t, derivatives=True), repeats=5),
                best(lambda m=model, x=start: m.residuals_and_jacobian(x), repeats=5),
            )
        )
    lines, total = zip(*whole, strict=True)
    share = ", ".join(f"{1 - a / b:.0%}" for a, b in whole)
    out.append(
        (
            "(c) exponent in components × pixels, lines alone; whole evaluation",
            f"{_exponent(work, list(lines)):.2f}; {_exponent(work, list(total)):.2f}  "
            f"(5 to 80 components; share of sums and instrument: {share})",
        )
    )
    times = []
    transitions = [2, 4, 8]
    for n in transitions:
        model = absorbers.built(10, n).model
        times.append(best(lambda m=model: m.residuals_and_jacobian(m.parameters.start), repeats=5))
    out.append(("(c) exponent in transitions", f"{_exponent(transitions, times):.2f}"))
    times, pixels = [], []
    for pixel in (2.0, 1.0, 0.5):
        model = absorbers.built(10, 6, pixel=pixel).model
        pixels.append(model.n_data)
        times.append(best(lambda m=model: m.residuals_and_jacobian(m.parameters.start), repeats=5))
    out.append(("(c) exponent in pixels at one resolution", f"{_exponent(pixels, times):.2f}"))
    return out


def memory() -> list[tuple[str, str]]:
    """(d) Peak memory of a large joint fit."""
    tracemalloc.start()
    built = absorbers.built(40, 10, n_spectra=5)
    tracemalloc.reset_peak()
    built.model.residuals_and_jacobian(built.model.parameters.start)
    fit_model(built.model, FitSettings(restarts=0, max_iterations=2))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return [("(d) peak memory, 40 components × 10 transitions × 5 spectra", f"{peak / 1e9:.2f} GB")]


def cold_start() -> list[tuple[str, str]]:
    """(e) Start of commands against bare Python."""

    def run(*arguments: str) -> Callable[[], object]:
        return lambda: subprocess.run(arguments, check=True, capture_output=True)

    script = shutil.which("fathomline", path=str(Path(sys.executable).parent))
    if script is None:
        return [("(e) cold start", "skipped: the command is not installed beside this Python")]
    commands = {"--help": run(script, "--help"), "lines": run(script, "lines")}
    bare = run(sys.executable, "-c", "pass")
    out = []
    for name, command in commands.items():
        pairs = [(best(command, 3), best(bare, 3)) for _ in range(3)]
        ratio = min(a for a, _ in pairs) / min(b for _, b in pairs)
        out.append((f"(e) fathomline {name} over python -c pass", f"{ratio:.1f}"))
    return out


def main() -> None:
    """Print the table; ``--quick`` leaves out the slow general route for 15 components."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="leave out the slowest comparison")
    quick = parser.parse_args().quick
    rows: list[tuple[str, str]] = []
    for part in (
        evaluation,
        lambda: whole_fit(((4, 7),) if quick else ((4, 7), (15, 8))),
        growth,
        memory,
        cold_start,
    ):
        for name, value in part():
            rows.append((name, value))
            print(f"{name:<75} {value}", flush=True)


if __name__ == "__main__":
    main()
