"""From where the antenna looks, how it is turned, and what hides what: the geometry of each sample.

`full_geometry` takes the vantage and the observation of the configuration, lays out the
samples in time, and gives place, motion, attitude, bodies, limb and eclipses of them all;
`survey_geometry` keeps those that meet the required conditions. The sky average and the
recording are built on this Dataset.
"""

from __future__ import annotations

from datetime import UTC

import numpy as np
import xarray as xr
from astropy.time import Time
from numpy.typing import NDArray

from sims.attitude import Surroundings, attitudes
from sims.config_vantage import Observation, Vantage
from sims.constants import EARTH_EQUATORIAL_RADIUS_KM, SUN_RADIUS_KM
from sims.ephemeris import offline_time_scales
from sims.errors import InputError, raise_if_any
from sims.view import Described, View, unit, view_from
from sims.visibility import Eclipse, eclipse

FloatArray = NDArray[np.float64]
# IERS tables start in 1973; ERFA's series for the Moon (moon98) is stated for 1950 to 2100.
_EARLIEST, _LATEST = np.datetime64("1973-01-02", "ns"), np.datetime64("2100-01-01", "ns")
_UNIX_EPOCH_JD = 2_440_587.5
_DAY_NS = 86_400_000_000_000
_FRAME = "ICRS axes; bodies at their geometric places, without light time or aberration"
_TIME_SYSTEM = (
    "time is UTC, evenly spaced on its labels, with no leap second beyond those of the installed table; "
    "ephemerides are evaluated in TDB"
)


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


def _kept(geometry: xr.Dataset, observation: Observation) -> NDArray[np.bool_]:
    """Which samples meet all required conditions."""
    conditions = {"earth-hidden": geometry["earth_hidden"].values, "sun-hidden": geometry["sun_hidden"].values}
    raise_if_any(
        [
            f'observation.require: unknown condition "{name}"; allowed: {", ".join(conditions)}'
            for name in observation.require
            if name not in conditions
        ]
    )
    kept = np.ones(geometry.sizes["time"], dtype=bool)
    for name in observation.require:
        kept &= conditions[name]
    if not kept.any():
        met = ", ".join(f"{name} in {int(conditions[name].sum())}" for name in observation.require)
        raise InputError(
            f"observation.require: none of the {kept.size} samples meets all of {list(observation.require)} ({met}); "
            "change the start, the span or the conditions"
        )
    return kept


def survey_geometry(vantage: Vantage, observation: Observation) -> xr.Dataset:
    """Geometry of every sample that meets the required conditions.

    Parameters
    ----------
    vantage : Vantage
        Where the antenna is and how it is pointed.
    observation : Observation
        Layout in time, conditions, and the total integration, which is shared out equally
        over the samples kept.

    Returns
    -------
    Dataset
        As `full_geometry`, with ``integration_s`` besides. A direction of several may keep
        fewer samples than others, or none.

    Raises
    ------
    InputError
        If no sample meets the conditions, a condition is unknown, a file cannot be used, or the
        samples reach outside the years of the ephemeris.
    """
    everything = full_geometry(vantage, observation)
    kept = _kept(everything, observation)
    integration_s = np.full(int(kept.sum()), observation.integration_hours * 3600.0 / int(kept.sum()))
    described = {"units": "s", "long_name": "integration time the sample stands for"}
    return everything.isel(time=kept).assign(integration_s=xr.Variable(("time",), integration_s, described))


