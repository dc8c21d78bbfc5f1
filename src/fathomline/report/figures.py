"""The figures of a measurement, as matplotlib figures at print size.

`velocity_stack` shows every region against velocity, `residual_summary` whether the residuals
look like noise. The functions return figures; `save_figures` writes them. Nothing here touches
pyplot or the caller's matplotlib settings.
"""

from __future__ import annotations

import io
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

import fathomline
from fathomline.report.marks import Mark, band_height, draw_marks, place_marks
from fathomline.report.panels import (
    Panel,
    draw_flux,
    draw_residuals,
    flux_limits,
    measurement_panels,
)
from fathomline.report.style import (
    COLOURS,
    MM_PER_INCH,
    ONE_COLUMN,
    SMALL_TEXT,
    TEXT,
    TWO_COLUMNS,
    figure_style,
    inches,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.text import Text

    from fathomline.job.measurement import Measurement
from fathomline.report.ensemble_figure import model_ensemble

__all__ = ["FIGURES", "render_figure", "residual_summary", "save_figures", "velocity_stack"]

Array = NDArray[np.float64]

VELOCITY_LABEL = "Velocity from the absorber redshift (km s$^{-1}$)"
FLUX_LABEL = "Normalised flux"
SHORT_FLUX_LABEL = "Norm. flux"
RESIDUAL_LABEL = "Res. (σ)"

_TWO_COLUMNS_FROM = 5  # panels
_LEFT, _BETWEEN, _RIGHT = 12.0, 9.5, 2.5  # mm
_HEADER, _STRIP, _GAP, _BOTTOM = 3.6, 8.5, 2.4, 8.5
_PANEL, _LEAST_PANEL, _PAGE = 23.0, 16.0, 235.0
_ROOM_FOR_LABEL = 21.0
_LEGEND_ROW = 3.6
_SEPARATOR = " · "


@dataclass(frozen=True, slots=True)
class _Sheet:
    """Places axes by millimetres from the upper left corner."""

    figure: Figure
    width: float
    height: float

    def axes(self, x: float, y: float, width: float, height: float) -> Axes:
        box = (
            x / self.width,
            1.0 - (y + height) / self.height,
            width / self.width,
            height / self.height,
        )
        return self.figure.add_axes(box)

    def text(self, x: float, y: float, text: str, **style: Any) -> Text:
        return self.figure.text(x / self.width, 1.0 - y / self.height, text, **style)

    def extent(self, text: Text) -> float:
        """Width of a text, mm."""
        return float(text.get_window_extent().width) / self.figure.dpi * MM_PER_INCH


def _new_sheet(width: float, height: float) -> _Sheet:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(inches(width), inches(height)))
    FigureCanvasAgg(figure)
    return _Sheet(figure, width, height)


def velocity_stack(measurement: Measurement, *, columns: int | None = None) -> Figure:
    """All regions of a measurement against velocity, data over model over components.

    Parameters
    ----------
    measurement : Measurement
        What is drawn.
    columns : {1, 2}, optional
        Columns of panels: 84 or 174 mm wide. Default: two for more than four panels.

    Returns
    -------
    Figure
        A region in several spectra has a panel for each. Panels run down the first column, then
        the second, in the order of the job.

    """
    if columns not in (None, 1, 2):
        raise ValueError(f"columns must be 1 or 2, found {columns!r}")
    panels = measurement_panels(measurement)
    columns = columns or (2 if len(panels) >= _TWO_COLUMNS_FROM else 1)
    with figure_style():
        return _velocity_stack(panels, columns)


def _velocity_stack(panels: Sequence[Panel], columns: int) -> Figure:
    width = TWO_COLUMNS if columns == 2 else ONE_COLUMN
    panel_width = (width - _LEFT - _RIGHT - (columns - 1) * _BETWEEN) / columns
    limits = _velocity_limits(panels)
    marks = [_marks(panel, limits, panel_width) for panel in panels]
    band = band_height(marks)
    rows = math.ceil(len(panels) / columns)
    legend = _LEGEND_ROW * (1 if columns == 2 else 2) + 2.0
    around = _HEADER + band + _STRIP + _GAP
    panel_height = min(_PANEL, max(_LEAST_PANEL, (_PAGE - legend - _BOTTOM) / rows - around))
    block = around + panel_height
    sheet = _new_sheet(width, legend + rows * block - _GAP + _BOTTOM)
    for i, (panel, own) in enumerate(zip(panels, marks, strict=True)):
        column, row = divmod(i, rows)
        x = _LEFT + column * (panel_width + _BETWEEN)
        y = legend + row * block
        last = row == rows - 1 or i == len(panels) - 1
        magnified = _draw_block(
            sheet,
            panel,
            own,
            limits,
            (x, y, panel_width),
            band,
            panel_height,
            first=column == 0,
            last=last,
        )
        _header(sheet, panel, x, y, panel_width, magnified)
    _legend(sheet, panels, columns)
    return sheet.figure


