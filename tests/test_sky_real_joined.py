"""Real maps joined: smoothness between 50 and 150 MHz, and indices against published ones.

The data files are those of `test_sky_real`: the 408 MHz survey (Haslam et al. 1982, A&AS 47, 1) and a
global model at ten frequencies from 50 to 150 MHz.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.interpolate import CubicSpline
from sky_cases import cmb_k, cube, joined, model_cube, package_file, survey, write_table

from reduce.sky_card import local_index, log_polynomial_residual_mk
from sims.sky import AnySky, JoinedSky, sky_from

BAND_MHZ = np.geomspace(50.0, 150.0, 201)
BAND_MHZ[[0, -1]] = 50.0, 150.0


@pytest.fixture(scope="module")
def file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    _, values = model_cube()
    return write_table(tmp_path_factory.mktemp("model") / "model.fits", list(values), COORDSYS="C", NSIDE=8)


def model_sky(file: Path, **rule: Any) -> AnySky:
    frequency, _ = model_cube()
    shared = {"nside": 8, "frame": "icrs", "valid_from_mhz": 50.0, "valid_to_mhz": 150.0}
    return sky_from(cube(file, np.round(frequency, 9), **shared, **rule))


def test_cube_has_the_models_means_at_its_frequencies(file: Path) -> None:
    frequency, values = model_cube()
    found = model_sky(file, join="spline").mean_k(np.clip(frequency, 50.0, 150.0))
    assert found == pytest.approx(values.mean(axis=1), rel=1e-9)  # frequencies are rounded to 1e-11 of themselves


@pytest.mark.parametrize(
    "rule", [{"join": "spline"}, *({"join": "polynomial", "order": order} for order in (1, 2, 3, 5, 7, 9))]
)
def test_smooth_joins_leave_under_two_millikelvin(file: Path, rule: dict[str, Any]) -> None:
    mean = model_sky(file, **rule).mean_k(BAND_MHZ)
    # Measured: 0.004 to 0.62 mK rms with six terms, of a sky of 420 to 6200 K; at most 0.47 mK anywhere with seven.
    assert np.std(log_polynomial_residual_mk(BAND_MHZ, mean, 6)) < 2.0
    assert np.abs(log_polynomial_residual_mk(BAND_MHZ, mean, 7)).max() < 2.0


def test_straight_lines_and_natural_splines_would_leave_hundreds(file: Path) -> None:
    frequency, values = model_cube()
    x, at = np.log(frequency), np.log(BAND_MHZ)
    logarithm = np.log(values - cmb_k(frequency)[:, np.newaxis])
    broken = np.array([np.interp(at, x, one) for one in logarithm.T])
    natural = CubicSpline(x, logarithm, axis=0, bc_type="natural")(at).T
    for name, logarithms, least in (("broken", broken, 300.0), ("natural", natural, 100.0)):
        mean = np.exp(logarithms).mean(axis=0) + cmb_k(BAND_MHZ)
        # Measured: 355 mK rms of the broken lines, 127 mK of the natural spline.
        assert np.std(log_polynomial_residual_mk(BAND_MHZ, mean, 6)) > least, name


@pytest.fixture(scope="module")
def with_survey(file: Path) -> AnySky:
    """The survey and the model, the survey smoothed to the model's pixels of 7.3 deg."""
    frequency, _ = model_cube()
    haslam = package_file("mwa_skymap", "radio408.RaDec.fits")
    maps = [survey(haslam, 408.0, format="image", frame="fk4", unit="0.1 K", resolution_deg=0.85)]
    maps += [
        survey(file, float(f), frame="icrs", field=n, resolution_deg=7.3) for n, f in enumerate(np.round(frequency, 9))
    ]
    shared = {"nside": 8, "frame": "icrs", "valid_from_mhz": 50.0, "valid_to_mhz": 408.0}
    return sky_from(joined(maps, join="polynomial", order=1, **shared))


def test_index_between_survey_and_model_is_the_published_one(with_survey: AnySky) -> None:
    index, curvature = local_index(with_survey.brightness_k, 140.0, 50.0, 408.0)
    # Guzman et al. 2011, A&A 525, A138: 2.1 to 2.7 between 45 and 408 MHz over the sky, and Rogers and Bowman 2008,
    # AJ 136, 641: 2.5 +- 0.1 from 100 to 200 MHz at high latitudes (both from memory).
    assert 2.4 < index.mean() < 2.6
    assert index.min() > 2.1
    assert index.max() < 2.7
    assert np.percentile(index, 5) > 2.4
    assert np.percentile(index, 95) < 2.6
    assert np.abs(curvature).max() < 1e-6
    # The plane is flatter: free-free emission (common practice).
    latitude = np.abs(np.degrees(np.arcsin(galactic_height(with_survey))))
    assert index[latitude < 5.0].mean() < index[latitude > 30.0].mean() - 0.02


def galactic_height(sky: AnySky) -> np.ndarray:
    pole = np.array([-0.8676661490, -0.1980763734, 0.4559837762])  # IAU 1958 pole in ICRS; Hipparcos catalogue, vol. 1
    return np.asarray(sky.directions @ pole)


def test_smoothing_the_survey_keeps_its_mean(with_survey: AnySky) -> None:
    assert isinstance(with_survey, JoinedSky)
    kept = with_survey.maps.temperature_k[0]
    # 34.734 K is the survey's mean over the sphere, computed from the file by numpy alone.
    assert kept.mean() == pytest.approx(34.734, abs=2e-3)
    assert kept.max() < 300.0  # Cas A, 4814 K in a beam of 0.85 deg, is spread over 7.3 deg
