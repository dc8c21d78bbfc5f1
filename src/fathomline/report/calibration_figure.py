"""The figure of a calibration: measured shifts, the fitted distortion, and what is left."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fathomline.report.numbers import value_with_error
from fathomline.report.style import COLOURS, SMALL_TEXT, TWO_COLUMNS, figure_style, inches

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fathomline.report.calibration import Calibration

__all__ = ["calibration_figure"]

Array = NDArray[np.float64]

_LEFT, _RIGHT, _TOP, _BOTTOM = 14.5, 2.5, 12.5, 9.0  # mm
_UPPER, _LOWER, _GAP = 48.0, 24.0, 2.2
_VAGUE = 4.0  # times the first quartile of the errors: larger ones do not stretch the scale

_UNITS = {"slope": "m s⁻¹ per 1000 Å"}


def calibration_figure(calibration: Calibration) -> Figure:
    """Shifts with error bars and fit over the residuals, 174 mm wide.

    Parameters
    ----------
    calibration
        What is drawn. Points beyond the scale are arrows at its edge.

    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    with figure_style():
        height = _TOP + _UPPER + _GAP + _LOWER + _BOTTOM
        figure = Figure(figsize=(inches(TWO_COLUMNS), inches(height)))
        FigureCanvasAgg(figure)
        width = (TWO_COLUMNS - _LEFT - _RIGHT) / TWO_COLUMNS
        left = _LEFT / TWO_COLUMNS
        upper = figure.add_axes((left, (_BOTTOM + _LOWER + _GAP) / height, width, _UPPER / height))
        lower = figure.add_axes((left, _BOTTOM / height, width, _LOWER / height), sharex=upper)
        _draw(calibration, upper, lower)
        _titles(calibration, figure, height)
        upper.tick_params(labelbottom=False)
        for axes in (upper, lower):
            axes.minorticks_on()
            axes.tick_params(which="both", top=True, right=True)
        lower.set_xlabel("Vacuum wavelength (Å)")
        upper.set_ylabel("Velocity shift (m s$^{-1}$)")
        lower.set_ylabel("Residual (m s$^{-1}$)")
        figure.align_ylabels([upper, lower])
    return figure


def _draw(calibration: Calibration, upper: Axes, lower: Axes) -> None:
    fit = calibration.fit
    wave, velocity, error = calibration.wavelength, calibration.velocity, calibration.error
    span = float(np.ptp(wave)) or 100.0
    low, high = float(wave.min()) - 0.03 * span, float(wave.max()) + 0.03 * span
    upper.set_xlim(low, high)
    grid = np.linspace(low, high, 4001)
    model, model_error = fit.velocity(grid), fit.velocity_error(grid)
    residual = velocity - fit.velocity(wave)
    shown = fit.used & (error <= _VAGUE * np.percentile(error[fit.used], 25.0))
    inside = (grid >= wave.min()) & (grid <= wave.max())

    upper.fill_between(
        grid, model - model_error, model + model_error, color=COLOURS["band"], linewidth=0.0,
        zorder=1, label="±1σ of the fit",
    )  # fmt: skip
    if fit.scatter > 0.0:
        lower.fill_between(
            [low, high], -fit.scatter, fit.scatter, color=COLOURS["not_fitted"], linewidth=0.0,
            zorder=1,
        )  # fmt: skip
    upper.plot(grid, model, color=COLOURS["model"], linewidth=0.9, zorder=4, label="fit")
    if len(fit.terms) > 1:
        _draw_terms(calibration, upper, grid)
    upper.axhline(0.0, color=COLOURS["guide"], linewidth=0.4, zorder=2)
    lower.axhline(0.0, color=COLOURS["model"], linewidth=0.9, zorder=4)
    _points(upper, calibration, velocity, shown, _limits(
        np.concatenate([(velocity - error)[shown], (model - model_error)[inside], [0.0]]),
        np.concatenate([(velocity + error)[shown], (model + model_error)[inside], [0.0]]),
    ))  # fmt: skip
    reach = float(np.max(np.abs(residual[shown]) + error[shown]))
    _points(lower, calibration, residual, shown, (-1.1 * reach, 1.1 * reach))
    notes = ["grey: large errors"] if np.any(fit.used & ~shown) else []
    notes += ["open: set aside"] if not fit.used.all() else []
    notes += ["lower band: ± scatter"] if fit.scatter > 0.0 else []
    upper.text(
        0.0, 1.022, " · ".join(notes), transform=upper.transAxes, fontsize=SMALL_TEXT, va="bottom"
    )
    handles, labels = upper.get_legend_handles_labels()
    upper.legend(
        handles, labels, loc="lower right", bbox_to_anchor=(1.003, 1.0), ncols=len(labels),
        borderaxespad=0.2, borderpad=0.0, handlelength=2.0, handletextpad=0.5, columnspacing=1.4,
    )  # fmt: skip


