"""transfer.png: what the foreground fit takes of the signal, and what the data still measure."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from reduce.report.facts import bins_with_data, posterior_draws, thinned
from reduce.report.style import (
    BLACK,
    BLUE,
    DASHES,
    GREY,
    ORANGE,
    VERMILION,
    bin_strokes,
    frequency_axis,
    shade_unused,
    sheet,
)
from reduce.runner import Products
from reduce.trough_model import TroughModel
from sims.config import FitConfig
from sims.streams import stream

FloatArray = NDArray[np.float64]

PRIOR_DRAWS = 2000
SHAPES = 3


@dataclass(frozen=True)
class MeasuredShapes:
    """Independent ways in which the prior's troughs differ, best measured first.

    Attributes
    ----------
    shape_k : ndarray[shape, channel]
        One standard deviation of the prior along each, K.
    signal_to_noise : ndarray[shape]
        That, over the error with which the data measure it.
    """

    shape_k: FloatArray
    signal_to_noise: FloatArray


def measured_shapes(root: FloatArray, signals_k: FloatArray) -> MeasuredShapes:
    """Diagonalise prior covariance and information together.

    Parameters
    ----------
    root : ndarray[rank, channel]
        Square root R of the information, 1/K.
    signals_k : ndarray[draw, channel]
        Draws from the prior, K; their covariance is A A'.

    Returns
    -------
    MeasuredShapes
        With R A = U diag(d) V': shapes A v, measured d times better than the prior knows them.
    """
    # Draws far outnumber channels; the triangle of their QR has the same covariance and is small.
    triangle = np.linalg.qr((signals_k - signals_k.mean(axis=0)) / np.sqrt(len(signals_k) - 1.0), mode="r")
    spread_k = np.asarray(triangle).T
    _, signal_to_noise, across = np.linalg.svd(root @ spread_k, full_matrices=False)
    shape_k = (spread_k @ across.T).T
    peak = np.abs(shape_k).argmax(axis=1)
    sign = np.sign(shape_k[np.arange(len(shape_k)), peak])
    return MeasuredShapes(shape_k * np.where(sign == 0.0, 1.0, sign)[:, None], signal_to_noise)


def transfer_figure(products: Products, config: FitConfig, model: TroughModel) -> Figure:
    """Signal before and after the foreground fit; error of each direction; best-measured shapes.

    Parameters
    ----------
    products : Products
        With spectra.nc, bundle.nc and posterior.nc.
    config : FitConfig
    model : TroughModel

    Returns
    -------
    matplotlib.figure.Figure
    """
    packed = products.dataset("bundle.nc")
    signal_k = model.signal_k(thinned(posterior_draws(products.dataset("posterior.nc")))).mean(axis=0)
    prior_k = model.signal_k(model.draw_prior(stream(config.run.seed, "report-prior"), PRIOR_DRAWS))
    shapes = measured_shapes(packed["R"].values, prior_k)
    together = float(np.linalg.norm(packed["R"].values @ signal_k))
    constrained = int(np.sum(shapes.signal_to_noise > 1.0))
    caption = (
        "a, b: the signal as it reaches each bin, and what no foreground of the family can imitate of it (mind the "
        "scales). c: R has one singular value a direction, a unit vector over the channels; those that the foreground "
        "imitates lie beyond the panel or are absent. Together the directions would show this signal, were its shape "
        f"known, at {together:.1f} standard deviations. d: the three independent ways in which troughs of the prior "
        "differ that the data measure best, drawn at one prior standard deviation; "
        f"{constrained} ways are measured better than the prior knows them."
    )
    figure = sheet(7.4, "what the foreground fit takes away", caption, products, config)
    grid = figure.subplots(2, 2)
    frequency, width = packed["frequency_mhz"].values, packed["width_mhz"].values
    used = (packed["flag"].values == 0).any(axis=0)
    _before(grid[0, 0], packed["signal_response"].values * np.where(used, signal_k, np.nan), frequency)
    _after(grid[0, 1], packed["signal_left_k"].values, frequency, float(packed.attrs["signal_surviving_fraction"]))
    _directions(grid[1, 0], packed["R"].values, np.where(used, signal_k, 0.0))
    _shapes(grid[1, 1], shapes, frequency)
    for axes in (grid[0, 0], grid[0, 1], grid[1, 1]):
        axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0.5)
        frequency_axis(axes, frequency[0] - width[0] / 2.0, frequency[-1] + width[-1] / 2.0)
        shade_unused([axes], frequency, width, ~used)
    count = len(bins_with_data(products))
    if count > 1:
        grid[0, 0].text(
            0.97, 0.04, f"{count} bins, the first darkest", transform=grid[0, 0].transAxes, ha="right", fontsize=8
        )
    return figure


def _before(axes: Axes, reaching_k: FloatArray, frequency: FloatArray) -> None:
    for stroke, values in zip(bin_strokes(len(reaching_k)), reaching_k, strict=True):
        axes.plot(frequency, 1e3 * values, **stroke)
    axes.set_title("a. posterior-mean signal as it reaches the bins, w s")
    axes.set_ylabel("antenna temperature, mK")


def _after(axes: Axes, left_k: FloatArray, frequency: FloatArray, surviving: float) -> None:
    for stroke, values in zip(bin_strokes(len(left_k)), left_k, strict=True):
        axes.plot(frequency, 1e3 * values, **stroke)
    axes.set_title(f"b. left of it: {surviving:.1%} of its signal-to-noise")
    axes.set_ylabel("antenna temperature, mK")


def _directions(axes: Axes, root: FloatArray, signal_k: FloatArray) -> None:
    _, singular, directions = np.linalg.svd(root, full_matrices=False)
    number = np.arange(1, len(singular) + 1)
    seen = 1e3 * np.abs(directions @ signal_k)
    axes.plot(number, 1e3 / singular, color=BLACK, label="error of the direction, 1σ")
    axes.plot(
        number, seen, "o", markersize=2.2, color=VERMILION, alpha=0.8,
        label="posterior-mean signal along it",
    )  # fmt: skip
    axes.set_yscale("log")
    floor = min(float(np.quantile(seen, 0.02)), 1e3 / singular[0])
    axes.set_ylim(0.5 * max(floor, 1e-3), 1e2 * max(float(seen.max()), 1e3 / singular[0]))
    axes.set_title("c. error and signal in each direction of R")
    axes.set_xlabel("direction, best measured first")
    axes.set_ylabel("along the direction, mK")
    axes.set_xlim(0, len(singular) + 1)
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.legend(loc="upper left")


def _shapes(axes: Axes, shapes: MeasuredShapes, frequency: FloatArray) -> None:
    for number, colour in zip(range(min(SHAPES, len(shapes.signal_to_noise))), (BLACK, BLUE, ORANGE), strict=False):
        ratio = shapes.signal_to_noise[number]
        axes.plot(
            frequency, 1e3 * shapes.shape_k[number], color=colour, linestyle=DASHES[number],
            label=f"{number + 1}: signal-to-noise {ratio:.3g}",
        )  # fmt: skip
    axes.set_title("d. what the data measure best of a trough")
    axes.set_ylabel("sky brightness, mK")
    low, high = axes.get_ylim()
    axes.set_ylim(low, high + 0.3 * (high - low))
    axes.legend(loc="upper left")
