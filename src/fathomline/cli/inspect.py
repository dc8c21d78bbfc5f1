"""``fathomline inspect``: what the reader understood of a spectrum file."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from fathomline.spectra import SpectrumSummary

__all__ = ["inspect"]

_EPILOG = """\b
Examples:
  fathomline inspect red.fits
  fathomline inspect red.txt --unit nm --medium air
  fathomline inspect red.fits --column error=SIGMA
"""


def _columns(pairs: tuple[str, ...]) -> dict[str, str] | None:
    known = ("wavelength", "flux", "error", "continuum")
    columns = {}
    for pair in pairs:
        role, equals, name = pair.partition("=")
        if not equals or role not in known or not name:
            raise click.UsageError(
                f"--column {pair!r}: write ROLE=NAME with a role of {', '.join(known)}"
            )
        columns[role] = name
    return columns or None


@click.command(epilog=_EPILOG)
@click.argument("spectrum", type=click.Path(path_type=Path))
@click.option(
    "--column",
    "columns",
    multiple=True,
    metavar="ROLE=NAME",
    help="Column of wavelength, flux, error or continuum; may be repeated.",
)
@click.option("--unit", help="Unit of the wavelengths, where the file does not say.")
@click.option("--medium", type=click.Choice(["vacuum", "air"]), help="Medium of the wavelengths.")
@click.option(
    "--frame", type=click.Choice(["barycentric", "topocentric"]), help="Frame of the wavelengths."
)
@click.option("--berv", type=float, help="Barycentric velocity of a topocentric spectrum, km/s.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def inspect(
    spectrum: Path,
    columns: tuple[str, ...],
    unit: str | None,
    medium: str | None,
    frame: str | None,
    berv: float | None,
    as_json: bool,
) -> int:
    """Show what the reader understood of SPECTRUM: ranges, sampling, S/N, frame, masks, guesses."""
    from fathomline.spectra import read_spectrum, summarise

    data = read_spectrum(
        spectrum, columns=_columns(columns), unit=unit, medium=medium, frame=frame, velocity=berv
    )
    summary = summarise(data)
    if as_json:
        print(json.dumps(summary.to_dict(), ensure_ascii=False))
    else:
        _print(summary)
    return 0


def _print(summary: SpectrumSummary) -> None:
    from fathomline.cli.console import print_pairs

    reading = summary.reading
    correlation = "too few quiet pixels to tell"
    if summary.correlation is not None:
        correlation = "{:+.2f} (next), {:+.2f} (second)".format(*summary.correlation)
    pairs = [
        ("file", str(summary.file)),
        ("format", str(reading.get("format"))),
        ("columns", ", ".join(f"{k} = {v}" for k, v in dict(reading.get("columns") or {}).items())),
        ("wavelengths", f"{summary.start:.3f} to {summary.end:.3f} Å, vacuum, barycentric"),
        (
            "in the file",
            f"{reading.get('medium')} ({reading.get('medium_source')}), "
            f"{reading.get('frame')} ({reading.get('frame_source')})",
        ),
        ("pixels", f"{summary.pixels}, {100 * summary.masked_fraction:.2f} % masked"),
        (
            "pixel size",
            f"{summary.pixel_median:.3f} km/s "
            f"({summary.pixel_min:.3f} to {summary.pixel_max:.3f}), "
            f"{'log-linear' if summary.log_linear else 'not log-linear'}",
        ),
        (
            "continuum",
            "in the file"
            if summary.has_continuum
            else "none: each region starts from a robust local level",
        ),
        ("correlation of neighbouring pixels", correlation),
    ]
    pairs += [
        ("masked", f"{reason}: {100 * part:.2f} %")
        for reason, part in summary.masked_by_reason.items()
    ]
    pairs += [
        ("gap", f"{gap.start:.2f} to {gap.end:.2f} Å ({gap.pixels} masked pixels)")
        for gap in summary.gaps
    ]
    pairs += [
        (
            "signal-to-noise per pixel",
            f"{level.start:.0f} to {level.end:.0f} Å: "
            + ("none" if level.signal_to_noise is None else f"{level.signal_to_noise:.0f}"),
        )
        for level in summary.noise
    ]
    for kind, key in (("guess", "guesses"), ("warning", "warnings"), ("step", "steps")):
        pairs += [(kind, text) for text in reading.get(key) or ()]
    print_pairs(pairs)
