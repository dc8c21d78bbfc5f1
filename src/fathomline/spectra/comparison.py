"""The velocity shift between two spectra of one object, chunk by chunk, without a model of it.

Method
------
Let x = ln λ, and let two spectra record one spectrum G, displaced by v_1 and v_2: with a slowly
varying ratio p of their flux scales,

    F_1(x) = G(x − v_1/c),        F_2(x) = G(x − v_2/c) / p(x).

To first order in v = v_1 − v_2 the difference is proportional to the gradient of the mean,

    D = F_1 − p F_2 = v g + (a_0 + a_1 t + …) F + noise,      g = −(1/c) dF/dx,

with F = u_1 F_1 + u_2 p F_2, u_1 + u_2 = 1 and u_k as the inverse of the typical variance in the
chunk. The a_k with t in [−1, 1] take up what p still lacks. dF/dx is the six-point difference of
sixth order, (45 Δ_1 − 9 Δ_2 + Δ_3)/60 with Δ_k = F_{i+k} − F_{i−k}, over the same difference of x:
for lines of FWHM three pixels it is right to 1 %, for two pixels it is 6 % too small (then an error
is that much too large, and the part of a shift below a tenth of a pixel by 4 %).

**Noise in the gradient.** g and F are made of the same noisy pixels, so plain least squares would
return v too small, by the factor 1 − ⟨σ_g²⟩/⟨g²⟩. All quantities are linear in the pixels, so the
covariances of their noise follow from the errors, and their expected contribution is taken out of
the normal equations (moment correction; Fuller 1987, Measurement Error Models, section 2.2). With
the matrix A of the columns g, F, tF, … and W = diag(1/Var D):

    M = AᵀWA − Σ w_i Cov(A_i, A_i),     s = AᵀWD − Σ w_i Cov(A_i, D_i),
    (v, a) = M⁻¹ s,                     Cov(v, a) = M⁻¹ AᵀW C_D WA M⁻¹.

C_D holds the correlation of neighbouring pixels, so the error of v is that of correlated noise
although the weights are those of independent pixels (which costs little and is robust).

**Large shifts.** The neglected terms are odd, of relative size (v/pixel)²/10. While the rest of the
shift exceeds a tenth of a pixel the second spectrum is interpolated at the shift found so far (from
its own pixels, once, never twice) and the fit repeated.

**Other grids.** If the pixels differ, the second spectrum is interpolated to those of the first by
a six-point polynomial K. The errors become those of K C_2 Kᵀ, correlations included: pixels half a
pixel away from their source lose noise and gain correlation, which leaves the error of v as it was.
The interpolation does not change pixel sizes; a symmetric difference of resolution does not shift
lines, but raises χ² beside strong ones.

**Correlation of neighbouring pixels.** With equal grids the lag-1 correlation ρ is measured on the
difference spectrum, where the object drops out, by `fathomline.spectra.summary`; else on each of
the two. A known value may be given.

**Outliers.** Pixels whose residual exceeds `clip` σ (cosmic rays) are dropped, with those whose
gradient uses them, and the chunk is fitted again. Where residuals are larger than the errors say
(median absolute residual above 0.6745 σ) the limit is larger by as much.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.sparse as sp
from numpy.typing import NDArray

from fathomline.atomic import load_atomic_data
from fathomline.constants import C_MS
from fathomline.errors import SpectrumError
from fathomline.spectra.chunks import feature_chunks, fixed_chunks
from fathomline.spectra.spectrum import Spectrum
from fathomline.spectra.summary import noise_correlation

__all__ = ["ChunkShift", "compare_spectra", "mean_shift"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

_STENCIL: FloatArray = np.array([-1.0, 9.0, -45.0, 0.0, 45.0, -9.0, 1.0]) / 60.0
_REACH = 3  # pixels of the gradient on each side
_POINTS = 6  # of the interpolation
_LARGEST_STEP = 0.1  # of a pixel, see "Large shifts"
_SAME_GRID = 1e-3  # of a pixel: 2.5 m/s in pixels of 2.5 km/s
_ROUNDS = 40
_FEWEST_PIXELS = 8  # more than the parameters of the fit
_MOST_ATTENUATION = 0.5


@dataclass(frozen=True, slots=True)
class ChunkShift:
    """Shift of the first spectrum against the second in one chunk.

    Attributes
    ----------
    low, high
        Wavelengths of the first and last pixel used, Å.
    wavelength
        Mean wavelength, Å, weighted by each pixel's information on the shift.
    velocity
        First minus second, m/s: positive where the first has its lines further to the red.
    error
        1σ error, m/s, from the errors of both spectra; not rescaled by χ².
    chi2_nu
        χ² of the difference per degree of freedom.
    pixels
        Pixels used.
    clipped
        Pixels dropped as outliers.
    attenuation
        ⟨g²⟩ without noise over ⟨g²⟩: what plain least squares would have made of the shift.

    """

    low: float
    high: float
    wavelength: float
    velocity: float
    error: float
    chi2_nu: float
    pixels: int
    clipped: int
    attenuation: float


@dataclass(frozen=True, slots=True)
class _Side:
    """One spectrum as the comparison uses it: x = ln λ, flux, error (0 where bad), good."""

    x: FloatArray
    flux: FloatArray
    error: FloatArray
    good: BoolArray
    rho: float


def compare_spectra(
    first: Spectrum,
    second: Spectrum,
    *,
    chunk: float | None = None,
    window: tuple[float, float] | None = None,
    min_significance: float = 3.0,
    order: int = 1,
    correlation: float | None = None,
    clip: float = 4.5,
    exclude_telluric: bool = True,
) -> list[ChunkShift]:
    """Measure the velocity shift between two spectra of one object in chunks.

    Parameters
    ----------
    first, second
        Spectra that overlap. Fluxes are divided by the continua when both have one.
    chunk
        Length of contiguous chunks, km/s. Default: one chunk for each absorption feature, see
        `fathomline.spectra.chunks`.
    window
        Use this range only, Å.
    min_significance
        Least root-mean-square gradient over seven pixels, in units of its noise, that makes a
        feature. A chunk without a feature is left out.
    order
        Order, 0 to 5, of the polynomial for the ratio of the flux scales in each chunk.
    correlation
        Lag-1 correlation of the noise of both spectra; default: measured.
    clip
        Limit for outliers, σ.
    exclude_telluric
        Leave out the telluric ranges: telluric lines keep still in the frame of the observatory, so
        between barycentric spectra of two dates they move against the object.

    Returns
    -------
    list of ChunkShift
        Ascending in wavelength; empty when no feature is significant.

    Raises
    ------
    SpectrumError
        If an argument is out of range, or the spectra do not overlap.

    """
    _check(chunk, window, min_significance, order, correlation, clip)
    low = max(first.wavelength[0], second.wavelength[0], -math.inf if window is None else window[0])
    high = min(first.wavelength[-1], second.wavelength[-1], *(() if window is None else window[1:]))
    inside = (first.wavelength >= low) & (first.wavelength <= high)
    if np.count_nonzero(inside & first.good) < _FEWEST_PIXELS:
        of = "" if window is None else f" within {window[0]:.6g} to {window[1]:.6g} Å"
        raise SpectrumError(
            f"spectra {first.name!r} and {second.name!r} have no good pixels in common{of}; they "
            f"cover {first.wavelength[0]:.2f}-{first.wavelength[-1]:.2f} Å and "
            f"{second.wavelength[0]:.2f}-{second.wavelength[-1]:.2f} Å"
        )
    if exclude_telluric:
        inside &= ~_telluric(first, second, first.wavelength)
    one, two = _sides(first, second, correlation)
    one = replace(one, good=one.good & inside)
    pixel = float(np.median(np.diff(one.x)))
    plain = _resampled(two, one, slice(0, one.x.size), 0.0)
    significance = _significance(one, plain)
    if chunk is None:
        parts = feature_chunks(significance, min_significance, pixel)
    else:
        parts = fixed_chunks(one.x, inside, chunk, significance, min_significance)
    shifts = (_measure(one, two, part, pixel, order, clip) for part in parts)
    return [shift for shift in shifts if shift is not None]


def mean_shift(
    shifts: Sequence[ChunkShift], low: float = -math.inf, high: float = math.inf
) -> tuple[float, float, float | None, int]:
    """Weighted mean of the chunks with low ≤ wavelength < high (Å).

    Returns
    -------
    velocity, error, chi2_nu, n
        m/s; χ² of the chunks about their mean per degree of freedom (None for a single chunk).
        The error is that of the chunks' errors alone.

    Raises
    ------
    SpectrumError
        If no chunk lies in the range.

    """
    chosen = [s for s in shifts if low <= s.wavelength < high]
    if not chosen:
        raise SpectrumError(f"no measured chunk lies between {low:.6g} and {high:.6g} Å")
    v = np.array([s.velocity for s in chosen])
    weight = np.array([s.error for s in chosen]) ** -2.0
    mean = float(np.sum(weight * v) / weight.sum())
    chi2 = float(np.sum(weight * (v - mean) ** 2))
    n = len(chosen)
    return mean, float(weight.sum() ** -0.5), chi2 / (n - 1) if n > 1 else None, n


def _check(
    chunk: float | None,
    window: tuple[float, float] | None,
    min_significance: float,
    order: int,
    correlation: float | None,
    clip: float,
) -> None:
    if chunk is not None and not (math.isfinite(chunk) and chunk > 0.0):
        raise SpectrumError(f"chunk length must be a positive number of km/s, found {chunk!r}")
    if window is not None and not window[0] < window[1]:
        raise SpectrumError(f"the window {window[0]!r} to {window[1]!r} Å is empty")
    if not (math.isfinite(min_significance) and min_significance >= 1.0):
        raise SpectrumError(f"min_significance must be 1 or more, found {min_significance!r}")
    if not 0 <= order <= 5:
        raise SpectrumError(f"order must be between 0 and 5, found {order!r}")
    if correlation is not None and not -0.5 < correlation < 0.5:
        # a tridiagonal correlation matrix is positive definite only within these limits
        raise SpectrumError(f"correlation must be between -0.5 and 0.5, found {correlation!r}")
    if not clip >= 3.0:
        raise SpectrumError(f"clip must be 3 σ or more, found {clip!r}: it would cut the noise")


def _telluric(first: Spectrum, second: Spectrum, wavelength: FloatArray) -> BoolArray:
    atoms = load_atomic_data()
    limits = (float(wavelength[0]), float(wavelength[-1]))
    mask = np.zeros(wavelength.size, dtype=bool)
    for spectrum in (first, second):
        velocity = spectrum.reading.barycentric_velocity or 0.0
        factor = 1.0 + 1e3 * velocity / C_MS
        for found in atoms.telluric_overlap(limits, velocity):
            mask |= (wavelength >= found.wave_min * factor) & (
                wavelength <= found.wave_max * factor
            )
    return mask


def _sides(first: Spectrum, second: Spectrum, correlation: float | None) -> tuple[_Side, _Side]:
    normalised = first.continuum is not None and second.continuum is not None
    sides = []
    for spectrum in (first, second):
        level = np.ones(len(spectrum))
        if normalised and spectrum.continuum is not None:
            level = np.where(spectrum.good, spectrum.continuum, 1.0)
        sides.append(
            _Side(
                np.log(spectrum.wavelength),
                np.where(spectrum.good, spectrum.flux, 0.0) / level,
                np.where(spectrum.good, spectrum.error, 0.0) / level,
                spectrum.good,
                0.0,
            )
        )
    one, two = sides
    if correlation is not None:
        rho = (correlation, correlation)
    elif _same_grid(one, two):
        good = one.good & two.good
        ratio = float(np.median(one.flux[good]) / np.median(two.flux[good])) if good.any() else 1.0
        difference = Spectrum.from_arrays(
            first.wavelength,
            one.flux - ratio * two.flux,
            np.where(good, np.hypot(one.error, ratio * two.error), -1.0),
        )
        rho = (_lag_one(difference),) * 2
    else:
        rho = (_lag_one(first), _lag_one(second))
    return replace(one, rho=rho[0]), replace(two, rho=rho[1])


def _lag_one(spectrum: Spectrum) -> float:
    found = noise_correlation(spectrum)
    return 0.0 if found is None else float(np.clip(found[0], -0.45, 0.45))


def _same_grid(one: _Side, two: _Side) -> bool:
    if one.x.size != two.x.size:
        return False
    return bool(np.all(np.abs(one.x - two.x)[1:] < _SAME_GRID * np.diff(one.x)))


def _covariance(error: FloatArray, rho: float) -> sp.csr_array:
    beside = rho * error[:-1] * error[1:]
    return sp.diags_array([error**2, beside, beside], offsets=[0, 1, -1], format="csr")


@dataclass(frozen=True, slots=True)
class _Piece:
    """A spectrum on the pixels of a chunk: flux and its covariance; good."""

    flux: FloatArray
    covariance: sp.csr_array
    good: BoolArray


def _own(side: _Side, part: slice) -> _Piece:
    covariance = _covariance(side.error[part], side.rho)
    return _Piece(side.flux[part], covariance, side.good[part])


def _resampled(side: _Side, target: _Side, part: slice, offset: float) -> _Piece:
    """``side`` on the pixels ``part`` of ``target``, moved to the red by ``offset`` m/s."""
    if offset == 0.0 and _same_grid(side, target):
        return _own(side, part)
    x = target.x[part] - offset / C_MS
    place = np.interp(x, side.x, np.arange(side.x.size), left=-1.0, right=-1.0)
    base = np.floor(place).astype(np.intp) - (_POINTS // 2 - 1)
    inside = (place >= 0.0) & (base >= 0) & (base + _POINTS <= side.x.size)
    base = np.clip(base, 0, max(side.x.size - _POINTS, 0))
    index = base[:, None] + np.arange(_POINTS)
    # polynomial through six pixels, in units of the pixel number
    t = place[:, None] - index
    weight = np.ones_like(t)
    for j in range(_POINTS):
        for k in range(_POINTS):
            if k != j:
                weight[:, j] *= t[:, k] / (j - k)
    weight[~inside] = 0.0
    used = np.abs(weight) > 1e-9
    good = inside & np.all(side.good[index] | ~used, axis=1)
    good &= ~_crosses_hole(side.x, index, used)
    low, high = int(base.min(initial=0)), int(base.max(initial=0)) + _POINTS
    rows = np.repeat(np.arange(x.size), _POINTS)
    kernel = sp.csr_array(
        (weight.ravel(), (rows, (index - low).ravel())), shape=(x.size, high - low)
    )
    source = slice(low, high)
    covariance = kernel @ _covariance(side.error[source], side.rho) @ kernel.T
    return _Piece(kernel @ side.flux[source], covariance.tocsr(), good)


def _crosses_hole(x: FloatArray, index: NDArray[np.intp], used: BoolArray) -> BoolArray:
    step = np.diff(x)
    hole = step > 3.0 * float(np.median(step))
    both: BoolArray = np.any(used[:, :-1] & used[:, 1:] & hole[index[:, :-1]], axis=1)
    return both


def _gradient(x: FloatArray) -> sp.csr_array:
    """Operator from F to g = −(1/c) dF/dx, (m/s)⁻¹; the rows of the ends mean nothing."""
    n = x.size
    offsets = range(-_REACH, _REACH + 1)
    plain = sp.diags_array(
        [np.full(n - abs(k), c) for k, c in zip(offsets, _STENCIL, strict=True)],
        offsets=list(offsets),
        format="csr",
    )
    step = plain @ x
    step[:_REACH] = step[-_REACH:] = np.inf
    return (sp.diags_array([-1.0 / (C_MS * step)], offsets=[0]) @ plain).tocsr()


def _stencil_good(good: BoolArray, x: FloatArray) -> BoolArray:
    """Pixels whose gradient uses good pixels only, without a hole between them."""
    n = good.size
    result = good.copy()
    result[:_REACH] = result[-_REACH:] = False
    bad = ~good
    for k in range(1, _REACH + 1):
        result[k:] &= ~bad[: n - k]
        result[: n - k] &= ~bad[k:]
    for i in np.flatnonzero(np.diff(x) > 3.0 * float(np.median(np.diff(x)))):
        result[max(i - _REACH + 1, 0) : i + _REACH + 1] = False
    return result


def _significance(one: _Side, two: _Piece) -> FloatArray:
    """Gradient of both spectra over its noise, shape (n,); 0 where it cannot be formed."""
    operator = _gradient(one.x)
    good = _stencil_good(one.good & two.good, one.x)
    total = np.zeros(one.x.size)
    for flux, covariance in (
        (one.flux, _covariance(one.error, one.rho)),
        (two.flux, two.covariance),
    ):
        noise = (operator @ covariance @ operator.T).diagonal()
        total[good] += (operator @ flux)[good] / np.sqrt(noise[good])
    return np.abs(total) / math.sqrt(2.0)


@dataclass(frozen=True, slots=True)
class _Solution:
    velocity: float
    error: float
    ratio: FloatArray  # of the flux scales; shape (n,)
    residual: FloatArray  # in σ, shape (n,), 0 where not used
    information: FloatArray
    attenuation: float
    use: BoolArray


def _measure(
    one: _Side, two: _Side, part: slice, pixel: float, order: int, clip: float
) -> ChunkShift | None:
    start, stop = max(part.start - _REACH, 0), min(part.stop + _REACH, one.x.size)
    whole = slice(start, stop)
    if stop - start < 2 * _REACH + _FEWEST_PIXELS:
        return None
    a = _own(one, whole)
    x = one.x[whole]
    wanted = np.zeros(x.size, dtype=bool)
    wanted[part.start - start : part.stop - start] = True
    dropped = np.zeros(x.size, dtype=bool)
    offset, ratio = 0.0, None
    b = _resampled(two, one, whole, offset)
    largest = _LARGEST_STEP * pixel * C_MS
    for _ in range(_ROUNDS):
        good = a.good & b.good & ~dropped
        use = wanted & _stencil_good(good, x)
        if np.count_nonzero(use) < _FEWEST_PIXELS + order:
            return None
        if ratio is None:
            sums = a.flux[use].sum(), b.flux[use].sum()
            ratio = np.full(x.size, sums[0] / sums[1] if min(sums) > 0.0 else 1.0)
        found = _solve(a, b, x, use, ratio, order)
        if found is None:
            return None
        changed = float(np.max(np.abs(found.ratio / ratio - 1.0)[use]))
        ratio = found.ratio
        if changed > 1e-3:
            continue
        if abs(found.velocity) > largest:
            offset += float(np.clip(found.velocity, -0.5 * C_MS * pixel, 0.5 * C_MS * pixel))
            b = _resampled(two, one, whole, offset)
            continue
        size = np.abs(found.residual)
        outlier = size > clip * max(1.0, 1.4826 * float(np.median(size[use])))
        if outlier.any():
            # the worst first: its neighbours may be outliers only because of it
            dropped |= outlier & (size >= 0.7 * size.max())
            continue
        freedom = int(np.count_nonzero(use)) - order - 2
        wave = np.exp(x)
        weight = np.maximum(found.information, 0.0)
        return ChunkShift(
            low=float(wave[use][0]),
            high=float(wave[use][-1]),
            wavelength=float(np.sum(weight * wave) / weight.sum()),
            velocity=offset + found.velocity,
            error=found.error,
            chi2_nu=float(np.sum(found.residual**2) / freedom),
            pixels=int(np.count_nonzero(use)),
            clipped=int(np.count_nonzero(dropped)),
            attenuation=found.attenuation,
        )
    return None  # shift and outliers did not settle: not a spectrum of the same object here


def _solve(
    a: _Piece, b: _Piece, x: FloatArray, use: BoolArray, ratio: FloatArray, order: int
) -> _Solution | None:
    """One linear solution of the module docstring on the pixels ``use``."""
    scale = sp.diags_array([ratio], offsets=[0])
    c1, c2 = a.covariance, scale @ b.covariance @ scale
    v1, v2 = float(np.median(c1.diagonal()[use])), float(np.median(c2.diagonal()[use]))
    u1, u2 = v2 / (v1 + v2), v1 / (v1 + v2)
    difference = a.flux - ratio * b.flux
    mean = u1 * a.flux + u2 * ratio * b.flux
    c_difference, c_mean, c_both = c1 + c2, u1**2 * c1 + u2**2 * c2, u1 * c1 - u2 * c2
    operator = _gradient(x)
    g = operator @ mean
    c_gradient = operator @ c_mean @ operator.T

    middle, half = 0.5 * (x[use][0] + x[use][-1]), 0.5 * (x[use][-1] - x[use][0])
    powers = ((x - middle) / half)[:, None] ** np.arange(order + 1)
    # v is fitted in units that make the columns alike, so that M is well conditioned
    unit = 1.0 / float(np.sqrt(np.mean(g[use] ** 2)))
    matrix = np.column_stack([unit * g, mean[:, None] * powers])[use]
    variance = c_difference.diagonal()[use]
    w = 1.0 / variance
    p = powers[use]

    noise = np.empty((order + 2, order + 2))
    var_g = c_gradient.diagonal()[use]
    noise[0, 0] = unit**2 * np.sum(w * var_g)
    noise[0, 1:] = noise[1:, 0] = unit * (w * (operator @ c_mean).diagonal()[use]) @ p
    noise[1:, 1:] = p.T @ ((w * c_mean.diagonal()[use])[:, None] * p)
    normal = matrix.T @ (w[:, None] * matrix)
    corrected = normal - noise
    attenuation = float(corrected[0, 0] / normal[0, 0])
    if attenuation < _MOST_ATTENUATION or np.linalg.eigvalsh(corrected)[0] <= 0.0:
        return None
    score = matrix.T @ (w * difference[use])
    score[0] -= unit * np.sum(w * (operator @ c_both).diagonal()[use])
    score[1:] -= (w * c_both.diagonal()[use]) @ p
    theta = np.linalg.solve(corrected, score)

    velocity = unit * float(theta[0])
    # what is left of the shift lets the noise of the gradient into the difference
    c_total = c_difference + velocity**2 * c_gradient
    weighted = np.zeros((x.size, order + 2))
    weighted[use] = w[:, None] * matrix
    inverse = np.linalg.inv(corrected)
    covariance = inverse @ (weighted.T @ (c_total @ weighted)) @ inverse
    residual = np.zeros(x.size)
    residual[use] = (difference[use] - matrix @ theta) / np.sqrt(c_total.diagonal()[use])
    information = np.zeros(x.size)
    information[use] = w * (g[use] ** 2 - var_g)
    return _Solution(
        velocity,
        unit * float(np.sqrt(covariance[0, 0])),
        # D = F1 − pF2 = aF with F1 ≈ F makes p (1 + a) the better ratio
        ratio * (1.0 + np.clip(powers @ theta[1:], -0.5, 1.0)),
        residual,
        information,
        attenuation,
        use,
    )
