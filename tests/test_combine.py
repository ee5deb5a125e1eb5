"""The information form against dense likelihoods of all bins, exact projection and its limits, mocks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
from numpy.typing import NDArray

from reduce.combine import SignalDesign, combine, projected_spectrum, response_modes, signal_design
from reduce.covariance import DiagonalLowRank
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.subtract import Subtraction, subtract
from sims.errors import InputError

LOW_MHZ, HIGH_MHZ = 40.0, 120.0


@dataclass(frozen=True, eq=False)
class Scene:
    """Bins of one sky with a trough in them, as an analyst gets them."""

    frequency_mhz: NDArray[np.float64]
    sky_k: NDArray[np.float64]
    temperature_k: NDArray[np.float64]
    covariance: DiagonalLowRank
    variance_k2: NDArray[np.float64]
    modes_k: NDArray[np.float64]
    response: NDArray[np.float64]
    good: NDArray[np.bool_]
    family: LogPolynomial

    def fit(self) -> Subtraction:
        return subtract(
            frequency_mhz=self.frequency_mhz,
            temperature_k=self.temperature_k,
            noise_variance_k2=self.variance_k2,
            modes_k=self.modes_k,
            good=self.good,
            family=self.family,
        )

    def stacked_response(self) -> NDArray[np.float64]:
        return np.concatenate([np.diag(w)[g] for w, g in zip(self.response, self.good, strict=True)])


def trough_k(frequency_mhz: NDArray[np.float64], depth_k: float) -> NDArray[np.float64]:
    return np.asarray(-depth_k * np.exp(-0.5 * ((frequency_mhz - 75.0) / 8.0) ** 2))


def scene(bins: int, channels: int, modes: int, terms: int, noise_share: float, seed: int) -> Scene:
    rng = np.random.default_rng(seed)
    frequency = np.linspace(LOW_MHZ, HIGH_MHZ, channels)
    x, number = np.log(frequency / 70.0), np.arange(bins)[:, None]
    sky = np.asarray(3000.0 * (1 + 0.3 * number) * np.exp(-(2.5 + 0.03 * number) * x - 0.05 * x**2))
    variance = np.asarray((sky * noise_share) ** 2)
    phase = frequency[:, None] / 9.0 * (1 + np.arange(modes))
    couplings = rng.standard_normal((bins, 1, modes)) * sky[..., None] * noise_share * 20 * np.cos(phase)
    good = rng.random((bins, channels)) > 0.1
    good[:, channels // 3] = False  # a channel lost in every bin
    response = np.asarray(0.62 + 0.003 * number - 0.01 * x)
    covariance = DiagonalLowRank.from_bins(variance, couplings, good)
    temperature = np.full(sky.shape, np.nan)
    temperature[good] = (sky + response * trough_k(frequency, 0.15))[good] + covariance.draw(rng, 1)[0]
    family = LogPolynomial(terms, LOW_MHZ, HIGH_MHZ)
    return Scene(frequency, sky, temperature, covariance, variance, couplings, response, good, family)


def design_of(case: Scene, fit: Subtraction) -> SignalDesign:
    return signal_design(covariance=fit.covariance, basis=fit.basis, signal_response=case.response, good=case.good)


def some_signals(frequency_mhz: NDArray[np.float64], seed: int) -> NDArray[np.float64]:
    rng = np.random.default_rng(seed)
    rough = 0.05 * rng.standard_normal((3, frequency_mhz.size))
    return np.array([0 * frequency_mhz, trough_k(frequency_mhz, 0.15), trough_k(frequency_mhz, 0.4), *rough])


def test_likelihood_is_that_of_all_bins() -> None:
    """Absolute ln L with the foreground maximised, from the information form and from dense algebra."""
    case = scene(bins=4, channels=40, modes=3, terms=4, noise_share=1e-5, seed=1)
    fit = case.fit()
    information = design_of(case, fit).information(fit.residual_k, None)
    signals = some_signals(case.frequency_mhz, seed=2)
    dense = case.covariance.dense()
    lower = np.linalg.cholesky(dense)
    basis = scipy.linalg.solve_triangular(lower, fit.basis, lower=True)
    expected = []
    for signal in signals:
        y = fit.residual_k[case.good] - case.stacked_response() @ signal
        white = scipy.linalg.solve_triangular(lower, y, lower=True)
        shift, *_ = scipy.linalg.lstsq(basis, white)
        chi_squared = ((white - basis @ shift) ** 2).sum()
        expected.append(-0.5 * (chi_squared + np.linalg.slogdet(2 * np.pi * dense)[1]))
    found = information.log_likelihood(signals) + information.log_constant
    assert np.ptp(expected) > 100  # the signals are told apart
    # Nothing may be lost to 1e-5; rounding of values of hundreds through factors of condition 1e4 is far less.
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-8)
    np.testing.assert_allclose(
        information.K @ signals[1] - information.b,
        -numeric_slope(case, fit, signals[1]),
        atol=1e-7,  # the dense normal equations square a condition of 1e3
    )
    assert information.degrees_of_freedom == case.good.sum() - fit.basis.shape[1] - information.z.size


def numeric_slope(case: Scene, fit: Subtraction, signal_k: NDArray[np.float64]) -> NDArray[np.float64]:
    """Gradient of the profiled ln L by the generalised normal equations: W^T P (y - W s), P dense."""
    inverse = np.linalg.inv(case.covariance.dense())
    scaled = fit.basis / np.linalg.norm(fit.basis, axis=0)
    middle = scipy.linalg.solve(scaled.T @ inverse @ scaled, scaled.T @ inverse)
    projector = inverse - inverse @ scaled @ middle
    w = case.stacked_response()
    return np.asarray(w.T @ projector @ (fit.residual_k[case.good] - w @ signal_k))


def test_likelihood_with_the_foreground_refitted() -> None:
    """Against a fit of the exponential foreground itself at each signal: the tangent costs delta^2 / 2T only."""
    case = scene(bins=2, channels=40, modes=2, terms=4, noise_share=1e-5, seed=3)
    fit = case.fit()
    information = design_of(case, fit).information(fit.residual_k, None)
    lower = np.linalg.cholesky(case.covariance.dense())
    x = np.log(case.frequency_mhz / 70.0)[:, None] ** np.arange(4)
    relative = []
    signals = some_signals(case.frequency_mhz, seed=4)[:4]
    for signal in signals:
        data = case.temperature_k - case.response * signal

        def misfit(a: NDArray[np.float64], data: NDArray[np.float64] = data) -> NDArray[np.float64]:
            model = np.exp(a.reshape(2, 4) @ x.T)
            return np.asarray(scipy.linalg.solve_triangular(lower, (data - model)[case.good], lower=True))

        begin = np.concatenate([np.linalg.lstsq(x, np.log(sky), rcond=None)[0] for sky in case.sky_k])
        best = scipy.optimize.least_squares(
            misfit, begin, jac="3-point", method="lm", x_scale="jac", xtol=1e-15, ftol=1e-15
        )
        relative.append(-best.cost)
    found = information.log_likelihood(signals) - 0.5 * information.chi_squared_min
    # Second order: delta^2 / 2T is at most 1e-5 K here, 1e-3 of the noise; its smooth part is absorbed, and the
    # rest meets misfits of order one: some 1e-4, where ln L itself spans more than a hundred.
    np.testing.assert_allclose(found, relative, atol=1e-3)
    assert np.ptp(relative) > 10


def test_noiseless_signal_comes_back() -> None:
    case = scene(bins=3, channels=50, modes=2, terms=3, noise_share=1e-5, seed=5)
    fit = case.fit()
    signal = trough_k(case.frequency_mhz, 0.2)
    information = design_of(case, fit).information(case.response * signal, None)
    # Signals of a few hundred standard deviations in all; rounding.
    np.testing.assert_allclose(information.R @ signal, information.z, atol=1e-9)
    assert information.chi_squared_min < 1e-12
    assert information.log_likelihood(signal) == pytest.approx(0.0, abs=1e-12)


def test_foreground_shift_changes_nothing() -> None:
    """Any amount of the projected foreground may be added, 1e4 K of it, and the signal does not see it."""
    case = scene(bins=3, channels=50, modes=2, terms=4, noise_share=1e-5, seed=6)
    fit = case.fit()
    design = design_of(case, fit)
    data = fit.residual_k[case.good]
    shifted = data + fit.basis @ np.random.default_rng(7).standard_normal(fit.basis.shape[1])
    assert np.abs(shifted).max() > 1e4
    (z, chi_squared), (z_shifted, chi_squared_shifted) = design.project(data), design.project(shifted)
    # 1e4 K in units of 1e-2 K noise is 1e6, times sqrt(rows) and rounding: 1e-9 in z, times z in chi-squared.
    np.testing.assert_allclose(z_shifted, z, atol=1e-9)
    assert chi_squared_shifted == pytest.approx(chi_squared, rel=1e-9)


def test_projection_is_the_limit_of_a_wide_prior() -> None:
    """A prior of growing width on the foreground tends to the projection as 1/width^2."""
    case = scene(bins=2, channels=30, modes=2, terms=3, noise_share=1e-4, seed=8)
    fit = case.fit()
    information = design_of(case, fit).information(fit.residual_k, None)
    signals = some_signals(case.frequency_mhz, seed=9)
    found = information.log_likelihood(signals) - information.log_likelihood(signals[0])
    white = case.covariance.whiten(fit.basis)
    axes = fit.basis / np.linalg.norm(white, axis=0)  # each column one standard deviation of the data long
    errors = []
    for width in (1e2, 1e3, 1e4):
        wide = case.covariance.with_modes(axes * width)
        left = wide.whiten((fit.residual_k[case.good] - signals @ case.stacked_response().T).T)
        value = -0.5 * (left**2).sum(axis=0)
        errors.append(np.abs(value - value[0] - found).max())
    # Order two in the width: a factor ten is a hundred, until rounding (1e-10 of ln L) is met beyond these widths. The
    # projection itself has no width to choose: that is why it is used.
    assert errors[0] / errors[1] == pytest.approx(100.0, rel=0.01)
    assert errors[1] / errors[2] == pytest.approx(100.0, rel=0.01)
    assert errors[2] < 1e-6


def test_marginal_constant_is_the_limit_of_a_normalised_prior() -> None:
    """Integral over the foreground: prior N(0, width^2) times (2 pi)^(p/2) width^p tends to a flat density of one."""
    case = scene(bins=2, channels=30, modes=2, terms=3, noise_share=1e-4, seed=10)
    fit = case.fit()
    # Columns rescaled: the check then stands on well-scaled numbers, and a width of 1e4 is wide for all.
    basis = fit.basis / np.linalg.norm(case.covariance.whiten(fit.basis), axis=0)
    information = combine(
        residual_k=fit.residual_k,
        covariance=fit.covariance,
        basis=basis,
        signal_response=case.response,
        good=case.good,
        draws=None,
    )
    signal, width, terms = trough_k(case.frequency_mhz, 0.15), 1e4, basis.shape[1]
    wide = case.covariance.with_modes(basis * width)
    white = wide.whiten(fit.residual_k[case.good] - case.stacked_response() @ signal)
    log_density = -0.5 * (white @ white + wide.log_det + white.size * np.log(2 * np.pi))
    expected = log_density + terms * (np.log(width) + 0.5 * np.log(2 * np.pi))
    found = information.log_likelihood(signal) + information.log_constant_marginal
    # What the finite width leaves is the square of shifts over widths, and the inverse eigenvalues of the Gram
    # matrix of the unit columns (below 100) over width^2: 1e-6.
    assert found == pytest.approx(expected, abs=1e-6)


def test_mocks_have_unit_variance_and_the_degrees_of_freedom() -> None:
    case = scene(bins=3, channels=40, modes=3, terms=4, noise_share=1e-5, seed=11)
    fit = case.fit()
    design = design_of(case, fit)
    number = 4000
    mocks = case.covariance.draw(np.random.default_rng(12), number)
    z, chi_squared = design.project(mocks)
    freedom = design.covariance.rows - fit.basis.shape[1] - z.shape[1]
    assert z.shape == (number, design.R.shape[0])
    # Mean chi-squared to four of its errors; z covariance elementwise to five (some 800 elements).
    assert chi_squared.mean() == pytest.approx(freedom, abs=4 * np.sqrt(2 * freedom / number))
    covariance = z.T @ z / number - np.eye(z.shape[1])
    assert np.abs(covariance / np.sqrt((1 + np.eye(z.shape[1])) / number)).max() < 5.0
    # One by one is the same as all at once, to rounding.
    single = np.full(case.good.shape, np.nan)
    single[case.good] = mocks[17]
    one = design.information(single, None)
    np.testing.assert_allclose(one.z, z[17], atol=1e-10)
    assert one.chi_squared_min == pytest.approx(chi_squared[17], rel=1e-10)


def test_lost_channel_and_uncoupled_bins() -> None:
    case = scene(bins=4, channels=40, modes=0, terms=3, noise_share=1e-5, seed=13)
    fit = case.fit()
    whole = design_of(case, fit).information(fit.residual_k, None)
    lost = 40 // 3
    assert np.abs(whole.K[lost]).max() <= 1e-9 * np.abs(whole.K).max()  # never seen: no information on it
    parts = []
    for use in (slice(0, 2), slice(2, 4)):
        good = case.good[use]
        rows = np.zeros(case.good.shape, bool)
        rows[use] = True
        basis = fit.basis[rows[case.good]]
        covariance = DiagonalLowRank.from_bins(case.variance_k2[use], case.modes_k[use], good)
        parts.append(
            combine(
                residual_k=fit.residual_k[use],
                covariance=covariance,
                basis=basis[:, np.abs(basis).max(axis=0) > 0],
                signal_response=case.response[use],
                good=good,
                draws=None,
            )
        )
    # Information of independent data adds; rounding of sums of 1e4.
    scale = np.abs(whole.K).max()
    np.testing.assert_allclose(parts[0].K + parts[1].K, whole.K, atol=1e-11 * scale)
    np.testing.assert_allclose(parts[0].b + parts[1].b, whole.b, atol=1e-9 * np.abs(whole.b).max())


def test_foreground_that_takes_everything_leaves_no_information() -> None:
    covariance = DiagonalLowRank(np.ones(6), np.zeros((6, 0)))
    information = combine(
        residual_k=np.ones((1, 6)),
        covariance=covariance,
        basis=np.random.default_rng(14).standard_normal((6, 6)),
        signal_response=np.ones((1, 6)),
        good=np.ones((1, 6), bool),
        draws=None,
    )
    assert information.R.shape == (0, 6)
    assert information.log_likelihood(np.ones(6)) == 0.0
    assert information.chi_squared_min < 1e-20
    assert projected_spectrum(information, np.inf).kept == 0


def test_one_bin_leaves_its_terms_undetermined() -> None:
    """With one bin, the signal is known in as many directions as there are good channels less foreground terms."""
    case = scene(bins=1, channels=40, modes=2, terms=5, noise_share=1e-5, seed=15)
    fit = case.fit()
    information = design_of(case, fit).information(fit.residual_k, 500)
    assert information.R.shape == (int(case.good.sum()) - 5, 40)
    assert information.degrees_of_freedom == 0
    assert information.draws == 500


def test_no_foreground_is_the_weighted_mean() -> None:
    """Without foreground and modes each channel is an inverse-variance mean over bins: closed form."""
    rng = np.random.default_rng(16)
    variance, response, data = rng.uniform(1, 2, (3, 5)), rng.uniform(0.5, 0.7, (3, 5)), rng.standard_normal((3, 5))
    information = combine(
        residual_k=data,
        covariance=DiagonalLowRank(variance.ravel(), np.zeros((15, 0))),
        basis=np.zeros((15, 0)),
        signal_response=response,
        good=np.ones((3, 5), bool),
        draws=None,
    )
    weight = (response**2 / variance).sum(axis=0)
    mean = (response * data / variance).sum(axis=0) / weight
    spectrum = projected_spectrum(information, np.inf)
    np.testing.assert_allclose(spectrum.spectrum_k, mean, rtol=1e-12)  # rounding
    np.testing.assert_allclose(spectrum.covariance_k2, np.diag(1 / weight), atol=1e-13)
    assert information.chi_squared_min == pytest.approx((((data - response * mean) ** 2) / variance).sum(), rel=1e-12)


def test_projected_spectrum_solves_the_information_form() -> None:
    case = scene(bins=1, channels=40, modes=2, terms=5, noise_share=1e-5, seed=17)
    fit = case.fit()
    information = design_of(case, fit).information(fit.residual_k, None)
    spectrum = projected_spectrum(information, np.inf)
    assert spectrum.label == "projected"
    np.testing.assert_allclose(
        information.K @ spectrum.spectrum_k, information.b, atol=1e-11 * np.abs(information.b).max()
    )
    expected = np.linalg.pinv(information.K, rcond=1e-10, hermitian=True)
    # pinv of K works on squared singular values, so loses twice the digits.
    np.testing.assert_allclose(spectrum.covariance_k2, expected, atol=1e-9 * np.abs(expected).max())
    coarse = projected_spectrum(information, float(np.sqrt(np.linalg.eigvalsh(spectrum.covariance_k2)[-1])) * 0.99)
    assert coarse.kept == spectrum.kept - 1  # the worst direction, and only it, is left out
    with pytest.raises(InputError, match="worst_error_k"):
        projected_spectrum(information, 0.0)


def test_uncertain_response_costs_information_along_the_signal() -> None:
    """A response known to 10 % in all bins alike: the amplitude of the fiducial is known to no better than 10 %."""
    case = scene(bins=3, channels=40, modes=0, terms=3, noise_share=1e-7, seed=18)
    signal = trough_k(case.frequency_mhz, 0.2)
    columns = response_modes(0.1 * case.response[..., None], signal)
    assert columns.shape == (3, 40, 1)
    basis = case.fit().basis
    errors = []
    for covariance in (case.covariance, case.covariance.with_modes(columns[case.good])):
        design = signal_design(covariance=covariance, basis=basis, signal_response=case.response, good=case.good)
        errors.append(1.0 / np.linalg.norm(design.R @ signal))
    assert errors[0] < 0.01  # known far better without it
    # Errors add in squares, as the mode is the signal itself: closed form, to rounding.
    assert errors[1] == pytest.approx(np.hypot(0.1, errors[0]), rel=1e-7)
    with pytest.raises(InputError, match="mode"):
        response_modes(np.ones((3, 40)), signal)


def test_bad_input_is_refused() -> None:
    case = scene(bins=2, channels=30, modes=1, terms=3, noise_share=1e-5, seed=19)
    fit = case.fit()
    common = {"covariance": fit.covariance, "basis": fit.basis, "good": case.good}
    percent = case.response.copy()
    percent[1] *= 100.0
    with pytest.raises(InputError, match=r"outside 0 to 1.5 in bins \[1\]"):
        signal_design(**common, signal_response=percent)  # type: ignore[arg-type]
    # A lossless antenna on the ground behind a gain just above one is no error: twice the response, twice the root.
    full = signal_design(**common, signal_response=np.full((2, 30), 0.501))  # type: ignore[arg-type]
    above = signal_design(**common, signal_response=np.full((2, 30), 1.002))  # type: ignore[arg-type]
    np.testing.assert_allclose(
        above.R.T @ above.R, 4.0 * full.R.T @ full.R, rtol=1e-6, atol=1e-9 * np.abs(above.R).max() ** 2
    )
    with pytest.raises(InputError) as caught:
        signal_design(
            covariance=fit.covariance, basis=fit.basis[:-1], signal_response=case.response, good=np.ones((2, 30), bool)
        )
    assert len(caught.value.problems) == 2
    design = design_of(case, fit)
    with pytest.raises(InputError, match="not finite"):
        design.project(np.full(fit.covariance.rows, np.nan))
    with pytest.raises(InputError, match="30 channels"):
        design.information(fit.residual_k, None).log_likelihood(np.zeros(29))
    with pytest.raises(InputError, match="residual_k"):
        design.information(fit.residual_k[:1], None)
    doubled = np.concatenate([fit.basis, fit.basis[:, :1]], axis=1)
    with pytest.raises(InputError, match="condition number"):
        signal_design(**{**common, "basis": doubled}, signal_response=case.response)  # type: ignore[arg-type]


def test_chi_squared_of_a_full_campaign_is_its_degrees_of_freedom() -> None:
    """Eight bins of 256 channels, 48 foreground terms, 10 modes."""
    case = scene(bins=8, channels=256, modes=10, terms=6, noise_share=1e-5, seed=20)
    fit = case.fit()
    information = design_of(case, fit).information(fit.residual_k, None)
    freedom = information.degrees_of_freedom
    # Five standard deviations of chi-squared.
    assert information.chi_squared_min == pytest.approx(freedom, abs=5 * np.sqrt(2 * freedom))
