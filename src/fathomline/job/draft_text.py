"""The job file of a `Draft`, with a comment for every decision."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

from fathomline.errors import JobError
from fathomline.job.draft import Candidate, Draft
from fathomline.job.writing import toml_string

__all__ = ["DraftSpectrum", "draft_to_toml"]

_WIDTH = 100


@dataclass(frozen=True, slots=True)
class DraftSpectrum:
    """What the job says of a spectrum.

    Attributes
    ----------
    id : str
        The name that the spectrum had in `draft`.
    file : str
        As the job shall name it.
    fwhm, R : float or None
        One of them: the line-spread function in km/s, or the resolving power.
    reading : dict
        Further keys of the table ``[[spectrum]]`` with texts or numbers, such as ``medium``.

    """

    id: str
    file: str
    fwhm: float | None = None
    R: float | None = None
    reading: dict[str, str | float] = field(default_factory=dict)


def _comment(text: str, indent: str = "# ") -> list[str]:
    return textwrap.wrap(
        text,
        _WIDTH,
        initial_indent=indent,
        subsequent_indent="#   ",
        break_long_words=False,
        break_on_hyphens=False,
    )


def _spectrum(table: DraftSpectrum) -> list[str]:
    if (table.fwhm is None) == (table.R is None):
        raise JobError(f"spectrum {table.id!r}: give one of fwhm (km/s) and R, its resolution")
    resolution = f"fwhm = {table.fwhm!r}" if table.R is None else f"R = {table.R!r}"
    lines = ["[[spectrum]]", f"id = {toml_string(table.id)}", f"file = {toml_string(table.file)}"]
    for key, value in table.reading.items():
        lines.append(f"{key} = {toml_string(value) if isinstance(value, str) else repr(value)}")
    unit = "    # km/s" if table.R is None else ""
    return [*lines, f"resolution = {{ {resolution} }}{unit}"]


def _region(candidate: Candidate, ids: Sequence[str]) -> list[str]:
    assert candidate.window is not None
    low, high = candidate.window
    head = (
        f"{candidate.transition.name} at {candidate.observed:.2f} Å: {candidate.reason}, "
        f"S/N {candidate.signal_to_noise:.0f} per pixel"
    )
    lines = _comment(head)
    for note in candidate.notes:
        lines += _comment(note)
    lines += [
        "[[region]]",
        f"transition = {toml_string(candidate.transition.name)}",
        f"window = [{low!r}, {high!r}]",
    ]
    if set(candidate.spectra) != set(ids):
        lines.append(f"spectra = [{', '.join(map(toml_string, candidate.spectra))}]")
    if candidate.exclude:
        ranges = ", ".join(f"[{a!r}, {b!r}]" for a, b in candidate.exclude)
        lines.append(f"exclude = [{ranges}]")
    return lines


def _left_out(draft: Draft) -> Iterator[str]:
    out = [c for c in draft.candidates if not c.used]
    if out:
        yield "# Left out:"
        for c in out:
            text = f"{c.transition.name} at {c.observed:.2f} Å: {c.reason}"
            yield from _comment("; ".join((text, *c.notes)), "#   ")
    if draft.not_covered:
        yield from _comment(f"Not covered: {', '.join(draft.not_covered)}")


def draft_to_toml(draft: Draft, spectra: Sequence[DraftSpectrum], *, name: str) -> str:
    """The job file of a draft: regions with comments, no components, and a structure search.

    Parameters
    ----------
    draft : Draft
    spectra : sequence of DraftSpectrum
        One for each spectrum of the draft that a region uses; others are left out of the job.
    name : str
        Of the absorber.

    Raises
    ------
    JobError
        No transition is used, a spectrum is missing, or it lacks its resolution.

    """
    if not draft.used:
        raise JobError(
            f"no transition at z = {draft.redshift:g} can be used: nothing to write a job of"
        )
    needed = {name for candidate in draft.used for name in candidate.spectra}
    tables = [table for table in spectra if table.id in needed]
    ids = [table.id for table in tables]
    missing = sorted(needed - set(ids))
    if missing:
        raise JobError(f"no file is given for the spectrum {missing[0]!r} of the draft")
    assert draft.extent is not None
    low, high = draft.extent
    blocks = [
        [
            "# Drafted by fathomline: check every window against the spectrum before you measure.",
            f"# Absorption was found from {low:+.0f} to {high:+.0f} km/s. Velocities are in km/s "
            "about the redshift.",
            "schema = 1",
        ],
        [
            "[absorber]",
            f"name = {toml_string(name)}",
            f"redshift = {draft.redshift!r}",
        ],
        *(_spectrum(table) for table in tables),
        *(_region(candidate, ids) for candidate in draft.used),
        list(_left_out(draft)),
        ["[structure]    # components are found by the measurement", "search = true"],
    ]
    return "\n\n".join("\n".join(block) for block in blocks if block) + "\n"
