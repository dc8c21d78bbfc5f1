"""The figure of an ensemble of velocity structures: how much the answer depends on the model."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fathomline.job.ensemble import ACCEPTED, Ensemble
from fathomline.job.measurement import Measurement
from fathomline.report.style import COLOURS, ONE_COLUMN, SMALL_TEXT, figure_style, inches

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["model_ensemble"]

_HEIGHT = 66.0  # mm
_RANGE = 25.0  # ΔAICc beyond which a structure is drawn at the edge


def model_ensemble(measurement: Measurement) -> Figure:
    """Δα/α of every structure against its AICc above the best, with the between-model band.

    Raises
    ------
    ValueError
        The measurement has no ensemble.

    """
    if measurement.ensemble is None:
        raise ValueError("this measurement has no ensemble of structures")
    from matplotlib.figure import Figure

    with figure_style():
        figure = Figure(figsize=(inches(ONE_COLUMN), inches(_HEIGHT)), layout="constrained")
        _draw(figure, measurement.ensemble)
    return figure


def _draw(figure: Figure, ensemble: Ensemble) -> None:
    axes = figure.add_subplot()
    best = ensemble.members[0].aicc
    accepted = {id(member) for member in ensemble.accepted}
    axes.axhspan(
        ensemble.mean - ensemble.between,
        ensemble.mean + ensemble.between,
        color=COLOURS["band"],
        lw=0,
    )
    axes.axhline(ensemble.mean, color=COLOURS["model"], lw=0.9)
    axes.axvline(ACCEPTED, color=COLOURS["guide"], lw=0.6, ls=(0, (4, 2)))
    for thermal, marker, name in ((False, "o", "turbulent"), (True, "D", "thermal")):
        members = [m for m in ensemble.members if m.thermal is thermal]
        if not members:
            continue
        x = np.array([min(m.aicc - best, _RANGE) for m in members])
        y = np.array([m.dalpha for m in members])
        axes.errorbar(
            x,
            y,
            yerr=[m.stat or 0.0 for m in members],
            fmt="none",
            ecolor=COLOURS["error"],
            elinewidth=0.7,
            zorder=2,
        )
        filled = [COLOURS["component"] if id(m) in accepted else "white" for m in members]
        axes.scatter(
            x, y, s=16, marker=marker, c=filled, edgecolors=COLOURS["component"], linewidths=0.8,
            zorder=3, label=name,
        )  # fmt: skip
        for member, place, value in zip(members, x, y, strict=True):
            axes.annotate(
                str(len(member.clouds)),
                (place, value),
                xytext=(4, 3),
                textcoords="offset points",
                fontsize=SMALL_TEXT,
                color=COLOURS["guide"],
            )
    axes.set_xlim(-1.2, max(ACCEPTED + 2.0, min(_RANGE + 1.0, _widest(ensemble) + 1.5)))
    axes.set_xlabel("AICc above the best structure")
    axes.set_ylabel("Δα/α (ppm)")
    axes.minorticks_on()
    text = f"mean {ensemble.mean:.2f}, between models {ensemble.between:.2f} ppm"
    axes.set_title(text, loc="left", fontsize=SMALL_TEXT)
    axes.legend(loc="best", frameon=False, handletextpad=0.2, borderaxespad=0.3)


def _widest(ensemble: Ensemble) -> float:
    return max(member.aicc for member in ensemble.members) - ensemble.members[0].aicc
