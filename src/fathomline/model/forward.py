"""The forward model of an absorber: residuals and their analytic Jacobian.

A *segment* is one region in one spectrum. In a segment the normalised flux of a pixel is

    y = p(ξ) · [W T] + y0,     T = e^{−τ},     τ = Σ_k Σ_i τ_{k i},

with W the instrument operator (`fathomline.model.instrument`), p a polynomial in Legendre form
over the window (ξ from −1 to 1), y0 the zero level, and τ the optical depth of every component k
in every transition i that falls near the window. Light of true wavelength λ is recorded at
λ(1 + v_d/c), with v_d a sum of coefficients times given functions of the recorded wavelength: the
fine grid is one of recorded wavelengths, at which the true 1/λ is larger by 1 + v_d/c. Where groups
of components cover only the part C_g of the source, T = e^{−τ_0} Π_g (1 − C_g + C_g e^{−τ_g}).
Residuals are (data − model)/error; Gaussian priors add one residual each.

Everything is laid out once, for all segments together, so that an evaluation is a fixed number of
array operations however many components there are:

* `LineTable` gives τ and its derivatives for every item, that is for every component in every
  transition of every segment, on fine grids padded to one width;
* a sparse matrix with one entry for each item and parameter adds these up to the slopes ∂τ/∂free of
  each segment; its entries carry the chain rule and the ties;
* W, block-diagonal over the segments, takes e^{−τ} and all slopes to the pixels together.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray
from scipy.sparse import csr_array

from fathomline.atomic import alpha_variable
from fathomline.constants import C_KMS, C_MS, DOPPLER_KMS2, PPM
from fathomline.errors import FitError
from fathomline.model.instrument import (
    InstrumentOperator,
    fine_spacing,
    fine_velocity_grid,
    log_velocity,
)
from fathomline.model.layout import Item, Layout
from fathomline.model.parameters import ParameterSet
from fathomline.model.terms import ComponentTerms, SegmentPrediction, SegmentTerms
from fathomline.profile import FineGrid, LineItem, LineTable
from fathomline.spectra import FWHM_PER_SIGMA

__all__ = ["AbsorberModel"]

Array = NDArray[np.float64]
Indices = NDArray[np.intp]

_LN10 = math.log(10.0)
_GROWTH = 1.0  # dex that a column density may gain before the wings were merged too boldly
_ONE, _LOG_COLUMN, _VELOCITY, _ALPHA = range(4)  # factors of the chain rule
_WIDEST = 1.5  # the fine grid leaves room for a line-spread function this much wider


class AbsorberModel:
    """Residuals and Jacobian of all segments of one absorber.

    Parameters
    ----------
    redshift : float
        Zero of the velocity scale.
    parameters : ParameterSet
    alpha : int
        Place of Δα/α (ppm) in the full vector.
    components : sequence of ComponentTerms
    segments : sequence of SegmentTerms
    coverings : sequence of int
        Place of the covering factor of each group of components.
    heavy : int, optional
        Place of the abundance of heavier isotopes relative to the tables, for the lines that were
        made with one.
    refine : float
        The fine grid is this factor finer than the sampling rule asks for.
    sampled_for : array (n_parameters,), optional
        Values that the sampling rule looks at; default: the start values.

    Raises
    ------
    FitError
        A segment has no pixel to fit.

    """

    def __init__(
        self,
        redshift: float,
        parameters: ParameterSet,
        alpha: int,
        components: Sequence[ComponentTerms],
        segments: Sequence[SegmentTerms],
        *,
        coverings: Sequence[int] = (),
        heavy: int | None = None,
        refine: float = 1.0,
        sampled_for: Array | None = None,
    ) -> None:
        self.redshift, self.parameters, self.alpha = redshift, parameters, alpha
        self.components, self.segments = tuple(components), tuple(segments)
        self.coverings, self.heavy, self.refine = tuple(coverings), heavy, refine
        self.n_evaluations = 0
        for segment in self.segments:
            if not segment.good.any():
                raise FitError(
                    f"region {segment.region + 1} ({segment.name}) has no good pixel in spectrum "
                    f"{segment.spectrum!r}"
                )
        self._priors = parameters.priors()
        theta = parameters.expand(parameters.start) if sampled_for is None else sampled_for
        self._items = [
            Item(k, c, component.log_columns[ion], lines)
            for k, segment in enumerate(self.segments)
            for c, component in enumerate(self.components)
            for ion, lines in segment.lines
            if ion in component.log_columns
        ]
        self.spacings = tuple(self.required_spacing(theta))
        self._prepare_grids(theta)
        self._prepare_lines(theta)
        self._layout = Layout(
            parameters, alpha, self.components, self.segments, self._items, self.coverings, heavy
        )
        self._prepare_sums()
        self._prepare_pixels()

    def __repr__(self) -> str:
        return (
            f"AbsorberModel(z={self.redshift}, {len(self.components)} components, "
            f"{len(self.segments)} segments, {self.n_data} pixels, "
            f"{len(self.parameters.free_names)} free)"
        )

    # -- set-up -----------------------------------------------------------------------------

    def required_spacing(self, theta: Array) -> list[float]:
        """Fine-grid spacing, km/s, that the sampling rule asks for in each segment."""
        sigma = [self._width(segment, theta)[0] for segment in self.segments]
        needed = list(sigma)
        for item in self._items:
            b = self.components[item.component].widths(theta, item.lines.masses)
            peak = item.lines.peak_depth(b, 10.0 ** theta[item.column])
            spacing = fine_spacing(float(b.min()), sigma[item.segment], peak)
            needed[item.segment] = min(needed[item.segment], spacing)
        return [spacing / self.refine for spacing in needed]

    def resampled(self, free: Array, *, refine: float = 1.0) -> AbsorberModel | None:
        """The same model on a finer grid, when the values `free` need one; else None.

        The grid was chosen from the start values; narrower or stronger lines may need a finer one.
        """
        theta = self.parameters.expand(free)
        wanted = [spacing / refine for spacing in self.required_spacing(theta)]
        if all(w >= 0.98 * s for w, s in zip(wanted, self.spacings, strict=True)):
            return None
        return AbsorberModel(
            self.redshift,
            self.parameters,
            self.alpha,
            self.components,
            self.segments,
            coverings=self.coverings,
            heavy=self.heavy,
            refine=self.refine * refine,
            sampled_for=theta,
        )

    def _width(self, segment: SegmentTerms, theta: Array) -> tuple[float, float]:
        """Smallest scale and reach (in σ) of the line-spread function of a segment, km/s."""
        if segment.line_spread is not None:
            return segment.line_spread.finest, segment.line_spread.reach / 6.0
        sigma = segment.sigma(float(theta[segment.fwhm]))
        return float(sigma.min()), float(sigma.max())

    def _prepare_grids(self, theta: Array) -> None:
        """Fine grids, padded to one width, and the instrument operator of each segment."""
        self.grids: list[FineGrid] = []
        self._velocities: list[Array] = []
        self._operators: list[InstrumentOperator] = []
        for segment, spacing in zip(self.segments, self.spacings, strict=True):
            reference = float(segment.wavelength[0])
            low = log_velocity(segment.edges_low, reference)
            high = log_velocity(segment.edges_high, reference)
            sigma = self._width(segment, theta)[1]
            if self.parameters.ratio[segment.fwhm] != 0.0:
                sigma *= _WIDEST
            grid = fine_velocity_grid(float(low.min()), float(high.max()), sigma, spacing)
            self._velocities.append(grid)
            self.grids.append(
                FineGrid(math.log(reference) + float(grid[0]) / C_KMS, spacing / C_KMS, grid.size)
            )
            good = segment.good
            self._operators.append(InstrumentOperator(low[good], high[good], grid))
        width = max(grid.size for grid in self.grids)
        self._inverse = np.array(
            [np.pad(grid.inverse, (0, width - grid.size), mode="edge") for grid in self.grids]
        )
        self._fwhm: tuple[float, ...] = ()
        self._matrix: Any = None
        self._bases = [
            [(k, t, np.pad(b, (0, width - b.size))) for t, b in self._terms(segment, grid)]
            for k, (segment, grid) in enumerate(zip(self.segments, self.grids, strict=True))
        ]

    @staticmethod
    def _terms(segment: SegmentTerms, grid: FineGrid) -> list[tuple[int, Array]]:
        recorded = 1.0 / grid.inverse
        return [(term.position, term.basis(recorded)) for term in segment.distortions]

    def _prepare_lines(self, theta: Array) -> None:
        """The line table, and where each item and line finds its parameters."""
        components, items = self.components, self._items
        self._table = LineTable(
            [
                LineItem(
                    item.segment,
                    item.lines,
                    item.lines.wings_may_merge(
                        components[item.component].widths(theta, item.lines.masses),
                        10.0 ** (theta[item.column] + _GROWTH),
                    ),
                )
                for item in items
            ],
            self.grids,
        )
        self._velocity = np.array([components[i.component].velocity for i in items], dtype=np.intp)
        self._column = np.array([i.column for i in items], dtype=np.intp)

        def places(name: str) -> Indices:
            # one past the end reads a zero: that item has no such parameter
            found = [getattr(components[item.component], name) for item in items]
            end = len(self.parameters)
            places = np.array([end if p is None else p for p in found], dtype=np.intp)
            return places[self._table.item]

        self._b, self._temperature, self._b_turb = (
            places(name) for name in ("b", "temperature", "b_turb")
        )
        self._stretch = np.array(
            [
                1.0 + (self.redshift if (z := components[i.component].redshift) is None else z)
                for i in items
            ]
        )
        none = len(self.coverings)
        groups = [components[i.component].covering for i in items]
        self._group = np.array([none if g is None else g for g in groups], dtype=np.intp)
        self._turbulent = bool((self._b_turb < len(self.parameters)).any())

    def _prepare_sums(self) -> None:
        """The sparse matrix from the rows of the line table to the slopes of each segment."""
        layout, n_items = self._layout, len(self._items)
        n = layout.width
        n_blocks = 4 + self._turbulent + self._table.has_heavy
        entries: list[tuple[int, int, float, int, int]] = []  # row, column, ratio, kind, place
        for i, item in enumerate(self._items):
            component = self.components[item.component]
            base = item.segment * n
            entries.append((base, i, 1.0, _ONE, 0))
            if self.segments[item.segment].distortions:
                entries.append((base + n - 2, n_items + i, 1.0, _ONE, 0))
            width = component.width_parameters
            targets = [
                (0, item.column, _LOG_COLUMN),
                (1, component.velocity, _VELOCITY),
                (2, self.alpha, _ALPHA),
                *((3 + j, p, _ONE) for j, p in enumerate(width)),
            ]
            if self.heavy is not None and self._table.has_heavy:
                targets.append((n_blocks - 1, self.heavy, _ONE))
            for block, position, kind in targets:
                ratio = float(self.parameters.ratio[position])
                if ratio != 0.0:
                    row = base + layout.row(item.segment, position)
                    entries.append((row, block * n_items + i, ratio, kind, position))
        entries.sort(key=lambda entry: entry[:2])
        rows = np.array([entry[0] for entry in entries], dtype=np.intp)
        columns = np.array([entry[1] for entry in entries], dtype=np.intp)
        self._sum_ratio = np.array([entry[2] for entry in entries])
        self._sum_kind = np.array([entry[3] for entry in entries], dtype=np.intp)
        self._sum_place = np.array([entry[4] for entry in entries], dtype=np.intp)
        n_rows = len(self.segments) * n
        pointers = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=n_rows))])
        self._sum = csr_array(
            (self._sum_ratio.copy(), columns, pointers), shape=(n_rows, n_blocks * n_items)
        )

    def _prepare_pixels(self) -> None:
        """Data, polynomials and target columns of all fitted pixels."""
        segments, layout = self.segments, self._layout
        counts = [int(segment.good.sum()) for segment in segments]
        self.rows = np.concatenate([[0], np.cumsum(counts)]).astype(int)
        self.n_data = int(self.rows[-1])
        self._data = np.concatenate([segment.data[segment.good] for segment in segments])
        self._weight = np.concatenate([1.0 / segment.error[segment.good] for segment in segments])
        self._segment = np.repeat(np.arange(len(segments)), counts)
        orders = max((len(segment.continuum) for segment in segments), default=0)
        end = len(self.parameters)
        places = np.full((orders, len(segments)), end, dtype=np.intp)
        basis = np.zeros((orders, self.n_data))
        for k, segment in enumerate(segments):
            places[: len(segment.continuum), k] = segment.continuum
            here = slice(self.rows[k], self.rows[k + 1])
            values = self._basis(segment)[segment.good].T
            basis[: len(segment.continuum), here] = values[: len(segment.continuum)]
        self._continuum_places, self._continuum_basis = places, basis
        self._held = np.array([0.0 if segment.continuum else 1.0 for segment in segments])
        self._zero_places = np.array(
            [end if s.zero_level is None else s.zero_level for s in segments], dtype=np.intp
        )
        pixel = np.arange(self.n_data)

        def target(positions: Sequence[int | None]) -> tuple[Indices, Indices, Array]:
            """Pixels, local columns and tie ratios of one parameter of each segment."""
            known = [None if p is None or p == end else int(p) for p in positions]
            ratio = [0.0 if p is None else float(self.parameters.ratio[p]) for p in known]
            return pixel, layout.rows(known)[self._segment], np.array(ratio)[self._segment]

        self._continuum_targets = [target(list(row)) for row in places]
        self._zero_target = target(list(self._zero_places))
        self._fwhm_target = target([segment.fwhm for segment in segments])
        self._fwhm_free = any(self.parameters.ratio[s.fwhm] != 0.0 for s in segments)
        sources, targets = [], []
        n_free = len(self.parameters.free_names)
        for k, free in enumerate(layout.free):
            own = np.arange(self.rows[k], self.rows[k + 1])[:, None]
            sources.append((own * layout.width + np.arange(1, free.size + 1)).ravel())
            targets.append((own * n_free + free).ravel())
        self._sources, self._targets = np.concatenate(sources), np.concatenate(targets)

    def _basis(self, segment: SegmentTerms) -> Array:
        """Legendre polynomials at all pixels of a segment (n, order + 1)."""
        low, high = segment.wavelength[0], segment.wavelength[-1]
        span = max(high - low, np.finfo(float).tiny)
        xi = 2.0 * (segment.wavelength - low) / span - 1.0
        basis: Array = legendre.legvander(xi, max(len(segment.continuum) - 1, 0))
        return basis

    # -- evaluation -------------------------------------------------------------------------

    def residuals(self, free: Array) -> Array:
        """Residuals (n_data + n_priors,): (data − model)/error, then the priors."""
        theta = self.parameters.expand(free)
        self.n_evaluations += 1
        rows, _ = self.line_rows(theta, derivatives=False)
        transmission = self._transmission(rows[0], theta)
        smooth = self._instrument(theta) @ transmission.ravel()
        return self._residuals(theta, self._polynomial(theta) * smooth)

    def _residuals(self, theta: Array, absorbed: Array) -> Array:
        zero = np.append(theta, 0.0)[self._zero_places][self._segment]
        return np.concatenate(
            [(self._data - absorbed - zero) * self._weight, self._prior_residuals(theta)]
        )

    def residuals_and_jacobian(self, free: Array) -> tuple[Array, Array]:
        """Residuals as in `residuals` and their Jacobian (n_data + n_priors, n_free)."""
        theta = self.parameters.expand(free)
        self.n_evaluations += 1
        slopes = self._transmission_slopes(theta)
        n_local = self._layout.width
        transmission = slopes[:, 0].ravel()
        stacked = np.ascontiguousarray(slopes.transpose(0, 2, 1)).reshape(-1, n_local)
        local: Array = self._instrument(theta) @ stacked  # (n_data, n_local)
        smooth = local[:, 0].copy()
        if self._fwhm_free:
            pixel, column, ratio = self._fwhm_target
            local[pixel, column] += ratio / FWHM_PER_SIGMA * (self._by_sigma @ transmission)
        polynomial = self._polynomial(theta)
        local *= polynomial[:, None]
        for basis, (pixel, column, ratio) in zip(
            self._continuum_basis, self._continuum_targets, strict=True
        ):
            local[pixel, column] += ratio * basis * smooth
        pixel, column, ratio = self._zero_target
        local[pixel, column] += ratio
        local *= -self._weight[:, None]
        residual = self._residuals(theta, polynomial * smooth)
        jacobian = np.zeros((residual.size, free.size))
        jacobian.ravel()[self._targets] = local.ravel()[self._sources]
        for row, (i, prior) in enumerate(self._priors, start=self.n_data):
            jacobian[row, self.parameters.index[i]] += self.parameters.ratio[i] / prior.sigma
        return residual, jacobian

    def _prior_residuals(self, theta: Array) -> Array:
        return np.array([(theta[i] - prior.mean) / prior.sigma for i, prior in self._priors])

    def _polynomial(self, theta: Array) -> Array:
        """Continuum of every fitted pixel."""
        coefficients = np.append(theta, 0.0)[self._continuum_places]
        value = self._held[self._segment]
        for basis, coefficient in zip(self._continuum_basis, coefficients, strict=True):
            value = value + basis * coefficient[self._segment]
        return value

    def _instrument(self, theta: Array) -> Any:
        """Block-diagonal operator (n_data, n_segments × width); rebuilt when a FWHM moved."""
        fwhm = tuple(float(theta[s.fwhm]) for s in self.segments)
        if fwhm != self._fwhm:
            built = [
                self._operator(segment, operator, value, segment.good)
                for segment, operator, value in zip(
                    self.segments, self._operators, fwhm, strict=True
                )
            ]
            self._matrix = self._block_diagonal([matrix for matrix, _ in built])
            self._by_sigma = self._block_diagonal([slope for _, slope in built])
            self._fwhm = fwhm
        return self._matrix

    @staticmethod
    def _operator(
        segment: SegmentTerms,
        operator: InstrumentOperator,
        fwhm: float,
        pixels: NDArray[np.bool_] | slice,
    ) -> tuple[csr_array, csr_array]:
        """Operator of a segment and its derivative to σ; zero for a tabulated profile."""
        profile = segment.line_spread
        if profile is None:
            return operator.matrix_with_derivative(segment.sigma(fwhm)[pixels])
        wavelength = segment.wavelength[pixels]
        matrix = operator.tabulated(
            lambda v, pixel: profile.cumulative(v, wavelength[pixel]),
            profile.reach,
            profile.reach,
        )
        return matrix, csr_array(matrix.shape)

    def _block_diagonal(self, blocks: Sequence[csr_array]) -> csr_array:
        width = self._table.width
        data = np.concatenate([block.data for block in blocks])
        indices = np.concatenate([block.indices + k * width for k, block in enumerate(blocks)])
        counts = np.concatenate([np.diff(block.indptr) for block in blocks])
        pointers = np.concatenate([[0], np.cumsum(counts)])
        return csr_array((data, indices, pointers), shape=(self.n_data, len(blocks) * width))

    def line_rows(self, theta: Array, *, derivatives: bool) -> tuple[Array, Array | None]:
        """Rows of the line table (n_rows, n_items, width), and the distortion velocity."""
        extended = np.append(theta, 0.0)
        masses = self._table.masses
        b_plain, b_turb = extended[self._b], extended[self._b_turb]
        b = np.sqrt(b_plain**2 + DOPPLER_KMS2 * extended[self._temperature] / masses + b_turb**2)
        slopes: Array | None = None
        if derivatives:
            turbulent_only = self._b < len(theta)
            slopes = np.where(turbulent_only, 1.0, 0.5 * DOPPLER_KMS2 / (masses * b))[None]
            if self._turbulent:
                slopes = np.concatenate([slopes, (b_turb / b)[None]])
        s = self._stretch * (1.0 + theta[self._velocity] / C_KMS)
        column = 10.0 ** theta[self._column]
        x = alpha_variable(theta[self.alpha])
        velocity = self._distortion(theta)
        inverse = self._inverse if velocity is None else self._inverse * (1.0 + velocity / C_MS)
        margin = 0.0 if velocity is None else float(np.abs(velocity).max()) / C_MS
        heavy = 1.0 if self.heavy is None else float(theta[self.heavy])
        rows = self._table.evaluate(inverse, s, column, b, x, slopes, margin=margin, heavy=heavy)
        return rows, velocity

    def _distortion(self, theta: Array) -> Array | None:
        """Distortion velocity on the fine grids (n_segments, width), m/s; None without terms."""
        if not any(self._bases):
            return None
        velocity = np.zeros_like(self._inverse)
        for terms in self._bases:
            for k, position, basis in terms:
                velocity[k] += theta[position] * basis
        return velocity

    def _depths(self, tau: Array) -> Array:
        """Sum of the items' optical depths in each segment (n_segments, width)."""
        total = np.zeros((len(self.segments), self._table.width))
        np.add.at(total, self._table.grid_of_item, tau)
        return total

    def _covered(self, tau: Array, theta: Array) -> tuple[Array, Array]:
        """1 − C_g + C_g e^{−τ_g} and e^{−τ_g} of each group (n_groups, n_segments, width)."""
        depth = np.zeros((len(self.coverings), *self._inverse.shape))
        inside = self._group < len(self.coverings)
        np.add.at(depth, (self._group[inside], self._table.grid_of_item[inside]), tau[inside])
        through = np.exp(-depth)
        part = theta[list(self.coverings)][:, None, None]
        return 1.0 - part + part * through, through

    def _transmission(self, tau: Array, theta: Array) -> Array:
        """Transmission on the fine grids (n_segments, width)."""
        if not self.coverings:
            return np.exp(-self._depths(tau))
        plain = np.where((self._group == len(self.coverings))[:, None], tau, 0.0)
        covered, _ = self._covered(tau, theta)
        transmission: Array = np.exp(-self._depths(plain)) * covered.prod(axis=0)
        return transmission

    def _transmission_slopes(self, theta: Array) -> Array:
        """T and ∂T/∂free of each segment (n_segments, n_local, width); see `Layout`."""
        rows, velocity = self.line_rows(theta, derivatives=True)
        covered = through = None
        if self.coverings:
            transmission = self._transmission(rows[0], theta)
            covered, through = self._covered(rows[0], theta)
            # −∂ln T/∂τ of an item is 1, or C_g e^{−τ_g}/(1 − C_g + C_g e^{−τ_g}) in a group
            part = theta[list(self.coverings)][:, None, None]
            weight = np.concatenate([part * through / covered, np.ones((1, *covered.shape[1:]))])
            rows = rows * weight[self._group, self._table.grid_of_item]
        dalpha = theta[self.alpha] * PPM
        factors = np.array([1.0, _LN10, 0.0, 2.0 * (1.0 + dalpha) * PPM])[self._sum_kind]
        moving = self._sum_kind == _VELOCITY
        factors[moving] = 1.0 / (C_KMS + theta[self._sum_place[moving]])
        self._sum.data[:] = self._sum_ratio * factors
        n_rows, n_items, width = rows.shape
        slopes: Array = (self._sum @ rows.reshape(n_rows * n_items, width)).reshape(
            len(self.segments), self._layout.width, width
        )
        if velocity is not None:
            self._add_distortions(slopes, velocity)
        if not self.coverings:
            transmission = np.exp(-slopes[:, 0])
        slopes[:, 1:] *= -transmission[:, None]
        slopes[:, 0] = transmission
        if covered is not None and through is not None:
            for g, position in enumerate(self.coverings):
                ratio = self.parameters.ratio[position]
                change = ratio * transmission * (through[g] - 1.0) / covered[g]
                for k in range(len(self.segments)):
                    row = self._layout.row_if_used(k, position)
                    if row is not None:
                        slopes[k, row] += change[k]
        return slopes

    def _add_distortions(self, slopes: Array, velocity: Array) -> None:
        for terms in self._bases:
            for k, position, basis in terms:
                row = self._layout.row(k, position)
                if row < self._layout.width - 1:
                    by_shift = slopes[k, -2] / (C_MS + velocity[k])
                    slopes[k, row] += self.parameters.ratio[position] * basis * by_shift

    def response(self, free: Array) -> list[tuple[Array, Callable[[Array], Array]]]:
        """How the pixels of each segment respond to more optical depth.

        Returns
        -------
        list of (array (n_fine,), callable)
            For each segment 1/λ (Å⁻¹) of the true wavelengths on the fine grid, and a function from
            additional optical depths (n_fine, m), small, to the change of the residuals
            (n_good, m), with the sign of absorption that the data still lack: residual per depth.

        """
        theta = self.parameters.expand(free)
        rows, velocity = self.line_rows(theta, derivatives=False)
        transmission = self._transmission(rows[0], theta)
        matrix = self._instrument(theta)
        polynomial = self._polynomial(theta)
        width = self._table.width
        out: list[tuple[Array, Callable[[Array], Array]]] = []
        for k, grid in enumerate(self.grids):
            inverse = grid.inverse
            if velocity is not None:
                inverse = inverse * (1.0 + velocity[k, : grid.size] / C_MS)
            own = slice(self.rows[k], self.rows[k + 1])
            block = matrix[own, k * width : k * width + grid.size]
            scale = (polynomial * self._weight)[own, None]
            through = transmission[k, : grid.size, None]

            def absorb(
                tau: Array, block: Any = block, scale: Array = scale, through: Array = through
            ) -> Array:
                change: Array = scale * (block @ (through * tau))
                return -change

            out.append((inverse, absorb))
        return out

    # -- for tables and plots ---------------------------------------------------------------

    def predict(self, free: Array) -> list[SegmentPrediction]:
        """What the model predicts for every pixel of every segment."""
        theta = self.parameters.expand(free)
        rows, _ = self.line_rows(theta, derivatives=False)
        tau = rows[0]
        transmission = self._transmission(tau, theta)
        predictions = []
        for k, segment in enumerate(self.segments):
            size = self.grids[k].size
            reference = float(segment.wavelength[0])
            everywhere = InstrumentOperator(
                log_velocity(segment.edges_low, reference),
                log_velocity(segment.edges_high, reference),
                self._velocities[k],
            )
            operator = self._operator(segment, everywhere, float(theta[segment.fwhm]), slice(None))
            alone = np.zeros((len(self.components), size))
            for i, item in enumerate(self._items):
                if item.segment == k:
                    alone[item.component] += tau[i, :size]
            single = np.exp(-alone)
            for c, component in enumerate(self.components):
                if component.covering is not None:
                    part = theta[self.coverings[component.covering]]
                    single[c] = 1.0 - part + part * single[c]
            continuum = np.ones(segment.wavelength.size)
            if segment.continuum:
                continuum = self._basis(segment) @ theta[list(segment.continuum)]
            flux = continuum * (operator[0] @ transmission[k, :size])
            if segment.zero_level is not None:
                flux = flux + theta[segment.zero_level]
            residual = np.full(flux.size, np.nan)
            good = segment.good
            residual[good] = (segment.data[good] - flux[good]) / segment.error[good]
            absorbed: Array = operator[0] @ single.T
            predictions.append(
                SegmentPrediction(flux, continuum, residual, np.ascontiguousarray(absorbed.T))
            )
        return predictions
