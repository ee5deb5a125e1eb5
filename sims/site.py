"""A place on the ground among the stars: its vertical, its north and its sidereal time at each instant.

Stands below `sims.vantage`. Precession and nutation are IAU 2006/2000A, the rotation of the
Earth is UT1 from the IERS table that comes with astropy; nothing is fetched. Left out, all far
below any beam: polar motion (0.6 arcsec), annual aberration (21 arcsec between the geometric
zenith given here and the star seen there) and the deflection of the vertical (tens of arcsec).
"""

from __future__ import annotations

import logging
from dataclasses import dataclass
from functools import cache

import erfa
import numpy as np
from astropy.time import Time
from astropy.utils import iers
from numpy.typing import NDArray

from sims.config_vantage import GroundSite
from sims.constants import EARTH_ROTATION_RAD_PER_S
from sims.ephemeris import offline_time_scales, smooth_in_time

_log = logging.getLogger(__name__)
_WGS84 = 1  # identifier of the ellipsoid in ERFA


@dataclass(frozen=True)
class SiteTrack:
    """A ground site carried round by the Earth.

    Parameters
    ----------
    position_km : ndarray[time, axis]
        From the Earth's centre, ICRS axes, km.
    velocity_km_per_s : ndarray[time, axis]
        With the Earth's rotation, about its centre, ICRS axes, km/s.
    zenith, north : ndarray[time, axis]
        Unit vectors along the ellipsoid's normal and to the north, ICRS axes.
    pole : ndarray[time, axis]
        Unit vector along the axis of rotation, ICRS axes.
    sidereal_time_hours : ndarray[time]
        Apparent local sidereal time, hours, 0 to 24 (below 24).
    ut1_statement : str
        What was taken for UT1-UTC.
    """

    position_km: NDArray[np.float64]
    velocity_km_per_s: NDArray[np.float64]
    zenith: NDArray[np.float64]
    north: NDArray[np.float64]
    pole: NDArray[np.float64]
    sidereal_time_hours: NDArray[np.float64]
    ut1_statement: str


@cache
def _ut1_table() -> iers.IERS_A:
    """The measured and predicted Earth rotation that is installed with astropy."""
    return iers.IERS_A.open(iers.IERS_A_FILE)


def ut1_minus_utc_s(utc: Time) -> tuple[NDArray[np.float64], str]:
    """UT1-UTC from the installed IERS table; beyond its ends, its nearest value.

    Parameters
    ----------
    utc : Time[time]
        Instants on the UTC scale.

    Returns
    -------
    difference_s : ndarray[time]
        UT1-UTC, s.
    statement : str
        What was assumed. By the definition of UTC the difference stays below 0.9 s, so the
        nearest value is less than 1.8 s off, 27 arcsec of rotation. A warning is logged as well
        when instants lie outside the table.
    """
    table = _ut1_table()
    difference, status = table.ut1_utc(utc.jd1, utc.jd2, return_status=True)
    first, last = (float(table["MJD"][end].to_value("d")) for end in (0, -1))
    statement = f"UT1-UTC from the IERS table installed with astropy (MJD {first:.0f} to {last:.0f})"
    outside = int(np.sum((status == iers.TIME_BEFORE_IERS_RANGE) | (status == iers.TIME_BEYOND_IERS_RANGE)))
    if outside:
        statement += f"; {outside} of {status.size} instants lie outside it and take its nearest value"
        _log.warning("%s: up to 1.8 s, 27 arcsec of rotation, in error", statement)
    return np.asarray(difference.to_value("s"), dtype=float), statement


def _celestial_pole(times: Time) -> NDArray[np.float64]:
    """X, Y and s of the celestial intermediate pole, and the equation of the origins: ndarray[time, 4], rad."""
    tt = times.tt
    matrix = erfa.pnm06a(tt.jd1, tt.jd2)
    x, y = erfa.bpn2xy(matrix)
    s = erfa.s06(tt.jd1, tt.jd2, x, y)
    return np.stack([x, y, s, erfa.eors(matrix, s)], axis=-1)


def site_track(site: GroundSite, times: Time) -> SiteTrack:
    """Carry a ground site round with the Earth.

    Parameters
    ----------
    site : GroundSite
        Geodetic latitude and longitude (WGS 84), height above the ellipsoid.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    SiteTrack
        Place, vertical, north and sidereal time; IAU 2006/2000A (IERS Conventions 2010,
        chapter 5).
    """
    with offline_time_scales():
        utc = times.utc
        difference_s, statement = ut1_minus_utc_s(utc)
        ut1 = erfa.utcut1(utc.jd1, utc.jd2, difference_s)
    rotation_rad = erfa.era00(*ut1)
    x, y, s, origins_rad = np.moveaxis(smooth_in_time(_celestial_pole, times), -1, 0)
    celestial_to_intermediate = erfa.c2ixys(x, y, s)

    latitude, longitude = np.deg2rad(site.latitude_deg), np.deg2rad(site.longitude_deg)
    east_angle = rotation_rad + longitude
    cosine, sine = np.cos(east_angle), np.sin(east_angle)

    def to_icrs(outward: float, upward: float) -> NDArray[np.float64]:
        """A vector in the plane of the site's meridian, by its parts from and along the axis of rotation."""
        intermediate = np.stack([outward * cosine, outward * sine, np.full_like(cosine, upward)], axis=-1)
        return np.asarray(np.einsum("tji,tj->ti", celestial_to_intermediate, intermediate))

    # At longitude zero the ellipsoid gives the distances from the axis and from the equatorial plane.
    from_axis_m, _, from_equator_m = erfa.gd2gc(_WGS84, 0.0, latitude, site.height_m)
    sidereal_hours = np.mod((east_angle - origins_rad) * 12.0 / np.pi, 24.0)
    position_km = to_icrs(float(from_axis_m) / 1e3, float(from_equator_m) / 1e3)
    pole = to_icrs(0.0, 1.0)
    return SiteTrack(
        position_km=position_km,
        velocity_km_per_s=EARTH_ROTATION_RAD_PER_S * np.cross(pole, position_km),
        zenith=to_icrs(float(np.cos(latitude)), float(np.sin(latitude))),
        north=to_icrs(-float(np.sin(latitude)), float(np.cos(latitude))),
        pole=pole,
        sidereal_time_hours=np.where(sidereal_hours < 24.0, sidereal_hours, 0.0),
        ut1_statement=statement,
    )
