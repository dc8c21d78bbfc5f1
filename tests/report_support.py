"""A small invented measurement for the tests of the report."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

from fathomline.job import parse_job, read_job
from fathomline.job.inputs import load_atoms
from fathomline.job.measurement import Measurement, measure
from fathomline.job.simulation import Noise, simulate, synthetic_grid
from fathomline.spectra import write_spectrum

TRANSITIONS = ("Fe II 2374", "Fe II 2382", "Fe II 2600", "Mg II 2796", "Mg II 2803")
VELOCITIES = (-25.0, -21.0, -17.5, 3.0, 5.5, 22.0)


def job_text(transitions=TRANSITIONS, restarts: int = 1) -> str:
    lines = [
        "schema = 1",
        '[absorber]\nname = "Test z1.15"\nredshift = 1.15\nra = 12.5\ndec = -3.25',
        '[[spectrum]]\nid = "one"\nfile = "one.fits"\nresolution = { fwhm = 5.2 }',
        '[[spectrum]]\nid = "two"\nfile = "two.fits"\nresolution = { fwhm = 6.0 }',
    ]
    for i, transition in enumerate(transitions):
        lines.append(f'[[region]]\ntransition = "{transition}"\nwindow = [-60.0, 55.0]')
        lines.append('spectra = ["one", "two"]' if i == 1 else 'spectra = ["one"]')
        if i == 2:
            lines.append("exclude = [[-50.0, -42.5]]")
    for k, velocity in enumerate(VELOCITIES):
        width = "{ value = 4.0, fixed = true }" if k == 1 else "4.0"
        if k == 2:
            width = '{ same_as = "component[1].b" }'
        lines.append(
            f"[[component]]\nvelocity = {velocity}\nb = {width}\n"
            'logN = { "Fe II" = 12.4, "Mg II" = 12.2 }'
        )
    return "\n".join([*lines, f"[fit]\nrestarts = {restarts}\n"])


@cache
def _measured(folder: Path, restarts: int) -> Measurement:
    text = job_text(restarts=restarts)
    job = parse_job(text, folder / "test.toml", check_files=False)
    atoms = load_atoms(job)
    edges = [synthetic_grid(job, atoms, name, 2.5) for name in ("one", "two")]
    for spectrum in simulate(job, atoms, edges, Noise(60.0, 5), dalpha_ppm=2.0):
        write_spectrum(spectrum, folder / f"{spectrum.name}.fits", comment="invented")
    (folder / "test.toml").write_text(text, encoding="utf-8")
    return measure(read_job(folder / "test.toml"))


def small_measurement(folder: Path, restarts: int = 1) -> Measurement:
    """Five transitions, one of them in two spectra; crowded components, one excluded range."""
    return _measured(folder, restarts)


def renamed(measurement: Measurement, name: str) -> Measurement:
    """The same measurement of an absorber of another name."""
    job = measurement.job
    absorber = job.absorber.model_copy(update={"name": name})
    built = replace(measurement.built, job=job.model_copy(update={"absorber": absorber}))
    return replace(measurement, built=built)
