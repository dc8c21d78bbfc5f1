"""The same fit written the plain way: scipy's `wofz`, numpy and lmfit's numerical derivatives.

The physics is that of the program: isotopic structure, exact dependence on α, Gaussian line-spread
function, integration over pixels, a straight continuum in each region. Nothing is shared with the
package but the atomic data and the numbers of the job.
"""

from __future__ import annotations

import lmfit
import numpy as np
import scipy.constants as si
from scipy.special import wofz

from fathomline.job.building import BuiltModel

SUBPIXELS = 5
STRENGTH = si.e**2 / (4 * si.epsilon_0 * si.m_e * si.c)  # m² Hz


def _parameters(built: BuiltModel) -> lmfit.Parameters:
    parameters = lmfit.Parameters()
    parameters.add("dalpha", 0.0)
    for k, component in enumerate(built.job.components):
        parameters.add(f"v{k}", component.velocity.value)
        parameters.add(f"b{k}", component.b.value, min=0.3, max=100.0)
        for ion, number in component.logN.items():
            parameters.add(f"n{k}_{ion.replace(' ', '')}", number.value, min=5.0, max=23.0)
    for i in range(len(built.model.segments)):
        parameters.add(f"c{i}", 1.0)
        parameters.add(f"d{i}", 0.0)
    return parameters


class _Region:
    def __init__(self, segment, transition) -> None:
        self.segment, self.transition = segment, transition
        step = np.log(segment.edges_high[0] / segment.edges_low[0]) / SUBPIXELS
        margin = 8 * SUBPIXELS
        count = segment.wavelength.size * SUBPIXELS + 2 * margin
        grid = np.log(segment.edges_low[0]) + step * (np.arange(count) - margin + 0.5)
        self.frequency = si.c / (np.exp(grid) * 1e-10)
        sigma = 5.2 / np.sqrt(8 * np.log(2)) / (si.c / 1e3) / step
        half = int(6 * sigma) + 1
        kernel = np.exp(-0.5 * (np.arange(-half, half + 1) / sigma) ** 2)
        self.kernel, self.margin = kernel / kernel.sum(), margin
        self.xi = np.linspace(-1.0, 1.0, segment.wavelength.size)

    def flux(self, values: dict[str, float], i: int, n_components: int, redshift: float):
        x = (1 + values["dalpha"] * 1e-6) ** 2 - 1
        tau = np.zeros_like(self.frequency)
        ion = self.transition.ion.replace(" ", "")
        for k in range(n_components):
            rest = self.frequency * (1 + redshift) * (1 + values[f"v{k}"] * 1e3 / si.c)
            column = 10 ** values[f"n{k}_{ion}"] * 1e4
            for line in self.transition.components:
                centre = si.c * 100 * (line.wavenumber + self.transition.q * x)
                doppler = centre * values[f"b{k}"] * 1e3 / si.c
                z = (rest - centre + 0.25j * self.transition.gamma / np.pi) / doppler
                profile = wofz(z).real / (np.sqrt(np.pi) * doppler)
                tau += column * self.transition.f * line.fraction * STRENGTH * profile
        smooth = np.convolve(np.exp(-tau), self.kernel, mode="same")[self.margin : -self.margin]
        pixels = smooth.reshape(-1, SUBPIXELS).mean(axis=1)
        return pixels * (values[f"c{i}"] + values[f"d{i}"] * self.xi)


def fit(built: BuiltModel):
    """Fit by the plain route; returns Δα/α (ppm), its error and the number of evaluations."""
    regions = [
        _Region(segment, transition)
        for segment, transition in zip(built.model.segments, built.transitions, strict=True)
    ]
    redshift, n = built.job.absorber.redshift, len(built.job.components)

    def residual(parameters: lmfit.Parameters):
        values = parameters.valuesdict()
        return np.concatenate(
            [
                (r.segment.data - r.flux(values, i, n, redshift)) / r.segment.error
                for i, r in enumerate(regions)
            ]
        )

    found = lmfit.minimize(residual, _parameters(built), method="leastsq", scale_covar=False)
    return found.params["dalpha"].value, found.params["dalpha"].stderr, found.nfev
