"""One region in one spectrum, drawn: data, model, components, residuals.

Velocities are in km/s about the absorber redshift, v = c (λ/λ0 − 1) with λ0 the wavelength of the
region's transition at that redshift. Flux and continuum are in units of the file's continuum.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fathomline.constants import C_KMS
from fathomline.model import SegmentPrediction, SegmentTerms
from fathomline.report.style import COLOURS

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from fathomline.job.measurement import Measurement

__all__ = [
    "RESIDUAL_LIMIT",
    "Panel",
    "draw_flux",
    "draw_not_fitted",
    "draw_residuals",
    "flux_limits",
    "measurement_panels",
    "steps",
]

Array = NDArray[np.float64]

RESIDUAL_LIMIT = 4.5
"""Residuals beyond this many σ are drawn as triangles at the edge of their strip."""

_WEAK_DEPTH = 0.6  # a line that stays above 1 − this is drawn on a magnified scale
_SEEN = 1e-3  # absorption of a component below this is not drawn
_JOIN = 1e-3  # km/s: pixel edges closer than this are the same edge


@dataclass(frozen=True)
class Panel:
    """What a panel shows.

    Attributes
    ----------
    segment, prediction
        As fitted.
    velocity, low, high : array (n,)
        Pixel centres and edges, km/s.
    several : bool
        Whether the region has more than one spectrum, so that the title must say which.
    components : tuple of int
        Numbers, from 1, of the components that have the ion of the region.
    places : tuple of float
        Their velocities, km/s.

    """

    segment: SegmentTerms
    prediction: SegmentPrediction
    velocity: Array
    low: Array
    high: Array
    several: bool
    components: tuple[int, ...]
    places: tuple[float, ...]

    @property
    def title(self) -> str:
        """Transition, and the spectrum where there are several."""
        segment = self.segment
        return f"{segment.name}, {segment.spectrum}" if self.several else segment.name

    @property
    def n_fitted(self) -> int:
        """Number of fitted pixels."""
        return int(self.segment.good.sum())

    @property
    def chi2(self) -> float:
        """χ² of the fitted pixels."""
        return float(np.nansum(self.prediction.residual**2))


def measurement_panels(measurement: Measurement) -> list[Panel]:
    """One panel for each segment of a measurement, in its order."""
    model = measurement.built.model
    theta = model.parameters.expand(measurement.fit.free)
    counts = [s.region for s in model.segments]
    panels = []
    for segment, prediction in zip(model.segments, measurement.predictions, strict=True):
        centre = segment.centre
        ion = segment.name.rpartition(" ")[0]
        mine = [(k, c) for k, c in enumerate(model.components, start=1) if ion in c.log_columns]
        panels.append(
            Panel(
                segment,
                prediction,
                velocity=segment.velocity,
                low=C_KMS * (segment.edges_low / centre - 1.0),
                high=C_KMS * (segment.edges_high / centre - 1.0),
                several=counts.count(segment.region) > 1,
                components=tuple(k for k, _ in mine),
                places=tuple(float(theta[c.velocity]) for _, c in mine),
            )
        )
    return panels


def steps(low: Array, high: Array, values: Array) -> tuple[Array, Array]:
    """Values (m,) and edges (m + 1,) of a step line; gaps between pixels become nan steps."""
    if values.size == 0:
        return values, np.zeros(1)
    breaks = np.flatnonzero(low[1:] - high[:-1] > _JOIN) + 1
    edges = np.insert(np.append(low, high[-1]), breaks, high[breaks - 1])
    return np.insert(values.astype(np.float64), breaks, np.nan), edges


def _runs(mask: NDArray[np.bool_]) -> Iterator[tuple[int, int]]:
    """First and last index of each run of True."""
    edge = np.diff(np.concatenate([[False], mask, [False]]).astype(int))
    for first, end in zip(np.flatnonzero(edge == 1), np.flatnonzero(edge == -1), strict=True):
        yield int(first), int(end) - 1


def flux_limits(panel: Panel) -> tuple[float, float, bool]:
    """Lower and upper limit of the flux axis, and whether it is magnified for a weak line.

    A strong line is shown from just below zero. A line whose model stays high is shown from a
    rounded limit that leaves room for its depth and the noise.
    """
    good = panel.segment.good
    model = panel.prediction.flux[good]
    level = panel.prediction.continuum[good]
    noise = float(np.median(panel.segment.error[good]))
    top = float(level.max())
    depth = top - float(model.min())
    if float(model.min()) < 1.0 - _WEAK_DEPTH or noise > 0.15:
        return -0.09, top + max(0.13, min(4.0 * noise, 0.8)), False
    span = max(1.12 * depth + 2.5 * noise, 8.0 * noise, 0.02)
    unit = 10.0 ** math.floor(math.log10(span)) / 5.0
    low = round(math.floor((top - span) / unit + 1e-9) * unit, 6)
    if low <= 0.2:
        return -0.09, top + max(0.13, 4.0 * noise), False
    return low, top + max(4.0 * noise, 0.1 * span), True


def draw_not_fitted(axes: Axes, panel: Panel) -> None:
    """Mark the pixels that are not fitted by a hatched band."""
    for first, last in _runs(~panel.segment.good):
        axes.axvspan(
            float(panel.low[first]),
            float(panel.high[last]),
            facecolor=COLOURS["not_fitted"],
            edgecolor=COLOURS["not_fitted_hatch"],
            hatch="//////",
            linewidth=0.0,
            zorder=0.5,
        )


def draw_flux(axes: Axes, panel: Panel, limits: tuple[float, float]) -> None:
    """Data with their errors, the model, the continuum and each component alone."""
    segment, prediction = panel.segment, panel.prediction
    good = segment.good
    reach = limits[1] - limits[0]

    def near(values: Array) -> Array:
        # what lies far outside the axis only makes files large
        result: Array = np.clip(values, limits[0] - reach, limits[1] + reach)
        return result

    draw_not_fitted(axes, panel)
    fitted = np.where(good, segment.data, np.nan)
    upper, edges = steps(panel.low, panel.high, near(fitted + segment.error))
    lower, _ = steps(panel.low, panel.high, near(fitted - segment.error))
    axes.stairs(
        upper, edges, baseline=lower, fill=True, color=COLOURS["error"], linewidth=0.0, zorder=1
    )
    if not good.all():
        beside = ~good
        beside[1:] |= ~good[:-1]  # so that the line meets its fitted neighbours
        beside[:-1] |= ~good[1:]
        rest = np.where(beside & np.isfinite(segment.data), segment.data, np.nan)
        values, _ = steps(panel.low, panel.high, near(rest))
        axes.stairs(
            values,
            edges,
            baseline=None,
            color=COLOURS["not_fitted_data"],
            linewidth=0.5,
            zorder=1.5,
        )
    values, _ = steps(panel.low, panel.high, near(fitted))
    axes.stairs(values, edges, baseline=None, color=COLOURS["data"], linewidth=0.55, zorder=2)
    for transmission in prediction.components:
        shown = 1.0 - transmission > _SEEN
        shown[1:] |= shown[:-1]
        shown[:-1] |= shown[1:]
        if shown.any():
            alone = np.where(shown, prediction.continuum * transmission, np.nan)
            axes.plot(
                panel.velocity, near(alone), color=COLOURS["component"], linewidth=0.45, zorder=3
            )
    axes.plot(
        panel.velocity,
        prediction.continuum,
        color=COLOURS["continuum"],
        linewidth=0.7,
        linestyle=(0, (5, 2)),
        zorder=4,
    )
    axes.plot(
        panel.velocity, near(prediction.flux), color=COLOURS["model"], linewidth=0.85, zorder=5
    )
    axes.set_ylim(*limits)


def draw_residuals(axes: Axes, panel: Panel) -> None:
    """Residuals in σ with lines at ±1, hatched where pixels are not fitted."""
    draw_not_fitted(axes, panel)
    axes.axhline(0.0, color=COLOURS["model"], linewidth=0.6, zorder=1.5)
    for level in (-1.0, 1.0):
        axes.axhline(
            level, color=COLOURS["guide"], linewidth=0.45, linestyle=(0, (3, 2)), zorder=1.4
        )
    residual = panel.prediction.residual
    values, edges = steps(panel.low, panel.high, residual)
    axes.stairs(values, edges, baseline=None, color=COLOURS["data"], linewidth=0.45, zorder=2)
    for sign, marker in ((1.0, "^"), (-1.0, "v")):
        beyond = sign * np.nan_to_num(residual) > RESIDUAL_LIMIT
        if beyond.any():
            axes.plot(
                panel.velocity[beyond],
                np.full(int(beyond.sum()), sign * (RESIDUAL_LIMIT - 0.65)),
                linestyle="none",
                marker=marker,
                markersize=2.8,
                markeredgewidth=0.0,
                color=COLOURS["model"],
                zorder=3,
            )
    axes.set_ylim(-RESIDUAL_LIMIT, RESIDUAL_LIMIT)
