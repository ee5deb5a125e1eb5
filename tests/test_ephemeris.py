"""Earth and Sun from the Moon against DE421, kernels named by the user, and functions spread over time."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from pathlib import Path

import de421
import numpy as np
import pytest
import skyfield_data
from astropy.time import Time
from jplephem import Ephemeris
from jplephem.daf import DAF
from jplephem.excerpter import write_excerpt
from jplephem.spk import SPK
from numpy.typing import NDArray

from sims.ephemeris import NODE_STEP_S, earth_sun_from_moon_km, elapsed_s, smooth_in_time
from sims.errors import InputError

FloatArray = NDArray[np.float64]
ARCSEC = np.pi / 180.0 / 3600.0
FOUR_YEARS = Time(2_461_406.5 + np.linspace(0.0, 1461.0, 1500), format="jd", scale="tdb")  # from 2027-01-01
EPOCH = Time(["2027-06-01T00:00:00"], scale="tdb")
# 2027-06-01T00 TDB, computed from DE421: places of the Sun and Moon seen from the Earth's centre (GCRS, with light time
# and aberration).
SUN_DEG = (68.28115976, 21.93496165)
MOON_DEG = (16.45002900, 12.03416560)
SPEED_OF_LIGHT_KM_PER_S = 299_792.458
DE421_KERNEL = Path(skyfield_data.__file__).parent / "data" / "de421.bsp"


def unit(longitude_deg: float, latitude_deg: float) -> FloatArray:
    longitude, latitude = np.deg2rad(longitude_deg), np.deg2rad(latitude_deg)
    return np.array([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)])


def separation_arcsec(a: FloatArray, b: FloatArray) -> FloatArray:
    a = a / np.linalg.norm(a, axis=-1, keepdims=True)
    b = b / np.linalg.norm(b, axis=-1, keepdims=True)
    return np.asarray(2.0 * np.arcsin(np.linalg.norm(a - b, axis=-1) / 2.0) / ARCSEC)


def de421_earth_sun_from_moon_km(times: Time) -> FloatArray:
    """From the table of the package de421, which is no .bsp file."""
    ephemeris = Ephemeris(de421)
    tdb, tdb2 = times.tdb.jd1, times.tdb.jd2
    moon_from_earth = ephemeris.position("moon", tdb, tdb2).T
    moon = ephemeris.position("earthmoon", tdb, tdb2).T + moon_from_earth * ephemeris.moon_share
    return np.stack([-moon_from_earth, ephemeris.position("sun", tdb, tdb2).T - moon], axis=1)


def excerpt(path: Path, first_jd: float, last_jd: float, wanted: Callable[[tuple[int, int]], bool]) -> Path:
    """Part of the kernel in time and bodies, given as pairs of centre and body."""
    spk = SPK.open(str(DE421_KERNEL))
    whole = spk.daf.summaries
    spk.daf.summaries = lambda: [(name, values) for name, values in whole() if wanted((values[3], values[2]))]
    with path.open("w+b") as file:
        write_excerpt(spk, file, first_jd, last_jd, spk.daf.summaries())
    spk.close()
    return path


def test_earth_and_sun_seen_from_the_moon_agree_with_de421() -> None:
    ours, theirs = earth_sun_from_moon_km(FOUR_YEARS, None), de421_earth_sun_from_moon_km(FOUR_YEARS)
    apart = separation_arcsec(ours, theirs)
    # Accuracy of the built-in series: the Moon's was seen to reach 9.6 arcsec (16.8 km) in 2027-2030, the Sun's 0.034.
    assert apart[:, 0].max() < 12.0
    assert apart[:, 1].max() < 0.1
    assert np.linalg.norm(ours[:, 0] - theirs[:, 0], axis=-1).max() < 20.0


@pytest.mark.parametrize(("kernel", "sun_arcsec", "moon_arcsec"), [(None, 0.1, 12.0), (DE421_KERNEL, 0.005, 0.005)])
def test_sun_and_moon_seen_from_the_earth_have_their_tabulated_places(
    kernel: Path | None, sun_arcsec: float, moon_arcsec: float
) -> None:
    for body, tabulated_deg, tolerance_arcsec in ((1, SUN_DEG, sun_arcsec), (0, MOON_DEG, moon_arcsec)):
        # The relative place one light time earlier holds light time and aberration together, to (v/c)^2 = 0.002 arcsec.
        def from_earth(times: Time, body: int = body) -> FloatArray:
            places = earth_sun_from_moon_km(times, kernel)
            return np.asarray(places[:, body] * body - places[:, 0])

        light_time_s = np.linalg.norm(from_earth(EPOCH), axis=-1) / SPEED_OF_LIGHT_KM_PER_S
        earlier = Time(EPOCH.jd1, EPOCH.jd2 - light_time_s / 86_400.0, format="jd", scale="tdb")
        assert separation_arcsec(from_earth(earlier), unit(*tabulated_deg))[0] < tolerance_arcsec


def test_a_kernel_gives_what_jplephem_gives() -> None:
    ours, theirs = earth_sun_from_moon_km(FOUR_YEARS, DE421_KERNEL), de421_earth_sun_from_moon_km(FOUR_YEARS)
    # Two copies of one ephemeris in two forms: rounding of sums of 1.5e8 km.
    np.testing.assert_allclose(ours, theirs, rtol=0, atol=1e-6)


def test_a_kernel_of_consecutive_parts_is_used_across_the_seam(tmp_path: Path) -> None:
    middle = 2_461_557.5
    halves = [
        excerpt(tmp_path / f"{name}.bsp", first, last, lambda pair: pair in ((3, 399), (3, 301), (0, 3), (0, 10)))
        for name, first, last in (("a", middle - 200.0, middle), ("b", middle, middle + 200.0))
    ]
    times = Time(middle + np.linspace(-90.0, 90.0, 181), format="jd", scale="tdb")
    whole = earth_sun_from_moon_km(times, DE421_KERNEL)
    for half, inside in zip(halves, (times.jd < middle, times.jd > middle), strict=True):
        np.testing.assert_array_equal(earth_sun_from_moon_km(times[inside], half), whole[inside])


def test_a_kernel_that_does_not_cover_the_samples_is_refused_with_both_spans() -> None:
    late = Time(["2053-10-01T00:00:00", "2060-02-03T04:00:00"], scale="tdb")
    with pytest.raises(InputError) as refused:
        earth_sun_from_moon_km(late, DE421_KERNEL)
    assert len(refused.value.problems) == 1
    for part in ("observation.ephemeris", "de421.bsp", "1899-07-29 00:00 to 2053-10-09 00:00", "2053-10-01", "2060-02"):
        assert part in refused.value.problems[0]


def test_a_kernel_without_the_moon_is_refused(tmp_path: Path) -> None:
    path = excerpt(tmp_path / "sun.bsp", 2_461_400.5, 2_461_700.5, lambda pair: pair in ((0, 3), (0, 10)))
    with pytest.raises(InputError) as refused:
        earth_sun_from_moon_km(EPOCH, path)
    assert [problem.split("segment of ")[1][:15] for problem in refused.value.problems] == [
        "body 399 from 3",
        "body 301 from 3",
    ]


@pytest.mark.parametrize("length", [0, 500, 1024, 3000, 100_000, 16_000_000])
def test_a_kernel_cut_short_is_refused(tmp_path: Path, length: int) -> None:
    path = tmp_path / "short.bsp"
    path.write_bytes(DE421_KERNEL.read_bytes()[:length])
    with pytest.raises(InputError, match=r"observation\.ephemeris: .*short\.bsp cannot be read"):
        earth_sun_from_moon_km(EPOCH, path)


@pytest.mark.parametrize("fill", [b"\x00", b"\xff"])
def test_a_kernel_with_damaged_numbers_is_refused(tmp_path: Path, fill: bytes) -> None:
    path = excerpt(tmp_path / "damaged.bsp", 2_461_540.5, 2_461_580.5, lambda pair: pair[0] in (0, 3))
    data = bytearray(path.read_bytes())
    with path.open("rb") as file:
        segments = [values for _, values in DAF(file).summaries() if values[2] == 301]
    first, last = segments[0][6:8]
    data[8 * (first - 1) : 8 * (last - 4)] = fill * (8 * (last - first - 3))
    path.write_bytes(bytes(data))
    # Zeros put the Moon into the barycentre, 4700 km from the Earth; ones in every bit are no numbers.
    with pytest.raises(InputError, match=r"damaged\.bsp is damaged"):
        earth_sun_from_moon_km(EPOCH, path)


@pytest.mark.parametrize("name", ["none.bsp", ".", "text.bsp"])
def test_what_is_no_kernel_is_refused(tmp_path: Path, name: str) -> None:
    (tmp_path / "text.bsp").write_text("an ephemeris, honestly\n" * 100)
    with pytest.raises(InputError, match=r"observation\.ephemeris: .* cannot be read as a JPL kernel"):
        earth_sun_from_moon_km(EPOCH, tmp_path / name)


def test_interpolation_error_is_far_below_an_arcsecond_and_of_fourth_order() -> None:
    instants = np.sort(np.random.default_rng(5).uniform(0.0, 120 * 86_400.0, 4000))
    times = Time(EPOCH.jd1[0], EPOCH.jd2[0] + instants / 86_400.0, format="jd", scale="tdb")

    def function(at: Time) -> FloatArray:
        return earth_sun_from_moon_km(at, None)

    exact = function(times)
    coarse, fine = (
        separation_arcsec(smooth_in_time(function, times, step), exact).max(axis=0)
        for step in (NODE_STEP_S, NODE_STEP_S / 2.0)
    )
    assert coarse.max() < 0.05  # the figure promised in the docstring
    # A cubic spline gains 16 for a halved step; the shortest periods of the Moon's motion hold it a little below.
    assert coarse[0] / fine[0] > 12.0


def test_few_or_coincident_instants_are_not_interpolated() -> None:
    for days in ([0.0, 3.0, 90.0], [2.0] * 50):
        times = Time(EPOCH.jd1[0], np.array(days), format="jd", scale="tdb")
        exact = earth_sun_from_moon_km(times, None)
        np.testing.assert_array_equal(smooth_in_time(lambda at: earth_sun_from_moon_km(at, None), times), exact)


def test_elapsed_time_runs_in_si_seconds_across_a_leap_second() -> None:
    # A leap second was inserted at the end of 2016-12-31 (IERS Bulletin C 52).
    times = Time(["2016-12-31T23:59:59", "2017-01-01T00:00:00"], scale="utc")
    np.testing.assert_allclose(elapsed_s(times), [0.0, 2.0], atol=1e-9)  # rounding of two-part dates


def test_far_years_pass_without_a_warning() -> None:
    times = Time(2_480_000.5 + np.arange(100.0), format="jd", scale="tdb")  # 2077
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        smooth_in_time(lambda at: earth_sun_from_moon_km(at, None), times)
