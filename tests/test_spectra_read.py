"""Round trips: astropy writes, `read_spectrum` reads. Truth is what was written."""

from __future__ import annotations

import gzip
import hashlib
import json

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import EarthLocation
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS

from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.spectra import (
    GaussianLineSpread,
    barycentric_velocity,
    read_spectrum,
    vacuum_to_air,
)

N = 60
WAVE = 4000.0 * np.exp(np.arange(N) * 2.5 / C_KMS)
RNG = np.random.default_rng(5)
FLUX = 1.0 + 0.1 * RNG.standard_normal(N)
ERROR = RNG.uniform(0.05, 0.1, N)
CONT = RNG.uniform(1.0, 1.2, N)
STATED = {"SPECSYS": "BARYCENT", "VACUUM": True}


def table(wave=WAVE, unit="Angstrom", names=("WAVE", "FLUX", "ERR", "CONT"), **more):
    result = Table([wave, FLUX, ERROR, CONT], names=names)
    if unit:
        result[names[0]].unit = unit
    for name, values in more.items():
        result[name] = values
    return result


def write_table(path, data, **header):
    hdu = fits.BinTableHDU(data)
    hdu.header.update({**STATED, **header})
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path)
    return path


def check(spectrum, wave=WAVE, rtol=1e-14, continuum=True):
    np.testing.assert_allclose(spectrum.wavelength, wave, rtol=rtol)
    np.testing.assert_allclose(spectrum.flux, FLUX, rtol=rtol)
    np.testing.assert_allclose(spectrum.error, ERROR, rtol=rtol)
    if continuum:
        np.testing.assert_allclose(spectrum.continuum, CONT, rtol=rtol)
    else:
        assert spectrum.continuum is None
    for key in ("wavelength", "flux", "error"):
        assert getattr(spectrum, key).dtype == np.dtype("=f8")
    json.dumps(spectrum.reading.to_dict())
    assert spectrum.reading.pixels == N


def test_fits_table_one_row_per_pixel(tmp_path):
    path = write_table(tmp_path / "quasar.fits", table())
    lsf = GaussianLineSpread(5.0)
    spectrum = read_spectrum(path, lsf=lsf)
    check(spectrum)
    reading = spectrum.reading
    assert spectrum.name == "quasar"
    assert spectrum.lsf is lsf
    assert reading.file == str(path)
    assert reading.file_digest == hashlib.sha256(path.read_bytes()).hexdigest()
    assert reading.format == "FITS table, one row per pixel"
    assert reading.columns["error"] == "ERR"
    assert (reading.medium, reading.medium_source) == ("vacuum", "VACUUM")
    assert (reading.frame, reading.frame_source) == ("barycentric", "SPECSYS")
    assert reading.unit_source == "file"
    assert reading.guesses == reading.warnings == reading.steps == ()


def test_gzipped_fits_under_any_name(tmp_path):
    path = write_table(tmp_path / "a.fits", table())
    packed = tmp_path / "a.dat"
    packed.write_bytes(gzip.compress(path.read_bytes()))
    check(read_spectrum(packed))


@pytest.mark.parametrize("unit", ["Angstrom", "nm", "um", "m", "0.1 nm"])
def test_units_of_the_file_convert_as_in_astropy(tmp_path, unit):
    # "0.1 nm" is a spelling that the ESO products use; astropy normalises it when it writes
    wave = (WAVE * u.AA).to_value("nm") * 10 if unit == "0.1 nm" else (WAVE * u.AA).to_value(unit)
    hdu = fits.BinTableHDU(table(wave, None))
    hdu.header.update({**STATED, "TUNIT1": unit})
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(tmp_path / "a.fits")
    check(read_spectrum(tmp_path / "a.fits"))


@pytest.mark.parametrize(("unit", "scale"), [("Angstrom", 1.0), ("nm", 0.1), ("um", 1e-4)])
def test_missing_units_come_from_the_argument_or_the_guess(tmp_path, unit, scale):
    path = write_table(tmp_path / "a.fits", table(WAVE * scale, None))
    by_argument = read_spectrum(path, unit=unit)
    check(by_argument)
    assert by_argument.reading.unit_source == "argument"
    assert by_argument.reading.guesses == ()
    guessed = read_spectrum(path)
    check(guessed)
    assert guessed.reading.unit_source == "guess"
    assert any(f"{unit} was assumed" in guess for guess in guessed.reading.guesses)


