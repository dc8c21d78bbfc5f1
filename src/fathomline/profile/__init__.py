"""The Voigt function and the optical depth of many components in many transitions."""

from fathomline.profile.depth import FineGrid, LineItem, LineTable, TransitionLines
from fathomline.profile.voigt import voigt, voigt_core, voigt_wing

__all__ = [
    "FineGrid",
    "LineItem",
    "LineTable",
    "TransitionLines",
    "voigt",
    "voigt_core",
    "voigt_wing",
]
