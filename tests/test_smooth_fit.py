"""Maximally smooth fits: optima that a general convex solver agrees with; what they take and what they leave."""

from __future__ import annotations

from itertools import product

import cvxpy
import numpy as np
import pytest
from numpy.polynomial import legendre
from numpy.typing import NDArray
from smooth_cases import FREQUENCY_MHZ, HIGH_MHZ, LOW_MHZ, NOISE_K, TROUGH_K, galaxy_k, observed, one_bin

from reduce.covariance import DiagonalLowRank
from reduce.foreground.maximally_smooth import MaximallySmooth
from reduce.foreground.smooth_fit import SmoothDesign, smooth_fit
from reduce.foreground.smooth_signs import with_found_signs
from sims.errors import InputError

FloatArray = NDArray[np.float64]

LOG_PLACE = np.log(FREQUENCY_MHZ / LOW_MHZ) / np.log(HIGH_MHZ / LOW_MHZ)


class General:
    """The same problem without anything of ours: Legendre polynomials of ln f, modes as unknowns, signs on a grid."""

    def __init__(self, design: SmoothDesign, data_k: FloatArray, terms: int) -> None:
        bins = design.good.shape[0]
        legendre_columns = legendre.legvander(2.0 * LOG_PLACE - 1.0, terms - 1)
        columns = np.kron(np.eye(bins), legendre_columns)[design.good.ravel()]
        sigma_k, modes_k = design.covariance.sigma_k, design.covariance.modes_k
        number = modes_k.shape[1]
        augmented = np.block([
            [columns / sigma_k[:, None], modes_k / sigma_k[:, None]],
            [np.zeros((number, columns.shape[1])), np.eye(number)],
        ])  # fmt: skip
        data = np.append(data_k[design.good] / sigma_k, np.zeros(number))
        orthonormal, self.triangle = np.linalg.qr(augmented)
        residual = data - orthonormal @ (orthonormal.T @ data)
        # Unknowns from the free optimum, in standard deviations: nothing of 1e5 cancels in the solver.
        self.centre = np.linalg.solve(self.triangle, orthonormal.T @ data)
        self.unconstrained = float(residual @ residual)
        self.bins, self.terms = bins, terms

    def objective(self, places: FloatArray) -> tuple[float, float]:
        """Minimum with the signs held at places 0 to 1, and its largest violated condition of optimality."""
        rows = []
        for order in range(2, self.terms):
            at_places = [legendre.legval(2 * places - 1, legendre.legder(unit, order)) for unit in np.eye(self.terms)]
            rows.append((-1) ** order * np.stack(at_places, axis=1))
        block = np.kron(np.eye(self.bins), np.concatenate(rows))
        padded = np.hstack([block, np.zeros((len(block), len(self.triangle) - block.shape[1]))])
        turned = np.linalg.solve(self.triangle.T, padded.T).T
        length = np.linalg.norm(turned, axis=1)
        turned, limit = turned / length[:, None], (padded @ self.centre) / length
        step = cvxpy.Variable(len(self.triangle))
        held = [turned @ step + limit >= 0]
        problem = cvxpy.Problem(cvxpy.Minimize(cvxpy.sum_squares(step)), held)
        problem.solve(solver=cvxpy.CLARABEL, tol_gap_abs=1e-11, tol_gap_rel=1e-11, tol_feas=1e-11, max_iter=500)
        force = held[0].dual_value
        slack = turned @ step.value + limit
        residual = max(
            float(np.abs(2 * step.value - turned.T @ force).max()),
            float(max(-slack.min(), 0.0)),
            float(max(-force.min(), 0.0)),
            float(np.abs(force * slack).max()),
        )
        return self.unconstrained + float(step.value @ step.value), residual / float(np.linalg.norm(step.value))


