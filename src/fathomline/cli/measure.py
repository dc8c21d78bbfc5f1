"""``fathomline measure``: the main job."""

from __future__ import annotations

import json
import shlex
import sys
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from fathomline.job.measurement import Measurement

__all__ = ["measure", "run_job"]

_NOT_TRUSTWORTHY = 3

_EPILOG = """\b
Example:
  fathomline measure halden-a.toml
  fathomline measure halden-a.toml -o /tmp/second-try.result
"""


@click.command(epilog=_EPILOG)
@click.argument("jobs", metavar="JOB...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    metavar="FOLDER",
    type=click.Path(path_type=Path),
    help="Result folder; default: JOB with the ending .result.",
)
@click.option(
    "--workers",
    type=click.IntRange(min=1),
    help="Processes for an ensemble of structure searches; default: the number of cores.",
)
@click.option("--json", "as_json", is_flag=True, help="Print the rows as JSON.")
def measure(jobs: tuple[Path, ...], output: Path | None, workers: int | None, as_json: bool) -> int:
    """Fit each JOB and write its result folder: tables, model, figures, report.

    Exits with 3 when a result is flagged as not trustworthy.
    """
    if output is not None and len(jobs) > 1:
        raise click.UsageError("-o names one folder, but several jobs are given")
    codes = [run_job(job, output, workers=workers, as_json=as_json) for job in jobs]
    return max(codes)


def run_job(
    job_file: Path,
    output: Path | None,
    *,
    workers: int | None = None,
    as_json: bool = False,
) -> int:
    """Measure one job, write its result, print its row, and return the exit code."""
    from fathomline.cli.console import progress
    from fathomline.job import read_job
    from fathomline.job.measurement import measure as measure_job
    from fathomline.report import check_target, default_folder, write_result

    folder = output or default_folder(job_file)
    job = read_job(job_file)
    check_target(folder)
    command = f"fathomline measure {shlex.quote(job_file.name)}"
    with progress(job.absorber.name) as tell:
        measurement = measure_job(job, progress=tell, workers=workers)
        tell("writing tables, figures and report", None)
        write_result(measurement, folder, command=command)
    _print_row(measurement, folder, as_json=as_json)
    return 0 if measurement.trustworthy else _NOT_TRUSTWORTHY


def _print_row(measurement: Measurement, folder: Path, *, as_json: bool) -> None:
    from fathomline.cli.console import print_table

    fit, absorber = measurement.fit, measurement.job.absorber
    if as_json:
        print(
            json.dumps(
                {
                    "absorber": absorber.name,
                    "z_abs": absorber.redshift,
                    "dalpha_ppm": measurement.dalpha,
                    "stat_ppm": measurement.stat,
                    "chi2_nu": fit.chi2_nu,
                    "ndof": fit.ndof,
                    "n_components": len(measurement.job.components),
                    "converged": fit.converged,
                    "flags": list(measurement.flags),
                    "result": str(folder),
                },
                ensure_ascii=False,
            )
        )
        return
    print_table(
        "",
        (
            "absorber",
            "z",
            "Δα/α (ppm)",
            "stat (ppm)",
            "χ²/ν",
            "ν",
            "components",
            "converged",
            "flags",
        ),
        [
            (
                absorber.name,
                f"{absorber.redshift:g}",
                f"{measurement.dalpha:.3f}",
                "none" if measurement.stat is None else f"{measurement.stat:.3f}",
                "none" if fit.chi2_nu is None else f"{fit.chi2_nu:.3f}",
                str(fit.ndof),
                str(len(measurement.job.components)),
                "yes" if fit.converged else "no",
                ", ".join(measurement.flags),
            )
        ],
    )
    for flag, meaning in measurement.flag_meanings().items():
        print(f"{flag}: {meaning}", file=sys.stderr)
    print(f"report: {folder / 'report.html'}")
