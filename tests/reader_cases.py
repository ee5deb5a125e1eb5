"""One pattern written in each format that the beam readers take, for their tests."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import healpy as hp
import numpy as np
import xarray as xr

from sims.beam import beam_from
from sims.config_beam import Dipole, FieldColumns, HealpixSource, NetcdfSource, PowerColumn, TableSource

FREQUENCY_MHZ = np.array([50.0, 70.0, 90.0])
THETA_DEG = np.arange(0.0, 181.0, 3.0)
PHI_DEG = np.arange(0.0, 360.0, 3.0)
Pattern = Callable[[np.ndarray, np.ndarray], np.ndarray]
"""frequency_mhz, directions[point, 3] -> power[point, frequency]."""
SETTINGS = {"kind": "dipole", "length_m": 2.0, "efficiency": 1.0, "structure_temperature_k": 270.0}
_TILTED = beam_from(Dipole(tilt_deg=25.0, tilt_azimuth_deg=40.0, turn_deg=10.0, **SETTINGS))  # type: ignore[arg-type]
_OVER_PLANE = beam_from(Dipole(height_m=1.5, **SETTINGS))  # type: ignore[arg-type]


def tilted(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
    """A dipole whose wire lies along no axis of the grid: its own frame is turned into that of the file."""
    return _TILTED.directivity(frequency_mhz, directions @ _TILTED.mounting)


def over_plane(frequency_mhz: np.ndarray, directions: np.ndarray) -> np.ndarray:
    """A dipole over a conducting plane; directions on the horizon lie a hair above it."""
    lifted = directions.copy()
    lifted[np.abs(lifted[:, 2]) < 1e-14, 2] = 1e-14
    return _OVER_PLANE.directivity(frequency_mhz, lifted)


def grid_directions(theta_deg: np.ndarray, phi_deg: np.ndarray) -> np.ndarray:
    theta, phi = np.meshgrid(np.radians(theta_deg), np.radians(phi_deg), indexing="ij")
    return np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], axis=-1).reshape(-1, 3)


def on_grid(pattern: Pattern, theta_deg: np.ndarray = THETA_DEG, phi_deg: np.ndarray = PHI_DEG) -> np.ndarray:
    """ndarray[frequency, theta, phi]."""
    values = pattern(FREQUENCY_MHZ, grid_directions(theta_deg, phi_deg))
    return values.T.reshape(len(FREQUENCY_MHZ), len(theta_deg), len(phi_deg))


def write_netcdf(
    folder: Path, power: np.ndarray, phi_deg: np.ndarray = PHI_DEG, theta_deg: np.ndarray = THETA_DEG
) -> NetcdfSource:
    path = folder / "beam.nc"
    axes = {"frequency": (FREQUENCY_MHZ * 1e6, "Hz"), "theta": (np.radians(theta_deg), "rad"), "phi": (phi_deg, "deg")}
    coords = {name: (name, values, {"units": unit}) for name, (values, unit) in axes.items()}
    xr.Dataset({"gain": (tuple(axes), power)}, coords=coords).to_netcdf(path, engine="h5netcdf")
    return NetcdfSource(format="netcdf", file=path, variable="gain")


def table_text(
    power: np.ndarray, theta_deg: np.ndarray = THETA_DEG, *,
    elevation: bool = False, compass: bool = False, decibels: bool = False,
) -> str:  # fmt: skip
    lines = ["MHz;theta;phi;power"]
    for i, frequency in enumerate(FREQUENCY_MHZ):
        for j, theta in enumerate(theta_deg):
            for k, phi in enumerate(PHI_DEG):
                first = 90 - theta if elevation else theta
                second = (90 - phi) % 360 if compass else phi
                value = 10 * np.log10(max(power[i, j, k], 1e-30)) if decibels else power[i, j, k]
                lines.append(f"{frequency};{first};{second};{value!r}".replace("np.float64(", "").replace(")", ""))
    return "\n".join(lines) + "\n"


def table_source(path: Path, **changes: object) -> TableSource:
    settings: dict[str, object] = {
        "format": "table",
        "files": (path,),
        "delimiter": "semicolon",
        "header_lines": 1,
        "theta": "theta",
        "phi": "phi",
        "angle_unit": "deg",
        "theta_from": "zenith",
        "phi_sense": "x-to-y",
        "power": PowerColumn(column="power", unit="linear"),
        "frequency": "MHz",
    }
    return TableSource(**(settings | changes))  # type: ignore[arg-type]


def write_table(folder: Path, power: np.ndarray, theta_deg: np.ndarray = THETA_DEG, **conventions: bool) -> TableSource:
    path = folder / "beam.csv"
    path.write_text(table_text(power, theta_deg, **conventions))
    return table_source(
        path,
        theta_from="horizon" if conventions.get("elevation") else "zenith",
        phi_sense="compass" if conventions.get("compass") else "x-to-y",
        power=PowerColumn(column="power", unit="dBi" if conventions.get("decibels") else "linear"),
    )


def write_healpix(folder: Path, pattern: Pattern, *, nest: bool = False, nside: int = 32) -> HealpixSource:
    path = folder / "beam.fits"
    pixel = hp.nest2ring(nside, np.arange(12 * nside**2)) if nest else np.arange(12 * nside**2)
    directions = np.stack(hp.pix2vec(nside, pixel), axis=1)
    hp.write_map(path, list(pattern(FREQUENCY_MHZ, directions).T), nest=nest, dtype=np.float64, overwrite=True)
    return HealpixSource(format="healpix", files=(path,), frequencies_mhz=tuple(FREQUENCY_MHZ), unit="linear")


def write_fields(folder: Path, e_theta: np.ndarray, e_phi: np.ndarray) -> TableSource:
    """One file a frequency, columns by number, blanks between, magnitude and phase."""
    paths = []
    for i, frequency in enumerate(FREQUENCY_MHZ):
        rows = []
        for j, theta in enumerate(THETA_DEG):
            for k, phi in enumerate(PHI_DEG):
                one, two = e_theta[i, j, k], e_phi[i, j, k]
                parts = abs(one), np.degrees(np.angle(one)), abs(two), np.degrees(np.angle(two))
                rows.append(" ".join(f"{value:.16e}" for value in (np.radians(theta), np.radians(phi), *parts)))
        paths.append(folder / f"beam{frequency:.0f}.txt")
        paths[-1].write_text("\n".join(rows) + "\n")
    return TableSource(
        format="table",
        files=tuple(paths),
        delimiter="space",
        header_lines=0,
        theta=1,
        phi=2,
        angle_unit="rad",
        theta_from="zenith",
        phi_sense="x-to-y",
        fields=FieldColumns(columns=(3, 4, 5, 6), parts="magnitude-phase"),
        frequencies_mhz=tuple(FREQUENCY_MHZ),
    )