def test_unit_argument_equal_to_the_files_is_accepted(tmp_path):
    path = write_table(tmp_path / "a.fits", table())
    check(read_spectrum(path, unit="Å"))


def test_arrays_in_one_row_with_labels(tmp_path):
    # the shape and the labels of the ESO science data products: secondary arrays are marked eso:
    columns = [
        fits.Column("WAVE", f"{N}D", unit="nm", array=[WAVE / 10]),
        fits.Column("COUNTS_RAW", f"{N}D", array=[FLUX * 7]),
        fits.Column("BGSUB", f"{N}D", array=[FLUX]),
        fits.Column("NOISE", f"{N}E", array=[ERROR]),
        fits.Column("QUAL", f"{N}J", array=[np.zeros(N)]),
    ]
    hdu = fits.BinTableHDU.from_columns(columns)
    hdu.header.update(
        {
            "SPECSYS": "TOPOCENT",
            "TUTYP1": "spec:Data.SpectralAxis.Value",
            "TUTYP2": "eso:Data.FluxAxis.Value",
            "TUTYP3": "spec:Data.FluxAxis.Value",
            "TUTYP4": "spec:Data.FluxAxis.Accuracy.StatError",
            "TUCD1": "em.wl;obs.atmos",
        }
    )
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(tmp_path / "a.fits")
    spectrum = read_spectrum(tmp_path / "a.fits", velocity=0.0, medium="vacuum")
    check(spectrum, continuum=False, rtol=1e-6)
    assert spectrum.reading.columns == {"wavelength": "WAVE", "flux": "BGSUB", "error": "NOISE"}
    assert spectrum.reading.format == "FITS table, arrays in one row"
    assert any("QUAL was not used" in text for text in spectrum.reading.warnings)
    assert any("air wavelengths (TUCD1)" in text for text in spectrum.reading.warnings)
    assert read_spectrum(tmp_path / "a.fits", velocity=0.0).reading.medium == "air"


def test_columns_named_by_the_user_override(tmp_path):
    path = write_table(tmp_path / "a.fits", table(raw=FLUX * 3, noise=ERROR * 3))
    spectrum = read_spectrum(path, columns={"flux": "RAW", "error": "noise"})
    np.testing.assert_allclose(spectrum.flux, FLUX * 3)
    np.testing.assert_allclose(spectrum.error, ERROR * 3)
    assert spectrum.reading.columns["flux"] == "raw"
    by_position = read_spectrum(path, columns={"flux": 5, "error": "6"})
    assert by_position.digest() == spectrum.digest()


def test_two_possible_columns_are_a_recorded_guess(tmp_path):
    path = write_table(tmp_path / "a.fits", table(sigma=ERROR * 2))
    spectrum = read_spectrum(path)
    check(spectrum)
    assert any("ERR was taken as the error; sigma" in text for text in spectrum.reading.guesses)


@pytest.mark.parametrize(
    ("name", "values"),
    [
        ("IVAR", ERROR**-2.0),
        ("inverse-variance", ERROR**-2.0),
        ("variance", ERROR**2),
        ("Flux_Err", ERROR),
    ],
)
def test_kinds_of_errors(tmp_path, name, values):
    data = Table([WAVE, FLUX, values, CONT], names=["lambda", "Flux", name, "continuum"])
    path = write_table(tmp_path / "a.fits", data)
    check(read_spectrum(path, unit="Angstrom"))


def test_inverse_variance_of_zero_is_no_information(tmp_path):
    ivar = ERROR**-2.0
    ivar[[3, 4, 5]] = [0.0, -0.0, -2.0]
    data = Table([WAVE, FLUX, ivar], names=["wave", "flux", "ivar"])
    spectrum = read_spectrum(write_table(tmp_path / "a.fits", data))
    assert spectrum.reading.masked == {"error not finite": 2, "error not positive": 1}
    np.testing.assert_array_equal(np.flatnonzero(~spectrum.good), [3, 4, 5])


