"""``fathomline lines``: the transition table, and where its lines fall in a spectrum."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from fathomline.atomic import AtomicData, Transition
    from fathomline.spectra import Spectrum

__all__ = ["lines"]

_HALF_WINDOW = 100.0  # km/s about a line, for its signal-to-noise ratio and its trouble

_EPILOG = """\b
Examples:
  fathomline lines --ion "Fe II"
  fathomline lines --redshift 1.15 --spectrum red.fits
"""


@click.command(epilog=_EPILOG)
@click.option("--ion", help='Only this ion, for instance "Fe II".')
@click.option(
    "--redshift",
    type=click.FloatRange(min=-1.0, min_open=True),
    default=0.0,
    help="Redshift of the absorber.",
)
@click.option(
    "--range",
    "wave_range",
    type=float,
    nargs=2,
    metavar="LOW HIGH",
    help="Only lines observed in this range of vacuum wavelengths, Å.",
)
@click.option(
    "--spectrum",
    type=click.Path(path_type=Path),
    help="Only lines covered by this spectrum, with their signal-to-noise ratio.",
)
@click.option("--extra", is_flag=True, help="Also lines without a sensitivity coefficient.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def lines(
    ion: str | None,
    redshift: float,
    wave_range: tuple[float, float] | None,
    spectrum: Path | None,
    extra: bool,
    as_json: bool,
) -> int:
    """List transitions: wavelength, strength, and sensitivity to α.

    The sensitivity is the velocity shift of the line per ppm of Δα/α.
    """
    from fathomline.atomic import load_atomic_data
    from fathomline.cli.console import print_table

    atoms = load_atomic_data()
    if ion is not None and not atoms.find(ion=ion, extra=True):
        raise click.UsageError(f"no ion {ion!r} in the table; it has {', '.join(atoms.ions())}")
    data = None
    if spectrum is not None:
        from fathomline.spectra import read_spectrum

        data = read_spectrum(spectrum)
        covered = (float(data.wavelength[0]), float(data.wavelength[-1]))
        wave_range = (
            covered
            if wave_range is None
            else (max(covered[0], wave_range[0]), min(covered[1], wave_range[1]))
        )
    found = atoms.find(ion=ion, wavelength=wave_range, redshift=redshift, extra=extra)
    rows = [_row(transition, redshift, atoms, data) for transition in found]
    if as_json:
        print(json.dumps(rows, ensure_ascii=False))
        return 0
    header: tuple[str, ...] = (
        "transition",
        "rest (Å)",
        "observed (Å)",
        "f",
        "q (cm⁻¹)",
        "shift (m/s per ppm)",
        "components",
    )
    if data is not None:
        header = (*header, "S/N", "trouble")
    print_table(
        f"{len(rows)} transitions",
        header,
        [_cells(row, with_data=data is not None) for row in rows],
    )
    return 0


def _row(
    transition: Transition, redshift: float, atoms: AtomicData, data: Spectrum | None
) -> dict[str, Any]:
    observed = transition.observed_wavelength(redshift)
    row: dict[str, Any] = {
        "transition": transition.name,
        "rest_angstrom": transition.wavelength,
        "observed_angstrom": observed,
        "f": transition.f,
        "q_per_cm": transition.q,
        "shift_ms_per_ppm": transition.sensitivity,
        "components": len(transition.components),
    }
    if data is not None:
        row.update(_trouble(observed, atoms, data))
    return row


def _trouble(observed: float, atoms: AtomicData, data: Spectrum) -> dict[str, Any]:
    import numpy as np

    low, high = (observed * (1.0 + sign * _HALF_WINDOW / 299_792.458) for sign in (-1, 1))
    inside = (data.wavelength >= low) & (data.wavelength <= high)
    good = inside & data.good
    notes = []
    if not good.any():
        notes.append("no good pixel")
    elif good.sum() < inside.sum():
        notes.append(f"{int(inside.sum() - good.sum())} masked pixels")
    notes += [f"telluric {r.molecule} ({r.strength})" for r in atoms.telluric_overlap((low, high))]
    level = data.flux if data.continuum is None else data.continuum
    snr = float(np.median(level[good] / data.error[good])) if good.any() else None
    return {"snr": snr, "trouble": notes}


def _cells(row: dict[str, Any], *, with_data: bool) -> tuple[str, ...]:
    def number(value: float | None, form: str) -> str:
        return "unknown" if value is None else format(value, form)

    cells = (
        row["transition"],
        f"{row['rest_angstrom']:.4f}",
        f"{row['observed_angstrom']:.2f}",
        f"{row['f']:.4g}",
        number(row["q_per_cm"], ".0f"),
        number(row["shift_ms_per_ppm"], "+.2f"),
        str(row["components"]),
    )
    if not with_data:
        return cells
    return (*cells, number(row["snr"], ".0f"), "; ".join(row["trouble"]))
