"""A campaign whose foreground is an ensemble, from configuration to page; and spectra of one's own fitted with it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from config_cases import small_with

from reduce.handoff import information_from
from reduce.pipeline import ENSEMBLE_FIT_STAGES, ENSEMBLE_STAGES, fit, run
from sims.errors import InputError
from sims.products import read_product
from sims.schema import BUNDLE, ENSEMBLE

FOREGROUND = ('family = "log-polynomial"\nterms = 8', 'family = "ensemble"\ndraws = 300')


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The small campaign, foreground from 300 draws."""
    base = tmp_path_factory.mktemp("joint")
    (base / "joint.toml").write_text(small_with(FOREGROUND), encoding="utf-8")
    run(base / "joint.toml", base / "out")
    return base


def test_it_leaves_every_product_and_a_page_that_says_what_was_drawn(folder: Path) -> None:
    made = {name for stage in ENSEMBLE_STAGES for name in stage.makes}
    assert {path.name for path in (folder / "out").iterdir()} == made | {"run.json", "log.txt"}
    page = (folder / "out" / "summary.txt").read_text(encoding="utf-8")
    assert "ensemble of 300 simulated campaigns, all bins jointly" in page
    assert "drawn anew in each: sky.zero_level_k, sky.scale" in page
    assert "knowledge.index_field" in page
    assert "from the covariance, though a drawn truth has it" not in page


def test_bundle_holds_the_modes_once_and_their_number_of_draws(folder: Path) -> None:
    ensemble = read_product(folder / "out" / "ensemble.nc", ENSEMBLE)
    packed = read_product(folder / "out" / "bundle.nc", BUNDLE)
    # Every number of the demo's [knowledge] is drawn, so nothing of the spectra's own modes is left beside them.
    assert packed.sizes["mode"] == ensemble.sizes["mode"] == packed.attrs["foreground_known_modes"]
    np.testing.assert_array_equal(packed["systematic_modes"], ensemble["modes_k"])
    np.testing.assert_array_equal(packed["foreground_k"].isel(bin=0), ensemble["mean_k"].isel(bin=0))
    assert information_from(packed).draws == 300


def test_chi_squared_is_that_of_noise_once_the_truth_is_one_of_many(folder: Path) -> None:
    information = information_from(read_product(folder / "out" / "bundle.nc", BUNDLE))
    freedom = information.degrees_of_freedom
    assert information.chi_squared_min == pytest.approx(freedom, abs=4 * np.sqrt(2 * freedom))


def test_spectra_of_a_run_fitted_as_ones_own_say_the_same(folder: Path) -> None:
    fit(folder / "out" / "spectra.nc", folder / "joint.toml", folder / "again")
    made = {name for stage in ENSEMBLE_FIT_STAGES for name in stage.makes}
    assert {path.name for path in (folder / "again").iterdir()} >= made
    one, other = (information_from(read_product(folder / out / "bundle.nc", BUNDLE)) for out in ("out", "again"))
    np.testing.assert_allclose(other.z, one.z, atol=1e-9)
    np.testing.assert_allclose(other.R, one.R, atol=1e-9 * np.abs(one.R).max())


def test_an_ensemble_without_a_campaign_to_simulate_is_refused(folder: Path) -> None:
    text = small_with(FOREGROUND)
    kept = [part for part in text.split("\n[") if part.startswith(("run]", "foreground]", "turning_points]"))]
    (folder / "bare.toml").write_text("[" + "\n[".join(kept) + "\n", encoding="utf-8")
    with pytest.raises(InputError, match=r"bare\.toml: foreground\.family = \"ensemble\" simulates campaigns"):
        fit(folder / "out" / "spectra.nc", folder / "bare.toml", folder / "never")
    assert not (folder / "never").exists()


def test_too_few_draws_for_their_modes_are_refused_with_the_number_needed(folder: Path) -> None:
    few = ('family = "log-polynomial"\nterms = 8', 'family = "ensemble"\ndraws = 50')
    (folder / "few.toml").write_text(small_with(few), encoding="utf-8")
    with pytest.raises(InputError, match=r"foreground\.draws: 50 draws for \d+ modes above the noise; allowed are at"):
        run(folder / "few.toml", folder / "few")
