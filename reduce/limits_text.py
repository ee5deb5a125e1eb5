"""What the turning points say of the gas, as a section of a page: the words and columns to `reduce.limits`."""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from typing import Any

COLUMNS = 100
INDENT = "  "
COLD_SHARE = 0.01

# Key, what it is, and its unit.
NUMBERS = (
    ("spin_temperature_k", "spin temperature", "K"),
    ("kinetic_temperature_max_k", "gas no hotter than", "K"),
    ("heat_max_ev_per_baryon", "heat left, at most", "eV/baryon"),
    ("cooling_slope", "dln T_K/dln(1+z)", ""),
    ("heating_share_of_adiabatic", "cooling cancelled by heat", ""),
    ("heating_k_per_log_redshift", "heating", "K per unit of ln(1+z)"),
    ("heating_ev_per_baryon_per_hubble_time", "heating", "eV/baryon in a Hubble time"),
    ("collisional_coupling", "coupling by collisions", ""),
    ("lyman_alpha_coupling", "coupling by Lyman-alpha", ""),
    ("lyman_alpha_effective_intensity", "S_alpha J", "/(cm2 s Hz sr)"),
    ("lyman_alpha_intensity", "J, with S_alpha", "/(cm2 s Hz sr)"),
)
COUNTS = {
    "darker_than_any_spin_temperature": "darker than any spin temperature makes it",
    "colder_than_unheated_gas": "colder than unheated gas",
    "in_emission": "in emission",
    "saturated_emission": "brighter than the hottest gas",
    "absorption_weaker_than_by_collisions": "fainter than collisions alone make it",
}
LIMITS = (("upper_95", "<", "above"), ("lower_95", ">", "below"))


def limits_text(limits: Mapping[str, Any]) -> str:
    """A section of a page.

    Parameters
    ----------
    limits : mapping
        From `reduce.limits.limits_of`.

    Returns
    -------
    str
        Plain text of at most `COLUMNS` columns, ending in a line break.
    """
    lines = ["The gas, without a model of its sources: median and 68 % interval; limits of 95 %"]
    lines += _wrapped(f"radio background: {limits['background']['text']}", INDENT)
    for point, found in limits["points"].items():
        low, high = found["redshift"]["interval_68"]
        lines += ["", f"{INDENT}{point}, redshift {found['redshift']['median']:.2f} ({low:.2f} to {high:.2f})"]
        for key, name, unit in NUMBERS:
            if key in found:
                lines += _wrapped(_number(found[key], name, unit, limits["draws"]), 2 * INDENT)
        lines += _wrapped(_counted(found, limits["draws"]), 2 * INDENT)
        for warning in _warnings(point, found, limits["background"]["excess_k"]):
            lines += _wrapped(f"! {warning}", 2 * INDENT)
    lines += ["", f"{INDENT}Taken for granted"]
    for assumption in limits["assumptions"]:
        lines += _wrapped(assumption, 2 * INDENT)
    return "\n".join(lines) + "\n"


def _wrapped(text: str, indent: str) -> list[str]:
    """Lines of at most `COLUMNS`; a line that fits is left as it is, with its columns."""
    if len(indent + text) <= COLUMNS:
        return [indent + text]
    return textwrap.wrap(text, COLUMNS, initial_indent=indent, subsequent_indent=indent + INDENT)


def _number(spread: Mapping[str, Any], name: str, unit: str, draws: int) -> str:
    missing = f"; undefined in {spread['undefined']} of {draws} draws" if spread["undefined"] else ""
    if not spread["defined"]:
        return f"{name:26s}  undefined in all draws"
    low, high = spread["interval_68"]
    value = f"{_figure(spread['median'])} ({_figure(low)} to {_figure(high)})"
    limits = [
        f"{sign} {_figure(spread[key])}" if spread[key] is not None else f"no limit from {side}"
        for key, sign, side in LIMITS
        if key in spread
    ]
    return f"{name:26s}  {value}{' ' + unit if unit else ''}" + "".join(f"; {limit}" for limit in limits) + missing


def _figure(value: float | None) -> str:
    return "without bound" if value is None else f"{value:.3g}"


def _counted(found: Mapping[str, Any], draws: int) -> str:
    counted = [f"{number} {COUNTS[key]}" for key, number in found["counts"].items() if number]
    return f"of {draws} draws: " + ", ".join(counted) if counted else f"all {draws} draws within what gas can do"


def _warnings(point: str, found: Mapping[str, Any], excess_k: float) -> list[str]:
    share, under = found["share_colder_than_gas"], found["share_colder_than_gas_under_background"]
    warnings = []
    if share > COLD_SHARE:
        warnings.append(
            f"{point} is colder than standard gas against the cosmic microwave background can be in {share:.0%} of the "
            "draws: a warning of foreground left over"
        )
    if excess_k > 0 and under > COLD_SHARE:
        warnings.append(f"against the excess background it still is in {under:.0%} of the draws")
    return warnings
