"""beam_cuts.png, beam_quality.png, beam_change.png and beam_residual.png: the beam of a campaign."""

from __future__ import annotations

import healpy
import numpy as np
import xarray as xr
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from numpy.typing import NDArray

from reduce.beam_card import PLANES_DEG, SHOWN, BeamCard
from reduce.report.style import BLACK, BLUE, DASHES, GREY, VERMILION, frequency_axis, key, panels_with_key, sheet
from reduce.runner import Products
from sims.config import Config

FloatArray = NDArray[np.float64]
COLOURS = (BLACK, BLUE, VERMILION)
FLOOR_DBI = -30.0
CURVE_TERMS = (5, 6, 7, 8)
ACROSS, DOWN = 361, 181


def _sheet(height_in: float, title: str, caption: str, config: Config) -> Figure:
    # Whether the campaign is invented is all that a page asks of the products.
    return sheet(height_in, title, caption, Products({"spectra.nc": xr.Dataset()}), config)


def cuts_figure(card: BeamCard, config: Config) -> Figure:
    """Directivity in the principal planes at three frequencies."""
    caption = (
        "Directivity against the angle from the boresight, in the plane of the x axis (phi 0 for positive angles, 180 "
        f"for negative ones) and across it. Cut at {FLOOR_DBI:g} dBi.".replace("-", "−")
    )
    figure = _sheet(6.4, "cuts through the beam", caption, config)
    strip, panels = panels_with_key(figure, 2, 1, 0.4, sharex=True)
    for plane, axes in enumerate(panels[:, 0]):
        for shown, colour in enumerate(COLOURS):
            axes.plot(card.theta_deg, card.cut_dbi[shown, plane], color=colour, linestyle=DASHES[shown])
        axes.set_ylabel("directivity, dBi")
        axes.set_title(f"phi {PLANES_DEG[plane]:g}°", loc="left")
        axes.set_ylim(max(FLOOR_DBI, float(np.nanmin(card.cut_dbi)) - 1.0), float(card.cut_dbi.max()) + 1.0)
        axes.set_xlim(-180, 180)
        axes.set_xticks(np.arange(-180, 181, 45))
    panels[-1, 0].set_xlabel("angle from the boresight, deg")
    handles = [
        Line2D([], [], color=colour, linestyle=DASHES[n], label=f"{card.frequency_mhz[row]:.4g} MHz")
        for n, (row, colour) in enumerate(zip(SHOWN, COLOURS, strict=True))
    ]
    key(strip, handles, 3)
    return figure


def quality_figure(card: BeamCard, config: Config) -> Figure:
    """Directivity, losses, widths and chromaticity against frequency."""
    caption = (
        "Directivity towards the boresight and the largest; what the antenna radiates and what the ground takes; "
        "width between the half-power directions (a plane where the power does not fall to half shows none); root mean "
        "square over the sphere of the change of directivity with frequency, over that of the directivity."
    )
    figure = _sheet(8.6, "quality of the beam", caption, config)
    panels = figure.subplots(4, 1, sharex=True)
    frequency = card.frequency_mhz
    curves = (
        ("directivity, dBi", ((card.boresight_dbi, "boresight"), (card.peak_dbi, "largest"))),
        ("share", ((card.efficiency, "radiated"), (card.ground_share, "lost in the ground"))),
        ("half-power width, deg", ((card.width_deg[:, 0], "phi 0°"), (card.width_deg[:, 1], "phi 90°"))),
        ("change, % a MHz", ((100.0 * card.chromaticity_per_mhz, ""),)),
    )
    for axes, (label, lines) in zip(panels, curves, strict=True):
        for n, (values, name) in enumerate(lines):
            axes.plot(frequency, values, color=COLOURS[n], linestyle=DASHES[n], marker="o", markersize=3, label=name)
        axes.set_ylabel(label)
        if len(lines) > 1:
            axes.legend(loc="best", ncols=2)
    frequency_axis(panels[-1], float(frequency[0]), float(frequency[-1]))
    return figure


def change_figure(card: BeamCard, config: Config) -> Figure:
    """Change of directivity with frequency over the sphere, at three frequencies."""
    caption = (
        "dD/df over the sphere around the antenna: theta from the boresight (top), phi from the x axis (left to "
        "right). Orange grows with frequency, purple falls; the scale is the same for all and even about zero."
    )
    figure = _sheet(9.2, "change of directivity with frequency", caption, config)
    theta, phi = np.meshgrid(np.linspace(0.0, np.pi, DOWN), np.linspace(0.0, 2.0 * np.pi, ACROSS), indexing="ij")
    most = max(float(np.abs(card.change_per_mhz).max()), 1e-12)
    norm = Normalize(-most, most)
    panels = figure.subplots(len(SHOWN), 1, sharex=True)
    for axes, values, row in zip(panels, card.change_per_mhz, SHOWN, strict=True):
        shown = healpy.get_interp_val(values, theta.ravel(), np.mod(phi, 2.0 * np.pi).ravel()).reshape(theta.shape)
        axes.imshow(shown, extent=(0.0, 360.0, 180.0, 0.0), aspect="auto", cmap="PuOr_r", norm=norm)
        axes.set_title(f"{card.frequency_mhz[row]:.4g} MHz", loc="left")
        axes.set_ylabel("theta, deg")
        axes.set_yticks([0, 45, 90, 135, 180])
        axes.set_xticks(np.arange(0, 361, 45))
    panels[-1].set_xlabel("phi, deg")
    figure.colorbar(ScalarMappable(norm, "PuOr_r"), ax=panels, label="dD/df, 1/MHz", shrink=0.7)
    return figure


def residual_figure(card: BeamCard, config: Config) -> Figure:
    """What log polynomials leave of the antenna temperature."""
    caption = (
        "The campaign's mean antenna temperature, foreground alone, less a polynomial of ln T in ln f fitted to it. A "
        "trough of a tenth of a kelvin has to stand out of this, or of what a better foreground model leaves."
    )
    figure = _sheet(7.6, "what a smooth foreground leaves", caption, config)
    panels = figure.subplots(len(CURVE_TERMS), 1, sharex=True)
    for axes, terms in zip(panels, CURVE_TERMS, strict=True):
        left = card.residual_mk[terms]
        axes.axhline(0.0, color=GREY, linewidth=0.7)
        axes.plot(card.curve_mhz, left, color=BLACK)
        axes.set_ylabel("left, mK")
        axes.set_title(f"{terms} terms, {np.std(left):.3g} mK rms", loc="left")
    frequency_axis(panels[-1], float(card.curve_mhz[0]), float(card.curve_mhz[-1]))
    return figure
