"""A zoo of bad files: each gives one clear message with the file, the fault and the cure."""

from __future__ import annotations

import contextlib
import gzip

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from fathomline.errors import SpectrumError
from fathomline.spectra import read_spectrum

GOOD = "4000 1 0.1\n4001 1 0.1\n4002 1 0.1\n"
WAVE = np.array([4000.0, 4001.0, 4002.0])


def fits_bytes(tmp_path, **columns):
    path = tmp_path / "source.fits"
    hdu = fits.BinTableHDU(Table(columns))
    hdu.header["SPECSYS"] = "BARYCENT"
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path, overwrite=True)
    return path.read_bytes()


TEXT = {
    "empty": ("", "the file is empty"),
    "blank": ("  \n\n", "the file is empty"),
    "comments only": ("# wave flux err\n", "no rows of data"),
    "header only": ("wave,flux,err\n", "column names but no rows"),
    "no errors": ("wave flux\n4000 1\n4001 1\n", r'no error column .*: wave, flux\. .*error = "'),
    "two columns": ("4000 1\n4001 1\n", "2 columns without names; .*One-sigma errors are needed"),
    "seven columns": ("1 2 3 4 5 6 7\n2 3 4 5 6 7 8\n", "7 columns without names; say which"),
    "no wavelength": ("pixel flux err\n1 1 1\n2 1 1\n", "no wavelength column was recognised"),
    "not a number": ("wave flux err\n4000 1 1\n4001 x 1\n", r"line 3: .*column 'flux', found 'x'"),
    "not a number, no names": (GOOD + "4003 1 bad\n", "line 4: .*column 3, found 'bad'"),
    "ragged": ("4000 1 0.1\n4001 1\n4002 1 0.1\n", "line 2: expected 3 columns, found 2"),
    "nan wavelength": ("4000 1 1\nnan 1 1\n4002 1 1\n", "wavelength of row 2 is nan"),
    "repeated": ("4000 1 1\n4001 1 1\n4001 1 1\n4002 1 1\n", "row 3 repeats"),
    "unsorted": ("4000 1 1\n4002 1 1\n4001 1 1\n4003 1 1\n", "row 3 is out of order"),
    "negative": ("-4000 1 1\n4001 1 1\n4002 1 1\n", "row 1 is -4000.0, but must be positive"),
    "one pixel": ("4000 1 1\n", "at least two pixels"),
    "unit not to be guessed": ("1 1 1\n0.01 1 1\n40 1 1\n5e6 1 1\n", "fits neither"),
    "unknown unit": ("wave [furlong],flux,err\n1,1,1\n2,1,1\n", "unit 'furlong'; expected one of"),
    "frame": ("# SPECSYS = LSRK\n" + GOOD, "SPECSYS = 'LSRK' is not supported"),
    "topocentric": ("# SPECSYS = TOPOCENT\n" + GOOD, "topocentric and the header lacks RA.*berv"),
    "bad ecsv": ("# %ECSV 1.0\n# ---\n# datatype: [\na b c\n1 2 3\n", "ECSV header"),
    "air in the ultraviolet": ("# AIRORVAC = air\n3000 1 1\n1200 1 1\n900 1 1\n", "above 2000"),
}


@pytest.mark.parametrize("name", sorted(TEXT))
def test_bad_text(tmp_path, name):
    content, message = TEXT[name]
    path = tmp_path / "bad.txt"
    path.write_text(content)
    options = {"unit": "Angstrom"} if name in ("one pixel", "air in the ultraviolet") else {}
    with pytest.raises(SpectrumError, match=message) as caught:
        read_spectrum(path, **options)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_file_and_directory(tmp_path):
    with pytest.raises(SpectrumError, match="no such file"):
        read_spectrum(tmp_path / "none.fits")
    with pytest.raises(SpectrumError, match="is a directory"):
        read_spectrum(tmp_path)


