"""The forward model of an absorber: residuals and their analytic Jacobian.

A *segment* is one region in one spectrum. In a segment the normalised flux of a pixel is

    y = p(ξ) · [W e^{−τ}] + y0,     τ = Σ_k Σ_i τ_{k i},

with W the instrument operator (`fathomline.model.instrument`), p a polynomial in Legendre form
over the window (ξ from −1 to 1), y0 the zero level, and τ the optical depth of every component k
in every transition i that falls near the window. Residuals are (data − model)/error; Gaussian
priors add one residual each. Derivatives of τ are collected per free parameter on the fine grid
and go through W together.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from fathomline.atomic import alpha_variable
from fathomline.constants import C_KMS, DOPPLER_KMS2, PPM
from fathomline.errors import FitError
from fathomline.model.instrument import (
    InstrumentOperator,
    fine_spacing,
    fine_velocity_grid,
    log_velocity,
)
from fathomline.model.parameters import ParameterSet
from fathomline.profile import FineGrid, TransitionLines

__all__ = ["AbsorberModel", "ComponentTerms", "SegmentPrediction", "SegmentTerms"]

Array = NDArray[np.float64]

_LN10 = math.log(10.0)
_FWHM_TO_SIGMA = 1.0 / (2.0 * math.sqrt(2.0 * math.log(2.0)))
_WIDEST = 1.5  # the fine grid leaves room for a line-spread function this much wider


@dataclass(frozen=True, slots=True)
class ComponentTerms:
    """Places of a component's parameters in the full vector.

    Either `b` (turbulent broadening, shared by all ions) or `temperature` (thermal, with
    `b_turb` added in quadrature when given).
    """

    velocity: int
    log_columns: dict[str, int]
    b: int | None = None
    temperature: int | None = None
    b_turb: int | None = None

    def widths(self, theta: Array, masses: Array) -> Array:
        """Doppler parameter, km/s, for each mass in u."""
        if self.b is not None:
            return np.full(masses.size, theta[self.b])
        assert self.temperature is not None
        square = DOPPLER_KMS2 * theta[self.temperature] / masses
        if self.b_turb is not None:
            square = square + theta[self.b_turb] ** 2
        widths: Array = np.sqrt(square)
        return widths

    @property
    def width_parameters(self) -> tuple[int, ...]:
        """Places of the parameters of the width."""
        return tuple(p for p in (self.b, self.temperature, self.b_turb) if p is not None)

    def width_slopes(self, theta: Array, masses: Array, b: Array) -> Array:
        """Derivatives of `b` to the parameters of the width (n_width_parameters, n_lines)."""
        if self.b is not None:
            return np.ones((1, b.size))
        thermal = 0.5 * DOPPLER_KMS2 / (masses * b)
        if self.b_turb is None:
            return thermal[None, :]
        return np.array([thermal, theta[self.b_turb] / b])


@dataclass(frozen=True)
class SegmentTerms:
    """One region in one spectrum: its pixels, lines and nuisance parameters.

    Attributes
    ----------
    region : int
        Number of the region, from 0.
    name : str
        The transition that the region is about.
    spectrum : str
        The id of the spectrum.
    wavelength, edges_low, edges_high : array (n,)
        Pixel centres and edges, Å.
    data, error : array (n,)
        Flux and its error divided by the continuum of the file.
    good : bool array (n,)
        Pixels to fit.
    lines : tuple of (str, TransitionLines)
        Ion and lines of every transition that can absorb here.
    continuum : tuple of int
        Places of the Legendre coefficients; empty for a continuum held at that of the file.
    zero_level : int or None
        Place of the zero level, in units of the file's continuum.
    fwhm : int
        Place of the FWHM of the line-spread function, km/s.
    window : (float, float)
        Limits of the region in km/s, for plots.
    rest : float
        Composite rest wavelength of the region's transition, Å.

    """

    region: int
    name: str
    spectrum: str
    wavelength: Array
    edges_low: Array
    edges_high: Array
    data: Array
    error: Array
    good: NDArray[np.bool_]
    lines: tuple[tuple[str, TransitionLines], ...]
    continuum: tuple[int, ...]
    zero_level: int | None
    fwhm: int
    window: tuple[float, float]
    rest: float


@dataclass(frozen=True, slots=True)
class SegmentPrediction:
    """What the model predicts for every pixel of a segment, masked ones included.

    Attributes
    ----------
    flux, continuum, residual : array (n,)
        In units of the file's continuum; the residual is (data − flux)/error, nan where the pixel
        is not fitted.
    components : array (n_components, n)
        Transmission of each component alone, e^{−τ_k} after the instrument.

    """

    flux: Array
    continuum: Array
    residual: Array
    components: Array


@dataclass
class _Workspace:
    """What a segment keeps between evaluations."""

    fine: FineGrid
    grid: Array  # the same in km/s about the first pixel
    operator: InstrumentOperator
    basis: Array  # Legendre polynomials at the good pixels, (n_good, order + 1)
    inverse_error: Array
    data: Array
    free: NDArray[np.intp]  # free parameters that the segment depends on
    row: dict[int, int] = field(default_factory=dict)  # full position -> row among `free`
    sigma: float = math.nan
    matrix: Any = None  # scipy sparse array


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
    refine : float
        The fine grid is this factor finer than the sampling rule asks for.

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
        refine: float = 1.0,
        sampled_for: Array | None = None,
    ) -> None:
        self.redshift, self.parameters, self.alpha = redshift, parameters, alpha
        self.components, self.segments = tuple(components), tuple(segments)
        self.refine = refine
        self.n_evaluations = 0
        self._priors = parameters.priors()
        theta = parameters.expand(parameters.start) if sampled_for is None else sampled_for
        self.spacings = tuple(self.required_spacing(theta))
        self._work = [
            self._prepare(segment, theta, spacing)
            for segment, spacing in zip(self.segments, self.spacings, strict=True)
        ]
        counts = [int(segment.good.sum()) for segment in self.segments]
        self.rows = np.concatenate([[0], np.cumsum(counts)]).astype(int)
        self.n_data = int(self.rows[-1])

    def __repr__(self) -> str:
        return (
            f"AbsorberModel(z={self.redshift}, {len(self.components)} components, "
            f"{len(self.segments)} segments, {self.n_data} pixels, "
            f"{len(self.parameters.free_names)} free)"
        )

    # -- set-up -----------------------------------------------------------------------------

    def required_spacing(self, theta: Array) -> list[float]:
        """Fine-grid spacing, km/s, that the sampling rule asks for in each segment."""
        spacings = []
        for segment in self.segments:
            sigma = theta[segment.fwhm] * _FWHM_TO_SIGMA
            needed = [sigma]
            for component in self.components:
                for ion, lines in segment.lines:
                    if ion not in component.log_columns:
                        continue
                    b = component.widths(theta, lines.masses)
                    column = 10.0 ** theta[component.log_columns[ion]]
                    needed.append(fine_spacing(float(b.min()), sigma, lines.peak_depth(b, column)))
            spacings.append(min(needed) / self.refine)
        return spacings

    def _prepare(self, segment: SegmentTerms, theta: Array, spacing: float) -> _Workspace:
        good = segment.good
        if not good.any():
            raise FitError(
                f"region {segment.region + 1} ({segment.name}) has no good pixel in spectrum "
                f"{segment.spectrum!r}"
            )
        reference = float(segment.wavelength[0])
        low = log_velocity(segment.edges_low, reference)
        high = log_velocity(segment.edges_high, reference)
        sigma = theta[segment.fwhm] * _FWHM_TO_SIGMA
        if self.parameters.ratio[segment.fwhm] != 0.0:
            sigma *= _WIDEST
        grid = fine_velocity_grid(float(low.min()), float(high.max()), sigma, spacing)
        used = [self.alpha, segment.fwhm, *segment.continuum]
        if segment.zero_level is not None:
            used.append(segment.zero_level)
        for component in self.components:
            used += [component.velocity, *component.width_parameters]
            used += [
                component.log_columns[ion]
                for ion, _ in segment.lines
                if ion in component.log_columns
            ]
        moving = [p for p in used if self.parameters.ratio[p] != 0.0]
        free = np.unique(self.parameters.index[moving]).astype(np.intp)
        place = {int(k): row for row, k in enumerate(free)}
        return _Workspace(
            fine=FineGrid(
                start=math.log(reference) + float(grid[0]) / C_KMS,
                step=spacing / C_KMS,
                inverse=np.exp(-grid / C_KMS) / reference,
            ),
            grid=grid,
            operator=InstrumentOperator(low[good], high[good], grid),
            basis=self._basis(segment)[good],
            inverse_error=1.0 / segment.error[good],
            data=segment.data[good],
            free=free,
            row={p: place[int(self.parameters.index[p])] for p in moving},
        )

    def _basis(self, segment: SegmentTerms) -> Array:
        low, high = segment.wavelength[0], segment.wavelength[-1]
        span = max(high - low, np.finfo(float).tiny)
        xi = 2.0 * (segment.wavelength - low) / span - 1.0
        order = max(len(segment.continuum) - 1, 0)
        return legendre.legvander(xi, order)

    def _polynomial(self, segment: SegmentTerms, basis: Array, theta: Array) -> Array:
        if not segment.continuum:
            return np.ones(basis.shape[0])
        value: Array = basis @ theta[list(segment.continuum)]
        return value

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
            refine=self.refine * refine,
            sampled_for=theta,
        )

    # -- evaluation -------------------------------------------------------------------------

    def residuals(self, free: Array) -> Array:
        """Residuals (n_data + n_priors,): (data − model)/error, then the priors."""
        theta = self.parameters.expand(free)
        self.n_evaluations += 1
        parts = [
            (work.data - self._segment_flux(segment, work, theta)) * work.inverse_error
            for segment, work in zip(self.segments, self._work, strict=True)
        ]
        parts.append(self._prior_residuals(theta))
        return np.concatenate(parts)

    def _prior_residuals(self, theta: Array) -> Array:
        return np.array([(theta[i] - prior.mean) / prior.sigma for i, prior in self._priors])

    def _segment_flux(self, segment: SegmentTerms, work: _Workspace, theta: Array) -> Array:
        tau = self._depth(segment, work.fine, theta)
        sigma = theta[segment.fwhm] * _FWHM_TO_SIGMA
        if sigma != work.sigma:
            work.matrix, work.sigma = work.operator.matrix(sigma), sigma
        flux = self._polynomial(segment, work.basis, theta) * (work.matrix @ np.exp(-tau))
        if segment.zero_level is not None:
            flux = flux + theta[segment.zero_level]
        result: Array = flux
        return result

    def _scale(self, component: ComponentTerms, theta: Array) -> float:
        return float((1.0 + self.redshift) * (1.0 + theta[component.velocity] / C_KMS))

    def _depth(
        self,
        segment: SegmentTerms,
        grid: FineGrid,
        theta: Array,
        components: Sequence[ComponentTerms] | None = None,
    ) -> Array:
        x = alpha_variable(theta[self.alpha])
        tau = np.zeros(grid.inverse.size)
        for component in self.components if components is None else components:
            s = self._scale(component, theta)
            for ion, lines in segment.lines:
                position = component.log_columns.get(ion)
                if position is not None:
                    b = component.widths(theta, lines.masses)
                    for part, values in lines.parts(grid, s, b, 10.0 ** theta[position], x):
                        tau[part] += values[0]
        return tau

    def residuals_and_jacobian(self, free: Array) -> tuple[Array, Array]:
        """Residuals as in `residuals` and their Jacobian (n_data + n_priors, n_free)."""
        theta = self.parameters.expand(free)
        self.n_evaluations += 1
        n_rows = self.n_data + len(self._priors)
        residual = np.empty(n_rows)
        jacobian = np.zeros((n_rows, free.size))
        for k, (segment, work) in enumerate(zip(self.segments, self._work, strict=True)):
            rows = slice(self.rows[k], self.rows[k + 1])
            flux, derivative = self._segment_jacobian(segment, work, theta)
            residual[rows] = (work.data - flux) * work.inverse_error
            jacobian[rows, work.free] = derivative * -work.inverse_error[:, None]
        residual[self.n_data :] = self._prior_residuals(theta)
        for row, (i, prior) in enumerate(self._priors, start=self.n_data):
            jacobian[row, self.parameters.index[i]] += self.parameters.ratio[i] / prior.sigma
        return residual, jacobian

    def _segment_jacobian(
        self, segment: SegmentTerms, work: _Workspace, theta: Array
    ) -> tuple[Array, Array]:
        """Flux (n_good,) and its derivatives (n_good, n_free of the segment)."""
        tau, slopes = self._depth_slopes(segment, work, theta)
        transmission = np.exp(-tau)
        sigma = theta[segment.fwhm] * _FWHM_TO_SIGMA
        fwhm_row = work.row.get(segment.fwhm)
        if fwhm_row is not None:
            work.matrix, by_sigma = work.operator.matrix_with_derivative(sigma)
            work.sigma = sigma
        elif sigma != work.sigma:
            work.matrix, work.sigma = work.operator.matrix(sigma), sigma
        slopes *= -transmission
        smooth: Array = work.matrix @ transmission
        derivative: Array = work.matrix @ slopes.T
        ratio = self.parameters.ratio
        if fwhm_row is not None:
            derivative[:, fwhm_row] += (
                ratio[segment.fwhm] * _FWHM_TO_SIGMA * (by_sigma @ transmission)
            )
        polynomial = self._polynomial(segment, work.basis, theta)
        derivative *= polynomial[:, None]
        for order, position in enumerate(segment.continuum):
            row = work.row.get(position)
            if row is not None:
                derivative[:, row] += ratio[position] * work.basis[:, order] * smooth
        flux = polynomial * smooth
        if segment.zero_level is not None:
            flux = flux + theta[segment.zero_level]
            row = work.row.get(segment.zero_level)
            if row is not None:
                derivative[:, row] += ratio[segment.zero_level]
        return flux, derivative

    def _depth_slopes(
        self, segment: SegmentTerms, work: _Workspace, theta: Array
    ) -> tuple[Array, Array]:
        """τ (n_fine,) and ∂τ/∂free (n_free of the segment, n_fine)."""
        ratio, rows = self.parameters.ratio, work.row
        dalpha = theta[self.alpha] * PPM
        x = alpha_variable(theta[self.alpha])
        x_by_alpha = 2.0 * (1.0 + dalpha) * PPM
        tau = np.zeros(work.grid.size)
        slopes = np.zeros((work.free.size, work.grid.size))
        for component in self.components:
            s = self._scale(component, theta)
            # what the rows of `TransitionLines.parts` contribute to, and by what factor
            targets: list[tuple[int, int, float]] = [
                (1, component.velocity, 1.0 / (C_KMS + theta[component.velocity])),
                (2, self.alpha, x_by_alpha),
                *((3 + i, p, 1.0) for i, p in enumerate(component.width_parameters)),
            ]
            for ion, lines in segment.lines:
                position = component.log_columns.get(ion)
                if position is None:
                    continue
                b = component.widths(theta, lines.masses)
                by_width = component.width_slopes(theta, lines.masses, b)
                wanted = [
                    (i, rows[p], factor * ratio[p])
                    for i, p, factor in (*targets, (0, position, _LN10))
                    if p in rows
                ]
                for part, values in lines.parts(
                    work.fine, s, b, 10.0 ** theta[position], x, by_width
                ):
                    tau[part] += values[0]
                    for i, row, factor in wanted:
                        slopes[row, part] += factor * values[i]
        return tau, slopes

    # -- for tables and plots ---------------------------------------------------------------

    def predict(self, free: Array) -> list[SegmentPrediction]:
        """What the model predicts for every pixel of every segment."""
        theta = self.parameters.expand(free)
        predictions = []
        for segment, work in zip(self.segments, self._work, strict=True):
            reference = float(segment.wavelength[0])
            operator = InstrumentOperator(
                log_velocity(segment.edges_low, reference),
                log_velocity(segment.edges_high, reference),
                work.grid,
            ).matrix(theta[segment.fwhm] * _FWHM_TO_SIGMA)
            alone = [
                operator @ np.exp(-self._depth(segment, work.fine, theta, [component]))
                for component in self.components
            ]
            continuum = self._polynomial(segment, self._basis(segment), theta)
            flux = continuum * (operator @ np.exp(-self._depth(segment, work.fine, theta)))
            if segment.zero_level is not None:
                flux = flux + theta[segment.zero_level]
            residual = np.full(flux.size, np.nan)
            good = segment.good
            residual[good] = (segment.data[good] - flux[good]) / segment.error[good]
            predictions.append(SegmentPrediction(flux, continuum, residual, np.array(alone)))
        return predictions
