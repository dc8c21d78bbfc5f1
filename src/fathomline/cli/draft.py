"""``fathomline draft``: covered and detected transitions, and a job file to start from."""

from __future__ import annotations

import json
import os
import re
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from fathomline.job.draft import Candidate, Draft

__all__ = ["draft"]

_EPILOG = """\b
Examples:
  fathomline draft red.fits --redshift 1.15085 --fwhm 5.2 -o halden-a.toml
  fathomline draft blue.fits red.fits --redshift 1.15085 --fwhm 5.4 --fwhm 5.2 \\
      --other-redshift 0.7865 -o halden-a.toml
"""

_positive = click.FloatRange(min=0.0, min_open=True)
_redshift = click.FloatRange(min=-1.0, min_open=True)


@click.command(epilog=_EPILOG)
@click.argument(
    "spectra", metavar="SPECTRUM...", nargs=-1, required=True, type=click.Path(path_type=Path)
)
@click.option("--redshift", type=_redshift, required=True, help="Redshift of the absorber.")
@click.option(
    "--fwhm",
    type=_positive,
    multiple=True,
    metavar="KMS",
    help="Width of the line-spread function, km/s; once, or once for each spectrum.",
)
@click.option(
    "--resolving-power",
    type=_positive,
    multiple=True,
    metavar="R",
    help="Instead of --fwhm: R = c/FWHM; once, or once for each spectrum.",
)
@click.option(
    "-o",
    "--output",
    metavar="JOB",
    required=True,
    type=click.Path(path_type=Path),
    help="Job file to write; must not exist.",
)
@click.option("--name", help="Name of the absorber. Default: the redshift.")
@click.option(
    "--other-redshift",
    "others",
    type=_redshift,
    multiple=True,
    metavar="Z",
    help="Redshift of another absorber, whose lines may blend; may be repeated.",
)
@click.option(
    "--max-velocity",
    type=click.FloatRange(min=10.0, max=5000.0),
    default=300.0,
    show_default=True,
    help="Largest distance of the absorption from the redshift, km/s.",
)
@click.option("--unit", help="Unit of the wavelengths, where the files do not say.")
@click.option("--medium", type=click.Choice(["vacuum", "air"]), help="Medium of the wavelengths.")
@click.option(
    "--frame", type=click.Choice(["barycentric", "topocentric"]), help="Frame of the wavelengths."
)
@click.option("--berv", type=float, help="Barycentric velocity of topocentric spectra, km/s.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def draft(
    spectra: tuple[Path, ...],
    redshift: float,
    fwhm: tuple[float, ...],
    resolving_power: tuple[float, ...],
    output: Path,
    name: str | None,
    others: tuple[float, ...],
    max_velocity: float,
    unit: str | None,
    medium: str | None,
    frame: str | None,
    berv: float | None,
    as_json: bool,
) -> int:
    """Find which transitions each SPECTRUM covers and detects, and write a commented job file.

    The job has a window for every transition that is detected, not saturated and not blended, and
    says of each other one why it is left out. Components are found by the measurement.
    """
    widths = _widths(len(spectra), fwhm, resolving_power)
    if output.exists():
        raise click.UsageError(f"{output} is already there and is not overwritten; name another")
    from dataclasses import replace

    from fathomline.atomic import load_atomic_data
    from fathomline.errors import JobError
    from fathomline.job.draft import draft as make_draft
    from fathomline.job.draft_text import DraftSpectrum, draft_to_toml
    from fathomline.spectra import read_spectrum

    ids = _identifiers(spectra)
    data = [
        replace(read_spectrum(path, unit=unit, medium=medium, frame=frame, velocity=berv), name=key)
        for path, key in zip(spectra, ids, strict=True)
    ]
    result = make_draft(
        data,
        load_atomic_data(),
        redshift,
        fwhm=max(width for width, _ in widths),
        other_redshifts=others,
        max_velocity=max_velocity,
    )
    given = {"unit": unit, "medium": medium, "frame": frame, "berv": berv}
    reading = {key: value for key, value in given.items() if value is not None}
    tables = [
        DraftSpectrum(
            key,
            _relative(path, output.parent),
            fwhm=width if power is None else None,
            R=power,
            reading=reading,
        )
        for key, path, (width, power) in zip(ids, spectra, widths, strict=True)
    ]
    text = draft_to_toml(result, tables, name=name or f"z = {redshift:g}") if result.used else None
    if text is not None:
        try:
            with output.open("x", encoding="utf-8", newline="\n") as stream:
                stream.write(text)
        except OSError as error:
            raise JobError(f"{output}: cannot be written: {error.strerror or error}") from error
    _print(result, output if text is not None else None, as_json=as_json)
    if text is None:
        raise JobError(
            f"no transition at z = {redshift:g} can be used, so no job was written; check the "
            "redshift with: fathomline lines --redshift Z --spectrum FILE"
        )
    return 0


