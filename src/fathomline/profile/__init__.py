"""The Voigt function and the optical depth of a component in a transition."""

from fathomline.profile.depth import DepthDerivatives, TransitionLines
from fathomline.profile.voigt import voigt, voigt_with_derivatives

__all__ = ["DepthDerivatives", "TransitionLines", "voigt", "voigt_with_derivatives"]
