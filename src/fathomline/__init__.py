"""Measure Δα/α, the relative change of the fine-structure constant, in quasar absorbers."""

__version__ = "0.1.0"
__all__ = ["__version__"]
