"""compare.png: C against the number of terms, family by family, with what the fit says of each."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from reduce.judge import Judged
from reduce.report.facts import true_points
from reduce.report.style import (
    BLACK,
    BLUE,
    GREEN,
    GREY,
    ORANGE,
    PURPLE,
    SKY,
    VERMILION,
    key,
    panels_with_key,
    sheet,
)
from reduce.runner import Products
from reduce.trough_model import NAMES
from sims.config import FitConfig

FloatArray = NDArray[np.float64]

LOOKS: tuple[tuple[str, str], ...] = (
    (BLACK, "o"), (VERMILION, "s"), (BLUE, "^"), (ORANGE, "D"), (PURPLE, "v"), (GREEN, "P"), (SKY, "X"),
)  # fmt: skip
APART = 0.11  # of a term, between families
HIGHEST = 3.0  # chi-squared over degrees of freedom beyond it is drawn at the edge
WORST_BIC = 400.0


def compare_figure(rows: Sequence[Judged], chosen: int | None, products: Products, config: FitConfig) -> Figure:
    """C's frequency and temperature, chi-squared over degrees of freedom and BIC, against the number of terms.

    Parameters
    ----------
    rows : sequence of Judged
    chosen : int or None
        Row that the default rule marks.
    products : Products
        With spectra.nc, and truth.nc if there is one.
    config : FitConfig

    Returns
    -------
    matplotlib.figure.Figure
        A family without free terms stands at zero.
    """
    caption = (
        "Posterior mean and standard deviation of C, chi-squared of the best trough over its degrees of freedom (grey: "
        "one, and the two standard deviations that noise allows) and Schwarz's criterion over the lowest, for each "
        f"foreground. Arrows: beyond the panel (chi-squared over {HIGHEST:g} times its freedom; criterion over "
        f"{WORST_BIC:g}). Ring: the row that the default rule marks; the choice is yours."
    )
    fitted = [row for row in rows if row.fitted]
    figure = sheet(8.4, "how much foreground is enough", caption, products, config)
    families = list(dict.fromkeys(row.family for row in rows))
    strip, grid = panels_with_key(figure, 4, 1, 0.45, sharex=True)
    panels = grid[:, 0]
    of_c = NAMES.index("frequency_c_mhz"), NAMES.index("temperature_c_mk")
    lowest = min((row.bic for row in fitted), default=0.0)
    quantities: tuple[tuple[str, Callable[[Judged], float], Callable[[Judged], float] | None], ...] = (
        ("C, MHz", lambda row: row.mean[of_c[0]], lambda row: row.sd[of_c[0]]),
        ("C, mK", lambda row: row.mean[of_c[1]], lambda row: row.sd[of_c[1]]),
        ("chi² / freedom", lambda row: row.chi_squared_trough / row.freedom_trough, None),
        ("BIC over lowest", lambda row: row.bic - lowest, None),
    )
    for axes, (label, value, error), top in zip(panels, quantities, (None, None, HIGHEST, WORST_BIC), strict=True):
        for number, family in enumerate(families):
            own = [row for row in fitted if row.family == family]
            shift = APART * (number - (len(families) - 1) / 2.0)
            _points(axes, own, shift, number, value, error, top)
        if chosen is not None:
            row = rows[chosen]
            shift = APART * (families.index(row.family) - (len(families) - 1) / 2.0)
            height = value(row) if top is None else min(value(row), 0.97 * top)
            axes.plot(row.terms + shift, height, "o", clip_on=False, markersize=13, markerfacecolor="none", color=GREEN)
        axes.set_ylabel(label)
    freedom = [row.freedom_trough for row in fitted]
    if freedom:
        wide = 2.0 * np.sqrt(2.0 / min(freedom))
        panels[2].axhspan(1.0 - wide, 1.0 + wide, color="#E5E5E5", zorder=0)
        panels[2].axhline(1.0, color=GREY, linewidth=0.7, zorder=0.5)
    panels[2].set_ylim(0.85, HIGHEST)
    panels[3].set_ylim(-0.04 * WORST_BIC, WORST_BIC)
    _truth(panels, products, config)
    panels[-1].set_xlabel("free terms a bin")
    panels[-1].xaxis.set_major_locator(MaxNLocator(integer=True))
    _key(strip, families, chosen is not None, true_points(products, config) is not None)
    return figure


def _points(
    axes: Axes,
    rows: Sequence[Judged],
    shift: float,
    number: int,
    value: Callable[[Judged], float],
    error: Callable[[Judged], float] | None,
    top: float | None,
) -> None:
    colour, marker = LOOKS[number % len(LOOKS)]
    terms = np.array([row.terms for row in rows]) + shift
    values = np.array([value(row) for row in rows])
    inside = np.ones(len(rows), bool) if top is None else values < top
    errors = None if error is None else np.array([error(row) for row in rows])
    axes.errorbar(
        terms[inside], values[inside], yerr=None if errors is None else errors[inside], color=colour, marker=marker,
        markersize=4.5, linewidth=0.7 if error is None else 0.0, elinewidth=1.1, capsize=2.0,
        markerfacecolor="white" if number % 2 else colour,
    )  # fmt: skip
    if top is not None:
        axes.plot(terms[~inside], np.full(int((~inside).sum()), 0.97 * top), "^", color=colour, markersize=5)


def _truth(panels: NDArray[np.object_], products: Products, config: FitConfig) -> None:
    truth = true_points(products, config)
    if truth is not None:
        for axes, value in zip(panels[:2], truth["C"], strict=True):
            axes.axhline(value, color=BLACK, linestyle=(0, (6, 2)), linewidth=0.9, zorder=0.5)


def _key(strip: Axes, families: Sequence[str], chosen: bool, truth: bool) -> None:
    handles = [
        Line2D(
            [], [], color=LOOKS[number % len(LOOKS)][0], marker=LOOKS[number % len(LOOKS)][1], linestyle="none",
            markersize=5, markerfacecolor="white" if number % 2 else LOOKS[number % len(LOOKS)][0], label=family,
        )
        for number, family in enumerate(families)
    ]  # fmt: skip
    if truth:
        handles.append(Line2D([], [], color=BLACK, linestyle=(0, (6, 2)), linewidth=0.9, label="truth"))
    if chosen:
        handles.append(
            Line2D(
                [], [], color=GREEN, marker="o", linestyle="none", markersize=10, markerfacecolor="none", label="marked"
            )
        )
    key(strip, handles, 4)