def _widths(
    count: int, fwhm: tuple[float, ...], powers: tuple[float, ...]
) -> list[tuple[float, float | None]]:
    """Width in km/s, and the resolving power where that was given, of each spectrum."""
    if bool(fwhm) == bool(powers):
        raise click.UsageError(
            "give --fwhm (km/s) or --resolving-power: a fit needs the width of the line-spread "
            "function, and a spectrum does not tell it"
        )
    values: list[tuple[float, float | None]] = [(width, None) for width in fwhm]
    values += [(299_792.458 / power, power) for power in powers]
    if len(values) not in (1, count):
        raise click.UsageError(
            f"{len(values)} resolutions for {count} spectra; give one, or one for each spectrum"
        )
    return values * count if len(values) == 1 else values


def _identifiers(paths: tuple[Path, ...]) -> list[str]:
    """Different valid ids made of the file names."""
    ids: list[str] = []
    for path in paths:
        stem = re.sub(r"[^A-Za-z0-9_-]+", "-", path.name.split(".")[0]).strip("-_")
        if not stem or not stem[0].isalpha():
            stem = f"s{stem}"
        key, number = stem, 2
        while key in ids:
            key, number = f"{stem}-{number}", number + 1
        ids.append(key)
    return ids


def _relative(path: Path, folder: Path) -> str:
    """The path from the folder of the job; absolute where there is none, as on another drive."""
    try:
        text = os.path.relpath(path, folder)
    except ValueError:
        text = str(path.absolute())
    return Path(text).as_posix()


def _print(result: Draft, output: Path | None, *, as_json: bool) -> None:
    if as_json:
        record = {
            "redshift": result.redshift,
            "extent_kms": result.extent,
            "job": None if output is None else str(output),
            "transitions": [_record(c) for c in result.candidates],
            "not_covered": result.not_covered,
        }
        print(json.dumps(record, ensure_ascii=False))
        return
    from fathomline.cli.console import print_table

    print_table(
        f"{len(result.candidates)} covered transitions at z = {result.redshift:g}",
        ("transition", "observed (Å)", "S/N", "significance", "decision", "window (km/s)", "why"),
        [
            (
                c.transition.name,
                f"{c.observed:.2f}",
                f"{c.signal_to_noise:.0f}",
                f"{c.significance:.1f}",
                "use" if c.used else "leave out",
                "" if c.window is None else f"{c.window[0]:+.1f} to {c.window[1]:+.1f}",
                "; ".join((c.reason, *c.notes)),
            )
            for c in result.candidates
        ],
    )
    if output is not None:
        print(f"{output}: {len(result.used)} regions; next: fathomline measure {output}")


def _record(candidate: Candidate) -> dict[str, Any]:
    return {
        "transition": candidate.transition.name,
        "observed_angstrom": candidate.observed,
        "used": candidate.used,
        "reason": candidate.reason,
        "significance": candidate.significance,
        "snr": candidate.signal_to_noise,
        "spectra": candidate.spectra,
        "window_kms": candidate.window,
        "exclude_kms": candidate.exclude,
        "notes": candidate.notes,
    }
