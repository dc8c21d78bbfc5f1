"""The report of a measurement: one HTML page that needs nothing but itself."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import fathomline
from fathomline.report import content
from fathomline.report.ensemble_figure import model_ensemble
from fathomline.report.figures import residual_summary, velocity_stack
from fathomline.report.panels import measurement_panels
from fathomline.report.svg import inline_svg

if TYPE_CHECKING:
    from fathomline.job.measurement import Measurement

__all__ = ["render_report"]

DEFAULT_COMMAND = "fathomline measure FILE"


@dataclass(frozen=True, slots=True)
class _Drawing:
    """One figure of the page: the wide form, and one for narrow screens where it differs."""

    wide: str
    narrow: str
    wide_millimetres: float


def render_report(measurement: Measurement, *, command: str = "") -> str:
    """The report as a self-contained HTML page.

    Parameters
    ----------
    measurement : Measurement
        What is reported.
    command : str
        The command that repeats the run; a generic one when empty.

    Returns
    -------
    str
        HTML with styles and figures inside; it loads nothing and runs no script. The same
        measurement gives the same text.

    """
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("fathomline.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    job = measurement.job
    provenance = measurement.provenance()
    atomic, sources = content.atomic_table(measurement)
    return environment.get_template("report.html.j2").render(
        absorber=job.absorber,
        version=fathomline.__version__,
        command=command or DEFAULT_COMMAND,
        headline=content.headline(measurement),
        statuses=content.statuses(measurement),
        trustworthy=measurement.trustworthy,
        converged=measurement.fit.converged,
        n_components=len(job.components),
        n_transitions=len({t.name for t in measurement.built.transitions}),
        stack=_stack(measurement),
        residuals=_residuals(measurement),
        ensemble=_ensemble(measurement),
        structure=content.structure_table(measurement),
        transitions=content.transitions_text(measurement),
        components=content.components_text(measurement),
        others=content.others_table(measurement),
        changes=measurement.built.atoms.changes,
        restarts=content.restarts_table(measurement),
        all_returned=all(r.returned for r in measurement.fit.restarts),
        proved=measurement.fit.converged,
        atomic=atomic,
        sources=sources,
        tables=provenance["atomic_data"]["tables"],
        inputs=content.input_files(measurement),
        settings=content.settings(measurement),
        versions=provenance["versions"],
        warnings=provenance["warnings"],
    )


def _stack(measurement: Measurement) -> _Drawing:
    panels = measurement_panels(measurement)
    label = (
        f"Absorption of {measurement.job.absorber.name} against velocity in {len(panels)} panels: "
        f"{', '.join(panel.title for panel in panels)}. Each shows data, model, continuum and "
        "single components, with residuals in units of the error below."
    )
    wide = velocity_stack(measurement)
    narrow = velocity_stack(measurement, columns=1)
    same = wide.get_figwidth() == narrow.get_figwidth()
    return _Drawing(
        inline_svg(wide, "stack", label),
        "" if same else inline_svg(narrow, "stack-narrow", label),
        wide.get_figwidth() * 25.4,
    )


def _ensemble(measurement: Measurement) -> _Drawing | None:
    if measurement.ensemble is None:
        return None
    figure = model_ensemble(measurement)
    label = "Change of the fine-structure constant of every structure against its AICc"
    return _Drawing(inline_svg(figure, "ensemble", label), "", figure.get_figwidth() * 25.4)


def _residuals(measurement: Measurement) -> _Drawing:
    label = (
        "Left or upper panel: residuals averaged over all segments against velocity, with the "
        "scatter expected of noise. Other panel: histogram of all residuals with the unit normal "
        "distribution."
    )
    wide = residual_summary(measurement)
    return _Drawing(
        inline_svg(wide, "residuals", label),
        inline_svg(residual_summary(measurement, columns=1), "residuals-narrow", label),
        wide.get_figwidth() * 25.4,
    )