def _velocity_limits(panels: Sequence[Panel]) -> tuple[float, float]:
    return (
        min(min(panel.segment.window[0], float(panel.low[0])) for panel in panels),
        max(max(panel.segment.window[1], float(panel.high[-1])) for panel in panels),
    )


def _marks(panel: Panel, limits: tuple[float, float], width: float) -> list[Mark]:
    scale = width / (limits[1] - limits[0])
    return place_marks(panel.components, [(v - limits[0]) * scale for v in panel.places], width)


def _mark_axes(
    sheet: _Sheet, marks: Sequence[Mark], x: float, y: float, width: float, height: float
) -> None:
    axes = sheet.axes(x, y, width, height)
    axes.set_axis_off()
    axes.set_xlim(0.0, width)
    axes.set_ylim(0.0, height)
    draw_marks(axes, marks)


def _draw_block(
    sheet: _Sheet,
    panel: Panel,
    marks: Sequence[Mark],
    limits: tuple[float, float],
    place: tuple[float, float, float],
    band: float,
    height: float,
    *,
    first: bool,
    last: bool,
) -> float | None:
    """Draw marks, flux and residuals; returns the lower flux limit when it is magnified."""
    x, y, width = place
    _mark_axes(sheet, marks, x, y + _HEADER, width, band)
    top = y + _HEADER + band
    flux = sheet.axes(x, top, width, height)
    low, high, magnified = flux_limits(panel)
    draw_flux(flux, panel, (low, high))
    if not magnified:
        flux.axhline(0.0, color=COLOURS["guide"], linewidth=0.4, zorder=0.8)
    flux.set_yticks(_ticks(low, high, 0.05))
    strip = sheet.axes(x, top + height, width, _STRIP)
    draw_residuals(strip, panel)
    strip.set_yticks([-3.0, 0.0, 3.0])
    for axes in (flux, strip):
        axes.set_xlim(*limits)
        axes.set_xticks(_ticks(*limits, 0.02, 6))
        axes.minorticks_on()
        axes.tick_params(which="both", top=True, right=True)
        axes.tick_params(axis="x", labelbottom=last and axes is strip)
    strip.tick_params(axis="y", which="minor", left=False, right=False)
    long, short = FLUX_LABEL, SHORT_FLUX_LABEL
    if first:
        for axes, label in (
            (flux, long if height >= _ROOM_FOR_LABEL else short),
            (strip, RESIDUAL_LABEL),
        ):
            axes.set_ylabel(label, fontsize=TEXT if axes is flux else SMALL_TEXT)
            axes.yaxis.set_label_coords(-9.3 / width, 0.5)
    if last:
        strip.set_xlabel(VELOCITY_LABEL)
    return low if magnified else None


def _ticks(low: float, high: float, margin: float, most: int = 4) -> list[float]:
    """Round tick values that stay clear of the ends of the axis."""
    from matplotlib.ticker import MaxNLocator

    span = high - low
    ticks = MaxNLocator(nbins=most, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high)
    return [float(t) for t in ticks if low + margin * span <= t <= high - margin * span]


def _header(
    sheet: _Sheet, panel: Panel, x: float, y: float, width: float, magnified: float | None
) -> None:
    """Title on the left, facts on the right; the least needed facts go when they do not fit."""
    base = y + _HEADER - 0.6
    title = sheet.text(
        x, base, panel.title, fontsize=TEXT, fontweight="bold", va="baseline", ha="left"
    )
    facts = [f"λ {panel.segment.rest:.3f} Å"]
    if magnified is not None:
        facts.insert(0, f"axis from {magnified:g}")
    facts.append(f"χ²/n {panel.chi2 / panel.n_fitted:.2f}")
    said = sheet.text(
        x + width, base, _SEPARATOR.join(facts), fontsize=SMALL_TEXT, va="baseline", ha="right"
    )
    while len(facts) > 1 and sheet.extent(title) + sheet.extent(said) + 2.0 > width:
        facts.pop()
        said.set_text(_SEPARATOR.join(facts))


