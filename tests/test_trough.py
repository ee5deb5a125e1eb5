"""What the shapes of `sims.trough` must be: closed forms, limits, continuity, convergence, and what they refuse."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.interpolate import CubicHermiteSpline

from sims import trough, trough_table
from sims.errors import InputError

CHANNELS_MHZ = np.linspace(40.0, 120.0, 256)
TURNING_MHZ = np.array([35.0, 46.2, 65.3, 99.4, 125.0])
TURNING_K = np.array([-0.02, -0.005, -0.107, 0.027, 0.0])


def _random_sets(count: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    rng = np.random.default_rng(20210401)
    inner = np.sort(rng.uniform(41, 119, (count, 4)), axis=1)
    turning_mhz = np.concatenate([np.full((count, 1), 30.0), inner, np.full((count, 1), 130.0)], axis=1)
    return turning_mhz, rng.normal(0, 0.1, turning_mhz.shape)


def test_turning_points_are_met_with_zero_slope() -> None:
    at_points = trough.turning_point_trough_k(TURNING_MHZ, TURNING_MHZ, TURNING_K)
    np.testing.assert_allclose(at_points, TURNING_K, atol=1e-16)  # rounding
    inner_mhz, step = TURNING_MHZ[1:-1], 1e-4
    for side in (-step, step):
        beside = trough.turning_point_trough_k(inner_mhz + side, TURNING_MHZ, TURNING_K)
        # A zero slope leaves the square term, below 3 x 0.14 K (1e-4/11)^2; any slope left would show 1e4 times larger.
        np.testing.assert_allclose(beside, TURNING_K[1:-1], atol=1e-10)


def test_first_derivative_is_continuous_and_the_second_is_not() -> None:
    def slope(at_mhz: float, order: int, step: float) -> float:
        stencil = at_mhz + step * np.arange(3)
        values = trough.turning_point_trough_k(np.sort(stencil), TURNING_MHZ, TURNING_K)
        ordered = values if step > 0 else values[::-1]
        return float(np.diff(ordered, n=order)[0] / step**order)

    for knot_mhz in TURNING_MHZ[1:-1]:
        # The slopes on either side are h/2 times the second derivative, at most 0.01 K/MHz^2, with h of 1e-3 MHz.
        assert abs(slope(knot_mhz, 1, 1e-3) - slope(knot_mhz, 1, -1e-3)) < 2e-5
    # At 65.3 MHz the pieces are 19.1 and 34.1 MHz long: second derivatives 6 dT/h^2, 1.68e-3 and 6.9e-4 K/MHz^2.
    below, above = 6 * 0.102 / 19.1**2, 6 * 0.134 / 34.1**2
    np.testing.assert_allclose(slope(65.3, 2, -1e-2), below, rtol=5e-3)  # the third derivative over 1e-2 MHz
    np.testing.assert_allclose(slope(65.3, 2, 1e-2), above, rtol=5e-3)


def test_trough_never_passes_its_turning_points() -> None:
    turning_mhz, turning_k = _random_sets(50)
    fine = np.linspace(30.0, 130.0, 3001)
    values = trough.turning_point_trough_k(fine, turning_mhz, turning_k)
    assert np.all(values.max(axis=1) <= turning_k.max(axis=1) + 1e-15)  # rounding
    assert np.all(values.min(axis=1) >= turning_k.min(axis=1) - 1e-15)
    middle = trough.turning_point_trough_k([(46.2 + 65.3) / 2], TURNING_MHZ, TURNING_K)
    np.testing.assert_allclose(middle, (-0.005 - 0.107) / 2, rtol=1e-12)  # by symmetry of the cubic; rounding


def test_batch_equals_a_plain_loop_over_scipy() -> None:
    turning_mhz, turning_k = _random_sets(60)
    shaped_mhz, shaped_k = turning_mhz.reshape(3, 20, 6), turning_k.reshape(3, 20, 6)
    batch = trough.turning_point_batch_k(CHANNELS_MHZ, shaped_mhz, shaped_k)
    loop = [CubicHermiteSpline(f, t, np.zeros(6))(CHANNELS_MHZ) for f, t in zip(turning_mhz, turning_k, strict=True)]
    assert batch.shape == (3, 20, 256)
    # 1e-12 K: SciPy's power basis in MHz loses digits where two turning points all but meet.
    np.testing.assert_allclose(batch.reshape(60, 256), loop, atol=1e-12)
    np.testing.assert_array_equal(trough.turning_point_trough_k(CHANNELS_MHZ, shaped_mhz, shaped_k), batch)


def test_channels_in_any_order_and_broadcast_parameters_give_the_same() -> None:
    shuffled = np.random.default_rng(1).permutation(256)
    ordered = trough.turning_point_trough_k(CHANNELS_MHZ, TURNING_MHZ, TURNING_K)
    np.testing.assert_array_equal(
        trough.turning_point_trough_k(CHANNELS_MHZ[shuffled], TURNING_MHZ, TURNING_K), ordered[shuffled]
    )
    deeper = trough.turning_point_trough_k(CHANNELS_MHZ, TURNING_MHZ, np.outer([1.0, 2.0], TURNING_K))
    np.testing.assert_allclose(deeper, np.outer([1.0, 2.0], ordered), atol=1e-16)  # linear in temperature; rounding


def test_bad_sets_of_a_batch_are_nan_and_harm_no_other() -> None:
    turning_mhz, turning_k = (np.tile(a, (7, 1)) for a in (TURNING_MHZ, TURNING_K))
    turning_mhz[1, 2] = 40.0  # out of order
    turning_mhz[2, 2] = turning_mhz[2, 1]  # two at one frequency
    turning_mhz[3, 0] = 41.0  # leaves the first channels outside
    turning_mhz[4, 4] = 119.0  # leaves the last channels outside
    turning_k[5, 2] = np.nan
    turning_mhz[6, 4] = np.inf
    values = trough.turning_point_batch_k(CHANNELS_MHZ, turning_mhz, turning_k)
    assert np.all(np.isnan(values[1:]))
    np.testing.assert_array_equal(values[0], trough.turning_point_trough_k(CHANNELS_MHZ, TURNING_MHZ, TURNING_K))


def test_public_trough_refuses_what_the_batch_marks() -> None:
    with pytest.raises(InputError, match="rise strictly"):
        trough.turning_point_trough_k(CHANNELS_MHZ, TURNING_MHZ[::-1], TURNING_K)
    with pytest.raises(InputError, match="outside the turning points, which enclose 50 to 110 MHz"):
        trough.turning_point_trough_k(CHANNELS_MHZ, [50.0, 70.0, 110.0], [0.0, -0.1, 0.0])
    with pytest.raises(InputError) as caught:
        trough.turning_point_trough_k([40.0, np.nan], [50.0, 45.0], [0.0, np.inf])
    assert len(caught.value.problems) == 3
    for bad_mhz, bad_k in (([70.0], [0.0]), (TURNING_MHZ, TURNING_K[:-1]), (70.0, 0.0)):
        with pytest.raises(InputError, match="turning points"):
            trough.turning_point_trough_k(CHANNELS_MHZ, bad_mhz, bad_k)
    with pytest.raises(InputError, match="do not broadcast"):
        trough.turning_point_trough_k(CHANNELS_MHZ, np.tile(TURNING_MHZ, (3, 1)), np.tile(TURNING_K, (2, 1)))
    with pytest.raises(InputError, match="one axis"):
        trough.turning_point_trough_k(CHANNELS_MHZ.reshape(2, 128), TURNING_MHZ, TURNING_K)


@pytest.mark.parametrize("flattening", [0.0, 1e-6, 0.5, 7.0, 30.0, 900.0])
def test_flattened_gaussian_has_its_depth_and_its_width_at_half_depth(flattening: float) -> None:
    at_mhz = [78.0 - 19.0 / 2, 78.0, 78.0 + 19.0 / 2]
    values = trough.flattened_gaussian_k(at_mhz, 0.5, 78.0, 19.0, flattening)
    # 1e-9: at 1e-6 and below the two small numbers of each quotient carry 1e-10; else rounding.
    np.testing.assert_allclose(values, [-0.25, -0.5, -0.25], rtol=1e-9)


def test_no_flattening_is_a_gaussian() -> None:
    gaussian = -0.5 * np.exp(-4 * np.log(2) * ((CHANNELS_MHZ - 78.0) / 19.0) ** 2)
    exact_limit = trough.flattened_gaussian_k(CHANNELS_MHZ, 0.5, 78.0, 19.0, 0.0)
    np.testing.assert_allclose(exact_limit, gaussian, atol=1e-12)  # the stand-in for 0 is 1e-12
    away = [
        np.max(np.abs(trough.flattened_gaussian_k(CHANNELS_MHZ, 0.5, 78.0, 19.0, tau) - gaussian))
        for tau in (1e-3, 2e-3)
    ]
    # The first departure is linear in the flattening; its square term is a thousandth of that.
    np.testing.assert_allclose(away[1] / away[0], 2.0, rtol=2e-3)


def test_flattened_gaussian_is_its_published_formula() -> None:
    depth_k, centre_mhz, width_mhz, tau = 0.53, 78.1, 18.7, 7.0
    b = 4 * (CHANNELS_MHZ - centre_mhz) ** 2 / width_mhz**2 * np.log(-1 / tau * np.log((1 + np.exp(-tau)) / 2))
    published = -depth_k * (1 - np.exp(-tau * np.exp(b))) / (1 - np.exp(-tau))
    ours = trough.flattened_gaussian_k(CHANNELS_MHZ, depth_k, centre_mhz, width_mhz, tau)
    np.testing.assert_allclose(ours, published, atol=1e-14)  # rounding of 1 - exp


def test_flattening_flattens_the_bottom() -> None:
    curvature = [
        np.diff(trough.flattened_gaussian_k([77.0, 78.0, 79.0], 0.5, 78.0, 19.0, tau), n=2)[0]
        for tau in (0.0, 2.0, 5.0, 10.0)
    ]
    assert np.all(np.diff(curvature) < 0)
    assert curvature[-1] > 0


def test_flattened_gaussian_batch_equals_a_loop() -> None:
    rng = np.random.default_rng(3)
    sets = np.stack([rng.uniform(0, 0.6, 12), rng.uniform(60, 90, 12), rng.uniform(5, 30, 12), rng.uniform(0, 20, 12)])
    batch = trough.flattened_gaussian_k(CHANNELS_MHZ, *sets.reshape(4, 3, 4))
    loop = [trough.flattened_gaussian_k(CHANNELS_MHZ, *one) for one in sets.T]
    assert batch.shape == (3, 4, 256)
    np.testing.assert_allclose(batch.reshape(12, 256), loop, atol=1e-15)  # rounding


def test_flattened_gaussian_names_every_bad_parameter() -> None:
    with pytest.raises(InputError) as caught:
        trough.flattened_gaussian_k(CHANNELS_MHZ, -0.5, np.nan, 0.0, -1.0)
    assert [p.split(",")[0].split(":")[0] for p in caught.value.problems] == ["depth", "centre", "width", "flattening"]


def _smooth(frequency_mhz: NDArray[np.float64]) -> NDArray[np.float64]:
    return trough.flattened_gaussian_k(frequency_mhz, 0.2, 78.0, 19.0, 2.0)


def test_tabulated_trough_converges_as_the_fourth_power_of_the_spacing() -> None:
    wanted = np.linspace(40.0, 120.0, 5001)
    errors = []
    for rows in (81, 161, 321):
        axis = np.linspace(40.0, 120.0, rows)
        errors.append(np.max(np.abs(trough_table.tabulated_trough_k(wanted, axis, _smooth(axis)) - _smooth(wanted))))
    orders = np.log2(np.array(errors[:-1]) / errors[1:])
    # A cubic spline is of order 4; at these spacings the next order shifts it by less than 0.2.
    np.testing.assert_allclose(orders, 4.0, atol=0.2)


def test_tabulated_trough_gives_back_a_cubic() -> None:
    axis = np.array([40.0, 55.0, 60.0, 90.0, 120.0])

    def cubic(f: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(1e-6 * (f - 40) * (f - 70) * (f - 130))

    # Without a knot next to its ends the spline holds every cubic; rounding.
    np.testing.assert_allclose(
        trough_table.tabulated_trough_k(CHANNELS_MHZ, axis, cubic(axis)), cubic(CHANNELS_MHZ), atol=1e-14
    )


def test_tabulated_trough_refuses_to_extrapolate_or_to_sort() -> None:
    axis = np.linspace(50.0, 110.0, 7)
    for bad in (49.9, 110.1, np.nan):
        with pytest.raises(InputError, match="outside the trough table"):
            trough_table.tabulated_trough_k([70.0, bad], axis, np.zeros(7))
    with pytest.raises(InputError, match="does not exceed"):
        trough_table.tabulated_trough_k([70.0], [50.0, 60.0, 60.0, 110.0], np.zeros(4))
    with pytest.raises(InputError, match="finite"):
        trough_table.tabulated_trough_k([70.0], axis, np.full(7, np.nan))
    with pytest.raises(InputError, match="at least 4"):
        trough_table.tabulated_trough_k([70.0], axis[:3], np.zeros(3))


@pytest.mark.parametrize(("column", "unit_k"), [("temperature_k", 1.0), ("temperature_mk", 1e-3)])
def test_table_is_read_in_either_unit_and_direction(tmp_path: Path, column: str, unit_k: float) -> None:
    path = tmp_path / "trough.csv"
    path.write_text(
        f"# a comment\nfrequency_mhz, {column}\n120,-1\n\n90,-2\n# another\n60,-3\n40,-4.5\n", encoding="utf-8-sig"
    )
    table = trough_table.read_trough_table(path)
    np.testing.assert_array_equal(table.frequency_mhz, [40.0, 60.0, 90.0, 120.0])
    np.testing.assert_allclose(table.temperature_k, np.array([-4.5, -3.0, -2.0, -1.0]) * unit_k, rtol=1e-15)  # rounding


def test_every_bad_line_of_a_table_is_listed(tmp_path: Path) -> None:
    path = tmp_path / "trough.csv"
    path.write_text(
        "frequency_mhz,temperature_k\n40,0\n50,nan\n60,-0.1,3\n# fine\n70,deep\n-80,0\n90,1_0\n100,-0.2\n95,0\n95,0\n"
        "110,0\n",
        encoding="utf-8",
    )
    with pytest.raises(InputError) as caught:
        trough_table.read_trough_table(path)
    lines = [problem.split("line ")[1].split(":")[0] for problem in caught.value.problems]
    assert lines == ["3", "4", "6", "7", "8", "10", "11"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "no lines"),
        ("frequency,temperature\n40,0\n", "heading"),
        ("frequency_ghz,temperature_k\n40,0\n", "heading"),
        ("40,0\n50,0\n60,0\n70,0\n", "heading"),
        ("frequency_mhz,temperature_k\n40,0\n50,0\n60,0\n", "3 rows; at least 4"),
        ("frequency_mhz,temperature_k\n40,0\n40,0\n40,0\n40,0\n", "must rise strictly"),
    ],
)
def test_tables_of_another_form_are_refused(tmp_path: Path, text: str, message: str) -> None:
    path = tmp_path / "trough.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        trough_table.read_trough_table(path)


def test_files_that_are_not_text_or_not_there_are_refused(tmp_path: Path) -> None:
    binary = tmp_path / "binary.csv"
    binary.write_bytes(b"\xff\xfe\x00\x81")
    for path in (binary, tmp_path / "absent.csv", tmp_path):
        with pytest.raises(InputError, match="cannot be read"):
            trough_table.read_trough_table(path)


def test_channel_mean_is_the_integral_over_the_channel() -> None:
    centre = np.array([68.0, 74.0, 78.0, 85.5])
    width = np.array([0.4, 2.0, 4.0, 1.0])
    means = trough.channel_mean_k(_smooth, centre, width)
    exact = [
        quad(lambda f: float(_smooth(np.array([f]))[0]), c - w / 2, c + w / 2, epsabs=1e-14)[0] / w
        for c, w in zip(centre, width, strict=True)
    ]
    # 1e-10 K: five points leave the tenth derivative, (4 MHz/19 MHz)^10 of 0.2 K over some 1e4.
    np.testing.assert_allclose(means, exact, atol=1e-10)
    # The mean is not the value at the centre: it differs by the curvature, 1e-4 K and more for 2 MHz and over.
    assert np.all(np.abs(means - _smooth(centre))[1:3] > 1e-4)


def test_channel_mean_is_exact_for_turning_points_outside_the_channels_and_close_within() -> None:
    def shape(f: NDArray[np.float64]) -> NDArray[np.float64]:
        return trough.turning_point_trough_k(f, TURNING_MHZ, np.stack([TURNING_K, 2 * TURNING_K]))

    antiderivative = CubicHermiteSpline(TURNING_MHZ, TURNING_K, np.zeros(5)).antiderivative()
    centre = np.arange(40.2, 119.9, 0.4)
    exact = (antiderivative(centre + 0.2) - antiderivative(centre - 0.2)) / 0.4
    means = trough.channel_mean_k(shape, centre, 0.4)
    knot = np.array([np.any(np.abs(TURNING_MHZ - c) < 0.2) for c in centre])
    assert 0 < np.count_nonzero(knot) < 10
    # Differences of an antiderivative of about 1 K MHz lose 1e-15/0.4 of it or so.
    np.testing.assert_allclose(means[:, ~knot], np.stack([exact, 2 * exact])[:, ~knot], atol=1e-13)
    # 1.2e-4 x jump of the second derivative, at most 6e-3 K/MHz^2 x (0.4 MHz)^2 = 1.2e-7 K (twice for the deeper).
    np.testing.assert_allclose(means[:, knot], np.stack([exact, 2 * exact])[:, knot], atol=2.4e-7)


def test_channel_mean_refuses_bad_channels() -> None:
    for centre, width in (([70.0, np.nan], 1.0), ([70.0], 0.0), ([70.0, 71.0], [1.0]), (70.0, 1.0)):
        with pytest.raises(InputError, match="channel"):
            trough.channel_mean_k(_smooth, centre, width)
