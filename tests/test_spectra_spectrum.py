"""The spectrum record: construction, edges, masks, slices, digests, line spread, local level."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import pickle
import subprocess
import sys

import numpy as np
import pytest
from astropy import units as u
from astropy.modeling.functional_models import Gaussian1D
from hypothesis import given
from hypothesis import strategies as st

from fathomline.constants import C_KMS
from fathomline.errors import MissingExtraError, SpectrumError
from fathomline.spectra import (
    GaussianLineSpread,
    Spectrum,
    local_level,
    read_line_spread,
    spectrum_level,
)
from fathomline.spectra.units import guess_unit, parse_unit


def log_linear(n=50, start=4000.0, step_kms=2.5):
    return start * np.exp(np.arange(n) * step_kms / C_KMS)


def simple(n=50, **more):
    wave = log_linear(n)
    return Spectrum.from_arrays(wave, np.ones(n), np.full(n, 0.1), name="s", **more)


def test_arrays_are_native_float64_copies_and_read_only():
    wave = log_linear().astype(">f8")
    flux = np.ones(50, dtype=">f4")
    spectrum = Spectrum.from_arrays(wave, flux, np.full(50, 0.1), np.full(50, 2))
    for key in ("wavelength", "flux", "error", "continuum"):
        values = getattr(spectrum, key)
        assert values.dtype == np.dtype("=f8")
        assert values.dtype.isnative
        with pytest.raises(ValueError, match="read-only"):
            values[0] = 1.0
    flux[0] = 7.0
    assert spectrum.flux[0] == 1.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        spectrum.name = "other"


@pytest.mark.parametrize("unit", ["Angstrom", "nm", "um", "m"])
def test_quantities_convert_as_astropy_converts(unit):
    wave = log_linear()
    quantity = (wave * u.AA).to(unit)
    spectrum = Spectrum.from_arrays(
        quantity, np.ones(50) * u.Jy, np.full(50, 100.0) * u.mJy, np.full(50, 2e6) * u.uJy
    )
    np.testing.assert_allclose(spectrum.wavelength, wave, rtol=1e-15)
    np.testing.assert_allclose(spectrum.error, 0.1, rtol=1e-15)
    np.testing.assert_allclose(spectrum.continuum, 2.0, rtol=1e-15)
    plain = Spectrum.from_arrays(quantity.value, np.ones(50), np.ones(50), unit=unit)
    np.testing.assert_allclose(plain.wavelength, wave, rtol=1e-15)


def test_quantity_of_another_kind_is_refused():
    with pytest.raises(SpectrumError, match="wavelength: the unit cannot be converted"):
        Spectrum.from_arrays(np.arange(1, 4) * u.s, np.ones(3), np.ones(3))
    with pytest.raises(SpectrumError, match="error: the unit cannot be converted"):
        Spectrum.from_arrays([1, 2, 3], np.ones(3) * u.Jy, np.ones(3) * u.s)


def test_decreasing_wavelengths_are_reversed_with_all_arrays_and_recorded():
    wave = log_linear(5)
    spectrum = Spectrum.from_arrays(
        wave[::-1], [5, 4, 3, 2, 1], [1, 1, 1, 1, -1], good=[False, True, True, True, True]
    )
    np.testing.assert_array_equal(spectrum.wavelength, wave)
    np.testing.assert_array_equal(spectrum.flux, [1, 2, 3, 4, 5])
    np.testing.assert_array_equal(spectrum.good, [False, True, True, True, False])
    assert any("reversed" in step for step in spectrum.reading.steps)


@pytest.mark.parametrize(
    ("wave", "message"),
    [
        ([1.0, 2.0, 2.0, 3.0], "row 3 repeats"),
        ([1.0, 2.0, 1.5, 3.0], "row 3 is out of order"),
        ([4.0, 3.0, 3.5, 2.0, 1.0], "row 3 is out of order"),
        ([1.0, 2.0, np.nan, 3.0], "row 3 is nan"),
        ([1.0, np.inf, 2.0, 3.0], "row 2 is inf"),
        ([-1.0, 0.0, 2.0, 3.0], "row 1 is -1.0, but must be positive"),
        ([1.0], "at least two pixels"),
        ([[1.0, 2.0]], r"expected the shape \(n,\)"),
        (["a", "b"], "expected numbers"),
    ],
)
def test_bad_wavelengths_name_the_row(wave, message):
    n = np.size(wave)
    with pytest.raises(SpectrumError, match=message):
        Spectrum.from_arrays(wave, np.ones(n), np.ones(n))


def test_wrong_shapes_are_refused():
    with pytest.raises(SpectrumError, match="error has 3 pixels, but the wavelengths have 4"):
        Spectrum.from_arrays([1, 2, 3, 4], np.ones(4), np.ones(3))
    with pytest.raises(SpectrumError, match="good has the shape"):
        Spectrum.from_arrays([1, 2, 3], np.ones(3), np.ones(3), good=[True])
    with pytest.raises(SpectrumError, match="unknown wavelength unit"):
        Spectrum.from_arrays([1, 2, 3], np.ones(3), np.ones(3), unit="parsec")
    with pytest.raises(SpectrumError, match="lsf must be"):
        simple(lsf=5.0)


def test_mask_follows_error_flux_continuum_and_user():
    spectrum = Spectrum.from_arrays(
        log_linear(10),
        [1, 1, 1, 1, np.nan, np.inf, 1, 1, 1, 1],
        [1, -1, 0, np.nan, 1, 1, 1, 1, np.inf, 1],
        [1, 1, 1, 1, 1, 1, 0, np.nan, 1, 1],
        good=[True] * 9 + [False],
    )
    np.testing.assert_array_equal(spectrum.good, [True] + [False] * 9)
    assert spectrum.reading.masked == {
        "error not finite": 2,
        "error not positive": 2,
        "flux not finite": 2,
        "continuum not finite": 1,
        "continuum not positive": 1,
        "masked by the user": 1,
    }
    assert spectrum.reading.masked_pixels == 9
    json.dumps(spectrum.reading.to_dict())


@given(
    st.floats(2500.0, 25000.0),
    st.floats(0.1, 20.0),
    st.integers(2, 400),
)
def test_edges_are_exact_on_log_linear_grids(start, step_kms, n):
    i = np.arange(n)
    step = np.log1p(step_kms / C_KMS)
    spectrum = Spectrum.from_arrays(start * np.exp(i * step), np.ones(n), np.ones(n))
    exact = start * np.exp((np.arange(n + 1) - 0.5) * step)
    assert spectrum.edges.shape == (n + 1,)
    np.testing.assert_allclose(spectrum.edges, exact, rtol=2e-14)
    lower, upper = spectrum.bounds()
    np.testing.assert_array_equal(lower[1:], upper[:-1])


@given(st.floats(3000.0, 9000.0), st.floats(0.005, 0.5), st.integers(3, 200))
def test_edges_increase_and_enclose_their_pixels(start, step, n):
    rng = np.random.default_rng(n)
    wave = start + np.cumsum(step * rng.uniform(0.5, 1.5, n))
    edges = Spectrum.from_arrays(wave, np.ones(n), np.ones(n)).edges
    assert np.all(np.diff(edges) > 0)
    assert np.all(edges[:-1] < wave)
    assert np.all(wave < edges[1:])


def test_edges_of_a_linear_grid_err_by_second_order():
    errors = []
    for step in (0.4, 0.2, 0.1):
        wave = 4000.0 + step * np.arange(100)
        exact = 4000.0 + step * (np.arange(101) - 0.5)
        edges = Spectrum.from_arrays(wave, np.ones(100), np.ones(100)).edges
        errors.append(np.abs(edges - exact)[:60].max())
    # halving the step divides a second-order error by four
    np.testing.assert_allclose(np.divide(errors[:-1], errors[1:]), 4.0, rtol=0.02)


def test_pixels_beside_a_hole_keep_their_width():
    full = log_linear(40)
    wave = np.delete(full, slice(10, 20))
    spectrum = Spectrum.from_arrays(wave, np.ones(30), np.ones(30))
    np.testing.assert_array_equal(spectrum.jumps, [9])
    lower, upper = spectrum.bounds()
    np.testing.assert_allclose(C_KMS * np.log(upper / lower), 2.5, rtol=1e-9)
    # also when the pixel beside the hole is alone
    wave = np.delete(full, np.r_[1:10, 20:38])
    lower, upper = Spectrum.from_arrays(wave, np.ones(13), np.ones(13)).bounds()
    np.testing.assert_allclose(C_KMS * np.log(upper / lower)[:11], 2.5, rtol=1e-9)


def test_velocity_is_the_plain_ratio():
    spectrum = simple()
    # a line at 4000 Å seen at twice that wavelength: v = c by this definition
    np.testing.assert_allclose(spectrum.velocity(spectrum.wavelength[7] / 2)[7], C_KMS)
    assert spectrum.velocity(spectrum.wavelength[7])[7] == 0.0
    with pytest.raises(SpectrumError, match="lambda0 must be positive"):
        spectrum.velocity(-1.0)


def test_slices_hold_the_pixels_in_the_range():
    spectrum = simple(lsf=GaussianLineSpread(5.0))
    part = spectrum.slice_range(spectrum.wavelength[10], spectrum.wavelength[20])
    np.testing.assert_array_equal(part.wavelength, spectrum.wavelength[10:21])
    assert part.lsf == spectrum.lsf
    with pytest.raises(SpectrumError, match="has 0 pixels in 5000"):
        spectrum.slice_range(5000, 5001)
    with pytest.raises(SpectrumError, match="is empty"):
        spectrum.slice_range(4100, 4000)


def test_digest_depends_on_every_array_and_on_nothing_else():
    base = Spectrum.from_arrays([1, 2, 3], [1, 1, 1], [1, 1, 1])
    # the documented recipe, spelled out
    expected = hashlib.sha256(
        b"wavelength:3;"
        + np.array([1.0, 2, 3], "<f8").tobytes()
        + b"flux:3;"
        + np.ones(3, "<f8").tobytes()
        + b"error:3;"
        + np.ones(3, "<f8").tobytes()
        + b"continuum:-1;good:3;\x01\x01\x01"
    ).hexdigest()
    assert base.digest() == expected
    others = [
        Spectrum.from_arrays([1, 2, 4], [1, 1, 1], [1, 1, 1]),
        Spectrum.from_arrays([1, 2, 3], [1, 1, 2], [1, 1, 1]),
        Spectrum.from_arrays([1, 2, 3], [1, 1, 1], [1, 1, 2]),
        Spectrum.from_arrays([1, 2, 3], [1, 1, 1], [1, 1, 1], [1, 1, 1]),
        Spectrum.from_arrays([1, 2, 3], [1, 1, 1], [1, 1, 1], good=[True, True, False]),
    ]
    assert len({s.digest() for s in [base, *others]}) == 6
    same = Spectrum.from_arrays([3, 2, 1], [1, 1, 1], [1, 1, 1], name="x")
    assert same.digest() == base.digest()


def test_spectra_travel_to_worker_processes():
    spectrum = simple(lsf=GaussianLineSpread(5.0))
    there = pickle.loads(pickle.dumps(spectrum))
    assert there.digest() == spectrum.digest()
    assert there.reading == spectrum.reading
    assert there.lsf == spectrum.lsf
    assert not there.flux.flags.writeable


def test_importing_the_room_imports_no_astropy():
    code = "import sys, fathomline.spectra; print([m for m in sys.modules if 'astropy' in m])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_repr_is_short_and_never_raises():
    assert len(repr(simple())) < 100
    assert "incomplete" in repr(object.__new__(Spectrum))


def test_line_spread_widths():
    lsf = GaussianLineSpread(5.2, 0.2)
    # astropy's own relation of width and standard deviation
    assert lsf.sigma == pytest.approx(Gaussian1D(stddev=1.0).fwhm ** -1 * 5.2, rel=1e-14)
    # R = 58 000 is c/R = 5.1688 km/s
    by_power = GaussianLineSpread.from_resolving_power(58000, 580)
    assert by_power.fwhm == pytest.approx(5.16883548, rel=1e-8)
    assert by_power.error == pytest.approx(0.0516883548, rel=1e-8)
    assert by_power.resolving_power == pytest.approx(58000)
    json.dumps(lsf.to_dict())


@pytest.mark.parametrize("bad", [0.0, -1.0, float("nan"), float("inf"), "5", True, None])
def test_line_spread_refuses(bad):
    with pytest.raises(SpectrumError, match="line-spread function"):
        GaussianLineSpread(bad)
    with pytest.raises(SpectrumError, match="line-spread function"):
        GaussianLineSpread.from_resolving_power(bad)


@pytest.mark.parametrize(
    ("header", "mark"),
    [
        ("velocity,4500,6100", ","),
        ("velocity 4500 6100", " "),
        (
            "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: velocity, datatype: float64}\n"
            "# - {name: '4500', datatype: float64}\n# - {name: '6100', datatype: float64}\n"
            'velocity "4500" "6100"',
            " ",
        ),
    ],
)
def test_line_spread_table_with_columns_named_by_wavelength(tmp_path, header, mark):
    velocity = np.linspace(-10.0, 10.0, 41)
    rows = [(v, np.exp(-(v**2) / 8.0), np.exp(-(v**2) / 18.0)) for v in velocity]
    lines = [mark.join(f"{x:.17g}" for x in row) for row in rows]
    (tmp_path / "lsf.txt").write_text("\n".join([header, *lines]))
    lsf = read_line_spread(tmp_path / "lsf.txt")
    assert lsf.wavelengths.tolist() == [4500.0, 6100.0]
    assert lsf.profile_at(6100.0)(velocity) == pytest.approx(
        np.exp(-(velocity**2) / 18.0) / np.sqrt(18.0 * np.pi), rel=2e-3
    )


def test_line_spread_refuses_negative_errors():
    with pytest.raises(SpectrumError, match="must not be negative"):
        GaussianLineSpread(5.0, -0.1)


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("Å", "Angstrom"),
        ("AA", "Angstrom"),
        ("\u212b", "Angstrom"),
        ("0.1nm", "Angstrom"),
        ("nanometer", "nm"),
        ("\u00b5m", "um"),
        ("\u03bcm", "um"),
        ("micron", "um"),
        ("M", "m"),
        ("log(Angstrom)", "log10(Angstrom)"),
        ("dex(AA)", "log10(Angstrom)"),
        ("ln(nm)", "ln(nm)"),
    ],
)
def test_spellings_of_units(text, name):
    assert str(parse_unit(text, "f")) == name


def test_guess_of_units_by_the_median():
    for values, name in (([2500.0], "Angstrom"), ([2499.0], "nm"), ([0.5], "um")):
        assert str(guess_unit(np.array(values), "f")[0]) == name
    with pytest.raises(SpectrumError, match="fits neither"):
        guess_unit(np.array([40000.0]), "f")


def test_local_level_of_noise_and_of_absorbed_windows():
    rng = np.random.default_rng(3)
    noise = 5.0 + 0.05 * rng.standard_normal(4000)
    error = np.full(4000, 0.05)
    # the error of a median of 4000 values is 1.25 σ/√4000 = 0.001; the clip adds 0.03 σ = 0.0015
    assert local_level(noise, error) == pytest.approx(5.0, abs=0.005)
    absorbed = noise.copy()
    absorbed[:1800] *= rng.uniform(0.0, 0.9, 1800)  # 45 % absorbed
    assert local_level(absorbed, error) == pytest.approx(5.0, abs=0.01)
    absorbed[5] = 1e9  # a spike
    assert local_level(absorbed, error) == pytest.approx(5.0, abs=0.01)
    assert spectrum_level(simple()) == 1.0


def test_local_level_refuses():
    with pytest.raises(SpectrumError, match="no good pixel"):
        local_level([1.0, 2.0], [1.0, -1.0], [False, True])
    with pytest.raises(SpectrumError, match="is not positive"):
        local_level([0.0, 0.0, 0.0], [1.0, 1.0, 1.0])
    with pytest.raises(SpectrumError, match="one shape"):
        local_level([0.0, 0.0, 0.0], [1.0, 1.0])
    with pytest.raises(SpectrumError, match="clip limits"):
        local_level([1.0], [1.0], below=0.0)
    with pytest.raises(SpectrumError, match="good must have the shape"):
        local_level([1.0, 1.0], [1.0, 1.0], [True])


def test_missing_specutils_is_told(monkeypatch):
    monkeypatch.setitem(sys.modules, "specutils", None)
    with pytest.raises(MissingExtraError, match=r"fathomline\[specutils\]"):
        simple().to_specutils()
    with pytest.raises(MissingExtraError, match="specutils"):
        Spectrum.from_specutils(object())


def test_specutils_round_trip():
    pytest.importorskip("specutils")
    spectrum = Spectrum.from_arrays(
        log_linear(9), np.arange(9.0), np.ones(9), good=np.arange(9) > 2
    )
    back = Spectrum.from_specutils(spectrum.to_specutils())
    assert back.digest() == spectrum.digest()
    assert back.reading.guesses
