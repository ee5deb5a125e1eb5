"""sky_maps.png, sky_index.png and sky_spectrum.png: the sky of a campaign as the engine would see it.

Maps are whole-sphere Mollweide projections in galactic coordinates, longitude growing to the left, the
centre of the Galaxy in the middle. Colour maps are cividis and, about zero, one from purple to orange: both are told
apart by eyes that do not separate red from green.
"""

from __future__ import annotations

from typing import Any

import healpy
import matplotlib
import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.colors import LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter
from numpy.typing import NDArray

from reduce.report.style import (
    BLACK,
    BLUE,
    DASHES,
    GREY,
    PALE,
    VERMILION,
    frequency_axis,
    key,
    panels_with_key,
    sheet,
)
from reduce.runner import Products
from reduce.sky_card import PERCENTILES, PUBLISHED, STATED_TERMS, SkyCard
from sims.config import Config
from sims.sky_map_checks import Frame
from sims.sky_maps import turn_directions

FloatArray = NDArray[np.float64]

ACROSS = 900
MERIDIANS_DEG = (-120.0, -60.0, 0.0, 60.0, 120.0)
PARALLELS_DEG = (-60.0, -30.0, 0.0, 30.0, 60.0)
FLAT = 1e-6


def maps_figure(card: SkyCard, config: Config) -> Figure:
    """Brightness at three frequencies of the band.

    Parameters
    ----------
    card : SkyCard
    config : Config
        Names the campaign.

    Returns
    -------
    matplotlib.figure.Figure
    """
    caption = (
        "Brightness temperature, CMB included, over the whole sky in galactic coordinates; longitude grows to the "
        "left, the centre of the Galaxy is in the middle. Colours are logarithmic and cut at the faintest and "
        "brightest thousandth of the sky."
    )
    figure = _sheet(10.4, "the sky at the ends and in the middle of the band", caption, config)
    panels = figure.subplots(len(card.shown_mhz), 1)
    for axes, frequency, values in zip(panels, card.shown_mhz, card.shown_k, strict=True):
        low, high = np.quantile(values, [0.001, 0.999])
        norm = LogNorm(low, max(high, low * 1.001))
        _map(axes, values, card.frame, norm, "cividis", "K", f"{frequency:.4g} MHz, mean {values.mean():,.0f} K")
    return figure


def index_figure(card: SkyCard, config: Config) -> Figure:
    """Spectral index and curvature in the middle of the band, as `maps_figure`."""
    caption = (
        "T ~ (f/f₀)^−(β + γ ln(f/f₀)) of the brightness above the CMB about f₀, the middle of the band in ln f, over "
        "the whole sky in galactic coordinates; longitude grows to the left. Colours are cut at the lowest and "
        "highest thousandth of the sky; those of γ are even about zero."
    )
    figure = _sheet(7.6, f"index and curvature at {card.middle_mhz:.4g} MHz", caption, config)
    panels = figure.subplots(2, 1)
    low, high = np.quantile(card.index, [0.001, 0.999])
    spread = "" if high - low > FLAT else ", the same everywhere"
    middle, half = (low + high) / 2.0, max((high - low) / 2.0, 0.01)
    title = f"index β, mean over the sky {card.index.mean():.3f}{spread}"
    _map(panels[0], card.index, card.frame, Normalize(middle - half, middle + half), "cividis", "β", title)
    low, high = np.quantile(card.curvature, [0.001, 0.999])
    spread = "" if high - low > FLAT else ", the same everywhere"
    most = max(abs(low), abs(high), 0.01)
    title = f"curvature γ, mean over the sky {_minus(f'{round(card.curvature.mean(), 3) + 0.0:.3f}')}{spread}"
    _map(panels[1], card.curvature, card.frame, Normalize(-most, most), "PuOr", "γ", title)
    return figure


def spectrum_figure(card: SkyCard, config: Config) -> Figure:
    """Mean spectrum against published ones, and what a smooth foreground leaves of it.

    Parameters
    ----------
    card, config
        As `maps_figure`.

    Returns
    -------
    matplotlib.figure.Figure
    """
    sources = ". ".join(f"{one.name.capitalize()}: {one.source}" for one in PUBLISHED)
    caption = (
        f"Mean of this sky and the range of its pixels (top), its ratio to published spectra (middle), and what "
        f"log polynomials of {STATED_TERMS} and {STATED_TERMS + 1} terms leave of the mean (bottom). {sources}."
    )
    figure = _sheet(8.4, "mean spectrum", caption, config)
    strip, panels = panels_with_key(figure, 3, 1, 0.5, sharex=True)
    top, ratio, left = panels[:, 0]
    frequency = card.frequency_mhz
    top.fill_between(frequency, card.quantile_k[0], card.quantile_k[-1], color=PALE, linewidth=0.0)
    top.plot(frequency, card.mean_k, color=BLACK)
    handles: list[Line2D | Patch] = [
        Line2D([], [], color=BLACK, label="mean of this sky"),
        Patch(color=PALE, label=f"{PERCENTILES[0]:.0f} to {PERCENTILES[-1]:.0f} % of its pixels"),
    ]
    for one, colour, dash in zip(PUBLISHED, (VERMILION, BLUE), DASHES[1:], strict=False):
        value = one.value_k(frequency)
        top.plot(frequency, value, color=colour, linestyle=dash)
        ratio.plot(frequency, card.mean_k / value, color=colour, linestyle=dash)
        handles.append(Line2D([], [], color=colour, linestyle=dash, label=one.name))
    top.set_yscale("log")
    top.set_ylabel("brightness, K")
    top.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    top.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.0f}"))
    top.yaxis.set_minor_formatter(NullFormatter())
    ratio.axhline(1.0, color=GREY, linewidth=0.7)
    ratio.set_ylabel("mean over published")
    left.axhline(0.0, color=GREY, linewidth=0.7)
    for terms, colour, dash in ((STATED_TERMS, BLACK, DASHES[0]), (STATED_TERMS + 1, BLUE, DASHES[2])):
        left.plot(frequency, card.residual_mk[terms], color=colour, linestyle=dash)
        rms = float(np.std(card.residual_mk[terms]))
        left.plot([], [], color=colour, linestyle=dash, label=f"{terms} terms, {rms:.2g} mK rms")
    left.set_ylabel("left of the mean, mK")
    left.yaxis.set_major_formatter(FuncFormatter(lambda value, _: _minus(f"{value:g}")))
    low, high = left.get_ylim()
    left.set_ylim(low, high + 0.3 * (high - low))
    left.legend(loc="upper center", ncols=2)
    for axes in (top, ratio, left):
        frequency_axis(axes, float(frequency[0]), float(frequency[-1]), label=axes is left)
    key(strip, handles, 4)
    return figure


