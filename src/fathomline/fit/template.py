"""What a velocity structure consists of, and the model of a given structure."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from fathomline.model import (
    AbsorberModel,
    ComponentTerms,
    Parameter,
    ParameterSet,
    SegmentTerms,
)
from fathomline.profile import TransitionLines

__all__ = ["LOG_COLUMN_LIMITS", "WIDTH_LIMITS", "Cloud", "Interloper", "Template"]

WIDTH_LIMITS = (1.0, 30.0)
"""Smallest and largest Doppler parameter (or turbulent part of it) of a cloud, km/s."""

LOG_COLUMN_LIMITS = (9.0, 17.0)
"""Of the column density of an ion of a cloud, log10 of cm⁻²."""

_T_BOUNDS = (100.0, 1e5)  # K


@dataclass(frozen=True, slots=True)
class Cloud:
    """A velocity component: km/s about the absorber redshift, log10 N/cm⁻² by ion.

    `b` is the Doppler parameter, or, where `temperature` (K) is given, its turbulent part.
    """

    velocity: float
    b: float
    log_columns: dict[str, float]
    temperature: float | None = None


@dataclass(frozen=True, slots=True)
class Interloper:
    """A line in one segment: observed wavelength (Å), b (km/s), log10 of N f in cm⁻²."""

    segment: int
    wavelength: float
    b: float
    log_strength: float


@dataclass(frozen=True)
class Template:
    """Everything of a model but its clouds.

    Attributes
    ----------
    redshift : float
    parameters : tuple of Parameter
        Δα/α, line-spread functions, distortions, continua and so on.
    alpha : int
        Place of Δα/α.
    segments : tuple of SegmentTerms
    windows : dict
        Lowest and highest velocity, km/s, at which an ion may absorb.
    heavy : int, optional
        As in `AbsorberModel`.

    """

    redshift: float
    parameters: tuple[Parameter, ...]
    alpha: int
    segments: tuple[SegmentTerms, ...]
    windows: dict[str, tuple[float, float]]
    heavy: int | None = None

    @property
    def ions(self) -> tuple[str, ...]:
        """Ions that a cloud can have."""
        return tuple(self.windows)

    def model(
        self,
        clouds: Sequence[Cloud],
        interlopers: Sequence[Interloper] = (),
        start: dict[str, float] | None = None,
    ) -> AbsorberModel:
        """Model of given clouds, with the other parameters at `start` where it names them."""
        known = start or {}
        parameters = [
            replace(p, value=float(np.clip(known[p.name], p.lower, p.upper)))
            if p.name in known and not p.fixed and p.tie is None
            else p
            for p in self.parameters
        ]

        def put(name: str, value: float, bounds: tuple[float, float]) -> int:
            low, high = bounds
            parameters.append(
                Parameter(name, float(np.clip(value, low, high)), lower=low, upper=high)
            )
            return len(parameters) - 1

        components = []
        for k, cloud in enumerate(clouds):
            name = f"component[{k + 1}]"
            low = min(self.windows[ion][0] for ion in cloud.log_columns)
            high = max(self.windows[ion][1] for ion in cloud.log_columns)
            thermal = cloud.temperature is not None
            width = put(f"{name}.{'b_turb' if thermal else 'b'}", cloud.b, WIDTH_LIMITS)
            components.append(
                ComponentTerms(
                    velocity=put(f"{name}.velocity", cloud.velocity, (low, high)),
                    log_columns={
                        ion: put(f'{name}.logN["{ion}"]', value, LOG_COLUMN_LIMITS)
                        for ion, value in cloud.log_columns.items()
                    },
                    b=None if thermal else width,
                    b_turb=width if thermal else None,
                    temperature=put(f"{name}.temperature", cloud.temperature or 0.0, _T_BOUNDS)
                    if thermal
                    else None,
                )
            )
        segments = list(self.segments)
        for k, line in enumerate(interlopers):
            key, name = f"blend {k + 1}", f"blend[{k + 1}]"
            components.append(
                ComponentTerms(
                    velocity=put(f"{name}.velocity", 0.0, (-15.0, 15.0)),
                    log_columns={key: put(f"{name}.logN", line.log_strength, (8.0, 17.0))},
                    b=put(f"{name}.b", line.b, (1.0, 60.0)),
                    redshift=0.0,
                )
            )
            own = segments[line.segment]
            terms = TransitionLines.bare(line.wavelength)
            segments[line.segment] = replace(own, lines=(*own.lines, (key, terms)))
        return AbsorberModel(
            self.redshift,
            ParameterSet(parameters),
            self.alpha,
            components,
            segments,
            heavy=self.heavy,
        )
