"""What a spectrum looks like: range, sampling, holes, signal-to-noise, correlation of neighbours.

Correlation of neighbouring pixels
----------------------------------
Resampled spectra have correlated pixels, and a χ² that ignores it is too small. The estimate needs
pixels without lines. The spectrum is cut into blocks of B = 40 consecutive good pixels. In each a
parabola is fitted with the weights 1/error², and r = (flux − parabola)/error. The sums
S_k = Σ r_i r_{i+k}, k = 0, 1, 2, are smaller than those of the noise itself, because the parabola
follows the noise. With the projection M = 1 − H of the fit (H the hat matrix, taken at equal errors
within a block), and noise with the autocovariances γ_0, γ_1, γ_2 and none beyond,

    <S_k> = Σ_m A_km γ_m,   A_km = tr(M L_k M T_m),

with L_k the matrix that has ones on its k-th upper diagonal and T_m the one with ones on both m-th
diagonals (T_0 = 1). Solving this with the sums over all quiet blocks gives γ, and the correlations
are γ_1/γ_0 and γ_2/γ_0. A block is quiet when its S_0 is below 1.5 times the 30th percentile of all
blocks: that keeps absorption and defects out, and is relative to the spectrum because its errors
may be wrong by a factor. The limit also drops the noisiest blocks of pure noise, which lowers a
true correlation of 0.15 by 0.01. With fewer than eight quiet blocks there is no estimate.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fathomline.constants import C_KMS
from fathomline.spectra.spectrum import JUMP_PIXELS, Spectrum, mask_pixels

__all__ = ["Gap", "NoiseLevel", "SpectrumSummary", "noise_correlation", "summarise"]

_CHUNKS = 10
_CHUNK_PIXELS = 20  # a chunk with fewer pixels would give no useful median
_BLOCK = 40
_ORDER = 2
_QUIET = 1.5
_FEWEST_BLOCKS = 8
_LOG_LINEAR = 2e-3  # spread of the pixel size; text files round wavelengths to about 1e-3 of it


@dataclass(frozen=True, slots=True)
class Gap:
    """A range without usable pixels.

    Attributes
    ----------
    start, end
        Outer edges of the unusable pixels, or of the hole, Å.
    pixels
        Number of masked pixels; 0 for a hole in the grid.

    """

    start: float
    end: float
    pixels: int


@dataclass(frozen=True, slots=True)
class NoiseLevel:
    """Median signal-to-noise of a chunk: ``start`` and ``end`` in Å, per pixel; None: no pixel."""

    start: float
    end: float
    signal_to_noise: float | None


@dataclass(frozen=True, slots=True)
class SpectrumSummary:
    """Numbers that describe a spectrum; made by `summarise`.

    Attributes
    ----------
    name, file
        Identifier and file.
    start, end
        Vacuum barycentric wavelength of the first and last pixel centre, Å.
    pixels
        Number of pixels.
    pixel_min, pixel_median, pixel_max
        c (λ_{i+1}/λ_i − 1), km/s, holes left out.
    log_linear
        Whether the pixel size in velocity is constant within 0.2 %.
    gaps
        Runs of more than three masked pixels, and holes longer than three pixels.
    masked_fraction
        Fraction of pixels not used.
    masked_by_reason
        Reason to fraction of pixels (a pixel can have several reasons).
    noise
        Median flux/error in up to ten chunks of equal length in ln λ.
    correlation
        Correlation of the noise at lag 1 and 2, or None when there are too few quiet pixels.
    has_continuum
        Whether the file has a continuum.
    lsf
        Description of the line-spread function, or None.
    reading
        `Reading.to_dict` of the spectrum: frame, medium, units, guesses, warnings.

    """

    name: str
    file: str | None
    start: float
    end: float
    pixels: int
    pixel_min: float
    pixel_median: float
    pixel_max: float
    log_linear: bool
    gaps: tuple[Gap, ...]
    masked_fraction: float
    masked_by_reason: dict[str, float]
    noise: tuple[NoiseLevel, ...]
    correlation: tuple[float, float] | None
    has_continuum: bool
    lsf: dict[str, Any] | None
    reading: dict[str, Any] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """Return plain dicts, lists, strings and numbers that `json` can write."""
        result: dict[str, Any] = {key: getattr(self, key) for key in self.__slots__}
        result["gaps"] = [
            {"start": gap.start, "end": gap.end, "pixels": gap.pixels} for gap in self.gaps
        ]
        result["noise"] = [
            {"start": level.start, "end": level.end, "signal_to_noise": level.signal_to_noise}
            for level in self.noise
        ]
        result["correlation"] = None if self.correlation is None else list(self.correlation)
        result["masked_by_reason"] = dict(self.masked_by_reason)
        return result


def _gaps(spectrum: Spectrum) -> tuple[Gap, ...]:
    bad = np.concatenate(([False], ~spectrum.good, [False]))
    change = np.flatnonzero(bad[1:] != bad[:-1])
    lower, upper = spectrum.bounds()
    gaps = [
        Gap(float(lower[first]), float(upper[last - 1]), int(last - first))
        for first, last in zip(change[::2], change[1::2], strict=True)
        if last - first > JUMP_PIXELS
    ]
    gaps += [Gap(float(upper[i]), float(lower[i + 1]), 0) for i in spectrum.jumps]
    return tuple(sorted(gaps, key=lambda gap: gap.start))


def _noise(spectrum: Spectrum) -> tuple[NoiseLevel, ...]:
    wavelength, good = spectrum.wavelength, spectrum.good
    count = int(np.clip(wavelength.size // _CHUNK_PIXELS, 1, _CHUNKS))
    edges = np.geomspace(wavelength[0], wavelength[-1], count + 1)
    # rounding must not push the last pixel out of the last chunk
    place = np.clip(np.searchsorted(edges, wavelength, side="right") - 1, 0, count - 1)
    levels = []
    for i in range(count):
        use = good & (place == i)
        level = None
        if use.any():
            level = float(np.median(spectrum.flux[use] / spectrum.error[use]))
        levels.append(NoiseLevel(float(edges[i]), float(edges[i + 1]), level))
    return tuple(levels)


def _blocks(spectrum: Spectrum) -> NDArray[np.intp]:
    """Return the first pixels of blocks of consecutive good pixels without holes."""
    broken = ~spectrum.good
    broken[spectrum.jumps] = True  # loses one pixel per hole, and needs no second list
    ends = np.flatnonzero(np.concatenate((broken, [True])))
    starts = np.concatenate(([0], ends[:-1] + 1))
    return np.concatenate(
        [
            np.arange(first, last - _BLOCK + 1, _BLOCK, dtype=np.intp)
            for first, last in zip(starts, ends, strict=True)
        ]
    )


def noise_correlation(spectrum: Spectrum) -> tuple[float, float] | None:
    """Return the correlation of (flux − level)/error at lag 1 and lag 2 in quiet pixels.

    The estimate is described in the module docstring; None when there are too few quiet pixels.
    """
    starts = _blocks(spectrum)
    if starts.size < _FEWEST_BLOCKS:
        return None
    index = starts[:, None] + np.arange(_BLOCK)
    error = spectrum.error[index]
    scaled = spectrum.flux[index] / error
    powers = np.linspace(-1.0, 1.0, _BLOCK)[:, None] ** np.arange(_ORDER + 1)
    q, _ = np.linalg.qr(powers / error[:, :, None])  # blocks, pixels, terms
    r = scaled - (q @ (q.transpose(0, 2, 1) @ scaled[:, :, None]))[:, :, 0]
    q, _ = np.linalg.qr(powers)
    projection = np.eye(_BLOCK) - q @ q.T
    sums = np.stack([np.sum(r[:, : _BLOCK - k] * r[:, k:], axis=1) for k in range(3)])
    positive = sums[0] > 0.0
    if not positive.any():
        return None
    quiet = positive & (sums[0] < _QUIET * np.percentile(sums[0][positive], 30.0))
    if np.count_nonzero(quiet) < _FEWEST_BLOCKS:
        return None
    upper = [np.eye(_BLOCK, k=k) for k in range(3)]
    both = [upper[0], upper[1] + upper[1].T, upper[2] + upper[2].T]
    response = np.array(
        [[np.trace(projection @ up @ projection @ two) for two in both] for up in upper]
    )
    gamma = np.linalg.solve(response, sums[:, quiet].sum(axis=1))
    return float(gamma[1] / gamma[0]), float(gamma[2] / gamma[0])


def summarise(spectrum: Spectrum) -> SpectrumSummary:
    """Return the numbers that describe a spectrum; never raises for a valid spectrum."""
    wavelength = spectrum.wavelength
    n = wavelength.size
    sizes = C_KMS * np.delete(np.diff(wavelength) / wavelength[:-1], spectrum.jumps)
    median = float(np.median(sizes))
    record = spectrum.reading
    # counted anew, because the spectrum may be a part of what the reading describes
    plain, counts = mask_pixels(spectrum.flux, spectrum.error, spectrum.continuum)
    by_user = int(np.count_nonzero(plain & ~spectrum.good))
    if by_user:
        counts["masked by the user"] = by_user
    return SpectrumSummary(
        name=spectrum.name,
        file=record.file,
        start=float(wavelength[0]),
        end=float(wavelength[-1]),
        pixels=int(n),
        pixel_min=float(sizes.min()),
        pixel_median=median,
        pixel_max=float(sizes.max()),
        log_linear=bool(np.ptp(sizes) <= _LOG_LINEAR * median),
        gaps=_gaps(spectrum),
        masked_fraction=float(np.count_nonzero(~spectrum.good) / n),
        masked_by_reason={reason: count / n for reason, count in counts.items()},
        noise=_noise(spectrum),
        correlation=noise_correlation(spectrum),
        has_continuum=spectrum.continuum is not None,
        lsf=None if spectrum.lsf is None else spectrum.lsf.to_dict(),
        reading=record.to_dict(),
    )