@pytest.mark.parametrize(("bins", "with_modes"), [(1, False), (3, False), (3, True)])
def test_against_a_general_convex_solver(bins: int, with_modes: bool) -> None:
    design, data_k = observed(bins, with_modes, seed=bins)
    fit = design.fit(data_k)
    general = General(design, data_k, 12)
    # Where it is smallest a derivative is at an end, so the ends are all a grid needs; a few more must change nothing.
    theirs, residual = general.objective(np.linspace(0.0, 1.0, 3))
    message = f"{fit.chi_squared} and {theirs}; ours: {fit.certificate}; theirs: KKT residual {residual:.1e}"
    print(message)
    assert general.unconstrained < 0.98 * theirs, message  # the constraints matter
    assert fit.chi_squared == pytest.approx(theirs, rel=1e-6), message
    assert fit.certificate.gap < 1e-7, message
    assert max(fit.certificate.stationarity, fit.certificate.dual, fit.certificate.primal) < 1e-12, message


def test_constraints_on_grids_tend_to_the_exact_ones_from_below() -> None:
    """Held inside the band only, half a cell from its ends, a problem is looser: less so the finer the grid."""
    design, data_k = observed(1, False, seed=2)
    exact = design.fit(data_k).chi_squared
    general = General(design, data_k, 12)
    missing = np.array([exact - general.objective((np.arange(n) + 0.5) / n)[0] for n in (2, 8, 32)])
    assert (missing > -1e-6 * exact).all()  # looser: never above, but for the other solver's tolerance
    assert missing[0] > 1.0
    # The ends come nearer in proportion to the cells, and the optimum with them: a factor of 4, or near it.
    assert (missing[1:] < missing[:-1] / 2.0).all(), missing


def test_conditions_of_optimality_in_the_space_of_the_data() -> None:
    """The residual as it is given, against every column, with the covariance written out: no factor of ours."""
    design, data_k = observed(3, True, seed=4)
    fit = design.fit(data_k)
    residual_k = fit.residual_k[design.good]
    dense = design.covariance.dense()
    force = design.columns_k.T @ np.linalg.solve(dense, residual_k)
    length = np.sqrt(np.einsum("rc,rc->c", design.columns_k, np.linalg.solve(dense, design.columns_k)))
    cosine = force / length / np.sqrt(fit.chi_squared)
    free = fit.free.ravel()
    # The data have 4e6 standard deviations in all; their rounding, 1e-9 of one, over a residual of 15, and the
    # condition of the dense matrix, 1e6.
    assert np.abs(cosine[free]).max() < 1e-6
    assert cosine[~free].max() < 1e-6
    assert cosine[~free].min() < -1e-4  # and some are held by a hundred times what rounding does
    assert fit.chi_squared == pytest.approx(residual_k @ np.linalg.solve(dense, residual_k), rel=1e-6)


def test_sums_of_power_laws_leave_nothing_but_noise() -> None:
    laws_k = galaxy_k(1)[0]
    silent = one_bin(20).fit(laws_k[None])
    assert np.abs(silent.residual_k).max() < 1e-6  # K; the series stops at 2e-11 of 8000 K
    family = MaximallySmooth(20, LOW_MHZ, HIGH_MHZ)
    assert silent.chi_squared < laws_k.size * (family.truncation(2.5) * laws_k.max() / NOISE_K) ** 2
    rng = np.random.default_rng(7)
    many = rng.standard_normal((200, 1, laws_k.size)) * NOISE_K
    chi_squared = one_bin(20).profile_chi_squared(laws_k[None], -many)
    # A member is the truth, so the best one is nearer than it; and it has the two free terms at least.
    assert (chi_squared <= (many**2).sum(axis=(1, 2)) / NOISE_K**2 + 1e-6).all()
    assert chi_squared.mean() < laws_k.size - 2 + 4 * np.sqrt(2 * 79 / 200)
    assert chi_squared.mean() > laws_k.size - 14 - 4 * np.sqrt(2 * 79 / 200)  # what the cone takes of noise is small


def left_of(family: MaximallySmooth, foreground_k: FloatArray, signal_k: FloatArray) -> float:
    """Share of the square of a signal-to-noise ratio that a fit leaves, without noise."""
    chi_squared = one_bin(family).fit((foreground_k + signal_k)[None]).chi_squared
    return chi_squared * NOISE_K**2 / float((signal_k**2).sum())


