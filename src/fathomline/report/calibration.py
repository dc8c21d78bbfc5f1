"""What a calibration leaves behind: the shifts, ready distortion blocks for a job, the figure."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

import fathomline
from fathomline.errors import ResultError
from fathomline.spectra.calibration import DistortionFit
from fathomline.spectra.comparison import ChunkShift

if TYPE_CHECKING:
    from astropy.table import Table

__all__ = [
    "CALIBRATION_FILES",
    "Calibration",
    "RangeShift",
    "check_calibration_target",
    "distortion_blocks",
    "distortion_toml",
    "scatter_sentence",
    "shifts_table",
    "summary_dict",
    "write_calibration",
]

FloatArray = NDArray[np.float64]

CALIBRATION_FILES = ("shifts.ecsv", "distortion.toml", "calibration.pdf", "calibration.png")
"""Files that `write_calibration` writes."""

_MARKER = "# Written by fathomline calibrate"


@dataclass(frozen=True, slots=True)
class RangeShift:
    """Mean shift in a wavelength range (Å): m/s, χ² per degree of freedom or None, chunks."""

    low: float
    high: float
    velocity: float
    error: float
    chi2_nu: float | None
    chunks: int


@dataclass(frozen=True, slots=True)
class Calibration:
    """Measured shifts and the distortion fitted to them.

    Attributes
    ----------
    spectrum
        Job identifier of the spectrum that the distortion belongs to.
    relative_to
        What its shifts are relative to, in words.
    sources
        Files the shifts come from.
    wavelength, velocity, error
        Å, m/s, m/s, shape (n,).
    fit
        Fitted to the three.
    chunks
        The chunks of a comparison, in the order of the arrays; empty for a table.
    ranges
        Mean shifts in ranges.
    shared
        Tag for the distortion blocks.

    """

    spectrum: str
    relative_to: str
    sources: tuple[str, ...]
    wavelength: FloatArray
    velocity: FloatArray
    error: FloatArray
    fit: DistortionFit
    chunks: tuple[ChunkShift, ...] = ()
    ranges: tuple[RangeShift, ...] = ()
    shared: str = ""


def distortion_blocks(calibration: Calibration) -> list[dict[str, Any]]:
    """Keys and values of the ``[[distortion]]`` blocks of a job."""
    fit = calibration.fit
    blocks = []
    for term in fit.terms:
        block: dict[str, Any] = {
            "spectrum": calibration.spectrum,
            "kind": term.kind,
            "value": round(term.value, 3),
            "sigma": round(term.sigma, 3),
        }
        if term.kind == "slope":
            block["pivot"] = fit.pivot
        elif term.kind == "sawtooth" and fit.order_edges is not None:
            block["order_edges"] = list(fit.order_edges)
        elif term.kind == "sawtooth":
            block["pivot"] = fit.pivot
            block["order_spacing"] = fit.order_spacing
        block["shared"] = f"{calibration.shared or calibration.spectrum}-{term.kind}"
        blocks.append(block)
    return blocks


def _toml(value: object) -> str:
    if isinstance(value, str):
        plain = value.replace("\\", "\\\\").replace('"', '\\"')
        # a basic string may hold no control character
        return (
            '"'
            + "".join(c if c >= " " and c != "\x7f" else f"\\u{ord(c):04x}" for c in plain)
            + '"'
        )
    if isinstance(value, list):
        return "[" + ", ".join(_toml(item) for item in value) + "]"
    return repr(float(value))  # type: ignore[arg-type]


def _one_line(text: str) -> str:
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def scatter_sentence(fit: DistortionFit) -> str:
    """The intrinsic scatter in words."""
    if fit.scatter_limit is None:
        return "intrinsic scatter: unknown, there are no more points than terms"
    if fit.scatter_error is None:
        return f"intrinsic scatter: none significant, below {fit.scatter_limit:.0f} m/s (95 %)"
    return f"intrinsic scatter: {fit.scatter:.0f} ± {fit.scatter_error:.0f} m/s"


def distortion_toml(calibration: Calibration) -> str:
    """The ``[[distortion]]`` blocks as text that can be put into a job file."""
    fit = calibration.fit
    points = int(np.count_nonzero(fit.used))
    aside = fit.used.size - points
    chi2 = "none" if fit.chi2_nu is None else f"{fit.chi2_nu:.3f}"
    lines = [
        f"{_MARKER} (fathomline {fathomline.__version__})",
        f"# From {_one_line(', '.join(calibration.sources))}",
        f"# Distortion of the spectrum {_one_line(calibration.spectrum)!r} relative to "
        f"{_one_line(calibration.relative_to)}:",
        "# light of true wavelength λ is recorded at λ (1 + v/c), v in m/s.",
        f"# {points} points" + (f", {aside} more set aside as outliers" if aside else "")
        + f"; χ²/ν = {chi2} before scatter.",
        f"# {scatter_sentence(fit).capitalize()}.",
        "# sigma is the error of the fit, which allows for the scatter; that of the shift has the",
        "# scatter added in quadrature, since a single line is displaced like a single point.",
    ]  # fmt: skip
    for block in distortion_blocks(calibration):
        lines += ["", "[[distortion]]"]
        for key, value in block.items():
            unit = ""
            if key in ("value", "sigma"):
                unit = "  # m/s per 1000 Å" if block["kind"] == "slope" else "  # m/s"
            elif key in ("pivot", "order_spacing", "order_edges"):
                unit = "  # Å"
            lines.append(f"{key} = {_toml(value)}{unit}")
    return "\n".join(lines) + "\n"


def shifts_table(calibration: Calibration) -> Table:
    """The shifts, fitted values and residuals; ``fathomline calibrate`` can read the table."""
    from astropy.table import Table

    fit = calibration.fit
    model = fit.velocity(calibration.wavelength)
    columns: dict[str, tuple[Any, str | None, str]] = {
        "wavelength": (calibration.wavelength, "Angstrom", "vacuum; centre by information"),
        "velocity": (calibration.velocity, "m/s", "shift, positive to the red"),
        "error": (calibration.error, "m/s", "1σ, not rescaled"),
        "fitted": (model, "m/s", "sum of the fitted terms"),
        "residual": (calibration.velocity - model, "m/s", "velocity minus fitted"),
        "used": (fit.used, None, "False: set aside as an outlier"),
    }
    if calibration.chunks:
        chunks = calibration.chunks
        columns |= {
            "wave_min": ([c.low for c in chunks], "Angstrom", "first pixel of the chunk"),
            "wave_max": ([c.high for c in chunks], "Angstrom", "last pixel of the chunk"),
            "chi2_nu": ([c.chi2_nu for c in chunks], None, "of the difference spectrum"),
            "pixels": ([c.pixels for c in chunks], None, "pixels used"),
            "clipped": ([c.clipped for c in chunks], None, "pixels dropped as outliers"),
            "attenuation": (
                [c.attenuation for c in chunks],
                None,
                "factor by which noise in the gradient would lower the shift; corrected for",
            ),
        }
    table = Table()
    for name, (values, unit, description) in columns.items():
        table[name] = values
        table[name].unit = unit
        table[name].description = description
    table.meta.update(
        {
            "made_by": f"fathomline {fathomline.__version__} calibrate",
            "spectrum": calibration.spectrum,
            "relative_to": calibration.relative_to,
            "sources": list(calibration.sources),
            "terms": [
                {"kind": t.kind, "value": t.value, "error": t.error, "sigma": t.sigma}
                for t in fit.terms
            ],
            "pivot": fit.pivot,
            "scatter": fit.scatter,
            "scatter_limit": fit.scatter_limit,
        }
    )
    return table


def check_calibration_target(folder: Path) -> None:
    """Refuse a folder whose files of our names do not come from an earlier calibration.

    Raises
    ------
    ResultError
        The message says what is in the way.

    """
    if folder.exists() and not folder.is_dir():
        raise ResultError(f"{folder}: is a file; name another folder with -o")
    if not folder.parent.is_dir():
        raise ResultError(f"{folder.parent}: no such folder; create it first")
    present = [name for name in CALIBRATION_FILES if os.path.lexists(folder / name)]
    if not present:
        return
    try:
        ours = (folder / "distortion.toml").read_text(encoding="utf-8").startswith(_MARKER)
    except (OSError, UnicodeDecodeError):
        ours = False
    if not ours:
        raise ResultError(
            f"{folder}: holds {', '.join(present)}, not from an earlier calibrate, which would "
            "be overwritten; name another folder with -o"
        )


def write_calibration(calibration: Calibration, folder: Path) -> list[Path]:
    """Write `CALIBRATION_FILES`; all are made before the first takes its place.

    Parameters
    ----------
    calibration
        What is written.
    folder
        Made if it does not exist; files of an earlier calibration are replaced, others kept.

    Returns
    -------
    list of Path

    Raises
    ------
    ResultError
        Files of other origin are in the way, or the folder cannot be written.

    """
    import io

    from fathomline.report.calibration_figure import calibration_figure
    from fathomline.report.figures import render_figure

    check_calibration_target(folder)
    text = io.StringIO()
    shifts_table(calibration).write(text, format="ascii.ecsv", delimiter=",")
    figure = calibration_figure(calibration)
    contents: Mapping[str, bytes] = {
        "shifts.ecsv": text.getvalue().encode(),
        "calibration.pdf": render_figure(figure, "pdf"),
        "calibration.png": render_figure(figure, "png"),
        # last: it marks the folder as ours
        "distortion.toml": distortion_toml(calibration).encode(),
    }
    fresh = {name: folder / f".{name}.{os.getpid()}.part" for name in contents}
    try:
        folder.mkdir(exist_ok=True)
        for name, data in contents.items():
            fresh[name].write_bytes(data)
        for name, path in fresh.items():
            path.replace(folder / name)
    except OSError as error:
        raise ResultError(
            f"{folder}: the calibration cannot be written: {error.strerror or error}"
        ) from error
    finally:
        for path in fresh.values():
            path.unlink(missing_ok=True)
    return [folder / name for name in CALIBRATION_FILES]


def summary_dict(calibration: Calibration, files: Sequence[Path] = ()) -> dict[str, Any]:
    """Plain dicts, lists, strings and numbers that `json` can write."""
    fit = calibration.fit
    names = ("low", "high", "velocity", "error", "chi2_nu", "chunks")
    return {
        "spectrum": calibration.spectrum,
        "relative_to": calibration.relative_to,
        "points": int(fit.used.size),
        "set_aside": int(np.count_nonzero(~fit.used)),
        "terms": [
            {"kind": t.kind, "value": t.value, "error": t.error, "sigma": t.sigma}
            for t in fit.terms
        ],
        "covariance": fit.covariance.tolist(),
        "pivot_angstrom": fit.pivot,
        "chi2_nu": fit.chi2_nu,
        "ndof": fit.ndof,
        "scatter": fit.scatter,
        "scatter_error": fit.scatter_error,
        "scatter_limit": None
        if fit.scatter_limit is None or math.isinf(fit.scatter_limit)
        else fit.scatter_limit,
        "ranges": [{name: getattr(r, name) for name in names} for r in calibration.ranges],
        "shifts": [
            {"wavelength": float(w), "velocity": float(v), "error": float(e)}
            for w, v, e in zip(
                calibration.wavelength, calibration.velocity, calibration.error, strict=True
            )
        ],
        "files": [str(path) for path in files],
    }
