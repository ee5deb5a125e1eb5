"""The look of every figure: sheet, colours, strokes, and the bytes of the picture.

Colours are those of Okabe and Ito (2008, Color Universal Design), told apart by eyes that do
not separate red from green; line styles tell them apart once more, in grey print. Nothing
global is changed: `look` holds for a `with` block only.
"""

from __future__ import annotations

import io
import textwrap
from collections.abc import Sequence
from contextlib import AbstractContextManager
from typing import Any

import matplotlib
import matplotlib.style
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from reduce.report.facts import invented
from reduce.runner import Products
from sims.config import FitConfig
from sims.hydrogen import frequency_mhz

FloatArray = NDArray[np.float64]

BLACK, ORANGE, SKY, GREEN = "#000000", "#E69F00", "#56B4E9", "#009E73"
BLUE, VERMILION, PURPLE = "#0072B2", "#D55E00", "#CC79A7"
GREY, PALE = "#666666", "#D9D9D9"
DASHES: tuple[Any, ...] = ("-", (0, (6, 2)), (0, (2, 1.2)), (0, (7, 2, 1.5, 2)))

WIDTH_IN = 7.6
DPI = 150
CAPTION_CHARACTERS, TITLE_CHARACTERS = 116, 78
REDSHIFTS = (8, 9, 10, 11, 12, 13, 15, 17, 20, 25, 30, 35, 40, 50, 70, 100)
CLOSEST_TICKS = 0.05

_LOOK: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "axes.titlesize": 9.0,
    "axes.titlelocation": "left",
    "axes.labelsize": 9.0,
    "axes.linewidth": 0.7,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.minor.visible": False,
    "ytick.minor.visible": False,
    "legend.fontsize": 8.0,
    "legend.title_fontsize": 8.0,
    "legend.frameon": True,
    "legend.framealpha": 0.9,
    "legend.edgecolor": "none",
    "lines.linewidth": 1.3,
    "hatch.linewidth": 0.5,
    "text.usetex": False,
    "savefig.facecolor": "white",
}


def look() -> AbstractContextManager[None]:
    """Block in which figures are made and drawn in this style, whatever the settings round it."""
    return matplotlib.style.context(["default", _LOOK])


def sheet(height_in: float, title: str, caption: str, products: Products, config: FitConfig) -> Figure:
    """Empty figure of page width that names the campaign.

    Parameters
    ----------
    height_in : float
        Height, inches.
    title : str
        What is shown; the campaign goes before it.
    caption : str
        Text under the figure, wrapped here: what is to be seen.
    products : Products
    config : FitConfig

    Returns
    -------
    matplotlib.figure.Figure
        With room kept for title and caption. An invented campaign says so.
    """
    figure = Figure(figsize=(WIDTH_IN, height_in), layout="constrained")
    heading = textwrap.fill(f"{config.run.name}: {title}", TITLE_CHARACTERS)
    figure.suptitle(heading, x=0.01, ha="left", fontsize=10.5, fontweight="bold", parse_math=False)
    lines = textwrap.wrap(caption, CAPTION_CHARACTERS)
    if invented(products, config):
        lines.append("Invented sky and campaign.")
    figure.supxlabel("\n".join(lines), x=0.01, ha="left", fontsize=8.0, color="#333333", parse_math=False)
    return figure


def panels_with_key(
    figure: Figure, rows: int, columns: int, key_in: float, **shared: Any
) -> tuple[Axes, NDArray[np.object_]]:
    """Panels with a strip above them for the key.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    rows, columns : int
    key_in : float
        Height of the strip, inches.
    **shared
        `sharex` and `sharey` of `Figure.subplots`.

    Returns
    -------
    strip : Axes
        Bare; `key` writes to it.
    panels : ndarray[row, column]
        Axes.
    """
    outer = figure.add_gridspec(2, 1, height_ratios=[key_in, figure.get_figheight() - key_in])
    strip = figure.add_subplot(outer[0])
    strip.set_axis_off()
    return strip, np.asarray(outer[1].subgridspec(rows, columns).subplots(squeeze=False, **shared))


def key(strip: Axes, handles: Sequence[Any], columns: int) -> None:
    """Write the key into its strip."""
    strip.legend(handles=handles, loc="center", ncols=columns, borderaxespad=0.0, frameon=False)


def png(figure: Figure) -> bytes:
    """The picture, without date or version in it: the same figure gives the same bytes."""
    # Saving would lay out twice; once is enough.
    layout = figure.get_layout_engine()
    if layout is not None:
        layout.execute(figure)
        figure.set_layout_engine("none")
    buffer = io.BytesIO()
    figure.savefig(buffer, format="png", dpi=DPI, metadata={"Software": None})
    return buffer.getvalue()


def bin_strokes(count: int) -> list[dict[str, Any]]:
    """Colour (cividis, dark to light) and dashes of each bin's line."""
    shades = matplotlib.colormaps["cividis"](np.linspace(0.0, 0.88, count))
    return [{"color": tuple(shade), "linestyle": DASHES[number % len(DASHES)]} for number, shade in enumerate(shades)]


def frequency_axis(axes: Axes, low_mhz: float, high_mhz: float, *, label: bool = True) -> None:
    """Frequency as x axis."""
    axes.set_xlim(low_mhz, high_mhz)
    if label:
        axes.set_xlabel("frequency, MHz")


def redshift_axis(axes: Axes) -> None:
    """Redshift of the 21-cm line above the panel, at round values."""
    low, high = axes.get_xlim()
    ticks = [z for z in REDSHIFTS if low <= float(frequency_mhz(z)) <= high]
    kept: list[int] = []
    for z in ticks:
        place = float(frequency_mhz(z))
        if all(abs(place - float(frequency_mhz(other))) > CLOSEST_TICKS * (high - low) for other in kept):
            kept.append(z)
    axes.tick_params(axis="x", which="both", top=False)
    above = axes.secondary_xaxis("top")
    above.set_xticks([float(frequency_mhz(z)) for z in kept], [str(z) for z in kept])
    above.tick_params(axis="x", which="minor", top=False)
    above.set_xlabel("redshift of the line")


def shade_unused(panels: Sequence[Axes], frequency: FloatArray, width: FloatArray, unused: NDArray[np.bool_]) -> bool:
    """Hatch the channels that are not used; returns whether there are any.

    Parameters
    ----------
    panels : sequence of Axes
    frequency, width : ndarray[channel]
        Centres and widths, MHz.
    unused : ndarray[channel]
    """
    for first, last in _runs(unused):
        low, high = frequency[first] - width[first] / 2.0, frequency[last] + width[last] / 2.0
        for axes in panels:
            axes.axvspan(low, high, facecolor="#EEEEEE", edgecolor="#AAAAAA", hatch="////", linewidth=0.0, zorder=0)
    return bool(unused.any())


def _runs(mask: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First and last index of each unbroken run of True."""
    edges = np.diff(np.concatenate([[0], mask.astype(np.int8), [0]]))
    starts, stops = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1) - 1
    return [(int(a), int(b)) for a, b in zip(starts, stops, strict=True)]
