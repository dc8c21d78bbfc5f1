"""Which transitions of an absorber are covered, detected and clean, and in which windows.

`draft` decides for every transition with a known q that a spectrum covers:

detected
    The depth 1 − F is fitted with A T(v) and a straight continuum, T the profile that the other
    lines predict: those of the same ion where they are seen, else the best-measured ion. A over
    its error is the significance, the optimal sum over the velocities where the strong lines
    absorb. A line needs 5σ: defects of a real continuum imitate lines of 4σ (common practice, no
    source). A line for which the others of its ion predict less than 3σ, or much less than there
    is, is left out whatever is there.
not saturated
    A line is saturated where the mean flux over the width of the line-spread function is below
    2σ or 0.05. It is left out where another line of its ion is used, or more than 5 %
    of its absorption is dark. If nothing else is left, saturated lines are used, with a note.
not blended
    (a) The lines of other given redshifts, with the strength that their other lines predict; (b)
    telluric ranges; (c) absorption in excess of what the other lines of the ion predict; (d) bad
    pixels. A range of blended bins is excluded from the window; a line that loses more than half
    of its information is left out. So is a line in a telluric band that no other line of its ion
    can vouch for, unless the band is weak.

The window reaches 60 km/s beyond the absorption, and ends earlier at gaps, foreign absorption and
the window of another line.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from fathomline.atomic import AtomicData, Transition
from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.job.draft_judging import DETECTION, Judge, Judged
from fathomline.job.draft_profiles import (
    PREDICTED,
    Line,
    Profiles,
    measure_profiles,
    other_absorption,
    refine,
)
from fathomline.spectra import Spectrum

__all__ = ["DETECTION", "Candidate", "Draft", "draft"]

_SAME = 50.0  # km/s between absorbers that can be told apart
_DARK_SHARE = 0.05  # of the absorbed bins that may be dark


@dataclass(frozen=True, slots=True)
class Candidate:
    """One transition and what was decided about it.

    Attributes
    ----------
    transition : Transition
    observed : float
        Vacuum wavelength at the redshift, Å.
    used : bool
    reason : str
        Why it is used or left out: one sentence without a full stop.
    significance : float
        Of its absorption, σ.
    signal_to_noise : float
        Median per pixel about the line; 0 without good pixels.
    spectra : tuple of str
        Names of the spectra that cover the absorption.
    window : (float, float) or None
        km/s about the redshift; None if left out.
    exclude : tuple of (float, float)
        Ranges within the window that foreign absorption spoils, km/s.
    notes : tuple of str
        What to look at.

    """

    transition: Transition
    observed: float
    used: bool
    reason: str
    significance: float
    signal_to_noise: float
    spectra: tuple[str, ...]
    window: tuple[float, float] | None = None
    exclude: tuple[tuple[float, float], ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Draft:
    """What `draft` found.

    Attributes
    ----------
    redshift : float
    extent : (float, float) or None
        From where to where the absorber absorbs, km/s; None if nothing was found.
    candidates : tuple of Candidate
        Covered transitions, in order of wavelength.
    not_covered : tuple of str
        Names of the other transitions.
    fwhm : float
        As given, km/s.

    """

    redshift: float
    extent: tuple[float, float] | None
    candidates: tuple[Candidate, ...]
    not_covered: tuple[str, ...]
    fwhm: float

    @property
    def used(self) -> tuple[Candidate, ...]:
        """Candidates that become regions."""
        return tuple(c for c in self.candidates if c.used)

    def __getitem__(self, name: str) -> Candidate:
        """Candidate by the name of its transition; KeyError if it is not covered."""
        for candidate in self.candidates:
            if candidate.transition.name == name:
                return candidate
        raise KeyError(name)


def _signal_to_noise(line: Line) -> float:
    ratios = [
        float(np.median(1.0 / p.error[p.good & (np.abs(p.velocity) < 200.0)]))
        for p in line.pieces
        if (p.good & (np.abs(p.velocity) < 200.0)).any()
    ]
    return float(np.sqrt(np.sum(np.square(ratios)))) if ratios else 0.0


def _settle_saturation(lines: list[Judged]) -> None:
    """Refuse saturated lines where something else of the ion, or anything else at all, is left."""
    clean = [j for j in lines if not j.refusal and not j.dark]
    ions = {j.line.transition.ion for j in clean}
    for judged in lines:
        if judged.refusal or not judged.dark:
            continue
        ion = judged.line.transition.ion
        if ion in ions:
            judged.refusal = f"saturated, and another line of {ion} is not"
        elif judged.dark_share > _DARK_SHARE and clean:
            judged.refusal = f"saturated in {100 * judged.dark_share:.0f} % of its absorption"
        else:
            judged.notes = (*judged.notes, "saturated in part: little weight, and a risk")


def _settle_overlaps(
    candidates: list[Candidate], profiles: Profiles, spectra: Sequence[Spectrum]
) -> None:
    """Cut windows where they meet; of lines whose absorption overlaps the weaker one goes."""
    extent = profiles.extent or (0.0, 0.0)
    pixel = max(float(np.median(np.diff(np.log(s.wavelength)))) * C_KMS for s in spectra)
    order = [i for i, c in enumerate(candidates) if c.used]
    order.sort(key=lambda i: candidates[i].observed)
    for place, i in enumerate(order):
        for j in order[place + 1 :]:
            a, b = candidates[i], candidates[j]
            if a.window is None or b.window is None or not set(a.spectra) & set(b.spectra):
                continue
            apart = C_KMS * (b.observed / a.observed - 1.0)
            if a.window[1] + pixel < apart + b.window[0]:
                continue
            if extent[1] + 4.0 * pixel > apart + extent[0]:
                weak, strong = (i, j) if a.significance < b.significance else (j, i)
                candidates[weak] = replace(
                    candidates[weak],
                    used=False,
                    window=None,
                    exclude=(),
                    reason=f"its pixels lie in the window of {candidates[strong].transition.name}",
                )
                note = f"{candidates[weak].transition.name} lies in this window"
                candidates[strong] = replace(
                    candidates[strong], notes=(*candidates[strong].notes, note)
                )
                continue
            # half the continuum between the two goes to each
            middle = 0.5 * (extent[1] + apart + extent[0])
            high = float(np.floor(10.0 * min(a.window[1], middle - pixel)) / 10.0)
            low = float(np.ceil(10.0 * max(b.window[0], middle + pixel - apart)) / 10.0)
            candidates[i] = _cut(a, (a.window[0], high))
            candidates[j] = _cut(b, (low, b.window[1]))


def _cut(candidate: Candidate, window: tuple[float, float]) -> Candidate:
    low, high = window
    exclude = tuple(
        (max(a, low), min(b, high)) for a, b in candidate.exclude if min(b, high) > max(a, low)
    )
    return replace(candidate, window=window, exclude=exclude)


def draft(
    spectra: Sequence[Spectrum],
    atoms: AtomicData,
    redshift: float,
    *,
    fwhm: float,
    other_redshifts: Sequence[float] = (),
    max_velocity: float = 300.0,
) -> Draft:
    """Find covered and detected transitions of an absorber, and their windows.

    The rules are in the module docstring.

    Parameters
    ----------
    spectra : sequence of Spectrum
        With different names, which become the ids of the job.
    atoms : AtomicData
    redshift : float
        Zero of the velocity scale.
    fwhm : float
        Of the line-spread function, km/s.
    other_redshifts : sequence of float
        Redshifts of other absorbers, whose lines may fall on those of this one.
    max_velocity : float
        The absorption nearest to 0 within this distance, km/s, is the absorber's.

    Returns
    -------
    Draft

    Raises
    ------
    SpectrumError
        No spectrum is given, or two have one name, or a number is out of range, or another redshift
        is that of the absorber.

    """
    names = [spectrum.name for spectrum in spectra]
    if not names or len(set(names)) < len(names) or not all(names):
        raise SpectrumError(f"draft: needs spectra with different names, found {names}")
    for name, value, least in (("fwhm", fwhm, 0.1), ("max_velocity", max_velocity, 10.0)):
        if not least <= value <= 5000.0:
            raise SpectrumError(
                f"draft: {name} must lie between {least:g} and 5000 km/s, found {value!r}"
            )
    if not redshift > -1.0:
        raise SpectrumError(f"draft: the redshift must be above -1, found {redshift!r}")
    for other in other_redshifts:
        if C_KMS * abs((1.0 + other) / (1.0 + redshift) - 1.0) < _SAME:
            raise SpectrumError(
                f"draft: the other redshift {other:g} is that of the absorber itself, to within "
                f"{_SAME:g} km/s"
            )
    pool = [t for t in atoms.find() if t.ground]
    covered = [
        t
        for t in pool
        if any(
            s.wavelength[0] <= t.observed_wavelength(redshift) <= s.wavelength[-1] for s in spectra
        )
    ]
    missing = tuple(t.name for t in pool if t not in covered)
    profiles = measure_profiles(
        spectra, atoms, covered, redshift, max_velocity=max_velocity, fwhm=fwhm
    )
    foreign = other_absorption(spectra, atoms, profiles, other_redshifts, fwhm=fwhm)
    for i, found in foreign.items():
        for _, _, depth in found:
            profiles.lines[i].spoiled |= depth > PREDICTED
    refine(profiles, max_velocity)
    if profiles.extent is None:
        none = tuple(
            Candidate(
                line.transition,
                line.transition.observed_wavelength(redshift),
                False,
                "not detected",
                0.0,
                _signal_to_noise(line),
                (),
            )
            for line in profiles.lines
        )
        return Draft(redshift, None, none, missing, fwhm)
    judge = Judge(profiles, spectra, atoms, fwhm)
    judged = [judge.judge(line, foreign.get(i, [])) for i, line in enumerate(profiles.lines)]
    _settle_saturation(judged)
    candidates = [_candidate(judge, item) for item in judged]
    _settle_overlaps(candidates, profiles, spectra)
    return Draft(redshift, profiles.extent, tuple(candidates), missing, fwhm)


def _candidate(judge: Judge, judged: Judged) -> Candidate:
    line = judged.line
    observed = line.transition.observed_wavelength(judge.profiles.redshift)
    significance, snr = judged.significance, _signal_to_noise(line)
    names = judge.spectra_of(line)
    refusal = judged.refusal
    if not refusal and not names:
        refusal = "no single spectrum covers its absorption"
    if refusal:
        return Candidate(
            line.transition, observed, False, refusal, significance, snr, names, notes=judged.notes
        )
    window, exclude, notes = judge.window(judged)
    return Candidate(
        line.transition,
        observed,
        True,
        f"detected, {significance:.0f}σ",
        significance,
        snr,
        names,
        window,
        exclude,
        (*judged.notes, *notes),
    )