def test_binary_rubbish(tmp_path):
    path = tmp_path / "a.dat"
    path.write_bytes(bytes(range(128, 256)) * 10)
    with pytest.raises(SpectrumError, match="neither FITS nor UTF-8 text"):
        read_spectrum(path)
    path.write_bytes(b"\x1f\x8b" + bytes(range(256)))
    with pytest.raises(SpectrumError, match="gzip compression is damaged"):
        read_spectrum(path)
    path.write_bytes(gzip.compress(GOOD.encode())[:-12])
    with pytest.raises(SpectrumError, match="neither FITS nor UTF-8 text"):
        read_spectrum(path)


@pytest.mark.parametrize("fraction", [0.1, 0.3, 0.5, 0.7, 0.9])
def test_truncated_fits(tmp_path, fraction):
    n = 2000
    wave = 4000.0 + 0.01 * np.arange(n)
    data = fits_bytes(tmp_path, wave=wave, flux=np.ones(n), err=np.ones(n))
    path = tmp_path / "a.fits"
    path.write_bytes(data[: int(fraction * len(data))])
    with pytest.raises(SpectrumError, match="truncated"):
        read_spectrum(path)
    path.write_bytes(gzip.compress(data)[: int(fraction * 2000)])
    with pytest.raises(SpectrumError, match=r"truncated|damaged"):
        read_spectrum(path)


def test_fits_header_only(tmp_path):
    path = tmp_path / "a.fits"
    path.write_bytes(b"SIMPLE  = rubbish")
    with pytest.raises(SpectrumError, match=r"cannot be read|no data"):
        read_spectrum(path)
    fits.PrimaryHDU().writeto(path, overwrite=True)
    with pytest.raises(SpectrumError, match="holds no data"):
        read_spectrum(path)


@pytest.mark.parametrize(
    ("columns", "message"),
    [
        ({"wave": [], "flux": [], "err": []}, "zero rows"),
        ({"wave": WAVE, "flux": WAVE}, r'no error column .*: wave, flux\. .*error = "\.\.\."'),
        ({"wave": WAVE, "flux": ["a", "b", "c"], "err": WAVE}, "expected numbers in column flux"),
        ({"wave": [WAVE] * 2, "flux": [WAVE] * 2, "err": [WAVE] * 2}, "arrays in each of 2 rows"),
        ({"wave": [4000.0, np.nan, 4002.0], "flux": WAVE, "err": WAVE}, "row 2 is nan"),
        ({"a": WAVE, "b": WAVE}, "no wavelength column was recognised; the columns are: a, b"),
    ],
)
def test_bad_fits_tables(tmp_path, columns, message):
    path = tmp_path / "a.fits"
    path.write_bytes(fits_bytes(tmp_path, **columns))
    with pytest.raises(SpectrumError, match=message):
        read_spectrum(path)


def write_image(path, values=WAVE, error=True, **header):
    primary = fits.PrimaryHDU(np.asarray(values))
    primary.header.update({"CRVAL1": 4000.0, "CDELT1": 1.0, "SPECSYS": "BARYCENT", **header})
    extra = [fits.ImageHDU(np.ones(3), name="ERR")] if error else []
    fits.HDUList([primary, *extra]).writeto(path, overwrite=True)
    return path


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"error": False}, "no error extension was recognised; .*: PRIMARY"),
        ({"values": np.ones((4, 5))}, r"shape \(4, 5\); expected one axis"),
        ({"values": np.ones(4)}, "error has 3 pixels, but the wavelengths have 4"),
        ({"CTYPE1": "FREQ"}, "'FREQ' is no wavelength axis"),
        ({"CTYPE1": "WAVE-TAB"}, "'WAVE-TAB' is not supported"),
        ({"CTYPE1": "WAVE-LOG", "CRVAL1": 0.0}, "CRVAL1 = 0 is impossible"),
        ({"CDELT1": 0.0}, "wavelength step .* is zero"),
        ({"CRVAL1": "blue"}, "no wavelength scale: expected a number in CRVAL1, found 'blue'"),
        ({"CUNIT1": "Hz"}, "unknown wavelength unit 'Hz'"),
    ],
)
def test_bad_images(tmp_path, options, message):
    path = write_image(tmp_path / "a.fits", **options)
    with pytest.raises(SpectrumError, match=message):
        read_spectrum(path)


