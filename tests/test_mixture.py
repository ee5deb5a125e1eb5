"""The fitted density: it integrates to one, its draws follow it, and it follows two clouds at once."""

from __future__ import annotations

import numpy as np
import pytest

from reduce.mixture import Mixture, fitted_mixture

LOWER, UPPER = np.array([0.0, -np.inf]), np.array([10.0, np.inf])


def two_clouds(rng: np.random.Generator, size: int) -> np.ndarray:
    """One cloud against the lower bound of the first number, one in the middle."""
    first = np.abs(rng.normal(0.0, 0.5, (size // 2, 1))) + 1e-9
    second = rng.normal(6.0, 0.3, (size // 2, 1))
    other = np.concatenate([rng.normal(-2.0, 0.5, (size // 2, 1)), rng.normal(3.0, 1.0, (size // 2, 1))])
    return np.concatenate([np.concatenate([first, second]), other], axis=1)


@pytest.fixture(scope="module")
def mixture() -> Mixture:
    rng = np.random.default_rng(1)
    return fitted_mixture(two_clouds(rng, 2000), LOWER, UPPER, rng)


def test_it_integrates_to_one_within_the_bounds(mixture: Mixture) -> None:
    middle = np.linspace(-20.0, 20.0, 801)
    stretched = np.linspace(-25.0, 25.0, 1001)
    first = 10.0 / (1.0 + np.exp(-stretched))
    pairs = np.stack(np.meshgrid(first, middle, indexing="ij"), axis=-1)
    density = np.exp(mixture.log_density(pairs.reshape(-1, 2))).reshape(1001, 801)
    slope = first * (10.0 - first) / 10.0
    # Trapezia of smooth functions; Student's t of 8 degrees has some 1e-5 beyond.
    whole = np.trapezoid(np.trapezoid(density, middle, axis=1) * slope, stretched)
    assert whole == pytest.approx(1.0, abs=2e-4)


def test_draws_follow_the_density(mixture: Mixture) -> None:
    rng = np.random.default_rng(2)
    draws = mixture.draw(rng, 200_000)
    assert ((draws[:, 0] >= 0.0) & (draws[:, 0] <= 10.0)).all()
    for low, high in (([0.0, -3.0], [1.0, -1.0]), ([5.5, 2.0], [6.5, 4.0]), ([2.0, -1.0], [5.0, 3.0])):
        inside = ((draws > low) & (draws < high)).all(axis=1).mean()
        box = rng.uniform(low, high, (200_000, 2))
        density = np.exp(mixture.log_density(box))
        volume = np.prod(np.array(high) - low)
        error = np.hypot(np.sqrt(inside / 200_000), volume * density.std() / np.sqrt(200_000))
        assert inside == pytest.approx(volume * density.mean(), abs=5 * error)


def test_it_is_where_the_draws_are(mixture: Mixture) -> None:
    cloud = two_clouds(np.random.default_rng(3), 20_000)
    draws = mixture.draw(np.random.default_rng(4), 20_000)
    upper = lambda sets: (sets[:, 0] > 3.0).mean()  # noqa: E731
    # Half of the cloud in each; fitted to 2,000 draws, whose own share scatters by 0.011.
    assert upper(draws) == pytest.approx(upper(cloud), abs=0.05)
    assert mixture.log_density(cloud).mean() > mixture.log_density(np.stack([cloud[:, 0], cloud[::-1, 1]], 1)).mean()


def test_a_cloud_without_width_in_one_direction_is_followed_all_the_same() -> None:
    rng = np.random.default_rng(5)
    line = rng.standard_normal((1000, 1)) * np.array([[1.0, 2.0]])
    found = fitted_mixture(line, np.full(2, -np.inf), np.full(2, np.inf), rng)
    assert np.isfinite(found.log_density(line)).all()
