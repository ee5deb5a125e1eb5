"""Foreground subtraction: members recovered, independent minimisers matched, what is removed from a signal."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
from numpy.typing import NDArray

from reduce.covariance import DiagonalLowRank
from reduce.foreground.log_polynomial import LogPolynomial
from reduce.foreground.power_series import PowerSeries
from reduce.removed import removed_from_signal
from reduce.subtract import ConvergenceError, subtract
from sims.errors import InputError

LOW_MHZ, HIGH_MHZ = 40.0, 120.0


def sky_k(frequency_mhz: NDArray[np.float64], bins: int) -> NDArray[np.float64]:
    x = np.log(frequency_mhz / 70.0)
    number = np.arange(bins)[:, None]
    return np.asarray(3000.0 * (1 + 0.3 * number) * np.exp(-(2.5 + 0.03 * number) * x - 0.05 * x**2))


def trough_k(frequency_mhz: NDArray[np.float64], depth_k: float) -> NDArray[np.float64]:
    return np.asarray(-depth_k * np.exp(-0.5 * ((frequency_mhz - 75.0) / 8.0) ** 2))


def scene(bins: int, channels: int, modes: int, noise_share: float, seed: int) -> dict[str, Any]:
    """Bins of a curved power law with noise, modes that couple them, and some channels flagged."""
    rng = np.random.default_rng(seed)
    frequency = np.linspace(LOW_MHZ, HIGH_MHZ, channels)
    sky = sky_k(frequency, bins)
    variance = (sky * noise_share) ** 2
    phase = frequency[:, None] / 9.0 * (1 + np.arange(modes))
    couplings = rng.standard_normal((bins, 1, modes)) * sky[..., None] * noise_share * 20 * np.cos(phase)
    good = rng.random((bins, channels)) > 0.1
    covariance = DiagonalLowRank.from_bins(variance, couplings, good)
    temperature = np.full(sky.shape, np.nan)
    temperature[good] = sky[good] + covariance.draw(rng, 1)[0]
    return {
        "frequency_mhz": frequency,
        "temperature_k": temperature,
        "noise_variance_k2": variance,
        "modes_k": couplings,
        "good": good,
    }


@pytest.mark.parametrize("terms", [3, 10])
def test_own_member_is_recovered_to_rounding(terms: int) -> None:
    """1e4 K down to noise of 1e-3 K, seven decades: a member leaves nothing but the rounding of 1e4 K."""
    frequency = np.linspace(LOW_MHZ, HIGH_MHZ, 128)
    family = LogPolynomial(terms, LOW_MHZ, HIGH_MHZ)
    coefficients = np.array([7.7, -1.4, 0.03, 5e-3, 2e-3, -1e-3, 5e-4, 3e-4, 2e-4, 1e-4])[:terms]
    member = family.evaluate(frequency, coefficients)
    assert member.max() > 8e3
    result = subtract(
        frequency_mhz=frequency,
        temperature_k=member[None],
        noise_variance_k2=np.full((1, 128), 1e-6),
        modes_k=np.zeros((1, 128, 0)),
        good=np.ones((1, 128), bool),
        family=family,
    )
    # 1e4 K x 2e-16 = 2e-12 K a rounding; the exponential of a sum of ten terms costs some ten of them.
    assert np.abs(result.residual_k).max() < 1e-10
    # Noise of equal kelvin weighs the steep low end: condition up to thousands, times 1e-13.
    np.testing.assert_allclose(result.coefficients[0], coefficients, atol=1e-11)
    assert result.degrees_of_freedom == 128 - terms


def test_linear_family_is_the_dense_solution() -> None:
    data = scene(bins=3, channels=40, modes=4, noise_share=1e-4, seed=1)
    result = subtract(**data, family=PowerSeries(5, 2.5, 70.0, LOW_MHZ, HIGH_MHZ))
    good = data["good"]
    flat = good.ravel()
    powers = (data["frequency_mhz"] / 70.0)[:, None] ** (-2.5 + np.arange(5))
    basis = scipy.linalg.block_diag(powers, powers, powers)[flat]
    modes = data["modes_k"][good]
    dense = np.diag(data["noise_variance_k2"][good]) + modes @ modes.T
    y = data["temperature_k"][good]
    lower = np.linalg.cholesky(dense)
    left = scipy.linalg.solve_triangular(lower, basis, lower=True)
    right = scipy.linalg.solve_triangular(lower, y, lower=True)
    solution, *_ = scipy.linalg.lstsq(left, right)
    # Data of 1e8 noise standard deviations squared in a dense Cholesky factor and bare powers (condition 1e5):
    # some 1e-8 of the noise of 0.1 to 1 K is what this way can confirm.
    np.testing.assert_allclose(result.residual_k[good], y - basis @ solution, atol=1e-7)
    assert result.chi_squared == pytest.approx(((right - left @ solution) ** 2).sum(), rel=1e-8)
    assert result.iterations <= 3  # one step, and what rounding leaves


def test_bins_without_modes_are_independent() -> None:
    data = scene(bins=3, channels=50, modes=0, noise_share=1e-4, seed=2)
    family = LogPolynomial(4, LOW_MHZ, HIGH_MHZ)
    joint = subtract(**data, family=family)
    for number in range(3):
        one = {k: (v if k == "frequency_mhz" else v[number : number + 1]) for k, v in data.items()}
        # The two stop within 1e-8 standard deviations of 0.1 to 4 K of the same minimum.
        np.testing.assert_allclose(subtract(**one, family=family).residual_k[0], joint.residual_k[number], atol=1e-7)


def test_flagged_values_do_not_matter() -> None:
    data = scene(bins=2, channels=50, modes=2, noise_share=1e-4, seed=3)
    family = LogPolynomial(4, LOW_MHZ, HIGH_MHZ)
    first = subtract(**data, family=family)
    spoiled = dict(data)
    spoiled["temperature_k"] = np.where(data["good"], data["temperature_k"], -1e30)
    spoiled["noise_variance_k2"] = np.where(data["good"], data["noise_variance_k2"], 0.0)
    spoiled["modes_k"] = np.where(data["good"][..., None], data["modes_k"], np.nan)
    second = subtract(**spoiled, family=family)
    np.testing.assert_array_equal(first.residual_k, second.residual_k)
    assert np.isnan(first.residual_k).sum() == (~data["good"]).sum()
    assert np.isfinite(first.foreground_k).all()


def rippled(seed: int) -> dict[str, Any]:
    """Data no log polynomial of three terms fits: a ripple of 2 % that the noise of 1e-3 resolves."""
    data = scene(bins=2, channels=60, modes=3, noise_share=1e-3, seed=seed)
    ripple = 1 + 0.02 * np.sin(data["frequency_mhz"] / 4.0)
    return {**data, "temperature_k": data["temperature_k"] * ripple}


def independent_fit(data: dict[str, Any], terms: int) -> NDArray[np.float64]:
    """The joint fit by scipy, in powers of ln f, whitened by a dense Cholesky factor."""
    good = data["good"]
    modes = data["modes_k"][good]
    lower = np.linalg.cholesky(np.diag(data["noise_variance_k2"][good]) + modes @ modes.T)
    x = np.log(data["frequency_mhz"] / 70.0)[:, None] ** np.arange(terms)
    y = data["temperature_k"]

    def model(a: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(np.exp(a.reshape(-1, terms) @ x.T))

    def misfit(a: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(scipy.linalg.solve_triangular(lower, (y - model(a))[good], lower=True))

    begin = np.tile(np.append([np.log(3000.0), -2.5], np.zeros(terms - 2)), good.shape[0])
    found = scipy.optimize.least_squares(
        misfit, begin, jac="3-point", method="lm", x_scale="jac", xtol=1e-15, ftol=1e-15, gtol=1e-15, max_nfev=10_000
    )
    return np.asarray(model(found.x))


def test_iterated_fit_matches_an_independent_minimiser() -> None:
    data = rippled(seed=4)
    family = LogPolynomial(3, LOW_MHZ, HIGH_MHZ)
    result = subtract(**data, family=family)
    expected = independent_fit(data, 3)
    scale_k = np.sqrt(data["noise_variance_k2"])
    # The independent one stops where chi-squared (about 1e4) is flat to rounding, 1e-12: within 1e-6 standard
    # deviations of the minimum. Seen: 2e-9.
    assert np.abs((result.foreground_k - expected) / scale_k).max() < 1e-6
    # A single linear fit, of ln T, misses by about the square of the misfit over 2 T: 2 % of 1e4 K gives 2 K.
    once = np.array(
        [
            family.evaluate(data["frequency_mhz"], family.start(data["frequency_mhz"][g], t[g], v[g]))
            for g, t, v in zip(data["good"], data["temperature_k"], data["noise_variance_k2"], strict=True)
        ]
    )
    uncoupled = subtract(**{**data, "modes_k": data["modes_k"][..., :0]}, family=family).foreground_k
    difference_k = np.abs(once - uncoupled).max(axis=1)
    assert (difference_k > 0.1).all(), difference_k  # far above a trough
    assert (difference_k < 10.0).all(), difference_k  # and of the order expected


def test_minimum_is_stationary() -> None:
    """At convergence the whitened residual is orthogonal to the tangent to the tolerance of the iteration."""
    result = subtract(**rippled(seed=5), family=LogPolynomial(4, LOW_MHZ, HIGH_MHZ))
    axes, _ = np.linalg.qr(result.covariance.whiten(result.basis))
    white = result.covariance.whiten(result.residual_k[result.good])
    assert white @ white == pytest.approx(result.chi_squared, rel=1e-12)
    assert np.linalg.norm(axes.T @ white) < 2e-8  # STEP_TOLERANCE and rounding


def test_chi_squared_has_its_degrees_of_freedom() -> None:
    data = scene(bins=3, channels=40, modes=3, noise_share=1e-4, seed=6)
    good = data["good"]
    covariance = DiagonalLowRank.from_bins(data["noise_variance_k2"], data["modes_k"], good)
    sky = sky_k(data["frequency_mhz"], 3)
    family = LogPolynomial(3, LOW_MHZ, HIGH_MHZ)  # the sky of the scene is a member
    values = []
    for draw in covariance.draw(np.random.default_rng(7), 200):
        temperature = np.full(sky.shape, np.nan)
        temperature[good] = sky[good] + draw
        result = subtract(**{**data, "temperature_k": temperature}, family=family)
        values.append(result.chi_squared)
    freedom = int(good.sum()) - 9
    assert result.degrees_of_freedom == freedom
    # Mean of 200 chi-squared values: error sqrt(2 nu / 200); four of them.
    assert np.mean(values) == pytest.approx(freedom, abs=4 * np.sqrt(2 * freedom / 200))


def test_what_is_left_of_a_signal_is_what_two_fits_differ_by() -> None:
    data = scene(bins=2, channels=80, modes=2, noise_share=1e-5, seed=8)
    family = LogPolynomial(5, LOW_MHZ, HIGH_MHZ)
    frequency, response = data["frequency_mhz"], np.array([np.full(80, 0.62), np.linspace(0.63, 0.6, 80)])
    signal = trough_k(frequency, 0.15)
    without = subtract(**data, family=family)
    removed = removed_from_signal(
        without, frequency_mhz=frequency, family=family, signal_response=response, signal_k=signal
    )
    seen = subtract(**{**data, "temperature_k": data["temperature_k"] + response * signal}, family=family)
    difference = seen.residual_k - without.residual_k
    # Second order: delta^2 / 2T with delta 0.1 K and T 1e3 K is 5e-6 K.
    np.testing.assert_allclose(removed.left_k, difference, atol=1e-5, equal_nan=True)
    assert 0.05 < removed.surviving_fraction < 0.9
    # The neglected part is (imitation)^2 / 2T, itself to the next order, imitation / 3T. It is a difference of
    # values of 1e4 K, each good to some ten roundings of 3e-12 K.
    imitation = (response * signal - removed.left_k)[data["good"]]
    expected = imitation**2 / (2 * without.foreground_k[data["good"]])
    np.testing.assert_allclose(removed.second_order_k[data["good"]], expected, atol=1e-10)
    assert 1e-8 < removed.second_order_k.max() < 1e-5


def test_signal_inside_and_outside_the_family() -> None:
    data = scene(bins=1, channels=60, modes=0, noise_share=1e-4, seed=9)
    family = PowerSeries(4, 2.5, 70.0, LOW_MHZ, HIGH_MHZ)
    result = subtract(**data, family=family)
    common = {"frequency_mhz": data["frequency_mhz"], "family": family, "signal_response": np.ones((1, 60))}
    inside = family.evaluate(data["frequency_mhz"], np.array([1.0, 2.0, -1.0, 0.5]))
    lost = removed_from_signal(result, signal_k=inside, **common)
    assert lost.surviving_fraction < 1e-12  # rounding
    assert np.nanmax(np.abs(lost.left_k)) < 1e-12
    # A comb against the noise, orthogonal to every smooth column after one projection.
    kept = removed_from_signal(result, signal_k=np.nan_to_num(removed_comb(result, common)), **common)
    assert kept.surviving_fraction == pytest.approx(1.0, abs=1e-12)
    assert np.abs(kept.second_order_k).max() < 1e-10  # a linear family neglects nothing but rounding


def removed_comb(result: Any, common: dict[str, Any]) -> NDArray[np.float64]:
    comb = np.where(np.arange(60) % 2 == 0, 1.0, -1.0)
    return np.asarray(removed_from_signal(result, signal_k=comb, **common).left_k[0])


def test_degenerate_bins_are_all_named() -> None:
    data = scene(bins=4, channels=30, modes=1, noise_share=1e-4, seed=10)
    data["good"][1] = False
    data["good"][2] = np.arange(30) < 3
    data["temperature_k"][2, :3] = 100.0
    data["temperature_k"][3, np.flatnonzero(data["good"][3])[:2]] = -1.0
    with pytest.raises(InputError) as caught:
        subtract(**data, family=LogPolynomial(5, LOW_MHZ, HIGH_MHZ))
    assert [line.split(":")[0] for line in caught.value.problems] == ["bin 1", "bin 2", "bin 3"]
    assert "5 foreground terms for 3 good channels" in caught.value.problems[1]
    data["temperature_k"][0, np.flatnonzero(data["good"][0])[0]] = np.nan
    with pytest.raises(InputError, match="bin 0: 1 temperatures not finite"):
        subtract(**data, family=LogPolynomial(5, LOW_MHZ, HIGH_MHZ))


def test_shapes_are_checked() -> None:
    data = scene(bins=2, channels=30, modes=1, noise_share=1e-4, seed=11)
    family = LogPolynomial(3, LOW_MHZ, HIGH_MHZ)
    with pytest.raises(InputError, match="frequency_mhz"):
        subtract(**{**data, "frequency_mhz": np.linspace(40, 120, 29)}, family=family)
    with pytest.raises(InputError, match="temperature_k and good"):
        subtract(**{**data, "temperature_k": np.ones((2, 29))}, family=family)


def test_too_few_iterations_are_no_result() -> None:
    with pytest.raises(ConvergenceError, match="not converged in 1 iterations"):
        subtract(**rippled(seed=12), family=LogPolynomial(3, LOW_MHZ, HIGH_MHZ), most_iterations=1)


@dataclass(frozen=True)
class WrongTangent(LogPolynomial):
    """A family whose tangent points the wrong way."""

    def basis(self, frequency_mhz: NDArray[np.float64], coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        return -super().basis(frequency_mhz, coefficients)


def test_a_wrong_tangent_is_found_out() -> None:
    with pytest.raises(ConvergenceError, match="lowers chi-squared"):
        subtract(**rippled(seed=13), family=WrongTangent(3, LOW_MHZ, HIGH_MHZ))


def test_frequency_of_each_bin() -> None:
    """Bins may have frequencies of their own: the same sky seen off by half a channel leaves only rounding."""
    frequency = np.array([np.linspace(50, 100, 40), np.linspace(50.5, 100.5, 40)])
    family = LogPolynomial(3, LOW_MHZ, HIGH_MHZ)
    sky = np.array([sky_k(f, 1)[0] for f in frequency])
    result = subtract(
        frequency_mhz=frequency,
        temperature_k=sky,
        noise_variance_k2=(1e-5 * sky) ** 2,
        modes_k=np.zeros((2, 40, 0)),
        good=np.ones((2, 40), bool),
        family=family,
    )
    assert np.abs(result.residual_k).max() < 1e-9  # rounding of 7e3 K
    np.testing.assert_allclose(result.coefficients[0], result.coefficients[1], atol=1e-11)
