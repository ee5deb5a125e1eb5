"""Orbit files as read: every form of time, what is passed over, and each fault refused with its line."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from astropy.time import Time
from orbit_message_cases import BETWEEN, HEADER, NODES, instants, message, miss_km, segment, truth

from sims.constants import MOON_GM_KM3_PER_S2
from sims.errors import InputError
from sims.orbit_message import read_orbit_message
from sims.orbit_states import orbit_from_message


def problems_of(tmp_path: Path, text: str) -> list[str]:
    with pytest.raises(InputError) as refused:
        message(tmp_path, text)
    assert all(problem.startswith(f"{tmp_path / 'orbit.oem'}: line ") for problem in refused.value.problems)
    return [problem.split(": line ", 1)[1] for problem in refused.value.problems]


@pytest.mark.parametrize("day_of_year", [False, True])
@pytest.mark.parametrize("system", ["UTC", "TAI", "TT", "TDB", "GPS"])
def test_every_time_system_tells_the_same_orbit(tmp_path: Path, system: str, day_of_year: bool) -> None:
    read = message(tmp_path, HEADER + segment(NODES, system=system, day_of_year=day_of_year))
    # Times are written to the microsecond: 1 um at 2 km/s is 1e-6 km.
    assert miss_km(orbit_from_message(read, instants(BETWEEN[10:-10])), truth(BETWEEN[10:-10])) < 5e-6


def test_utc_steps_over_a_leap_second(tmp_path: Path) -> None:
    # 2016-12-31T23:59:60 was one (IERS Bulletin C 52). Three states around it of a circle of 2000 km.
    stamps, seconds = ("2016-12-31T23:59:31", "2016-12-31T23:59:60.5", "2017-01-01T00:00:30"), (0.0, 29.5, 60.0)
    speed = np.sqrt(MOON_GM_KM3_PER_S2 / 2000.0)
    rows = []
    for stamp, turned in zip(stamps, np.array(seconds) * speed / 2000.0, strict=True):
        cosine, sine = np.cos(turned), np.sin(turned)
        rows.append(f"{stamp} {2000.0 * cosine} {2000.0 * sine} 0.0 {-speed * sine} {speed * cosine} 0.0")
    metadata = segment(NODES, lines=("INTERPOLATION = LINEAR",)).split("META_STOP")[0].splitlines()
    metadata = [line for line in metadata if not line.startswith(("START_TIME", "STOP_TIME"))]
    bounds = [f"START_TIME = {stamps[0]}", f"STOP_TIME = {stamps[2]}", "META_STOP"]
    read = message(tmp_path, HEADER + "\n".join([*metadata, *bounds, *rows]))
    track = orbit_from_message(read, Time(["2016-12-31T23:59:51", "2017-01-01T00:00:10"], scale="utc"))
    # 20 s, and 40 s with the leap second; the chord strays by r (n h)^2/8 = 0.14 km, 0.004 km of it along y.
    along_km = 2000.0 * np.sin(np.array([20.0, 40.0]) * speed / 2000.0)
    np.testing.assert_allclose(track.position_km[:, 1], along_km, atol=5e-3)


def test_comments_covariances_accelerations_and_odd_line_ends_are_passed_over(tmp_path: Path) -> None:
    rows = segment(NODES).splitlines()
    at = next(index for index, row in enumerate(rows) if row.startswith("2027")) + 3
    rows[at] += " 0.0 -1e-3 2.5E-04"
    covariance = [
        "COVARIANCE_START",
        "EPOCH = 2027-06-01T00:00:00",
        "COV_REF_FRAME = RTN",
        "3.3e-04",
        "4.6e-04 6.7e-04",
    ]
    text = HEADER + "\n\n".join([*rows, *covariance, "COVARIANCE_STOP"]).replace("COMMENT", "  COMMENT") + "\n\n\n"
    plain = message(tmp_path, HEADER + segment(NODES))
    path = tmp_path / "other.oem"
    path.write_bytes(b"\xef\xbb\xbf" + text.replace("\n", "\r\n").encode())
    np.testing.assert_array_equal(read_orbit_message(path).segments[0].position_km, plain.segments[0].position_km)


# --- what is refused ------------------------------------------------------------------------------------------------

GOOD = HEADER + segment(NODES)
LINES = GOOD.splitlines()
FIRST_STATE = next(number for number, line in enumerate(LINES, start=1) if line.startswith("2027"))


def line_of(start: str) -> int:
    return next(number for number, line in enumerate(LINES, start=1) if line.startswith(start))


def put(start: str, new: str) -> Callable[[], tuple[str, int]]:
    """Write another line in place of the one that starts so."""
    return lambda: at_line(line_of(start), new)


def at_line(number: int, new: str) -> tuple[str, int]:
    return "\n".join([*LINES[: number - 1], new, *LINES[number:]]) + "\n", number


def field(index: int, new: str) -> Callable[[], tuple[str, int]]:
    """Write another value into the fifth state; 0 is its time."""

    def change() -> tuple[str, int]:
        fields = LINES[FIRST_STATE + 3].split()
        fields[index] = new
        return at_line(FIRST_STATE + 4, " ".join(fields))

    return change


def digit(index: int, by: float) -> Callable[[], tuple[str, int]]:
    """Change a number of the fifth state."""
    return lambda: field(index, f"{float(LINES[FIRST_STATE + 3].split()[index]) + by:.12f}")()


def sign(index: int) -> Callable[[], tuple[str, int]]:
    return lambda: field(index, f"{-float(LINES[FIRST_STATE + 3].split()[index]):.12f}")()


def state(row: str) -> Callable[[], tuple[str, int]]:
    return lambda: at_line(FIRST_STATE + 4, LINES[FIRST_STATE + 3].split()[0] + " " + row)


def without(start: str, blamed: str) -> Callable[[], tuple[str, int]]:
    return lambda: (at_line(line_of(start), "")[0], line_of(blamed))


FAULTS: dict[str, tuple[Callable[[], tuple[str, int]], str]] = {
    "version": (put("CCSDS", "CCSDS_OEM_VERS = 9.0"), "version 9.0; can be read: 1.0, 2.0, 3.0"),
    "no originator": (without("ORIGINATOR", "META_START"), "header ends without ORIGINATOR"),
    "date of creation": (put("CREATION", "CREATION_DATE = yesterday"), "not an instant on UTC, got 'yesterday'"),
    "unknown in header": (put("ORIGINATOR", "ORIGINATOR = X\nMOOD = fine"), "unknown keyword 'MOOD'"),
    "no object": (without("OBJECT_ID", "META_START"), "the segment's OBJECT_ID is missing"),
    "no frame": (without("REF_FRAME", "META_START"), "REF_FRAME is missing"),
    "no time system": (without("TIME_SYSTEM", "META_START"), "TIME_SYSTEM is missing"),
    "no stop": (without("STOP_TIME", "META_START"), "STOP_TIME is missing"),
    "centre": (put("CENTER", "CENTER_NAME = EARTH"), "CENTER_NAME = EARTH; can be honoured: MOON"),
    "frame": (put("REF_FRAME", "REF_FRAME = TOD"), "REF_FRAME = TOD; can be honoured: ICRF, GCRF, EME2000, J2000"),
    "time system": (put("TIME_SYSTEM", "TIME_SYSTEM = UT1"), "TIME_SYSTEM = UT1; can be honoured: UTC, TAI, TT"),
    "unknown": (put("OBJECT_ID", "OBJECT_ID = 2027-000A\nCOLOUR = red"), "unknown keyword 'COLOUR'"),
    "comment that is none": (put("COMMENT states", "COMMENTARY = states"), "a state is a time and 6 numbers"),
    "twice": (put("OBJECT_ID", "OBJECT_ID = 2027-000A\nOBJECT_ID = 2027-000A"), "OBJECT_ID is given twice, first in"),
    "no value": (put("INTERPOLATION_D", "INTERPOLATION_DEGREE ="), "not of the form KEYWORD = value"),
    "method": (put("INTERPOLATION ", "INTERPOLATION = SPLINE"), "INTERPOLATION = SPLINE; can be honoured: HERMITE"),
    "no degree": (without("INTERPOLATION_DEGREE", "INTERPOLATION "), "needs INTERPOLATION_DEGREE"),
    "degree of 0": (put("INTERPOLATION_D", "INTERPOLATION_DEGREE = 0"), "whole numbers from 1 to 30"),
    "broken degree": (put("INTERPOLATION_D", "INTERPOLATION_DEGREE = 7.5"), "whole numbers from 1 to 30"),
    "even degree": (put("INTERPOLATION_D", "INTERPOLATION_DEGREE = 8"), "a Hermite polynomial through states is of"),
    "linear": (put("INTERPOLATION ", "INTERPOLATION = LINEAR"), "INTERPOLATION_DEGREE = 7; LINEAR is of degree 1"),
    "start": (put("START_TIME", "START_TIME = 2027-06-01T00:10:00"), "first state, which lies 600.000 s outside of it"),
    "stop": (put("STOP_TIME", "STOP_TIME = 2027-06-01T07:00:00"), "last state, which lies 3600.000 s inside of it"),
    "part": (put("INTERPOLATION ", "INTERPOLATION = HERMITE\nUSEABLE_STOP_TIME = 2027-153T00:00:00"), "lies outside"),
    "no end of metadata": (without("META_STOP", "META_START"), "META_START without META_STOP"),
    "metadata twice": (put("META_STOP", "META_STOP\nMETA_STOP"), "META_STOP does not belong into the states"),
    "five numbers": (state("1 2 3 4 5"), "a state is a time and 6 numbers, or 9 with accelerations; got 5"),
    "eight numbers": (state("1800 2 3 4 5 6 7 8"), "got 8 after '2027-06-01T00:08:00.000000'"),
    "no number": (field(2, "12,5"), "not all of the state are finite numbers, got 12,5"),
    "not a number": (field(3, "nan"), "not all of the state are finite numbers, got nan"),
    "infinite": (field(4, "-inf"), "not all of the state are finite numbers, got -inf"),
    "underscore": (field(5, "1_0.5"), "not all of the state are finite numbers, got 1_0.5"),
    "acceleration": (state("1800 2 3 .4 1.5 .6 0 0 zero"), "not all of the state are finite numbers, got zero"),
    "no time": (field(0, "2027-06-01 00:08:00"), "got 7 after '2027-06-01'"),
    "no such day": (field(0, "2027-366T00:08:00"), "not an instant on UTC, got '2027-366T00:08:00'"),
    "no such month": (field(0, "2027-13-01T00:08:00"), "not an instant on UTC, got '2027-13-01T00:08:00'"),
    "no such second": (field(0, "2027-06-01T00:07:60"), "not an instant on UTC, got '2027-06-01T00:07:60'"),
    "no leap second": (field(0, "2027-06-01T23:59:60"), "not an instant on UTC, got '2027-06-01T23:59:60'"),
    "time repeats": (field(0, "2027-06-01T00:06:00"), "the time does not rise from 2027-06-01T00:06:00.000000 in line"),
    "below the ground": (state("1000 0 0 0 1.5 0"), "1000 km from the Moon's centre; 1737.4 (mean radius) to"),
    "in metres": (state("1.9e6 0 0 0 1.5 0"), "1.9e+06 km from the Moon's centre"),
    "in metres a second": (state("1900 0 0 0 1500 0"), "up to 10 km/s"),
    "at rest": (state("1900 0 0 0 0 0"), "not straight up or down are allowed"),
    "digit of the place": (digit(1, 5.0), "unexplained, up to 0.51 km and"),
    "digit of the motion": (digit(6, 0.02), "one of the two is wrong, or a manoeuvre needs a segment of its own"),
    "sign of the motion": (sign(5), "the state does not follow from that of line"),
    "falling": (state("1900 0 0 -1 0 0"), "not straight up or down are allowed"),
}  # fmt: skip


@pytest.mark.parametrize("name", list(FAULTS))
def test_a_fault_is_refused_with_its_line(tmp_path: Path, name: str) -> None:
    change, told = FAULTS[name]
    text, line = change()
    problems = problems_of(tmp_path, text)
    # What is wrong may be the second of two lines put in, or the degree in the line below its method.
    next_line = name in ("unknown in header", "unknown", "twice", "metadata twice", "part", "linear")
    assert any(problem.startswith(f"{line + next_line}: ") and told in problem for problem in problems)


def test_the_good_message_has_no_fault(tmp_path: Path) -> None:
    message(tmp_path, GOOD)


def test_all_faults_are_told_at_once_in_order(tmp_path: Path) -> None:
    lines = list(LINES)
    changes = {
        "CENTER": "CENTER_NAME = MARS", "REF_FRAME": "REF_FRAME = ITRF2000", "TIME_SYSTEM": "TIME_SYSTEM = SCLK",
        "START_TIME": "START_TIME = soon",
    }  # fmt: skip
    wanted = []
    for start, new in changes.items():
        lines[line_of(start) - 1] = new
        wanted.append(line_of(start))
    for offset, new in ((5, "2027-06-01T00:10:00 1 2"), (9, "2027-99-01T00:18:00 1900 0 0 0 1 0"), (12, "x y z")):
        lines[FIRST_STATE - 1 + offset] = new
        wanted.append(FIRST_STATE + offset)
    text = "\n".join(lines) + "\n" + segment(NODES + 1e5).replace("2027-000A", "2027-000B")
    problems = problems_of(tmp_path, text)
    found = [int(problem.split(":")[0]) for problem in problems]
    assert found == sorted(found)
    assert set(wanted) < set(found)
    assert "OBJECT_ID = 2027-000B, but 2027-000A in line" in problems[-1]


def test_segments_that_overlap_or_run_backwards_are_refused(tmp_path: Path) -> None:
    for second in (NODES + 7200.0, NODES - 30_000.0):
        text = HEADER + segment(NODES) + segment(second)
        line = [number for number, row in enumerate(text.splitlines(), start=1) if row == "META_START"][1]
        (problem,) = problems_of(tmp_path, text)
        assert problem.startswith(f"{line}: the segment may be used from ")
        assert "segments must follow one another in time" in problem


def test_too_few_states_for_the_polynomial_are_refused(tmp_path: Path) -> None:
    lines = ("INTERPOLATION = LAGRANGE", "INTERPOLATION_DEGREE = 7")
    (problem,) = problems_of(tmp_path, HEADER + segment(NODES[:7], lines=lines))
    assert "the segment holds 7 states; LAGRANGE of degree 7 needs 8" in problem
    message(tmp_path, HEADER + segment(NODES[:8], lines=lines))
    (problem,) = problems_of(tmp_path, HEADER + segment(NODES).split("COMMENT states")[0])
    assert "the segment holds no state" in problem


def test_open_covariance_is_refused(tmp_path: Path) -> None:
    (problem,) = problems_of(tmp_path, GOOD + "COVARIANCE_START\n" + "1.0\n")
    assert problem == f"{len(LINES) + 1}: COVARIANCE_START without COVARIANCE_STOP"


@pytest.mark.parametrize(
    "text", ["", "\n\n", "time,x,y,z\n2027-06-01,1,2,3\n" * 50, '<?xml version="1.0"?>\n<oem>\n</oem>\n', "{}\n"]
)
def test_another_form_of_file_is_one_fault(tmp_path: Path, text: str) -> None:
    (problem,) = problems_of(tmp_path, text)
    assert "begins with CCSDS_OEM_VERS = 1.0 or 2.0 or 3.0" in problem


def test_a_header_alone_is_refused(tmp_path: Path) -> None:
    assert any("no segment: META_START is missing" in problem for problem in problems_of(tmp_path, HEADER))


def test_what_is_no_text_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "binary.oem"
    path.write_bytes(b"\xff\xfe\x00\x81" * 100)
    for unreadable in (path, tmp_path, tmp_path / "none.oem"):
        with pytest.raises(InputError, match="cannot be read as a text file"):
            read_orbit_message(unreadable)
