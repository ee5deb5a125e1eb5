"""What the foreground takes of any signal: the transfer as a matrix, and the shapes that are lost.

After `reduce.handoff`, from a bundle alone. `transfer` gives the product `sims.schema.TRANSFER`, and
`reduce.report.shapes_plot` draws it. What does `combined_spectrum.txt` show of a signal s? M s, with M the projector on
the directions that are drawn. How well do the data know a shape with the foreground, against without it? The
information of the bundle, K, is held against that of the noise alone, K0 = W' D^-1 W: K v = lambda K0 v. A lambda of
1 is a shape untouched, of 0 one that the foreground imitates; the error of its amplitude grows by 1 over the root.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from reduce.combine import Information
from reduce.handoff import DRAWN_ERROR_K, information_from
from reduce.trough_model import TroughModel
from sims.schema import TRANSFER, describe

FloatArray = NDArray[np.float64]

PRIOR_DRAWS = 4000
TROUGH_SHARE = 0.999  # of the variance of the prior's troughs: beyond it lie kinks at the turning points


@dataclass(frozen=True, eq=False)
class Survival:
    """Shapes of a signal and what is left of them, the worst first.

    Parameters
    ----------
    share : ndarray[shape]
        lambda: information with the foreground over that of the noise alone, 0 to 1.
    shape_k : ndarray[shape, channel]
        K; the noise alone would show each at one standard deviation, independently of the others.
    """

    share: FloatArray
    shape_k: FloatArray


def drawn_operator(information: Information, worst_error_k: float = DRAWN_ERROR_K) -> FloatArray:
    """What the projected spectrum shows of a signal: ndarray[channel, channel_2], applied to the signal.

    Parameters
    ----------
    information : Information
    worst_error_k : float
        As in `reduce.combine.projected_spectrum`.
    """
    _, singular, directions = np.linalg.svd(information.R, full_matrices=False)
    kept = directions[singular * worst_error_k >= 1.0]
    return np.asarray(kept.T @ kept)


def noise_information(packed: xr.Dataset) -> FloatArray:
    """Diagonal of W' D^-1 W, what the noise alone would leave to know: ndarray[channel], 1/K^2; 0 where flagged."""
    good = packed["flag"].values == 0
    weight = np.where(good, packed["signal_response"].values ** 2, 0.0)
    return np.asarray((weight / np.where(good, packed["noise_variance"].values, 1.0)).sum(axis=0))


def survival(root: FloatArray, noise_per_k2: FloatArray, directions: FloatArray | None = None) -> Survival:
    """Generalised eigenvalues and shapes of K = R' R against K0.

    Parameters
    ----------
    root : ndarray[rank, channel]
        R, 1/K.
    noise_per_k2 : ndarray[channel]
        Diagonal of K0, 1/K^2.
    directions : ndarray[direction, channel], optional
        Shapes are sought among their sums; all shapes on the channels in use by default.

    Returns
    -------
    Survival
        By singular values of R K0^-1/2, never of K: shapes that are lost to a part in 10^8 still say so.
    """
    used = noise_per_k2 > 0.0
    if directions is None:
        span = np.zeros((int(used.sum()), len(used)))
        span[:, used] = np.diag(1.0 / np.sqrt(noise_per_k2[used]))
    else:
        triangle = np.asarray(np.linalg.qr((directions * np.sqrt(noise_per_k2)).T, mode="r"))
        span = np.linalg.solve(triangle.T, np.where(used, directions, 0.0))
    seen = root @ span.T
    _, singular, across = np.linalg.svd(seen, full_matrices=True)
    share = np.zeros(len(span))
    share[: len(singular)] = singular**2
    shape_k = across @ span
    peak = np.take_along_axis(shape_k, np.abs(shape_k).argmax(axis=1)[:, None], axis=1)
    return Survival(share[::-1], (shape_k * np.sign(peak))[::-1])


def trough_directions(model: TroughModel, rng: np.random.Generator) -> FloatArray:
    """Orthonormal shapes ndarray[direction, channel] that the prior's troughs are made of, to `TROUGH_SHARE`."""
    signal_k = model.signal_k(model.draw_prior(rng, PRIOR_DRAWS))
    _, singular, directions = np.linalg.svd(np.linalg.qr(signal_k, mode="r"))
    held = np.cumsum(singular**2) / (singular**2).sum()
    return np.asarray(directions[: int(np.searchsorted(held, TROUGH_SHARE)) + 1])


def transfer(packed: xr.Dataset, model: TroughModel, rng: np.random.Generator) -> xr.Dataset:
    """The transfer of a signal through the subtraction of a bundle.

    Parameters
    ----------
    packed : xarray.Dataset
        `sims.schema.BUNDLE`.
    model : TroughModel
    rng : numpy.random.Generator

    Returns
    -------
    xarray.Dataset
        `sims.schema.TRANSFER`.
    """
    information, noise = information_from(packed), noise_information(packed)
    every = survival(information.R, noise)
    troughs = survival(information.R, noise, trough_directions(model, rng))
    found = xr.Dataset(
        {
            "frequency_mhz": ("channel", packed["frequency_mhz"].values),
            "width_mhz": ("channel", packed["width_mhz"].values),
            "operator": (("channel", "channel_2"), drawn_operator(information)),
            "survival": ("shape", every.share),
            "shape_k": (("shape", "channel"), every.shape_k),
            "trough_survival": ("trough_shape", troughs.share),
            "trough_shape_k": (("trough_shape", "channel"), troughs.shape_k),
        },
        attrs={"drawn_error_k": DRAWN_ERROR_K, "trough_share": TROUGH_SHARE},
    )
    if "sky" in packed.attrs:
        found.attrs["sky"] = packed.attrs["sky"]
    return describe(found, TRANSFER)


def surviving_fraction(packed: xr.Dataset, signal_k: FloatArray) -> float:
    """Share of a signal's signal-to-noise ratio that is left, 0 to 1, its shape known.

    Parameters
    ----------
    packed : xarray.Dataset
        `sims.schema.BUNDLE`.
    signal_k : ndarray[channel]
        Any signal, K, not zero on all channels in use.
    """
    whole = np.sqrt((noise_information(packed) * signal_k**2).sum())
    return float(np.linalg.norm(packed["R"].values @ signal_k) / whole)
