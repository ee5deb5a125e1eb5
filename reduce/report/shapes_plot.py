"""shapes.png: which spectral shapes the foreground takes, and which it leaves."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from reduce.report.style import BLACK, BLUE, DASHES, GREY, ORANGE, VERMILION, frequency_axis, shade_unused, sheet
from reduce.runner import Products
from sims.config import FitConfig

FloatArray = NDArray[np.float64]

DRAWN = 3
FLOOR = 1e-9
SHOWN_BEYOND = 12  # shapes drawn in the count beyond the last that loses half


def shapes_figure(products: Products, config: FitConfig) -> Figure:
    """The matrix, the share of each shape that survives, and the shapes that are lost and the first that is kept.

    Parameters
    ----------
    products : Products
        With spectra.nc and transfer.nc.
    config : FitConfig

    Returns
    -------
    matplotlib.figure.Figure
    """
    found = products.dataset("transfer.nc")
    every, troughs = found["survival"].values, found["trough_survival"].values
    lost, lost_troughs = int((every < 0.5).sum()), int((troughs < 0.5).sum())
    caption = (
        "a: what combined_spectrum.txt shows (down) of a signal in one channel (across): near one on the diagonal, and "
        "what is missing there is spread over the others. b: information on each shape with the foreground over that "
        f"of the noise alone; cut at {FLOOR:g}. Of all shapes {lost} lose more than half, of those that make up the "
        f"prior's troughs {lost_troughs} of {len(troughs)}. c, d: shapes scaled to a peak of one, with that share. "
        "What is lost cannot be had back from these data without knowing more of the foreground."
    )
    figure = sheet(7.6, "shapes that the foreground takes", caption, products, config)
    grid = figure.subplots(2, 2)
    frequency, width = found["frequency_mhz"].values, found["width_mhz"].values
    edges = frequency[0] - width[0] / 2.0, frequency[-1] + width[-1] / 2.0
    _matrix(figure, grid[0, 0], found["operator"].values, edges)
    _shares(grid[0, 1], every, troughs)
    unused = (found["shape_k"].values == 0.0).all(axis=0)
    shapes, of_troughs = (np.where(unused, np.nan, found[name].values) for name in ("shape_k", "trough_shape_k"))
    _shapes(grid[1, 0], frequency, shapes[:DRAWN], every[:DRAWN])
    grid[1, 0].set_title("c. lost most, of all shapes")
    kept = int(np.argmax(troughs >= 0.5)) if (troughs >= 0.5).any() else len(troughs) - 1
    ends = list(dict.fromkeys([0, min(1, kept), kept]))
    _shapes(grid[1, 1], frequency, of_troughs[ends], troughs[ends])
    grid[1, 1].set_title("d. of a trough: lost most, and the first kept")
    for axes in grid[1]:
        frequency_axis(axes, *edges)
        shade_unused([axes], frequency, width, unused)
    return figure


def _matrix(figure: Figure, axes: Axes, operator: FloatArray, edges: tuple[float, float]) -> None:
    off = operator - np.diag(np.diag(operator))
    most = float(np.abs(off).max()) or 1.0
    image = axes.imshow(
        operator, extent=(*edges, edges[1], edges[0]), cmap="PuOr", vmin=-most, vmax=most, aspect="auto",
        interpolation="nearest",
    )  # fmt: skip
    figure.colorbar(image, ax=axes, shrink=0.8, extend="both")
    axes.set_title("a. signal to combined spectrum")
    axes.set_xlabel("signal in channel, MHz")
    axes.set_ylabel("shown in channel, MHz")


def _shares(axes: Axes, every: FloatArray, troughs: FloatArray) -> None:
    count = min(len(every), int((every < 0.5).sum()) + SHOWN_BEYOND)
    axes.plot(
        np.arange(1, count + 1), np.maximum(every[:count], FLOOR), "o-", color=BLACK, markersize=3.5, linewidth=0.8,
        label="of all shapes",
    )  # fmt: skip
    axes.plot(
        np.arange(1, len(troughs) + 1), np.maximum(troughs, FLOOR), "s--", color=VERMILION, markersize=3.5,
        markerfacecolor="white", linewidth=0.8, label="of the prior's troughs",
    )  # fmt: skip
    axes.set_yscale("log")
    axes.set_ylim(0.3 * FLOOR, 5.0)
    axes.axhline(0.5, color=GREY, linewidth=0.7, linestyle=":")
    axes.set_title("b. share of the information that survives")
    axes.set_xlabel("shape, lost most first")
    axes.set_ylabel("with foreground / noise alone")
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
    axes.legend(loc="lower right")


def _shapes(axes: Axes, frequency: FloatArray, shapes: FloatArray, shares: FloatArray) -> None:
    for number, (shape, share) in enumerate(zip(shapes, shares, strict=True)):
        axes.plot(
            frequency, shape / np.nanmax(np.abs(shape)), color=(BLACK, BLUE, ORANGE)[number], linestyle=DASHES[number],
            label=f"survives: {max(share, 0.0):.1e}" if share < 0.01 else f"survives: {share:.3f}",
        )  # fmt: skip
    axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0.5)
    axes.set_ylim(-1.1, 1.9)
    axes.set_ylabel("brightness, peak one")
    axes.legend(loc="upper left")
