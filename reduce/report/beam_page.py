"""The page of a beam card, and the files that ``quietlimb beam`` writes."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from reduce.beam_card import LEVELS_MK, TERMS, BeamCard, Table, beam_card
from reduce.report.beam_plot import change_figure, cuts_figure, quality_figure, residual_figure
from reduce.report.files import claim, write_all
from reduce.report.style import look, png
from sims.config import Config
from sims.config_load import load_config

PAGE = "beam.txt"
FIGURES = {
    "beam_cuts.png": cuts_figure,
    "beam_quality.png": quality_figure,
    "beam_change.png": change_figure,
    "beam_residual.png": residual_figure,
}


def report_beam(config_path: Path, out: Path | None, *, update: bool) -> str:
    """Judge the beam of a campaign; write the page and the plots where a folder is named.

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
        With every problem of the configuration or the beam, if files are in the way, or if
        the folder cannot be made or written to.
    """
    config = load_config(config_path)
    if out is not None:
        claim(out, (PAGE, *FIGURES), update=update)
    card = beam_card(config)
    page = beam_page(card, config)
    if out is None:
        return page
    with look():
        pictures = {name: png(figure(card, config)) for name, figure in FIGURES.items()}
    write_all(out, {PAGE: page + "\n", **pictures})
    return f"{page}\n\nwrote {', '.join((PAGE, *FIGURES))} to {out}"


def beam_page(card: BeamCard, config: Config) -> str:
    """The page: directivity, losses, widths, chromaticity, the table's errors, terms of a smooth foreground."""
    parts = [f"Beam of {config.run.name}\n  kind {config.beam.kind}", _quality(card), _chromaticity(card)]
    if card.table is not None:
        parts.append(_errors(card.table, card))
    return "\n\n".join([*parts, _terms(card)])


def _quality(card: BeamCard) -> str:
    lines = [
        "Over the band",
        "           boresight     peak  at theta, phi  efficiency   ground  "
        "half-power, deg  forward   front to    solid",
        "      MHz        dBi      dBi           deg                  loss  "
        " phi 0   phi 90    share   back, dB  angle, sr",
    ]
    for n, frequency in enumerate(card.frequency_mhz):
        theta, phi = card.peak_deg[n]
        first, second = (f"{width:6.1f}" if np.isfinite(width) else "     -" for width in card.width_deg[n])
        back = card.front_to_back_db[n]
        behind = "nothing" if np.isinf(back) else f"{abs(round(back, 2)):.2f}"
        lines.append(
            f"  {frequency:7.2f}  {card.boresight_dbi[n]:9.3f}  {card.peak_dbi[n]:7.3f}  {theta:5.1f}, {phi:5.1f}  "
            f"{card.efficiency[n]:10.4f}  {card.ground_share[n]:7.4f}  {first}  {second}  "
            f"{card.forward_share[n]:7.4f}  {behind:>9}  {card.solid_angle_sr[n]:9.3f}"
        )
    lines.append("  -: the power does not fall to half in that plane; nothing: no power behind")
    return "\n".join(lines)


def _chromaticity(card: BeamCard) -> str:
    values = card.chromaticity_per_mhz * 100.0
    lines = ["Chromaticity: rms of dD/df over the sphere, over the rms of D, per cent a MHz"]
    lines.append("        MHz  " + "".join(f"{frequency:9.2f}" for frequency in card.frequency_mhz))
    lines.append("   %  a MHz  " + "".join(f"{value:9.4f}" for value in values))
    return "\n".join(lines)


def _errors(table: Table, card: BeamCard) -> str:
    lines = [f"The table: {table.source}", *(f"  {note}" for note in table.notes)]
    lines.append(
        f"  directions joined with an error of up to {table.error_rms.max():.1e} rms of the pattern's, "
        f"{table.error_largest.max():.1e} of its peak"
    )
    if table.frequency_error is None:
        lines.append("  frequencies: too few to tell the error of joining them")
    else:
        rms, largest = table.frequency_error
        lines.append(f"  frequencies joined with an error of up to {rms:.1e} rms, {largest:.1e} of the peak")
    rough = table.roughness_k.max()
    lines.append(
        f"  smoothing took out up to {rough:.3g} K of antenna temperature"
        if rough > 0.0
        else "  not smoothed in frequency"
    )
    if table.undershoot > 0.0:
        lines.append(f"  joined power falls below zero by up to {table.undershoot:.1e} of the peak")
    if table.cross_polar is not None:
        lines.append(
            f"  cross-polar share within the half-power beam {table.cross_polar.min():.2%} to "
            f"{table.cross_polar.max():.2%}"
        )
    if card.table is not None and table.error_rms.max() > 1e-3:
        lines.append("  ! the table is too coarse in angle to be trusted: give finer steps")
    return "\n".join(lines)


def _terms(card: BeamCard) -> str:
    lines = ["What a log polynomial leaves of the campaign's mean antenna temperature, foreground alone"]
    lines.append("  terms    rms, mK   most, mK")
    for terms in TERMS:
        left = card.residual_mk[terms]
        lines.append(f"  {terms:5d} {np.std(left):10.4g} {np.abs(left).max():10.4g}")
    for level in LEVELS_MK:
        fewest = card.terms_below(level)
        lines.append(
            f"  under {level:g} mK rms: "
            + (f"{fewest} terms" if fewest is not None else f"more than {TERMS[-1]} terms")
        )
    return "\n".join(lines)
