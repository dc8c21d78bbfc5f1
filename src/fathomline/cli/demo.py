"""``fathomline demo``: the quickest real run, on an invented absorber."""

from __future__ import annotations

from pathlib import Path

import click

__all__ = ["demo"]

_EPILOG = """\b
Example:
  fathomline demo halden-a
"""


@click.command(epilog=_EPILOG)
@click.argument("folder", type=click.Path(path_type=Path, file_okay=False), default="halden-a")
def demo(folder: Path) -> int:
    """Write an invented absorber to FOLDER (spectrum and job file) and measure it.

    The spectrum is simulated with Δα/α = +4 ppm, by code that the fit does not share.
    """
    from fathomline.cli.measure import run_job
    from fathomline.job.demo import DEMO_DALPHA, write_demo

    job_file = write_demo(folder)
    print(f"job: {job_file}")
    code = run_job(job_file, None)
    print(f"simulated with Δα/α = {DEMO_DALPHA:g} ppm")
    return code
