"""The family of maximally smooth functions: exact members, exact constraints, power laws among them."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from smooth_cases import FREQUENCY_MHZ, HIGH_MHZ, LOW_MHZ, one_bin

from reduce.foreground.maximally_smooth import MaximallySmooth
from reduce.foreground.protocol import Family
from sims.errors import InputError


def exact_members(pattern: Sequence[int]) -> list[list[Fraction]]:
    """Abel-Goncarov polynomials in powers of u, 0 to 1 over the band, by exact integration from their nodes."""
    signs = {order + 2: sign for order, sign in enumerate(pattern)} | {1: -pattern[0], 0: pattern[0]}
    members = []
    for order in range(2, len(pattern) + 2):
        powers = [Fraction(signs[order])]
        for below in range(order - 1, -1, -1):
            node = 0 if signs[below] == signs[below + 1] else 1
            integral = [Fraction(0)] + [value / (n + 1) for n, value in enumerate(powers)]
            integral[0] = -sum((value * node**n for n, value in enumerate(integral)), Fraction(0))
            powers = integral
        members.append(powers)
    return members


def value(powers: list[Fraction], place: Fraction) -> Fraction:
    return sum((coefficient * place**n for n, coefficient in enumerate(powers)), Fraction(0))


def derivative(powers: list[Fraction]) -> list[Fraction]:
    return [n * coefficient for n, coefficient in enumerate(powers)][1:]


PATTERNS = [(1, -1) * 4, (1,) * 8, (-1, -1, 1, 1, -1, 1, 1, -1), (-1, 1, 1, -1, -1, -1, 1, 1)]


@pytest.mark.parametrize("pattern", PATTERNS)
def test_no_derivative_of_a_member_changes_sign(pattern: tuple[int, ...]) -> None:
    """In exact arithmetic, at 33 places from end to end: every p_k has every derivative of its sign or zero."""
    places = [Fraction(n, 32) for n in range(33)]
    for member in exact_members(pattern):
        powers = derivative(derivative(member))
        for sign in pattern[: len(member) - 2]:
            assert all(sign * value(powers, place) >= 0 for place in places)
            powers = derivative(powers)


@pytest.mark.parametrize("pattern", PATTERNS)
def test_columns_are_the_exact_members(pattern: tuple[int, ...]) -> None:
    family = MaximallySmooth(10, LOW_MHZ, HIGH_MHZ, pattern, logarithmic=False)
    places = [Fraction(n, 32) for n in range(33)]
    frequency_mhz = np.array([LOW_MHZ + 80.0 * n / 32 for n in range(33)])  # these places are exact in binary
    columns = family.basis(frequency_mhz, np.zeros(10))
    for number, member in enumerate(exact_members(pattern)):
        exact = np.array([float(value(member, place)) for place in places])
        # Sums of positive terms only: relative to each value, a few roundings for each of at most nine orders.
        np.testing.assert_allclose(columns[:, number + 2], exact / np.abs(exact).max(), rtol=3e-14, atol=0)


def test_tangent_of_the_logarithm_is_the_derivative() -> None:
    family = MaximallySmooth(7, LOW_MHZ, HIGH_MHZ, of_logarithm=True)
    coefficients = np.array([7.5, -1.4, 0.02, 0.005, 0.0, 0.001, 0.0])
    tangent = family.basis(FREQUENCY_MHZ, coefficients)
    scale_k = family.evaluate(FREQUENCY_MHZ, coefficients).max()
    assert not family.linear
    for step, term in zip(1e-4 * np.eye(7), tangent.T, strict=True):
        up, down = (family.evaluate(FREQUENCY_MHZ, coefficients + sign * step) for sign in (1, -1))
        # h^2/6 of the third derivative is 2e-9 of T, rounding 1e-12.
        np.testing.assert_allclose(term, (up - down) / 2e-4, atol=5e-9 * scale_k)


@pytest.mark.parametrize("logarithmic", [True, False])
def test_family_is_linear_with_its_columns_as_tangent(logarithmic: bool) -> None:
    family: Family = MaximallySmooth(9, LOW_MHZ, HIGH_MHZ, logarithmic=logarithmic)
    coefficients = np.random.default_rng(1).uniform(0.0, 500.0, 9)
    tangent = family.basis(FREQUENCY_MHZ, coefficients)
    assert family.linear
    for term in range(9):
        step = np.eye(9)[term]
        difference = family.evaluate(FREQUENCY_MHZ, coefficients + step) - family.evaluate(FREQUENCY_MHZ, coefficients)
        np.testing.assert_allclose(difference, tangent[:, term], atol=1e-11)  # rounding of some thousand K


@pytest.mark.parametrize("index", [0.5, 2.1, 2.5, 3.0])
def test_power_laws_are_members_to_the_truncation_of_their_series(index: float) -> None:
    """Judged by mpmath: the series of (f / high)^-index in ln f, its weights positive, within the bound stated."""
    family = MaximallySmooth(14, LOW_MHZ, HIGH_MHZ)
    with mpmath.workdps(40):
        span = mpmath.log(mpmath.mpf(HIGH_MHZ) / mpmath.mpf(LOW_MHZ))
        exact = [mpmath.power(mpmath.mpf(f) / HIGH_MHZ, -mpmath.mpf(index)) for f in FREQUENCY_MHZ]
        weights = [(index * span) ** n / mpmath.factorial(n) for n in range(14)]
        powers = np.array([float(weight) for weight in weights])
        # The slope's column is 2 place - 1 = 1 - 2 u, u from the high end down.
        coefficients = np.array([powers[0] + powers[1] / 2, -powers[1] / 2, *powers[2:]])
        found = family.evaluate(FREQUENCY_MHZ, coefficients)
        worst = max(abs(mpmath.mpf(a) - b) for a, b in zip(found, exact, strict=True)) / exact[0]
    assert float(worst) <= family.truncation(index) + 1e-14  # and rounding
    assert float(worst) > 0.3 * family.truncation(index) - 1e-14  # the bound is not idle


@pytest.mark.parametrize("seed", range(4))
def test_members_are_recovered_to_rounding_at_a_dynamic_range_of_a_thousand_million(seed: int) -> None:
    """Members of random positive weights, some orders absent, written out by mpmath; noise is 1e-9 of the largest."""
    rng = np.random.default_rng(seed)
    weights = np.append(rng.uniform(100.0, 3000.0, 2), rng.uniform(0.0, 3000.0, 12) * rng.integers(0, 2, 12))
    with mpmath.workdps(40):
        span = mpmath.log(mpmath.mpf(HIGH_MHZ) / mpmath.mpf(LOW_MHZ))
        below = [mpmath.log(mpmath.mpf(HIGH_MHZ) / mpmath.mpf(f)) / span for f in FREQUENCY_MHZ]
        exact = [mpmath.fsum(mpmath.mpf(w) * u**n for n, w in enumerate(weights)) for u in below]
    data_k = np.array([float(item) for item in exact])
    sigma_k = 1e-9 * data_k.max()
    design = one_bin(14, sigma_k)
    fit = design.fit(data_k[None])
    worst = max(abs(mpmath.mpf(a) - b) for a, b in zip(fit.foreground_k[0], exact, strict=True))
    # Some dozens of roundings of the largest value, in a fit of 81 values.
    assert float(worst) < 100 * np.finfo(float).eps * data_k.max()
    assert fit.chi_squared < 1e-9
    assert (fit.coefficients[:, 2:] >= 0.0).all()


@pytest.mark.parametrize(
    ("terms", "signs", "fragment"),
    [(2, None, "3 to 60"), (61, None, "3 to 60"), (6, (1, -1), "4 for 6 terms"), (5, (1, 0, 1), "1 and -1")],
)
def test_what_is_no_family(terms: int, signs: tuple[int, ...] | None, fragment: str) -> None:
    with pytest.raises(InputError, match=fragment):
        MaximallySmooth(terms, LOW_MHZ, HIGH_MHZ, signs)


def test_what_the_family_cannot_accept() -> None:
    temperature_k = np.full(81, 100.0)
    temperature_k[3] = -5.0
    of_logarithm = MaximallySmooth(8, LOW_MHZ, HIGH_MHZ, of_logarithm=True)
    assert MaximallySmooth(8, LOW_MHZ, HIGH_MHZ).problems(FREQUENCY_MHZ, temperature_k) == []
    assert "1 temperatures not positive" in of_logarithm.problems(FREQUENCY_MHZ, temperature_k)[0]
    assert "2 channels outside" in of_logarithm.problems(FREQUENCY_MHZ + 2.0, np.full(81, 1.0))[0]


def test_truncation_is_refused_where_it_is_not_known() -> None:
    for family, index in (
        (MaximallySmooth(8, LOW_MHZ, HIGH_MHZ, logarithmic=False), 2.5),
        (MaximallySmooth(8, LOW_MHZ, HIGH_MHZ, (1,) * 6), 2.5),
        (MaximallySmooth(8, LOW_MHZ, HIGH_MHZ, of_logarithm=True), 2.5),
        (MaximallySmooth(8, LOW_MHZ, HIGH_MHZ), -1.0),
        (MaximallySmooth(8, LOW_MHZ, HIGH_MHZ), 30.0),
    ):
        with pytest.raises(InputError, match="truncation"):
            family.truncation(index)
