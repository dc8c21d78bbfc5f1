"""Judges one transition after the other for `fathomline.job.draft`, where the rules are given."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fathomline.atomic import AtomicData
from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.job.draft_profiles import (
    PREDICTED,
    Line,
    Profiles,
    consensus,
    is_dark,
    join_runs,
    runs,
)
from fathomline.spectra import Spectrum

__all__ = ["DETECTION", "Judge", "Judged"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Foreign = list[tuple[str, float, Array]]

DETECTION = 5.0
"""Significance that a line needs."""

_CONTINUUM = 60.0  # km/s of continuum on both sides
_LEAST_CONTINUUM = 25.0  # km/s that are worth keeping before foreign absorption
_COVERED = 0.6  # share of the information that good pixels must hold
_LOST = 0.5  # share of the information that blends may take
_EXCESS = 5.0  # σ of foreign absorption
_EXCESS_DEPTH = 0.015  # and its least depth
_EXPECTED = 3.0  # least significance that the other lines of the ion must predict
_TOO_DEEP = 1.5  # times the predicted depth
_FOLLOWED = 0.4  # share of the χ² of the absorption that the template must explain
_GAP_PIXELS = 3  # a longer run of bad pixels is a gap


@dataclass
class Judged:
    """A line on its way to a candidate."""

    line: Line
    significance: float = 0.0
    share: float = 1.0  # of the information in good pixels
    lost: float = 0.0  # of the information in blends
    foreign: Mask | None = None
    dark: bool = False
    dark_share: float = 0.0  # of the absorbed bins
    vouched: bool = False
    follows: bool = True
    expected: float = float("inf")  # significance that the other lines of the ion predict
    too_deep: bool = False
    predicted: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    refusal: str = ""


class Judge:
    """Judges the lines of one redshift by its profiles, which must have an extent."""

    def __init__(
        self, profiles: Profiles, spectra: Sequence[Spectrum], atoms: AtomicData, fwhm: float
    ) -> None:
        if profiles.extent is None:
            raise SpectrumError("there is no absorption to judge lines by")
        self.profiles, self.spectra, self.atoms = profiles, spectra, atoms
        self.fwhm = fwhm
        self.extent: tuple[float, float] = profiles.extent
        self.inside = profiles.inside()
        self.width = float(np.median(np.diff(profiles.edges)))

    # -- prediction -------------------------------------------------------------------------------

    def template(self, line: Line) -> tuple[Array, bool]:
        """Depth that other lines predict, to within a factor, and whether of the same ion."""
        best: Array | None = None
        most = 0.0
        ions = [line.transition.ion, *(i for i in self.profiles.ions if i != line.transition.ion)]
        for ion in ions:
            others = self.profiles.of_ion(ion, line)
            if not others:
                continue
            found = consensus(others)
            weight = np.where(self.profiles.absorbed, found.significance, 0.0)
            total = float(np.sqrt(np.sum(np.clip(weight, 0.0, 30.0) ** 2)))
            column = np.where(self.profiles.absorbed, np.nan_to_num(found.column), 0.0)
            column = np.clip(column, 0.0, None)
            if ion == line.transition.ion and total > 12.0:
                return -np.expm1(-column * line.strength), True
            if total > most:
                most = total
                strongest = max(other.strength for other in others)
                best = -np.expm1(-np.clip(column * strongest, 0.0, None))
        if best is None or best.max() <= 0.0:
            return self.profiles.absorbed.astype(np.float64), False
        return best, False

    def detect(
        self, line: Line, use: Mask, template: Array, *, scaled: bool = True
    ) -> tuple[float, float, bool]:
        """Amplitude of the template with its error (inf: no data), and whether it is followed.

        With `scaled` the error is enlarged where the scatter beside the absorption is above the
        errors of the pixels.
        """
        nothing = 0.0, float("inf"), True
        fit = use & line.covered & self.profiles.inside(2.0 * _CONTINUUM)
        if np.count_nonzero(fit) < 6 or not np.any(template[fit] > 0.0):
            return nothing
        x = self.profiles.velocity / 100.0
        basis = np.vstack((template, np.ones_like(x), x)).T[fit] / line.error[fit, None]
        depth = (1.0 - line.flux[fit]) / line.error[fit]
        solution, _, rank, _ = np.linalg.lstsq(basis, depth, rcond=None)
        if rank < 3:
            return nothing
        error = float(np.sqrt(np.linalg.inv(basis.T @ basis)[0, 0]))
        beside = ~self.inside[fit]
        if scaled and np.count_nonzero(beside) > 5:
            residual = (depth - basis @ solution)[beside]
            error *= max(1.0, 1.4826 * float(np.median(np.abs(residual))))
        rest = np.linalg.lstsq(basis[:, 1:], depth, rcond=None)[0]
        flat = depth - basis[:, 1:] @ rest
        where = (template > 0.0)[fit]
        power = float(np.sum(flat[where] ** 2)) - np.count_nonzero(where)
        gain = float(np.sum(flat**2) - np.sum((depth - basis @ solution) ** 2))
        return float(solution[0]), error, not (power > 25.0 and gain < _FOLLOWED * power)

    # -- blends -----------------------------------------------------------------------------------

    def excess(self, line: Line) -> tuple[Mask, bool]:
        """Bins with more absorption than the other lines of the ion allow, and whether they tell.

        The tolerance allows for components that the spectrograph does not resolve: they hide
        column density in the stronger lines.
        """
        others = self.profiles.of_ion(line.transition.ion, line)
        allowed = np.zeros(line.flux.size)
        sigma = line.error.copy()
        known = line.covered & ~self.inside  # nothing is expected outside of the extent
        told = False
        if others:
            found = consensus(others)
            use = self.inside & line.covered & np.isfinite(found.column) & ~found.limit
            tau = np.clip(np.nan_to_num(found.column), 0.0, None) * line.strength
            strongest = max(other.strength for other in others) / line.strength * tau
            flux = np.exp(-tau)
            hidden = 0.2 * tau * flux * (1.0 + np.clip(strongest, 0.0, 3.0))
            spread = np.nan_to_num(found.error) * line.strength * flux
            allowed = np.where(use, 1.0 - flux + hidden, 0.0)
            sigma = np.where(use, np.hypot(line.error, spread), sigma)
            known |= use
            absorbed = self.profiles.absorbed
            told = int((use & absorbed).sum()) > 0.5 * int(absorbed.sum())
        over = np.where(known, 1.0 - line.flux - allowed - _EXCESS_DEPTH, -1.0)
        with np.errstate(invalid="ignore"):
            z = np.where(known, over / sigma, -1.0)
        mask = np.zeros_like(self.inside)
        for first, last in runs((z > 0.5) & (over > 0.0)):
            if float(z[first:last].sum()) / np.sqrt(last - first) > _EXCESS:
                mask[max(first - 1, 0) : last + 1] = True
        # the wings of the absorber's own lines may reach a bin beyond its extent
        mask &= self.inside | ~self.profiles.inside(1.5 * self.width)
        return mask, told

    def judge(self, line: Line, foreign: Foreign) -> Judged:
        """Everything about a line but what depends on the decisions about the others."""
        result = Judged(line)
        template, same_ion = self.template(line)
        information = np.where(self.inside, template**2, 0.0)
        total = float(information.sum())
        result.share = float(information[line.covered].sum()) / total
        mask, told = self.excess(line)
        result.vouched = told and same_ion
        notes = []
        for name, redshift, depth in foreign:
            hit = (depth > PREDICTED) & line.covered
            if (hit & self.profiles.inside(_CONTINUUM)).any():
                mask = mask | hit
                result.predicted += (f"{name} of z = {redshift:g}",)
        result.foreign = mask
        result.lost = float(information[mask & line.covered].sum()) / max(
            float(information[line.covered].sum()), 1e-300
        )
        amplitude, error, result.follows = self.detect(line, ~mask, template)
        # an amplitude without most of the profile says nothing
        result.significance = amplitude / error if result.lost < 0.9 else 0.0
        if same_ion:
            everything = np.ones_like(mask)
            _, least, _ = self.detect(line, everything, template, scaled=False)
            result.expected = 1.0 / least
            result.too_deep = amplitude - 3.0 * error > _TOO_DEEP
        dark = line.dark & self.inside & ~mask
        result.dark = self.is_saturated(line, mask)
        result.dark_share = int(dark.sum()) / int(self.profiles.absorbed.sum())
        centre = line.transition.observed_wavelength(self.profiles.redshift)
        low, high = (centre * (1.0 + v / C_KMS) for v in self.extent)
        bands = self.atoms.telluric_overlap((low, high))
        notes += [f"lies in telluric {r.molecule} ({r.strength})" for r in bands]
        result.notes = tuple(notes)
        result.refusal = self.refusal(result, {r.strength for r in bands})
        return result

    def is_saturated(self, line: Line, foreign: Mask) -> bool:
        """Whether the mean flux over the width of the line-spread function is dark anywhere.

        Foreign absorption does not count.
        """
        for piece in line.pieces:
            inside = (piece.velocity > self.extent[0]) & (piece.velocity < self.extent[1])
            place = np.searchsorted(self.profiles.edges, piece.velocity[inside]) - 1
            inside[inside] = ~foreign[place]
            for first, last in runs(inside & piece.good):
                count = math.ceil(self.fwhm / float(np.median(piece.width[first:last])) - 0.1)
                if last - first < count:
                    continue
                box = np.full(count, 1.0 / count)
                flux = np.convolve(piece.flux[first:last], box, mode="valid")
                error = np.sqrt(np.convolve(piece.error[first:last] ** 2, box**2, mode="valid"))
                if is_dark(flux, error).any():
                    return True
        return False

    def refusal(self, judged: Judged, bands: set[str]) -> str:
        """Why a line must be left out, or nothing."""
        blend = " and ".join(judged.predicted) or (
            "absorption that the other lines of the ion do not share"
        )
        if judged.share < _COVERED:
            return (
                "in a gap of the spectrum"
                if judged.share < 0.05
                else f"bad pixels or a gap take {100 * (1 - judged.share):.0f} % of its absorption"
            )
        if judged.expected < _EXPECTED:
            return f"too weak: the other lines of the ion predict {judged.expected:.1f}σ"
        if judged.lost > _LOST:
            return f"blended: {blend} takes {100 * judged.lost:.0f} % of it"
        if judged.significance < DETECTION:
            found = judged.significance + 0.0  # no minus zero
            return f"not detected: {found:.2f}σ of the {DETECTION:g}σ that a line needs"
        if "very strong" in bands:
            return "in a very strong telluric band"
        if bands & {"moderate", "strong"} and not judged.vouched:
            return "in a telluric band, and no other line of the ion can vouch for it"
        if judged.too_deep:
            return "deeper than the other lines of the ion allow"
        if not judged.follows:
            return "its absorption does not follow that of the other lines"
        return ""

    # -- windows ----------------------------------------------------------------------------------

    def window(
        self, judged: Judged
    ) -> tuple[tuple[float, float], tuple[tuple[float, float], ...], list[str]]:
        """Window, ranges to exclude, and notes."""
        edges, notes = self.profiles.edges, []
        low, high = self.extent[0] - _CONTINUUM, self.extent[1] + _CONTINUUM
        ranges: list[tuple[float, float]] = []
        assert judged.foreign is not None
        for first, last in join_runs(runs(judged.foreign), 2.0):
            a, b = float(edges[first]), float(edges[last])
            if b <= low or a >= high:
                continue
            if a >= self.extent[1] and (
                a - self.extent[1] >= _LEAST_CONTINUUM or high - b < _LEAST_CONTINUUM
            ):
                high = a
                notes.append(f"foreign absorption from {a:+.0f} km/s ends the window")
            elif b <= self.extent[0] and (
                self.extent[0] - b >= _LEAST_CONTINUUM or a - low < _LEAST_CONTINUUM
            ):
                low, ranges = b, []
                notes = [n for n in notes if "up to" not in n]
                notes.append(f"foreign absorption up to {b:+.0f} km/s starts the window")
            else:
                ranges.append((a, b))
        for gap_low, gap_high in self.gaps(judged.line):
            if gap_low >= self.extent[1] and gap_low < high:
                high = gap_low
                notes.append(f"a gap ends the window at {high:+.0f} km/s")
            elif gap_high <= self.extent[0] and gap_high > low:
                low = gap_high
                notes.append(f"a gap starts the window at {low:+.0f} km/s")
        # nothing is gained by a window whose end is excluded
        for a, b in ranges:
            high = a if b > high - self.width and a > self.extent[0] else high
            low = b if a < low + self.width and b < self.extent[1] else low
        low, high = float(np.ceil(10.0 * low) / 10.0), float(np.floor(10.0 * high) / 10.0)
        exclude = tuple(
            (round(max(a, low), 1), round(min(b, high), 1))
            for a, b in ranges
            if min(b, high) - max(a, low) > 0.2
        )
        if exclude and judged.predicted:
            notes.append(f"excluded: {', '.join(judged.predicted)}")
        elif exclude:
            notes.append("excluded: absorption in excess of the other lines")
        return (low, high), exclude, notes

    def gaps(self, line: Line) -> list[tuple[float, float]]:
        """Velocity ranges without good pixels in any covering spectrum; the ends count."""
        result: list[tuple[float, float]] | None = None
        for piece in line.pieces:
            if not (piece.good & (np.abs(piece.velocity) < 1e4)).any():
                continue
            low, high = piece.velocity - 0.5 * piece.width, piece.velocity + 0.5 * piece.width
            own = [
                (float(low[a]), float(high[b - 1]))
                for a, b in runs(~piece.good)
                if b - a > _GAP_PIXELS
            ]
            own += [(-np.inf, float(low[0])), (float(high[-1]), np.inf)]
            jump = np.flatnonzero(low[1:] - high[:-1] > 2.0 * piece.width[1:])
            own += [(float(high[k]), float(low[k + 1])) for k in jump]
            if result is None:
                result = own
            else:
                both = [(max(a, c), min(b, d)) for a, b in result for c, d in own]
                result = [(a, b) for a, b in both if a < b]
        return result or []

    def spectra_of(self, line: Line) -> tuple[str, ...]:
        """Spectra that have good pixels in most of the extent."""
        names = []
        for piece in line.pieces:
            inside = (piece.velocity > self.extent[0]) & (piece.velocity < self.extent[1])
            width = float(piece.width[inside & piece.good].sum())
            if width > _COVERED * (self.extent[1] - self.extent[0]):
                names.append(self.spectra[piece.spectrum].name)
        return tuple(names)
