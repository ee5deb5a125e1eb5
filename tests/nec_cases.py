"""Antennas computed by an independent NEC-2 engine and printed in the layout of that code, for its reader's tests."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from PyNEC import nec_context

from sims.config_beam import NecSource

SENSES = ("LINEAR", "RIGHT", "LEFT")
Ends = tuple[float, float, float, float, float, float]


@dataclass(frozen=True, eq=False)
class Run:
    """One frequency of one antenna; fields and gains run over theta first, as NEC-2 prints them."""

    frequency_mhz: float
    input_power_w: float
    theta_deg: np.ndarray
    phi_deg: np.ndarray
    e_theta: np.ndarray
    e_phi: np.ndarray
    gain_db: np.ndarray


def run(
    ends: Ends, radius_m: float, segments: int, fed: int, frequency_mhz: float, *,
    plane: bool = False, step_deg: float = 5.0, conductivity_s_per_m: float | None = None,
    ground: tuple[float, float] | None = None,
) -> Run:  # fmt: skip
    """A wire, alone, over a perfect plane, or over ground of a permittivity and a conductivity in S/m."""
    context = nec_context()
    context.get_geometry().wire(1, segments, *ends, radius_m, 1.0, 1.0)
    context.geometry_complete(1 if plane else 0)
    if conductivity_s_per_m is not None:
        context.ld_card(5, 0, 0, 0, conductivity_s_per_m, 0.0, 0.0)
    if ground is not None:
        context.gn_card(0, 0, *ground, 0.0, 0.0, 0.0, 0.0)
    else:
        context.gn_card(1 if plane else -1, 0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0)
    context.ex_card(0, 1, fed, 0, 0, 1.0, 0.0, 0.0, 0.0, 0.0, 0.0)
    context.fr_card(0, 1, frequency_mhz, 0.0)
    half = plane or ground is not None
    thetas, phis = round((90 if half else 180) / step_deg) + 1, round(360 / step_deg)
    context.rp_card(0, thetas, phis, 1, 0, 0, 0, 0.0, 0.0, step_deg, step_deg, 0.0, 0.0)
    pattern, source = context.get_radiation_pattern(0), context.get_input_parameters(0)
    return Run(
        frequency_mhz, float(np.sum(source.get_power())), np.array(pattern.get_theta_angles()),
        np.array(pattern.get_phi_angles()), np.array(pattern.get_e_theta()), np.array(pattern.get_e_phi()),
        np.array(pattern.get_gain_tot()),
    )  # fmt: skip


def two_metre_dipole(frequency_mhz: float, **settings: float) -> Run:
    """2 m along x, 1 mm radius, 41 segments, fed in the middle, in free space."""
    return run((-1, 0, 0, 1, 0, 0), 0.001, 41, 21, frequency_mhz, **settings)  # type: ignore[arg-type]


def header(frequency_mhz: float, input_power_w: float | None, *, fortran: bool) -> list[str]:
    if fortran:
        lines = ["                    - - - - - - FREQUENCY - - - - - -", "",
                 f"                     FREQUENCY={frequency_mhz:11.4E} MHZ"]  # fmt: skip
        budget = ["                    - - - POWER BUDGET - - -", "", "            INPUT POWER   ={:12.4E} WATTS"]
    else:
        lines = [
            "                    --------- FREQUENCY --------",
            f"            FREQUENCY :{frequency_mhz:11.4E} MHz",
        ]
        budget = ["                    ---------- POWER BUDGET ---------", "            INPUT POWER   ={:12.4E} Watts"]
    if input_power_w is not None:
        lines += [line.format(input_power_w) for line in budget]
    return [*lines, ""]


def columns(*, fortran: bool) -> list[str]:
    bar = " - - " if fortran else " ---- "
    return [
        "", f"{'- - - RADIATION PATTERNS - - -' if fortran else '---------- RADIATION PATTERNS -----------':>70}", "",
        f"{bar}ANGLES{bar}  {bar}POWER GAINS{bar}  {bar}POLARIZATION{bar}  {bar}E(THETA){bar}  {bar}E(PHI){bar}",
        "  THETA      PHI       VERTC    HORIZ    TOTAL       AXIAL      TILT  SENSE   MAGNITUDE    PHASE    MAGNITUDE"
        "     PHASE",
        " DEGREES   DEGREES        DB       DB       DB       RATIO   DEGREES            VOLTS/M   DEGREES     VOLTS/M"
        "   DEGREES",
    ]  # fmt: skip


def rows(found: Run, *, fortran: bool = False, blank_sense: bool = False) -> list[str]:
    theta, phi = np.tile(found.theta_deg, len(found.phi_deg)), np.repeat(found.phi_deg, len(found.theta_deg))
    digits = 5 if fortran else 4
    lines = []
    for number, (one, two) in enumerate(zip(found.e_theta, found.e_phi, strict=True)):
        sense = "" if blank_sense else SENSES[number % len(SENSES)]
        lines.append(
            f"{theta[number]:8.2f}  {phi[number]:8.2f}  {-999.99:8.2f} {-999.99:8.2f} {found.gain_db[number]:8.2f} "
            f"{0.0:11.4f} {0.0:9.2f} {sense:6}  {abs(one):.{digits}E} {np.degrees(np.angle(one)):9.2f}  "
            f"{abs(two):.{digits}E} {np.degrees(np.angle(two)):9.2f}"
        )
    return lines


def listing(runs: Sequence[Run], *, fortran: bool = False, budget: bool = True, blank_sense: bool = False) -> list[str]:
    """Lines of a print-out."""
    lines = ["", "          NUMERICAL ELECTROMAGNETICS CODE", ""]
    for found in runs:
        lines += header(found.frequency_mhz, found.input_power_w if budget else None, fortran=fortran)
        lines += columns(fortran=fortran)
        lines += [*rows(found, fortran=fortran, blank_sense=blank_sense), "", ""]
    return [*lines, " RUN TIME =     0.100"]


def written(path: Path, lines: Sequence[str]) -> NecSource:
    path.write_text("\n".join(lines) + "\n")
    return NecSource(format="nec", files=(path,))
