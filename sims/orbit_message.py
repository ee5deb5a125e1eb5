"""An orbit from a file in the open form of the space agencies: reader of Orbit Ephemeris Messages.

CCSDS 502.0-B, Orbit Data Messages, the OEM as text of keywords and values (KVN). Every line is
judged; what cannot be honoured is refused with its number, all of it together. Stands
beside `sims.orbit`; `sims.orbit_lines` sorts the lines, `sims.orbit_states` interpolates.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
from astropy.time import Time
from numpy.typing import NDArray

from sims.constants import MOON_MEAN_RADIUS_KM
from sims.errors import InputError, raise_if_any
from sims.orbit_lines import HEADER, META, SCALES, Block, Entry, sort_lines, times_on_tt
from sims.orbit_sequence import steps_between

FloatArray = NDArray[np.float64]
VERSIONS = ("1.0", "2.0", "3.0")
FRAMES = ("ICRF", "GCRF", "EME2000", "J2000")  # the last two are one
METHODS = {"HERMITE": 7, "LAGRANGE": 7, "LINEAR": 1}  # degrees taken where the message names none
MOST_DEGREE = 30
FARTHEST_KM, FASTEST_KM_PER_S = 400_000.0, 10.0  # beyond lies no orbit round the Moon, but one in m and m/s does
_TIME_SLACK_S = 1e-3  # messages round their times to milliseconds


@dataclass(frozen=True)
class OrbitSegment:
    """One block of states with the metadata that hold for it.

    Attributes
    ----------
    times : Time[node]
        TT.
    position_km, velocity_km_per_s : ndarray[node, axis]
        From the Moon's centre, axes as `frame` says.
    frame : str
        ICRF, GCRF, EME2000 or J2000.
    method : str
        HERMITE, LAGRANGE or LINEAR.
    degree : int
        Of the interpolating polynomial.
    start, stop : Time
        Between which the states may be used, TT.
    line : int
        Where its metadata begin.
    node_lines : tuple of int
        Where its states stand.
    """

    times: Time
    position_km: FloatArray
    velocity_km_per_s: FloatArray
    frame: str
    method: str
    degree: int
    start: Time
    stop: Time
    line: int
    node_lines: tuple[int, ...]

    @property
    def nodes_needed(self) -> int:
        """States that one polynomial goes through."""
        return (self.degree + 1) // 2 if self.method == "HERMITE" else self.degree + 1


@dataclass(frozen=True)
class OrbitMessage:
    """An orbit as a row of segments, in order of time.

    Attributes
    ----------
    path : Path
        Where it was read from.
    object_name : str
        What flies on it.
    segments : tuple of OrbitSegment
    """

    path: Path
    object_name: str
    segments: tuple[OrbitSegment, ...]


def read_orbit_message(path: Path) -> OrbitMessage:
    """Read an Orbit Ephemeris Message.

    Parameters
    ----------
    path : Path
        Text file, KVN form, one object about the Moon, in ICRF, GCRF or EME2000 (J2000), times
        on UTC, TAI, TT, TDB or GPS. Accelerations and covariances are passed over. Where a segment
        names no interpolation, Hermite of degree 7 is taken. States must follow one from the other
        as the Moon's gravity has it (`sims.orbit_sequence`): a manoeuvre begins a new segment.

    Returns
    -------
    OrbitMessage

    Raises
    ------
    InputError
        With every fault of the file and its line.
    """
    try:
        lines = path.read_text(encoding="utf-8-sig").split("\n")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read as a text file: {error}") from None
    _refuse_other_forms(path, lines)
    faults: list[Entry] = []
    header, blocks = sort_lines(lines, faults)
    _judge_header(header, blocks[0].line if blocks else len(lines), faults)
    _judge_object(blocks, faults)
    segments = [segment for block in blocks if (segment := _segment(block, faults)) is not None]
    faults += [
        Entry(
            later.line,
            f"the segment may be used from {later.start.isot} TT, before the one of line {earlier.line} ends, at "
            f"{earlier.stop.isot}; segments must follow one another in time",
        )
        for earlier, later in pairwise(segments)
        if (later.start - earlier.stop).to_value("s") < -_TIME_SLACK_S
    ]
    raise_if_any([f"{path}: line {line}: {text}" for line, text in sorted(faults)])
    return OrbitMessage(path, blocks[0].meta["OBJECT_NAME"].text, tuple(segments))


def _refuse_other_forms(path: Path, lines: Sequence[str]) -> None:
    """A file of another kind is one fault, not one a line."""
    first = next(((number, line.strip()) for number, line in enumerate(lines, start=1) if line.strip()), (1, ""))
    if first[1].partition("=")[0].strip() != HEADER[0]:
        raise InputError(
            f"{path}: line {first[0]}: begins with {first[1][:60]!r}; an Orbit Ephemeris Message in KVN form begins "
            f"with {HEADER[0]} = {' or '.join(VERSIONS)}"
        )


def _judge_header(header: dict[str, Entry], end: int, faults: list[Entry]) -> None:
    faults += [Entry(end, f"the header ends without {key}") for key in HEADER if key not in header]
    if HEADER[0] in header and header[HEADER[0]].text not in VERSIONS:
        line, got = header[HEADER[0]]
        faults.append(Entry(line, f"version {got}; can be read: {', '.join(VERSIONS)}"))
    if "CREATION_DATE" in header:
        times_on_tt([header["CREATION_DATE"]], "UTC", faults)


def _judge_object(blocks: Sequence[Block], faults: list[Entry]) -> None:
    if not blocks:
        faults.append(Entry(1, "the message has no segment: META_START is missing"))
    for key in ("OBJECT_NAME", "OBJECT_ID"):
        named = [block.meta[key] for block in blocks if key in block.meta]
        faults += [
            Entry(entry.line, f"{key} = {entry.text}, but {named[0].text} in line {named[0].line}; one is allowed")
            for entry in named[1:]
            if entry.text != named[0].text
        ]


def _segment(block: Block, faults: list[Entry]) -> OrbitSegment | None:
    """A segment judged and converted; None where something is wrong with it."""
    before = len(faults)
    faults += [Entry(block.line, f"the segment's {key} is missing") for key in META if key not in block.meta]
    frame = _honoured(block, "REF_FRAME", FRAMES, faults)
    scale = _honoured(block, "TIME_SYSTEM", tuple(SCALES), faults)
    _honoured(block, "CENTER_NAME", ("MOON",), faults)
    method, degree = _interpolation(block, faults)
    _judge_states(block, faults)
    # Without a known scale the dates are read as TT, to judge their form and order all the same.
    bounds = _bounds(block, scale or "TT", faults)
    stamps = [Entry(state.line, state.time) for state in block.states]
    if not stamps:
        faults.append(Entry(block.line, "the segment holds no state"))
        return None
    times = times_on_tt(stamps, scale or "TT", faults)
    if times is not None:
        _judge_order(block, times, faults)
        _judge_bounds(block, times, bounds, faults)
    numbers = [state.numbers for state in block.states if state.numbers is not None]
    if len(faults) > before or len(numbers) < len(block.states) or frame is None or times is None:
        return None
    states = np.array(numbers, dtype=float)
    _judge_sequence(block, times, states, faults)
    segment = OrbitSegment(
        times=times,
        position_km=states[:, :3],
        velocity_km_per_s=states[:, 3:6],
        frame=frame,
        method=method,
        degree=degree,
        start=bounds.get("USEABLE_START_TIME", bounds["START_TIME"]),
        stop=bounds.get("USEABLE_STOP_TIME", bounds["STOP_TIME"]),
        line=block.line,
        node_lines=tuple(state.line for state in block.states),
    )
    if len(times) < segment.nodes_needed:
        wanted = f"{method} of degree {degree} needs {segment.nodes_needed}"
        faults.append(Entry(block.line, f"the segment holds {len(times)} states; {wanted}"))
        return None
    return segment


def _honoured(block: Block, key: str, allowed: Sequence[str], faults: list[Entry]) -> str | None:
    """The value of a keyword, or None where it is missing or cannot be honoured."""
    if key not in block.meta:
        return None
    line, got = block.meta[key]
    if got.upper() in allowed:
        return got.upper()
    faults.append(Entry(line, f"{key} = {got}; can be honoured: {', '.join(allowed)}"))
    return None


def _interpolation(block: Block, faults: list[Entry]) -> tuple[str, int]:
    line, given = block.meta.get("INTERPOLATION", Entry(block.line, "HERMITE"))
    method = given.upper()
    if method not in METHODS:
        faults.append(Entry(line, f"INTERPOLATION = {given}; can be honoured: {', '.join(METHODS)}"))
        return "HERMITE", METHODS["HERMITE"]
    if "INTERPOLATION_DEGREE" not in block.meta:
        if "INTERPOLATION" in block.meta and method != "LINEAR":
            faults.append(Entry(line, f"INTERPOLATION = {given} needs INTERPOLATION_DEGREE"))
        return method, METHODS[method]
    line, text = block.meta["INTERPOLATION_DEGREE"]
    if not (text.isascii() and text.isdigit() and 1 <= int(text) <= MOST_DEGREE):
        faults.append(Entry(line, f"INTERPOLATION_DEGREE = {text}; whole numbers from 1 to {MOST_DEGREE} are allowed"))
        return method, METHODS[method]
    degree = int(text)
    if method == "HERMITE" and degree % 2 == 0:
        faults.append(
            Entry(line, f"INTERPOLATION_DEGREE = {text}; a Hermite polynomial through states is of odd degree")
        )
    if method == "LINEAR" and degree != 1:
        faults.append(Entry(line, f"INTERPOLATION_DEGREE = {text}; LINEAR is of degree 1"))
    return method, degree


def _judge_states(block: Block, faults: list[Entry]) -> None:
    """Refuse states that no orbit round the Moon has, such as those in metres or at rest."""
    read = [(state.line, state.numbers) for state in block.states if state.numbers is not None]
    states = np.array([numbers for _, numbers in read], dtype=float).reshape(-1, 6)
    distance, speed = np.linalg.norm(states[:, :3], axis=1), np.linalg.norm(states[:, 3:], axis=1)
    swept = np.linalg.norm(np.cross(states[:, :3], states[:, 3:]), axis=1)
    for at in np.flatnonzero((distance < MOON_MEAN_RADIUS_KM) | (distance > FARTHEST_KM)):
        allowed = f"{MOON_MEAN_RADIUS_KM:g} (mean radius) to {FARTHEST_KM:g} km are allowed"
        faults.append(Entry(read[at][0], f"the place is {distance[at]:.6g} km from the Moon's centre; {allowed}"))
    for at in np.flatnonzero((speed > FASTEST_KM_PER_S) | (swept <= 1e-9 * distance * speed)):
        allowed = f"up to {FASTEST_KM_PER_S:g} km/s and not straight up or down are allowed"
        faults.append(Entry(read[at][0], f"the motion is {states[at, 3:].tolist()} km/s; {allowed}"))


def _judge_sequence(block: Block, times: Time, states: FloatArray, faults: list[Entry]) -> None:
    """Refuse states that do not follow from the ones before: a wrong digit, or a motion that changes at once."""
    seconds = ((times.jd1 - times.jd1[0]) + (times.jd2 - times.jd2[0])) * 86_400.0
    steps = steps_between(seconds, states[:, :3], states[:, 3:])
    faults += [
        Entry(
            block.states[at + 1].line,
            f"the state does not follow from that of line {block.states[at].line}, "
            f"{seconds[at + 1] - seconds[at]:.1f} s before: gravity leaves {steps.place_km[at]:.3g} km and "
            f"{steps.motion_km_per_s[at]:.3g} km/s between them unexplained, up to {steps.place_limit_km[at]:.2g} km "
            f"and {steps.motion_limit_km_per_s[at]:.2g} km/s are allowed; one of the two is wrong, or a manoeuvre "
            "needs a segment of its own",
        )
        for at in np.flatnonzero(steps.broken)
    ]


def _bounds(block: Block, scale: str, faults: list[Entry]) -> dict[str, Time]:
    """Times of the metadata, TT, as far as they can be read."""
    keys = [key for key in block.meta if key.endswith(("START_TIME", "STOP_TIME"))]
    read = {key: times_on_tt([block.meta[key]], scale, faults) for key in keys}
    return {key: time[0] for key, time in read.items() if time is not None}


def _judge_order(block: Block, times: Time, faults: list[Entry]) -> None:
    steps = (times[1:] - times[:-1]).to_value("s")
    for at in np.flatnonzero(steps <= 0.0):
        later, earlier = block.states[at + 1], block.states[at]
        faults.append(
            Entry(later.line, f"the time does not rise from {earlier.time} in line {earlier.line}, got {later.time}")
        )


def _judge_bounds(block: Block, times: Time, bounds: dict[str, Time], faults: list[Entry]) -> None:
    """Refuse a span that runs backwards, that the states do not fill or keep to, or a part that leaves the whole."""
    for first, last in (("START_TIME", "STOP_TIME"), ("USEABLE_START_TIME", "USEABLE_STOP_TIME")):
        if first in bounds and last in bounds and (bounds[last] - bounds[first]).to_value("s") <= 0.0:
            faults.append(Entry(block.meta[last].line, f"{last} does not come after {first}"))
    for key, end, sign, word in (("START_TIME", times[0], 1.0, "first"), ("STOP_TIME", times[-1], -1.0, "last")):
        if key not in bounds:
            continue
        inside_s = sign * (end - bounds[key]).to_value("s")
        if abs(inside_s) > _TIME_SLACK_S:
            side = "inside" if inside_s > 0.0 else "outside"
            faults.append(
                Entry(block.meta[key].line, f"{key} is to be the time of the {word} state, which lies "
                f"{abs(inside_s):.3f} s {side} of it")
            )  # fmt: skip
        part = f"USEABLE_{key}"
        if part in bounds and sign * (bounds[part] - bounds[key]).to_value("s") < -_TIME_SLACK_S:
            faults.append(Entry(block.meta[part].line, f"{part} lies outside of {key}"))
