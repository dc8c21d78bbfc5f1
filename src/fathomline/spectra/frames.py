"""From the frame of the observatory to the barycentre of the solar system.

A photon recorded by the observatory at λ_topo would be recorded at rest at the barycentre at

    λ_bary = λ_topo (1 + v/c),

with v the barycentric correction velocity of `astropy.coordinates.SkyCoord`, which holds the
relativistic terms in the sense that exactly this product applies (Wright & Eastman 2014, PASP 126,
838, their 1 + z_B). A source redshift composes as the product (1 + z)(1 + v/c): adding the
velocities instead is wrong by z v, 30 km/s at z = 1. The heliocentric frame differs by up to
15 m/s, the motion of the Sun about the barycentre.
"""

from __future__ import annotations

import math
import warnings
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from fathomline.constants import C_KMS
from fathomline.errors import SpectrumError

__all__ = [
    "FASTEST_OBSERVER",
    "barycentric_velocity",
    "header_velocity",
    "to_barycentric",
]

FASTEST_OBSERVER: float = 50.0
"""Correction velocities above this (km/s) are a mistake of unit or sign: the Earth does 30.8."""

_LONGEST_IDLE = 600.0  # s between exposures beyond which a stack has no single velocity


def to_barycentric(wavelength: ArrayLike, velocity_kms: float) -> NDArray[Any]:
    """Return λ (1 + v/c).

    Parameters
    ----------
    wavelength
        Topocentric wavelengths, any unit and shape.
    velocity_kms
        Barycentric correction velocity, km/s; positive when the observatory approaches the source.

    Raises
    ------
    SpectrumError
        If the velocity is not finite or faster than `FASTEST_OBSERVER`.

    """
    if not math.isfinite(velocity_kms) or abs(velocity_kms) > FASTEST_OBSERVER:
        raise SpectrumError(
            f"barycentric correction of {velocity_kms!r} km/s: expected a number between "
            f"-{FASTEST_OBSERVER:g} and {FASTEST_OBSERVER:g} km/s (check the unit)"
        )
    return np.asarray(wavelength, dtype=np.float64) * (1.0 + velocity_kms / C_KMS)


def _velocity(sky: Any, time: Any, location: Any) -> float:
    from astropy.utils import iers

    # Tables that come with astropy, no download: an error of 1 s in UT1 turns the site's 0.46 km/s
    # by 7e-5 rad, which is 0.03 m/s. The warnings concern that accuracy only.
    with (
        warnings.catch_warnings(),
        iers.conf.set_temp("auto_download", False),
        iers.conf.set_temp("iers_degraded_accuracy", "ignore"),
        iers.conf.set_temp("auto_max_age", None),
    ):
        warnings.simplefilter("ignore")
        correction = sky.radial_velocity_correction("barycentric", obstime=time, location=location)
        return float(correction.to_value("m/s")) / 1e3


def barycentric_velocity(
    ra_deg: float,
    dec_deg: float,
    mjd_utc_mid: float,
    lon: float,
    lat: float,
    height: float,
) -> float:
    """Return the barycentric correction velocity (km/s), to better than 1 m/s.

    Parameters
    ----------
    ra_deg, dec_deg
        Source, ICRS, degrees.
    mjd_utc_mid
        Modified Julian date (UTC) of the middle of the exposure; flux-weighted where known.
    lon, lat
        Geodetic longitude (positive east) and latitude of the observatory, degrees.
    height
        Height above the ellipsoid, m.

    Raises
    ------
    SpectrumError
        If a number is not finite or out of its range.

    """
    limits = {
        "right ascension": (ra_deg, -360.0, 360.0),
        "declination": (dec_deg, -90.0, 90.0),
        "MJD": (mjd_utc_mid, 36934.0, 88069.0),  # 1960 to 2100: UTC is not defined before
        "longitude": (lon, -360.0, 360.0),
        "latitude": (lat, -90.0, 90.0),
        "height": (height, -500.0, 1e5),
    }
    for name, (value, low, high) in limits.items():
        if not (math.isfinite(value) and low <= value <= high):
            raise SpectrumError(
                f"barycentric correction: {name} {value!r} is not between {low:g} and {high:g}"
            )
    from astropy.coordinates import EarthLocation, SkyCoord
    from astropy.time import Time

    return _velocity(
        SkyCoord(ra_deg, dec_deg, unit="deg"),
        Time(mjd_utc_mid, format="mjd", scale="utc"),
        EarthLocation.from_geodetic(lon, lat, height),
    )


def _number(header: Mapping[str, Any], *keys: str) -> float | None:
    for key in keys:
        value = header.get(key)
        if isinstance(value, int | float) and not isinstance(value, bool):
            return float(value)
    return None


