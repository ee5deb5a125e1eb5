"""Make sims/data/gas_history.csv: the gas of the early universe before any source of light, from CAMB.

Run by hand when the cosmology changes (``python tests/reference/make_gas_history.py``); CAMB is needed here only.
`sims.hydrogen` reads the table. Its `TABLE_COSMOLOGY` holds the same parameters, and a test compares them with the
header written here.
"""

from __future__ import annotations

from pathlib import Path

import camb  # type: ignore[import-untyped]
import numpy as np
from scipy.interpolate import CubicSpline

TABLE = Path(__file__).parents[2] / "sims" / "data" / "gas_history.csv"

# Rounded from Planck Collaboration 2020, A&A 641, A6; its baseline has one neutrino of 0.06 eV and two without mass.
COSMOLOGY = {"H0": 67.4, "ombh2": 0.0224, "omch2": 0.120, "YHe": 0.245, "TCMB": 2.7255, "nnu": 3.044, "mnu": 0.06}

LOWEST_REDSHIFT, HIGHEST_REDSHIFT = 5.0, 1000.0
# 500 rows, even in ln(1+z), hold a cubic spline in log-log to 3e-6: electrons falling away at z = 1000 set the number.
ROWS = 500
ACCEPTED_ERROR = 1e-5


def gas(redshift: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Gas temperature, K, and free electrons per hydrogen nucleus at each redshift, without reionisation."""
    parameters = camb.CAMBparams()
    parameters.set_cosmology(**COSMOLOGY)
    parameters.Reion.Reionization = False
    history = camb.get_background(parameters).get_background_redshift_evolution(
        redshift, vars=["T_b", "x_e"], format="dict"
    )
    return history["T_b"], history["x_e"]


def grid(rows: int) -> np.ndarray:
    """Redshifts even in ln(1+z), with exact ends."""
    redshift = np.expm1(np.linspace(np.log1p(LOWEST_REDSHIFT), np.log1p(HIGHEST_REDSHIFT), rows))
    redshift[0], redshift[-1] = LOWEST_REDSHIFT, HIGHEST_REDSHIFT
    return redshift


def header() -> str:
    """Provenance, in comment lines, and the names of the columns."""
    cosmology = ", ".join(f"{name} = {value}" for name, value in COSMOLOGY.items())
    return "\n".join(
        [
            "# Gas history without sources: no reionisation, no heating but by the cosmic microwave background.",
            f"# Code: CAMB {camb.__version__}, its default recombination model (Recfast), Reionization = False.",
            f"# Cosmology: {cosmology} (flat; one massive neutrino, mnu in eV).",
            "# Script: tests/reference/make_gas_history.py",
            f"# Rows: {ROWS}, even in ln(1+z), for a cubic spline of the logarithms in ln(1+z).",
            "# electron_fraction: free electrons per hydrogen nucleus.",
            "redshift,gas_temperature_k,electron_fraction",
        ]
    )


def largest_error(redshift: np.ndarray, temperature_k: np.ndarray, electrons: np.ndarray) -> float:
    """Largest relative error of splining the table, against CAMB on a grid of 41 points to each row."""
    fine = grid(41 * ROWS)
    errors = []
    for column, truth in zip((temperature_k, electrons), gas(fine), strict=True):
        spline = CubicSpline(np.log1p(redshift), np.log(column))
        errors.append(np.max(np.abs(np.expm1(spline(np.log1p(fine)) - np.log(truth)))))
    return float(max(errors))


def main() -> None:
    """Write the table, after checking that its interpolation is as good as it claims."""
    redshift = np.array([float(f"{z:.9g}") for z in grid(ROWS)])
    temperature_k, electrons = gas(redshift)
    error = largest_error(redshift, temperature_k, electrons)
    if not error < ACCEPTED_ERROR:
        raise SystemExit(f"interpolating the table errs by {error:.1e}, more than {ACCEPTED_ERROR:.0e}: use more rows")
    rows = [f"{z:.9g},{t:.9g},{x:.9g}" for z, t, x in zip(redshift, temperature_k, electrons, strict=True)]
    TABLE.parent.mkdir(exist_ok=True)
    TABLE.write_text("\n".join([header(), *rows]) + "\n", encoding="utf-8")
    print(f"{TABLE.name}: {ROWS} rows, {TABLE.stat().st_size} bytes, interpolation error {error:.1e}")


if __name__ == "__main__":
    main()
