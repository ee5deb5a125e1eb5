"""What the foreground takes: eigenvalues with their limits, against a general solver, and for signals of known fate."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from compare_cases import TROUGH, demo_config, model_on, spectra_on
from scipy.linalg import eigh

from reduce.combine import projected_spectrum, signal_design
from reduce.covariance import DiagonalLowRank
from reduce.handoff import bundle, information_from
from reduce.joint_fit import joint_fit
from reduce.report.shapes_plot import shapes_figure
from reduce.report.style import look, png
from reduce.runner import Products
from reduce.transfer import (
    TROUGH_SHARE,
    drawn_operator,
    noise_information,
    survival,
    surviving_fraction,
    transfer,
    trough_directions,
)
from reduce.trough_model import TroughModel
from sims.config import Config, Foreground
from sims.schema import TRANSFER, check

TERMS, BINS, CHANNELS = 5, 3, 48


@pytest.fixture(scope="module")
def config(tmp_path_factory: pytest.TempPathFactory) -> Config:
    return demo_config(tmp_path_factory.mktemp("transfer"))


@pytest.fixture(scope="module")
def model(config: Config) -> TroughModel:
    return model_on(config, CHANNELS)


def packed_of(model: TroughModel, bins: int, *, modes: bool) -> xr.Dataset:
    spectra = spectra_on(model, bins, CHANNELS, 1e-5, 2, modes=modes)
    settings = Foreground(family="log-polynomial", terms=TERMS)
    return bundle(joint_fit(spectra, settings, model, np.random.default_rng(3)))


@pytest.fixture(scope="module")
def packed(model: TroughModel) -> xr.Dataset:
    return packed_of(model, BINS, modes=True)


def test_shares_lie_between_nothing_and_all(packed: xr.Dataset) -> None:
    found = survival(packed["R"].values, noise_information(packed))
    assert len(found.share) == CHANNELS - 1  # one is flagged
    assert found.share.min() >= 0.0
    assert found.share.max() <= 1.0 + 1e-9  # rounding
    assert np.all(np.diff(found.share) >= 0.0)


def test_one_bin_loses_as_many_shapes_as_it_has_terms_and_no_other(model: TroughModel) -> None:
    alone = packed_of(model, 1, modes=False)
    found = survival(alone["R"].values, noise_information(alone))
    # The whitened signal of one bin spans all rows: the projector on what is not foreground is all there is.
    assert found.share[:TERMS] == pytest.approx(np.zeros(TERMS), abs=1e-12)
    assert found.share[TERMS:] == pytest.approx(np.ones(CHANNELS - 1 - TERMS), abs=1e-9)


def test_a_foreground_of_nothing_takes_nothing() -> None:
    rng = np.random.default_rng(4)
    good = np.ones((2, 20), bool)
    sigma, response = rng.uniform(0.5, 2.0, good.shape), rng.uniform(0.5, 1.0, good.shape)
    design = signal_design(
        covariance=DiagonalLowRank.from_bins(sigma**2, np.zeros((*good.shape, 0)), good),
        basis=np.zeros((40, 0)),
        signal_response=response,
        good=good,
    )
    noise = (response**2 / sigma**2).sum(axis=0)
    assert survival(design.R, noise).share == pytest.approx(np.ones(20), abs=1e-12)
    directions = np.linalg.qr(rng.standard_normal((20, 4)))[0].T
    assert survival(design.R, noise, directions).share == pytest.approx(np.ones(4), abs=1e-12)
    identity = np.eye(20)
    information = design.information(np.zeros(good.shape), None)
    assert drawn_operator(information, np.inf) == pytest.approx(identity, abs=1e-12)


def test_shares_are_those_of_a_general_solver(packed: xr.Dataset) -> None:
    noise = noise_information(packed)
    used = noise > 0.0
    root = packed["R"].values
    whole = eigh((root.T @ root)[np.ix_(used, used)], np.diag(noise[used]), eigvals_only=True)
    # The solver squares R: it errs by rounding of the largest, 1.
    assert survival(root, noise).share == pytest.approx(whole, abs=1e-12)
    directions = np.linalg.qr(np.random.default_rng(5).standard_normal((CHANNELS, 6)))[0].T
    seen = root @ directions.T
    within = eigh(seen.T @ seen, directions @ (noise[:, None] * directions.T), eigvals_only=True)
    assert survival(root, noise, directions).share == pytest.approx(within, abs=1e-12)


def test_shapes_have_the_size_and_the_share_that_they_state(packed: xr.Dataset) -> None:
    noise, root = noise_information(packed), packed["R"].values
    for directions in (None, np.linalg.qr(np.random.default_rng(6).standard_normal((CHANNELS, 6)))[0].T):
        found = survival(root, noise, directions)
        apart = (found.shape_k * noise) @ found.shape_k.T
        assert apart == pytest.approx(np.eye(len(apart)), abs=1e-9)  # rounding of shapes of very different size
        assert ((root @ found.shape_k.T) ** 2).sum(axis=0) == pytest.approx(found.share, abs=1e-9)
        for shape, share in zip(found.shape_k, found.share, strict=True):
            assert surviving_fraction(packed, shape) ** 2 == pytest.approx(share, abs=1e-9)


def test_the_operator_is_what_the_projected_spectrum_does_to_a_signal(packed: xr.Dataset, model: TroughModel) -> None:
    information = information_from(packed)
    signal_k = model.signal_k(TROUGH)
    shifted = information_from(packed.assign(z=("rank", packed["z"].values + packed["R"].values @ signal_k)))
    before, after = (projected_spectrum(each, 1.0).spectrum_k for each in (information, shifted))
    operator = drawn_operator(information, 1.0)
    assert after - before == pytest.approx(operator @ signal_k, abs=1e-12)
    assert operator @ operator == pytest.approx(operator, abs=1e-12)


def test_the_fate_of_a_trough_is_the_one_that_the_fit_found(packed: xr.Dataset, model: TroughModel) -> None:
    found = surviving_fraction(packed, packed["fiducial_signal_k"].values)
    # Without errors of the response the fiducial signal is the prior's mean, not the posterior's, of which the bundle
    # speaks: the two troughs lose alike, not equally.
    assert 0.0 < found < 1.0
    settings = Foreground(family="log-polynomial", terms=TERMS)
    fit = joint_fit(spectra_on(model, BINS, CHANNELS, 1e-5, 2), settings, model, np.random.default_rng(3))
    mean_k = fit.posterior.weight @ model.signal_k(fit.posterior.parameters)
    assert surviving_fraction(packed, mean_k) == pytest.approx(fit.removed.surviving_fraction, rel=1e-6)


def test_a_signal_like_the_foreground_is_lost(packed: xr.Dataset) -> None:
    response = packed["signal_response"].values
    alike = packed["foreground_k"].values[0] / response[0]
    # In the first bin it is a member of the family; the others, of another slope, hold it but for a trifle.
    assert surviving_fraction(packed, alike) < 1e-2


def test_the_product_keeps_to_its_schema_and_is_drawn(packed: xr.Dataset, model: TroughModel, config: Config) -> None:
    found = transfer(packed, model, np.random.default_rng(7))
    check(found, TRANSFER, "transfer.nc")
    assert np.all(found["shape_k"].values[:, CHANNELS // 3] == 0.0)
    directions = trough_directions(model, np.random.default_rng(7))
    signals_k = model.signal_k(model.draw_prior(np.random.default_rng(8), 2000))
    held = ((signals_k @ directions.T) ** 2).sum() / (signals_k**2).sum()
    assert held == pytest.approx(TROUGH_SHARE, abs=1e-3)
    products = Products({"spectra.nc": xr.Dataset(), "transfer.nc": found})
    with look():
        picture = png(shapes_figure(products, config))
    assert picture.startswith(b"\x89PNG")


def test_reading_back_gives_the_same(packed: xr.Dataset, model: TroughModel, tmp_path: Path) -> None:
    found = transfer(packed, model, np.random.default_rng(7))
    found.to_netcdf(tmp_path / "transfer.nc", engine="h5netcdf")
    with xr.open_dataset(tmp_path / "transfer.nc", engine="h5netcdf") as opened:
        xr.testing.assert_identical(opened.load(), found)
