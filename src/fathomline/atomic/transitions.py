"""Transitions, their isotopic and hyperfine components, and their sensitivity to α.

The wavenumber of a transition is ``ω(α) = ω0 + q x`` with ``x = (α/α0)² − 1`` (Dzuba, Flambaum &
Webb 1999, Phys. Rev. Lett. 82, 888), exact in x; all isotopic and hyperfine components shift with
the same q. For small changes a line moves by ``Δv ≈ −2c (q/ω0) Δα/α``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

from fathomline.constants import C_MS, PPM

__all__ = ["Isotope", "LineComponent", "TelluricRange", "Transition", "alpha_variable"]


def alpha_variable(dalpha_ppm: float) -> float:
    """The variable x = (α/α0)² − 1 for a Δα/α in ppm."""
    d = dalpha_ppm * PPM
    return d * (2.0 + d)


@dataclass(frozen=True, slots=True)
class Isotope:
    """One isotope: mass in u, terrestrial abundance as a fraction of the element."""

    element: str
    mass_number: int
    mass: float
    abundance: float
    source: str


@dataclass(frozen=True, slots=True)
class LineComponent:
    """One isotopic or hyperfine component of a transition.

    Attributes
    ----------
    wavenumber : float
        Vacuum wavenumber, cm⁻¹.
    fraction : float
        Share of the line strength; the fractions of a transition sum to 1.
    mass : float
        Mass of the absorbing atom, u.
    mass_number : int
        Mass number of the isotope; 0 for a composite.

    """

    wavenumber: float
    fraction: float
    mass: float
    mass_number: int = 0


@dataclass(frozen=True, slots=True)
class Transition:
    """One transition, with the numbers that its absorption line needs.

    Attributes
    ----------
    ion, label : str
        For instance ``"Fe II"`` and ``"2382"``; together they name the transition.
    mass : float
        Mean atomic mass, u.
    wavenumber, wavenumber_err : float, float or None
        Composite vacuum wavenumber and its 1σ error, cm⁻¹.
    f : float
        Absorption oscillator strength.
    gamma : float or None
        Decay rate of the upper level, s⁻¹; None where it is not known.
    q, q_err : float or None
        Sensitivity coefficient and its error, cm⁻¹; None where it is not known.
    structure : tuple of LineComponent
        Isotopic and hyperfine components; empty when none are known.
    ground : bool
        Whether the lower level is the ground level, so that every atom of the ion can absorb.
    sources : dict
        Where each quantity comes from, by the name of the quantity.

    """

    ion: str
    label: str
    element: str
    mass: float
    wavenumber: float
    wavenumber_err: float | None
    f: float
    gamma: float | None
    q: float | None
    q_err: float | None
    lower: str = ""
    upper: str = ""
    structure: tuple[LineComponent, ...] = ()
    ground: bool = True
    sources: dict[str, str] = field(default_factory=dict, hash=False)
    note: str = ""

    @property
    def name(self) -> str:
        """Ion and label, for instance ``"Fe II 2382"``."""
        return f"{self.ion} {self.label}"

    @property
    def wavelength(self) -> float:
        """Composite vacuum rest wavelength, Å."""
        return 1e8 / self.wavenumber

    @property
    def composite(self) -> LineComponent:
        """The whole transition as one line at the composite wavenumber."""
        return LineComponent(self.wavenumber, 1.0, self.mass)

    @property
    def components(self) -> tuple[LineComponent, ...]:
        """Isotopic and hyperfine components, or the composite where none are known."""
        return self.structure or (self.composite,)

    def as_composite(self) -> Transition:
        """The same transition without its structure."""
        return replace(self, structure=())

    def wavelength_at(self, dalpha_ppm: float) -> float:
        """Rest wavelength, Å, for a Δα/α in ppm (exact in x; q = 0 where it is not known)."""
        return 1e8 / (self.wavenumber + (self.q or 0.0) * alpha_variable(dalpha_ppm))

    def velocity_shift(self, dalpha_ppm: float) -> float:
        """Shift of the line in m/s for a Δα/α in ppm: c (λ(α)/λ0 − 1)."""
        return C_MS * (self.wavelength_at(dalpha_ppm) * self.wavenumber / 1e8 - 1.0)

    @property
    def sensitivity(self) -> float | None:
        """Velocity shift per ppm of Δα/α at α0, m/s: −2c q/ω0 · 1e-6; None without a q."""
        return None if self.q is None else -2.0 * C_MS * self.q / self.wavenumber * PPM

    @property
    def velocity_err(self) -> float | None:
        """Error of the laboratory wavenumber as a velocity, m/s; None where not given."""
        if self.wavenumber_err is None:
            return None
        return C_MS * self.wavenumber_err / self.wavenumber

    def observed_wavelength(self, redshift: float) -> float:
        """Vacuum wavelength, Å, at a redshift."""
        return self.wavelength * (1.0 + redshift)

    def __post_init__(self) -> None:
        if not (self.f > 0.0 and math.isfinite(self.f)):
            raise ValueError(f"{self.name}: oscillator strength must be positive, got {self.f}")


@dataclass(frozen=True, slots=True)
class TelluricRange:
    """A range of telluric absorption: vacuum wavelengths in the observatory frame, Å."""

    wave_min: float
    wave_max: float
    molecule: str
    strength: str
