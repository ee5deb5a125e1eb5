"""From where the antenna looks, how it is turned, and what hides what: the geometry of each sample.

`survey_geometry` takes the vantage and the observation of the configuration, lays out the
samples in time, and gives place, attitude, nadir, limb and eclipses of those that meet the
required conditions. The sky average and the recording are built on this Dataset.

A kind of vantage is a function from instants to a `View`; the rest is the same for all.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC
from typing import Any

import numpy as np
import xarray as xr
from astropy.time import Time
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from sims.config import FixedBoresight, GroundSite, LunarOrbit, Observation, VerticalBoresight
from sims.constants import MOON_MEAN_RADIUS_KM
from sims.errors import InputError, raise_if_any
from sims.orbit import circular_orbit, earth_sun_from_moon_km, offline_time_scales, smooth_in_time
from sims.site import site_track

# IERS tables start in 1973; ERFA's series for the Moon (moon98) is stated for 1950 to 2100.
_EARLIEST, _LATEST = np.datetime64("1973-01-02", "ns"), np.datetime64("2100-01-01", "ns")
_UNIX_EPOCH_JD = 2_440_587.5
_DAY_NS = 86_400_000_000_000
_FRAME = "ICRS axes; bodies at their geometric places, without light time or aberration"
_TIME_SYSTEM = (
    "time is UTC, evenly spaced on its labels, with no leap second beyond those of the installed table; "
    "ephemerides are evaluated in TDB"
)


@dataclass(frozen=True)
class View:
    """What a vantage offers before the antenna is turned.

    Parameters
    ----------
    position_km : ndarray[time, axis]
        From the centre of the body below, ICRS axes, km.
    zenith, forward : ndarray[time, axis]
        Unit vectors, ICRS axes, at right angles: up, and the direction azimuth is counted
        from (motion in orbit, north on the ground).
    limb_angle_rad : ndarray[time]
        Angle between nadir and the limb or horizon, rad.
    earth_hidden, sun_hidden : ndarray[time] of bool
        Whether the centre of the body is out of sight.
    extra : mapping
        Further variables over time, as name -> (values, units, long name).
    attributes : mapping of str to str
        Statements on frames and assumptions.
    earth_hidden_name, sun_hidden_name : str
        What being hidden means here.
    """

    position_km: NDArray[np.float64]
    zenith: NDArray[np.float64]
    forward: NDArray[np.float64]
    limb_angle_rad: NDArray[np.float64]
    earth_hidden: NDArray[np.bool_]
    sun_hidden: NDArray[np.bool_]
    extra: Mapping[str, tuple[NDArray[np.float64], str, str]]
    attributes: Mapping[str, str]
    earth_hidden_name: str = "centre of the Earth behind the Moon's limb (point source)"
    sun_hidden_name: str = "centre of the Sun behind the Moon's limb (point source)"


def sample_times(observation: Observation) -> tuple[NDArray[np.datetime64], Time]:
    """Lay out the samples of an observation in time.

    Parameters
    ----------
    observation : Observation
        Start (UTC), step and count. Steps are counted on the labels: across a leap second
        two samples lie one second further apart than the step.

    Returns
    -------
    labels : ndarray[time] of datetime64[ns]
        UTC.
    times : Time[time]
        The same instants on the TT scale.

    Raises
    ------
    InputError
        If the start has no time zone, or the samples reach outside 1973-01-02 to 2100-01-01.
    """
    if observation.start.tzinfo is None:
        raise InputError(f"observation.start: no time zone, got {observation.start.isoformat()}; give it in UTC")
    first = np.datetime64(observation.start.astimezone(UTC).replace(tzinfo=None), "ns")
    span_s = observation.step_s * (observation.count - 1)
    longest_s = float((_LATEST - _EARLIEST) / np.timedelta64(1, "s"))
    if first < _EARLIEST or span_s > longest_s or first + np.timedelta64(round(span_s), "s") > _LATEST:
        raise InputError(
            f"observation: samples from {first} over {span_s:g} s reach outside {_EARLIEST} to {_LATEST}, "
            "where the built-in ephemeris and Earth rotation hold"
        )
    steps = np.round(np.arange(observation.count) * (observation.step_s * 1e9)).astype(np.int64)
    labels = first + steps.astype("timedelta64[ns]")

    # A day with a leap second has no unambiguous fraction, but its start is exact: count seconds from there.
    since_1970_ns = labels.astype(np.int64)
    days, which = np.unique(since_1970_ns // _DAY_NS, return_inverse=True)
    with offline_time_scales():
        midnight = Time(days + _UNIX_EPOCH_JD, 0.0, format="jd", scale="utc").tt
    fraction = (since_1970_ns % _DAY_NS) / _DAY_NS
    return labels, Time(midnight.jd1[which], midnight.jd2[which] + fraction, format="jd", scale="tt")


def _unit(vectors: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))


def lunar_orbit_view(orbit: LunarOrbit, times: Time) -> View:
    """The view from a circular lunar orbit.

    Parameters
    ----------
    orbit : LunarOrbit
        Elements at the first of `times`, see `sims.orbit.circular_orbit`.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    View
        Earth and Sun are points at their centres, hidden when behind the limb of a
        spherical Moon: their disks (2 and 0.5 deg wide) are not yet taken into account.
    """
    track = circular_orbit(orbit, times)
    bodies_km = smooth_in_time(earth_sun_from_moon_km, times)
    zenith = _unit(track.position_km)
    limb_angle_rad = np.arcsin(MOON_MEAN_RADIUS_KM / np.linalg.norm(track.position_km, axis=-1))
    towards = _unit(bodies_km - track.position_km[:, None, :])
    hidden = -np.einsum("tba,ta->tb", towards, zenith) > np.cos(limb_angle_rad)[:, None]
    return View(
        position_km=track.position_km,
        zenith=zenith,
        forward=track.forward,
        limb_angle_rad=limb_angle_rad,
        earth_hidden=hidden[:, 0],
        sun_hidden=hidden[:, 1],
        extra={"orbit_phase": (track.phase, "1", "argument of latitude over a whole turn, from the ascending node")},
        attributes={"body_below": "Moon"},
    )


def ground_view(site: GroundSite, times: Time) -> View:
    """The view from a ground site with a level horizon.

    Parameters
    ----------
    site : GroundSite
        Geodetic place and the elevation of the horizon all round.
    times : Time[time]
        Instants in any scale.

    Returns
    -------
    View
        The Sun is hidden when its centre lies below the horizon's elevation, without
        refraction (half a degree at the horizon) and without its disk.
    """
    track = site_track(site, times)
    bodies_km = smooth_in_time(earth_sun_from_moon_km, times)
    towards_sun = _unit(bodies_km[:, 1] - bodies_km[:, 0] - track.position_km)
    horizon_rad = np.deg2rad(site.horizon_deg)
    everywhere = np.full(len(track.zenith), np.pi / 2.0 + horizon_rad)
    return View(
        position_km=track.position_km,
        zenith=track.zenith,
        forward=track.north,
        limb_angle_rad=everywhere,
        earth_hidden=np.zeros(len(everywhere), dtype=bool),
        sun_hidden=np.asarray(np.einsum("ta,ta->t", towards_sun, track.zenith) < np.sin(horizon_rad)),
        extra={"sidereal_time_hours": (track.sidereal_time_hours, "h", "apparent local sidereal time")},
        attributes={"body_below": "Earth", "ut1": track.ut1_statement},
        earth_hidden_name="does not apply on the ground: always false",
        sun_hidden_name="centre of the Sun below the horizon (point source, no refraction)",
    )


def pointing_turns(elapsed_s: NDArray[np.float64], dwell_s: float, directions: int) -> NDArray[np.int64]:
    """Number of the boresight direction in turn at each time.

    Parameters
    ----------
    elapsed_s : ndarray[time]
        Time since the start, s.
    dwell_s : float
        Time spent on each direction before the next has its turn, s.
    directions : int
        Number of directions; after the last comes the first again.

    Returns
    -------
    ndarray[time]
    """
    return np.asarray(np.floor(elapsed_s / dwell_s).astype(np.int64) % directions)


def _attitude(z: NDArray[np.float64], x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Quaternions (scalar last, not negative) that take antenna axes to the given ICRS unit vectors."""
    matrices = np.stack([x, np.cross(z, x), z], axis=-1)
    return np.asarray(Rotation.from_matrix(matrices).as_quat(canonical=True))


