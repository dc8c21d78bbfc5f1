"""Component marks above a panel: a tick at the velocity, a line that leads to the number.

Numbers keep their order and move sideways as little as possible (least squares) until none
touches another. When one row is too crowded they alternate between two rows, where the lines to
the upper row pass between the numbers of the lower; when even that is too crowded, only every
second, fifth, ... component is numbered. Lengths are millimetres.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fathomline.report.style import COLOURS, MM_PER_INCH, SMALL_TEXT

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Mark", "band_height", "draw_marks", "place_marks", "spread"]

Array = NDArray[np.float64]

_DIGIT = 0.636 * SMALL_TEXT * MM_PER_INCH / 72.0  # advance of a digit in DejaVu Sans, mm
_GAP = 0.7  # between numbers of a row
_TICK, _ELBOW, _FIRST_ROW, _ROW = 1.0, 2.2, 3.6, 2.3  # heights above the panel
_FAR = 1.6  # sideways displacement that asks for a second row
_STEPS = (1, 2, 5, 10, 20, 50, 100)


@dataclass(frozen=True, slots=True)
class Mark:
    """Where a component is marked.

    Attributes
    ----------
    number : int
        Of the component, from 1.
    x : float
        Place of the tick, mm from the left edge of the panel.
    label_x : float or None
        Centre of the number, mm; None for a tick without a number.
    row : int
        Row of the number, from 0.

    """

    number: int
    x: float
    label_x: float | None
    row: int


def spread(x: Array, distance: Array, low: float, high: float) -> Array:
    """Move sorted places apart with the least sum of squared displacements.

    Parameters
    ----------
    x : array (n,)
        Wanted places, ascending.
    distance : array (n − 1,)
        Least distance between neighbours; their sum must fit between `low` and `high`.
    low, high : float
        Limits of the places.

    Returns
    -------
    array (n,)
        With y_i = z_i + Σ distance, z must ascend: isotonic regression by pooling adjacent
        violators (for instance Best & Chakravarti 1990, Math. Programming 47, 425).

    """
    offset = np.concatenate([[0.0], np.cumsum(distance)])
    blocks: list[list[float]] = []  # mean, size
    for value in (x - offset).tolist():
        blocks.append([value, 1.0])
        while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
            mean, size = blocks.pop()
            last = blocks[-1]
            last[0] = (last[0] * last[1] + mean * size) / (last[1] + size)
            last[1] += size
    z = np.concatenate([np.full(int(size), mean) for mean, size in blocks])
    result: Array = np.clip(z, low, high - offset[-1]) + offset
    return result


def place_marks(numbers: Sequence[int], x: Sequence[float], width: float) -> list[Mark]:
    """Place ticks and numbers of components over a panel of `width` mm.

    Components outside the panel are left out.
    """
    inside = sorted((at, n) for n, at in zip(numbers, x, strict=True) if 0.0 <= at <= width)
    for step in _STEPS:
        chosen = inside[(step - 1) // 2 :: step] if step > 1 else inside
        if not chosen:
            break
        placed = _rows(chosen, width)
        if placed is not None:
            labels = dict(placed)
            return [
                Mark(n, at, *labels[n]) if n in labels else Mark(n, at, None, 0) for at, n in inside
            ]
    return [Mark(n, at, None, 0) for at, n in inside]


def _rows(
    chosen: Sequence[tuple[float, int]], width: float
) -> list[tuple[int, tuple[float, int]]] | None:
    """Number to place and row of its label, or None when they do not fit."""
    at = np.array([place for place, _ in chosen])
    size = np.array([_DIGIT * len(str(n)) for _, n in chosen])
    for rows in (1, 2):
        distance = (size[1:] + size[:-1]) / 2.0 + _GAP
        if rows == 2:  # neighbours in a row are two apart; leaders pass half way
            distance = np.maximum(size[1:], size[:-1]) / 2.0 + _GAP
        low, high = float(size[0]) / 2.0, width - float(size[-1]) / 2.0
        if distance.sum() > high - low:
            continue
        placed = spread(at, distance, low, high)
        if rows == 1 and np.abs(placed - at).max() > _FAR:
            continue
        return [
            (n, (float(place), i % rows))
            for i, ((_, n), place) in enumerate(zip(chosen, placed, strict=True))
        ]
    return None


def band_height(marks: Sequence[Sequence[Mark]]) -> float:
    """Height, mm, of the band above a panel that holds the marks of all panels."""
    rows = max((mark.row for panel in marks for mark in panel), default=0)
    return _FIRST_ROW + rows * _ROW + 1.3


def draw_marks(axes: Axes, marks: Sequence[Mark]) -> None:
    """Draw marks into an axes that covers the band, with mm as data coordinates on both axes."""
    for mark in marks:
        colour = COLOURS["component"]
        if mark.label_x is None:
            axes.plot([mark.x, mark.x], [0.0, _TICK], color=colour, linewidth=0.5)
            continue
        foot = _FIRST_ROW + mark.row * _ROW - 1.05
        axes.plot(
            [mark.x, mark.x, mark.label_x, mark.label_x],
            [0.0, _TICK, _ELBOW, max(foot, _ELBOW)],
            color=colour,
            linewidth=0.5,
            solid_joinstyle="round",
        )
        axes.text(
            mark.label_x,
            _FIRST_ROW + mark.row * _ROW,
            str(mark.number),
            fontsize=SMALL_TEXT,
            ha="center",
            va="center",
            gid=f"component-{mark.number}",
        )
