"""Departures from the transition tables: single numbers replaced, other isotopic abundances.

Every change is kept as one sentence, for the record of a measurement.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from fathomline.atomic.library import AtomicData
from fathomline.atomic.transitions import LineComponent, Transition
from fathomline.errors import AtomicDataError

__all__ = ["NumberChange", "with_abundances", "with_numbers"]


@dataclass(frozen=True, slots=True)
class NumberChange:
    """Numbers of one transition that replace those of the table; None keeps the table's.

    Units as in `Transition`: cm⁻¹ for the wavenumber and q, s⁻¹ for gamma.
    """

    transition: str
    wavenumber: float | None = None
    f: float | None = None
    gamma: float | None = None
    q: float | None = None


def _changed(transition: Transition, change: NumberChange) -> Transition:
    structure = transition.structure
    if change.wavenumber is not None:
        # the components keep their distances from the composite
        moved = change.wavenumber - transition.wavenumber
        structure = tuple(replace(c, wavenumber=c.wavenumber + moved) for c in structure)
    given = {
        key: value
        for key in ("wavenumber", "f", "gamma", "q")
        if (value := getattr(change, key)) is not None
    }
    sources = {**transition.sources, **dict.fromkeys(given, "given in the job")}
    return replace(transition, structure=structure, sources=sources, **given)


def with_numbers(atoms: AtomicData, changes: Sequence[NumberChange]) -> AtomicData:
    """Replace single numbers of transitions.

    Raises
    ------
    AtomicDataError
        A transition is not in the tables.

    """
    by_name = {atoms[change.transition].name: change for change in changes}
    sentences = []
    for name, change in by_name.items():
        old = atoms[name]
        for key in ("wavenumber", "f", "gamma", "q"):
            value = getattr(change, key)
            if value is not None:
                sentences.append(f"{name}: {key} {getattr(old, key)!r} replaced by {value!r}")

    def applied(pool: tuple[Transition, ...]) -> tuple[Transition, ...]:
        return tuple(_changed(t, by_name[t.name]) if t.name in by_name else t for t in pool)

    return replace(
        atoms,
        transitions=applied(atoms.transitions),
        extra_lines=applied(atoms.extra_lines),
        changes=(*atoms.changes, *sentences),
    )


def _isotopic(transition: Transition, fractions: Mapping[int, float]) -> Transition:
    present = {c.mass_number for c in transition.structure}
    absent = sorted(a for a, part in fractions.items() if part > 0.0 and a not in present)
    if absent:
        raise AtomicDataError(
            f"{transition.name} has no components of mass number {', '.join(map(str, absent))}; "
            f"the table has {', '.join(map(str, sorted(present)))}"
        )
    terrestrial = {
        a: sum(c.fraction for c in transition.structure if c.mass_number == a) for a in present
    }
    structure: tuple[LineComponent, ...] = tuple(
        replace(c, fraction=c.fraction / terrestrial[c.mass_number] * fractions[c.mass_number])
        for c in transition.structure
        if fractions.get(c.mass_number, 0.0) > 0.0
    )
    total = sum(c.fraction for c in structure)
    structure = tuple(replace(c, fraction=c.fraction / total) for c in structure)
    mean = sum(c.fraction * c.wavenumber for c in structure)
    mass = sum(c.fraction * c.mass for c in structure)
    return replace(transition, structure=structure, wavenumber=mean, mass=mass)


def with_abundances(
    atoms: AtomicData, abundances: Mapping[str, str | Mapping[str, float]]
) -> AtomicData:
    """Use other isotopic abundances.

    The fractions of the components of an isotope keep their proportions and are scaled to the
    isotope's abundance; the composite wavenumber and the mean mass follow.

    Parameters
    ----------
    atoms : AtomicData
        With isotopic structure.
    abundances : mapping
        Element → ``"terrestrial"``, the mass number of the only isotope as text, or a mapping of
        mass numbers as text to fractions.

    Raises
    ------
    AtomicDataError
        No transition of the element has structure, or an isotope has no components.

    """
    wanted: dict[str, dict[int, float]] = {}
    sentences = []
    for element, value in abundances.items():
        if value == "terrestrial":
            continue
        given = {value: 1.0} if isinstance(value, str) else dict(value)
        wanted[element] = {int(number): part for number, part in given.items()}
        if not any(t.element == element and t.structure for t in atoms.transitions):
            raise AtomicDataError(
                f"isotopic abundances of {element}: no transition of it has isotopic components "
                '(with structure = "composite" none has)'
            )
        text = ", ".join(f"{number}{element} {part:g}" for number, part in given.items())
        sentences.append(f"isotopic abundances of {element}: {text} in place of terrestrial ones")
    if not wanted:
        return atoms
    return replace(
        atoms,
        transitions=tuple(
            _isotopic(t, wanted[t.element]) if t.element in wanted and t.structure else t
            for t in atoms.transitions
        ),
        changes=(*atoms.changes, *sentences),
    )
