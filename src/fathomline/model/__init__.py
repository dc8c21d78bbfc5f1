"""Parameters and ties, regions, and the forward model with its Jacobian."""

from fathomline.model.forward import AbsorberModel
from fathomline.model.parameters import Parameter, ParameterSet, Prior, Tie
from fathomline.model.terms import (
    ComponentTerms,
    DistortionTerm,
    SegmentPrediction,
    SegmentTerms,
)

__all__ = [
    "AbsorberModel",
    "ComponentTerms",
    "DistortionTerm",
    "Parameter",
    "ParameterSet",
    "Prior",
    "SegmentPrediction",
    "SegmentTerms",
    "Tie",
]