def test_masks_follow_the_errors(tmp_path):
    error = ERROR.copy()
    error[[0, 1, 2, 3]] = [-1.0, 0.0, np.nan, np.inf]
    data = Table([WAVE, FLUX, error], names=["wave", "flux", "err"])
    spectrum = read_spectrum(write_table(tmp_path / "a.fits", data))
    np.testing.assert_array_equal(np.flatnonzero(~spectrum.good), [0, 1, 2, 3])
    assert spectrum.reading.masked == {"error not finite": 2, "error not positive": 2}


def test_logarithmic_column(tmp_path):
    data = Table([np.log10(WAVE), FLUX, ERROR], names=["loglam", "flux", "err"])
    spectrum = read_spectrum(write_table(tmp_path / "a.fits", data))
    check(spectrum, continuum=False, rtol=1e-13)
    assert any("log10" in text for text in spectrum.reading.guesses)


@pytest.mark.parametrize("integers", [np.int16, np.int32])
def test_integer_columns(tmp_path, integers):
    data = Table([WAVE, np.arange(N).astype(integers), ERROR], names=["wave", "flux", "err"])
    spectrum = read_spectrum(write_table(tmp_path / "a.fits", data))
    np.testing.assert_array_equal(spectrum.flux, np.arange(N))


def image(path, header, wave_names=("ERR", "CONT"), values=(ERROR, CONT), shape=None):
    flux = FLUX if shape is None else FLUX.reshape(shape)
    primary = fits.PrimaryHDU(flux)
    primary.header.update(header)
    extra = [fits.ImageHDU(v, name=n) for n, v in zip(wave_names, values, strict=True)]
    fits.HDUList([primary, *extra]).writeto(path)
    return path


def test_linear_image(tmp_path):
    header = {"CTYPE1": "WAVE", "CUNIT1": "nm", "CRVAL1": 400.0, "CRPIX1": 3.0, "CDELT1": 0.001}
    path = image(tmp_path / "a.fits", {**header, **STATED})
    # astropy's WCS gives the wavelengths in m
    truth = WCS(header).pixel_to_world_values(np.arange(N)) * 1e10
    check(read_spectrum(path), wave=truth, rtol=1e-13)
    assert read_spectrum(path).reading.format == "FITS image, linear wavelength scale"


def test_log_image_of_the_standard(tmp_path):
    header = {"CTYPE1": "WAVE-LOG", "CUNIT1": "Angstrom", "CRVAL1": 4100.0, "CRPIX1": 20.0}
    header["CDELT1"] = 0.03
    path = image(tmp_path / "a.fits", {**header, **STATED}, shape=(1, N))
    truth = WCS(header, naxis=1).pixel_to_world_values(np.arange(N)) * 1e10
    check(read_spectrum(path), wave=truth, rtol=1e-13)


@pytest.mark.parametrize("key", ["CDELT1", "CD1_1"])
def test_log_image_with_the_flag(tmp_path, key):
    step = 2.5 / C_KMS / np.log(10)
    header = {
        "CTYPE1": "LINEAR",
        "CRVAL1": np.log10(4000.0),
        "CRPIX1": 1.0,
        key: step,
        "DC-FLAG": 1,
    }
    path = image(tmp_path / "a.fits", {**header, **STATED})
    spectrum = read_spectrum(path)
    check(spectrum, rtol=1e-12)
    assert any("log10" in text for text in spectrum.reading.guesses)
    assert not read_spectrum(
        image(tmp_path / "b.fits", {**header, **STATED, "CUNIT1": "Angstrom"})
    ).reading.guesses


def test_air_image_by_ctype(tmp_path):
    header = {"CTYPE1": "AWAV", "CUNIT1": "Angstrom", "CRVAL1": 4000.0, "CDELT1": 0.05}
    path = image(tmp_path / "a.fits", {**header, "SPECSYS": "BARYCENT"})
    spectrum = read_spectrum(path)
    np.testing.assert_allclose(
        vacuum_to_air(spectrum.wavelength), 4000.0 + 0.05 * np.arange(N), rtol=1e-15
    )
    assert (spectrum.reading.medium, spectrum.reading.medium_source) == ("air", "CTYPE1")