def _legend(sheet: _Sheet, panels: Sequence[Panel], columns: int) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    handles: list[Any] = [
        Patch(facecolor=COLOURS["error"], edgecolor=COLOURS["data"], linewidth=0.55),
        Line2D([], [], color=COLOURS["model"], linewidth=0.9),
        Line2D([], [], color=COLOURS["continuum"], linewidth=0.8, linestyle=(0, (5, 2))),
        Line2D([], [], color=COLOURS["component"], linewidth=0.5),
    ]
    labels = ["data ± 1σ", "model", "continuum", "single components"]
    if any(not panel.segment.good.all() for panel in panels):
        handles.append(
            Patch(
                facecolor=COLOURS["not_fitted"],
                edgecolor=COLOURS["not_fitted_hatch"],
                hatch="//////",
                linewidth=0.0,
            )
        )
        labels.append("not fitted")
    sheet.figure.legend(
        handles,
        labels,
        loc="upper left",
        bbox_to_anchor=(_LEFT / sheet.width, 1.0 - 0.4 / sheet.height),
        ncols=len(labels) if columns == 2 else (len(labels) + 1) // 2,
        borderaxespad=0.0,
        borderpad=0.0,
        handlelength=2.2 if columns == 2 else 1.8,
        handleheight=0.8,
        handletextpad=0.6,
        columnspacing=1.8 if columns == 2 else 1.2,
        labelspacing=0.35,
    )


def residual_summary(measurement: Measurement, *, columns: int = 2) -> Figure:
    """Whether the residuals look like noise: their mean over regions, and their distribution.

    The upper or left panel averages the residuals (in σ) of all fitted pixels in velocity bins one
    pixel wide; independent unit normal residuals scatter by 1/√n about zero, n being the number of
    pixels in the bin. The other panel compares all residuals with the unit normal distribution.

    Parameters
    ----------
    measurement : Measurement
        What is drawn.
    columns : {1, 2}
        84 mm wide with the panels one over the other, or 174 mm with the panels side by side.

    """
    if columns not in (1, 2):
        raise ValueError(f"columns must be 1 or 2, found {columns!r}")
    panels = measurement_panels(measurement)
    with figure_style():
        return _residual_summary(panels, columns)


def _residual_summary(panels: Sequence[Panel], columns: int) -> Figure:
    from matplotlib.ticker import MaxNLocator

    left, height, bottom = 11.0, 38.0, 8.5
    width = 108.0 if columns == 2 else ONE_COLUMN - left - _RIGHT
    limits = _velocity_limits(panels)
    places = {k: v for panel in panels for k, v in zip(panel.components, panel.places, strict=True)}
    scale = width / (limits[1] - limits[0])
    marks = place_marks(list(places), [(v - limits[0]) * scale for v in places.values()], width)
    band = band_height([marks])
    block = _HEADER + band + height + bottom
    sheet = _new_sheet(
        TWO_COLUMNS if columns == 2 else ONE_COLUMN, block if columns == 2 else 2 * block - band
    )
    _mark_axes(sheet, marks, left, _HEADER, width, band)
    composite = sheet.axes(left, _HEADER + band, width, height)
    _draw_composite(composite, panels, limits)
    composite.set_xlim(*limits)
    composite.set_xticks(_ticks(*limits, 0.02, 8 if columns == 2 else 6))
    composite.set_xlabel(VELOCITY_LABEL)
    composite.set_ylabel("Mean residual (σ)")
    sheet.text(
        left,
        _HEADER - 0.6,
        f"Mean over {_counted(len(panels), 'segment')}",
        fontweight="bold",
        va="baseline",
    )
    sheet.text(
        left + width,
        _HEADER - 0.6,
        "bands: ±1/√n and ±2/√n",
        fontsize=SMALL_TEXT,
        va="baseline",
        ha="right",
    )
    if columns == 2:
        x, y = left + width + 11.0, _HEADER
        part = (TWO_COLUMNS - _RIGHT - x, height + band)
    else:
        x, y = left, block + _HEADER
        part = (width, height)
    histogram = sheet.axes(x, y, *part)
    _draw_histogram(histogram, panels)
    histogram.set_xticks([-4.0, -2.0, 0.0, 2.0, 4.0])
    histogram.set_xlabel("Residual (σ)")
    histogram.set_ylabel("Number of pixels")
    sheet.text(x, y - 0.6, "All fitted pixels", fontweight="bold", va="baseline")
    for axes in (composite, histogram):
        axes.minorticks_on()
        axes.tick_params(which="both", top=True, right=True)
        axes.yaxis.set_major_locator(MaxNLocator(nbins=5, steps=[1, 2, 5, 10]))
    return sheet.figure


def _counted(n: int, noun: str) -> str:
    return f"{n} {noun}" if n == 1 else f"{n} {noun}s"


def composite_residual(panels: Sequence[Panel]) -> tuple[Array, Array, Array]:
    """Bin edges (m + 1,) in km/s, mean residual (m,) and number of pixels (m,) in each bin."""
    low, high = _velocity_limits(panels)
    width = max(float(np.median(panel.high - panel.low)) for panel in panels)
    edges: Array = low + width * np.arange(math.ceil((high - low) / width) + 1, dtype=np.float64)
    total, count = np.zeros(edges.size - 1), np.zeros(edges.size - 1)
    for panel in panels:
        good = panel.segment.good
        place = np.clip(((panel.velocity[good] - low) / width).astype(int), 0, total.size - 1)
        np.add.at(total, place, panel.prediction.residual[good])
        np.add.at(count, place, 1.0)
    with np.errstate(invalid="ignore"):
        mean: Array = total / count
    return edges, mean, count