def test_a_trough_is_left_where_a_power_law_is_taken() -> None:
    """More orders take no more of a trough: signs stop them. Free polynomials of 20 terms take nearly all of it."""
    laws_k, power_law_k = galaxy_k(1)[0], 0.1 * (FREQUENCY_MHZ / 72.0) ** -2.2
    ten, twenty = (MaximallySmooth(terms, LOW_MHZ, HIGH_MHZ) for terms in (10, 20))
    assert left_of(twenty, laws_k, power_law_k) < 1e-6
    left = left_of(twenty, laws_k, TROUGH_K)
    assert left > 0.05  # more than a fifth of its amplitude: it is there to be seen
    assert left == pytest.approx(left_of(ten, laws_k, TROUGH_K), rel=1e-6)
    columns = twenty.columns(FREQUENCY_MHZ)
    free_fit_k = columns @ np.linalg.lstsq(columns, TROUGH_K, rcond=None)[0]
    assert ((TROUGH_K - free_fit_k) ** 2).sum() < 1e-3 * (TROUGH_K**2).sum()  # a thirtieth, at the most
    residual_k = one_bin(twenty).fit((laws_k + TROUGH_K)[None]).residual_k[0]
    assert abs(FREQUENCY_MHZ[np.argmin(residual_k)] - 72.0) < 2.0


def test_wide_troughs_are_taken_and_narrow_ones_left() -> None:
    family, laws_k = MaximallySmooth(20, LOW_MHZ, HIGH_MHZ), galaxy_k(1)[0]
    left = [
        left_of(family, laws_k, -0.1 * np.exp(-0.5 * ((FREQUENCY_MHZ - 72.0) / width_mhz) ** 2))
        for width_mhz in (2.0, 4.0, 8.0, 16.0)
    ]
    assert (np.diff(left) < 0).all()
    assert left[0] > 0.5
    assert left[-1] < 1e-3


def test_derivatives_of_the_logarithm_leave_more_of_a_trough() -> None:
    """A power law lies on the edge of each constraint on ln T, and deep inside those on T."""
    power_law_k = 3000.0 * (FREQUENCY_MHZ / 60.0) ** -2.5
    of_logarithm = MaximallySmooth(12, LOW_MHZ, HIGH_MHZ, of_logarithm=True)
    assert one_bin(of_logarithm).fit(power_law_k[None]).chi_squared < 1e-12  # a member, to rounding
    of_t = left_of(MaximallySmooth(12, LOW_MHZ, HIGH_MHZ), power_law_k, TROUGH_K)
    assert left_of(of_logarithm, power_law_k, TROUGH_K) > 4.0 * of_t


def test_optimum_of_the_logarithm_in_the_space_of_the_data() -> None:
    """The exact model at the answer: no free term lowers chi-squared, no held one would, no chance step does."""
    rng = np.random.default_rng(11)
    family = MaximallySmooth(8, LOW_MHZ, HIGH_MHZ, of_logarithm=True)
    data_k = galaxy_k(1)[0] + TROUGH_K + NOISE_K * rng.standard_normal(81)
    fit = one_bin(family).fit(data_k[None])
    tangent = family.basis(FREQUENCY_MHZ, fit.coefficients[0]) / NOISE_K
    white = fit.residual_k[0] / NOISE_K
    cosine = tangent.T @ white / np.linalg.norm(tangent, axis=0) / np.linalg.norm(white)
    assert np.abs(cosine[fit.free[0]]).max() < 1e-8  # rounding of 4e6 standard deviations, over a residual of hundreds
    assert cosine[~fit.free[0]].max() < 1e-8
    assert fit.chi_squared == pytest.approx(float(white @ white), rel=1e-9)
    for _ in range(200):
        step = rng.standard_normal(8) / np.linalg.norm(tangent, axis=0) * 10.0 ** rng.uniform(-2, 2)
        moved = fit.coefficients[0] + step
        moved[2:] = np.maximum(moved[2:], 0.0)
        other = (data_k - family.evaluate(FREQUENCY_MHZ, moved)) / NOISE_K
        assert float(other @ other) >= fit.chi_squared * (1.0 - 1e-9)