def test_image_extensions_of_other_kinds_and_names(tmp_path):
    header = {"CTYPE1": "WAVE", "CUNIT1": "Angstrom", "CRVAL1": 4000.0, "CDELT1": 0.05, **STATED}
    path = image(tmp_path / "a.fits", header, ("IVAR", "CONTINUUM"), (ERROR**-2.0, CONT))
    check(read_spectrum(path), wave=4000.0 + 0.05 * np.arange(N))
    path = image(tmp_path / "b.fits", header, ("NOISE", "LEVEL"), (ERROR, CONT))
    named = read_spectrum(path, columns={"error": "noise", "continuum": "LEVEL"})
    check(named, wave=4000.0 + 0.05 * np.arange(N))


def test_image_with_errors_and_continuum_in_further_files(tmp_path):
    header = {"CTYPE1": "WAVE", "CUNIT1": "Angstrom", "CRVAL1": 4000.0, "CDELT1": 0.05}
    truth = 4000.0 + 0.05 * np.arange(N)
    main = image(tmp_path / "a.fits", {**header, **STATED}, (), ())
    primary = fits.PrimaryHDU(ERROR)
    primary.header.update(header)
    primary.writeto(tmp_path / "error.fits")
    np.savetxt(tmp_path / "cont.txt", CONT)
    spectrum = read_spectrum(
        main, error_file=tmp_path / "error.fits", continuum_file=tmp_path / "cont.txt"
    )
    check(spectrum, wave=truth)
    digest = hashlib.sha256((tmp_path / "error.fits").read_bytes()).hexdigest()
    assert spectrum.reading.companions["error"]["digest"] == digest
    # as text of two columns, and as a table with an inverse variance
    np.savetxt(tmp_path / "two.txt", np.transpose([truth, ERROR]), fmt="%.17g")
    check(read_spectrum(main, error_file=tmp_path / "two.txt"), wave=truth, continuum=False)
    Table([truth, ERROR**-2.0], names=["wave", "ivar"]).write(tmp_path / "ivar.fits")
    check(read_spectrum(main, error_file=tmp_path / "ivar.fits"), wave=truth, continuum=False)
    Table([ERROR], names=["sigma"]).write(tmp_path / "s.csv", format="ascii.csv")
    check(read_spectrum(main, error_file=tmp_path / "s.csv"), wave=truth, continuum=False)


@pytest.mark.parametrize(
    ("form", "suffix"),
    [
        ("ascii.csv", "csv"),
        ("ascii.ecsv", "ecsv"),
        ("ascii.commented_header", "dat"),
        ("ascii.no_header", "txt"),
        ("ascii.basic", "txt"),
        ("ascii.tab", "tab"),
    ],
)
def test_text_formats(tmp_path, form, suffix):
    path = tmp_path / f"a.{suffix}"
    data = table(unit="Angstrom" if form == "ascii.ecsv" else None)
    data.meta = {"SPECSYS": "BARYCENT", "VACUUM": True} if form == "ascii.ecsv" else {}
    data.write(path, format=form)
    spectrum = read_spectrum(path)
    check(spectrum)
    text = " ".join(spectrum.reading.guesses)
    if form == "ascii.ecsv":
        assert text == ""
        assert spectrum.reading.format == "ECSV"
    else:
        assert "no wavelength unit" in text
        assert "state the medium" in text
        assert "state the frame" in text
    assert ("no column names" in text) == (form == "ascii.no_header")


def test_ecsv_with_commas_masked_values_and_text_columns(tmp_path):
    data = table(WAVE / 10, "nm", note=["two words"] * N)
    data = Table(data, masked=True)
    data["ERR"].mask[4] = True
    data.write(tmp_path / "a.ecsv", format="ascii.ecsv", delimiter=",")
    data.write(tmp_path / "b.ecsv", format="ascii.ecsv")
    for name in ("a.ecsv", "b.ecsv"):
        spectrum = read_spectrum(tmp_path / name)
        np.testing.assert_allclose(spectrum.wavelength, WAVE, rtol=1e-14)
        np.testing.assert_array_equal(np.flatnonzero(~spectrum.good), [4])


def test_text_comments_may_state_medium_and_frame(tmp_path):
    lines = ["# AIRORVAC = air", "# SPECSYS: BARYCENT", "wave [nm]; flux; err"]
    lines += [f"{w / 10!r}; {f!r}; {e!r}" for w, f, e in zip(WAVE, FLUX, ERROR, strict=True)]
    (tmp_path / "a.csv").write_text("\n".join(lines).replace("np.float64(", "").replace(")", ""))
    spectrum = read_spectrum(tmp_path / "a.csv")
    np.testing.assert_allclose(vacuum_to_air(spectrum.wavelength), WAVE, rtol=1e-14)
    assert spectrum.reading.guesses == ()
    assert spectrum.reading.units["wavelength"] == "nm"


