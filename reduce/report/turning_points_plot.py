"""turning_points.png: posterior of B, C and D, each as temperature against frequency."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter

from reduce.report.facts import posterior_draws, true_points
from reduce.report.style import BLACK, BLUE, GREEN, GREY, SKY, VERMILION, key, panels_with_key, sheet
from reduce.report.trough_plot import MEANING
from reduce.runner import Products
from reduce.trough_model import NAMES, POINTS, TroughModel
from sims.config import FitConfig
from sims.hydrogen import coldest_brightness_k

FloatArray = NDArray[np.float64]

CELLS = 96
MASSES = (0.95, 0.68)
REACH = 0.35


def turning_points_figure(products: Products, config: FitConfig, model: TroughModel) -> Figure:
    """Three panels with 68 and 95 % highest-density regions.

    Parameters
    ----------
    products : Products
        With spectra.nc, posterior.nc, turning_points.json and, for a mock, truth.nc.
    config : FitConfig
    model : TroughModel

    Returns
    -------
    matplotlib.figure.Figure
    """
    found = products["turning_points.json"]
    draws = posterior_draws(products.dataset("posterior.nc"))
    truth = true_points(products, config)
    caption = (
        "Smallest regions that hold 68 and 95 % of the draws, smoothed by a kernel of their effective number; numbers "
        "are medians and 68 % intervals of each number alone. The prior's box is grey; only the part of it near the "
        "posterior is drawn."
    )
    figure = sheet(4.6, "turning points", caption, products, config)
    strip, panels = panels_with_key(figure, 1, 3, 0.25)
    for number, (axes, point) in enumerate(zip(panels[0], POINTS, strict=True)):
        pair = draws[:, [number, number + 3]]
        box = np.stack([model.lower[[number, number + 3]], model.upper[[number, number + 3]]])
        sizes = found["convergence"]["effective_size"]
        effective = min(float(sizes[NAMES[number]]), float(sizes[NAMES[number + 3]]))
        _draw_point(axes, pair, box, effective, None if truth is None else truth[point])
        axes.set_title(f"{point}: {MEANING[point]}\n{_text(found['points'][point])}", fontsize=8.2, linespacing=1.4)
    panels[0, 0].set_ylabel("temperature, mK")
    key(strip, _key(truth is not None), 6)
    return figure


def _draw_point(
    axes: Axes, pair: FloatArray, box: FloatArray, effective: float, truth: tuple[float, float] | None
) -> None:
    density = smooth_density(pair, box, effective)
    levels = [highest_density_level(density.cells, mass) for mass in MASSES]
    frequency, temperature = np.meshgrid(*density.centres_to_edges(), indexing="ij")
    cells = np.pad(density.cells, 1, mode="edge")
    top = float(cells.max())
    if levels[0] < levels[1] < top:
        axes.contourf(frequency, temperature, cells, levels=[*levels, top], colors=[SKY, BLUE], alpha=0.65)
        axes.contour(frequency, temperature, cells, levels=levels, colors=BLACK, linewidths=0.8, linestyles=["--", "-"])
    axes.plot(*np.median(pair, axis=0), "+", color="white", markersize=10, markeredgewidth=2.6)
    axes.plot(*np.median(pair, axis=0), "+", color=BLACK, markersize=9, markeredgewidth=1.4)
    if truth is not None:
        axes.plot(*truth, "D", color=GREEN, markeredgecolor="white", markersize=7)
    axes.add_patch(Rectangle((box[0, 0], box[0, 1]), *(box[1] - box[0]), fill=False, edgecolor=GREY, linewidth=1.6))
    cold_mhz = np.linspace(box[0, 0], box[1, 0], 100)
    axes.plot(cold_mhz, 1e3 * coldest_brightness_k(cold_mhz), color=VERMILION, linestyle=(0, (7, 2, 1.5, 2)))
    low, high = density.range
    if truth is not None:
        low, high = np.minimum(low, truth), np.maximum(high, truth)
    pad = 0.04 * (high - low)
    axes.set_xlim(low[0] - pad[0], high[0] + pad[0])
    axes.set_ylim(low[1] - pad[1], high[1] + pad[1])
    axes.set_xlabel("frequency, MHz")


@dataclass(frozen=True, eq=False)
class Density:
    """Smoothed density of draws on a grid.

    Attributes
    ----------
    cells : ndarray[frequency, temperature]
        Draws in each cell.
    edges : tuple of ndarray
        Edges of the cells in frequency, MHz, and temperature, mK.
    """

    cells: FloatArray
    edges: tuple[FloatArray, FloatArray]

    @property
    def range(self) -> tuple[FloatArray, FloatArray]:
        """Lower and upper corner, ndarray[2]."""
        return np.array([edge[0] for edge in self.edges]), np.array([edge[-1] for edge in self.edges])

    def centres_to_edges(self) -> tuple[FloatArray, FloatArray]:
        """Centres of the cells with the outermost edges, so that a contour reaches the bounds."""
        first, second = (np.concatenate([edge[:1], 0.5 * (edge[1:] + edge[:-1]), edge[-1:]]) for edge in self.edges)
        return first, second


def smooth_density(pair: FloatArray, box: FloatArray, effective: float) -> Density:
    """Density of draws, smoothed and mirrored at the prior's bounds.

    Parameters
    ----------
    pair : ndarray[draw, 2]
        Frequency, MHz, and temperature, mK.
    box : ndarray[2, 2]
        Lower and upper bounds of the prior.
    effective : float
        Effective number of draws: the kernel's width is the standard deviation times its power
        -1/6, the rule for a normal density in two dimensions (Scott 1992).

    Returns
    -------
    Density
        On a grid of `CELLS` by `CELLS` that reaches past all but 0.1 % of the draws on each
        side, but not past the bounds.
    """
    low, high = np.quantile(pair, (0.001, 0.999), axis=0)
    spread = np.maximum(REACH * (high - low), 1e-6 * (box[1] - box[0]))
    low, high = np.maximum(low - spread, box[0]), np.minimum(high + spread, box[1])
    edges = (np.linspace(low[0], high[0], CELLS + 1), np.linspace(low[1], high[1], CELLS + 1))
    counts, _, _ = np.histogram2d(pair[:, 0], pair[:, 1], bins=edges)
    width = np.std(pair, axis=0) * max(effective, 1.0) ** (-1.0 / 6.0) / ((high - low) / CELLS)
    return Density(np.asarray(gaussian_filter(counts, width, mode="reflect")), edges)


def highest_density_level(cells: FloatArray, mass: float) -> float:
    """Density above which the cells hold this share of the whole."""
    falling = np.sort(cells.ravel())[::-1]
    held = np.cumsum(falling)
    return float(falling[np.searchsorted(held, mass * held[-1])])


def _text(marginals: dict[str, Any]) -> str:
    parts = []
    for name, unit in (("frequency_mhz", "MHz"), ("temperature_mk", "mK")):
        middle, (low, high) = marginals[name]["median"], marginals[name]["interval_68"]
        digits = max(0, 1 - int(np.floor(np.log10(max(high - low, 1e-9) / 2.0))))
        parts.append(f"${middle:.{digits}f}^{{+{high - middle:.{digits}f}}}_{{-{middle - low:.{digits}f}}}$ {unit}")
    return ",  ".join(parts)


def _key(with_truth: bool) -> list[Any]:
    handles: list[Any] = [
        Patch(facecolor=BLUE, alpha=0.65, edgecolor=BLACK, label="68 %"),
        Patch(facecolor=SKY, alpha=0.65, edgecolor=BLACK, linestyle="--", label="95 %"),
        Line2D([], [], color=BLACK, marker="+", linestyle="none", markersize=8, label="median"),
    ]
    if with_truth:
        handles.append(Line2D([], [], color=GREEN, marker="D", linestyle="none", label="truth put in"))
    handles.append(
        Line2D([], [], color=VERMILION, linestyle=(0, (7, 2, 1.5, 2)), label="coldest that unheated gas can be")
    )
    return handles
