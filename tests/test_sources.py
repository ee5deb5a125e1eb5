"""The quiet Sun and the Earth: published values, Planck's law, reciprocity, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest

from sims.constants import AU_KM, BOLTZMANN_J_PER_K, PLANCK_J_S, SPEED_OF_LIGHT_M_PER_S, SUN_RADIUS_KM
from sims.diffraction import diffraction_loss_db, horizon_distance_km
from sims.errors import InputError
from sims.sources import (
    EARTH_DISK_RANGE_K,
    disk_solid_angle_sr,
    earth_disk_k,
    earth_solid_angle_sr,
    flux_density_jy,
    quiet_sun,
    source_temperature_k,
)

ARCMIN = np.deg2rad(1.0 / 60.0)


@pytest.mark.parametrize(
    ("frequency_mhz", "lowest_k", "highest_k"),
    [
        (34.5, 1.0e5, 4.5e5),  # Subramanian 2004
        (np.geomspace(38.5, 73.8, 9), 0.6e5, 2.5e5),  # Clark Lake 1986, at solar minimum
        (127.0, 9e5, 9e5),  # Borkowski 1982
    ],
)
def test_stated_range_meets_what_is_published(frequency_mhz: object, lowest_k: float, highest_k: float) -> None:
    sun = quiet_sun(np.asarray(frequency_mhz))
    assert np.all(sun.lowest_k < highest_k)
    assert np.all(sun.highest_k > lowest_k)
    # The middle of each range lies within the stated one.
    middle = np.sqrt(lowest_k * highest_k)
    assert sun.lowest_k.min() < middle < sun.highest_k.max()


def test_radio_disk_is_as_wide_as_published() -> None:
    # Subramanian 2004: 39 to 66 arcmin at 34.5 MHz.
    assert 39.0 * ARCMIN < 2.0 * float(quiet_sun(34.5).radius_rad) < 66.0 * ARCMIN
    # It shrinks with frequency, towards the photosphere.
    radius = quiet_sun(np.linspace(20.0, 200.0, 50)).radius_rad
    assert np.all(np.diff(radius) < 0.0)
    assert np.arcsin(SUN_RADIUS_KM / AU_KM) < radius[-1] < 1.1 * np.arcsin(SUN_RADIUS_KM / AU_KM)


def test_edge_of_the_disk_is_where_the_plasma_frequency_is_the_frequency() -> None:
    radii = np.sin(quiet_sun(60.0).radius_rad) * AU_KM / SUN_RADIUS_KM
    density_per_m3 = 4.2e4 * 10.0 ** (4.32 / radii) * 1e6  # Newkirk 1961
    assert 8.97866 * np.sqrt(density_per_m3) == pytest.approx(60e6, rel=1e-9)  # inverse of one formula: rounding


def test_brightness_is_smooth_and_rises_from_20_to_200_mhz() -> None:
    log_brightness = np.log(quiet_sun(np.geomspace(20.0, 200.0, 40)).brightness_k)
    assert np.all(np.diff(log_brightness) > 0.0)
    np.testing.assert_allclose(np.diff(log_brightness, n=2), 0.0, atol=1e-12)  # a straight line: rounding


def test_flux_density_is_that_of_plancks_law() -> None:
    frequency_hz, temperature_k, solid_angle_sr = 80e6, 3e5, 1e-4
    radiance = 2 * PLANCK_J_S * frequency_hz**3 / SPEED_OF_LIGHT_M_PER_S**2
    radiance /= np.expm1(PLANCK_J_S * frequency_hz / (BOLTZMANN_J_PER_K * temperature_k))
    found = float(flux_density_jy(80.0, temperature_k, solid_angle_sr))
    # Rayleigh-Jeans is h f / 2 k T = 6e-9 more.
    assert found * 1e-26 == pytest.approx(radiance * solid_angle_sr, rel=1e-8)


def test_flux_falls_with_the_square_of_the_distance_and_brightness_does_not() -> None:
    near, far = quiet_sun(75.0, AU_KM), quiet_sun(75.0, 2.0 * AU_KM)
    assert float(near.brightness_k) == float(far.brightness_k)
    # Up to the square of the disk's radius, 4e-5.
    assert float(near.flux_density_jy / far.flux_density_jy) == pytest.approx(4.0, rel=1e-4)


def test_antenna_temperature_is_half_the_flux_on_the_effective_area() -> None:
    sun = quiet_sun(75.0)
    directivity = 1.7
    area_m2 = directivity * (SPEED_OF_LIGHT_M_PER_S / 75e6) ** 2 / (4.0 * np.pi)
    expected_k = area_m2 * float(sun.flux_density_jy) * 1e-26 / (2.0 * BOLTZMANN_J_PER_K)
    found_k = float(source_temperature_k(directivity, sun.brightness_k, sun.solid_angle_sr))
    assert found_k == pytest.approx(expected_k, rel=1e-12)  # one identity: rounding


def test_small_source_is_the_integral_over_its_disk() -> None:
    radius_rad, offset_rad, temperature_k = 0.0079, 0.4, 3e5
    # A short dipole, D = 1.5 sin^2, over a disk 0.4 rad off broadside, by Gauss in the cosine and even steps round.
    nodes, weights = np.polynomial.legendre.leggauss(8)
    cosine = 1.0 - (1.0 - np.cos(radius_rad)) * 0.5 * (nodes + 1.0)
    turn = 2.0 * np.pi * np.arange(16) / 16
    along_wire = np.sin(offset_rad) * cosine[:, None] + np.cos(offset_rad) * np.outer(
        np.sqrt(1 - cosine**2), np.cos(turn)
    )
    directivity = 1.5 * (1.0 - along_wire**2)
    exact_k = (
        temperature_k * (weights @ directivity).sum() / 16 * 0.5 * (1.0 - np.cos(radius_rad)) * 2 * np.pi / (4 * np.pi)
    )
    found_k = source_temperature_k(1.5 * np.cos(offset_rad) ** 2, temperature_k, disk_solid_angle_sr(radius_rad))
    # What the beam bends by over the disk: its radius squared.
    assert float(found_k) == pytest.approx(exact_k, rel=1e-4)


def test_whole_sphere_at_one_temperature_gives_that_temperature() -> None:
    assert float(source_temperature_k(1.0, 270.0, disk_solid_angle_sr(np.pi))) == pytest.approx(270.0, rel=1e-12)


def test_below_the_limb_the_source_is_dimmed_by_its_loss() -> None:
    sun = quiet_sun(75.0)
    loss_db = diffraction_loss_db(75.0, [-0.1, 0.0, 0.1], horizon_distance_km(100.0, 1737.4), 1737.4)
    added_k = source_temperature_k(1.5, sun.brightness_k, sun.solid_angle_sr, 10.0 ** (-0.1 * loss_db))
    assert added_k[0] == float(source_temperature_k(1.5, sun.brightness_k, sun.solid_angle_sr))
    # At the shadow's edge a quarter of the power, as near as J(0) comes to 6.02 dB: 6.03.
    assert added_k[1] / added_k[0] == pytest.approx(0.25, rel=0.005)
    assert added_k[2] < added_k[1] * 1e-3


def test_earth_from_the_moon() -> None:
    # A disk of 6378 km at 384 400 km: pi (R / d)^2, and a quarter of that ratio squared more.
    found = float(earth_solid_angle_sr(384_400.0))
    ratio = 6378.137 / 384_400.0
    assert found == pytest.approx(np.pi * ratio**2 * (1 + ratio**2 / 4), rel=1e-7)  # the next order
    assert EARTH_DISK_RANGE_K[0] < float(earth_disk_k(75.0)) < EARTH_DISK_RANGE_K[1]
    # Some tens of mK from a dipole: not nothing beside a trough of 0.1 K.
    assert 0.01 < float(source_temperature_k(1.5, earth_disk_k(75.0), found)) < 0.05


@pytest.mark.parametrize("frequency_mhz", [19.99, 200.01, np.nan, np.inf, -50.0])
def test_frequencies_outside_are_refused(frequency_mhz: float) -> None:
    for function in (quiet_sun, earth_disk_k):
        with pytest.raises(InputError, match=r"frequency_mhz: 1 values, .* outside 20 to 200 MHz"):
            function([50.0, frequency_mhz])


@pytest.mark.parametrize("distance_km", [0.0, 5e5, -AU_KM, np.nan])
def test_places_inside_a_body_are_refused(distance_km: float) -> None:
    with pytest.raises(InputError, match="distance_km"):
        quiet_sun(50.0, distance_km)
    with pytest.raises(InputError, match="distance_km"):
        earth_solid_angle_sr(min(distance_km, 6000.0))


def test_negative_factors_are_refused() -> None:
    for values in ((-1.0, 270.0, 1e-3, 1.0), (1.5, 270.0, np.nan, 1.0), (1.5, 270.0, 1e-3, -0.1)):
        with pytest.raises(InputError, match="directivity, solid_angle_sr and transmission"):
            source_temperature_k(*values)