def test_bad_columns_of_images(tmp_path):
    path = write_image(tmp_path / "a.fits")
    with pytest.raises(SpectrumError, match="wavelengths come from its header"):
        read_spectrum(path, columns={"wavelength": "WAVE"})
    with pytest.raises(SpectrumError, match=r"no image extension 'ERRR' .*did you mean 'ERR'"):
        read_spectrum(path, columns={"error": "ERRR"})


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"columns": {"err": "ERR"}}, "columns: unknown key 'err'.*did you mean 'error'"),
        ({"columns": {"error": "EROR"}}, "no column 'EROR' for error .*did you mean 'err'"),
        ({"columns": {"error": 0.5}}, "error must be the name or the position"),
        ({"columns": {"error": "9"}}, "no column '9' for error"),
        ({"unit": "nm"}, "contradicts unit"),
        ({"unit": "parsec"}, "unknown wavelength unit 'parsec'"),
        ({"medium": "water"}, "medium must be one of vacuum, air, found 'water'"),
        ({"frame": "galactic"}, "frame must be one of barycentric, topocentric"),
        ({"frame": "topocentric", "velocity": 25000.0}, "check the unit"),
        ({"error_file": "x", "columns": {"error": "err"}}, "not both"),
        ({"error_file": "none.txt"}, "none.txt: there is no such file"),
    ],
)
def test_bad_arguments(tmp_path, options, message):
    path = tmp_path / "a.csv"
    path.write_text("wave [Angstrom],flux,err\n4000,1,1\n4001,1,1\n")
    with pytest.raises(SpectrumError, match=message):
        read_spectrum(path, **options)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("1\n1\n", "error file has 2 pixels, but the spectrum has 3"),
        ("4000 1\n4001 1\n4003 1\n", "another wavelength scale .* pixel 3 is at 4003, not at 4002"),
        ("1 2 3\n1 2 3\n1 2 3\n", "expected one column, or wavelength and error, found 3"),
        ("a b\n1 2\n1 2\n1 2\n", "no error column was recognised; the columns are: a, b"),
    ],
)
def test_bad_companions(tmp_path, content, message):
    (tmp_path / "a.txt").write_text(GOOD)
    (tmp_path / "e.txt").write_text(content)
    with pytest.raises(SpectrumError, match=message) as caught:
        read_spectrum(tmp_path / "a.txt", error_file=tmp_path / "e.txt")
    assert "e.txt" in str(caught.value)


def test_companion_without_a_fitting_image(tmp_path):
    (tmp_path / "a.txt").write_text(GOOD)
    hdus = [fits.PrimaryHDU(np.ones(3)), fits.ImageHDU(np.ones(3), name="OTHER")]
    fits.HDUList(hdus).writeto(tmp_path / "e.fits")
    with pytest.raises(SpectrumError, match=r"found the images PRIMARY, OTHER"):
        read_spectrum(tmp_path / "a.txt", error_file=tmp_path / "e.fits")


@pytest.mark.parametrize("seed", range(20))
def test_damaged_fits_never_gives_a_foreign_error(tmp_path, seed):
    rng = np.random.default_rng(seed)
    n = 200
    data = bytearray(
        fits_bytes(tmp_path, wave=4000.0 + 0.01 * np.arange(n), flux=np.ones(n), err=np.ones(n))
    )
    # overwrite cards of both headers, not the word that makes it FITS
    for at in rng.integers(10, 5760, 60):
        data[at] = rng.integers(32, 127)
    path = tmp_path / "a.fits"
    path.write_bytes(bytes(data))
    # most damage is fatal, some is harmless; anything but our own error fails the test
    with contextlib.suppress(SpectrumError):
        read_spectrum(path)
