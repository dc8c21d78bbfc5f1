import itertools
import re
from dataclasses import replace

import matplotlib
import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text

from fathomline.report import residual_summary, save_figures, velocity_stack
from fathomline.report.figures import composite_residual, render_figure
from fathomline.report.marks import place_marks, spread
from fathomline.report.panels import (
    draw_flux,
    draw_residuals,
    flux_limits,
    measurement_panels,
    steps,
)
from fathomline.report.style import SMALL_TEXT
from report_support import small_measurement


@pytest.fixture(scope="module")
def measurement(tmp_path_factory):
    return small_measurement(tmp_path_factory.mktemp("report"))


DRAWINGS = [
    (velocity_stack, 1),
    (velocity_stack, 2),
    (residual_summary, 1),
    (residual_summary, 2),
]


def shown_texts(figure):
    """Every visible text with its box on the Agg canvas, pixels."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    renderer = canvas.get_renderer()
    found = []
    for text in figure.findobj(Text):
        if text.get_visible() and text.get_text().strip():
            box = text.get_window_extent(renderer)
            if box.width > 0 and _drawn(text, figure):
                found.append((text, box))
    return found


def _drawn(text, figure):
    """Whether a tick label belongs to a tick inside its axis; other texts always are drawn."""
    for axes in figure.axes:
        for axis, limits in ((axes.xaxis, axes.get_xlim()), (axes.yaxis, axes.get_ylim())):
            for tick in (*axis.get_major_ticks(), *axis.get_minor_ticks()):
                for label, on in ((tick.label1, True), (tick.label2, False)):
                    if label is text:
                        low, high = sorted(limits)
                        shown = axis.get_tick_params(which="major")
                        name = "labelbottom" if axis is axes.xaxis else "labelleft"
                        return (
                            on
                            and axes.axison
                            and shown.get(name, True)
                            and low - 1e-9 <= tick.get_loc() <= high + 1e-9
                        )
    return True


@pytest.mark.parametrize(("draw", "columns"), DRAWINGS)
def test_no_text_overlaps_another_and_none_is_cut_off(measurement, draw, columns):
    figure = draw(measurement, columns=columns)
    texts = shown_texts(figure)
    assert len(texts) > 20
    for (a, box_a), (b, box_b) in itertools.combinations(texts, 2):
        overlap_x = min(box_a.x1, box_b.x1) - max(box_a.x0, box_b.x0)
        overlap_y = min(box_a.y1, box_b.y1) - max(box_a.y0, box_b.y0)
        # boxes reach beyond the ink by about a pixel
        assert min(overlap_x, overlap_y) < 1.0, (a.get_text(), b.get_text())
    page = figure.bbox
    for text, box in texts:
        assert box.x0 >= page.x0 - 1, text.get_text()
        assert box.x1 <= page.x1 + 1, text.get_text()
        assert box.y0 >= page.y0 - 1, text.get_text()
        assert box.y1 <= page.y1 + 1, text.get_text()


@pytest.mark.parametrize(("draw", "columns"), DRAWINGS)
def test_text_is_large_enough_and_the_width_is_that_of_the_journal(measurement, draw, columns):
    figure = draw(measurement, columns=columns)
    assert min(text.get_fontsize() for text, _ in shown_texts(figure)) >= SMALL_TEXT >= 6.5
    assert figure.get_figwidth() * 25.4 == pytest.approx({1: 84.0, 2: 174.0}[columns])


def test_axes_say_what_they_show_and_in_which_unit(measurement):
    labels = {axes.get_xlabel() for axes in velocity_stack(measurement).axes}
    labels |= {axes.get_ylabel() for axes in velocity_stack(measurement).axes}
    assert any("Velocity" in label and "km s$^{-1}$" in label for label in labels)
    assert any("flux" in label for label in labels)
    assert any("σ" in label for label in labels)
    for axes in residual_summary(measurement).axes:
        if axes.axison:
            assert re.search(r"km s|σ", axes.get_xlabel())
            assert axes.get_ylabel()


def test_every_segment_has_a_panel_and_spectra_are_named_where_there_are_two(measurement):
    panels = measurement_panels(measurement)
    titles = [panel.title for panel in panels]
    assert titles == [
        "Fe II 2374",
        "Fe II 2382, one",
        "Fe II 2382, two",
        "Fe II 2600",
        "Mg II 2796",
        "Mg II 2803",
    ]
    written = {text.get_text() for text, _ in shown_texts(velocity_stack(measurement))}
    assert set(titles) <= written
    assert "not fitted" in written


def test_a_weak_line_gets_a_magnified_axis_that_says_so(measurement):
    weak = measurement_panels(measurement)[0]
    low, high, magnified = flux_limits(weak)
    assert magnified
    assert 0.2 < low < weak.prediction.flux[weak.segment.good].min()
    assert high > 1.0
    written = [text.get_text() for text, _ in shown_texts(velocity_stack(measurement))]
    assert any(f"axis from {low:g}" in text for text in written)


def test_masked_pixels_without_a_number_and_wild_values_can_be_drawn(measurement):
    panel = measurement_panels(measurement)[0]
    data, error = panel.segment.data.copy(), panel.segment.error.copy()
    good, residual = panel.segment.good.copy(), panel.prediction.residual.copy()
    good[5:12] = False
    data[5:8], data[8:12], error[5:12] = np.nan, np.inf, -1.0
    residual[5:12] = np.nan
    data[20], residual[20], residual[21] = 1e6, 1e8, -1e8  # a fitted outlier
    segment = replace(panel.segment, data=data, error=error, good=good)
    strange = replace(
        panel, segment=segment, prediction=replace(panel.prediction, residual=residual)
    )
    figure = velocity_stack(measurement)
    flux, strip = figure.axes[1:3]
    draw_flux(flux, strange, (0.5, 1.1))
    draw_residuals(strip, strange)
    assert flux.get_ylim() == (0.5, 1.1)
    assert len(render_figure(figure, "svg")) < 3_000_000


def test_a_wrong_number_of_columns_is_refused(measurement):
    for draw in (velocity_stack, residual_summary):
        with pytest.raises(ValueError, match="columns must be 1 or 2"):
            draw(measurement, columns=3)


def test_the_composite_averages_what_it_says(measurement):
    panels = measurement_panels(measurement)
    edges, mean, count = composite_residual(panels)
    assert count.sum() == sum(panel.n_fitted for panel in panels)
    total = sum(float(np.nansum(panel.prediction.residual)) for panel in panels)
    assert np.nansum(mean * count) == pytest.approx(total)
    k = int(np.argmax(count))
    inside = [
        panel.prediction.residual[
            panel.segment.good & (panel.velocity >= edges[k]) & (panel.velocity < edges[k + 1])
        ]
        for panel in panels
    ]
    assert mean[k] == pytest.approx(np.concatenate(inside).mean())


def test_numbers_keep_their_order_and_their_distance():
    rng = np.random.default_rng(11)
    for n in (1, 2, 7, 20):
        x = np.sort(rng.uniform(20.0, 50.0, n))
        y = spread(x, np.full(n - 1, 3.0), 0.0, 70.0)
        assert (np.diff(y) >= 3.0 - 1e-9).all()
        assert y.min() >= 0.0
        assert y.max() <= 70.0
    # places that are far enough apart already stay where they are
    np.testing.assert_allclose(spread(np.array([5.0, 9.0]), np.array([3.0]), 0.0, 70.0), [5.0, 9.0])
    # a pair is moved apart symmetrically, which is the least-squares solution
    np.testing.assert_allclose(spread(np.array([5.0, 6.0]), np.array([3.0]), 0.0, 70.0), [4.0, 7.0])


@pytest.mark.parametrize(("n", "rows", "numbered"), [(3, 1, 3), (30, 2, 30), (120, 2, 24)])
def test_crowded_numbers_use_two_rows_and_then_some_are_left_out(n, rows, numbered):
    x = np.linspace(5.0, 65.0, n)
    marks = place_marks(range(1, n + 1), x.tolist(), 70.0)
    labels = [mark for mark in marks if mark.label_x is not None]
    assert len(marks) == n
    assert 1 + max(mark.row for mark in labels) == rows
    assert len(labels) >= numbered
    assert place_marks([1], [80.0], 70.0) == []


def test_a_gap_between_pixels_interrupts_the_step_line():
    low, high = np.array([0.0, 1.0, 5.0]), np.array([1.0, 2.0, 6.0])
    values, edges = steps(low, high, np.array([7.0, 8.0, 9.0]))
    np.testing.assert_array_equal(values, [7.0, 8.0, np.nan, 9.0])
    np.testing.assert_array_equal(edges, [0.0, 1.0, 2.0, 5.0, 6.0])


def test_files_are_the_same_each_time_and_fonts_are_embedded(measurement, tmp_path):
    first = save_figures(measurement, tmp_path / "a")
    second = save_figures(measurement, tmp_path / "b")
    assert [path.name for path in first] == [
        "velocity-stack.pdf",
        "velocity-stack.png",
        "residual-summary.pdf",
        "residual-summary.png",
    ]
    for a, b in zip(first, second, strict=True):
        assert a.read_bytes() == b.read_bytes()
        if a.suffix == ".pdf":
            assert b"/FontFile2" in a.read_bytes()  # TrueType, embedded
            assert b"CreationDate" not in a.read_bytes()
    figure = residual_summary(measurement)
    assert render_figure(figure, "svg") == render_figure(figure, "svg")


def test_the_callers_settings_neither_matter_nor_change(measurement):
    plain = render_figure(residual_summary(measurement), "png")
    with matplotlib.rc_context({"font.size": 20.0, "axes.facecolor": "red"}):
        before = dict(matplotlib.rcParams)
        assert render_figure(residual_summary(measurement), "png") == plain
        assert dict(matplotlib.rcParams) == before
