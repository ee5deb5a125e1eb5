"""The bundle: what an external fitter takes says exactly what all bins say."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from small_campaign import small_config

from reduce.binning import bin_recording
from reduce.handoff import bundle, combined_spectrum_text, information_from
from reduce.joint_fit import JointFit, covariance_modes_k, joint_fit
from reduce.knowledge_modes import knowledge_modes
from reduce.trough_model import TroughModel, trough_model
from sims.campaign import observe
from sims.products import read_product, write_product
from sims.schema import BUNDLE


def quiet(done: int) -> None:
    """No bar."""


@pytest.fixture(scope="module")
def case() -> tuple[xr.Dataset, JointFit, TroughModel]:
    config = small_config(foreground={"terms": 6})
    observed = observe(config, quiet)
    modes = knowledge_modes(config, quiet)
    spectra = bin_recording(observed.recording, config.bins).assign(
        systematic_modes=(("mode", "bin", "channel"), modes.temperature_k),
        response_modes=(("mode", "bin", "channel"), modes.response),
    )
    for name, units in (("systematic_modes", "K"), ("response_modes", "1")):
        spectra[name].attrs["units"] = units
    model = trough_model(config.turning_points, spectra["frequency_mhz"].values, spectra["width_mhz"].values)
    fit = joint_fit(spectra, config.foreground, model, np.random.default_rng(1))
    return spectra, fit, model


def test_log_likelihood_of_the_bundle_equals_that_of_all_bins(
    case: tuple[xr.Dataset, JointFit, TroughModel], tmp_path: Path
) -> None:
    """Reference: least squares on every bin, foregrounds free, each mode of the covariance a unit-normal nuisance."""
    _, fit, model = case
    write_product(bundle(fit), tmp_path / "bundle.nc")
    packed = read_product(tmp_path / "bundle.nc", BUNDLE)
    information = information_from(packed)
    good = packed["flag"].values == 0
    sigma = np.sqrt(packed["noise_variance"].values[good])[:, None]
    modes = covariance_modes_k(packed, packed["fiducial_signal_k"].values)[good]
    bins, terms, channels = packed["foreground_modes"].shape
    basis = np.zeros((bins * terms, bins, channels))
    for number in range(bins):
        basis[number * terms : (number + 1) * terms, number] = np.nan_to_num(packed["foreground_modes"].values[number])
    tangent = basis.reshape(bins * terms, -1)[:, good.ravel()].T
    prior = np.hstack([np.zeros((modes.shape[1], tangent.shape[1])), np.eye(modes.shape[1])])
    design = np.vstack([np.hstack([tangent, modes]) / sigma, prior])
    axes = np.linalg.qr(design / np.linalg.norm(design, axis=0))[0]

    def dense(signal_k: np.ndarray) -> float:
        left = (packed["residual_k"].values - packed["signal_response"].values * signal_k)[good] / sigma[:, 0]
        left = np.concatenate([left, np.zeros(modes.shape[1])])
        for _ in range(2):
            left = left - axes @ (axes.T @ left)
        return float(-0.5 * left @ left)

    signals = model.signal_k(model.draw_prior(np.random.default_rng(2), 30))
    reference = np.array([dense(signal) for signal in signals])
    ours = information.log_likelihood(signals)
    # The contract is 1e-5 in ln L.
    assert ours - ours[0] == pytest.approx(reference - reference[0], abs=1e-5)


def test_absolute_likelihood_is_that_of_the_whole_covariance(
    case: tuple[xr.Dataset, JointFit, TroughModel],
) -> None:
    """Profiled over the foreground, and with it integrated out, against dense Gaussian algebra."""
    _, fit, model = case
    packed = bundle(fit)
    information = information_from(packed)
    good = packed["flag"].values == 0
    modes = covariance_modes_k(packed, packed["fiducial_signal_k"].values)[good]
    covariance = np.diag(packed["noise_variance"].values[good]) + modes @ modes.T
    basis = fit.subtraction.basis
    signal_k = model.signal_k(np.array([48.0, 71.0, 101.0, -6.0, -105.0, 22.0]))
    left = (packed["residual_k"].values - packed["signal_response"].values * signal_k)[good]
    # Scaled by the noise, the dense matrices keep their digits.
    scale = np.sqrt(packed["noise_variance"].values[good])
    root = np.linalg.cholesky(covariance / np.outer(scale, scale))
    white, tangent = np.linalg.solve(root, left / scale), np.linalg.solve(root, basis / scale[:, None])
    axes, triangle = np.linalg.qr(tangent)
    rest = white - axes @ (axes.T @ white)
    log_det = 2.0 * np.log(np.diag(root)).sum() + 2.0 * np.log(scale).sum()
    profiled = -0.5 * (rest @ rest + log_det + len(left) * np.log(2.0 * np.pi))
    marginal = profiled + 0.5 * (basis.shape[1] * np.log(2.0 * np.pi) - 2.0 * np.log(np.abs(np.diag(triangle))).sum())
    ours = float(information.log_likelihood(signal_k))
    # Modes a million times the noise leave the dense reference ten digits of chi-squared.
    assert ours + information.log_constant == pytest.approx(profiled, abs=1e-3)
    assert ours + information.log_constant_marginal == pytest.approx(marginal, abs=1e-3)


def test_information_form_is_its_own_square_root(case: tuple[xr.Dataset, JointFit, TroughModel]) -> None:
    information = case[1].information
    scale = np.abs(information.K).max()
    assert pytest.approx(information.K, abs=1e-12 * scale) == information.R.T @ information.R
    assert information.R.T @ information.z == pytest.approx(information.b, abs=1e-9 * np.abs(information.b).max())


def test_bundle_survives_a_round_trip(case: tuple[xr.Dataset, JointFit, TroughModel], tmp_path: Path) -> None:
    packed = bundle(case[1])
    write_product(packed, tmp_path / "bundle.nc")
    again = information_from(read_product(tmp_path / "bundle.nc", BUNDLE))
    for name in ("K", "b", "R", "z"):
        np.testing.assert_array_equal(getattr(again, name), getattr(case[1].information, name))
    for name in ("chi_squared_min", "degrees_of_freedom", "log_det_covariance", "rows", "nuisance_terms", "draws"):
        assert getattr(again, name) == getattr(case[1].information, name)


def test_masked_channels_carry_no_information(case: tuple[xr.Dataset, JointFit, TroughModel]) -> None:
    spectra, fit, _ = case
    masked = np.all(spectra["flag"].values != 0, axis=0)
    assert masked.any()
    # Zero but for rounding of the singular vectors.
    assert np.abs(fit.information.R[:, masked]).max() < 1e-12 * np.abs(fit.information.R).max()


def test_combined_spectrum_says_it_is_projected(case: tuple[xr.Dataset, JointFit, TroughModel]) -> None:
    text = combined_spectrum_text(bundle(case[1]))
    header = [line for line in text.splitlines() if line.startswith("#")]
    rows = np.loadtxt(text.splitlines())
    assert "INVENTED" in header[0]
    assert "not to be fitted" in header[1]
    assert rows.shape == (64, 3)
    assert np.all(rows[:, 2] >= 0.0)
