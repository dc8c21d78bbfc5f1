"""``fathomline simulate``: synthetic spectra of a job's model."""

from __future__ import annotations

from pathlib import Path

import click

__all__ = ["simulate"]

_EPILOG = """\b
Example:
  fathomline simulate halden-a.toml -o synthetic --snr 80 --dalpha 8 --seed 3
  fathomline measure synthetic/halden-a.toml
"""


@click.command(epilog=_EPILOG)
@click.argument("job_file", metavar="JOB", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    metavar="FOLDER",
    required=True,
    type=click.Path(path_type=Path),
    help="Folder for the spectra and the job that fits them; must not hold such files.",
)
@click.option(
    "--snr",
    type=click.FloatRange(min=0.0, min_open=True),
    default=100.0,
    show_default=True,
    help="Signal-to-noise ratio per pixel; inf for no noise.",
)
@click.option(
    "--pixel",
    type=click.FloatRange(min=0.05, max=50.0),
    default=2.0,
    show_default=True,
    help="Pixel size, km/s, where the job's spectrum does not exist.",
)
@click.option("--dalpha", type=float, help="Δα/α, ppm; default: the start value of the job.")
@click.option(
    "--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Seed of the noise."
)
def simulate(
    job_file: Path, output: Path, snr: float, pixel: float, dalpha: float | None, seed: int
) -> int:
    """Write synthetic spectra of the model of JOB, with noise, and a copy of the job.

    Components are taken at their start values. Where the job's spectrum exists its pixels are
    used, else log-linear pixels over the regions. The spectra do not come from the code that fits
    them: they test it.
    """
    from fathomline.job import read_job
    from fathomline.job.simulation import Noise, simulate_to_folder

    job = read_job(job_file, check_files=False)
    noise = Noise(snr=snr, seed=seed)
    for path in simulate_to_folder(
        job, job_file.name, output, noise, pixel=pixel, dalpha_ppm=dalpha
    ):
        print(path)
    return 0
