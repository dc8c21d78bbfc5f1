"""The built-in demo: an invented absorber, simulated and written with its job file."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

from fathomline.errors import ResultError
from fathomline.job.inputs import load_atoms
from fathomline.job.reading import parse_job
from fathomline.job.simulation import Noise, simulate, synthetic_grid
from fathomline.job.synthesis import Cloud
from fathomline.spectra import write_spectrum

__all__ = ["DEMO_DALPHA", "DEMO_NOISE", "demo_clouds", "demo_text", "write_demo"]

DEMO_DALPHA = 4.0
"""Δα/α of the demo spectrum, ppm."""

DEMO_NOISE = Noise(snr=100.0, seed=11508)

_PIXEL_KMS = 2.0


def demo_text() -> str:
    """The demo's job file. Its start values are rounded guesses, not the simulated truth."""
    return (files("fathomline.job") / "demo.toml").read_text(encoding="utf-8")


def demo_clouds() -> list[Cloud]:
    """The clouds that the demo spectrum is made of."""
    rows = [
        (-41.27, 4.63, 12.752, 12.447),
        (-22.54, 3.38, 13.061, 12.803),
        (4.11, 5.12, 12.598, 12.391),
        (20.86, 3.94, 12.903, 12.612),
    ]
    return [Cloud(v, {"Fe II": fe, "Mg II": mg}, b_turb=b) for v, b, fe, mg in rows]


def write_demo(folder: Path) -> Path:
    """Write spectrum and job file to a folder and return the job file.

    Raises
    ------
    ResultError
        The folder cannot be made, or holds another job of that name.

    """
    job_file, text = folder / "halden-a.toml", demo_text()
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if job_file.exists() and job_file.read_text(encoding="utf-8") != text:
            raise ResultError(
                f"{job_file}: has been changed, so the demo leaves it alone; name another folder, "
                f"or measure it with: fathomline measure {job_file}"
            )
        job = parse_job(text, job_file, check_files=False)
        atoms = load_atoms(job)
        table = job.spectra[0]
        edges = synthetic_grid(job, atoms, table.id, _PIXEL_KMS)
        (spectrum,) = simulate(
            job, atoms, [edges], DEMO_NOISE, dalpha_ppm=DEMO_DALPHA, clouds=demo_clouds()
        )
        write_spectrum(spectrum, folder / table.file, comment="invented: made by fathomline demo")
        job_file.write_text(text, encoding="utf-8")
    except OSError as error:
        raise ResultError(f"{folder}: cannot be written: {error.strerror or error}") from error
    return job_file
