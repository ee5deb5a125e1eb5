"""Quadrature on the sphere: ring weights against exact integrals of harmonics."""

from __future__ import annotations

import healpy as hp
import numpy as np
import pytest
from scipy.special import eval_legendre

from sims.pixels import pixel_grid, ring_weights


@pytest.mark.parametrize("nside", [4, 32, 128])
def test_zonal_harmonics_integrate_exactly(nside: int) -> None:
    grid = pixel_grid(nside)
    z = grid.directions[:, 2]
    means = [np.mean(grid.weights * eval_legendre(degree, z)) for degree in range(0, 2 * nside + 1, max(1, nside // 8))]
    # Least squares leaves rounding.
    assert means == pytest.approx([1.0] + [0.0] * (len(means) - 1), abs=1e-12)


def test_rings_are_those_of_healpix() -> None:
    nside = 16
    grid = pixel_grid(nside)
    ring = hp.pix2ring(nside, np.arange(hp.nside2npix(nside)))
    assert grid.weights == pytest.approx(ring_weights(nside)[ring - 1], abs=0)
    assert len(ring_weights(nside)) == 4 * nside - 1
    assert grid.weights.mean() == pytest.approx(1.0, abs=1e-14)
    assert (grid.weights > 0.9).all()


def test_band_limited_sky_in_a_turned_beam() -> None:
    """A random sky to degree nside times a dipole's pattern about any axis: exact from its coefficients to degree 2."""
    nside, top = 32, 32
    rng = np.random.default_rng(4)
    alm = _coefficients(rng, top)
    sky = hp.alm2map(alm, nside, lmax=top)
    low = hp.alm2map(hp.almxfl(alm, np.arange(top + 1) <= 2), 512, lmax=top)
    fine, grid = pixel_grid(512), pixel_grid(nside)
    for axis in rng.normal(size=(4, 3)):
        unit = axis / np.linalg.norm(axis)
        exact = np.mean(fine.weights * low * (1 - (fine.directions @ unit) ** 2))
        got = np.mean(grid.weights * sky * (1 - (grid.directions @ unit) ** 2))
        equal = np.mean(sky * (1 - (grid.directions @ unit) ** 2))
        # The sky scatters by about 1: ring weights leave 1e-6 of it where equal weights leave 1e-5 and more.
        assert abs(got - exact) < 2e-6
        assert abs(got - exact) < abs(equal - exact)


def _coefficients(rng: np.random.Generator, top: int) -> np.ndarray:
    degree, order = hp.Alm.getlm(top)
    scale = 1.0 / (1.0 + degree) ** 1.5
    alm = scale * (rng.standard_normal(len(degree)) + 1j * rng.standard_normal(len(degree)))
    alm[order == 0] = alm[order == 0].real
    return alm


def test_shared_arrays_cannot_be_written_to() -> None:
    with pytest.raises(ValueError, match="read-only"):
        pixel_grid(4).weights[0] = 2.0
