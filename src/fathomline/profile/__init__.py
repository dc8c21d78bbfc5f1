"""The Voigt function and the optical depth of a component in a transition."""

from fathomline.profile.depth import FineGrid, TransitionLines
from fathomline.profile.voigt import voigt, voigt_core, voigt_wing

__all__ = ["FineGrid", "TransitionLines", "voigt", "voigt_core", "voigt_wing"]