@pytest.mark.parametrize("terms", [6, 10])
def test_fit_of_the_logarithm_is_at_rest_under_strong_modes(terms: int) -> None:
    """Tens of kelvin of modes are free to move; the exact model at the answer still meets every condition."""
    linear, data_k = observed(3, True, seed=10)
    family = MaximallySmooth(terms, LOW_MHZ, HIGH_MHZ, of_logarithm=True)
    fit = SmoothDesign(FREQUENCY_MHZ, linear.good, linear.covariance, family).fit(data_k)
    for number in range(3):
        tangent = np.zeros((*data_k.shape, terms))
        tangent[number] = family.basis(FREQUENCY_MHZ, fit.coefficients[number])
        white = linear.covariance.whiten(tangent[linear.good])
        residual = linear.covariance.whiten(fit.residual_k[linear.good])
        cosine = white.T @ residual / np.linalg.norm(white, axis=0) / np.linalg.norm(residual)
        # The last step was below 1e-5 of a standard deviation, over a residual of 15.
        assert np.abs(cosine[fit.free[number]]).max() < 1e-6
        assert cosine[~fit.free[number]].max(initial=-1.0) < 1e-6


def test_profile_of_the_logarithm_is_the_refit_to_second_order() -> None:
    rng = np.random.default_rng(12)
    design = one_bin(MaximallySmooth(8, LOW_MHZ, HIGH_MHZ, (1,) * 6, of_logarithm=True))
    data_k = (3000.0 * (FREQUENCY_MHZ / 60.0) ** -2.5 + TROUGH_K + NOISE_K * rng.standard_normal(81))[None]
    signals_k = np.array([[TROUGH_K], [-TROUGH_K], [2.0 * TROUGH_K]])
    profile = design.profile_chi_squared(data_k, signals_k)
    refit = np.array([design.fit(data_k - signal).chi_squared for signal in signals_k])
    # 0.1 K on 500 K or more moves the model by 1e-5 K, a thousandth of the noise, over residuals of up to 10 of it.
    np.testing.assert_allclose(profile, refit, rtol=1e-4)
    assert profile.argmin() == 0


@pytest.mark.parametrize("with_modes", [False, True])
def test_profile_is_the_fit_of_what_is_left_and_convex(with_modes: bool) -> None:
    design, data_k = observed(2, with_modes, seed=5)
    amplitudes = np.linspace(-1.0, 3.0, 21)
    signals_k = amplitudes[:, None, None] * np.broadcast_to(TROUGH_K, data_k.shape)
    profile = design.profile_chi_squared(data_k, signals_k)
    # Two orders of the same arithmetic: the rounding of data of 4e6 standard deviations.
    for number in (0, 7, 20):
        assert profile[number] == pytest.approx(design.fit(data_k - signals_k[number]).chi_squared, rel=1e-8)
    # The least over a convex set of a function convex in both is convex in what remains.
    assert (np.diff(profile, 2) > -1e-8 * profile.max()).all()
    assert abs(amplitudes[profile.argmin()] - 1.0) < 0.5


def test_tangent_gives_the_profile_as_long_as_no_constraint_changes() -> None:
    design, data_k = observed(2, True, seed=6)
    fit = design.fit(data_k)
    white_tangent = design.covariance.whiten(fit.tangent)
    # Orthonormal; the free columns have a condition of 1e6 or less, squared away by the second pass.
    np.testing.assert_allclose(white_tangent.T @ white_tangent, np.eye(fit.free.sum()), atol=1e-9)
    assert fit.tangent.shape == (design.good.sum(), fit.free.sum())
    signal_k = 1e-3 * np.broadcast_to(TROUGH_K, data_k.shape)  # a tenth of a millikelvin
    assert (design.fit(data_k - signal_k).free == fit.free).all()
    white_signal = design.covariance.whiten(signal_k[design.good])
    white_residual = design.covariance.whiten(fit.residual_k[design.good])
    beside = white_signal - white_tangent @ (white_tangent.T @ white_signal)
    expected = fit.chi_squared - 2.0 * beside @ white_residual + beside @ beside
    (found,) = design.profile_chi_squared(data_k, signal_k[None])
    # The change is a few tenths; rounding of the data leaves 1e-8 of chi-squared.
    assert found - fit.chi_squared == pytest.approx(expected - fit.chi_squared, abs=1e-5)
    assert abs(expected - fit.chi_squared) > 0.01


