"""A signal without a shape: a smooth Gaussian process, its posterior in closed form, and turning points draw by draw.

The process has mean zero and covariance A^2 exp(-(x - x')^2 / (2 l^2)), in x = f or x = ln f (Rasmussen and Williams
2006, Gaussian Processes for Machine Learning). It is written in the eigenmodes of that covariance, s = G a with a of
unit normal prior, so that ln L = -|R s - z|^2 / 2 makes the posterior of a normal too. It is solved by one QR of
R G stacked on the prior's rows; R'R is never formed.

It answers what the data say when no shape is imposed. Where a foreground takes most of the signal away, it is wide.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from reduce.combine import Information
from reduce.extrema import at_edge, curve_turning_points
from reduce.signal_shape import channel_means, quadrature_mhz
from sims.errors import InputError, raise_if_any

FloatArray = NDArray[np.float64]

TRUNCATION = 1e-5  # of A: standard deviation that the modes left out have at the worst point of the band
STEP_MHZ = 0.2


@dataclass(frozen=True, eq=False)
class FreeForm:
    """Eigenmodes of a smooth Gaussian process, largest first, each with unit normal prior.

    Attributes
    ----------
    frequency_mhz : ndarray[point]
        Even grid over the band, MHz.
    modes_k : ndarray[mode, point]
        On the grid, K.
    channel_modes_k : ndarray[mode, channel]
        Their channel means, K.
    amplitude_k : float
        A, standard deviation of the prior, K.
    length : float
        l, in MHz or in ln f.
    logarithmic : bool
        Whether x is ln f.
    """

    frequency_mhz: FloatArray
    modes_k: FloatArray
    channel_modes_k: FloatArray
    amplitude_k: float
    length: float
    logarithmic: bool


@dataclass(frozen=True, eq=False)
class FreeFormPosterior:
    """What the data say of a signal without a shape.

    Attributes
    ----------
    mean_k, sd_k : ndarray[point]
        Posterior mean and standard deviation on the grid, K, in closed form.
    draws_k : ndarray[draw, point]
        Draws from the posterior, K.
    turning_points : ndarray[draw, 3, 2]
        Frequency, MHz, and temperature, mK, of B, C and D as `reduce.extrema.curve_turning_points` defines them.
    without_minimum : float
        Share of the draws whose deepest point is at an edge of the band; their turning points are NaN.
    at_edge : ndarray[3]
        Share of the others whose B, C or D is the first or the last point of the band, no extremum.
    log_evidence : float
        ln of the mean of exp(-|R s - z|^2 / 2) over the prior, in closed form.
    log_bayes_factor : float
        The same over that of no signal.
    constrained : float
        Directions that the data know better than the prior: sum of 1 - posterior over prior variance of the modes.
    """

    mean_k: FloatArray
    sd_k: FloatArray
    draws_k: FloatArray
    turning_points: FloatArray
    without_minimum: float
    at_edge: FloatArray
    log_evidence: float
    log_bayes_factor: float
    constrained: float


def free_form(
    frequency_mhz: FloatArray,
    width_mhz: FloatArray,
    *,
    amplitude_k: float,
    length: float,
    logarithmic: bool = False,
) -> FreeForm:
    """Eigenmodes of the process over the band of these channels.

    Parameters
    ----------
    frequency_mhz, width_mhz : ndarray[channel]
        Centres and widths, MHz.
    amplitude_k : float
        A, K.
    length : float
        l: MHz, or in ln f where `logarithmic`.
    logarithmic : bool
        Whether x is ln f.

    Returns
    -------
    FreeForm
        Modes left out have less than `TRUNCATION` of A at every point.

    Raises
    ------
    InputError
        If amplitude or length are not finite and above 0, or the length is below four steps of the grid.
    """
    low_mhz, high_mhz = float((frequency_mhz - width_mhz / 2.0).min()), float((frequency_mhz + width_mhz / 2.0).max())
    grid_mhz = np.linspace(low_mhz, high_mhz, max(3, round((high_mhz - low_mhz) / STEP_MHZ) + 1))
    all_mhz = np.concatenate([grid_mhz, quadrature_mhz(frequency_mhz, width_mhz).ravel()])
    problems = [
        f"free form, {name}: got {value}; allowed is any finite number above 0"
        for name, value in (("amplitude_k", amplitude_k), ("length", length))
        if not (np.isfinite(value) and value > 0.0)
    ]
    raise_if_any(problems)
    x = np.log(all_mhz) if logarithmic else all_mhz
    least = 4.0 * (np.diff(np.log(grid_mhz)).max() if logarithmic else grid_mhz[1] - grid_mhz[0])
    if length < least:
        raise InputError(f"free form, length: got {length}; allowed is {least:.3g} or more, four steps of the grid")
    kernel = np.exp(-((x[:, None] - x) ** 2) / (2.0 * length**2))
    values, vectors = np.linalg.eigh(kernel)
    modes = (np.sqrt(np.maximum(values, 0.0)) * vectors).T[::-1]
    left_out = 1.0 - np.cumsum(modes**2, axis=0).min(axis=1)
    kept = 1 + int(np.argmax(left_out < TRUNCATION**2))
    modes_k = amplitude_k * modes[:kept]
    return FreeForm(
        grid_mhz,
        modes_k[:, : len(grid_mhz)],
        channel_means(modes_k[:, len(grid_mhz) :]),
        amplitude_k,
        length,
        logarithmic,
    )


def free_form_posterior(
    information: Information, process: FreeForm, rng: np.random.Generator, draws: int = 4000
) -> FreeFormPosterior:
    """Posterior of the process, and turning points of draws from it.

    Parameters
    ----------
    information : Information
        All bins together.
    process : FreeForm
    rng : numpy.random.Generator
    draws : int

    Returns
    -------
    FreeFormPosterior
    """
    modes = len(process.modes_k)
    reaching = information.R @ process.channel_modes_k.T
    stacked, data = np.concatenate([reaching, np.eye(modes)]), np.concatenate([information.z, np.zeros(modes)])
    axes, triangle = np.linalg.qr(stacked)
    middle = solve_triangular(triangle, axes.T @ data)
    root = solve_triangular(triangle, np.eye(modes))
    misfit = stacked @ middle - data
    log_evidence = float(-0.5 * misfit @ misfit - np.log(np.abs(np.diag(triangle))).sum())
    found = middle + rng.standard_normal((draws, modes)) @ root.T
    draws_k = found @ process.modes_k
    points = curve_turning_points(process.frequency_mhz, draws_k)
    inside = np.isfinite(points[:, 1, 0])
    edges = at_edge(process.frequency_mhz, points[inside])
    return FreeFormPosterior(
        mean_k=middle @ process.modes_k,
        sd_k=np.sqrt(((root.T @ process.modes_k) ** 2).sum(axis=0)),
        draws_k=draws_k,
        turning_points=points,
        without_minimum=float(1.0 - inside.mean()),
        at_edge=edges.mean(axis=0) if inside.any() else np.full(3, np.nan),
        log_evidence=log_evidence,
        log_bayes_factor=log_evidence + 0.5 * float(information.z @ information.z),
        constrained=float(modes - (root**2).sum()),
    )
