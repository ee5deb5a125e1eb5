"""The card of a beam: closed forms, limits, and the command."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from reader_cases import PHI_DEG, THETA_DEG, grid_directions
from small_campaign import CONFIGS, small_tree
from test_campaign_kinds import BAND_MHZ, netcdf
from typer.testing import CliRunner

from reduce.beam_card import TERMS, beam_card
from reduce.cli import app
from reduce.report.beam_page import FIGURES, PAGE, beam_page
from sims.beam import beam_from
from sims.config_beam import Dipole
from sims.config_load import parse_config

LOSSES = {"efficiency": 0.9, "structure_temperature_k": 270.0}


def config_with(beam: dict[str, Any]) -> Any:
    tree = small_tree(beam={**beam, **LOSSES})
    tree["knowledge"] = {}
    return parse_config(tree, CONFIGS)


def test_short_dipole() -> None:
    card = beam_card(config_with({"kind": "short-dipole"}))
    assert card.boresight_dbi == pytest.approx(np.full(9, 1.760913), abs=1e-6)  # 10 log10 1.5
    assert card.solid_angle_sr == pytest.approx(np.full(9, 4 * np.pi / 1.5), rel=1e-9)
    # sin^2 falls to half at 45 deg to either side, along the wire; across it never. Linear between steps of 0.25 deg.
    assert card.width_deg[:, 0] == pytest.approx(np.full(9, 90.0), abs=1e-3)
    assert np.isnan(card.width_deg[:, 1]).all()
    assert card.forward_share == pytest.approx(np.full(9, 0.5), abs=1e-12)
    assert card.front_to_back_db == pytest.approx(np.zeros(9), abs=1e-9)
    assert card.chromaticity_per_mhz == pytest.approx(np.zeros(9), abs=1e-12)
    assert card.efficiency == pytest.approx(np.full(9, 0.9))
    assert card.table is None


def test_half_wave_dipole_at_its_frequency() -> None:
    """2.150880 dBi (Balanis, Antenna Theory), at the middle row of the band, 80 MHz: a wire of 1.8737 m."""
    card = beam_card(config_with({"kind": "dipole", "length_m": 299.792458 / 160.0}))
    assert card.frequency_mhz[4] == pytest.approx(80.0)
    assert card.boresight_dbi[4] == pytest.approx(2.150880, abs=1e-6)
    assert (np.diff(card.boresight_dbi) > 0).all()
    assert (card.chromaticity_per_mhz > 1e-4).all()


def test_gaussian_has_its_width_and_a_plane_lets_nothing_through() -> None:
    card = beam_card(config_with({"kind": "gaussian", "width_deg": 40.0, "frequency_mhz": 80.0, "width_exponent": 0.5}))
    expected = 40.0 * (80.0 / card.frequency_mhz) ** 0.5
    assert card.width_deg == pytest.approx(np.stack([expected, expected], axis=1), abs=2e-3)
    over_plane = beam_card(config_with({"kind": "dipole", "length_m": 2.0, "height_m": 1.0}))
    assert np.isinf(over_plane.front_to_back_db).all()
    assert over_plane.forward_share == pytest.approx(np.ones(9), abs=1e-12)


def test_more_terms_leave_less() -> None:
    card = beam_card(config_with({"kind": "dipole", "length_m": 2.0, "height_m": 1.0}))
    rms = np.array([np.std(card.residual_mk[terms]) for terms in TERMS])
    assert rms[-1] < 1e-3 * rms[0]
    assert (rms[2:] < rms[:-2]).all()
    fewest = [card.terms_below(level) for level in (1e4, 100.0, 1.0)]
    assert None not in fewest
    assert fewest == sorted(fewest)  # type: ignore[type-var]
    assert card.terms_below(0.0) is None


def test_card_of_a_table_tells_its_errors(tmp_path: Path) -> None:
    wire = beam_from(Dipole(kind="dipole", length_m=2.0, efficiency=1.0, structure_temperature_k=270.0))
    power = wire.directivity(BAND_MHZ, grid_directions(THETA_DEG, PHI_DEG)).T
    power = power.reshape(len(BAND_MHZ), len(THETA_DEG), len(PHI_DEG))
    noisy = power * (1 + 1e-3 * np.random.default_rng(1).standard_normal((len(BAND_MHZ), 1, len(PHI_DEG))))
    noisy[:, [0, -1]] = power[:, [0, -1]]
    settings = {"kind": "file", "source": netcdf(tmp_path / "beam.nc", noisy), "quantity": "directivity"}
    config = config_with({**settings, "missing_power": "numerical", "smoothing_mhz": 12.0})
    card = beam_card(config)
    assert card.table is not None
    assert card.boresight_dbi == pytest.approx(
        beam_card(config_with({"kind": "dipole", "length_m": 2.0})).boresight_dbi, abs=0.01
    )
    assert card.table.roughness_k.max() > 0.01
    assert card.table.frequency_error is not None
    page = beam_page(card, config)
    assert "smoothing took out up to" in page
    assert "beam.nc" in page


def test_command_prints_writes_and_does_not_overwrite(tmp_path: Path) -> None:
    call = CliRunner().invoke
    demo = str(CONFIGS / "demo.toml")
    printed = call(app, ["beam", demo])
    assert printed.exit_code == 0, printed.output
    assert "half-power" in printed.output
    assert list(tmp_path.iterdir()) == []
    out = tmp_path / "out"
    assert call(app, ["beam", demo, "--out", str(out)]).exit_code == 0
    assert {path.name for path in out.iterdir()} == {PAGE, *FIGURES}
    again = call(app, ["beam", demo, "--out", str(out)])
    assert again.exit_code == 2
    assert "already holds beam.txt" in again.output + str(again.stderr)
    assert call(app, ["beam", demo, "--out", str(out), "--update"]).exit_code == 0
