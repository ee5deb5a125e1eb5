"""residuals.png: what is left of each bin when its fitted foreground is taken away."""

from __future__ import annotations

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator
from numpy.typing import NDArray

from reduce.report.facts import (
    bin_labels,
    bins_with_data,
    left_of_signal_k,
    residual_seen_k,
    systematic_sigma_k,
    true_signal_k,
)
from reduce.report.style import (
    BLACK,
    BLUE,
    GREEN,
    ORANGE,
    PALE,
    VERMILION,
    frequency_axis,
    key,
    panels_with_key,
    shade_unused,
    sheet,
)
from reduce.runner import Products
from sims.config import FitConfig

FloatArray = NDArray[np.float64]

GROUP = 8
MOST_PANELS = 24


def residuals_figure(products: Products, config: FitConfig) -> Figure:
    """Residuals of the bins as small multiples with shared axes.

    Parameters
    ----------
    products : Products
        With spectra.nc, bundle.nc and, for a mock, truth.nc.
    config : FitConfig

    Returns
    -------
    matplotlib.figure.Figure
        Of more than `MOST_PANELS` bins, that many, evenly spread; the title says so.
    """
    packed = products.dataset("bundle.nc")
    packed = packed.assign(residual_k=(("bin", "channel"), residual_seen_k(packed)))
    names = bin_labels(products, config)[1]
    labels = [names[number] for number in bins_with_data(products)]
    count = len(labels)
    shown = np.unique(np.linspace(0, count - 1, min(count, MOST_PANELS)).astype(int))
    columns = 1 + (len(shown) > 3) + (len(shown) > 8) + (len(shown) > 15)
    rows = -(-len(shown) // columns)
    which = "" if len(shown) == count else f", {len(shown)} of {count} bins"
    figure = sheet(
        2.0 + 1.45 * max(rows, 2), f"residuals after foreground subtraction{which}", _caption(packed), products, config
    )
    strip, grid = panels_with_key(figure, rows, columns, 0.4, sharex=True, sharey=True)
    truth_k = true_signal_k(products)
    left_of_truth_k = None if truth_k is None or not truth_k.any() else left_of_signal_k(packed, truth_k)
    systematic_k = systematic_sigma_k(packed)
    frequency, width = packed["frequency_mhz"].values, packed["width_mhz"].values
    panels = list(grid.ravel())
    for axes, number in zip(panels, shown, strict=False):
        _draw_bin(axes, packed, int(number), systematic_k, left_of_truth_k)
        axes.set_title(f"bin {labels[number]}", fontsize=8.5, pad=3)
        shade_unused([axes], frequency, width, packed["flag"].values[number] != 0)
    for axes in panels[len(shown) :]:
        axes.set_axis_off()
    _residual_scale(panels[: len(shown)], packed, _most_mk(packed, shown, systematic_k))
    for column in range(columns):
        last = max(row for row in range(rows) if row * columns + column < len(shown))
        low, high = frequency[0] - width[0] / 2.0, frequency[-1] + width[-1] / 2.0
        frequency_axis(grid[last, column], low, high, label=last == rows - 1)
        grid[last, column].tick_params(labelbottom=True)
    for row in range(rows):
        grid[row, 0].set_ylabel("residual, mK")
    key(strip, panels[0].get_legend_handles_labels()[0], 3)
    return figure


def _draw_bin(
    axes: Axes, packed: xr.Dataset, number: int, systematic_k: FloatArray | None, left_of_truth_k: FloatArray | None
) -> None:
    frequency = packed["frequency_mhz"].values
    good = packed["flag"].values[number] == 0
    residual_mk = 1e3 * packed["residual_k"].values[number]
    sigma_mk = 1e3 * np.sqrt(np.where(good, packed["noise_variance"].values[number], np.nan))
    axes.fill_between(frequency, -sigma_mk, sigma_mk, color=PALE, linewidth=0.0, label="noise, 1σ")
    if systematic_k is not None:
        total = np.hypot(sigma_mk, 1e3 * systematic_k[number])
        for sign, label in ((1.0, "noise and systematics allowed for, 1σ"), (-1.0, "_below")):
            axes.plot(frequency, sign * total, color=BLACK, linewidth=0.7, linestyle=(0, (1, 1.5)), label=label)
    axes.plot(frequency, residual_mk, ".", markersize=2.0, color=BLUE, alpha=0.45, label="residual, each channel")
    if len(frequency) >= 4 * GROUP:
        centre, mean, error = group_means(frequency, residual_mk, sigma_mk)
        axes.errorbar(
            centre, mean, error, fmt="o", markersize=2.6, linewidth=0.8, color=BLACK, label=f"mean of {GROUP} channels"
        )
    if left_of_truth_k is not None:
        axes.plot(
            frequency,
            1e3 * left_of_truth_k[number],
            color=GREEN,
            linestyle=(0, (5, 2)),
            label="left of the true signal",
        )
    axes.plot(
        frequency,
        1e3 * packed["signal_left_k"].values[number],
        color=VERMILION,
        label="left of the posterior-mean signal",
    )
    axes.axhline(0.0, color=ORANGE, linewidth=0.5, zorder=0.5)


def group_means(
    frequency_mhz: FloatArray, values: FloatArray, sigma: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Noise-weighted means of `GROUP` neighbouring channels.

    Parameters
    ----------
    frequency_mhz, values, sigma : ndarray[channel]
        Frequency, MHz, values and their standard deviations in one unit; NaN where flagged.

    Returns
    -------
    frequency, mean, error : ndarray[group]
        Of the groups that have a channel; frequency is averaged with the same weights.
    """
    padded = -(-len(values) // GROUP) * GROUP
    weight, f, v = (np.zeros(padded) for _ in range(3))
    use = np.isfinite(values) & np.isfinite(sigma)
    at = np.flatnonzero(use)
    weight[at], f[at], v[at] = sigma[use] ** -2.0, frequency_mhz[use], values[use]
    total, sum_f, sum_v = (sums.reshape(-1, GROUP).sum(axis=1) for sums in (weight, weight * f, weight * v))
    some = total > 0.0
    return sum_f[some] / total[some], sum_v[some] / total[some], total[some] ** -0.5


def _residual_scale(panels: list[Axes], packed: xr.Dataset, most_mk: float) -> None:
    """Linear within the typical noise and logarithmic beyond, or the lowest channels alone would set the scale."""
    linear_mk = _typical_noise_mk(packed)
    decades = [unit * 10.0**power for power in range(-3, 6) for unit in (1.0, 3.0)]
    above = [value for value in decades if 0.8 * linear_mk <= value <= most_mk]
    places = [*(-value for value in reversed(above)), 0.0, *above]
    for axes in panels:
        axes.set_yscale("asinh", linear_width=linear_mk)
        axes.set_ylim(-most_mk, most_mk)
        axes.yaxis.set_major_locator(FixedLocator(places))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}".replace("-", "−")))
        axes.yaxis.set_minor_locator(NullLocator())


def _typical_noise_mk(packed: xr.Dataset) -> float:
    """Median noise of the channels in use."""
    return 1e3 * float(np.median(np.sqrt(packed["noise_variance"].values[packed["flag"].values == 0])))


def _most_mk(packed: xr.Dataset, shown: NDArray[np.int_], systematic_k: FloatArray | None) -> float:
    """Reach of the scale, a little past all that is drawn."""
    good = packed["flag"].values[shown] == 0
    reach = [packed["residual_k"].values[shown][good], packed["signal_left_k"].values[shown][good]]
    if systematic_k is not None:
        reach.append(np.hypot(systematic_k[shown][good], np.sqrt(packed["noise_variance"].values[shown][good])))
    return 1.15e3 * max(float(np.abs(values).max()) for values in reach)


def _caption(packed: xr.Dataset) -> str:
    numbers = packed.attrs
    chi, degrees = float(numbers["foreground_chi_squared"]), int(numbers["foreground_degrees_of_freedom"])
    surviving = float(numbers["signal_surviving_fraction"])
    caption = (
        f"Foreground alone: chi-squared {chi:.1f} for {degrees} degrees of freedom. The residual is noise, errors of "
        "calibration and model, and what the fit leaves of the signal (coloured lines): "
        f"{surviving:.1%} of its signal-to-noise ratio before the fit."
    )
    if packed.sizes.get("mode", 0) > int(numbers.get("foreground_known_modes", 0)):
        caption += (
            " Waves common to all bins can be errors of calibration; dotted is what the covariance allows for them."
        )
    return f"{caption} The scale is linear up to about {_typical_noise_mk(packed):.2g} mK, logarithmic beyond."
