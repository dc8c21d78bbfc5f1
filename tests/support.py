"""Shared by the tests: adaptive derivatives, small models built by hand, outside numbers."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from fathomline.atomic import load_atomic_data
from fathomline.model import (
    AbsorberModel,
    ComponentTerms,
    DistortionTerm,
    Parameter,
    ParameterSet,
    Prior,
    SegmentTerms,
    Tie,
)
from fathomline.profile import TransitionLines
from fathomline.spectra import TabulatedLineSpread

C_KMS = 299792.458


def ridders(f: Callable[[float], np.ndarray], x: float, step: float) -> np.ndarray:
    """Adaptive derivative by polynomial extrapolation of central differences to step 0.

    Ridders 1982, Advances in Engineering Software 4, 75. Works on vectors: each entry keeps the
    extrapolation with its own smallest error estimate.
    """
    shrink, table = 1.6, []
    best, best_error = None, None
    for i in range(10):
        table.append([(f(x + step) - f(x - step)) / (2.0 * step)])
        step /= shrink
        factor = shrink**2
        for j in range(1, i + 1):
            refined = (factor * table[i][j - 1] - table[i - 1][j - 1]) / (factor - 1.0)
            error = np.maximum(
                np.abs(refined - table[i][j - 1]), np.abs(refined - table[i - 1][j - 1])
            )
            table[i].append(refined)
            factor *= shrink**2
            if best is None:
                best, best_error = refined.copy(), error
            else:
                better = error < best_error
                best[better], best_error[better] = refined[better], error[better]
    assert best is not None
    return best


def pixels(rest: float, redshift: float, window: tuple[float, float], step: float):
    """Log-linear pixel centres and edges (Å) over a window in km/s."""
    edges_v = np.arange(window[0], window[1] + step / 2, step)
    edges = rest * (1.0 + redshift) * np.exp(edges_v / C_KMS)
    return np.sqrt(edges[:-1] * edges[1:]), edges[:-1], edges[1:]


def small_model(
    *, structure: str = "isotopic", seed: int = 3, noise: float = 0.01
) -> AbsorberModel:
    """Four components, five transitions: turbulent, thermal, both, ties, priors, masks.

    The data are noise around 0.7: derivatives do not care.
    """
    atoms = load_atomic_data(structure)  # type: ignore[arg-type]
    rng = np.random.default_rng(seed)
    redshift = 1.15
    parameters: list[Parameter] = []

    def put(name: str, value: float, **more: object) -> int:
        parameters.append(Parameter(name, value, **more))  # type: ignore[arg-type]
        return len(parameters) - 1

    alpha = put("dalpha_ppm", 5.0, lower=-1e3, upper=1e3)
    fwhm = put("fwhm", 5.5, lower=1.0, upper=20.0, prior=Prior(5.4, 0.2))
    components = []
    for k, (v, width) in enumerate([(-21.0, "b"), (-9.0, "T"), (3.0, "T+b"), (14.0, "tied")]):
        velocity = put(f"v{k}", v)
        b = temperature = b_turb = None
        if width == "b":
            b = put(f"b{k}", 4.0, lower=0.3)
        elif width == "tied":
            b = put(f"b{k}", 0.0, tie=Tie("b0", 1.5, 0.2))
        else:
            temperature = put(f"T{k}", 1.2e4, lower=10.0)
            b_turb = put(f"bt{k}", 2.0, lower=0.0) if width == "T+b" else None
        columns = {
            "Mg II": put(f"Mg{k}", 12.6 + 0.3 * k),
            "Fe II": put(f"Fe{k}", 12.3 + 0.35 * k)
            if k != 2
            else put(f"Fe{k}", 0.0, tie=Tie("Fe1", 1.0, 0.1)),
        }
        components.append(ComponentTerms(velocity, columns, b, temperature, b_turb))
    segments = []
    for region, name in enumerate(
        ["Mg II 2796", "Mg II 2803", "Fe II 2382", "Fe II 2600", "Fe II 2374"]
    ):
        transition = atoms[name]
        wave, low, high = pixels(transition.wavelength, redshift, (-80.0, 80.0), 2.5)
        good = rng.random(wave.size) > 0.1
        continuum = (put(f"c{region}0", 1.0), put(f"c{region}1", 0.02))
        zero = put(f"z{region}", 0.01) if region == 1 else None
        segments.append(
            SegmentTerms(
                region,
                name,
                "one",
                wave,
                low,
                high,
                data=0.7 + noise * rng.standard_normal(wave.size),
                error=np.full(wave.size, noise),
                good=good,
                lines=((transition.ion, TransitionLines(transition)),),
                continuum=continuum,
                zero_level=zero,
                fwhm=fwhm,
                window=(-80.0, 80.0),
                rest=transition.wavelength,
                centre=transition.observed_wavelength(redshift),
            )
        )
    return AbsorberModel(redshift, ParameterSet(parameters), alpha, components, segments)


def everything_model(*, seed: int = 5, noise: float = 0.01) -> AbsorberModel:
    """A model with every term: distortions, a blend, a covering group, free isotopes, profiles.

    Two spectra with free widths (one varies with wavelength) and a tabulated profile in a third.
    """
    atoms = load_atomic_data()
    rng = np.random.default_rng(seed)
    redshift = 1.15
    parameters: list[Parameter] = []

    def put(name: str, value: float, **more: object) -> int:
        parameters.append(Parameter(name, value, **more))  # type: ignore[arg-type]
        return len(parameters) - 1

    alpha = put("dalpha_ppm", -4.0)
    heavy = put("heavy", 1.2, lower=0.0, upper=4.7, prior=Prior(1.0, 0.5))
    covering = put("covering", 0.8, lower=0.0, upper=1.0)
    fwhm = [put("fwhm0", 5.5), put("fwhm1", 6.0), put("fwhm2", 5.0, fixed=True)]
    shift = put("shift", 210.0, prior=Prior(0.0, 300.0))
    slope = put("slope", -150.0, prior=Prior(0.0, 200.0))
    sawtooth = put("sawtooth", 90.0)
    held = put("held shift", 55.0, fixed=True)
    components = []
    for k, (v, b) in enumerate([(-18.0, 4.0), (-2.0, 3.0), (9.0, 5.0)]):
        columns = {"Mg II": put(f"Mg{k}", 12.9 + 0.1 * k), "Fe II": put(f"Fe{k}", 12.7 + 0.2 * k)}
        components.append(
            ComponentTerms(
                put(f"v{k}", v), columns, put(f"b{k}", b), covering=0 if k == 1 else None
            )
        )
    columns = {"blend": put("blendN", 12.4)}
    components.append(
        ComponentTerms(put("blendv", 2.0), columns, put("blendb", 8.0), redshift=2.8834)
    )
    blend = TransitionLines(atoms["C IV 1548"])
    profile_v = np.linspace(-15.0, 15.0, 61)
    profile = np.exp(-0.5 * (profile_v / 2.0) ** 2) * (1.0 + 0.3 * np.tanh(profile_v / 3.0))
    table = TabulatedLineSpread(profile_v, [profile, profile[::-1]], [4000.0, 7000.0])
    segments = []
    for region, (name, instrument) in enumerate(
        [("Mg II 2796", 0), ("Mg II 2796", 1), ("Fe II 2382", 0), ("Fe II 2600", 2)]
    ):
        transition = atoms[name]
        wave, low, high = pixels(transition.wavelength, redshift, (-70.0, 75.0), 2.5)
        terms = [
            DistortionTerm(shift, np.ones_like),
            DistortionTerm(slope, lambda wavelength: (wavelength - 5500.0) / 1000.0),
            DistortionTerm(sawtooth, lambda wavelength: 2.0 * np.mod(wavelength / 70.0, 1.0) - 1.0),
            DistortionTerm(held, np.ones_like),
        ]
        segments.append(
            SegmentTerms(
                region,
                name,
                f"spectrum {instrument}",
                wave,
                low,
                high,
                data=0.7 + noise * rng.standard_normal(wave.size),
                error=np.full(wave.size, noise),
                good=rng.random(wave.size) > 0.1,
                lines=(
                    (
                        transition.ion,
                        TransitionLines(transition, heavy_element="Mg"),
                    ),
                    *((("blend", blend),) if name == "Mg II 2796" else ()),
                ),
                continuum=(put(f"c{region}0", 1.0), put(f"c{region}1", 0.02)),
                zero_level=put(f"z{region}", 0.01) if region == 1 else None,
                fwhm=fwhm[instrument],
                window=(-70.0, 75.0),
                rest=transition.wavelength,
                centre=transition.observed_wavelength(redshift),
                distortions=tuple(terms[1:] if instrument else terms[:3]),
                fwhm_slope=0.4 * (wave - 6000.0) / 1000.0 if instrument == 1 else None,
                line_spread=table if instrument == 2 else None,
            )
        )
    return AbsorberModel(
        redshift,
        ParameterSet(parameters),
        alpha,
        components,
        segments,
        coverings=[covering],
        heavy=heavy,
    )


def single_line_model(transition, wave, low, high, *, redshift, velocity, b, logn, fwhm, dalpha):
    """One component in one transition, continuum held at 1."""
    parameters = [
        Parameter("dalpha", dalpha),
        Parameter("fwhm", fwhm, fixed=True),
        Parameter("v", velocity),
        Parameter("b", b),
        Parameter("logN", logn),
    ]
    segment = SegmentTerms(
        0,
        transition.name,
        "one",
        wave,
        low,
        high,
        np.ones(wave.size),
        np.full(wave.size, 0.01),
        np.ones(wave.size, dtype=bool),
        ((transition.ion, TransitionLines(transition)),),
        continuum=(),
        zero_level=None,
        fwhm=1,
        window=(-1.0, 1.0),
        rest=transition.wavelength,
        centre=transition.observed_wavelength(redshift),
    )
    component = ComponentTerms(2, {transition.ion: 4}, b=3)
    return AbsorberModel(redshift, ParameterSet(parameters), 0, [component], [segment])
