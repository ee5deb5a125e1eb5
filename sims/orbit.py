"""A spacecraft round the Moon by its elements: a Kepler ellipse whose node and pericentre drift.

Stands below `sims.view`. Vectors are on ICRS axes, in km, from the Moon's centre. The only
perturbation is the secular one of the Moon's oblateness (J2), and the elements are mean ones: the
osculating semi-major axis swings up to 1 km about the mean, and taking one for the other
puts a low orbiter tens of km out of place within a day. Left out are

* the oscillations that J2 adds within an orbit: 0.4 km in place (measured in the tests);
* the mass concentrations and all other harmonics: they change the eccentricity of an orbit
  100 km up by some thousandths, its height by 10 km, within weeks (from memory);
* the pull of the Earth and the Sun, as strong as J2 some 1400 km up and growing fast beyond.

Where that counts, give an orbit file.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from astropy.time import Time
from numpy.typing import NDArray

from sims.config_vantage import LunarOrbit
from sims.constants import MOON_GM_KM3_PER_S2, MOON_J2, MOON_J2_RADIUS_KM, MOON_MEAN_RADIUS_KM
from sims.ephemeris import offline_time_scales
from sims.moon_frame import lunar_equator_axes

FloatArray = NDArray[np.float64]
_NEWTON_STEPS = 60


@dataclass(frozen=True)
class OrbitTrack:
    """A spacecraft along its orbit.

    Parameters
    ----------
    position_km, velocity_km_per_s : ndarray[time, axis]
        Relative to the Moon's centre, ICRS axes, km and km/s.
    phase : ndarray[time]
        True argument of latitude over a whole turn, 0 to 1 (below 1), from the ascending node.
    """

    position_km: FloatArray
    velocity_km_per_s: FloatArray
    phase: FloatArray


@dataclass(frozen=True)
class DriftRates:
    """Secular rates of an orbit.

    Parameters
    ----------
    node_rad_per_s, pericentre_rad_per_s, mean_anomaly_rad_per_s : float
        The mean anomaly's holds the mean motion itself.
    """

    node_rad_per_s: float
    pericentre_rad_per_s: float
    mean_anomaly_rad_per_s: float


def period_s(altitude_km: float) -> float:
    """Period of an orbit round a point-mass Moon, s, by the height of its semi-major axis above the mean radius, km.

    Kepler's third law.
    """
    return float(2.0 * np.pi * np.sqrt((MOON_MEAN_RADIUS_KM + altitude_km) ** 3 / MOON_GM_KM3_PER_S2))


def drift_rates(orbit: LunarOrbit) -> DriftRates:
    """Secular rates of the elements, to first order in J2.

    Parameters
    ----------
    orbit : LunarOrbit
        Elements; without oblateness only the mean anomaly moves.

    Returns
    -------
    DriftRates
        Kaula 1966, Theory of Satellite Geodesy, section 3.6 (from memory; the tests hold them
        against an integrated orbit). The semi-major axis is the mean one.
    """
    axis_km = MOON_MEAN_RADIUS_KM + orbit.altitude_km
    mean_motion = np.sqrt(MOON_GM_KM3_PER_S2 / axis_km**3)
    if not orbit.oblateness:
        return DriftRates(0.0, 0.0, float(mean_motion))
    shape = 1.0 - orbit.eccentricity**2
    strength = 0.75 * mean_motion * MOON_J2 * (MOON_J2_RADIUS_KM / axis_km) ** 2 / shape**2
    cosine = np.cos(np.deg2rad(orbit.inclination_deg))
    return DriftRates(
        node_rad_per_s=float(-2.0 * strength * cosine),
        pericentre_rad_per_s=float(strength * (5.0 * cosine**2 - 1.0)),
        mean_anomaly_rad_per_s=float(mean_motion + strength * np.sqrt(shape) * (3.0 * cosine**2 - 1.0)),
    )


def eccentric_anomaly_rad(mean_anomaly_rad: FloatArray, eccentricity: float) -> FloatArray:
    """Solve Kepler's equation M = E - e sin E to rounding.

    Parameters
    ----------
    mean_anomaly_rad : ndarray[time]
        Mean anomaly, rad, of any size.
    eccentricity : float
        0 to below 1.

    Returns
    -------
    ndarray[time]
        Eccentric anomaly, rad, -pi to pi: Newton's method from E = pi, whence it falls onto
        the root without overshoot for every ellipse (the function is convex there), until
        rounding makes it rise.
    """
    mean = np.mod(np.asarray(mean_anomaly_rad, dtype=float) + np.pi, 2.0 * np.pi) - np.pi
    size = np.abs(mean)
    anomaly = np.full_like(size, np.pi)
    for _ in range(_NEWTON_STEPS):
        step = (anomaly - eccentricity * np.sin(anomaly) - size) / (1.0 - eccentricity * np.cos(anomaly))
        # Rounding alone asks for a step back: the root is reached.
        anomaly = np.maximum(anomaly - np.maximum(step, 0.0), size)
        if step.max(initial=0.0) <= 1e-15:
            break
    return np.asarray(np.copysign(anomaly, mean))


def lunar_orbit(orbit: LunarOrbit, times: Time, start: Time) -> OrbitTrack:
    """Move along an orbit.

    Parameters
    ----------
    orbit : LunarOrbit
        Elements at its epoch, or at `start` where it names none. Inclination and node refer
        to the Moon's mean equator of that instant; the node is counted eastward along it from its
        ascending node on the ICRS equator, the pericentre from the orbit's ascending node;
        the phase is the mean argument of latitude, pericentre plus mean anomaly.
    times : Time[time]
        Instants in any scale.
    start : Time
        Start of the observation.

    Returns
    -------
    OrbitTrack
        The velocity is that on the ellipse of the moment: what the drift adds, up to 6 parts
        in 10^4 (1 m/s), is left out.
    """
    epoch = start if orbit.epoch is None else _instant(orbit)
    equator = lunar_equator_axes(epoch)
    elapsed = _seconds_between(epoch, times)
    rates = drift_rates(orbit)
    node = np.deg2rad(orbit.node_deg) + rates.node_rad_per_s * elapsed
    pericentre = np.deg2rad(orbit.pericentre_deg) + rates.pericentre_rad_per_s * elapsed
    mean = np.deg2rad(orbit.phase_deg - orbit.pericentre_deg) + rates.mean_anomaly_rad_per_s * elapsed
    axis_km, e = MOON_MEAN_RADIUS_KM + orbit.altitude_km, orbit.eccentricity
    anomaly = eccentric_anomaly_rad(mean, e)
    root = np.sqrt(1.0 - e**2)
    along, across = np.cos(anomaly) - e, root * np.sin(anomaly)
    speed = np.sqrt(MOON_GM_KM3_PER_S2 / axis_km) / (1.0 - e * np.cos(anomaly))
    to_node, to_crest = _plane(node, np.deg2rad(orbit.inclination_deg), equator)
    cosine, sine = np.cos(pericentre)[:, None], np.sin(pericentre)[:, None]
    to_pericentre, ahead = cosine * to_node + sine * to_crest, cosine * to_crest - sine * to_node
    turns = (pericentre + np.arctan2(across, along)) / (2.0 * np.pi)
    return OrbitTrack(
        position_km=axis_km * (along[:, None] * to_pericentre + across[:, None] * ahead),
        velocity_km_per_s=(speed * -np.sin(anomaly))[:, None] * to_pericentre
        + (speed * root * np.cos(anomaly))[:, None] * ahead,
        phase=whole_turn(turns),
    )


def argument_of_latitude(position_km: FloatArray, velocity_km_per_s: FloatArray, equator: FloatArray) -> FloatArray:
    """True argument of latitude of states, over a whole turn.

    Parameters
    ----------
    position_km, velocity_km_per_s : ndarray[time, axis]
        States relative to the Moon's centre, ICRS axes.
    equator : ndarray[axis of the equator, axis]
        From `sims.moon_frame.lunar_equator_axes`.

    Returns
    -------
    ndarray[time]
        0 to 1 (below 1), from the ascending node of the orbit of the moment; of an orbit in
        the equator's plane, from the equator's first axis.
    """
    momentum = np.cross(position_km, velocity_km_per_s)
    node = np.cross(equator[2], momentum)
    length = np.linalg.norm(node, axis=-1, keepdims=True)
    level = length < 1e-12 * np.linalg.norm(momentum, axis=-1, keepdims=True)
    node = np.where(level, equator[0], node / np.where(level, 1.0, length))
    crest = np.cross(momentum / np.linalg.norm(momentum, axis=-1, keepdims=True), node)
    turns = np.arctan2(np.einsum("ta,ta->t", position_km, crest), np.einsum("ta,ta->t", position_km, node)) / (
        2.0 * np.pi
    )
    return whole_turn(turns)


def whole_turn(turns: FloatArray) -> FloatArray:
    """The fraction of turns, 0 to below 1."""
    fraction = turns - np.floor(turns)
    return np.asarray(np.where(fraction < 1.0, fraction, 0.0))


def _plane(node_rad: FloatArray, inclination_rad: float, equator: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Unit vectors to the ascending node and a quarter turn on, ICRS axes: ndarray[time, axis] twice."""
    cosine, sine, tilt = np.cos(node_rad), np.sin(node_rad), np.full_like(node_rad, np.sin(inclination_rad))
    to_node = np.stack([cosine, sine, np.zeros_like(cosine)], axis=-1) @ equator
    lean = np.cos(inclination_rad)
    return to_node, np.stack([-sine * lean, cosine * lean, tilt], axis=-1) @ equator


def _instant(orbit: LunarOrbit) -> Time:
    assert orbit.epoch is not None
    with offline_time_scales():
        return Time(orbit.epoch.replace(tzinfo=None), scale="utc").tt


def _seconds_between(epoch: Time, times: Time) -> FloatArray:
    with offline_time_scales():
        tt, zero = times.tt, epoch.tt
    return np.asarray(((tt.jd1 - zero.jd1) + (tt.jd2 - zero.jd2)) * 86_400.0)
