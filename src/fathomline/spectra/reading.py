"""The record of how a spectrum came to be what it is: file, columns, units, guesses, conversions.

A measurement has to be defended years later, so nothing that the reader assumed may stay silent:
each assumption is one plain sentence in `Reading.guesses`, each oddity one in `Reading.warnings`,
each change of the wavelengths one in `Reading.steps`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

__all__ = ["Reading"]


@dataclass(frozen=True, slots=True)
class Reading:
    """What a reader understood and did; immutable, see `with_changes`.

    Attributes
    ----------
    file
        Path as given, or None when the spectrum was built from arrays.
    file_digest
        SHA-256 of the bytes of the file (hexadecimal), or None.
    companions
        Path and SHA-256 of the further files (roles ``error`` and ``continuum``).
    format
        Format recognised, such as ``"FITS table, one row per pixel"``.
    columns
        Role (``wavelength``, ``flux``, ``error``, ...) to the name used in the file.
    units
        Role to the unit as the file or the user wrote it; absent when nobody stated one.
    unit_source
        Where the wavelength unit came from: ``"file"``, ``"argument"``, ``"guess"``.
    medium, medium_source
        Medium of the wavelengths in the file (``"vacuum"`` or ``"air"``) and where that came from.
    frame, frame_source
        Frame of the wavelengths in the file and where that came from.
    barycentric_velocity
        Velocity (km/s) applied as the factor 1 + v/c, or None when none was applied.
    pixels
        Number of pixels.
    masked
        Reason to number of pixels masked for it; a pixel can have several reasons.
    masked_pixels
        Number of pixels masked for any reason.
    guesses, warnings, steps
        Plain sentences, in the order in which they arose.

    """

    file: str | None = None
    file_digest: str | None = None
    companions: Mapping[str, Mapping[str, str]] = field(default_factory=dict)
    format: str = "arrays"
    columns: Mapping[str, str] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)
    unit_source: str = "argument"
    medium: str = "vacuum"
    medium_source: str = "argument"
    frame: str = "barycentric"
    frame_source: str = "argument"
    barycentric_velocity: float | None = None
    pixels: int = 0
    masked: Mapping[str, int] = field(default_factory=dict)
    masked_pixels: int = 0
    guesses: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    steps: tuple[str, ...] = ()

    def with_changes(self, **changes: Any) -> Reading:
        """Return a copy with some attributes replaced (names as in the class)."""
        return replace(self, **changes)

    def to_dict(self) -> dict[str, Any]:
        """Return plain dicts, lists, strings and numbers that `json` can write."""
        return {
            "file": self.file,
            "file_digest": self.file_digest,
            "companions": {role: dict(entry) for role, entry in self.companions.items()},
            "format": self.format,
            "columns": dict(self.columns),
            "units": dict(self.units),
            "unit_source": self.unit_source,
            "medium": self.medium,
            "medium_source": self.medium_source,
            "frame": self.frame,
            "frame_source": self.frame_source,
            "barycentric_velocity": self.barycentric_velocity,
            "pixels": self.pixels,
            "masked": dict(self.masked),
            "masked_pixels": self.masked_pixels,
            "guesses": list(self.guesses),
            "warnings": list(self.warnings),
            "steps": list(self.steps),
        }
