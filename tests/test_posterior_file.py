"""posterior.nc as ArviZ reads it and as plain NetCDF."""

from __future__ import annotations

from pathlib import Path

import arviz
import numpy as np
import pytest
import xarray as xr
from shape_cases import SETTINGS, behind_a_foreground, dip_shape

from reduce.posterior_file import add_groups, inference_data
from reduce.turning_points import Posterior, sample_posterior
from sims.errors import InputError
from sims.products import sha256_of, write_product


@pytest.fixture(scope="module")
def posterior() -> Posterior:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(np.array([150.0, 78.0])), 0.01, 4, 1)
    settings = SETTINGS.model_copy(update={"steps": 200})
    return sample_posterior(information, shape, settings, np.random.default_rng(1), lambda done: None)


def test_samples_are_over_chain_and_draw_with_units(posterior: Posterior) -> None:
    samples = posterior.samples
    assert posterior.names == ("depth_mk", "centre_mhz")
    assert samples["depth_mk"].dims == ("chain", "draw")
    assert samples["centre_mhz"].attrs["units"] == "MHz"
    assert posterior.stacked()[:, 1].tolist() == samples["centre_mhz"].values.ravel().tolist()


def test_log_probability_is_that_of_the_draws(posterior: Posterior) -> None:
    shape = dip_shape()
    information = behind_a_foreground(shape.signal_k(np.array([150.0, 78.0])), 0.01, 4, 1)
    expected = shape.log_probability(posterior.stacked(), information)
    assert posterior.samples["lp"].values.ravel() == pytest.approx(expected, rel=1e-12)


def test_groups_are_read_by_arviz_and_the_root_as_before(posterior: Posterior, tmp_path: Path) -> None:
    path = tmp_path / "posterior.nc"
    write_product(posterior.samples, path)
    add_groups(path, posterior.samples)
    data = arviz.from_netcdf(str(path))
    assert set(data.groups()) == {"posterior", "sample_stats"}
    assert set(data.posterior.data_vars) == {"depth_mk", "centre_mhz"}
    assert data.posterior.attrs["inference_library"] == "emcee"
    assert arviz.summary(data, var_names=["centre_mhz"]).loc["centre_mhz", "mean"] == pytest.approx(
        posterior.stacked()[:, 1].mean(), rel=1e-3
    )
    xr.testing.assert_equal(xr.open_dataset(path, engine="h5netcdf"), posterior.samples)
    xr.testing.assert_equal(xr.open_dataset(path, group="posterior")["depth_mk"], posterior.samples["depth_mk"])


def test_equal_draws_give_equal_files(posterior: Posterior, tmp_path: Path) -> None:
    for name in ("one.nc", "other.nc"):
        write_product(posterior.samples, tmp_path / name)
        add_groups(tmp_path / name, posterior.samples)
    assert sha256_of(tmp_path / "one.nc") == sha256_of(tmp_path / "other.nc")


def test_in_memory_it_is_the_same(posterior: Posterior) -> None:
    data = inference_data(posterior.samples)
    assert set(data.groups()) == {"posterior", "sample_stats"}
    assert float(arviz.ess(data)["depth_mk"]) > 100.0


def test_no_file_is_refused(posterior: Posterior, tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        add_groups(tmp_path / "none.nc", posterior.samples)
