"""Parameters and ties, regions, and the forward model with its Jacobian."""

from fathomline.model.forward import (
    AbsorberModel,
    ComponentTerms,
    SegmentPrediction,
    SegmentTerms,
)
from fathomline.model.parameters import Parameter, ParameterSet, Prior, Tie

__all__ = [
    "AbsorberModel",
    "ComponentTerms",
    "Parameter",
    "ParameterSet",
    "Prior",
    "SegmentPrediction",
    "SegmentTerms",
    "Tie",
]
