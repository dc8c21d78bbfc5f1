"""Where two spectra are compared: windows around absorption features, or chunks of one length.

A pixel is *active* where the root-mean-square over seven pixels of the gradient of the mean
spectrum, in units of its noise, exceeds a limit: on the flanks of lines, which alone carry
information on a shift. Active pixels less than 50 km/s apart belong to one window, which
reaches 25 km/s beyond them to tie down the flux scale. Windows longer than 400 km/s are cut
into equal parts.
"""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from fathomline.constants import C_KMS

__all__ = ["feature_chunks", "fixed_chunks"]

_BOX = 7  # pixels
_MARGIN = 25.0  # km/s
_LONGEST = 400.0  # km/s


def _active(significance: NDArray[np.float64], limit: float) -> NDArray[np.bool_]:
    box = np.ones(min(_BOX, significance.size)) / _BOX
    active: NDArray[np.bool_] = np.convolve(significance**2, box, mode="same") > limit**2
    return active


def feature_chunks(significance: NDArray[np.float64], limit: float, pixel: float) -> list[slice]:
    """Windows around features.

    Parameters
    ----------
    significance
        |gradient| over its noise, shape (n,); 0 where there is none.
    limit
        Least root-mean-square over seven pixels.
    pixel
        Typical pixel size in ln λ.

    Returns
    -------
    list of slice
        Pixel ranges, ascending, disjoint.

    """
    n = significance.size
    margin = max(1, round(_MARGIN / (C_KMS * pixel)))
    change = np.zeros(n + 1, dtype=np.intp)
    centres = np.flatnonzero(_active(significance, limit))
    np.add.at(change, np.maximum(centres - margin, 0), 1)
    np.add.at(change, np.minimum(centres + margin + 1, n), -1)
    inside = np.concatenate(([False], np.cumsum(change[:-1]) > 0, [False]))
    flips = np.flatnonzero(inside[1:] != inside[:-1])
    longest = _LONGEST / (C_KMS * pixel)
    parts = []
    for start, stop in zip(flips[::2], flips[1::2], strict=True):
        count = math.ceil((stop - start) / longest)
        edges = np.linspace(start, stop, count + 1).round().astype(int)
        parts += [slice(i, j) for i, j in pairwise(edges.tolist())]
    return parts


def fixed_chunks(
    x: NDArray[np.float64],
    inside: NDArray[np.bool_],
    length: float,
    significance: NDArray[np.float64],
    limit: float,
) -> list[slice]:
    """Contiguous chunks of one length that hold a feature.

    Parameters
    ----------
    x
        ln λ, shape (n,).
    inside
        Pixels that may be used, shape (n,), bool; the first chunk begins with the first of them.
    length
        km/s.
    significance, limit
        As in `feature_chunks`.

    """
    usable = np.flatnonzero(inside)
    if usable.size == 0:
        return []
    number = np.floor((x - x[usable[0]]) * C_KMS / length + 1e-9)
    active = _active(significance, limit) & inside
    parts = []
    for wanted in np.unique(number[active]):
        pixels = np.flatnonzero(number == wanted)
        parts.append(slice(int(pixels[0]), int(pixels[-1]) + 1))
    return parts
