"""Atomic data: transitions, isotopic and hyperfine structure, sensitivity to α."""

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
    "Structure",
    "TelluricRange",
    "Transition",
    "alpha_variable",
    "load_atomic_data",
]
