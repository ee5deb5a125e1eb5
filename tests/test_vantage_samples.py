"""Which samples there are, when they are taken, which are kept and what they say of themselves."""

from __future__ import annotations

import tracemalloc
import warnings
from datetime import UTC, datetime, timedelta, timezone
from fractions import Fraction
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pytest
import xarray as xr
from astropy.time import Time
from vantage_cases import START, TWO_FIELDS, earth_and_sun_at, lander, observation, orbit, orbit_about, site, unit

from sims.attitude import pointing_turns
from sims.config import GroundSite, LunarOrbit, LunarSurface, Observation
from sims.errors import InputError
from sims.vantage import full_geometry, sample_times, survey_geometry


def test_integration_is_shared_out_over_the_samples_kept() -> None:
    # Near full Moon the Earth and Sun stand on the same side of it; near new Moon hardly any orbit has both hidden.
    settings = {"start": datetime(2027, 6, 18, tzinfo=UTC), "step_s": 60.0, "count": 5000}
    everything = survey_geometry(orbit(TWO_FIELDS), observation(**settings))
    kept = survey_geometry(orbit(TWO_FIELDS), observation(**settings, require=("earth-hidden", "sun-hidden")))
    both = (everything["earth_hidden"] & everything["sun_hidden"]).values
    assert 0 < kept.sizes["time"] == both.sum() < 5000
    for name in everything.data_vars:
        if name != "integration_s":
            np.testing.assert_array_equal(kept[name].values, everything[name].values[both])
    for geometry in (everything, kept):
        assert float(geometry["integration_s"].sum()) == pytest.approx(360_000.0, rel=1e-12)  # rounding of the sum
        assert np.ptp(geometry["integration_s"].values) == 0.0


def test_conditions_that_are_never_met_are_refused_with_their_counts() -> None:
    earth = unit(earth_and_sun_at(START)[0])
    vantage = orbit_about(earth, towards=unit(np.cross(earth, [0.0, 0.0, 1.0])))  # face on: the Earth never sets
    with pytest.raises(InputError) as caught:
        survey_geometry(vantage, observation(require=("earth-hidden", "sun-hidden")))
    sun_hidden = int(survey_geometry(vantage, observation())["sun_hidden"].sum())
    assert "none of the 707 samples" in str(caught.value)
    assert f"earth-hidden in 0, sun-hidden in {sun_hidden}" in str(caught.value)


def test_bad_observations_are_refused() -> None:
    def unchecked(**changes: Any) -> Observation:
        return observation().model_copy(update=changes)

    naive = unchecked(start=datetime(2027, 6, 1))
    unknown = unchecked(require=("moon-hidden", "sun-hidden", "quiet"))
    for wrong, said in (
        (naive, "no time zone"),
        (unchecked(start=datetime(1969, 7, 20, tzinfo=UTC)), "reach outside"),
        (unchecked(step_s=1e9, count=5), "reach outside"),
        (unchecked(step_s=1e300, count=5), "reach outside"),
    ):
        with pytest.raises(InputError, match=said):
            survey_geometry(orbit(TWO_FIELDS), wrong)
    with pytest.raises(InputError) as caught:
        survey_geometry(orbit(), unknown)
    assert len(caught.value.problems) == 2


def test_each_direction_has_its_turn_for_the_dwell_time() -> None:
    elapsed_s = np.array([0.0, 299.0, 300.0, 599.0, 600.0, 899.0, 900.0, 5400.0])
    assert pointing_turns(elapsed_s, 300.0, 3).tolist() == [0, 0, 1, 1, 2, 2, 0, 0]


@pytest.mark.parametrize(
    ("step", "dwell"), [("0.7", "4.9"), ("0.29", "29"), ("0.1", "0.3"), ("3.3", "1.1"), ("7", "3")]
)
def test_turns_change_at_the_sample_that_decimals_say(step: str, dwell: str) -> None:
    count = np.arange(20_000)
    exact = [int(number * Fraction(step) / Fraction(dwell)) % 5 for number in count.tolist()]
    assert pointing_turns(float(step) * count, float(dwell), 5).tolist() == exact


