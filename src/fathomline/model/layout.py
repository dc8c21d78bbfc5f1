"""Where the slopes of a forward model go: index maps, compiled once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.model.parameters import ParameterSet
from fathomline.model.terms import ComponentTerms, SegmentTerms
from fathomline.profile import TransitionLines

__all__ = ["Item", "Layout"]

Indices = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Item:
    """One component in one transition of one segment."""

    segment: int
    component: int
    column: int  # place of the column density
    lines: TransitionLines


class Layout:
    """Index maps of a model: which free parameters a segment depends on, and where they go.

    In each segment the slopes have `width` rows: row 0 is the segment's own value (τ, later the
    transmission), rows 1 to `width` − 3 its free parameters, the last but one the slope to a shift
    of the wavelength scale, and the last takes what is not free.
    """

    def __init__(
        self,
        parameters: ParameterSet,
        alpha: int,
        components: Sequence[ComponentTerms],
        segments: Sequence[SegmentTerms],
        items: Sequence[Item],
        coverings: Sequence[int],
        heavy: int | None,
    ) -> None:
        self.ratio, self.index = parameters.ratio, parameters.index
        used: list[list[int]] = [
            [
                alpha,
                segment.fwhm,
                *segment.continuum,
                *(() if segment.zero_level is None else (segment.zero_level,)),
                *(term.position for term in segment.distortions),
                *(() if heavy is None else (heavy,)),
            ]
            for segment in segments
        ]
        for item in items:
            component = components[item.component]
            used[item.segment] += [component.velocity, item.column, *component.width_parameters]
            if component.covering is not None:
                used[item.segment].append(coverings[component.covering])
        self.free: list[Indices] = [
            np.unique([self.index[p] for p in places if self.ratio[p] != 0.0]).astype(np.intp)
            for places in used
        ]
        self.width = 3 + max(free.size for free in self.free)
        self._place = [{int(k): row for row, k in enumerate(free, start=1)} for free in self.free]

    def row(self, segment: int, position: int | None) -> int:
        """Row of a parameter in a segment; the last row when it is not free."""
        if position is None or self.ratio[position] == 0.0:
            return self.width - 1
        return self._place[segment][int(self.index[position])]

    def row_if_used(self, segment: int, position: int) -> int | None:
        """Row of a free parameter in a segment that depends on it; else None."""
        if self.ratio[position] == 0.0:
            return None
        return self._place[segment].get(int(self.index[position]))

    def rows(self, positions: Sequence[int | None]) -> Indices:
        """Row of one parameter for each segment."""
        return np.array([self.row(k, p) for k, p in enumerate(positions)], dtype=np.intp)