def _limits(low: Array, high: Array) -> tuple[float, float]:
    bottom, top = float(low.min()), float(high.max())
    margin = 0.06 * (top - bottom)
    return bottom - margin, top + margin


def _draw_terms(calibration: Calibration, axes: Axes, grid: Array) -> None:
    basis = calibration.fit.basis(grid)
    dashes = {"shift": (0, (5, 2)), "slope": (0, (1, 1.2)), "sawtooth": (0, (4, 1.2, 1, 1.2))}
    colours = {
        "shift": COLOURS["component"],
        "slope": COLOURS["continuum"],
        "sawtooth": COLOURS["reference"],
    }
    for k, term in enumerate(calibration.fit.terms):
        axes.plot(
            grid, term.value * basis[:, k], color=colours[term.kind], linewidth=0.8,
            linestyle=dashes[term.kind], zorder=3, label=term.kind,
        )  # fmt: skip


def _points(
    axes: Axes,
    calibration: Calibration,
    values: Array,
    shown: NDArray[np.bool_],
    limits: tuple[float, float],
) -> None:
    wave, error, used = calibration.wavelength, calibration.error, calibration.fit.used
    axes.set_ylim(*limits)
    # precise points on top of vague ones
    for chosen, colour, face, order in (
        (used & ~shown, COLOURS["error"], COLOURS["error"], 5),
        (~used, COLOURS["data"], "white", 6),
        (shown, COLOURS["data"], COLOURS["data"], 7),
    ):
        within = chosen & (values >= limits[0]) & (values <= limits[1])
        if within.any():
            axes.errorbar(
                wave[within], values[within], error[within], linestyle="none", marker="o",
                markersize=2.2, markerfacecolor=face, markeredgecolor=colour, markeredgewidth=0.6,
                ecolor=colour, elinewidth=0.6, capsize=0.0, zorder=order,
            )  # fmt: skip
        for beyond, marker, edge in (
            (chosen & (values < limits[0]), "v", 0.0),
            (chosen & (values > limits[1]), "^", 1.0),
        ):
            if beyond.any():
                axes.plot(
                    wave[beyond], np.full(int(beyond.sum()), edge), linestyle="none",
                    marker=marker, markersize=3.2, markerfacecolor=face, markeredgecolor=colour,
                    markeredgewidth=0.6, zorder=order, clip_on=False,
                    transform=axes.get_xaxis_transform(),
                )  # fmt: skip


def _titles(calibration: Calibration, figure: Figure, height: float) -> None:
    fit = calibration.fit
    names = f"{calibration.spectrum} relative to {calibration.relative_to}"
    if len(names) > 60:
        names = names[:59] + "…"
    figure.text(
        _LEFT / TWO_COLUMNS, 1.0 - 3.6 / height, names, fontweight="bold", va="baseline",
        parse_math=False,
    )  # fmt: skip
    values = []
    for term in fit.terms:
        about = f" about {fit.pivot:.6g} Å" if term.kind == "slope" else ""
        unit = _UNITS.get(term.kind, "m s⁻¹") + about
        values.append(f"{term.kind} {value_with_error(term.value, term.error)} {unit}")
    if fit.scatter_error is not None:
        values.append(f"scatter {value_with_error(fit.scatter, fit.scatter_error)} m s⁻¹")
    figure.text(
        _LEFT / TWO_COLUMNS, 1.0 - 7.6 / height, "; ".join(values), fontsize=SMALL_TEXT,
        va="baseline", parse_math=False,
    )  # fmt: skip