def test_labels_and_instants_agree_with_astropy_across_a_leap_second() -> None:
    # A leap second was inserted at the end of 2016-12-31 (IERS Bulletin C 52).
    labels, times = sample_times(
        observation(start=datetime(2016, 12, 31, 11, 59, 58, tzinfo=UTC), step_s=7200.5, count=13)
    )
    np.testing.assert_allclose((times - Time(labels, scale="utc").tt).to_value("s"), 0.0, atol=1e-9)  # rounding
    assert labels[-1] == np.datetime64("2017-01-01T12:00:04", "ns")
    # Between the first and last label 24 h 6 s, and the leap second.
    assert (times[-1] - times[0]).to_value("s") == pytest.approx(86_407.0, abs=1e-6)


def test_start_in_another_zone_is_the_same_instant() -> None:
    local = observation(start=datetime(2027, 6, 1, 8, tzinfo=timezone(timedelta(hours=8))))
    np.testing.assert_array_equal(sample_times(local)[0], sample_times(observation())[0])


@pytest.mark.parametrize("vantage", [orbit(TWO_FIELDS), site()])
@pytest.mark.parametrize("year", [2028, 2060])
def test_later_years_are_computed_without_a_warning(vantage: LunarOrbit | GroundSite, year: int) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        geometry = survey_geometry(vantage, observation(start=datetime(year, 3, 1, tzinfo=UTC)))
    assert all(np.isfinite(geometry[name].values).all() for name in geometry.data_vars)
    assert "no leap second beyond" in geometry.attrs["time_system"]


@pytest.mark.parametrize(("vantage", "own"), [(orbit(TWO_FIELDS), "orbit_phase"), (site(), "sidereal_time_hours")])
def test_dataset_is_described_and_survives_a_file(
    vantage: LunarOrbit | GroundSite, own: Literal["orbit_phase", "sidereal_time_hours"], tmp_path: Path
) -> None:
    geometry = survey_geometry(vantage, observation(require=("sun-hidden",), step_s=120.0))
    bodies = [f"{name}_direction" for name in ("earth", "sun", "moon")]
    eclipses = [f"sun_{name}" for name in ("depth_rad", "radius_rad", "visible_fraction", "hidden")]
    assert set(geometry.data_vars) >= {
        *("position_km", "velocity_km_per_s", "attitude", "nadir", "forward", "pole", "limb_angle_rad", "earth_hidden"),
        *("pointing", "integration_s", "sun_elevation_rad", own, *bodies, *eclipses),
    }
    assert ("beta_angle_rad" in geometry) == (own == "orbit_phase")
    assert all({"units", "long_name"} <= set(geometry[name].attrs) for name in geometry.data_vars)
    np.testing.assert_allclose(np.linalg.norm(geometry["attitude"], axis=-1), 1.0, atol=1e-14)  # rounding
    geometry.to_netcdf(tmp_path / "geometry.nc", engine="h5netcdf")
    with xr.open_dataset(tmp_path / "geometry.nc", engine="h5netcdf") as again:
        xr.testing.assert_identical(again.load(), geometry)


@pytest.mark.parametrize("vantage", [orbit(), lander(), site()])
def test_memory_stays_in_proportion_to_the_samples(vantage: LunarOrbit | LunarSurface | GroundSite) -> None:
    full_geometry(vantage, observation(count=10))  # what is loaded once
    peaks = []
    for count in (20_000, 40_000):
        tracemalloc.start()
        full_geometry(vantage, observation(step_s=60.0, count=count))
        peaks.append(tracemalloc.get_traced_memory()[1] / count)
        tracemalloc.stop()
    # Measured 650 to 750 bytes a sample, of which 350 are kept; nodes of the ephemeris add a few a sample.
    assert peaks[1] < 1000.0
    assert peaks[1] == pytest.approx(peaks[0], rel=0.05)
