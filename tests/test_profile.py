"""The Voigt function against 40-digit arithmetic, its derivatives, and curves of growth."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from fathomline.atomic import LineComponent, Transition
from fathomline.job.synthesis import Cloud, equivalent_width
from fathomline.profile import (
    FineGrid,
    LineItem,
    LineTable,
    TransitionLines,
    voigt,
    voigt_core,
    voigt_wing,
)
from support import ridders

A_GRID = [0.0, 1e-8, 1e-6, 1e-5, 1e-4, 5e-4, 1e-3, 3e-3, 0.01, 0.03, 0.1, 0.3, 1.0, 3.0, 10.0]
U_GRID = sorted(
    {
        0.0,
        1e-6,
        1e-3,
        0.1,
        0.3,
        0.7,
        1.0,
        1.3,
        1.7,
        2.0,
        2.4,
        2.8,
        3.1,
        3.5,
        3.9,
        4.3,
        4.7,
        5.1,
        5.5,
        5.9,
        6.0,
        6.5,
        7.0,
        8.0,
        9.5,
        11.0,
        14.0,
        18.0,
        25.0,
        27.9,
        28.1,
        40.0,
        70.0,
        100.0,
        300.0,
        1e3,
    }
)


def exact_faddeeva(a: float, u: float) -> mpmath.mpc:
    """w(z) = exp(−z²) erfc(−i z), DLMF 7.2.3, with 40 digits kept (more inside)."""
    with mpmath.workdps(60):
        z = mpmath.mpc(mpmath.mpf(u), mpmath.mpf(a))
        if abs(z) > 25:
            # erfc and exp over- and underflow by thousands of digits there: continued fraction
            # DLMF 7.9.4, w(z) = (i/√π) / (z − (1/2)/(z − 1/(z − (3/2)/(z − ...))))
            if a == 0.0:
                return mpmath.mpc(mpmath.exp(-(z.real**2)), _dawson(u))
            tail = z
            for k in range(400, 0, -1):
                tail = z - mpmath.mpf(k) / 2 / tail
            return mpmath.mpc(0, 1) / mpmath.sqrt(mpmath.pi) / tail
        return mpmath.exp(-z * z) * mpmath.erfc(-1j * z)


def _dawson(u: float) -> mpmath.mpf:
    z = mpmath.mpf(u)
    tail = z
    for k in range(400, 0, -1):
        tail = z - mpmath.mpf(k) / 2 / tail
    return 1 / mpmath.sqrt(mpmath.pi) / tail


def test_against_40_digit_arithmetic():
    worst_absolute = worst_relative = 0.0
    for a in A_GRID:
        got = voigt(a, np.array([*U_GRID, *(-u for u in U_GRID)]))
        for u, h in zip([*U_GRID, *U_GRID], got, strict=True):
            truth = exact_faddeeva(a, u).real
            error = abs(float(mpmath.mpf(float(h)) - truth))
            worst_absolute = max(worst_absolute, error)
            if truth > 1e-290:  # smaller values are not normal numbers of float64
                worst_relative = max(worst_relative, error / float(truth))
    print(f"H(a,u): worst absolute {worst_absolute:.1e}, relative {worst_relative:.1e}")
    assert worst_absolute < 1e-10
    assert worst_relative < 1e-6


# Re and Im of w(u + ia), computed at 40 digits from DLMF 7.19 / Abramowitz & Stegun 7.1.3
FADDEEVA = [
    (1e-4, 0.0, 0.9998871720825382, 0.0),
    (0.1, 0.0, 0.8964569799691266, 0.0),
    (1.0, 0.0, 0.427583576155807, 0.0),
    (0.001, 0.5, 0.7781517183125491, 0.4781471751215842),
    (1.0, 1.0, 0.3047442052569126, 0.2082189382028316),
    (0.01, 1.0, 0.3687024173977661, 0.5998519944957883),
    (0.01, 2.0, 0.02062006544556913, 0.3392813705802113),
    (0.5, 2.0, 0.1033588237413667, 0.2847858847500937),
    (0.0001, 3.0, 0.000131266256603325, 0.2011572426463528),
    (0.001, 5.0, 2.408046396710341e-5, 0.1152459566745037),
    (0.1, 10.0, 0.0005728123649610698, 0.05669957702863536),
    (0.01, 100.0, 5.642742275050879e-7, 0.005642177916158248),
]


@pytest.mark.parametrize(("a", "u", "real", "imaginary"), FADDEEVA)
def test_tabulated_values(a, u, real, imaginary):
    h, h_u, _, h_a = voigt_core(np.array([a]), np.array([u]), derivatives=True)
    assert h[0] == pytest.approx(real, rel=1e-6, abs=1e-14)
    # w' = −2 z w + 2i/√π (DLMF 7.10.2): both derivatives follow from both parts
    assert h_u[0] == pytest.approx(-2 * (u * real - a * imaginary), rel=1e-6, abs=1e-10)
    expected = 2 * (u * imaginary + a * real) - 2 / math.sqrt(math.pi)
    assert h_a[0] == pytest.approx(expected, rel=1e-6, abs=1e-10)


@pytest.mark.parametrize("a", [1e-4, 0.003, 0.1, 2.0])
def test_derivatives_against_adaptive_ones(a):
    u = np.linspace(-8.0, 8.0, 41)
    _, h_u, u_h_u, h_a = voigt_core(np.full(u.size, a), u, derivatives=True)
    np.testing.assert_allclose(u_h_u, u * h_u, rtol=1e-14)
    np.testing.assert_allclose(h_u, ridders(lambda t: voigt(a, u + t), 0.0, 0.1), atol=1e-9)
    np.testing.assert_allclose(h_a, ridders(lambda t: voigt(t, u), a, a / 4), atol=1e-8)


@pytest.mark.parametrize("a", [1e-6, 1e-4, 1e-3, 0.01])
def test_wings_join_the_core(a):
    """Beyond 8 Doppler widths the asymptotic series stands for the full function."""
    u = np.array([-300.0, -60.0, -14.0, -9.0, -8.0, 8.0, 8.5, 11.0, 30.0, 900.0])
    full = voigt_core(np.full(u.size, a), u, derivatives=True)
    wing = voigt_wing(np.full(u.size, a), u, derivatives=True)
    # 4e-6: the first term left out at u = 8; 1e-5 for its derivative; rounding of 1 − 2uD at 900
    np.testing.assert_allclose(wing[0], full[0], rtol=5e-6)
    for i in (1, 2, 3):
        scale = np.abs(full[i]).max()
        np.testing.assert_allclose(wing[i], full[i], rtol=5e-5, atol=1e-9 * scale)


# Half curve-of-growth integrals, W/λ = 2 (b/c) F (Tatum, Stellar Atmospheres, §11.4 and §11.6)
GAUSSIAN_GROWTH = [
    (0.01, 0.00883102149402),
    (0.1, 0.0855728706534),
    (0.5, 0.374382891502),
    (1.0, 0.642572260479),
    (2.0, 0.986344333126),
    (5.0, 1.41237272661),
    (10.0, 1.65687666918),
    (100.0, 2.26027922556),
    (1000.0, 2.72643656471),
    (1e5, 3.47241680351),
]
VOIGT_GROWTH = [  # tau(u) = tau0 H(a,u)/H(a,0); six digits trusted
    (1e-4, 1.0, 0.6426559),
    (1e-4, 100.0, 2.2632499),
    (1e-4, 1e4, 3.3130965),
    (1e-3, 1.0, 0.64340885),
    (1e-3, 100.0, 2.289929),
    (1e-3, 1e4, 4.8584485),
    (1e-2, 1.0, 0.65095475),
    (1e-2, 100.0, 2.5512603),
    (1e-2, 1e4, 13.478322),
]


def depth_of(line: Transition, grid: FineGrid, b: float, column: float) -> np.ndarray:
    table = LineTable([LineItem(0, TransitionLines(line))], [grid])
    inverse = grid.inverse[None, :]
    return table.evaluate(inverse, np.ones(1), np.array([column]), np.full(2, b), 0.0)[0, 0]


def line_with(a: float, tau0: float, b: float) -> tuple[Transition, float]:
    """A made-up line of 2000 Å and the log N that give damping a and central depth tau0."""
    wavelength, f = 2000.0, 0.1
    gamma = a * 4.0 * math.pi * (b * 1e3) / (wavelength * 1e-10)
    line = Transition(
        "X I",
        "2000",
        "X",
        20.0,
        1e8 / wavelength,
        None,
        f,
        gamma,
        0.0,
        None,
        structure=(LineComponent(1e8 / wavelength, 1.0, 20.0),),
    )
    unit = depth_of(line, FineGrid(math.log(wavelength), 1e-6, 1), b, 1.0)[0]
    return line, math.log10(tau0 / unit)


def model_width(line: Transition, logn: float, b: float, reach: float) -> float:
    """Equivalent width over λ from the fitted model's own optical depth."""
    v = np.arange(-reach, reach, b / 60.0)
    wave = line.wavelength * np.exp(v / 299792.458)
    tau = depth_of(line, FineGrid(math.log(wave[0]), b / 60.0 / 299792.458, wave.size), b, 10**logn)
    return float(np.trapezoid(-np.expm1(-tau), wave)) / line.wavelength


@pytest.mark.parametrize("route", ["model", "simulator"])
@pytest.mark.parametrize(
    ("a", "tau0", "growth"),
    [(0.0, tau0, growth) for tau0, growth in GAUSSIAN_GROWTH] + VOIGT_GROWTH,
)
def test_curve_of_growth(route, a, tau0, growth):
    b = 3.0
    line, logn = line_with(a, tau0, b)
    # the damping wings fall as a τ0/u² beyond the reach: a τ0/(√π u) of the half is added
    reach = max(8.0, 60.0 * math.sqrt(a * tau0)) * b
    if route == "model":
        width = model_width(line, logn, b, reach)
    else:
        cloud = Cloud(0.0, {"X I": logn}, b_turb=b)
        width = equivalent_width(line, cloud, reach=reach) / line.wavelength
    half = width * 299792.458 / (2.0 * b)
    h0 = float(voigt(a, np.array([0.0]))[0])
    half += a * tau0 / h0 / math.sqrt(math.pi) / (reach / b)
    assert half == pytest.approx(growth, rel=1e-4)
