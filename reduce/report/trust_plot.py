"""trust.png: ranks, detection statistic, chi-squared, and the pulls of C in each world."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import NullLocator
from numpy.typing import NDArray
from scipy import stats

from reduce.report.style import BLACK, BLUE, DASHES, GREY, PALE, VERMILION, key, sheet
from reduce.runner import Products
from reduce.trust import Trust
from reduce.trust_facts import BIAS_MATTERS, FACTOR_MATTERS, IMPROBABLE, band_reach, spoken

FloatArray = NDArray[np.float64]

BAND = 0.99
MOCKS_A_BAR = 20
RANK_BARS, OTHER_BARS = (4, 20), (14, 30)  # fewest and most
HEIGHTS_IN = (0.3, 3.4, 0.35, 2.3, 0.3)
WORLD_IN = 0.36
LABEL_CHARACTERS = 22
BEND = 2.0  # the detection statistic is drawn evenly below, and as its logarithm beyond
TICKS = (-10, -5, -2, 0, 2, 5, 10, 20, 50, 100, 200)
OF_C = (
    ("frequency_c_mhz", "frequency of C", BLACK, "o", 0.16),
    ("temperature_c_mk", "temperature of C", VERMILION, "s", -0.16),
)


def trust_figure(found: Trust, facts: dict[str, Any]) -> Figure:
    """The page of plots.

    Parameters
    ----------
    found : Trust
    facts : dict
        `reduce.trust_facts.trust_facts` of it.

    Returns
    -------
    matplotlib.figure.Figure
    """
    threshold = float(facts["alarms"]["statistic"]["threshold"])
    caption = (
        "Top: posterior probability below the truth, mocks as believed; flat if the posteriors are true; grey, where "
        "the bars of a panel all lie in 99 % of such studies. Hollow in the middle: errors too small; humped: too "
        f"large; tilted: biased. Threshold: {threshold:.2f}, set for 1 % false alarms on half of the mocks without a "
        f"signal. Dotted: chi-squared beyond which a fit is flagged ({100 * IMPROBABLE:g} %). Bottom: mean and width "
        "of (mean − truth) / stated error; thick bar, one standard error; thin, the band in which all numbers of all "
        f"worlds lie together (99 %); grey, a bias of {BIAS_MATTERS:g} or a factor {FACTOR_MATTERS:g}."
    )
    worlds = [facts["believed"], *facts["outside"]]
    last_in = 0.9 + WORLD_IN * len(worlds)
    products = Products({"spectra.nc": xr.Dataset()})  # whether it is invented stands in the configuration
    figure = sheet(sum(HEIGHTS_IN) + last_in + 1.7, "can the stated errors be trusted", caption, products, found.config)
    parts = figure.add_gridspec(6, 1, height_ratios=[*HEIGHTS_IN, last_in])
    band = Patch(facecolor=PALE, label="99 % band")
    bars = Patch(facecolor="white", edgecolor=BLACK, label=f"{facts['believed']['mocks']} mocks as believed")
    key(_strip(figure, parts[0]), [bars, band], 2)
    panels = np.asarray(parts[1].subgridspec(2, 3).subplots(sharex=True, sharey=True))
    for axes, name, rank in zip(panels.ravel(), found.names, found.believed.column("rank").T, strict=True):
        _ranks(axes, rank, name)
    for axes in panels[-1]:
        axes.set_xlabel("rank of the truth")
    for axes in panels[:, 0]:
        axes.set_ylabel("mocks")
    strip, (left, right) = _strip(figure, parts[2]), np.asarray(parts[3].subgridspec(1, 2).subplots())
    _detection(left, found, threshold)
    _chi_squared(right, found)
    key(strip, _middle_key(), 5)
    strip, (left, right) = _strip(figure, parts[4]), np.asarray(parts[5].subgridspec(1, 2).subplots(sharey=True))
    _pulls(left, right, worlds, facts["rules"]["numbers"])
    marks = [
        Line2D([], [], color=c, marker=m, linestyle="none", markerfacecolor="white", label=label)
        for _, label, c, m, _ in OF_C
    ]
    key(strip, marks, 2)
    return figure


def _strip(figure: Figure, place: Any) -> Axes:
    axes = figure.add_subplot(place)
    axes.set_axis_off()
    return axes


def _ranks(axes: Axes, rank: FloatArray, name: str) -> None:
    count = len(rank)
    bars = int(np.clip(count // MOCKS_A_BAR, *RANK_BARS))
    edges = np.linspace(0.0, 1.0, bars + 1)
    low, high = stats.binom.interval(1.0 - (1.0 - BAND) / bars, count, 1.0 / bars)
    axes.axhspan(low, high, color=PALE, zorder=0)
    axes.axhline(count / bars, color=GREY, linewidth=0.7, zorder=0.5)
    heights = np.histogram(rank, edges)[0]
    axes.stairs(heights, edges, color=BLACK)
    axes.set_xlim(0.0, 1.0)
    axes.set_xticks([0.0, 0.5, 1.0])
    # All six share the axis: it only grows.
    axes.set_ylim(0.0, max(axes.get_ylim()[1], 1.1 * high, 1.1 * float(heights.max())))
    axes.set_title(spoken(name))


def _bent(x: FloatArray) -> FloatArray:
    return np.asarray(np.arcsinh(np.asarray(x) / BEND))


def _unbent(y: FloatArray) -> FloatArray:
    return np.asarray(BEND * np.sinh(y))


def _detection(axes: Axes, found: Trust, threshold: float) -> None:
    with_signal, silent = found.believed.column("statistic"), found.silent.column("statistic")
    both = np.concatenate([with_signal, silent, [threshold]])
    bars = int(np.clip(len(silent) // MOCKS_A_BAR, *OTHER_BARS))
    edges = _unbent(np.linspace(_bent(both.min()) - 0.05, _bent(both.max()) + 0.05, bars + 1))
    axes.set_xscale("function", functions=(_bent, _unbent))
    axes.stairs(np.histogram(silent, edges)[0] / len(silent), edges, fill=True, color=PALE)
    axes.stairs(np.histogram(silent, edges)[0] / len(silent), edges, color=GREY, linestyle=DASHES[1])
    axes.stairs(np.histogram(with_signal, edges)[0] / len(with_signal), edges, color=BLUE)
    axes.axvline(threshold, color=VERMILION, linestyle=DASHES[3])
    axes.set_xlim(edges[0], edges[-1])
    axes.set_xticks([tick for tick in TICKS if edges[0] <= tick <= edges[-1]])
    axes.set_ylim(bottom=0.0)
    axes.set_xlabel("depth of C below B and D over its error")
    axes.set_ylabel("share of mocks")


def _chi_squared(axes: Axes, found: Trust) -> None:
    values, freedom = found.believed.column("chi_squared"), found.believed.column("degrees_of_freedom")
    law = stats.chi2(float(freedom.mean()))
    low = min(float(values.min()), float(law.ppf(1e-4)))
    high = max(float(values.max()), float(law.isf(1e-4)))
    edges = np.linspace(low, high, int(np.clip(len(values) // MOCKS_A_BAR, *OTHER_BARS)) + 1)
    axes.stairs(np.histogram(values, edges, density=True)[0], edges, color=BLACK)
    x = np.linspace(low, high, 300)
    axes.plot(x, law.pdf(x), color=BLUE, linestyle=DASHES[1])
    axes.axvline(float(law.isf(IMPROBABLE)), color=GREY, linestyle=DASHES[2])
    axes.set_xlim(low, high)
    axes.set_ylim(bottom=0.0)
    axes.set_xlabel(f"chi-squared of {freedom.mean():.0f} degrees of freedom")
    axes.set_ylabel("density of mocks")


def _middle_key() -> list[Any]:
    return [
        Line2D([], [], color=BLUE, label="with a signal"),
        Patch(facecolor=PALE, edgecolor=GREY, linestyle="--", label="without"),
        Line2D([], [], color=VERMILION, linestyle=DASHES[3], label="threshold"),
        Line2D([], [], color=BLACK, label="chi-squared, as believed"),
        Line2D([], [], color=BLUE, linestyle=DASHES[1], label="its law"),
    ]


def _pulls(mean_axes: Axes, width_axes: Axes, worlds: list[dict[str, Any]], numbers: int) -> None:
    mean_axes.axvspan(-BIAS_MATTERS, BIAS_MATTERS, color=PALE, zorder=0)
    width_axes.axvspan(1.0 / FACTOR_MATTERS, FACTOR_MATTERS, color=PALE, zorder=0)
    mean_axes.axvline(0.0, color=GREY, linewidth=0.7)
    width_axes.axvline(1.0, color=GREY, linewidth=0.7)
    width_axes.set_xscale("log")
    for row, world in enumerate(worlds):
        wide = band_reach(world["mocks"], numbers)
        for name, _, colour, marker, above in OF_C:
            own, y = world["parameters"][name], -row + above
            mean, error = own["mean_pull"], own["mean_pull_error"]
            near, far = ((mean - reach * error, mean + reach * error) for reach in (1.0, wide))
            _mark(mean_axes, mean, y, near, far, colour, marker)
            width, relative = own["pull_width"], own["pull_width_error"] / own["pull_width"]
            near, far = ((width / np.exp(reach * relative), width * np.exp(reach * relative)) for reach in (1.0, wide))
            _mark(width_axes, width, y, near, far, colour, marker)
    labels = [
        "\n".join(textwrap.wrap(world["name"], LABEL_CHARACTERS, max_lines=2, placeholder=" ...")) for world in worlds
    ]
    mean_axes.set_yticks(-np.arange(len(worlds)), labels)
    mean_axes.set_ylim(-len(worlds) + 0.4, 0.6)
    low, high = width_axes.get_xlim()
    shown = [t for t in (0.3, 0.5, 0.7, 0.8, 1.0, 1.2, 1.5, 2.0, 3.0, 5.0, 10.0, 20.0, 50.0) if low <= t <= high]
    width_axes.xaxis.set_minor_locator(NullLocator())
    width_axes.set_xticks(_apart(shown, low, high), [f"{t:g}" for t in _apart(shown, low, high)])
    mean_axes.set_xlabel("mean pull, stated errors")
    width_axes.set_xlabel("width of the pulls")


def _mark(
    axes: Axes,
    x: float,
    y: float,
    near: tuple[float, float],
    far: tuple[float, float],
    colour: str,
    marker: str,
) -> None:
    """A point with a thick bar and a thin one."""
    axes.plot(far, (y, y), color=colour, linewidth=0.8)
    axes.plot(near, (y, y), color=colour, linewidth=2.6, solid_capstyle="butt")
    axes.plot(x, y, marker, color=colour, markersize=5.0, markerfacecolor="white")


def _apart(ticks: list[float], low: float, high: float) -> list[float]:
    """Those of the ticks that have room for their number on a logarithmic axis; 1 always."""
    room = 0.08 * np.log(high / low)
    kept = [1.0]
    for tick in sorted(ticks, key=lambda each: abs(np.log(each))):
        if all(abs(np.log(tick / other)) > room for other in kept):
            kept.append(tick)
    return sorted(kept)
