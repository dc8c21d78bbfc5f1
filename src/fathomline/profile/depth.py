"""Optical depth of many velocity components in many transitions, with its derivatives.

For a component of Doppler parameter b and column density N, summed over the isotopic and
hyperfine lines j of a transition (wavelength λ_j, fraction φ_j of the oscillator strength f),

    τ(λ) = Σ_j A_j H(a_j, u_j),    A_j = K N f φ_j λ_j/b_j,    K = π e² / (m_e c √π),
    u_j = (c/b_j) (λ_j s/λ − 1),    a_j = Γ λ_j / (4π b_j),    s = 1 + z of the component,

which is the Voigt profile in frequency (for instance Mihalas 1978, Stellar Atmospheres, §9-2).
The rest wavelengths follow α: λ_j = 1e8/(ω_j + q x), so ∂ln λ_j/∂x = −λ_j q/1e8 =: d_j. With
k_j = c/b_j the derivatives are sums over four functions of each line,

                   H_j           ∂H_j/∂u    u ∂H_j/∂u     ∂H_j/∂a
    τ              A
    ∂τ/∂ln s                     A k        A
    ∂τ/∂x          A d           A d k      A d           A d a
    ∂τ/∂p          −A b'/b                  −A b'/b       −A a b'/b

for a parameter p of the width with b' = ∂b_j/∂p. The fractions may depend linearly on one
abundance h, φ_j = φ_j(1) + (h − 1) φ'_j, which adds a row ∂τ/∂h = Σ_j A_j φ'_j/φ_j H_j.

Work is done where a line absorbs, and for all lines at once: `LineTable` lays the points of every
line in every grid end to end in one flat array. Within 8 Doppler widths of a line the functions
are evaluated in full; in the wings by the asymptotic series. There one composite line stands for
all lines of a transition when their spread (variance σ² in Doppler widths) changes the wing by
less than 1e-8 in τ: the wing a τ0/(√π u²) of a spread line is larger by the factor 1 + 3σ²/u².
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import Transition
from fathomline.constants import C_KMS, DEPTH_CONSTANT
from fathomline.profile.voigt import CORE, SERIES_A, voigt_core, voigt_wing

__all__ = ["FineGrid", "LineItem", "LineTable", "TransitionLines"]

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

# Γ [1/s] λ [Å] / (4π b [km/s]) without unit: 1e-10 m per Å, 1e3 m/s per km/s
_DAMPING = 1e-13 / (4.0 * math.pi)

_WING_TOLERANCE = 1e-8  # of the optical depth
_BLOCK_POINTS = 16_000  # found with benchmarks: fewer cost calls, more leave the cache


@dataclass(frozen=True, slots=True)
class FineGrid:
    """A grid uniform in ln λ.

    Attributes
    ----------
    start, step : float
        First ln λ (λ in Å) and spacing.
    size : int

    """

    start: float
    step: float
    size: int

    @property
    def inverse(self) -> Array:
        """1/λ (size,), Å⁻¹."""
        values: Array = np.exp(-(self.start + self.step * np.arange(self.size, dtype=np.float64)))
        return values


class TransitionLines:
    """The isotopic and hyperfine lines of one transition as arrays.

    Parameters
    ----------
    transition : Transition
        With its structure, or as a composite.
    heavy_element : str, optional
        Element whose heavier isotopes follow an abundance h relative to the tables, at the cost
        of the lightest one.

    Attributes
    ----------
    name : str
    omega, strength, masses : array (n_lines,)
        Wavenumber (cm⁻¹), f φ, and mass (u) of each line.
    by_heavy : array (n_lines,)
        Derivative of the strength to h; zero for other elements.
    gamma, q : float
        Γ (s⁻¹) and q (cm⁻¹); 0 where they are not known.

    """

    __slots__ = ("by_heavy", "gamma", "masses", "name", "omega", "q", "strength")

    def __init__(self, transition: Transition, heavy_element: str | None = None) -> None:
        components = transition.components
        self.name = transition.name
        self.masses: Array = np.array([c.mass for c in components])
        self.omega: Array = np.array([c.wavenumber for c in components])
        self.strength: Array = np.array([transition.f * c.fraction for c in components])
        self.by_heavy: Array = np.zeros(len(components))
        if transition.element == heavy_element and transition.structure:
            isotope = np.array([c.mass_number for c in components])
            light = isotope == isotope.min()
            share = self.strength[light] / self.strength[light].sum()
            self.by_heavy[~light] = self.strength[~light]
            self.by_heavy[light] = -self.strength[~light].sum() * share
        self.gamma = transition.gamma or 0.0
        self.q = transition.q or 0.0

    @classmethod
    def bare(cls, wavelength: float) -> TransitionLines:
        """A line of which only the wavelength (Å) is known, with f = 1 and no damping."""
        lines = object.__new__(cls)
        lines.name = f"{wavelength:.3f}"
        lines.masses, lines.omega = np.ones(1), np.array([1e8 / wavelength])
        lines.strength, lines.by_heavy = np.ones(1), np.zeros(1)
        lines.gamma = lines.q = 0.0
        return lines

    @property
    def rest(self) -> Array:
        """Rest wavelengths (n_lines,) at α0, Å."""
        rest: Array = 1e8 / self.omega
        return rest

    def peak_depth(self, b: Array, column: float) -> float:
        """Central optical depth if all lines of the transition coincided (an upper bound)."""
        return float(DEPTH_CONSTANT * column * np.sum(self.strength * self.rest / b))

    def reach(self, b: float, column: float, depth: float) -> float:
        """Distance from the line centre, km/s, beyond which τ stays below `depth`.

        The larger of the Gaussian core and of the Lorentzian wing, τ ≈ τ0 a b²/(√π v²).
        """
        centre = self.peak_depth(np.full(self.masses.size, b), column)
        core = b * math.sqrt(max(math.log(max(centre / depth, 1.0)), 0.0))
        rest = float(self.rest.max())
        wing = math.sqrt(centre * self.gamma * _DAMPING * rest * b / (depth * math.sqrt(math.pi)))
        return max(core, wing)

    def wings_may_merge(self, b: Array, column: float) -> bool:
        """Whether one composite line may stand for all in the wings (see the module)."""
        if self.by_heavy.any():
            return False
        share = self.strength / self.strength.sum()
        mean = float(share @ self.rest)
        spread = C_KMS / float(b.min()) * (self.rest / mean - 1.0)
        factor = 3.0 * float(share @ spread**2) / CORE**4 / math.sqrt(math.pi)
        a = self.gamma * _DAMPING * mean / float(b.min())
        return factor * a * self.peak_depth(b, column) < _WING_TOLERANCE

    def composite(self) -> tuple[float, float, float]:
        """Wavenumber, strength and mass of one line that stands for all."""
        total = float(self.strength.sum())
        share = self.strength / total
        return 1e8 / float(share @ self.rest), total, float(share @ self.masses)


@dataclass(frozen=True, slots=True)
class LineItem:
    """One component in one transition on one grid.

    Attributes
    ----------
    grid : int
        Number of the grid.
    lines : TransitionLines
    merge_wings : bool
        Whether a composite line stands for all lines in the wings.

    """

    grid: int
    lines: TransitionLines
    merge_wings: bool = True


def _rows(i: int, lines: TransitionLines, *, merged: bool) -> list[tuple[float, ...]]:
    """Item, ω, f φ, Γ, q, mass and ∂(f φ)/∂h of each line of an item, or of its composite."""
    if merged:
        omega, strength, mass = lines.composite()
        return [(i, omega, strength, lines.gamma, lines.q, mass, 0.0)]
    columns = (lines.omega, lines.strength, lines.masses, lines.by_heavy)
    return [
        (i, omega, strength, lines.gamma, lines.q, mass, by_heavy)
        for omega, strength, mass, by_heavy in zip(*columns, strict=True)
    ]


class LineTable:
    """All lines of a model, ready to be evaluated many times.

    Lines are numbered through: first those evaluated near their centres, item by item, then those
    evaluated in the wings.

    Parameters
    ----------
    items : sequence of LineItem
    grids : sequence of FineGrid

    Attributes
    ----------
    item : int array (n_lines,)
        The item of each line.
    masses : array (n_lines,)
        Mass of the absorbing atom, u.
    n_items, n_grids, width : int
        Items, grids, and the size of the longest grid.

    """

    def __init__(self, items: Sequence[LineItem], grids: Sequence[FineGrid]) -> None:
        self.n_items, self.n_grids = len(items), len(grids)
        self.width = max((grid.size for grid in grids), default=0)
        near = [_rows(i, item.lines, merged=False) for i, item in enumerate(items)]
        wings = [_rows(i, item.lines, merged=item.merge_wings) for i, item in enumerate(items)]
        self._n_core = sum(len(block) for block in near)
        rows = [row for block in (*near, *wings) for row in block]
        table = np.array([row[1:] for row in rows], dtype=np.float64).reshape(-1, 6).T
        self._omega, self._strength, gamma, self._q, self.masses, self._by_heavy = table
        self.has_heavy = bool(self._by_heavy.any())
        self._damping = gamma * _DAMPING
        self.item: Indices = np.array([row[0] for row in rows], dtype=np.intp)
        bounds = np.arange(self.n_items + 1)
        self._line_of_item = np.searchsorted(self.item[: self._n_core], bounds)
        self._wing_of_item = self._n_core + np.searchsorted(self.item[self._n_core :], bounds)
        self._n_near, self._n_wide = np.diff(self._line_of_item), np.diff(self._wing_of_item)
        grid_of_item = np.array([item.grid for item in items], dtype=np.intp)
        self.grid_of_item: Indices = grid_of_item
        self._start = np.array([grids[g].start for g in grid_of_item])
        self._step = np.array([grids[g].step for g in grid_of_item])
        self._size = np.array([grids[g].size for g in grid_of_item], dtype=np.intp)

    def _core_range(
        self, centre: Array, half: Array, damped: NDArray[np.bool_]
    ) -> tuple[Indices, Indices]:
        """First and last (exclusive) grid index of the core of each item."""
        if self.n_items == 0:
            return np.zeros(0, np.intp), np.zeros(0, np.intp)
        lines = self._line_of_item[:-1]
        low = np.minimum.reduceat(centre - half, lines)
        high = np.maximum.reduceat(centre + half, lines)
        first = np.ceil((low - self._start) / self._step)
        last = np.floor((high - self._start) / self._step) + 1.0
        whole = np.logical_or.reduceat(damped, lines)
        first = np.where(whole, 0.0, np.clip(first, 0, self._size))
        last = np.where(whole, self._size, np.clip(last, first, self._size))
        return first.astype(np.intp), last.astype(np.intp)

    def evaluate(
        self,
        inverse: Array,
        s: Array,
        column: Array,
        b: Array,
        x: float,
        slopes: Array | None = None,
        *,
        margin: float = 0.0,
        heavy: float = 1.0,
    ) -> Array:
        """Optical depth, and with `slopes` its derivatives, of every item on its grid.

        Parameters
        ----------
        inverse : array (n_grids, width)
            1/λ of the true wavelengths, Å⁻¹; what lies beyond the size of a grid is ignored.
        s, column : array (n_items,)
            1 + z and column density (cm⁻²).
        b : array (n_lines,)
            Doppler parameters, km/s.
        x : float
            (α/α0)² − 1.
        slopes : array (n_width_parameters, n_lines), optional
            ∂b/∂p.
        margin : float
            Largest relative distance of `inverse` from the uniform grids.
        heavy : float
            Abundance h of heavier isotopes relative to the tables.

        Returns
        -------
        array (1, n_items, width), or (3 + n_width_parameters, n_items, width) with `slopes`
            τ; ∂τ/∂ln s (also the derivative to a shift of the wavelength scale); ∂τ/∂x; ∂τ/∂p for
            each parameter p of the width; and, when some line depends on h, ∂τ/∂h. Zero beyond the
            size of a grid.

        """
        n_core, item = self._n_core, self.item
        rest = 1e8 / (self._omega + self._q * x)
        k = C_KMS / b
        a = self._damping * rest / b
        unit = DEPTH_CONSTANT * column[item] * rest / b
        amplitude = unit * (self._strength + (heavy - 1.0) * self._by_heavy)
        observed = rest * s[item]
        first, last = self._core_range(
            np.log(observed[:n_core]), CORE / k[:n_core] * 1.01 + margin, a[:n_core] > SERIES_A
        )
        columns = [k * observed, k, amplitude, a]
        if slopes is not None:
            columns += [amplitude * k, amplitude * a, -rest * self._q / 1e8, *(-slopes / b)]
            if self.has_heavy:
                columns.append(unit * self._by_heavy)
        table = np.array(columns)
        n_rows = 1 if slopes is None else len(columns) - 4
        out = np.empty((n_rows, self.n_items, self.width))
        for begin, end in self._blocks(first, last):
            values, source, target, n_near = self._spread(table, begin, end, first, last)
            u = values[0] * inverse.ravel()[source]
            u -= values[1]
            near, wide = slice(0, n_near), slice(n_near, u.size)
            derivatives = slopes is not None
            functions = np.empty((4 if derivatives else 1, u.size))
            functions[:, near] = voigt_core(values[3, near], u[near], derivatives=derivatives)
            functions[:, wide] = voigt_wing(values[3, wide], u[wide], derivatives=derivatives)
            self._collect(functions, values, target, out[:, begin:end])
        return out

    def _blocks(self, first: Indices, last: Indices) -> Iterator[tuple[int, int]]:
        """Ranges of items whose points together fit the cache of a processor."""
        core = (last - first) * self._n_near
        points = np.cumsum(core + (self._size - (last - first)) * self._n_wide)
        begin = 0
        while begin < self.n_items:
            done = int(points[begin - 1]) if begin else 0
            end = max(int(np.searchsorted(points, done + _BLOCK_POINTS, side="right")), begin + 1)
            yield begin, end
            begin = end

    def _spread(
        self, table: Array, begin: int, end: int, first: Indices, last: Indices
    ) -> tuple[Array, Indices, Indices, int]:
        """The points of the lines of items `begin` to `end`, end to end.

        Returns
        -------
        array (n_columns, n_points)
            The columns of `table` at every point.
        array (n_points,), array (n_points,)
            Where the point lies in the flattened grids, and in the flattened rows of these items.
        int
            How many of the points lie near the centres; the rest lies in the wings.

        """
        near = slice(self._line_of_item[begin], self._line_of_item[end])
        wide = slice(self._wing_of_item[begin], self._wing_of_item[end])
        item = np.concatenate([self.item[near], self.item[wide], self.item[wide]])
        n_near = near.stop - near.start
        core, left, right = item[:n_near], self.item[wide], self.item[wide]
        start = np.concatenate([first[core], np.zeros(left.size, np.intp), last[right]])
        count = np.concatenate([(last - first)[core], first[left], (self._size - last)[right]])
        ends = np.cumsum(count)
        total = int(ends[-1])
        target = np.arange(total) + np.repeat(
            start - (ends - count) + (item - begin) * self.width, count
        )
        source = target + np.repeat((self.grid_of_item[item] - (item - begin)) * self.width, count)
        which = np.concatenate(
            [
                np.arange(near.start, near.stop),
                np.arange(wide.start, wide.stop),
                np.arange(wide.start, wide.stop),
            ]
        )
        return np.repeat(table[:, which], count, axis=1), source, target, int(ends[n_near - 1])

    def _collect(self, functions: Array, values: Array, target: Indices, out: Array) -> None:
        """Sum the lines of each item on its grid, into `out` (n_rows, n_items, width)."""
        shape = out.shape[1:]

        def add(row: int, weights: Array) -> None:
            sums = np.bincount(target, weights, minlength=shape[0] * shape[1])
            out[row] = sums.reshape(shape)

        tau = values[2] * functions[0]
        add(0, tau)
        if len(functions) == 1:
            return
        _, _, amplitude, _, steep, damped, by_x, *by_width = values
        by_heavy = by_width.pop() if self.has_heavy else None
        shifted = amplitude * functions[2]
        moved = steep * functions[1]
        add(1, shifted + moved)
        shifted += tau
        shifted += damped * functions[3]
        moved += shifted
        moved *= by_x
        add(2, moved)
        for row, factor in enumerate(by_width, start=3):
            add(row, shifted * factor)
        if by_heavy is not None:
            add(3 + len(by_width), by_heavy * functions[0])
