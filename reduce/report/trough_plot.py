"""trough.png: the trough as the data leave it, with the prior, the coldest gas, and the truth if there is one."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Rectangle

from reduce.report.facts import posterior_draws, thinned, true_points, true_signal_k
from reduce.report.style import (
    BLACK,
    BLUE,
    GREEN,
    GREY,
    SKY,
    VERMILION,
    frequency_axis,
    key,
    panels_with_key,
    redshift_axis,
    shade_unused,
    sheet,
)
from reduce.runner import Products
from reduce.trough_model import POINTS, TroughModel
from sims.config import FitConfig
from sims.hydrogen import coldest_brightness_k
from sims.streams import stream

MEANING = {
    "B": "first starlight couples the gas",
    "C": "deepest point, heating overtakes",
    "D": "peak before reionisation",
}
PRIOR_DRAWS = 2000
LEVELS = (0.025, 0.16, 0.5, 0.84, 0.975)


def trough_figure(products: Products, config: FitConfig, model: TroughModel) -> Figure:
    """Posterior bands of the signal over frequency.

    Parameters
    ----------
    products : Products
        With spectra.nc, bundle.nc, posterior.nc and, for a mock, truth.nc.
    config : FitConfig
    model : TroughModel

    Returns
    -------
    matplotlib.figure.Figure
    """
    packed = products.dataset("bundle.nc")
    frequency, width = packed["frequency_mhz"].values, packed["width_mhz"].values
    draws = thinned(posterior_draws(products.dataset("posterior.nc")))
    bands_mk = 1e3 * np.quantile(model.signal_k(draws), LEVELS, axis=0)
    prior = model.draw_prior(stream(config.run.seed, "report-prior"), PRIOR_DRAWS)
    prior_mk = 1e3 * np.quantile(model.signal_k(prior), (LEVELS[0], LEVELS[-1]), axis=0)
    unused = (packed["flag"].values != 0).all(axis=0)
    caption = " ".join(f"{point}: {MEANING[point]}." for point in POINTS) + " "
    caption += "Bands are of the brightness at each frequency; those at two frequencies are correlated."
    caption += " Hatched: channels not used." if unused.any() else ""
    figure = sheet(5.8, "the trough", caption, products, config)
    strip, panels = panels_with_key(figure, 1, 1, 0.38)
    axes = panels[0, 0]
    low = min(frequency[0] - width[0] / 2.0, model.lower[:3].min())
    high = max(frequency[-1] + width[-1] / 2.0, model.upper[:3].max())
    margin = 0.012 * (high - low)
    frequency_axis(axes, low - margin, high + margin)
    axes.fill_between(frequency, bands_mk[0], bands_mk[4], color=SKY, alpha=0.35, linewidth=0, label="posterior, 95 %")
    axes.fill_between(frequency, bands_mk[1], bands_mk[3], color=BLUE, alpha=0.5, linewidth=0, label="posterior, 68 %")
    axes.plot(frequency, bands_mk[2], color=BLACK, linewidth=1.6, label="posterior, median")
    for edge, label in zip(prior_mk, ("prior alone, 95 %", "_upper"), strict=True):
        axes.plot(frequency, edge, color=GREY, linewidth=0.9, linestyle=(0, (1, 2)), label=label)
    cold_mhz = np.linspace(low, high, 200)
    axes.plot(
        cold_mhz, 1e3 * coldest_brightness_k(cold_mhz), color=VERMILION, linestyle=(0, (7, 2, 1.5, 2)),
        label="coldest that unheated gas can be",
    )  # fmt: skip
    truth_k, points = true_signal_k(products), true_points(products, config)
    if truth_k is not None:
        axes.plot(frequency, 1e3 * truth_k, color=GREEN, linewidth=1.8, linestyle=(0, (5, 2)), label="truth put in")
    if points is not None:
        axes.plot(*np.array(list(points.values())).T, "D", color=GREEN, markeredgecolor="white", markersize=6)
    _prior_boxes(axes, model)
    axes.axhline(0.0, color=GREY, linewidth=0.5, zorder=0.5)
    axes.set_ylabel("sky brightness of the line, mK")
    floor = 1e3 * float(coldest_brightness_k(high))
    axes.set_ylim(
        min(model.lower[3:].min(), floor, bands_mk.min()) - 20.0, max(model.upper[3:].max(), bands_mk.max()) + 25.0
    )
    shade_unused([axes], frequency, width, unused)
    redshift_axis(axes)
    key(strip, axes.get_legend_handles_labels()[0], 4)
    return figure


def _prior_boxes(axes: Axes, model: TroughModel) -> None:
    for number, point in enumerate(POINTS):
        corner = model.lower[number], model.lower[number + 3]
        size = model.upper[number] - corner[0], model.upper[number + 3] - corner[1]
        label = "prior bounds of B, C, D" if number == 0 else f"_{point}"
        axes.add_patch(Rectangle(corner, *size, fill=False, edgecolor=GREY, linewidth=0.9, label=label))
        at, lift = (corner, 3) if point == "C" else ((corner[0], corner[1] + size[1]), 3)
        axes.annotate(
            point, at, xytext=(4, lift), textcoords="offset points", va="bottom", ha="left",
            fontweight="bold", color=GREY,
        )  # fmt: skip