def test_fortran_numbers_and_empty_fields(tmp_path):
    (tmp_path / "a.csv").write_text("wave,flux,err\n4.0D+03,1,1\n4001.,2.5d0,\n4002,1,nan\n")
    spectrum = read_spectrum(tmp_path / "a.csv")
    np.testing.assert_array_equal(spectrum.wavelength, [4000.0, 4001.0, 4002.0])
    np.testing.assert_array_equal(spectrum.flux, [1.0, 2.5, 1.0])
    np.testing.assert_array_equal(spectrum.good, [True, False, False])


def test_air_then_barycentric(tmp_path):
    air = vacuum_to_air(WAVE)
    path = write_table(tmp_path / "a.fits", table(air), SPECSYS="TOPOCENT", VACUUM=False)
    spectrum = read_spectrum(path, velocity=-23.4)
    np.testing.assert_allclose(spectrum.wavelength, WAVE * (1 - 23.4 / C_KMS), rtol=1e-15)
    reading = spectrum.reading
    assert reading.barycentric_velocity == -23.4
    assert (reading.medium, reading.frame) == ("air", "topocentric")
    assert ["vacuum" in reading.steps[0], "-23.4000 km/s" in reading.steps[1]] == [True, True]


def test_topocentric_velocity_from_the_header(tmp_path):
    site = EarthLocation.from_geodetic(-70.4026, -24.6252, 2635.0)
    header = {"RA": 335.028, "DEC": -28.056, "MJD-OBS": 55360.3, "EXPTIME": 3600.0}
    for axis in "XYZ":
        header[f"OBSGEO-{axis}"] = getattr(site, axis.lower()).to_value("m")
    path = write_table(tmp_path / "a.fits", table(), SPECSYS="TOPOCENT", **header)
    velocity = barycentric_velocity(
        335.028, -28.056, 55360.3 + 1800 / 86400, -70.4026, -24.6252, 2635.0
    )
    spectrum = read_spectrum(path)
    assert spectrum.reading.barycentric_velocity == pytest.approx(velocity, abs=1e-3)
    np.testing.assert_allclose(spectrum.wavelength, WAVE * (1 + velocity / C_KMS), rtol=1e-12)


def test_arguments_override_the_header_with_a_warning(tmp_path):
    path = write_table(tmp_path / "a.fits", table())
    spectrum = read_spectrum(path, medium="air", frame="topocentric", velocity=1.0)
    assert spectrum.reading.medium_source == spectrum.reading.frame_source == "argument"
    text = " ".join(spectrum.reading.warnings)
    assert "the file says vacuum" in text
    assert "the file says barycentric" in text


def test_heliocentric_is_used_with_a_warning(tmp_path):
    spectrum = read_spectrum(write_table(tmp_path / "a.fits", table(), SPECSYS="HELIOCEN"))
    check(spectrum)
    assert any("heliocentric" in text for text in spectrum.reading.warnings)


def test_descending_file_is_reversed(tmp_path):
    data = table()[::-1]
    spectrum = read_spectrum(write_table(tmp_path / "a.fits", data))
    check(spectrum)
    assert any("reversed" in step for step in spectrum.reading.steps)


def test_warnings_of_astropy_go_into_the_reading(tmp_path):
    path = write_table(tmp_path / "a.fits", table())
    data = path.read_bytes()
    # a text value without its closing quote is against the standard
    bad = data.replace(b"VACUUM  =                    T", b"VACUUM  = 'unclosed".ljust(30))
    assert bad != data
    path.write_bytes(bad)
    spectrum = read_spectrum(path, medium="vacuum")
    np.testing.assert_allclose(spectrum.flux, FLUX)
    assert any("VACUUM" in text for text in spectrum.reading.warnings)


def test_velocity_of_a_barycentric_file_is_refused(tmp_path):
    path = write_table(tmp_path / "a.fits", table())
    with pytest.raises(SpectrumError, match="barycentric already"):
        read_spectrum(path, velocity=20.0)
