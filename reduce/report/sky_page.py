"""The card of a sky as a page for the terminal; what ``quietlimb sky`` prints and writes."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from reduce.report.files import claim, write_all
from reduce.report.sky_plot import index_figure, maps_figure, spectrum_figure
from reduce.report.style import look, png
from reduce.sky_card import (
    PERCENTILES,
    PUBLISHED,
    PUBLISHED_INDICES,
    STATED_MK,
    STATED_TERMS,
    MapRow,
    SkyCard,
    sky_card,
)
from sims.config import Config
from sims.config_load import load_config
from sims.config_sky import Background, CubeSky, FreeFree, JoinedSky
from sims.constants import CMB_TEMPERATURE_K, rayleigh_jeans_k

PAGE = "sky.txt"
EXACT = 1e-9
FIGURES = {"sky_maps.png": maps_figure, "sky_index.png": index_figure, "sky_spectrum.png": spectrum_figure}


def report_sky(config_path: Path, out: Path | None, *, update: bool) -> str:
    """Judge the sky of a campaign; write the page and the plots where a folder is named.

    Parameters
    ----------
    config_path : Path
        TOML configuration.
    out : Path or None
        Folder; made if it is not there. What else it holds is left alone.
    update : bool
        Allow files of these names to be replaced.

    Returns
    -------
    str
        The page for the terminal.

    Raises
    ------
    InputError
        With every problem of the configuration or the sky, if files are in the way, or if the
        folder cannot be made or written to.
    """
    config = load_config(config_path)
    if out is not None:
        claim(out, (PAGE, *FIGURES), update=update)
    card = sky_card(config)
    page = sky_page(card, config)
    if out is None:
        return page
    with look():
        pictures = {name: png(figure(card, config)) for name, figure in FIGURES.items()}
    write_all(out, {PAGE: page + "\n", **pictures})
    return f"{page}\n\nwrote {', '.join((PAGE, *FIGURES))} to {out}"


def sky_page(card: SkyCard, config: Config) -> str:
    """The page: maps, what was done to them, brightness over the band, index, smoothness."""
    parts = [_head(card, config), _maps(card), _done(card, config), _band(card), _means(card), _index(card)]
    return "\n\n".join([*parts, _smooth(card)])


def _head(card: SkyCard, config: Config) -> str:
    sky = config.sky
    lines = [
        f"Sky of {config.run.name}",
        f"  kind {sky.kind}, nside {card.nside} ({12 * card.nside**2} pixels), pixels in {card.frame} axes",
    ]
    if isinstance(sky, JoinedSky | CubeSky):
        rule = f"polynomial of order {sky.order}" if sky.join == "polynomial" else "cubic spline"
        own = [row.frequency_mhz for row in card.rows]
        lines.append(f"  {len(own)} maps from {min(own):g} to {max(own):g} MHz, joined by a {rule} in ln T over ln f")
        start, stop = config.channels.start_mhz, config.channels.stop_mhz
        if start < min(own) or stop > max(own):
            lines.append(
                f"  the band, {start:g} to {stop:g} MHz, reaches beyond the maps: there the join is continued"
                + (" as it is" if sky.join == "polynomial" else " with its slope and second derivative at the end")
            )
    lines.append(f"  held to be good from {sky.valid_from_mhz:g} to {sky.valid_to_mhz:g} MHz")
    return "\n".join(lines)


def _maps(card: SkyCard) -> str:
    lines = [
        "Maps, after zero level and scale, CMB included",
        "        MHz    lowest, K      mean, K   highest, K   lowest above CMB   file",
    ]
    lines += [
        f"  {row.frequency_mhz:9.4g} {row.lowest_k:12.5g} {row.mean_k:12.6g} {row.highest_k:12.6g} "
        f"{row.margin_k:16.4g} K   {row.note.source} ({row.note.frame}, {row.note.unit}, sha256 {row.note.sha256[:8]})"
        for row in card.rows
    ]
    return "\n".join(lines)


def _done(card: SkyCard, config: Config) -> str:
    lines = ["What was done to them"]
    filled = [row for row in card.rows if row.note.filled]
    lines.append(f"  filled     {_list(filled, lambda row: f'{row.note.filled} values') or 'nothing'}")
    blurred = [row for row in card.rows if row.note.kernel_deg]
    common = card.rows[0].note.resolution_deg
    smoothing = _list(blurred, lambda row: f"Gaussian of {row.note.kernel_deg:.3g} deg") or "nothing"
    lines.append(f"  smoothed   {smoothing}" + ("" if common is None else f"; common resolution {common:g} deg"))
    turned = [row for row in card.rows if row.note.averaged_from]
    lines.append(f"  averaged   {_list(turned, lambda row: f'from {row.note.averaged_from}') or 'nothing'}")
    near = [row for row in card.rows if row.near_zero]
    lines.append("  dark       no pixel at or below the CMB: such a sky is refused")
    if near:
        text = _list(near, lambda row: f"{row.near_zero} pixels")
        lines.append(f"             below a tenth of the median above the CMB, look at the zero level: {text}")
    worst = max(card.rows, key=lambda row: row.misfit)
    if worst.misfit > EXACT:
        lines.append(f"  passed by  by up to {worst.misfit:.2%}, at {worst.frequency_mhz:.4g} MHz: the join is a fit")
    return "\n".join([*lines, *_layers(config.sky.free_free, config.sky.background)])


def _layers(gas: FreeFree | None, background: Background | None) -> list[str]:
    lines = []
    if background is not None:
        held = "taken off the maps and put back" if background.in_maps else "added to the maps"
        lines.append(
            f"  background {background.temperature_k:g} K at {background.frequency_mhz:g} MHz, index "
            f"{background.index:g}, {held}"
        )
    if gas is not None:
        held = "maps show the sky through it" if gas.in_maps else "maps show the sky without it"
        lines.append(
            f"  gas        {gas.kind}, {gas.electron_temperature_k:g} K, "
            f"{'in front' if gas.geometry == 'in-front' else 'mixed with the emission'}, {held}"
        )
    return lines


def _list(rows: list[MapRow], text: Callable[[MapRow], str]) -> str:
    """The rows in words; many alike ones as one."""
    said = [text(row) for row in rows]
    if len(rows) > 2 and len(set(said)) == 1:
        return f"{said[0]} at each of {len(rows)} frequencies"
    return ", ".join(f"{word} at {row.frequency_mhz:.4g} MHz" for word, row in zip(said, rows, strict=True))


def _band(card: SkyCard) -> str:
    lines = ["Brightness over the sky, K", "        MHz      lowest" + "".join(f"{p:9.0f} %" for p in PERCENTILES)]
    lines[1] += "     highest        mean"
    for frequency, values in zip(card.shown_mhz, card.shown_k, strict=True):
        ranks = [values.min(), *np.percentile(values, PERCENTILES), values.max(), values.mean()]
        lines.append(
            f"  {frequency:9.4g} {ranks[0]:11.5g}" + "".join(f"{value:11.5g}" for value in ranks[1:4])
            + f" {ranks[4]:11.5g} {ranks[5]:11.5g}"
        )  # fmt: skip
    return "\n".join(lines)


def _means(card: SkyCard) -> str:
    lines = ["Mean against published spectra", "        MHz     mean, K"]
    lines[1] += "".join(f"   {one.name + ', K':>26}    ratio" for one in PUBLISHED)
    at = np.unique(np.linspace(0, card.frequency_mhz.size - 1, 7).astype(int))
    for frequency, mean in zip(card.frequency_mhz[at], card.mean_k[at], strict=True):
        line = f"  {frequency:9.4g} {mean:11.5g}"
        for one in PUBLISHED:
            value = float(one.value_k(np.array([frequency]))[0])
            line += f"   {value:26.5g} {mean / value:8.3f}"
        lines.append(line)
    return "\n".join([*lines, *(f"  {one.name}: {one.source}" for one in PUBLISHED)])


def _index(card: SkyCard) -> str:
    low, high = np.percentile(card.index, [5.0, 95.0])
    overall = np.log(card.mean_k[[0, -1]] - rayleigh_jeans_k(CMB_TEMPERATURE_K, card.frequency_mhz[[0, -1]]))
    across = -float(np.diff(overall)[0] / np.log(card.frequency_mhz[-1] / card.frequency_mhz[0]))
    bend_low, bend_high = np.percentile(card.curvature, [5.0, 95.0])
    lines = [
        f"Spectral index above the CMB, T ~ f^-index, at {card.middle_mhz:.4g} MHz",
        f"  of the mean      {card.mean_index:.4f}, curvature {card.mean_curvature:+.4f}; "
        f"from end to end of the band {across:.4f}",
        f"  of the pixels    mean {card.index.mean():.4f}, 5 to 95 % {low:.4f} to {high:.4f}, "
        f"range {card.index.min():.4f} to {card.index.max():.4f}",
        f"  curvature        mean {card.curvature.mean():+.4f}, 5 to 95 % {bend_low:+.4f} to {bend_high:+.4f}",
    ]
    for (least, most), what, source in PUBLISHED_INDICES:
        lines.append(f"  published        {least:g} to {most:g}, {what} ({source})")
    return "\n".join(lines)


def _smooth(card: SkyCard) -> str:
    lines = ["Smoothness: what a polynomial of ln T in ln f leaves of the mean over the band, mK", "  terms"]
    lines[1] += "".join(f"{terms:10d}" for terms in card.residual_mk)
    lines.append("  rms  " + "".join(f"{np.std(values):10.3g}" for values in card.residual_mk.values()))
    lines.append("  most " + "".join(f"{np.abs(values).max():10.3g}" for values in card.residual_mk.values()))
    rms = float(np.std(card.residual_mk[STATED_TERMS]))
    verdict = "smooth" if rms < STATED_MK else "not smooth: look at the join, and at zero levels and scales of the maps"
    lines.append(f"  {STATED_TERMS} terms leave {rms:.3g} mK rms, {STATED_MK:g} mK are allowed: {verdict}")
    return "\n".join(lines)
