"""The one door to atomic data: look transitions up by name, wavelength or sensitivity."""

from __future__ import annotations

import difflib
import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Literal

from fathomline.atomic.tables import Row, built_in_folder, read_rows
from fathomline.atomic.transitions import Isotope, LineComponent, TelluricRange, Transition
from fathomline.errors import AtomicDataError

__all__ = ["AtomicData", "Structure", "load_atomic_data"]

Structure = Literal["isotopic", "composite"]

_TRANSITION_COLUMNS = ("ion", "transition", "element", "mass", "wavenumber", "f", "gamma", "q")
_STRUCTURE_COLUMNS = ("ion", "transition", "mass_number", "mass", "wavenumber", "fraction")
_FRACTION_TOLERANCE = 2e-3  # fractions are printed with four digits, up to seven of them


@dataclass(frozen=True)
class AtomicData:
    """Transitions with known sensitivity, the wider line list, isotopes and telluric ranges.

    Attributes
    ----------
    transitions : tuple of Transition
        Transitions whose q is known: those that can measure Δα/α.
    extra_lines : tuple of Transition
        Lines that accompany or contaminate such absorbers; most have no q.
    isotopes : tuple of Isotope
    telluric : tuple of TelluricRange
    digests : dict
        SHA-256 of each table, by file name, for the record of a measurement.
    changes : tuple of str
        Departures from the tables, one sentence each.

    """

    transitions: tuple[Transition, ...]
    extra_lines: tuple[Transition, ...]
    isotopes: tuple[Isotope, ...]
    telluric: tuple[TelluricRange, ...]
    digests: dict[str, str]
    changes: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        by_name: dict[str, Transition] = {}
        for transition in (*self.transitions, *self.extra_lines):
            if transition.name in by_name:
                raise AtomicDataError(f"transition {transition.name!r} is listed twice")
            by_name[transition.name] = transition
        object.__setattr__(self, "_by_name", by_name)

    def __repr__(self) -> str:
        return (
            f"AtomicData({len(self.transitions)} transitions with q, "
            f"{len(self.extra_lines)} extra lines)"
        )

    def __getitem__(self, name: str) -> Transition:
        """Transition by its name, for instance ``"Fe II 2382"``.

        Raises
        ------
        AtomicDataError
            No such transition; the message has the nearest names.

        """
        by_name: dict[str, Transition] = self._by_name  # type: ignore[attr-defined]
        key = " ".join(name.split())
        if key not in by_name:
            near = difflib.get_close_matches(key, by_name, n=3, cutoff=0.5)
            same_ion = [n for n in by_name if n.rsplit(" ", 1)[0] == key.rsplit(" ", 1)[0]]
            hint = ", ".join(near or same_ion[:5])
            raise AtomicDataError(
                f"no transition {name!r} in the transition table"
                + (f"; did you mean {hint}?" if hint else "")
            )
        return by_name[key]

    def find(
        self,
        *,
        ion: str | None = None,
        wavelength: tuple[float, float] | None = None,
        redshift: float = 0.0,
        min_sensitivity: float | None = None,
        extra: bool = False,
    ) -> tuple[Transition, ...]:
        """Transitions that satisfy all given conditions, in order of wavelength.

        Parameters
        ----------
        ion : str, optional
            For instance ``"Fe II"``.
        wavelength : (float, float), optional
            Range of the observed vacuum wavelength, Å, at `redshift`.
        redshift : float
            Redshift of the absorber.
        min_sensitivity : float, optional
            Least absolute velocity shift per ppm of Δα/α, m/s; leaves out lines without q.
        extra : bool
            Also search the wider line list.

        """
        pool = (*self.transitions, *self.extra_lines) if extra else self.transitions
        return tuple(
            sorted(
                (t for t in pool if self._matches(t, ion, wavelength, redshift, min_sensitivity)),
                key=lambda t: t.wavelength,
            )
        )

    @staticmethod
    def _matches(
        transition: Transition,
        ion: str | None,
        wavelength: tuple[float, float] | None,
        redshift: float,
        min_sensitivity: float | None,
    ) -> bool:
        if ion is not None and transition.ion != ion:
            return False
        if wavelength is not None:
            observed = transition.observed_wavelength(redshift)
            if not wavelength[0] <= observed <= wavelength[1]:
                return False
        if min_sensitivity is not None:
            return abs(transition.sensitivity or 0.0) >= min_sensitivity
        return True

    def isotopes_of(self, element: str) -> tuple[Isotope, ...]:
        """Isotopes of an element with their terrestrial abundances."""
        return tuple(isotope for isotope in self.isotopes if isotope.element == element)

    def ions(self) -> tuple[str, ...]:
        """Ions that have a transition with known q."""
        return tuple(dict.fromkeys(transition.ion for transition in self.transitions))

    def telluric_overlap(
        self, wavelength: tuple[float, float], velocity: float = 0.0
    ) -> tuple[TelluricRange, ...]:
        """Telluric ranges that touch a range of barycentric vacuum wavelengths, Å.

        `velocity` is the barycentric correction, km/s, that the spectrum has received; where it
        is not known the ranges are used as they are (they are rounded to more than 30 km/s).
        """
        factor = 1.0 + velocity / 299_792.458
        low, high = wavelength
        return tuple(
            r for r in self.telluric if r.wave_min * factor <= high and r.wave_max * factor >= low
        )


