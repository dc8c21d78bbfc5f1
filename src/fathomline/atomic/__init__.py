"""Atomic data: transitions, isotopic and hyperfine structure, sensitivity to α."""

from fathomline.atomic.changes import NumberChange, with_abundances, with_numbers
from fathomline.atomic.library import AtomicData, Structure, load_atomic_data
from fathomline.atomic.transitions import (
    Isotope,
    LineComponent,
    TelluricRange,
    Transition,
    alpha_variable,
)

__all__ = [
    "AtomicData",
    "Isotope",
    "LineComponent",
    "NumberChange",
    "Structure",
    "TelluricRange",
    "Transition",
    "alpha_variable",
    "load_atomic_data",
    "with_abundances",
    "with_numbers",
]
