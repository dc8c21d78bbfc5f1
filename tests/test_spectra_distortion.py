"""Basis functions against closed forms, and tables of shifts good and bad."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.table import Table
from scipy import signal

from fathomline.errors import SpectrumError
from fathomline.spectra import (
    order_edges_from_spacing,
    read_distortion_table,
    sawtooth_basis,
    shift_basis,
    slope_basis,
    table_basis,
)

WAVE = np.array([4900.0, 5000.0, 5500.0, 7000.0])


def test_shift_and_slope():
    np.testing.assert_array_equal(shift_basis(WAVE), [1.0, 1.0, 1.0, 1.0])
    np.testing.assert_allclose(slope_basis(WAVE, 5500.0), [-0.6, -0.5, 0.0, 1.5], rtol=1e-15)


def test_sawtooth_is_that_of_scipy():
    # scipy.signal.sawtooth rises from -1 to 1 over each 2π
    wave = np.random.default_rng(1).uniform(4000.0, 7000.0, 500)
    edges = order_edges_from_spacing(5000.0, 6000.0, 5230.0, 70.0)
    expected = signal.sawtooth(2.0 * np.pi * (wave - 5230.0) / 70.0)
    np.testing.assert_allclose(sawtooth_basis(wave, edges), expected, atol=1e-9)


def test_sawtooth_of_unequal_orders_and_beyond_them():
    edges = [5000.0, 5050.0, 5110.0]
    wave = [5000.0, 5025.0, 5049.999999, 5050.0, 5080.0, 5110.0, 5140.0, 4975.0, 4950.0]
    expected = [-1.0, 0.0, 1.0, -1.0, 0.0, -1.0, 0.0, 0.0, -1.0]
    np.testing.assert_allclose(sawtooth_basis(wave, edges), expected, atol=1e-6)


def test_order_edges_cover_the_range_and_hold_the_pivot():
    edges = order_edges_from_spacing(5003.0, 5297.0, 5500.0, 50.0)
    np.testing.assert_allclose(edges, [5000, 5050, 5100, 5150, 5200, 5250, 5300])
    assert order_edges_from_spacing(5001.0, 5002.0, 5000.0, 50.0).size == 2
    assert order_edges_from_spacing(5000.0, 5050.0, 5000.0, 50.0).tolist() == [5000.0, 5050.0]


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: sawtooth_basis(WAVE, [5000.0]), "at least two"),
        (lambda: sawtooth_basis(WAVE, [5000.0, np.nan]), "finite"),
        (lambda: sawtooth_basis(WAVE, [5000.0, 5100.0, 5100.0]), "must increase"),
        (lambda: order_edges_from_spacing(5000.0, 6000.0, 5500.0, 0.0), "positive spacing"),
        (lambda: order_edges_from_spacing(6000.0, 5000.0, 5500.0, 50.0), "empty"),
        (lambda: order_edges_from_spacing(5000.0, 6000.0, 5500.0, 0.05), "is the unit Å"),
        (lambda: table_basis(WAVE, [], []), "two columns of one length"),
        (lambda: table_basis(WAVE, [1.0, 2.0], [1.0, np.nan]), "finite"),
        (lambda: table_basis(WAVE, [2.0, 2.0], [1.0, 1.0]), "increase strictly"),
    ],
)
def test_bad_arguments(call, message):
    with pytest.raises(SpectrumError, match=message):
        call()


def test_table_is_linear_and_constant_beyond():
    found = table_basis([4000.0, 5000.0, 5100.0, 5150.0, 9000.0], [5000.0, 5200.0], [10.0, 30.0])
    np.testing.assert_allclose(found, [10.0, 10.0, 20.0, 25.0, 30.0])
    np.testing.assert_allclose(table_basis(WAVE, [5000.0], [7.0]), 7.0)


def test_read_ecsv_with_units(tmp_path):
    table = Table()
    table["wavelength"] = [0.6, 0.5] * u.um
    table["velocity"] = [0.2, -0.1] * u.km / u.s
    table["error"] = [20.0, 30.0] * u.m / u.s
    table.write(tmp_path / "t.ecsv", format="ascii.ecsv")
    wave, velocity, error = read_distortion_table(tmp_path / "t.ecsv")
    np.testing.assert_allclose(wave, [5000.0, 6000.0])  # sorted
    np.testing.assert_allclose(velocity, [-100.0, 200.0])
    np.testing.assert_allclose(error, [30.0, 20.0])


@pytest.mark.parametrize(
    ("text", "factor"),
    [
        ("wavelength,velocity,error\n500,1,2\n600,3,4\n", 1.0),  # the unit follows from the size
        ("wavelength (nm),velocity (km/s),error\n500,1,2\n600,3,4\n", 1e3),
        ("# wavelength [Angstrom] velocity [m/s] error\n5000 1 2\n6000 3 4\n", 1.0),
        ("5000 1 2\n6000 3 4\n", 1.0),
    ],
)
def test_read_text(tmp_path, text, factor):
    path = tmp_path / "t.txt"
    path.write_text(text)
    wave, velocity, error = read_distortion_table(path)
    np.testing.assert_allclose(wave, [5000.0, 6000.0])
    np.testing.assert_allclose(velocity, [factor, 3 * factor])
    np.testing.assert_allclose(error, [2 * factor, 4 * factor])


def test_read_without_errors(tmp_path):
    (tmp_path / "t.csv").write_text("wavelength,velocity\n5000,1\n")
    assert read_distortion_table(tmp_path / "t.csv")[2] is None


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("wavelength,speed\n5000,1\n", "no column 'velocity'"),
        ("wavelength,velocity\n5000,1\n5100,x\n", r"t\.csv, line 3: expected a number"),
        ("wavelength,velocity\n5000,nan\n", r"line 2: the velocity must be a finite number"),
        ("wavelength,velocity,error\n5000,1,0\n", r"line 2: the error must be a positive"),
        ("wavelength,velocity\n-5000,1\n", r"line 2: the wavelength must be a positive"),
        ("wavelength,velocity\n5000\n5100,1\n", r"line 2: expected 2 columns, found 1"),
        ("wavelength,velocity (furlong)\n5000,1\n", "unknown unit of velocity"),
        ("wavelength (parsec),velocity\n5000,1\n", "unknown wavelength unit"),
        ("wavelength,velocity\n", "no rows"),
        ("5000 1 2 3\n", "give the columns names"),
        ("5\n", "give the columns names"),
    ],
)
def test_bad_tables(tmp_path, text, message):
    path = tmp_path / "t.csv"
    path.write_text(text)
    with pytest.raises(SpectrumError, match=message) as caught:
        read_distortion_table(path)
    assert "t.csv" in str(caught.value)


def test_missing_table(tmp_path):
    with pytest.raises(SpectrumError, match="no such file"):
        read_distortion_table(tmp_path / "absent.csv")