def mollweide(values: FloatArray, frame: Frame, across: int = ACROSS) -> FloatArray:
    """Picture of a HEALPix map in galactic coordinates.

    Parameters
    ----------
    values : ndarray[pixel]
        RING order, in `frame`.
    frame : {"galactic", "icrs", "fk5", "fk4"}
    across : int
        Columns of the picture; half as many rows.

    Returns
    -------
    ndarray[row, column]
        South at the bottom (first row), longitude growing to the left; NaN outside the ellipse.
    """
    x = np.linspace(-1.0, 1.0, across + 1)[:-1] + 1.0 / across
    y = np.linspace(-1.0, 1.0, across // 2 + 1)[:-1] + 2.0 / across
    column, row = np.meshgrid(x, y)
    inside = column**2 + row**2 < 1.0
    turn = np.arcsin(row[inside])
    latitude = np.arcsin((2.0 * turn + np.sin(2.0 * turn)) / np.pi)
    longitude = -np.pi * column[inside] / np.cos(turn)
    galactic = healpy.ang2vec(np.pi / 2.0 - latitude, longitude)
    pixels = healpy.vec2pix(healpy.npix2nside(values.size), *turn_directions(galactic, "galactic", frame).T)
    picture = np.full(inside.shape, np.nan)
    picture[inside] = values[pixels]
    return picture


def _place(longitude_deg: FloatArray, latitude_deg: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Where a galactic place falls on the ellipse of half axes 1 and 1 that `_map` stretches."""
    latitude = np.radians(latitude_deg)
    turn = latitude.copy()
    for _ in range(60):
        slope = np.maximum(2.0 + 2.0 * np.cos(2.0 * turn), 1e-6)
        turn = turn - (2.0 * turn + np.sin(2.0 * turn) - np.pi * np.sin(latitude)) / slope
    return -np.radians(longitude_deg) / np.pi * np.cos(turn), np.sin(turn)


def _map(axes: Axes, values: FloatArray, frame: Frame, norm: Normalize, colours: str, unit: str, title: str) -> None:
    drawn = axes.imshow(
        mollweide(values, frame), origin="lower", extent=(-1, 1, -1, 1), aspect=0.5, norm=norm,
        cmap=matplotlib.colormaps[colours], interpolation="nearest",
    )  # fmt: skip
    axes.set_axis_off()
    axes.set_title(title)
    line = np.linspace(-89.9, 89.9, 181)
    stroke: dict[str, Any] = {"color": PALE if colours == "cividis" else GREY, "linewidth": 0.5, "alpha": 0.55}
    for longitude in MERIDIANS_DEG:
        axes.plot(*_place(np.full(line.size, longitude), line), **stroke)
    for latitude in PARALLELS_DEG:
        if latitude:
            axes.plot(*_place(2.0 * line, np.full(line.size, latitude)), **stroke)
        x, y = _place(np.array([180.0]), np.array([latitude]))
        axes.annotate(
            _minus(f"{latitude:+.0f}°") if latitude else "0°", (float(x[0]), float(y[0])), xytext=(-4, 0),
            textcoords="offset points", ha="right", va="center", fontsize=7.5, color=GREY,
        )  # fmt: skip
    around = np.linspace(0.0, 2.0 * np.pi, 361)
    axes.plot(np.cos(around), np.sin(around), color=BLACK, linewidth=0.8)
    for longitude in MERIDIANS_DEG:
        x, y = _place(np.array([longitude]), np.array([0.0]))
        axes.annotate(
            f"l = {longitude % 360.0:.0f}°" if longitude == 0.0 else f"{longitude % 360.0:.0f}°",
            (float(x[0]), -1.0), xytext=(0, -3), textcoords="offset points", ha="center", va="top", fontsize=7.5,
            color=GREY,
        )  # fmt: skip
    bar = axes.figure.colorbar(drawn, ax=axes, shrink=0.85, pad=0.02, aspect=22, extend="both")
    bar.set_label(unit)
    if isinstance(norm, LogNorm):
        bar.ax.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.0f}"))
        bar.ax.yaxis.set_minor_formatter(NullFormatter())
    else:
        bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: _minus(f"{value:g}")))


def _minus(text: str) -> str:
    return text.replace("-", "−")


def _sheet(height_in: float, title: str, caption: str, config: Config) -> Figure:
    # The sheet asks spectra whether the sky is invented; here the configuration decides.
    return sheet(height_in, title, caption, Products({"spectra.nc": xr.Dataset()}), config)