def fixed_attitudes(boresight: FixedBoresight) -> NDArray[np.float64]:
    """Attitudes of an antenna that holds its boresight on directions in the sky.

    Parameters
    ----------
    boresight : FixedBoresight
        ICRS directions and the roll about them.

    Returns
    -------
    ndarray[direction, quaternion]
        Antenna to ICRS, scalar last: z to the direction, x at the roll angle from ICRS north
        through east.
    """
    ra, dec = np.deg2rad(np.asarray(boresight.directions_deg, dtype=float)).T
    roll = np.deg2rad(boresight.roll_deg)
    z = np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)
    north = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)], axis=-1)
    east = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)], axis=-1)
    return _attitude(z, np.cos(roll) * north + np.sin(roll) * east)


def vertical_attitudes(boresight: VerticalBoresight, view: View) -> NDArray[np.float64]:
    """Attitudes of an antenna that looks straight up.

    Parameters
    ----------
    boresight : VerticalBoresight
        Azimuth of the antenna's x axis, clockwise seen from above, from north on the ground
        (so that east is 90 deg) or from the direction of motion in orbit.
    view : View
        Gives zenith and the direction azimuth is counted from.

    Returns
    -------
    ndarray[time, quaternion]
        Antenna to ICRS, scalar last.
    """
    azimuth = np.deg2rad(boresight.azimuth_deg)
    right = np.cross(view.forward, view.zenith)
    return _attitude(view.zenith, np.cos(azimuth) * view.forward + np.sin(azimuth) * right)


