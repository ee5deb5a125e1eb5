"""How far a beam's table is off between its directions, told from the table itself, and how much is too much.

`sims.beam_grid` asks for it. A table with every other direction left out shows what the spline misses at
those left out; the order of the spline says how much less the full table misses.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.beam_spline import AngularSpline, evaluate_grid, value_matrices
from sims.errors import InputError

FloatArray = NDArray[np.float64]
RICHARDSON = 16.0
"""A fourth-order error falls by this when the step is halved."""
SAFETY = 1.25
"""Usual where the order was checked on three grids (grid convergence index; Roache 1997, Annu. Rev. Fluid Mech. 29)."""
LARGEST_ERROR = 0.01
"""Of the pattern's root mean square: a table whose directions are joined with more is refused. The antenna temperature
may be off by this times the scatter of the sky over the sphere (inequality of Cauchy and Schwarz), tens of kelvin at
1 %, and no ``[knowledge]`` stands for that."""


@dataclass(frozen=True, eq=False)
class AngularError:
    """Estimated error of joining the directions, a value a frequency.

    Attributes
    ----------
    rms : ndarray[frequency]
        Root mean square over the sphere (or the upper half), over that of the pattern.
    largest : ndarray[frequency]
        Largest anywhere, over the peak.
    """

    rms: FloatArray
    largest: FloatArray


@dataclass(frozen=True, eq=False)
class AngularTable:
    """A pattern on its directions, and the spline over them.

    Attributes
    ----------
    theta_deg, phi_deg : ndarray[theta], ndarray[phi]
        Deg.
    pattern : ndarray[frequency, theta, phi]
        Of any scale.
    sphere : AngularSpline
        Of these directions.
    upper_half : bool
        Nothing is radiated below theta 90 deg.
    """

    theta_deg: FloatArray
    phi_deg: FloatArray
    pattern: FloatArray
    sphere: AngularSpline
    upper_half: bool


def joining_error(table: AngularTable) -> AngularError:
    """Error of joining the directions, from the same table with every other direction left out.

    Parameters
    ----------
    table : AngularTable

    Returns
    -------
    AngularError
        What a table of twice the step misses at the directions left out, over 15 (Richardson: the full
        table's error is a sixteenth), or over less where leaving out three of four shows that the order is not yet
        reached, times `SAFETY`. The root mean square is taken midway between directions, where a cubic spline errs
        most, so it errs on the safe side by up to 1.6 more. Added is what the spline misses at the table's own
        directions, zero for equal steps. Infinite where the table is too small to be thinned.
    """
    halved, quartered = _missed(table, 2), _missed(table, 4)
    power = np.sqrt((table.pattern**2 @ table.sphere.phi_weight) @ table.sphere.theta_weight)
    if table.upper_half:
        power *= np.sqrt(2.0)
    peak = table.pattern.max(axis=(1, 2))
    at_nodes = np.abs(_at_own_directions(table) - table.pattern)
    rms = _richardson(halved.rms, quartered.rms) + _rms(at_nodes, table.theta_deg)
    largest = _richardson(halved.largest, quartered.largest) + at_nodes.max(axis=(1, 2))
    return AngularError(rms / power, largest / peak)


def refuse_large(rms: FloatArray, frequency_mhz: FloatArray, directions: str, source: str) -> None:
    """Judge an estimate.

    Parameters
    ----------
    rms : ndarray[frequency]
        As of `AngularError`.
    frequency_mhz : ndarray[frequency]
        MHz.
    directions : str
        How many the table has, for the message.
    source : str
        The file or files.

    Raises
    ------
    InputError
        If any is above `LARGEST_ERROR`, or cannot be told.
    """
    above = ~(rms <= LARGEST_ERROR)
    if not above.any():
        return
    worst = int(np.where(above, np.nan_to_num(rms, nan=np.inf), 0.0).argmax())
    if not np.isfinite(rms[worst]):
        raise InputError(f"{source}: {directions} are too few to tell the error of joining them; give finer steps")
    raise InputError(
        f"{source}: at {frequency_mhz[worst]:g} MHz the directions, {directions}, are joined with an estimated error "
        f"of {rms[worst]:.2%} of the pattern (rms over the sphere); allowed is {LARGEST_ERROR:.0%}, which "
        f"{int(above.sum())} of the {len(rms)} frequencies asked for exceed: give finer steps or more digits; or does "
        "the pattern jump, as at a horizon?"
    )


def _missed(table: AngularTable, every: int) -> AngularError:
    """What a thinner table misses at the directions left out, not yet relative; infinite if it is too thin."""
    theta, phi, pattern = table.theta_deg, table.phi_deg, table.pattern
    first = (len(theta) - 1) % every if table.upper_half else 0
    kept = pattern[:, first::every, ::every]
    few = np.full(len(pattern), np.inf)
    if kept.shape[1] < 4 or kept.shape[2] < 4:
        return AngularError(few, few)
    straight, across, near, far = value_matrices(theta[first::every], phi[::every], table.upper_half, theta, phi)
    thin = np.matmul(straight, kept @ near.T) + np.matmul(across, kept @ far.T)
    missed = np.abs(thin - pattern)
    half = every // 2
    rows = slice((first + half) % every, None, every)
    between = _rms(missed[:, rows, half::every], theta[rows])
    return AngularError(between, missed.max(axis=(1, 2)))


def _rms(difference: FloatArray, theta_deg: FloatArray) -> FloatArray:
    """Root mean square over directions, by solid angle."""
    weight = np.sin(np.radians(theta_deg))
    return np.asarray(np.sqrt((difference**2).mean(axis=2) @ weight / weight.sum()))


def _at_own_directions(table: AngularTable) -> FloatArray:
    """The spline's values where the table has its own."""
    theta, phi = np.meshgrid(np.radians(table.theta_deg), np.radians(table.phi_deg), indexing="ij")
    z = np.maximum(np.cos(theta), 0.0) if table.upper_half else np.cos(theta)
    direction = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), z], axis=-1).reshape(-1, 3)
    values = np.empty((len(direction), len(table.pattern)))
    evaluate_grid(table.sphere.coefficients(table.pattern), table.sphere.layout, direction, values)
    return np.moveaxis(values.reshape(*theta.shape, -1), -1, 0)


def _richardson(halved: FloatArray, quartered: FloatArray) -> FloatArray:
    """Error of the full table from those of two thinner ones."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(halved > 0.0, quartered / halved, RICHARDSON)
    return np.asarray(SAFETY * halved / (np.clip(np.where(np.isfinite(ratio), ratio, 2.0), 2.0, RICHARDSON) - 1.0))
