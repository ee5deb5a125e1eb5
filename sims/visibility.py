"""What hides what: a body's disk behind the limb or horizon, the Sun's height, and where the orbit lies to it.

Pure functions of plain arrays, for any vantage: what hides the sky is a cap about nadir whose
half-angle is the limb angle, from the tangent cone of a spherical Moon to a level horizon
(90 deg) or one that stands higher. `sims.vantage` fills the geometry of the samples with
them; `sims.windows` finds when they change sign.

A sphere seen from outside is a circle on the sky, exactly, so that the share of a disk that
the limb hides is the overlap of two caps, in closed form. Left out: the Moon's relief (2 km
on the limb are 0.2 deg from 100 km up), flattening, refraction, light time and aberration.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sims.errors import raise_if_any

LIT, PENUMBRA, UMBRA = 0, 1, 2
FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Eclipse:
    """How far a body is behind the limb.

    Parameters
    ----------
    depth_rad : ndarray[time]
        Of the body's centre below the limb, rad; positive is below.
    radius_rad : ndarray[time]
        Angular radius of the body's disk, rad.
    visible_fraction : ndarray[time]
        Share of the disk's solid angle in sight, 0 to 1.
    state : ndarray[time] of int8
        `LIT` (whole disk in sight), `PENUMBRA` (part of it) or `UMBRA` (none).
    """

    depth_rad: FloatArray
    radius_rad: FloatArray
    visible_fraction: FloatArray
    state: NDArray[np.int8]

    @property
    def hidden(self) -> NDArray[np.bool_]:
        """Whether the whole disk is out of sight."""
        return np.asarray(self.state == UMBRA)


def eclipse(
    position_km: FloatArray,
    body_km: FloatArray,
    body_radius_km: float,
    zenith: FloatArray,
    limb_angle_rad: ArrayLike,
) -> Eclipse:
    """How far a body lies behind the limb, at its true distance and with its whole disk.

    Parameters
    ----------
    position_km, body_km : ndarray[time, axis]
        Antenna and body from one origin, on one set of axes, km.
    body_radius_km : float
        Radius of the body, km; zero for a point.
    zenith : ndarray[time, axis]
        Unit vector up, on the same axes.
    limb_angle_rad : array_like[time] or float
        Angle between nadir and the limb or horizon in the body's direction, rad.

    Returns
    -------
    Eclipse
        Exact for spheres, the disk taken as evenly bright; rounding leaves 1e-11 in the
        fraction.

    Raises
    ------
    InputError
        If a number is not finite, a limb angle lies outside 0 to 180 deg, or the antenna
        is inside the body.
    """
    towards = np.asarray(body_km, dtype=float) - np.asarray(position_km, dtype=float)
    distance_km = np.linalg.norm(towards, axis=-1)
    limb = np.broadcast_to(np.asarray(limb_angle_rad, dtype=float), distance_km.shape)
    problems = []
    if not (np.isfinite(distance_km).all() and np.isfinite(zenith).all()):
        problems.append("position_km, body_km, zenith: not all numbers are finite")
    if not ((limb >= 0.0) & (limb <= np.pi)).all():
        problems.append(f"limb_angle_rad: should lie within 0 to pi, got {limb.min()} to {limb.max()}")
    if not body_radius_km >= 0.0:
        problems.append(f"body_radius_km: should not be negative, got {body_radius_km}")
    elif not (distance_km > body_radius_km).all():
        problems.append(f"position_km: {distance_km.min()} km from the centre of a body of radius {body_radius_km} km")
    raise_if_any(problems)
    from_nadir = angle_between_rad(-np.asarray(zenith, dtype=float), towards)
    radius = np.arcsin(body_radius_km / distance_km)
    depth = limb - from_nadir
    state = np.full(depth.shape, PENUMBRA, dtype=np.int8)
    state[depth <= -radius] = LIT
    state[depth >= radius] = UMBRA
    return Eclipse(depth, radius, _visible_fraction(from_nadir, radius, limb, state), state)


def angle_between_rad(first: FloatArray, second: FloatArray) -> FloatArray:
    """Angle between vectors, rad, good to rounding at any angle: ndarray[..., axis] twice -> ndarray[...]."""
    across = np.linalg.norm(np.cross(first, second), axis=-1)
    return np.asarray(np.arctan2(across, np.einsum("...a,...a->...", first, second)))


def _visible_fraction(
    separation: FloatArray, radius: FloatArray, limb: FloatArray, state: NDArray[np.int8]
) -> FloatArray:
    fraction = np.where(state == UMBRA, 0.0, 1.0)
    cut = (state == PENUMBRA) & (radius > 0.0)
    area = 4.0 * np.pi * np.sin(0.5 * radius[cut]) ** 2
    fraction[cut] = 1.0 - np.clip(cap_overlap_sr(separation[cut], radius[cut], limb[cut]) / area, 0.0, 1.0)
    return fraction


def cap_overlap_sr(separation_rad: FloatArray, first_rad: FloatArray, second_rad: FloatArray) -> FloatArray:
    """Solid angle that two caps on the sphere share.

    Parameters
    ----------
    separation_rad : ndarray[...]
        Between the centres, rad, 0 to pi.
    first_rad, second_rad : ndarray[...]
        Half-angles of the caps, rad; with the separation they must add up to less than 2 pi,
        so that the caps do not meet behind the sphere too.

    Returns
    -------
    ndarray[...]
        Solid angle, sr. Two sectors less the two spherical triangles of centres and
        crossing; angles by half-angle formulae and the triangle's excess by l'Huilier's,
        which keep their digits where the caps just touch (spherical trigonometry, e.g.
        Todhunter 1886).
    """
    a, b, c = (np.asarray(side, dtype=float) for side in (first_rad, second_rad, separation_rad))
    half = 0.5 * (a + b + c)
    # Where one cap holds the other, or they are apart, there is no triangle: a side is clipped and the sectors decide.
    over_a, over_b, over_c = (np.maximum(half - side, 0.0) for side in (a, b, c))
    sines = [np.sin(value) for value in (half, over_a, over_b, over_c)]
    at_first = 2.0 * np.arctan2(np.sqrt(sines[1] * sines[3]), np.sqrt(sines[0] * sines[2]))
    at_second = 2.0 * np.arctan2(np.sqrt(sines[2] * sines[3]), np.sqrt(sines[0] * sines[1]))
    tangents = np.tan(0.5 * half) * np.tan(0.5 * over_a) * np.tan(0.5 * over_b) * np.tan(0.5 * over_c)
    excess = 4.0 * np.arctan(np.sqrt(np.maximum(tangents, 0.0)))
    crossing = 4.0 * at_first * np.sin(0.5 * a) ** 2 + 4.0 * at_second * np.sin(0.5 * b) ** 2 - 2.0 * excess
    inside = 4.0 * np.pi * np.sin(0.5 * np.minimum(a, b)) ** 2
    return np.asarray(np.where(c >= a + b, 0.0, np.where(c <= np.abs(a - b), inside, np.maximum(crossing, 0.0))))


def elevation_rad(place_km: FloatArray, zenith: FloatArray, body_km: FloatArray) -> FloatArray:
    """Elevation of a body's centre over the level horizon of a place.

    Parameters
    ----------
    place_km, body_km : ndarray[time, axis]
        From one origin, km. For the point below a spacecraft the place is the Moon's
        radius times the zenith.
    zenith : ndarray[time, axis]
        Unit vector up at the place.

    Returns
    -------
    ndarray[time]
        Elevation, rad.
    """
    return np.asarray(0.5 * np.pi - angle_between_rad(zenith, body_km - place_km))


def beta_angle_rad(position_km: FloatArray, velocity_km_per_s: FloatArray, sun_km: FloatArray) -> FloatArray:
    """Angle between the Sun and the orbital plane.

    Parameters
    ----------
    position_km, velocity_km_per_s : ndarray[time, axis]
        From the centre of the body that is orbited, on axes that do not turn, km and km/s.
    sun_km : ndarray[time, axis]
        The Sun from that centre, km.

    Returns
    -------
    ndarray[time]
        Angle, rad, -pi/2 to pi/2; positive where the Sun is on the side of the orbit's
        angular momentum.
    """
    return np.asarray(0.5 * np.pi - angle_between_rad(np.cross(position_km, velocity_km_per_s), sun_km))


def local_solar_time_hours(longitude_deg: ArrayLike, subsolar_longitude_deg: ArrayLike) -> FloatArray:
    """Local solar time of a meridian: a turn of the body's day as 24 hours, noon under the Sun.

    Parameters
    ----------
    longitude_deg, subsolar_longitude_deg : array_like[time]
        East longitudes of the place and of the point that has the Sun overhead, deg.

    Returns
    -------
    ndarray[time]
        Hours, 0 to 24 (below 24).
    """
    east_deg = np.asarray(longitude_deg, dtype=float) - np.asarray(subsolar_longitude_deg, dtype=float)
    hours = np.mod(12.0 + east_deg / 15.0, 24.0)
    return np.asarray(np.where(hours < 24.0, hours, 0.0))


def terminator_crossing(sun_elevation_rad: FloatArray) -> NDArray[np.int8]:
    """Where the Sun's centre has risen or set since the sample before.

    Parameters
    ----------
    sun_elevation_rad : ndarray[time]
        Elevation of the Sun's centre over the level horizon of the point below, rad.

    Returns
    -------
    ndarray[time] of int8
        1 at the first sample of a day, -1 at the first of a night, else 0. The first
        sample has none before it: 0.
    """
    day = (np.asarray(sun_elevation_rad) > 0.0).astype(np.int8)
    return np.diff(day, prepend=day[:1])
