"""How every figure looks: colours, sizes and fonts, independent of the user's own settings.

Lengths are millimetres at print size. Colours are those of Okabe & Ito (2008, "Color Universal
Design", https://jfly.uni-koeln.de/color/), which stay apart for the common kinds of colour
blindness; line style or shape repeats what a colour says.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from types import MappingProxyType
from typing import Any

__all__ = [
    "COLOURS",
    "MM_PER_INCH",
    "ONE_COLUMN",
    "SETTINGS",
    "SMALL_TEXT",
    "TEXT",
    "TWO_COLUMNS",
    "figure_style",
    "inches",
]

ONE_COLUMN = 84.0
"""Width of a figure in one column, mm."""

TWO_COLUMNS = 174.0
"""Width of a figure across two columns, mm."""

MM_PER_INCH = 25.4

TEXT = 7.0
"""Size of labels, pt at print size."""

SMALL_TEXT = 6.5
"""Size of tick labels and notes, pt at print size: nothing is smaller."""

COLOURS = MappingProxyType(
    {
        "data": "#000000",
        "error": "#B9BFC6",
        "model": "#D55E00",  # vermilion
        "continuum": "#009E73",  # bluish green
        "component": "#0072B2",  # blue
        "reference": "#CC79A7",  # reddish purple
        "band": "#DCEBF5",
        "not_fitted": "#EFEAD8",
        "not_fitted_hatch": "#B5AA85",
        "not_fitted_data": "#A59C7F",
        "guide": "#7A7F85",
        "text": "#1A1A1A",
    }
)
"""Colour of each role."""

SETTINGS: Mapping[Any, Any] = MappingProxyType(
    {
        "font.family": ["DejaVu Sans"],
        "mathtext.fontset": "dejavusans",
        "font.size": TEXT,
        "axes.labelsize": TEXT,
        "axes.titlesize": TEXT,
        "xtick.labelsize": SMALL_TEXT,
        "ytick.labelsize": SMALL_TEXT,
        "legend.fontsize": SMALL_TEXT,
        "axes.linewidth": 0.5,
        "axes.labelpad": 2.0,
        "axes.edgecolor": COLOURS["text"],
        "axes.labelcolor": COLOURS["text"],
        "text.color": COLOURS["text"],
        "xtick.color": COLOURS["text"],
        "ytick.color": COLOURS["text"],
        "xtick.direction": "in",
        "ytick.direction": "in",
        "xtick.major.size": 2.4,
        "xtick.minor.size": 1.3,
        "ytick.major.size": 2.4,
        "ytick.minor.size": 1.3,
        "xtick.major.width": 0.5,
        "ytick.major.width": 0.5,
        "xtick.minor.width": 0.4,
        "ytick.minor.width": 0.4,
        "xtick.major.pad": 2.0,
        "ytick.major.pad": 2.0,
        "lines.linewidth": 0.8,
        "hatch.linewidth": 0.35,
        "legend.frameon": False,
        "figure.facecolor": "white",
        "savefig.facecolor": "white",
        "pdf.fonttype": 42,  # embedded TrueType: text stays text
        "ps.fonttype": 42,
        "svg.fonttype": "path",
        "svg.hashsalt": "fathomline",
        "axes.unicode_minus": True,
    }
)
"""Matplotlib settings of all figures, on top of matplotlib's defaults."""


def inches(millimetres: float) -> float:
    """Inches from millimetres."""
    return millimetres / MM_PER_INCH


@contextmanager
def figure_style() -> Iterator[None]:
    """Draw and save figures in the package's style; the caller's settings come back afterwards."""
    import matplotlib

    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(dict(SETTINGS))
        yield
