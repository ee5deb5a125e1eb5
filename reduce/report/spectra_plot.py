"""spectra.png: what was measured, how noisy it is, and how much of a signal reaches it."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullFormatter

from reduce.report.facts import bin_labels, bins_with_data
from reduce.report.style import bin_strokes, frequency_axis, shade_unused, sheet
from reduce.runner import Products
from sims.config import FitConfig

MOST_NAMED = 24
ROUND_K = tuple(float(f * 10**p) for p in range(6) for f in (1, 2, 5))


def spectra_figure(products: Products, config: FitConfig) -> Figure:
    """Antenna temperature, noise and signal response of every bin that has data.

    Parameters
    ----------
    products : Products
        With spectra.nc and bundle.nc.
    config : FitConfig

    Returns
    -------
    matplotlib.figure.Figure
    """
    spectra = products.dataset("spectra.nc")
    numbers = bins_with_data(products)
    heading, labels = bin_labels(products, config)
    frequency, width = spectra["frequency_mhz"].values, spectra["width_mhz"].values
    good = spectra["flag"].values == 0
    temperature_k = np.where(good, spectra["antenna_temperature_k"].values, np.nan)
    sigma_mk = 1e3 * np.sqrt(np.where(good, spectra["noise_variance"].values, np.nan))
    response = spectra["signal_response"].values
    caption = (
        f"Mean antenna temperature of each bin (top), standard deviation of its noise in channels of "
        f"{_span(width)} (middle), and the share w of a signal filling the sky that reaches it (bottom)."
    )
    if spectra.attrs.get("signal_response_given") == 0:
        caption += " No w came with the data: it is taken as 1."
    unused = ~good[numbers].any(axis=0)
    if unused.any():
        caption += " Hatched: channels not used."
    figure = sheet(8.2, "spectra as observed", caption, products, config)
    axes = figure.subplots(3, 1, sharex=True, height_ratios=[1.7, 1.0, 1.0])
    for stroke, number in zip(bin_strokes(len(numbers)), numbers, strict=True):
        axes[0].plot(frequency, temperature_k[number], label=labels[number], **stroke)
        axes[1].plot(frequency, sigma_mk[number], **stroke)
        axes[2].plot(frequency, response[number], **stroke)
    for panel, values, name in ((axes[0], temperature_k, "antenna temperature, K"), (axes[1], sigma_mk, "noise, mK")):
        panel.set_yscale("log" if np.nanmin(values) > 0 else "linear")
        panel.set_ylabel(name)
        if panel.get_yscale() == "log":
            panel.yaxis.set_major_locator(FixedLocator(ROUND_K))
            panel.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
            panel.yaxis.set_minor_formatter(NullFormatter())
    axes[2].set_ylabel("signal response w")
    axes[2].margins(y=0.15)
    axes[2].ticklabel_format(axis="y", useOffset=False)
    if np.ptp(response[numbers]) == 0.0:
        axes[2].set_ylim(response[numbers].min() - 0.1, response[numbers].max() + 0.1)
    shade_unused(list(axes), frequency, width, unused)
    frequency_axis(axes[2], frequency[0] - width[0] / 2.0, frequency[-1] + width[-1] / 2.0)
    if 1 < len(numbers) <= MOST_NAMED:
        axes[0].legend(title=heading, ncols=1 + (len(numbers) > 4) + (len(numbers) > 12), loc="upper right")
    elif len(numbers) > MOST_NAMED:
        axes[0].set_title(f"{len(numbers)} bins, the first darkest")
    return figure


def _span(width_mhz: np.ndarray) -> str:
    """Channel width in words."""
    low, high = float(width_mhz.min()), float(width_mhz.max())
    return f"{low:.4g} MHz" if high - low < 1e-3 * high else f"{low:.3g} to {high:.3g} MHz"
