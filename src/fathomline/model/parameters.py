"""Named parameters, with bounds, priors and ties compiled to one index map.

A fit works on the vector of free parameters only. The full vector follows from it by

    full[i] = ratio[i] · free[index[i]] + offset[i],

with ratio 0 for a fixed parameter; a tied parameter shares the index of its target. Derivatives
go the other way through the same map. Nothing is looked up by name during a fit.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import overload

import numpy as np
from numpy.typing import NDArray

from fathomline.errors import FitError

__all__ = ["Parameter", "ParameterSet", "Prior", "Tie"]

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Tie:
    """value = ratio × value of `target` + offset."""

    target: str
    ratio: float = 1.0
    offset: float = 0.0


@dataclass(frozen=True, slots=True)
class Prior:
    """A Gaussian prior."""

    mean: float
    sigma: float


@dataclass(frozen=True, slots=True)
class Parameter:
    """One named number of the model.

    Attributes
    ----------
    name : str
        For instance ``component[2].b``.
    value : float
        Start value; ignored for a tied parameter.
    unit : str
        For tables, for instance ``km/s``.
    lower, upper : float
        Bounds, inclusive.
    fixed : bool
    tie : Tie, optional
    prior : Prior, optional

    """

    name: str
    value: float
    unit: str = ""
    lower: float = -math.inf
    upper: float = math.inf
    fixed: bool = False
    tie: Tie | None = None
    prior: Prior | None = None


class ParameterSet:
    """All parameters of a model in a fixed order, with their ties compiled.

    Raises
    ------
    FitError
        Two parameters share a name, a tie has no target or runs in a circle, or a start value
        lies outside its bounds.

    """

    def __init__(self, parameters: Sequence[Parameter]) -> None:
        self._parameters = tuple(parameters)
        self.names = tuple(p.name for p in self._parameters)
        self._position = {name: i for i, name in enumerate(self.names)}
        if len(self._position) != len(self.names):
            twice = sorted({n for n in self.names if self.names.count(n) > 1})
            raise FitError(f"two parameters are named {', '.join(twice)}")
        roots = [self._root(i) for i in range(len(self._parameters))]
        free = [i for i, p in enumerate(self._parameters) if p.tie is None and not p.fixed]
        free_index = {i: k for k, i in enumerate(free)}
        size = len(self._parameters)
        self.index: NDArray[np.intp] = np.zeros(size, dtype=np.intp)
        self.ratio: Array = np.zeros(size)
        self.offset: Array = np.zeros(size)
        for i, (root, ratio, offset) in enumerate(roots):
            if root in free_index:
                self.index[i], self.ratio[i], self.offset[i] = free_index[root], ratio, offset
            else:
                self.offset[i] = ratio * self._parameters[root].value + offset
        self.free_positions = tuple(free)
        self.free_names = tuple(self.names[i] for i in free)
        self.start: Array = np.array([self._parameters[i].value for i in free], dtype=np.float64)
        self.lower: Array = np.array([self._parameters[i].lower for i in free], dtype=np.float64)
        self.upper: Array = np.array([self._parameters[i].upper for i in free], dtype=np.float64)
        for i in free:
            p = self._parameters[i]
            if not p.lower <= p.value <= p.upper:
                raise FitError(
                    f"{p.name} starts at {p.value:g} {p.unit}, outside its bounds "
                    f"[{p.lower:g}, {p.upper:g}]".replace("  ", " ")
                )

    def _root(self, i: int) -> tuple[int, float, float]:
        """Follow ties to the parameter that holds the number: (position, ratio, offset)."""
        ratio, offset, seen = 1.0, 0.0, [i]
        tie = self._parameters[i].tie
        while tie is not None:
            if tie.target not in self._position:
                raise FitError(f"{self.names[i]} is tied to {tie.target}, which does not exist")
            offset += ratio * tie.offset
            ratio *= tie.ratio
            i = self._position[tie.target]
            if i in seen:
                chain = " -> ".join(self.names[k] for k in [*seen, i])
                raise FitError(f"ties run in a circle: {chain}")
            seen.append(i)
            tie = self._parameters[i].tie
        return i, ratio, offset

    def __len__(self) -> int:
        return len(self._parameters)

    @overload
    def __getitem__(self, i: int) -> Parameter: ...
    @overload
    def __getitem__(self, i: slice) -> tuple[Parameter, ...]: ...
    def __getitem__(self, i: int | slice) -> Parameter | tuple[Parameter, ...]:
        return self._parameters[i]

    def __iter__(self) -> Iterator[Parameter]:
        return iter(self._parameters)

    def __repr__(self) -> str:
        return f"ParameterSet({len(self)} parameters, {len(self.free_names)} free)"

    def position(self, name: str) -> int:
        """Place of a parameter in the full vector; raises `KeyError`."""
        return self._position[name]

    def expand(self, free: Array) -> Array:
        """Full vector (n_parameters,) from the free one (n_free,)."""
        if free.size == 0:
            return self.offset.copy()
        full: Array = self.ratio * free[self.index] + self.offset
        return full

    def priors(self) -> tuple[tuple[int, Prior], ...]:
        """Position and prior of each parameter that has one and is not fixed."""
        return tuple(
            (i, p.prior)
            for i, p in enumerate(self._parameters)
            if p.prior is not None and self.ratio[i] != 0.0
        )