def full_geometry(vantage: Vantage, observation: Observation) -> xr.Dataset:
    """Place, attitude, bodies, limb and eclipses of every sample, whatever the conditions.

    Parameters
    ----------
    vantage : Vantage
        Where the antenna is and how it is pointed.
    observation : Observation
        Layout in time, and the ephemeris.

    Returns
    -------
    Dataset
        Dimensions time, axis (x, y, z), quaternion (x, y, z, scalar). Every variable carries
        its unit and meaning. Hidden is a body whose whole disk is behind the limb or
        horizon. What does not apply is left out: ``orbit_phase`` and ``beta_angle_rad`` on the
        ground, ``sidereal_time_hours`` off the Earth.

    Raises
    ------
    InputError
        As `survey_geometry`.
    """
    labels, times = sample_times(observation)
    view = view_from(vantage, times, observation.start, observation.ephemeris)
    around = Surroundings(
        times_utc=labels,
        elapsed_s=observation.step_s * np.arange(len(labels), dtype=np.float64),
        zenith=view.zenith,
        forward=view.forward,
        velocity=unit(view.velocity_km_per_s),
        sun=unit(view.bodies_km["sun"]),
    )
    attitude, pointing = attitudes(vantage.boresight, around)
    vectors = {
        "position_km": (view.position_km, "km", f"place from the centre of the {view.below}, ICRS axes"),
        "velocity_km_per_s": (
            view.velocity_km_per_s,
            "km s-1",
            f"motion about the centre of the {view.below}, ICRS axes",
        ),
        "nadir": (-view.zenith, "1", "unit vector straight down, ICRS axes"),
        "forward": (view.forward, "1", "unit vector that azimuth is counted from, ICRS axes"),
        "pole": (view.pole, "1", f"unit vector to the north pole of the {view.below}, ICRS axes"),
        **{
            f"{name}_direction": (unit(body), "1", f"unit vector to the centre of the {name.title()}, ICRS axes")
            for name, body in view.bodies_km.items()
        },
    }
    scalars: dict[str, Described] = {
        "limb_angle_rad": (view.limb_angle_rad, "rad", "angle between nadir and the limb or level horizon"),
        **_eclipses(view),
        "pointing": (pointing, "1", "index of the boresight direction"),
        **view.extra,
    }
    data = {
        "attitude": xr.Variable(
            ("time", "quaternion"), attitude, _described("1", "rotation from antenna to ICRS axes, scalar last")
        ),
        **{name: xr.Variable(("time", "axis"), v, _described(unit, text)) for name, (v, unit, text) in vectors.items()},
        **{name: xr.Variable(("time",), v, _described(unit, text)) for name, (v, unit, text) in scalars.items()},
    }
    # xarray writes the units of dates itself and refuses an attribute of that name.
    time = xr.Variable(("time",), labels, {"long_name": "time of the sample, UTC"})
    ephemeris = "built-in (ERFA)" if observation.ephemeris is None else observation.ephemeris.name
    attributes = {
        "frame": _FRAME,
        "time_system": _TIME_SYSTEM,
        "ephemeris": ephemeris,
        "body_below": view.below,
        **view.attributes,
    }
    return xr.Dataset(data, coords={"time": time}, attrs=attributes)


def _described(units: str, long_name: str) -> dict[str, str]:
    return {"units": units, "long_name": long_name}


def _eclipses(view: View) -> dict[str, Described]:
    """Depth below the limb, share in sight and whether hidden, of the Sun and, off the Earth, of the Earth."""
    bodies: dict[str, tuple[FloatArray, float]] = {"sun": (view.sun_limb_rad, SUN_RADIUS_KM)}
    if view.below != "Earth":
        bodies["earth"] = (view.earth_limb_rad, EARTH_EQUATORIAL_RADIUS_KM)
    described: dict[str, Described] = {}
    for name, (limb, radius_km) in bodies.items():
        found = eclipse(np.zeros_like(view.zenith), view.bodies_km[name], radius_km, view.zenith, limb)
        described |= _eclipse_variables(name, found)
    if view.below == "Earth":
        nowhere = np.zeros(len(view.zenith), dtype=bool)
        described["earth_hidden"] = (nowhere, "1", "does not apply on the ground: always false")
    return described


def _eclipse_variables(name: str, found: Eclipse) -> dict[str, Described]:
    title = name.title()
    return {
        f"{name}_depth_rad": (found.depth_rad, "rad", f"depth of the centre of the {title} below the limb or horizon"),
        f"{name}_radius_rad": (found.radius_rad, "rad", f"angular radius of the {title}"),
        f"{name}_visible_fraction": (found.visible_fraction, "1", f"share of the disk of the {title} in sight"),
        f"{name}_hidden": (found.hidden, "1", f"whole disk of the {title} behind the limb or horizon"),
    }