def _angle(header: Mapping[str, Any], key: str, hours: bool) -> float | None:
    """Return degrees; text such as ``05:04:01.2`` is hours of right ascension, or degrees."""
    value = header.get(key)
    if isinstance(value, str):
        parts = value.replace(":", " ").split()
        try:
            numbers = [abs(float(part)) for part in parts]
        except ValueError:
            return None
        if len(numbers) == 1:
            return float(parts[0])
        if not 2 <= len(numbers) <= 3:
            return None
        size = sum(number / 60.0**i for i, number in enumerate(numbers))
        sign = -1.0 if parts[0].startswith("-") else 1.0
        return sign * size * (15.0 if hours else 1.0)
    return _number(header, key)


def _middle(header: Mapping[str, Any], missing: list[str]) -> float | None:
    """Return the MJD (UTC) of mid-exposure."""
    if str(header.get("TIMESYS", "UTC")).strip().upper() not in ("UTC", "UT"):
        missing.append("times in UTC (TIMESYS)")
        return None
    middle = _number(header, "MJD-AVG")
    if middle is not None:
        return middle
    start = _number(header, "MJD-OBS", "MJD-BEG")
    if start is None:
        missing.append("MJD-OBS")
        return None
    exposure = _number(header, "EXPTIME", "XPOSURE")
    end = _number(header, "MJD-END")
    if exposure is None and end is None:
        missing.append("EXPTIME")
        return None
    if exposure is None:
        return 0.5 * (start + end) if end is not None else None
    if end is not None and (end - start) * 86400.0 - exposure > _LONGEST_IDLE:
        missing.append(
            "a single exposure (MJD-END lies later than MJD-OBS + EXPTIME: a stack of exposures "
            "has no single velocity)"
        )
        return None
    return start + 0.5 * exposure / 86400.0


def header_velocity(header: Mapping[str, Any]) -> tuple[float | None, str]:
    """Compute the barycentric correction (km/s) from the keywords of one exposure.

    Uses RA and DEC (degrees, or sexagesimal text) with EQUINOX, MJD-AVG or MJD-OBS + EXPTIME/2,
    and the site as OBSGEO-X/Y/Z (m), OBSGEO-B/L/H, or ESO TEL GEOLAT/GEOLON/GEOELEV.

    Parameters
    ----------
    header
        Upper-case keyword to value.

    Returns
    -------
    velocity
        km/s, or None when the header does not allow it.
    reason
        What is missing, or from what it was computed.

    """
    missing: list[str] = []
    ra, dec = _angle(header, "RA", True), _angle(header, "DEC", False)
    if ra is None or dec is None:
        missing.append("RA and DEC")
    middle = _middle(header, missing)
    geocentric = [_number(header, f"OBSGEO-{axis}") for axis in "XYZ"]
    geodetic = [
        _number(header, "OBSGEO-L", "ESO TEL GEOLON", "HIERARCH ESO TEL GEOLON"),
        _number(header, "OBSGEO-B", "ESO TEL GEOLAT", "HIERARCH ESO TEL GEOLAT"),
        _number(header, "OBSGEO-H", "ESO TEL GEOELEV", "HIERARCH ESO TEL GEOELEV"),
    ]
    if None in geocentric and None in geodetic:
        missing.append("the site (OBSGEO-X, OBSGEO-Y, OBSGEO-Z)")
    if missing or ra is None or dec is None or middle is None:
        return None, "the header lacks " + ", ".join(missing)

    from astropy.coordinates import FK5, EarthLocation, SkyCoord
    from astropy.time import Time

    try:
        if None not in geocentric:
            location = EarthLocation.from_geocentric(*geocentric, unit="m")
        else:
            location = EarthLocation.from_geodetic(*geodetic)
        equinox = _number(header, "EQUINOX")
        if equinox is None or equinox == 2000.0:
            sky = SkyCoord(ra, dec, unit="deg")
        else:
            # precession moves an apparent position by 0.4° in 25 years, 0.2 km/s
            sky = SkyCoord(
                ra, dec, unit="deg", frame=FK5(equinox=Time(equinox, format="jyear"))
            ).icrs
        velocity = _velocity(sky, Time(middle, format="mjd", scale="utc"), location)
    except Exception as exc:  # numbers out of range are reported in many ways
        return None, f"the header's position, time or site make no sense ({exc})"
    if not math.isfinite(velocity) or abs(velocity) > FASTEST_OBSERVER:
        return None, f"the header's position, time and site give {velocity} km/s"
    return velocity, f"computed from RA, DEC, site and mid-exposure MJD {middle:.6f} of the header"
