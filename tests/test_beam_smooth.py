"""Tabulated beams in frequency: through or between the tabulated ones, and what smoothing takes out in kelvin."""

from __future__ import annotations

import healpy as hp
import numpy as np
import pytest
from table_cases import beam_of, dipole, even_table, few_sources, random_directions, table_from

from sims.beam_smooth import SKY_POWER, Roughness, frequency_spline, roughness_k, thinned_error, undershoot
from sims.beam_spline import angular_spline
from sims.errors import InputError
from sims.far_field import FarField

BAND = np.arange(40.0, 121.0)
OVER_PLANE = dipole(length_m=2.0, height_m=1.0)


def sky_mean_k(frequency_mhz: np.ndarray) -> np.ndarray:
    return np.asarray(2000.0 * (frequency_mhz / 70.0) ** -2.5)


def rough_by(table: FarField, smoothing_mhz: float) -> Roughness:
    sphere = angular_spline(table.theta_deg, table.phi_deg, upper_half=table.upper_half)
    spline = frequency_spline(table.frequency_mhz, smoothing_mhz)
    return roughness_k(spline, table.power, table.theta_deg, table.phi_deg, sphere, sky_mean_k(table.frequency_mhz))


def with_power(table: FarField, power: np.ndarray) -> FarField:
    return table_from(power, table.frequency_mhz, table.theta_deg, table.phi_deg, upper_half=table.upper_half)


def antenna_temperature_k(step_mhz: float, smoothing_mhz: float | None = None) -> tuple[np.ndarray, np.ndarray]:
    """A power-law sky of varying index through a tabulated dipole over a plane, 0.5 MHz apart."""
    table = even_table(OVER_PLANE.directivity, np.arange(40.0, 121.0, step_mhz), 60, upper_half=True)
    beam = beam_of(table, smoothing_mhz)
    frequency = np.linspace(40.0, 120.0, 161)
    direction = np.stack(hp.pix2vec(16, np.arange(12 * 16**2)), axis=1)
    x, y, z = direction.T
    base, index = 1500.0 * np.exp(1.2 * x + 0.8 * y * z), 2.5 + 0.1 * x - 0.05 * y * z
    sky_k = base[:, None] * np.exp(-index[:, None] * np.log(frequency / 70.0))
    return frequency, (beam.directivity(frequency, direction) * sky_k).mean(axis=0)


def log_residual_k(frequency_mhz: np.ndarray, spectrum_k: np.ndarray, terms: int) -> np.ndarray:
    x = np.log(frequency_mhz / 69.3) / np.log(120.0 / 69.3)
    fit = np.polynomial.Chebyshev.fit(x, np.log(spectrum_k), terms)
    return np.asarray(spectrum_k - np.exp(fit(x)))


@pytest.mark.parametrize("smoothing_mhz", [None, 8.0])
def test_foreground_residual_does_not_see_the_frequencies_of_the_table(smoothing_mhz: float | None) -> None:
    frequency, fine_k = antenna_temperature_k(1.0, smoothing_mhz)
    _, coarse_k = antenna_temperature_k(2.0, smoothing_mhz)
    change = log_residual_k(frequency, fine_k, 8) - log_residual_k(frequency, coarse_k, 8)
    # Order 8 in log-log; the aim for a smooth beam is a tenth of a millikelvin.
    assert np.abs(change).max() < 1e-4


def test_table_comes_back_at_its_frequencies_and_zero_stays_zero() -> None:
    spline = frequency_spline(BAND, None)
    assert spline.matrix(BAND) == pytest.approx(np.eye(len(BAND)), abs=1e-12)
    beam = beam_of(even_table(dipole(length_m=2.0).directivity, BAND, 36))
    along_the_wire = np.array([[1.0, 0.0, 0.0]])
    assert np.abs(beam.directivity(np.linspace(40, 120, 333), along_the_wire)).max() < 1e-15


