"""Orbit Ephemeris Messages to test with, written from the standard's description: exact states of Kepler ellipses."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from astropy.time import Time, TimeDelta
from numpy.typing import NDArray

from sims.config import LunarOrbit, VerticalBoresight
from sims.orbit import OrbitTrack, lunar_orbit
from sims.orbit_message import OrbitMessage, read_orbit_message

FloatArray = NDArray[np.float64]
START = Time("2027-06-01T00:00:00", scale="utc")
ORBIT = LunarOrbit(
    kind="lunar-orbit", altitude_km=500.0, eccentricity=0.15, inclination_deg=75.0, node_deg=20.0, pericentre_deg=140.0,
    phase_deg=130.0, oblateness=False, boresight=VerticalBoresight(kind="vertical"),
)  # fmt: skip
CIRCLE = ORBIT.model_copy(update={"altitude_km": 100.0, "eccentricity": 0.0})
HEADER = """CCSDS_OEM_VERS = 2.0
COMMENT An invented orbiter, states of a Kepler ellipse
CREATION_DATE = 2027-05-30T12:00:00
ORIGINATOR = QUIETLIMB TESTS
"""


def instants(seconds: FloatArray | list[float], start: Time = START) -> Time:
    return start.tt + TimeDelta(np.asarray(seconds, dtype=float), format="sec")


def truth(seconds: FloatArray | list[float], orbit: LunarOrbit = ORBIT) -> OrbitTrack:
    return lunar_orbit(orbit, instants(seconds), START.tt)


def written_times(seconds: FloatArray, system: str, day_of_year: bool = False) -> list[str]:
    """Times as a message writes them, to the microsecond."""
    times = instants(seconds)
    # GPS time runs 19 s behind TAI.
    times = times.tai - TimeDelta(19.0, format="sec") if system == "GPS" else getattr(times, system.lower())
    times.precision = 6
    return [f"{text[:4]}-{text[5:8]}T{text[9:]}" for text in times.yday] if day_of_year else list(times.isot)


def segment(
    seconds: FloatArray,
    orbit: LunarOrbit = ORBIT,
    system: str = "UTC",
    frame: str = "ICRF",
    lines: tuple[str, ...] = ("INTERPOLATION = HERMITE", "INTERPOLATION_DEGREE = 7"),
    turned: FloatArray | None = None,
    day_of_year: bool = False,
) -> str:
    """A segment of exact Kepler states."""
    stamps = written_times(seconds, system, day_of_year)
    track = truth(seconds, orbit)
    states = np.hstack([track.position_km, track.velocity_km_per_s])
    if turned is not None:
        states = np.hstack([track.position_km @ turned.T, track.velocity_km_per_s @ turned.T])
    metadata = [
        "META_START", "OBJECT_NAME = INVENTED ORBITER", "OBJECT_ID = 2027-000A", "CENTER_NAME = MOON",
        f"REF_FRAME = {frame}", f"TIME_SYSTEM = {system}", f"START_TIME = {stamps[0]}", f"STOP_TIME = {stamps[-1]}",
        *lines, "META_STOP",
    ]  # fmt: skip
    rows = [
        f"{stamp} " + " ".join(f"{value:.12f}" for value in state) for stamp, state in zip(stamps, states, strict=True)
    ]
    return "\n".join([*metadata, "COMMENT states follow", *rows]) + "\n"


def message(tmp_path: Path, text: str, name: str = "orbit.oem") -> OrbitMessage:
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return read_orbit_message(path)


def miss_km(track: OrbitTrack, exact: OrbitTrack) -> float:
    return float(np.linalg.norm(track.position_km - exact.position_km, axis=1).max())


NODES = np.arange(0.0, 6.0 * 3600.0 + 1.0, 120.0)
BETWEEN = np.linspace(0.0, NODES[-1], 1777)
