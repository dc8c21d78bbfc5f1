"""Air and vacuum against published values; frames against astropy."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import FK5, EarthLocation, SkyCoord
from astropy.time import Time
from astropy.utils import iers
from hypothesis import given
from hypothesis import strategies as st

from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError
from fathomline.spectra import (
    AIR_FORMULAS,
    air_to_vacuum,
    barycentric_velocity,
    to_barycentric,
    vacuum_to_air,
)
from fathomline.spectra.frames import header_velocity
from fathomline.spectra.media import refractive_index

# λ_vac, λ_air by Morton (2000, ApJS 130, 403), λ_air by Ciddor (1996, Appl. Opt. 35, 1566); Å,
# evaluated from the published formulas, independently of this code (Mg II 2796 and the line
# 6057.8019 with all their digits)
AIR_TABLE = [
    (2000.0, 1999.352027, 1999.352623),
    (2796.353786, 2795.529567, 2795.529564),
    (3000.0, 2999.125549, 2999.125549),
    (4862.721, 4861.362971, 4861.362969),
    (5000.0, 4998.605522, 4998.605520),
    (6057.8019, 6056.124966, 6056.124969),
    (6564.614, 6562.801020, 6562.801026),
    (10000.0, 9997.259056, 9997.259090),
]

PARANAL = {"lon": -70.4026, "lat": -24.6252, "height": 2635.0}


@pytest.mark.parametrize(("vacuum", "morton", "ciddor"), AIR_TABLE)
def test_air_wavelengths(vacuum, morton, ciddor):
    assert vacuum_to_air(vacuum) == pytest.approx(morton, abs=1e-6)
    assert vacuum_to_air(vacuum, "ciddor1996") == pytest.approx(ciddor, abs=1e-6)
    assert air_to_vacuum(morton) == pytest.approx(vacuum, abs=1e-6)
    assert air_to_vacuum(ciddor, "ciddor1996") == pytest.approx(vacuum, abs=1e-6)


def test_published_examples():
    # examples printed in the documentation of the IDL astronomy library and of its port to R,
    # both of which use Ciddor (1996)
    assert round(float(air_to_vacuum(6056.125, "ciddor1996")), 4) == 6057.8019
    assert round(float(air_to_vacuum(4861.363, "ciddor1996")), 3) == 4862.721
    assert round(float(vacuum_to_air(2000.0, "ciddor1996")), 3) == 1999.353


@given(st.floats(2000.0, 30000.0), st.sampled_from(sorted(AIR_FORMULAS)))
def test_air_and_vacuum_are_inverse_to_machine_precision(wave, formula):
    assert air_to_vacuum(vacuum_to_air(wave, formula), formula) == pytest.approx(wave, rel=4e-16)


def test_arrays_keep_their_shape():
    wave = np.linspace(4000.0, 5000.0, 12).reshape(3, 4)
    assert vacuum_to_air(wave).shape == (3, 4)
    np.testing.assert_allclose(refractive_index(wave) * vacuum_to_air(wave), wave, rtol=1e-15)


def test_media_refuse():
    with pytest.raises(SpectrumError, match="unknown formula 'edlen'"):
        vacuum_to_air(5000.0, "edlen")
    with pytest.raises(SpectrumError, match="above 2000 Å only"):
        air_to_vacuum([500.0, 600.0])
    with pytest.raises(SpectrumError, match="must be finite"):
        air_to_vacuum([5000.0, np.nan])


def direct_velocity(sky, mjd, location):
    """Return astropy's own answer, km/s."""
    with iers.conf.set_temp("auto_download", False):
        return (
            sky.radial_velocity_correction(
                "barycentric", obstime=Time(mjd, format="mjd", scale="utc"), location=location
            )
            .to(u.km / u.s)
            .value
        )


@pytest.mark.parametrize(
    ("ra", "dec", "mjd"), [(335.028, -28.056, 55360.33), (76.0, 44.0, 52000.1)]
)
def test_barycentric_velocity_is_astropys(ra, dec, mjd):
    location = EarthLocation.from_geodetic(*PARANAL.values())
    expected = direct_velocity(SkyCoord(ra, dec, unit="deg"), mjd, location)
    assert barycentric_velocity(ra, dec, mjd, **PARANAL) == pytest.approx(expected, abs=1e-3)


