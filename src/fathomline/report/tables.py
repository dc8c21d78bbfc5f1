"""The tables of a measurement as astropy tables with units and descriptions.

A number that is not available is a masked entry, and the row says why: in ``flags`` of the
measurement, in ``note`` elsewhere.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

import fathomline
from fathomline.job.building import ALPHA
from fathomline.job.measurement import Measurement

__all__ = [
    "budget_table",
    "components_table",
    "covariance_table",
    "measurement_table",
    "models_table",
    "transitions_table",
]

Table = Any  # astropy.table.Table, which is imported late

Cell = float | int | bool | str | None
Column = tuple[str, str | None, str, list[Cell]]


def _table(columns: Iterable[tuple[str, str | None, str, list[Cell]]], **meta: str) -> Table:
    """A table from (name, unit, description, values); None is masked."""
    from astropy.table import MaskedColumn
    from astropy.table import Table as AstropyTable

    table = AstropyTable(meta=meta, masked=False)
    for name, unit, description, values in columns:
        known = [value for value in values if value is not None]
        filler: Cell = known[0] if known else 0.0
        if isinstance(filler, float) or not known:
            filler = 0.0  # a masked field holds 0 and not a copy of another row
        data = np.array([filler if value is None else value for value in values])
        mask = np.array([value is None for value in values])
        column = MaskedColumn(data, name=name, unit=unit, description=description, mask=mask)
        table.add_column(column if mask.any() else column.filled())
    return table


def measurement_table(m: Measurement) -> Table:
    """One row: the absorber, Δα/α with its errors, the quality of the fit, and flags."""
    absorber, fit = m.job.absorber, m.fit
    return _table(
        [
            ("absorber", None, "name of the absorber", [absorber.name]),
            ("ra", "deg", "right ascension, ICRS", [absorber.ra]),
            ("dec", "deg", "declination, ICRS", [absorber.dec]),
            ("z_abs", None, "redshift of zero velocity", [absorber.redshift]),
            (
                "n_transitions",
                None,
                "transitions fitted",
                [len({t.name for t in m.built.transitions})],
            ),
            ("n_components", None, "velocity components", [len(m.job.components)]),
            ("n_free", None, "free parameters", [fit.n_free]),
            ("dalpha_ppm", None, "relative change of alpha, 1e-6", [m.dalpha]),
            ("stat_ppm", None, "statistical error, 1 sigma, 1e-6", [m.stat]),
            (
                "sys_ppm",
                None,
                "systematic error, 1 sigma, 1e-6; masked: no budget was made",
                [None],
            ),
            ("total_ppm", None, "total error, 1 sigma, 1e-6; masked: no budget was made", [None]),
            ("chi2", None, "chi squared of pixels and priors", [fit.chi2]),
            ("ndof", None, "degrees of freedom", [fit.ndof]),
            ("chi2_nu", None, "chi squared per degree of freedom", [fit.chi2_nu]),
            (
                "aicc",
                None,
                "Akaike criterion with small-sample term",
                [fit.aicc if np.isfinite(fit.aicc) else None],
            ),
            (
                "converged",
                None,
                "minimum reached, and every restart returned or ended in a worse one",
                [fit.converged],
            ),
            ("blinded", None, "whether dalpha_ppm is hidden", [False]),
            ("flags", None, "comma-separated; empty: nothing to report", [",".join(m.flags)]),
            ("fathomline_version", None, "version of the program", [fathomline.__version__]),
            ("job_digest", None, "SHA-256 of the job", [m.digest]),
        ],
        flags="; ".join(f"{flag}: {text}" for flag, text in sorted(m.flag_meanings().items())),
    )


def budget_table(m: Measurement) -> Table:
    """One row per term of the error budget; for now the statistical ones."""
    reason = "" if m.stat is not None else ",".join(m.fit.flags)
    rows: list[tuple[str, Cell, str]] = [
        ("statistical", m.stat, reason or "photon noise with every free parameter marginalised")
    ]
    if m.correlated_stat is not None and m.stat is not None:
        more = m.correlated_stat**2 - m.stat**2
        which = ", ".join(f"{name} {rho:+.3f}" for name, rho in m.correlation.items())
        note = (
            f"with it the statistical error is {m.correlated_stat:.4g} ppm; correlation of "
            f"neighbouring pixels: {which}; not included in stat_ppm"
        )
        rows.append(("pixel correlation", float(np.sqrt(max(more, 0.0))), note))
    kinds: list[Cell] = ["statistical"] * len(rows)
    methods: list[Cell] = ["covariance"] * len(rows)
    refits: list[Cell] = [0] * len(rows)
    if m.ensemble is not None:
        note = (
            f"scatter of {len(m.ensemble.accepted)} accepted structures of "
            f"{len(m.ensemble.members)}; average {m.ensemble.mean:.4g} ppm; see models.ecsv"
        )
        rows.append(("velocity structure", m.ensemble.between, note))
        kinds.append("systematic")
        methods.append("ensemble")
        refits.append(sum(member.count for member in m.ensemble.members))
    n = len(rows)
    response = "signed shift per unit of the shared error, 1e-6"
    return _table(
        [
            ("term", None, "name of the term", [row[0] for row in rows]),
            ("kind", None, "statistical or systematic", kinds),
            ("shift_ppm", None, "shift of dalpha/alpha, 1e-6", [None] * n),
            ("sigma_ppm", None, "1 sigma error, 1e-6", [row[1] for row in rows]),
            ("method", None, "how it was found", methods),
            ("n_refits", None, "refits behind it", refits),
            ("shared", None, "tag shared with other absorbers", [""] * n),
            ("response_ppm", None, response, [None] * n),
            ("note", None, "remark", [row[2] for row in rows]),
        ]
    )


def models_table(m: Measurement) -> Table:
    """One row per structure of the ensemble, the best first; jobs of the same number re-open it."""
    members = () if m.ensemble is None else m.ensemble.members
    accepted = set() if m.ensemble is None else {id(a) for a in m.ensemble.accepted}
    return _table(
        [
            ("model", None, "number; models/model-N.toml", list(range(1, len(members) + 1))),
            ("n_components", None, "velocity components", [len(x.clouds) for x in members]),
            ("n_interlopers", None, "lines in one region", [len(x.interlopers) for x in members]),
            ("broadening", None, "law", ["thermal" if x.thermal else "turbulent" for x in members]),
            ("criterion", None, "that the search followed", [x.criterion for x in members]),
            ("seed", None, "of the search", [x.seed for x in members]),
            ("n_searches", None, "searches that ended here", [x.count for x in members]),
            ("n_free", None, "free parameters", [x.n_free for x in members]),
            ("chi2", None, "chi squared", [x.chi2 for x in members]),
            ("aicc", None, "Akaike criterion with small-sample term", [x.aicc for x in members]),
            ("dalpha_ppm", None, "relative change of alpha, 1e-6", [x.dalpha for x in members]),
            ("stat_ppm", None, "statistical error, 1e-6", [x.stat for x in members]),
            ("accepted", None, "whether it counts", [id(x) in accepted for x in members]),
        ],
        absorber=m.job.absorber.name,
    )


def components_table(m: Measurement) -> Table:
    """One row per velocity component, with errors and, where there is none, the reason."""
    components = m.job.components
    notes: list[list[str]] = [[] for _ in components]
    columns: list[tuple[str, str | None, str, list[Cell]]] = [
        ("component", None, "number of the component", list(range(1, len(components) + 1)))
    ]

    def add(column: str, unit: str | None, text: str, key: str) -> None:
        values: list[Cell] = []
        errors: list[Cell] = []
        for k in range(len(components)):
            name = f"component[{k + 1}].{key}"
            values.append(m.fit.values.get(name))
            error = m.error(name) if name in m.fit.values else None
            errors.append(error if isinstance(error, float) else None)
            if isinstance(error, str):
                notes[k].append(f"{column}: {error}")
        if any(value is not None for value in values):
            columns.append((column, unit, text, values))
            columns.append((f"{column}_err", unit, f"1 sigma error of {column}", errors))

    add("velocity", "km / s", "velocity about z_abs", "velocity")
    add("b", "km / s", "Doppler parameter of turbulence", "b")
    add("temperature", "K", "kinetic temperature", "temperature")
    add("b_turb", "km / s", "turbulent part of the Doppler parameter", "b_turb")
    for ion in dict.fromkeys(ion for component in components for ion in component.logN):
        add(f"logN {ion}", None, f"log10 of the column density of {ion} in cm-2", f'logN["{ion}"]')
    columns.append(("note", None, "why an error is missing", [", ".join(n) for n in notes]))
    return _table(columns, absorber=m.job.absorber.name)


def transitions_table(m: Measurement) -> Table:
    """One row per region: pixels, signal-to-noise, share of the information, χ²."""
    shares = m.shares
    return _table(
        [
            ("transition", None, "ion and label", [s.transition for s in shares]),
            (
                "wavelength",
                "Angstrom",
                "observed vacuum wavelength at z_abs",
                [t.observed_wavelength(m.job.absorber.redshift) for t in m.built.transitions],
            ),
            (
                "sensitivity",
                "m / s",
                "velocity shift per 1e-6 of dalpha/alpha",
                [t.sensitivity for t in m.built.transitions],
            ),
            ("n_pixels", None, "pixels fitted", [s.n_pixels for s in shares]),
            (
                "snr",
                None,
                "median signal-to-noise ratio per pixel at the continuum",
                [s.snr for s in shares],
            ),
            (
                "information",
                None,
                "share of the information on dalpha/alpha; sums to 1",
                [s.information for s in shares],
            ),
            ("chi2", None, "chi squared of its pixels", [s.chi2 for s in shares]),
            (
                "p_chi2",
                None,
                "chance that noise exceeds this chi squared",
                [t.probability for t in m.adequacy.regions],
            ),
            (
                "runs_sigma",
                None,
                "runs of equal sign against noise, in sigma; negative: residuals wander",
                [t.runs for t in m.adequacy.regions],
            ),
            (
                "neighbour_correlation",
                None,
                "correlation of neighbouring residuals",
                [t.correlation for t in m.adequacy.regions],
            ),
            (
                "flags",
                None,
                "what speaks against noise in the residuals",
                ["; ".join(found) for found in m.adequacy.region_problems],
            ),
            ("telluric", None, "telluric ranges that touch it", [s.telluric for s in shares]),
            (
                "chi2_share",
                None,
                "chi squared over that of all pixels",
                [s.chi2 / sum(r.chi2 for r in shares) for s in shares],
            ),
        ],
        absorber=m.job.absorber.name,
    )


def covariance_table(m: Measurement) -> Table:
    """Named covariance of all free parameters: one row and one column for each."""
    covariance = m.fit.covariance
    names = list(covariance.names)
    columns: list[tuple[str, str | None, str, list[Cell]]] = [
        ("parameter", None, "name", list(names)),
        ("value", None, "best value", [m.fit.values[name] for name in names]),
        ("sigma", None, "1 sigma error", [covariance.sigma(name) for name in names]),
        (
            "note",
            None,
            "why an error is missing",
            [covariance.reasons.get(name, "") for name in names],
        ),
    ]
    for j, name in enumerate(names):
        lost = name in covariance.reasons
        columns.append(
            (
                name,
                None,
                f"covariance with {name}",
                [
                    None if lost or other in covariance.reasons else float(covariance.matrix[i, j])
                    for i, other in enumerate(names)
                ],
            )
        )
    return _table(columns, absorber=m.job.absorber.name, alpha=ALPHA)
