"""What each kind of vantage offers before the antenna is turned: place, motion, vertical, limb and bodies.

A kind of vantage - lunar orbit by elements or from a file, lander, ground site - is a
function from instants to a `View`; `sims.vantage` makes the geometry of the samples of it,
the same way for all.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from astropy.time import Time
from numpy.typing import NDArray

from sims.config_vantage import GroundSite, LunarOrbit, LunarOrbitFile, LunarSurface, Vantage
from sims.constants import MOON_MEAN_RADIUS_KM
from sims.ephemeris import earth_sun_from_moon_km, offline_time_scales, smooth_in_time
from sims.horizon import read_horizon
from sims.lander import lander_track
from sims.moon_frame import moon_fixed_axes, selenographic
from sims.orbit import OrbitTrack, lunar_orbit
from sims.orbit_message import read_orbit_message
from sims.orbit_states import orbit_from_message
from sims.site import site_track
from sims.visibility import beta_angle_rad, elevation_rad, local_solar_time_hours, terminator_crossing

FloatArray = NDArray[np.float64]
_MOON_FRAME = "Moon-fixed axes by the IAU rotation model, mean Earth and axis of rotation, within 20 arcsec of DE421's"
Described = tuple[NDArray[Any], str, str]


@dataclass(frozen=True)
class View:
    """What a vantage offers before the antenna is turned.

    Parameters
    ----------
    position_km, velocity_km_per_s : ndarray[time, axis]
        From the centre of the body below, ICRS axes, km and km/s.
    zenith, forward : ndarray[time, axis]
        Unit vectors, ICRS axes, at right angles: up, and the direction azimuth is counted
        from (motion in orbit, north on the ground).
    pole : ndarray[time, axis]
        Unit vector to the north pole of the body below, ICRS axes.
    limb_angle_rad : ndarray[time]
        Angle between nadir and the limb or a level horizon, rad.
    bodies_km : mapping of str to ndarray[time, axis]
        Earth, Sun and Moon from the antenna, ICRS axes, km.
    below : str
        The body below.
    earth_limb_rad, sun_limb_rad : ndarray[time]
        Angle between nadir and the limb or horizon in the azimuth of the body, rad.
    extra : mapping
        Further variables over time, as name -> (values, units, long name).
    attributes : mapping of str to str
        Statements on frames and assumptions.
    """

    position_km: FloatArray
    velocity_km_per_s: FloatArray
    zenith: FloatArray
    forward: FloatArray
    pole: FloatArray
    limb_angle_rad: FloatArray
    bodies_km: Mapping[str, FloatArray]
    below: str
    earth_limb_rad: FloatArray
    sun_limb_rad: FloatArray
    extra: Mapping[str, Described] = field(default_factory=dict)
    attributes: Mapping[str, str] = field(default_factory=dict)


def unit(vectors: FloatArray) -> FloatArray:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def lunar_orbit_view(track: OrbitTrack, earth_km: FloatArray, sun_km: FloatArray, times: Time) -> View:
    """The view from a lunar orbit.

    Parameters
    ----------
    track : OrbitTrack
        The spacecraft along its orbit.
    earth_km, sun_km : ndarray[time, axis]
        Earth and Sun from the Moon's centre, ICRS axes, km.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    View
        The limb is that of a sphere of the Moon's mean radius.
    """
    position = track.position_km
    zenith = unit(position)
    limb_angle_rad = np.arcsin(MOON_MEAN_RADIUS_KM / np.linalg.norm(position, axis=-1))
    along = track.velocity_km_per_s - np.einsum("ta,ta->t", track.velocity_km_per_s, zenith)[:, None] * zenith
    axes = moon_fixed_axes(times)
    latitude_deg, longitude_deg = selenographic(position, axes)
    subsolar_deg = selenographic(sun_km, axes)[1]
    ground_km = MOON_MEAN_RADIUS_KM * zenith
    sun_elevation = elevation_rad(ground_km, zenith, sun_km)
    beta = beta_angle_rad(position, track.velocity_km_per_s, sun_km)
    solar_hours = local_solar_time_hours(longitude_deg, subsolar_deg)
    extra: dict[str, Described] = {
        "orbit_phase": (track.phase, "1", "argument of latitude over a whole turn, from the ascending node"),
        "beta_angle_rad": (beta, "rad", "angle between the Sun and the orbital plane, towards angular momentum"),
        **_below(latitude_deg, longitude_deg, solar_hours, sun_elevation),
        "terminator_crossing": (
            terminator_crossing(sun_elevation),
            "1",
            "1 where the Sun has risen below since the sample before, -1 where it has set",
        ),
    }
    return View(
        position_km=position,
        velocity_km_per_s=track.velocity_km_per_s,
        zenith=zenith,
        forward=unit(along),
        pole=axes[:, 2],
        limb_angle_rad=limb_angle_rad,
        bodies_km={"earth": earth_km - position, "sun": sun_km - position, "moon": -position},
        below="Moon",
        earth_limb_rad=limb_angle_rad,
        sun_limb_rad=limb_angle_rad,
        extra=extra,
        attributes={"moon_frame": _MOON_FRAME},
    )


def _below(
    latitude_deg: FloatArray, longitude_deg: FloatArray, solar_hours: FloatArray, sun_elevation_rad: FloatArray
) -> dict[str, Described]:
    return {
        "sublatitude_deg": (latitude_deg, "deg", "selenographic latitude of the point below"),
        "sublongitude_deg": (longitude_deg, "deg", "selenographic east longitude of the point below"),
        "local_solar_time_hours": (solar_hours, "h", "local solar time of the point below"),
        "sun_elevation_rad": (sun_elevation_rad, "rad", "elevation of the Sun's centre at the point below"),
    }


def lunar_surface_view(site: LunarSurface, earth_km: FloatArray, sun_km: FloatArray, times: Time) -> View:
    """The view from a lander.

    Parameters
    ----------
    site : LunarSurface
        Selenographic place, and the horizon round it.
    earth_km, sun_km : ndarray[time, axis]
        Earth and Sun from the Moon's centre, ICRS axes, km.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    View
        Without the dip of the horizon that the lander's height makes.
    """
    axes = moon_fixed_axes(times)
    track = lander_track(site, times, axes)
    bodies = {"earth": earth_km - track.position_km, "sun": sun_km - track.position_km, "moon": -track.position_km}
    longitude_deg = np.full(len(track.zenith), site.longitude_deg)
    solar_hours = local_solar_time_hours(longitude_deg, selenographic(sun_km, axes)[1])
    latitude_deg = np.full(len(track.zenith), site.latitude_deg)
    sun_elevation = elevation_rad(track.position_km, track.zenith, sun_km)
    level, limbs = _horizon_limbs(site, track.zenith, track.north, bodies)
    return View(
        position_km=track.position_km,
        velocity_km_per_s=track.velocity_km_per_s,
        zenith=track.zenith,
        forward=track.north,
        pole=axes[:, 2],
        limb_angle_rad=level,
        bodies_km=bodies,
        below="Moon",
        earth_limb_rad=limbs["earth"],
        sun_limb_rad=limbs["sun"],
        extra=_below(latitude_deg, longitude_deg, solar_hours, sun_elevation),
        attributes={"moon_frame": _MOON_FRAME},
    )


def ground_view(site: GroundSite, earth_km: FloatArray, sun_km: FloatArray, times: Time) -> View:
    """The view from a ground site on Earth.

    Parameters
    ----------
    site : GroundSite
        Geodetic place, and the horizon round it.
    earth_km, sun_km : ndarray[time, axis]
        Earth and Sun from the Moon's centre, ICRS axes, km.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    View
        Without refraction (half a degree at the horizon).
    """
    track = site_track(site, times)
    bodies = {
        "earth": -track.position_km,
        "sun": sun_km - earth_km - track.position_km,
        "moon": -earth_km - track.position_km,
    }
    level, limbs = _horizon_limbs(site, track.zenith, track.north, bodies)
    sun_elevation = elevation_rad(np.zeros_like(track.zenith), track.zenith, bodies["sun"])
    return View(
        position_km=track.position_km,
        velocity_km_per_s=track.velocity_km_per_s,
        zenith=track.zenith,
        forward=track.north,
        pole=track.pole,
        limb_angle_rad=level,
        bodies_km=bodies,
        below="Earth",
        earth_limb_rad=limbs["earth"],
        sun_limb_rad=limbs["sun"],
        extra={
            "sidereal_time_hours": (track.sidereal_time_hours, "h", "apparent local sidereal time"),
            "sun_elevation_rad": (sun_elevation, "rad", "elevation of the Sun's centre, without refraction"),
        },
        attributes={"ut1": track.ut1_statement},
    )


def _horizon_limbs(
    site: LunarSurface | GroundSite, zenith: FloatArray, north: FloatArray, bodies_km: Mapping[str, FloatArray]
) -> tuple[FloatArray, dict[str, FloatArray]]:
    """Limb angle of the level horizon (0 deg of elevation under a table), and that in each body's azimuth."""
    level = np.full(len(zenith), np.pi / 2.0 + np.deg2rad(site.horizon_deg))
    if site.horizon_file is None:
        return level, dict.fromkeys(bodies_km, level)
    horizon = read_horizon(site.horizon_file)
    east = np.cross(north, zenith)
    limbs = {}
    for name, body in bodies_km.items():
        azimuth = np.arctan2(np.einsum("ta,ta->t", body, east), np.einsum("ta,ta->t", body, north))
        limbs[name] = np.pi / 2.0 + horizon.elevation_rad(azimuth)
    return level, limbs


