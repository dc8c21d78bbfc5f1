"""Write the result folder of a measurement, whole or not at all.

Everything is written to a hidden folder beside the target, which then takes the target's name; a
result that was there before is kept until that moment and comes back if anything fails.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from fathomline.errors import ResultError
from fathomline.job import write_job
from fathomline.job.ensemble import Ensemble
from fathomline.job.measurement import Measurement
from fathomline.job.structure import job_with_structure
from fathomline.report.figures import save_figures
from fathomline.report.page import render_report
from fathomline.report.tables import (
    budget_table,
    components_table,
    covariance_table,
    measurement_table,
    models_table,
    transitions_table,
)

__all__ = ["RESULT_FILES", "check_target", "default_folder", "write_result"]

RESULT_FILES = (
    "measurement.ecsv",
    "budget.ecsv",
    "components.ecsv",
    "transitions.ecsv",
    "covariance.ecsv",
    "model.fits",
    "report.html",
    "job.toml",
    "run.json",
)
"""Files of a result folder, besides ``figures/``."""


def default_folder(job_file: Path) -> Path:
    """``halden.toml`` → ``halden.result`` beside it."""
    return job_file.with_suffix(".result")


def check_target(folder: Path) -> None:
    """Refuse a target that is there but is not a result folder, before any work is done.

    Raises
    ------
    ResultError
        The message says what is in the way.

    """
    if folder.exists() and not folder.is_dir():
        raise ResultError(f"{folder}: is a file; name another folder with -o")
    if folder.is_dir() and any(folder.iterdir()) and not (folder / "run.json").is_file():
        raise ResultError(
            f"{folder}: is not empty and not a result folder (no run.json), so it is left alone; "
            "name another folder with -o"
        )
    if not folder.parent.is_dir():
        raise ResultError(f"{folder.parent}: no such folder; create it first")


@contextmanager
def _replacing(folder: Path) -> Iterator[Path]:
    """A new empty folder that takes the place of `folder` when the block ends without error."""
    fresh = folder.with_name(f".{folder.name}.{os.getpid()}.part")
    old = folder.with_name(f".{folder.name}.{os.getpid()}.old")
    try:
        shutil.rmtree(fresh, ignore_errors=True)
        fresh.mkdir()
        yield fresh
        if folder.exists():
            folder.rename(old)
        try:
            fresh.rename(folder)
        except OSError:
            if old.exists():
                old.rename(folder)
            raise
        shutil.rmtree(old, ignore_errors=True)
    except OSError as error:
        raise ResultError(
            f"{folder}: the result cannot be written: {error.strerror or error}; "
            "what was there before is unchanged"
        ) from error
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


def write_result(measurement: Measurement, folder: Path, *, command: str = "") -> None:
    """Write all tables, the model, figures and the report.

    Parameters
    ----------
    measurement : Measurement
    folder : Path
        Replaced if it holds an earlier result.
    command : str
        The command that repeats the run, for the report.

    Raises
    ------
    ResultError
        The folder cannot be written; what was there before is unchanged.

    """
    check_target(folder)
    with _replacing(folder) as fresh:
        tables = {
            "measurement": measurement_table(measurement),
            "budget": budget_table(measurement),
            "components": components_table(measurement),
            "transitions": transitions_table(measurement),
            "covariance": covariance_table(measurement),
        }
        for name, table in tables.items():
            table.write(fresh / f"{name}.ecsv", format="ascii.ecsv", delimiter=",")
        if measurement.ensemble is not None:
            _write_models(measurement, measurement.ensemble, fresh)
        _write_model(measurement, fresh / "model.fits")
        write_job(measurement.job, fresh / "job.toml")
        figures = fresh / "figures"
        figures.mkdir()
        save_figures(measurement, figures)
        (fresh / "report.html").write_text(
            render_report(measurement, command=command), encoding="utf-8"
        )
        provenance = {**measurement.provenance(), "command": command}
        (fresh / "run.json").write_text(
            json.dumps(provenance, indent=2, ensure_ascii=False) + "\n", encoding="utf-8"
        )


def _write_models(measurement: Measurement, ensemble: Ensemble, folder: Path) -> None:
    """Table of the ensemble, and a job for each of its structures."""
    table = models_table(measurement)
    table.write(folder / "models.ecsv", format="ascii.ecsv", delimiter=",")
    models = folder / "models"
    models.mkdir()
    for k, member in enumerate(ensemble.members, start=1):
        job = job_with_structure(
            measurement.asked, member.clouds, member.interlopers, member.dalpha
        )
        write_job(job, models / f"model-{k}.toml")


def _write_model(measurement: Measurement, path: Path) -> None:
    """One binary table per region and spectrum."""
    from astropy.io import fits

    tables: list[Any] = [fits.PrimaryHDU()]
    for segment, prediction in zip(
        measurement.built.model.segments, measurement.predictions, strict=True
    ):
        table = fits.BinTableHDU.from_columns(
            [
                fits.Column("WAVELENGTH", "D", unit="Angstrom", array=segment.wavelength),
                fits.Column("VELOCITY", "D", unit="km/s", array=segment.velocity),
                fits.Column("DATA", "D", array=segment.data),
                fits.Column("ERROR", "D", array=segment.error),
                fits.Column("FITTED", "L", array=segment.good),
                fits.Column("MODEL", "D", array=prediction.flux),
                fits.Column("CONTINUUM", "D", array=prediction.continuum),
                fits.Column("RESIDUAL", "D", array=prediction.residual),
                fits.Column(
                    "COMPONENTS",
                    f"{prediction.components.shape[0]}D",
                    array=np.ascontiguousarray(prediction.components.T),
                ),
            ],
            name=f"REGION{segment.region + 1}",
        )
        table.header["TRANS"] = (segment.name, "transition of the region")
        table.header["SPECTRUM"] = (segment.spectrum, "id of the spectrum")
        table.header["RESTWAV"] = (segment.rest, "[Angstrom] composite rest wavelength, vacuum")
        table.header["ZABS"] = (segment.centre / segment.rest - 1.0, "redshift of zero velocity")
        table.header["COMMENT"] = "DATA, ERROR, MODEL, CONTINUUM: in units of the file's continuum"
        table.header["COMMENT"] = "RESIDUAL: (DATA - MODEL)/ERROR, nan where not FITTED"
        table.header["COMMENT"] = "COMPONENTS: transmission of each component alone"
        tables.append(table)
    fits.HDUList(tables).writeto(path)