@pytest.mark.parametrize("smoothing_mhz", [None, 7.0])
def test_no_kink_at_a_tabulated_frequency(smoothing_mhz: float | None) -> None:
    """Random values from frequency to frequency: whatever is smooth then is the spline's doing."""
    values = np.random.default_rng(2).uniform(1.0, 2.0, len(BAND))
    spline = frequency_spline(BAND, smoothing_mhz)
    # Half-way between knots and at them, slope and curvature from either side close in with the step.
    for place in (75.0, 80.0, 80.5):
        jumps = []
        for step in (1e-2, 1e-3):
            v = spline.matrix(place + step * np.array([-2.0, -1.0, 0.0, 1.0, 2.0])) @ values
            slope = (v[2] - v[1]) / step - (v[3] - v[2]) / step
            curvature = (v[0] - 2 * v[1] + v[2]) / step**2 - (v[2] - 2 * v[3] + v[4]) / step**2
            jumps.append((abs(slope), abs(curvature)))
        assert jumps[1][0] < 0.2 * jumps[0][0]
        assert jumps[1][1] < 0.2 * jumps[0][1]


@pytest.mark.parametrize("count", [2, 3, 4, 5, 6, 9])
def test_few_frequencies_are_one_polynomial(count: int) -> None:
    frequency = np.linspace(50.0, 90.0, count)
    degree = min(count - 1, 5)
    at = np.linspace(50.0, 90.0, 31)
    # A spline of that degree reproduces polynomials of it; numbers of size one, rounding only.
    power = ((frequency - 70.0) / 20.0) ** degree
    got = frequency_spline(frequency, None).matrix(at) @ power
    assert got == pytest.approx(((at - 70.0) / 20.0) ** degree, abs=1e-12)


@pytest.mark.parametrize("wanted", [[39.9, 60.0], [60.0, 120.5], [np.nan]])
def test_band_edges_are_refused(wanted: list[float]) -> None:
    beam = beam_of(even_table(OVER_PLANE.directivity, BAND[::10], 36, upper_half=True))
    with pytest.raises(InputError, match=r"beam\.files: the table covers 40 to 120 MHz and .* is wanted"):
        beam.directivity(np.array(wanted), np.array([[0.0, 0.0, 1.0]]))


def test_one_frequency_serves_itself_only() -> None:
    beam = beam_of(even_table(OVER_PLANE.directivity, np.array([70.0]), 60, upper_half=True))
    at = np.array([70.0])
    zenith = np.array([[0.0, 0.0, 1.0]])
    # Three degrees leave 1e-5 of this pattern.
    assert beam.directivity(at, zenith) == pytest.approx(OVER_PLANE.directivity(at, zenith), rel=3e-5)
    with pytest.raises(InputError, match="covers 70 to 70 MHz"):
        beam.directivity(np.array([71.0]), zenith)


def test_gaps_are_named_and_a_smooth_beam_crosses_them() -> None:
    frequency = np.concatenate([np.arange(40.0, 71.0, 2.0), np.arange(78.0, 121.0, 2.0)])
    spline = frequency_spline(frequency, None)
    assert spline.gaps_mhz == ((70.0, 78.0),)
    assert frequency_spline(BAND, None).gaps_mhz == ()
    assert frequency_spline(np.geomspace(40.0, 120.0, 30), None).gaps_mhz == ()
    direction = random_directions(np.random.default_rng(3), 200)
    at = np.array([71.5, 74.0, 76.5])
    power = spline.matrix(at) @ OVER_PLANE.directivity(frequency, direction).T
    # A gap of 8 MHz in a pattern that changes over 150 MHz: (2 pi 8/150)^6 / 46080 = 1e-6 at most (sixth order).
    assert power == pytest.approx(OVER_PLANE.directivity(at, direction).T, abs=1e-6)