def _kept(view: View, observation: Observation) -> NDArray[np.bool_]:
    """Which samples meet all required conditions."""
    conditions = {"earth-hidden": view.earth_hidden, "sun-hidden": view.sun_hidden}
    raise_if_any(
        [
            f'observation.require: unknown condition "{name}"; allowed: {", ".join(conditions)}'
            for name in observation.require
            if name not in conditions
        ]
    )
    kept = np.ones(len(view.zenith), dtype=bool)
    for name in observation.require:
        kept &= conditions[name]
    if not kept.any():
        met = ", ".join(f"{name} in {int(conditions[name].sum())}" for name in observation.require)
        raise InputError(
            f"observation.require: none of the {kept.size} samples meets all of {list(observation.require)} ({met}); "
            "change the start, the span or the conditions"
        )
    return kept


def survey_geometry(vantage: LunarOrbit | GroundSite, observation: Observation) -> xr.Dataset:
    """Place, attitude, limb and eclipses of every sample that meets the required conditions.

    Parameters
    ----------
    vantage : LunarOrbit or GroundSite
        Where the antenna is and how it is pointed. A fixed boresight gives its directions,
        in order, consecutive blocks of all samples of the observation, equal to within one
        sample; the conditions are applied afterwards, so a direction may keep fewer, or
        none, which is logged as a warning.
    observation : Observation
        Layout in time, conditions, and the total integration, which is shared out equally
        over the samples kept.

    Returns
    -------
    Dataset
        Dimensions time, axis (x, y, z), quaternion (x, y, z, scalar). Every variable carries
        its unit and meaning; ``orbit_phase`` is given in lunar orbit only,
        ``sidereal_time_hours`` on the ground only. Earth and Sun count as points at their
        centres: their disks are not yet taken into account.

    Raises
    ------
    InputError
        If no sample meets the conditions, a condition is unknown, there are fewer samples
        than directions, or the samples reach outside the years of the ephemeris.
    """
    labels, times = sample_times(observation)
    view = ground_view(vantage, times) if vantage.kind == "ground" else lunar_orbit_view(vantage, times)
    boresight = vantage.boresight
    if boresight.kind == "fixed":
        elapsed_s = observation.step_s * np.arange(len(labels), dtype=np.float64)
        pointing = pointing_turns(elapsed_s, boresight.dwell_s, len(boresight.directions_deg))
        attitude = fixed_attitudes(boresight)[pointing]
    else:
        pointing = np.zeros(len(labels), dtype=np.int64)
        attitude = vertical_attitudes(boresight, view)
    kept = _kept(view, observation)
    integration_s = np.full(len(labels), observation.integration_hours * 3600.0 / int(kept.sum()))

    body = view.attributes["body_below"]
    variables: dict[str, tuple[tuple[str, ...], NDArray[Any], str, str]] = {
        "position_km": (("time", "axis"), view.position_km, "km", f"place from the centre of the {body}, ICRS axes"),
        "attitude": (("time", "quaternion"), attitude, "1", "rotation from antenna to ICRS axes, scalar last"),
        "nadir": (("time", "axis"), -view.zenith, "1", "unit vector straight down, ICRS axes"),
        "limb_angle_rad": (("time",), view.limb_angle_rad, "rad", "angle between nadir and the limb or horizon"),
        "earth_hidden": (("time",), view.earth_hidden, "1", view.earth_hidden_name),
        "sun_hidden": (("time",), view.sun_hidden, "1", view.sun_hidden_name),
        "pointing": (("time",), pointing, "1", "index of the boresight direction"),
        "integration_s": (("time",), integration_s, "s", "integration time the sample stands for"),
        **{name: (("time",), *described) for name, described in view.extra.items()},
    }
    data = {
        name: xr.Variable(dims, values, {"units": unit, "long_name": long_name})
        for name, (dims, values, unit, long_name) in variables.items()
    }
    # xarray writes the units of dates itself and refuses an attribute of that name.
    time = xr.Variable(("time",), labels, {"long_name": "time of the sample, UTC"})
    attributes = {"frame": _FRAME, "time_system": _TIME_SYSTEM, **view.attributes}
    return xr.Dataset(data, coords={"time": time}, attrs=attributes).isel(time=kept)
