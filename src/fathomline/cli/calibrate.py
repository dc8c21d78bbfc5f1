"""``fathomline calibrate``: distortion terms from measured shifts, or from two spectra."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from fathomline.report.calibration import Calibration

__all__ = ["calibrate"]

_TERMS = ("shift", "slope", "sawtooth")

_EPILOG = """\b
Examples:
  fathomline calibrate asteroid-shifts.csv --spectrum red -o calibration
  fathomline calibrate comb.ecsv --spectrum red --terms shift,slope,sawtooth --order-spacing 55
  fathomline calibrate night1.fits night2.fits --range 4160 4560 --range 5000 5650
"""


def _split_terms(_: click.Context, __: click.Parameter, value: str) -> tuple[str, ...]:
    terms = tuple(part.strip() for part in value.split(",") if part.strip())
    for term in terms:
        if term not in _TERMS:
            raise click.BadParameter(f"unknown term {term!r}; choose from {', '.join(_TERMS)}")
    if not terms or len(set(terms)) != len(terms):
        raise click.BadParameter("name at least one term, and each once")
    return terms


@click.command(epilog=_EPILOG)
@click.argument("first", metavar="SHIFTS | FIRST", type=click.Path(path_type=Path))
@click.argument("second", required=False, metavar="[SECOND]", type=click.Path(path_type=Path))
@click.option(
    "--terms",
    default="shift,slope",
    show_default=True,
    callback=_split_terms,
    help="Terms to fit: shift, slope, sawtooth.",
)
@click.option("--pivot", type=float, help="Zero of the slope, Å; default: the mean wavelength.")
@click.option(
    "--order-spacing",
    type=click.FloatRange(min=0.0, min_open=True),
    help="Spacing of the echelle orders, Å, counted from the pivot; for the sawtooth.",
)
@click.option(
    "--spectrum",
    metavar="ID",
    help="Job's identifier of the distorted spectrum; default with two spectra: name of FIRST.",
)
@click.option("--shared", metavar="TAG", help="Beginning of the tags; default: the identifier.")
@click.option("--robust", is_flag=True, help="Set outlying shifts aside.")
@click.option(
    "--chunk",
    type=click.FloatRange(min=0.0, min_open=True),
    help="Two spectra: length of chunks, km/s; default: one for each absorption feature.",
)
@click.option(
    "--range",
    "ranges",
    nargs=2,
    type=float,
    multiple=True,
    metavar="LOW HIGH",
    help="Two spectra: print the mean shift in this range, Å; may be repeated.",
)
@click.option(
    "--min-significance",
    type=click.FloatRange(min=1.0),
    default=3.0,
    show_default=True,
    help="Two spectra: least gradient of a feature, in units of its noise.",
)
@click.option(
    "--correlation",
    type=click.FloatRange(min=-0.5, max=0.5, min_open=True, max_open=True),
    help="Two spectra: correlation of the noise of neighbouring pixels; default: measured.",
)
@click.option("--telluric", is_flag=True, help="Two spectra: use the telluric ranges as well.")
@click.option(
    "-o",
    "--output",
    metavar="FOLDER",
    type=click.Path(path_type=Path),
    help="Folder for shifts.ecsv, distortion.toml and calibration.pdf/.png.",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def calibrate(
    first: Path,
    second: Path | None,
    terms: tuple[str, ...],
    pivot: float | None,
    order_spacing: float | None,
    spectrum: str | None,
    shared: str | None,
    robust: bool,
    chunk: float | None,
    ranges: tuple[tuple[float, float], ...],
    min_significance: float,
    correlation: float | None,
    telluric: bool,
    output: Path | None,
    as_json: bool,
) -> int:
    """Fit the distortion of a wavelength scale to velocity shifts.

    SHIFTS is a table with the columns wavelength, velocity and error (ECSV, CSV or text), from
    asteroid or solar-twin spectra or a laser comb. With two spectra FIRST and SECOND of one object
    the shifts of FIRST relative to SECOND are measured; the distortion belongs to FIRST.
    """
    if second is None and (chunk is not None or ranges or correlation is not None or telluric):
        raise click.UsageError(
            "--chunk, --range, --correlation and --telluric need two spectra: FIRST SECOND"
        )
    if second is None and spectrum is None:
        raise click.UsageError("--spectrum ID is needed: the job's identifier of the spectrum")
    if "sawtooth" in terms and order_spacing is None:
        raise click.UsageError("the sawtooth needs --order-spacing, the spacing of the orders in Å")
    for low, high in ranges:
        if not low < high:
            raise click.UsageError(f"--range {low:g} {high:g}: the range is empty")
    from fathomline.report.calibration import (
        check_calibration_target,
        summary_dict,
        write_calibration,
    )

    name = spectrum if spectrum is not None else first.name.split(".")[0]
    _check_identifier(name)
    if output is not None:
        check_calibration_target(output)
    fit_options = {
        "terms": terms,
        "pivot": pivot,
        "order_spacing": order_spacing,
        "robust": robust,
    }
    if second is None:
        result = _from_table(first, name, shared, fit_options)
    else:
        compare_options = {
            "chunk": chunk,
            "min_significance": min_significance,
            "correlation": correlation,
            "exclude_telluric": not telluric,
        }
        result = _from_spectra(first, second, name, shared, ranges, compare_options, fit_options)
    files = [] if output is None else write_calibration(result, output)
    if as_json:
        print(json.dumps(summary_dict(result, files), ensure_ascii=False))
    else:
        _print(result, files)
    return 0


def _check_identifier(name: str) -> None:
    from fathomline.job.fields import IDENTIFIER

    if not IDENTIFIER.fullmatch(name):
        raise click.UsageError(
            f"--spectrum {name!r}: give the job's id of the spectrum, of letters, digits and _ . -"
        )


def _from_table(
    path: Path, spectrum: str, shared: str | None, options: dict[str, Any]
) -> Calibration:
    from fathomline.errors import SpectrumError
    from fathomline.report.calibration import Calibration
    from fathomline.spectra.calibration import fit_distortion
    from fathomline.spectra.distortion import read_distortion_table

    wavelength, velocity, error = read_distortion_table(path)
    if error is None:
        raise SpectrumError(
            f"{path}: no column 'error' was found; a fit needs the 1-sigma error of each shift"
        )
    fit = fit_distortion(wavelength, velocity, error, **options)
    return Calibration(
        spectrum,
        "the reference of the table",
        (path.name,),
        wavelength,
        velocity,
        error,
        fit,
        shared=shared or "",
    )


def _from_spectra(
    first: Path,
    second: Path,
    spectrum: str,
    shared: str | None,
    ranges: tuple[tuple[float, float], ...],
    compare_options: dict[str, Any],
    fit_options: dict[str, Any],
) -> Calibration:
    import numpy as np

    from fathomline.errors import SpectrumError
    from fathomline.report.calibration import Calibration, RangeShift
    from fathomline.spectra import read_spectrum
    from fathomline.spectra.calibration import fit_distortion
    from fathomline.spectra.comparison import compare_spectra, mean_shift

    one, two = read_spectrum(first), read_spectrum(second)
    shifts = compare_spectra(one, two, **compare_options)
    if not shifts:
        raise SpectrumError(
            f"{first} and {second}: no absorption feature is significant enough to compare; "
            "try a lower --min-significance"
        )
    wavelength = np.array([s.wavelength for s in shifts])
    velocity = np.array([s.velocity for s in shifts])
    error = np.array([s.error for s in shifts])
    fit = fit_distortion(wavelength, velocity, error, **fit_options)
    return Calibration(
        spectrum,
        second.name,
        (first.name, second.name),
        wavelength,
        velocity,
        error,
        fit,
        chunks=tuple(shifts),
        ranges=tuple(RangeShift(low, high, *mean_shift(shifts, low, high)) for low, high in ranges),
        shared=shared or "",
    )


def _print(calibration: Calibration, files: list[Path]) -> None:
    from fathomline.cli.console import print_table
    from fathomline.report.calibration import scatter_sentence

    fit = calibration.fit
    print(
        f"distortion of {calibration.spectrum!r} relative to {calibration.relative_to} "
        "(positive: recorded too far to the red)"
    )
    if calibration.chunks:
        print_table(
            "",
            ("from (Å)", "to (Å)", "centre (Å)", "shift (m/s)", "error (m/s)", "χ²/ν", "pixels"),
            [
                (
                    f"{c.low:.2f}",
                    f"{c.high:.2f}",
                    f"{c.wavelength:.2f}",
                    f"{c.velocity:+.0f}",
                    f"{c.error:.0f}",
                    f"{c.chi2_nu:.2f}",
                    str(c.pixels),
                )
                for c in calibration.chunks
            ],
        )
    if calibration.ranges:
        print_table(
            "",
            ("from (Å)", "to (Å)", "mean shift (m/s)", "error (m/s)", "χ²/ν", "chunks"),
            [
                (
                    f"{r.low:g}",
                    f"{r.high:g}",
                    f"{r.velocity:+.0f}",
                    f"{r.error:.0f}",
                    "none" if r.chi2_nu is None else f"{r.chi2_nu:.2f}",
                    str(r.chunks),
                )
                for r in calibration.ranges
            ],
        )
    print_table(
        "",
        ("term", "value", "error", "sigma of the prior", "unit"),
        [
            (
                term.kind,
                f"{term.value:+.1f}",
                f"{term.error:.1f}",
                f"{term.sigma:.1f}",
                f"m/s per 1000 Å about {fit.pivot:g} Å" if term.kind == "slope" else "m/s",
            )
            for term in fit.terms
        ],
    )
    chi2 = "none" if fit.chi2_nu is None else f"{fit.chi2_nu:.2f}"
    print(f"{fit.used.size} points, χ²/ν = {chi2} before scatter; {scatter_sentence(fit)}")
    if not fit.used.all():
        print(f"{int((~fit.used).sum())} points were set aside as outliers")
    for path in files:
        print(path)