def _transition(row: Row, structure: dict[tuple[str, str], list[LineComponent]]) -> Transition:
    key = (row.text("ion"), row.text("transition"))
    components = tuple(structure.get(key, ()))
    total = sum(component.fraction for component in components)
    if components and abs(total - 1.0) > _FRACTION_TOLERANCE:
        raise AtomicDataError(
            f"{row.file}:{row.line}: the structure of {' '.join(key)} has fractions that sum to "
            f"{total:.4f}; they must sum to 1"
        )
    sources = {
        name.removeprefix("source_"): text
        for name, text in row.fields.items()
        if name.startswith("source_") and text
    }
    return Transition(
        ion=key[0],
        label=key[1],
        element=row.text("element"),
        mass=row.number("mass"),
        wavenumber=row.number("wavenumber"),
        wavenumber_err=row.number_or_none("wavenumber_err"),
        f=row.number("f"),
        gamma=row.number_or_none("gamma"),
        q=row.number_or_none("q"),
        q_err=row.number_or_none("q_err"),
        lower=row.text("lower", ""),
        upper=row.text("upper", ""),
        structure=components,
        ground=row.text("lower_type", "ground") == "ground",
        sources=sources,
        note=row.text("note", ""),
    )


def _structure(path: Path) -> dict[tuple[str, str], list[LineComponent]]:
    found: dict[tuple[str, str], list[LineComponent]] = {}
    for row in read_rows(path, _STRUCTURE_COLUMNS):
        component = LineComponent(
            row.number("wavenumber"),
            row.number("fraction"),
            row.number("mass"),
            row.integer("mass_number"),
        )
        found.setdefault((row.text("ion"), row.text("transition")), []).append(component)
    return found


def _isotopes(path: Path) -> Iterator[Isotope]:
    for row in read_rows(path, ("element", "mass_number", "mass", "abundance", "source")):
        yield Isotope(
            row.text("element"),
            row.integer("mass_number"),
            row.number("mass"),
            row.number("abundance"),
            row.text("source"),
        )


def _telluric(path: Path) -> Iterator[TelluricRange]:
    for row in read_rows(path, ("wave_min", "wave_max", "molecule", "strength")):
        yield TelluricRange(
            row.number("wave_min"),
            row.number("wave_max"),
            row.text("molecule"),
            row.text("strength"),
        )


@cache
def load_atomic_data(structure: Structure = "isotopic", folder: Path | None = None) -> AtomicData:
    """Load the transition tables once.

    Parameters
    ----------
    structure : {"isotopic", "composite"}
        With isotopic and hyperfine components where they are known, or composites only.
    folder : Path, optional
        Folder with tables of the same names and columns; default: the built-in ones.

    Raises
    ------
    AtomicDataError
        A table is missing or malformed; the message names file, line and column.

    """
    folder = folder or built_in_folder()
    names = ("transitions", "structure", "isotopes", "extra_lines", "telluric")
    paths = {name: folder / f"{name}.ecsv" for name in names}
    components = _structure(paths["structure"])
    transitions = tuple(
        _transition(row, components) for row in read_rows(paths["transitions"], _TRANSITION_COLUMNS)
    )
    if structure == "composite":
        transitions = tuple(transition.as_composite() for transition in transitions)
    return AtomicData(
        transitions=transitions,
        extra_lines=tuple(
            _transition(row, {}) for row in read_rows(paths["extra_lines"], _TRANSITION_COLUMNS)
        ),
        isotopes=tuple(_isotopes(paths["isotopes"])),
        telluric=tuple(_telluric(paths["telluric"])),
        digests={p.name: hashlib.sha256(p.read_bytes()).hexdigest() for p in paths.values()},
    )