@pytest.mark.parametrize("smoothing_mhz", [4.0, 6.0, 10.0])
def test_smoothing_leaves_smooth_structure_and_takes_what_is_finer_than_its_scale(smoothing_mhz: float) -> None:
    frequency = np.linspace(40.0, 120.0, 401)
    matrix = frequency_spline(frequency, smoothing_mhz).matrix(frequency)
    inside = (frequency > 40.0 + 2.0 * smoothing_mhz) & (frequency < 120.0 - 2.0 * smoothing_mhz)

    def wave(period_scales: float) -> np.ndarray:
        return np.exp(2j * np.pi * frequency / (period_scales * smoothing_mhz))

    def size(values: np.ndarray) -> float:
        return float(np.sqrt(np.mean(np.abs(values[inside]) ** 2)))

    # Two knots a period are the least that can follow a wave (sampling theorem); a fifth-degree spline errs as the
    # sixth power of the step beyond, and the first alias that it can follow at all is weighed by 1/(scale/period)^6.
    assert size(matrix @ wave(4.0) - wave(4.0)) < 0.002
    assert size(matrix @ wave(1.0)) < 0.11
    assert size(matrix @ wave(0.3)) < 0.02
    polynomial = ((frequency - 80.0) / 40.0) ** 5
    assert matrix @ polynomial == pytest.approx(polynomial, abs=1e-11)


def test_nothing_left_to_smooth_is_refused() -> None:
    with pytest.raises(InputError, match=r"beam\.smoothing_mhz: 1 MHz leaves nothing to smooth with 81 frequencies"):
        frequency_spline(BAND, 1.0)


def test_smoothing_bridges_a_gap_with_fewer_knots() -> None:
    frequency = np.concatenate([np.arange(40.0, 70.0), np.arange(95.0, 121.0)])
    spline = frequency_spline(frequency, 5.0)
    inner = spline.knots_mhz[6:-6]
    assert np.sum((inner > 70.0) & (inner < 95.0)) <= 1
    assert np.abs(spline.matrix(frequency) @ np.ones(len(frequency)) - 1.0).max() < 1e-12


def test_rounding_to_a_hundredth_of_a_decibel_is_found_and_told_in_kelvin() -> None:
    clean = even_table(OVER_PLANE.directivity, BAND, 60, upper_half=True)
    error_db = np.random.default_rng(4).uniform(-0.005, 0.005, clean.power.shape)
    rough = rough_by(with_power(clean, clean.power * 10 ** (error_db / 10)), 10.0)
    # A uniform error of 0.01 dB in full width has the deviation 0.01/sqrt(12) dB; a fit of 13 coefficients to 81
    # frequencies leaves sqrt(1 - 13/81) of it, and the two frequencies at either end less.
    expected = 0.01 / np.sqrt(12.0) * np.log(10.0) / 10.0 * np.sqrt(1.0 - 13.0 / 81.0)
    assert np.sqrt(np.mean(rough.relative_rms**2)) == pytest.approx(expected, rel=0.03)
    # Hundreds of cells of a few degrees average it: millikelvins to hundreds of them, of thousands of kelvin.
    assert 1e-3 < rough.temperature_k[:40].mean() < 1.0
    unspoilt = rough_by(clean, 10.0)
    assert unspoilt.relative_rms.max() < 1e-7
    assert unspoilt.temperature_k.max() < 1e-4


def test_kelvin_of_a_ripple_of_one_degree_in_closed_form() -> None:
    """Alternating cos^2 - 1/3: degree 2 alone, mean square 4/45 in itself, turned against a sky of known power."""
    amplitude = 1e-3 * (-1.0) ** np.arange(len(BAND))

    def power(frequency_mhz: np.ndarray, direction: np.ndarray) -> np.ndarray:
        return 1.0 + np.outer(direction[:, 2] ** 2 - 1.0 / 3.0, amplitude)

    rough = rough_by(even_table(power, BAND, 60), 10.0)
    rms = 1e-3 * np.sqrt(4.0 / 45.0)
    # Thirteen of 81 directions of a fit are kept, and an alternating ripple is nearly at right angles to all of them.
    assert np.sqrt(np.mean(rough.relative_rms**2)) == pytest.approx(rms, rel=0.03)
    # The mean square of the pattern is 1 + 1e-6; three degrees integrate degree 2 to 1e-6.
    expected = sky_mean_k(BAND) * rough.relative_rms * np.sqrt(SKY_POWER[1] / 5.0)
    assert rough.temperature_k == pytest.approx(expected, rel=1e-5)