def _draw_composite(axes: Axes, panels: Sequence[Panel], limits: tuple[float, float]) -> None:
    edges, mean, count = composite_residual(panels)
    with np.errstate(divide="ignore"):
        expected = np.where(count > 0, 1.0 / np.sqrt(count), np.nan)
    for factor, alpha in ((2.0, 0.55), (1.0, 1.0)):
        axes.stairs(
            factor * expected,
            edges,
            baseline=-factor * expected,
            fill=True,
            color=COLOURS["band"],
            alpha=alpha,
            linewidth=0.0,
            zorder=1,
        )
    axes.axhline(0.0, color=COLOURS["model"], linewidth=0.6, zorder=2)
    axes.stairs(mean, edges, baseline=None, color=COLOURS["data"], linewidth=0.6, zorder=3)
    largest = float(np.nanmax(np.abs(mean)))
    reach = 1.15 * max(largest, 2.0 * float(np.nanmedian(expected)))
    axes.set_ylim(-reach, reach)


def _without_negative_zero(value: float) -> str:
    text = f"{value:+.2f}"
    return "0.00" if float(text) == 0.0 else text.replace("-", "\N{MINUS SIGN}")


def _draw_histogram(axes: Axes, panels: Sequence[Panel]) -> None:
    residual = np.concatenate([p.prediction.residual[p.segment.good] for p in panels])
    bin_width = 0.5 if residual.size < 2000 else 0.25
    reach = 5.0
    edges = np.arange(-reach, reach + bin_width / 2.0, bin_width)
    counts, _ = np.histogram(np.clip(residual, -reach + 1e-9, reach - 1e-9), edges)
    axes.stairs(counts, edges, fill=True, color=COLOURS["error"], zorder=1)
    axes.stairs(counts, edges, color=COLOURS["data"], linewidth=0.55, zorder=2)
    x = np.linspace(-reach, reach, 201)
    normal = residual.size * bin_width * np.exp(-0.5 * x**2) / math.sqrt(2.0 * math.pi)
    axes.plot(x, normal, color=COLOURS["model"], linewidth=0.9, zorder=3)
    axes.set_xlim(-reach, reach)
    top = 1.38 * max(float(counts.max()), float(normal.max()))
    axes.set_ylim(0.0, top)
    notes = [
        f"n = {residual.size}",
        f"mean {_without_negative_zero(float(residual.mean()))}",
        f"scatter {residual.std():.2f}",
    ]
    axes.text(
        0.04,
        0.965,
        "\n".join(notes),
        transform=axes.transAxes,
        va="top",
        ha="left",
        fontsize=SMALL_TEXT,
        linespacing=1.35,
    )
    axes.text(
        0.96,
        0.965,
        "line: unit\nnormal",
        transform=axes.transAxes,
        va="top",
        ha="right",
        fontsize=SMALL_TEXT,
        linespacing=1.35,
        color=COLOURS["model"],
    )


FIGURES: dict[str, Callable[[Measurement], Figure]] = {
    "velocity-stack": velocity_stack,
    "residual-summary": residual_summary,
}
"""The figures of a measurement, by the name of their files."""

_METADATA: dict[str, dict[str, str | None]] = {
    # None takes out what would differ from one run to the next
    "pdf": {
        "Creator": f"fathomline {fathomline.__version__}",
        "Producer": None,
        "CreationDate": None,
    },
    "png": {"Software": f"fathomline {fathomline.__version__}"},
    "svg": {"Creator": None, "Date": None, "Format": None, "Type": None},
}


def render_figure(figure: Figure, kind: str) -> bytes:
    """Bytes of a figure as ``"pdf"``, ``"png"`` (200 dpi) or ``"svg"``; the same on every call."""
    buffer = io.BytesIO()
    with figure_style():
        figure.savefig(buffer, format=kind, dpi=200, metadata=_METADATA[kind])
    return buffer.getvalue()


def save_figures(measurement: Measurement, folder: Path) -> list[Path]:
    """Write every figure of a measurement as PDF and PNG.

    Parameters
    ----------
    measurement : Measurement
        What is drawn.
    folder : Path
        Made if it does not exist.

    Returns
    -------
    list of Path
        The files, in the order written.

    """
    folder.mkdir(parents=True, exist_ok=True)
    written = []
    drawn = dict(FIGURES)
    if measurement.ensemble is not None:
        drawn["model-ensemble"] = model_ensemble
    for name, draw in drawn.items():
        figure = draw(measurement)
        for kind in ("pdf", "png"):
            path = folder / f"{name}.{kind}"
            path.write_bytes(render_figure(figure, kind))
            written.append(path)
    return written