def view_from(vantage: Vantage, times: Time, start: datetime, kernel: Path | None) -> View:
    """The view of a vantage.

    Parameters
    ----------
    vantage : Vantage
        The ``[vantage]`` table.
    times : Time[time]
        Instants in any scale.
    start : datetime
        Start of the observation, the epoch of elements that name none.
    kernel : Path or None
        JPL kernel for the places of Earth, Sun and Moon; None for the built-in ephemeris.

    Returns
    -------
    View

    Raises
    ------
    InputError
        If a file that the vantage names cannot be used, or does not cover the instants.
    """
    bodies_km = smooth_in_time(lambda at: earth_sun_from_moon_km(at, kernel), times)
    earth_km, sun_km = bodies_km[:, 0], bodies_km[:, 1]
    if isinstance(vantage, LunarOrbit):
        with offline_time_scales():
            epoch = Time(start.astimezone(UTC).replace(tzinfo=None), scale="utc").tt
        return lunar_orbit_view(lunar_orbit(vantage, times, epoch), earth_km, sun_km, times)
    if isinstance(vantage, LunarOrbitFile):
        track = orbit_from_message(read_orbit_message(vantage.file), times)
        return lunar_orbit_view(track, earth_km, sun_km, times)
    if isinstance(vantage, LunarSurface):
        return lunar_surface_view(vantage, earth_km, sun_km, times)
    return ground_view(vantage, earth_km, sun_km, times)
