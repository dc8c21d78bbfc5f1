"""Absorption of one redshift in all its transitions on one velocity grid, for `draft`.

The normalised flux of every transition is averaged in common velocity bins, pixels weighted by
their overlap with the bin. The apparent optical depth τ_a = −ln F of a bin is a column density per
unit velocity (Savage & Sembach 1991, ApJ 379, 245),

    N_a(v) = 3.768e14 τ_a(v) / (f λ) cm⁻² (km/s)⁻¹,      λ in Å,

in which unsaturated transitions of one ion agree. Where they do not, the higher one is blended:
foreign absorption only adds. The *consensus* of an ion is the weighted mean without such values.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import AtomicData, Transition
from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.spectra import Spectrum, local_level

__all__ = [
    "APPARENT_COLUMN",
    "CONTINUUM_REACH",
    "PREDICTED",
    "SOLAR_ABUNDANCE",
    "Consensus",
    "Line",
    "Piece",
    "Profiles",
    "consensus",
    "is_dark",
    "join_runs",
    "measure_profiles",
    "other_absorption",
    "refine",
    "runs",
]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

APPARENT_COLUMN = 3.768e14
"""m_e c/(π e²) in cm⁻² (km/s)⁻¹ Å (Savage & Sembach 1991)."""

CONTINUUM_REACH = 120.0
"""Distance from the absorption, km/s, to which the local continuum is adjusted."""

_JOIN = 40.0  # km/s: absorption separated by less belongs together
_FULL = 0.5  # of a bin that must be covered by good pixels
_DARK = 2.0  # σ of the flux below which a bin is saturated
_DARK_LEVEL = 0.05  # and the flux below which it is, whatever the noise
_BLENDED = 4.0  # σ by which a value exceeds those of its ion
_TOLERANCE = 0.10  # of N_a: components that the spectrograph does not resolve
_FLOOR = 0.003  # of the flux: error of a typical continuum (common practice, no source)
SOLAR_ABUNDANCE = {
    "C": 8.43, "N": 7.83, "O": 8.69, "Na": 6.24, "Mg": 7.60, "Al": 6.45, "Si": 7.51, "Ca": 6.34,
    "Ti": 4.95, "Cr": 5.64, "Mn": 5.43, "Fe": 7.50, "Ni": 6.22, "Zn": 4.56,
}  # fmt: skip
"""log10 of the number of atoms per 10¹² of hydrogen (Asplund et al. 2009, ARA&A 47, 481)."""

_NEUTRAL = 2.5  # dex by which a neutral metal is rarer (rough, no source; it only ranks ions)
_LEADING = 1.0  # dex below the strongest line within which ions decide where there is absorption
_WING_BINS = 3
_SHOWN = 3.0  # σ of a line that confirms absorption
PREDICTED = 0.02
"""Optical depth from which a line of another redshift spoils a bin."""

_OTHER_REACH = 300.0  # km/s from another redshift to its absorption
_POSSIBLE = 0.7  # share of a predicted depth that must be there
_APART = 600.0  # km/s between lines that are not on the same pixels
_SEEN = 5.0  # significance of an absorbed bin
_SEEN_TWICE = 3.5  # of each of two adjacent bins


@dataclass(frozen=True)
class Piece:
    """The pixels of one spectrum about one transition: velocity (km/s), normalised flux, error."""

    spectrum: int
    velocity: Array
    width: Array
    flux: Array
    error: Array
    good: Mask


def is_dark(flux: Array, error: Array) -> Mask:
    """Where a normalised flux is below 2σ or 0.05; False for NaN."""
    with np.errstate(invalid="ignore"):
        mask: Mask = flux < np.maximum(_DARK * error, _DARK_LEVEL)
    return mask


@dataclass
class Line:
    """One transition: its pixels, and its binned flux with error (NaN where not covered).

    `telluric` are the bins in a telluric band that is more than weak, `spoiled` those in which a
    line of another redshift absorbs.
    """

    transition: Transition
    pieces: tuple[Piece, ...]
    flux: Array
    error: Array
    telluric: Mask
    spoiled: Mask

    @property
    def strength(self) -> float:
        """Optical depth per unit of N_a: f λ / 3.768e14."""
        return self.transition.f * self.transition.wavelength / APPARENT_COLUMN

    @property
    def covered(self) -> Mask:
        """Bins with data."""
        return np.isfinite(self.flux)

    @property
    def dark(self) -> Mask:
        """Bins without measurable flux."""
        return is_dark(self.flux, self.error)

    def apparent(self) -> tuple[Array, Array]:
        """N_a and its error, cm⁻² per km/s; a dark bin has the value of its noise level."""
        floor = np.maximum(self.flux, np.maximum(self.error, 1e-3))
        sigma = np.hypot(self.error, _FLOOR)
        return -np.log(floor) / self.strength, sigma / floor / self.strength


@dataclass(frozen=True)
class Consensus:
    """N_a of an ion by bin.

    Attributes
    ----------
    column, error : array (n,)
        cm⁻² per km/s; NaN without data.
    significance : array (n,)
        Of the absorption, σ; 0 without data.
    count : array (n,)
        Lines that show absorption by themselves.
    clean : array (n,)
        Whether one of those lies outside of telluric bands.
    limit : array (n,)
        Whether the value is a lower limit, since all lines are dark.

    """

    column: Array
    error: Array
    significance: Array
    count: NDArray[np.intp]
    clean: Mask
    limit: Mask


@dataclass
class Profiles:
    """All transitions of one redshift.

    Attributes
    ----------
    redshift : float
    edges : array (n + 1,)
        Bin edges, km/s.
    lines : list of Line
    absorbed : array (n,)
        Bins in which the absorber absorbs, bool.
    extent : (float, float) or None
        From where to where, km/s; None without absorption.

    """

    redshift: float
    edges: Array
    lines: list[Line]
    absorbed: Mask
    extent: tuple[float, float] | None = None
    ions: dict[str, Consensus] = field(default_factory=dict)

    @property
    def velocity(self) -> Array:
        """Bin centres, km/s."""
        return 0.5 * (self.edges[1:] + self.edges[:-1])

    def of_ion(self, ion: str, without: Line | None = None) -> list[Line]:
        """Lines of an ion, but one."""
        return [line for line in self.lines if line.transition.ion == ion and line is not without]

    def inside(self, margin: float = 0.0) -> Mask:
        """Bins of the extent, widened by a margin in km/s."""
        if self.extent is None:
            return np.zeros(self.velocity.size, dtype=bool)
        low, high = self.extent
        return (self.velocity > low - margin) & (self.velocity < high + margin)


def runs(mask: Mask) -> list[tuple[int, int]]:
    """First and one past the last index of each run of True."""
    change = np.flatnonzero(np.diff(np.concatenate(([False], mask, [False])).astype(np.int8)))
    return [(int(a), int(b)) for a, b in zip(change[::2], change[1::2], strict=True)]


def join_runs(found: Sequence[tuple[int, int]], gap: float) -> list[tuple[int, int]]:
    """Join runs that fewer than `gap` bins separate."""
    joined: list[tuple[int, int]] = []
    for first, last in found:
        if joined and first - joined[-1][1] < gap:
            joined[-1] = (joined[-1][0], last)
        else:
            joined.append((first, last))
    return joined


def _piece(spectrum: Spectrum, index: int, centre: float, reach: float) -> Piece | None:
    low, high = (centre * (1.0 + sign * reach / C_KMS) for sign in (-1.0, 1.0))
    first, last = np.searchsorted(spectrum.wavelength, [low, high])
    if last - first < 3:
        return None
    part = slice(int(first), int(last))
    good = spectrum.good[part]
    if not good.any():
        level: Array | float = 1.0
    elif spectrum.continuum is not None:
        level = spectrum.continuum[part]
    else:
        try:
            level = local_level(spectrum.flux[part], spectrum.error[part], good)
        except SpectrumError:  # absorbed completely, or a zero level below zero
            return None
    wave = spectrum.wavelength[part]
    lower, upper = spectrum.bounds()
    with np.errstate(divide="ignore", invalid="ignore"):
        return Piece(
            index,
            C_KMS * (wave / centre - 1.0),
            C_KMS * (upper[part] - lower[part]) / centre,
            np.where(good, spectrum.flux[part] / level, np.nan),
            np.where(good, spectrum.error[part] / level, np.nan),
            good,
        )


def _binned(pieces: Sequence[Piece], edges: Array) -> tuple[Array, Array]:
    """Mean flux and error by bin, pieces weighted by their inverse variance."""
    n = edges.size - 1
    weight, total = np.zeros(n), np.zeros(n)
    for piece in pieces:
        good = piece.good
        v, half = piece.velocity[good], 0.5 * piece.width[good]
        overlap = np.clip(
            np.minimum(v + half, edges[1:, None]) - np.maximum(v - half, edges[:-1, None]),
            0.0,
            None,
        )
        length = overlap.sum(axis=1)
        full = length > _FULL * np.diff(edges)
        flux = overlap[full] @ piece.flux[good] / length[full]
        # a pixel that two bins share gives each its part of the information
        variance = (overlap[full] * (2.0 * half)) @ piece.error[good] ** 2 / length[full] ** 2
        weight[full] += 1.0 / variance
        total[full] += flux / variance
    with np.errstate(divide="ignore", invalid="ignore"):
        return (
            np.where(weight > 0.0, total / weight, np.nan),
            np.where(weight > 0.0, weight**-0.5, np.nan),
        )


def consensus(lines: Sequence[Line]) -> Consensus:
    """Weighted mean N_a of the lines of one ion, by bin, without those that are too high."""
    values = [line.apparent() for line in lines]
    value = np.array([np.nan_to_num(v) for v, _ in values])
    sigma = np.array([np.where(np.isfinite(error), error, 1.0) for _, error in values])
    covered = np.array([line.covered & ~line.spoiled for line in lines])
    lit = covered & ~np.array([line.dark for line in lines])
    limit = covered.any(axis=0) & ~lit.any(axis=0)
    use = np.where(limit, covered, lit)
    depth = value * np.array([[line.strength] for line in lines])
    # an unresolved strong line has too low an apparent column
    spread = _TOLERANCE * np.abs(value) * (1.0 + np.clip(depth, 0.0, 3.0))
    variance = sigma**2 + spread**2
    for _ in range(len(lines) - 1):
        weights = use / variance
        others = weights.sum(axis=0) - weights
        alone = others <= 0.0
        rest = np.where(alone, 1.0, others)
        mean = ((weights * value).sum(axis=0) - weights * value) / rest
        away = np.where(use & ~alone, (value - mean) / np.sqrt(variance + 1.0 / rest), -np.inf)
        worst = np.argmax(away, axis=0)
        drop = np.take_along_axis(away, worst[None], axis=0)[0] > _BLENDED
        if not drop.any():
            break
        use[worst[drop], np.flatnonzero(drop)] = False
    weights = use / sigma**2
    total = weights.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        column = np.where(total > 0.0, (weights * value).sum(axis=0) / total, np.nan)
        error = np.where(total > 0.0, total**-0.5, np.nan)
    # the significance comes from the depth: that of an optical depth is lost in a dark bin
    noise = np.array([np.hypot(np.where(line.covered, line.error, 1.0), _FLOOR) for line in lines])
    depth_ratio = np.array([1.0 - np.where(line.covered, line.flux, 1.0) for line in lines]) / noise
    share = use * np.array([[line.strength] for line in lines]) / noise
    norm = np.sqrt((share**2).sum(axis=0))
    significance = (share * depth_ratio).sum(axis=0) / np.where(norm > 0.0, norm, 1.0)
    # lines that show the absorption by themselves
    shown = use & (depth_ratio > _SHOWN)
    clean = shown & ~np.array([line.telluric for line in lines])
    return Consensus(column, error, significance, shown.sum(axis=0), clean.any(axis=0), limit)


def _seen(significance: Array) -> Mask:
    strong = significance > _SEEN
    fair = significance > _SEEN_TWICE
    pair = fair & (np.concatenate(([False], fair[:-1])) | np.concatenate((fair[1:], [False])))
    mask: Mask = strong | pair
    return mask


def _leading(profiles: Profiles) -> list[str]:
    """Ions whose strongest covered line is among the strongest in gas of solar composition."""
    strength: dict[str, float] = {}
    for line in profiles.lines:
        transition = line.transition
        solar = SOLAR_ABUNDANCE.get(transition.element, 4.0)
        neutral = _NEUTRAL if transition.ion.split()[-1] == "I" else 0.0
        value = solar - neutral + float(np.log10(transition.f * transition.wavelength))
        strength[transition.ion] = max(strength.get(transition.ion, -99.0), value)
    most = max(strength.values())
    return [ion for ion, value in strength.items() if value > most - _LEADING]


def _absorbed(
    profiles: Profiles, ions: Sequence[str], near: Mask, *, telluric: bool
) -> tuple[Mask, Mask]:
    """Bins in which the absorber absorbs for certain, and all in which it may.

    Two lines of an ion must absorb, or without such ions two ions, or else the only one.
    """
    several, votes = np.zeros_like(near), np.zeros(near.size, dtype=np.intp)
    for ion in ions:
        found = profiles.ions[ion]
        seen = _seen(found.significance) & near
        if not telluric:
            seen &= found.clean
        certain = seen & (found.count > 1)
        # in its wings the weaker line is lost in the noise first
        for _ in range(_WING_BINS):
            certain |= seen & np.convolve(certain, [1, 1, 1], mode="same").astype(bool)
        several |= certain
        votes += seen
    for mask in (several, votes > 1):
        if mask.any():
            return mask, votes > 0
    return votes > 0, votes > 0


def _find_absorption(profiles: Profiles, max_velocity: float) -> None:
    """Set consensus, absorbed bins and extent.

    Absorption in telluric bands alone only extends what is found elsewhere, unless there is
    nothing else.
    """
    ions = dict.fromkeys(line.transition.ion for line in profiles.lines)
    profiles.ions = {ion: consensus(profiles.of_ion(ion)) for ion in ions}
    near = np.abs(profiles.velocity) < max_velocity
    for chosen in (_leading(profiles), list(ions)):
        everywhere, _ = _absorbed(profiles, chosen, near, telluric=True)
        mask, possible = _absorbed(profiles, chosen, near, telluric=False)
        if not mask.any():
            mask = possible = everywhere
        if mask.any():
            break
    for first, last in runs(everywhere):
        if mask[first:last].any():
            mask[first:last] = True
    width = float(np.median(np.diff(profiles.edges)))
    # a single line may bridge what several lines confirm, but not lead beyond
    joined = []
    for first, last in join_runs(runs(mask | possible), _JOIN / width):
        certain = np.flatnonzero(mask[first:last])
        if certain.size:
            joined.append((first + int(certain[0]), first + int(certain[-1]) + 1))
    profiles.absorbed, profiles.extent = np.zeros_like(mask), None
    if not joined:
        return
    centre = profiles.velocity

    def distance(run: tuple[int, int]) -> float:
        low, high = centre[run[0]], centre[run[1] - 1]
        return 0.0 if low <= 0.0 <= high else float(min(abs(low), abs(high)))

    first, last = min(joined, key=distance)
    profiles.absorbed[first:last] = (mask | possible)[first:last]
    profiles.extent = float(profiles.edges[first]), float(profiles.edges[last])


def _adjust_continuum(profiles: Profiles) -> None:
    """Divide each line by a straight line through the unabsorbed bins beside the absorption."""
    beside = profiles.inside(CONTINUUM_REACH) & ~profiles.inside(10.0)
    x = profiles.velocity / 100.0
    for line in profiles.lines:
        usable = beside & line.covered & ~line.spoiled
        keep = usable
        terms = np.vstack((np.ones_like(x), x)).T
        level = np.ones_like(x)
        for _ in range(20):
            if np.count_nonzero(keep) < 6:
                break
            both = np.any(keep & (x < 0.0)) and np.any(keep & (x > 0.0))
            basis = terms if both else terms[:, :1]
            w = 1.0 / line.error[keep]
            fit = np.linalg.lstsq(basis[keep] * w[:, None], line.flux[keep] * w, rcond=None)[0]
            level = basis @ fit
            z = (line.flux - level) / line.error
            clipped = usable & (z > -2.0) & (z < 3.0)
            if np.array_equal(clipped, keep):
                break
            keep = clipped
        # a larger correction is no continuum error but absorption all over the place
        if np.all(np.abs(level[profiles.inside(60.0)] - 1.0) < 0.1):
            line.flux, line.error = line.flux / level, line.error / level


def measure_profiles(
    spectra: Sequence[Spectrum],
    atoms: AtomicData,
    transitions: Sequence[Transition],
    redshift: float,
    *,
    max_velocity: float,
    fwhm: float,
) -> Profiles:
    """Bin all transitions of a redshift and find where the absorber absorbs.

    Parameters
    ----------
    spectra : sequence of Spectrum
    atoms : AtomicData
        For its telluric bands.
    transitions : sequence of Transition
    redshift : float
    max_velocity : float
        Largest distance of absorption from the redshift, km/s.
    fwhm : float
        Of the line-spread function, km/s; bins have this width, or that of two pixels.

    """
    pixel = max(float(np.median(np.diff(np.log(s.wavelength)))) * C_KMS for s in spectra)
    width = max(fwhm, 2.0 * pixel)
    reach = max_velocity + CONTINUUM_REACH + 20.0
    half = int(np.ceil(reach / width))
    edges: Array = (np.arange(2 * half + 2, dtype=np.float64) - half - 0.5) * width
    lines = []
    for transition in transitions:
        centre = transition.observed_wavelength(redshift)
        found = (_piece(spectrum, i, centre, reach + width) for i, spectrum in enumerate(spectra))
        pieces = tuple(piece for piece in found if piece is not None)
        if pieces:
            wave = centre * (1.0 + 0.5 * (edges[1:] + edges[:-1]) / C_KMS)
            telluric = np.zeros(wave.size, dtype=bool)
            for band in atoms.telluric:
                if "weak" not in band.strength:
                    telluric |= (wave > band.wave_min) & (wave < band.wave_max)
            lines.append(
                Line(
                    transition,
                    pieces,
                    *_binned(pieces, edges),
                    telluric,
                    np.zeros_like(telluric),
                )
            )
    profiles = Profiles(redshift, edges, lines, np.zeros(edges.size - 1, dtype=bool))
    if lines:
        _find_absorption(profiles, max_velocity)
    refine(profiles, max_velocity)
    return profiles


def refine(profiles: Profiles, max_velocity: float) -> None:
    """Find the absorption again with adjusted continua and without what is spoiled."""
    if profiles.extent is not None:
        _find_absorption(profiles, max_velocity)
    if profiles.extent is not None:
        _adjust_continuum(profiles)
        _find_absorption(profiles, max_velocity)


def other_absorption(
    spectra: Sequence[Spectrum],
    atoms: AtomicData,
    own: Profiles,
    redshifts: Sequence[float],
    *,
    fwhm: float,
) -> dict[int, list[tuple[str, float, Array]]]:
    """Optical depth that lines of other redshifts put on the lines of this one.

    Each is predicted from the other lines of its ion, which must show absorption themselves where
    that absorber is found; lines of ions with a single line in the spectra have no prediction.

    Returns
    -------
    dict
        Index of a line → list of (name of the other line, its redshift, optical depth by bin).

    """
    result: dict[int, list[tuple[str, float, Array]]] = {}
    for redshift in redshifts:
        pool = [t for t in atoms.find(extra=True) if t.ground and t.f > 1e-3]
        pool = [
            t
            for t in pool
            if any(
                s.wavelength[0] < t.observed_wavelength(redshift) < s.wavelength[-1]
                for s in spectra
            )
        ]
        # half of the way to this absorber, so as not to take its absorption for the other's
        distance = C_KMS * abs((1.0 + redshift) / (1.0 + own.redshift) - 1.0)
        reach = min(_OTHER_REACH, 0.5 * distance)
        other = measure_profiles(spectra, atoms, pool, redshift, max_velocity=reach, fwhm=fwhm)
        if other.extent is None:
            continue
        for line in other.lines:
            place = line.transition.observed_wavelength(redshift)
            siblings = [
                sibling
                for sibling in other.of_ion(line.transition.ion, line)
                if abs(sibling.transition.wavelength / line.transition.wavelength - 1.0) * C_KMS
                > _APART
            ]
            hits = []
            for i, mine in enumerate(own.lines):
                shift = C_KMS * (place / mine.transition.observed_wavelength(own.redshift) - 1.0)
                if abs(shift) < 1000.0:
                    hits.append((i, shift))
            if not siblings or not hits:
                continue
            ion = consensus(siblings)
            seen = other.absorbed & (ion.significance > 3.0)
            if not _seen(np.where(seen, ion.significance, 0.0)).any():
                continue
            depth = np.where(seen, np.clip(np.nan_to_num(ion.column), 0.0, None), 0.0)
            depth *= line.strength
            for i, shift in hits:
                there = np.interp(own.velocity, other.velocity + shift, depth, left=0.0, right=0.0)
                hit = (there > PREDICTED) & own.lines[i].covered
                expected = float(-np.expm1(-there[hit]).sum())
                found = float((1.0 - own.lines[i].flux[hit]).sum())
                # with less absorption than predicted the prediction is wrong
                if hit.any() and found > _POSSIBLE * expected:
                    result.setdefault(i, []).append((line.transition.name, redshift, there))
    return result