def test_barycentric_velocity_of_known_exposures():
    # HE 2217-2818 observed with UVES on 2010-06-13 to 2010-06-17: corrections of +24.53 to
    # +25.77 km/s (description of the combined archival spectrum, programme 185.A-0745)
    for mjd in (55360.3, 55364.3):
        velocity = barycentric_velocity(335.027977, -28.0563, mjd, **PARANAL)
        assert 24.4 < velocity < 25.9


def test_barycentric_velocity_beyond_the_earth_orientation_tables_does_not_warn():
    assert abs(barycentric_velocity(10.0, 5.0, 66000.0, **PARANAL)) < 31.5


@pytest.mark.parametrize(
    "bad", [{"dec_deg": 91.0}, {"mjd_utc_mid": 2455360.0}, {"height": np.nan}, {"lat": 100.0}]
)
def test_barycentric_velocity_refuses(bad):
    good = {"ra_deg": 1.0, "dec_deg": 2.0, "mjd_utc_mid": 55360.0, **PARANAL}
    with pytest.raises(SpectrumError, match=r"barycentric correction: .* is not between"):
        barycentric_velocity(**{**good, **bad})


def test_shift_is_a_product():
    wave = np.array([4000.0, 8000.0])
    np.testing.assert_allclose(to_barycentric(wave, 29.9792458), wave * 1.0001, rtol=1e-15)
    # the rest frame: (1 + z)(1 + v/c), which the sum of velocities misses by z v
    v, z = 25.0, 1.0
    observed = 2382.764 * (1 + z) / (1 + v / C_KMS)
    assert to_barycentric(observed, v) / 2382.764 - 1 == pytest.approx(z, abs=1e-15)
    for bad in (np.nan, 25000.0):
        with pytest.raises(SpectrumError, match="check the unit"):
            to_barycentric(wave, bad)


LOCATION = EarthLocation.from_geodetic(*PARANAL.values())
HEADER = {
    "RA": 335.028,
    "DEC": -28.056,
    "MJD-OBS": 55360.30,
    "EXPTIME": 3600.0,
    "OBSGEO-X": LOCATION.x.to_value("m"),
    "OBSGEO-Y": LOCATION.y.to_value("m"),
    "OBSGEO-Z": LOCATION.z.to_value("m"),
}
GEODETIC = {"ESO TEL GEOLON": -70.4026, "ESO TEL GEOLAT": -24.6252, "ESO TEL GEOELEV": 2635.0}


def without(*keys, **more):
    return {key: value for key, value in {**HEADER, **more}.items() if key not in keys}


def test_header_velocity():
    middle = 55360.30 + 1800.0 / 86400.0
    expected = direct_velocity(SkyCoord(335.028, -28.056, unit="deg"), middle, LOCATION)
    site = without("OBSGEO-X") | GEODETIC
    text = without(RA="22:20:06.72", DEC="-28:03:21.6", EQUINOX=2000.0)
    end = without("EXPTIME", **{"MJD-END": 55360.30 + 3600.0 / 86400.0})
    average = without("MJD-OBS", "EXPTIME", **{"MJD-AVG": middle})
    for header in (HEADER, site, text, end, average):
        velocity, reason = header_velocity(header)
        assert velocity == pytest.approx(expected, abs=1e-3)
        assert "computed" in reason


def test_header_velocity_precesses():
    position = FK5(equinox=Time(1950.0, format="jyear"))
    old = SkyCoord(335.028, -28.056, unit="deg").transform_to(position)
    header = without(RA=old.ra.deg, DEC=old.dec.deg, EQUINOX=1950.0)
    assert header_velocity(header)[0] == pytest.approx(header_velocity(HEADER)[0], abs=1e-5)


@pytest.mark.parametrize(
    ("header", "message"),
    [
        (without("RA"), "RA and DEC"),
        (without(DEC="south"), "RA and DEC"),
        (without("MJD-OBS"), "MJD-OBS"),
        (without("EXPTIME"), "EXPTIME"),
        (without("OBSGEO-Y"), "site"),
        (without(TIMESYS="TAI"), "UTC"),
        (without(**{"MJD-END": 55362.0}), "stack of exposures"),
        (without(DEC=100.0), "make no sense"),
    ],
)
def test_header_velocity_says_what_is_missing(header, message):
    velocity, reason = header_velocity(header)
    assert velocity is None
    assert message in reason