def test_bins_without_common_modes_are_independent() -> None:
    design, data_k = observed(3, False, seed=8)
    joint = design.fit(data_k)
    total = 0.0
    for number in range(3):
        good = design.good[number : number + 1]
        covariance = DiagonalLowRank(np.full(int(good.sum()), NOISE_K**2), np.zeros((int(good.sum()), 0)))
        alone = smooth_fit(
            frequency_mhz=FREQUENCY_MHZ,
            temperature_k=data_k[number : number + 1],
            covariance=covariance,
            good=good,
            family=design.family,
        )
        np.testing.assert_allclose(joint.foreground_k[number], alone.foreground_k[0], atol=1e-6)  # of 8000 K
        start = design.family.start(
            FREQUENCY_MHZ[good[0]], data_k[number][good[0]], np.full(int(good.sum()), NOISE_K**2)
        )
        np.testing.assert_allclose(alone.coefficients[0], start, atol=1e-6)
        total += alone.chi_squared
    assert joint.chi_squared == pytest.approx(total, rel=1e-8)


@pytest.mark.parametrize("seed", range(3))
def test_signs_found_are_the_best_of_all_patterns(seed: int) -> None:
    rng = np.random.default_rng(seed)
    truth = MaximallySmooth(7, LOW_MHZ, HIGH_MHZ, tuple(int(sign) for sign in rng.choice([-1, 1], 5)))
    data_k = truth.evaluate(FREQUENCY_MHZ, rng.exponential(300.0, 7)) + NOISE_K * rng.standard_normal(81)
    design = one_bin(7)
    found = with_found_signs(design, data_k[None]).fit(data_k[None]).chi_squared
    assert found <= design.fit(data_k[None]).chi_squared
    assert found < 81 + 4 * np.sqrt(2 * 81)  # the truth is a member of one pattern
    every = []
    for signs in product((-1, 1), repeat=5):
        family = MaximallySmooth(7, LOW_MHZ, HIGH_MHZ, signs)
        every.append(SmoothDesign(FREQUENCY_MHZ, design.good, design.covariance, family).fit(data_k[None]).chi_squared)
    assert found == pytest.approx(min(every), rel=1e-5)  # less of a fall than 1e-6 for each turn is not followed


def test_what_a_fit_refuses() -> None:
    design, data_k = observed(2, False, seed=9)
    family, good, covariance = design.family, design.good, design.covariance
    with pytest.raises(InputError, match="outside"):
        SmoothDesign(FREQUENCY_MHZ + 1.0, good, covariance, family)
    with pytest.raises(InputError, match="allowed are as many"):
        SmoothDesign(FREQUENCY_MHZ, np.ones_like(good), covariance, family)
    with pytest.raises(InputError, match="finite and positive"):
        SmoothDesign(np.full(81, np.nan), good, covariance, family)
    with pytest.raises(InputError, match="allowed is"):
        SmoothDesign(FREQUENCY_MHZ[:-1], good, covariance, family)
    sparse = good.copy()
    sparse[1, 1:] = False
    few = DiagonalLowRank(np.ones(int(sparse.sum())), np.zeros((int(sparse.sum()), 0)))
    with pytest.raises(InputError, match="bin 1: 1 good channels"):
        SmoothDesign(FREQUENCY_MHZ, sparse, few, family)
    with pytest.raises(InputError, match="values not finite on good"):
        design.fit(np.full_like(data_k, np.inf))
    with pytest.raises(InputError, match="got shape"):
        design.fit(data_k[0])
    of_logarithm = MaximallySmooth(6, LOW_MHZ, HIGH_MHZ, of_logarithm=True)
    with pytest.raises(InputError, match="bin 1: 78 temperatures not positive"):
        SmoothDesign(FREQUENCY_MHZ, good, covariance, of_logarithm).fit(data_k * np.array([[1.0], [-1.0]]))
    for other, level_k in ((family, np.ones(good.shape)), (of_logarithm, np.zeros(good.shape))):
        with pytest.raises(InputError, match="level_k"):
            SmoothDesign(FREQUENCY_MHZ, good, covariance, other, level_k)
    with pytest.raises(InputError, match="got shape"):
        design.profile_chi_squared(data_k, data_k)
    with pytest.raises(InputError, match="values not finite"):
        design.profile_chi_squared(data_k, np.full((1, *data_k.shape), np.nan))