def test_kelvin_agree_with_random_skies_summed_pixel_by_pixel() -> None:
    rng = np.random.default_rng(6)
    frequency = np.linspace(60.0, 80.0, 21)
    wobble = 1.0 + 0.02 * rng.normal(size=len(frequency))
    pattern = few_sources(rng)

    def power(frequency_mhz: np.ndarray, direction: np.ndarray) -> np.ndarray:
        return pattern(frequency_mhz * wobble, direction)

    table = even_table(power, frequency, 60)
    rough = rough_by(table, 10.0)
    direction = np.stack(hp.pix2vec(32, np.arange(12 * 32**2)), axis=1)
    through, smoothed = (beam_of(table, scale).directivity(frequency, direction) for scale in (None, 10.0))
    spectrum = np.concatenate([[0.0], 4.0 * np.pi * SKY_POWER / (2.0 * np.arange(1, 33) + 1.0)])
    orders = hp.Alm.getlm(32)
    size = np.sqrt(spectrum[orders[0]] * np.where(orders[1] == 0, 1.0, 0.5))
    seen = []
    for _ in range(400):
        imaginary = np.where(orders[1] == 0, 0.0, rng.normal(size=len(size)))
        contrast = hp.alm2map(size * (rng.normal(size=len(size)) + 1j * imaginary), 32, lmax=32)
        seen.append(contrast @ (through - smoothed) / len(contrast))
    measured = np.sqrt(np.mean(np.square(seen), axis=0)) * sky_mean_k(frequency)
    # 400 skies give a deviation to 1/sqrt(800) = 3.5 %; four of those for 21 frequencies. Renormalising the smoothed
    # pattern, which has left its mean by as little, changes nothing at this level.
    assert measured == pytest.approx(rough.temperature_k, rel=0.14)


def test_thinned_error_holds_the_real_error_between_frequencies() -> None:
    rng = np.random.default_rng(8)
    inside = []
    for _ in range(40):
        pattern, frequency = few_sources(rng), np.linspace(40.0, 120.0, int(rng.integers(14, 30)))
        table = even_table(pattern, frequency, 24)
        sphere = angular_spline(table.theta_deg, table.phi_deg, upper_half=False)
        estimate = thinned_error(frequency, table.power, sphere)
        assert estimate is not None
        between = 0.5 * (frequency[1:] + frequency[:-1])
        truth = even_table(pattern, between, 24).power
        mean = sphere.mean(table.power)
        got = np.tensordot(frequency_spline(frequency, None).matrix(between) / mean, table.power, axes=1)
        expected = truth / sphere.mean(truth)[:, None, None]
        got /= sphere.mean(got)[:, None, None]
        square = (((got - expected) ** 2 @ sphere.phi_weight) @ sphere.theta_weight) / (
            (expected**2 @ sphere.phi_weight) @ sphere.theta_weight
        )
        inside.append(np.sqrt(square.max()) <= estimate[0] + 1e-13)
    assert np.mean(inside) >= 0.95


def test_undershoot_is_zero_for_a_smooth_beam_and_told_for_one_with_a_spike() -> None:
    table = even_table(OVER_PLANE.directivity, BAND, 36, upper_half=True)
    at = np.linspace(40.0, 120.0, 161)
    assert undershoot(frequency_spline(BAND, None), table.power, at).max() < 1e-12
    spiked = table.power.copy()
    spiked[40, 5, 7] *= 30.0
    assert undershoot(frequency_spline(BAND, None), spiked, at).max() > 0.01
