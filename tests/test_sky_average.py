"""The engine against plain sums, closed forms and conservation."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import healpy as hp
import numpy as np
import pytest
from engine_cases import (
    LIMB_100_KM_RAD,
    EvenSky,
    KinkedSky,
    SmoothSky,
    along_an_orbit,
    moving_scene,
    plain_at,
    plain_channels,
)
from scipy.spatial.transform import Rotation

from sims import config
from sims.beam import Beam, Profile, beam_from
from sims.constants import rayleigh_jeans_k
from sims.frequency import channel_grid, mean_points
from sims.horizon import read_horizon
from sims.moon import fresnel_reflectivity
from sims.pixel_sum import Pointing
from sims.pixels import pixel_grid
from sims.sky_average import Scene, evaluate, scene_axes, sky_average

MOUNT = {"efficiency": 0.95, "structure_temperature_k": 270.0}
OVER_PLANE = beam_from(config.Dipole(kind="dipole", length_m=2.0, height_m=1.0, **MOUNT))
FREE_DIPOLE = beam_from(config.Dipole(kind="dipole", length_m=2.0, **MOUNT))
ENGINE = config.Engine()


def quiet(samples: int) -> None:
    """No progress bar."""


def channels(count: int = 64) -> object:
    return channel_grid(config.Channels(start_mhz=40.0, stop_mhz=120.0, count=count))


def run(scene: Scene, grid: object, engine: config.Engine = ENGINE) -> object:
    return sky_average(scene, grid, engine, np.random.default_rng(5), quiet)  # type: ignore[arg-type]


@pytest.mark.parametrize("beam", [OVER_PLANE, FREE_DIPOLE])
def test_engine_equals_plain_sum_per_channel(beam: Beam) -> None:
    scene = moving_scene(SmoothSky(8), beam, 3)
    grid = channels()
    got = run(scene, grid)
    temperature, response = plain_channels(scene, grid)
    # The aim is 1e-6 K at every channel of a sky of 10^3 to 10^4 K: 1e-10 of it.
    assert np.abs(got.antenna_temperature_k - temperature).max() < 1e-6
    assert np.abs(got.signal_response - response).max() < 1e-9
    assert 0 < got.reached.nodes <= 64
    assert got.reached.error_k <= ENGINE.tolerance_k


def test_kinked_sky_is_caught_and_still_right_to_a_millikelvin() -> None:
    grid = channels()
    kink_mhz = float(grid.edges_mhz[20] + 0.37 * grid.width_mhz[20])
    scene = moving_scene(KinkedSky(4, kink_mhz), FREE_DIPOLE, 2)
    got = run(scene, grid)
    expected, _ = plain_channels(scene, grid, points=6)
    edges = np.array([grid.edges_mhz[20], kink_mhz, grid.edges_mhz[21]])
    frequency, weight = mean_points(edges, 6)
    parts = plain_at(scene, frequency.ravel())[0].reshape(2, 2, 6) @ weight
    expected[:, 20] = parts @ (np.diff(edges) / np.diff(edges).sum())
    assert got.reached.nodes == 0
    assert got.reached.evaluations >= 5 * grid.count
    assert np.abs(got.antenna_temperature_k - expected).max() < 1e-3


@pytest.mark.parametrize("reflection", [True, False])
def test_rippled_beam_is_caught_and_still_right_to_a_millikelvin(reflection: bool) -> None:
    scene = moving_scene(SmoothSky(4), rippled(FREE_DIPOLE, 1e-3, 8.0), 2, reflection=reflection)
    grid = channels()
    got = run(scene, grid)
    expected, _ = plain_channels(scene, grid, points=6)
    assert got.reached.nodes != ENGINE.nodes
    assert np.abs(got.antenna_temperature_k - expected).max() < 1e-3


def rippled(beam: Beam, amplitude: float, period_mhz: float) -> Beam:
    """A beam whose shape wobbles with frequency."""

    def profile(frequency_mhz: np.ndarray, cosine: np.ndarray) -> np.ndarray:
        wobble = amplitude * np.cos(2 * np.pi * frequency_mhz / period_mhz) * cosine[:, None]
        return np.asarray(beam.profiles[0](frequency_mhz, cosine) * (1 + wobble))

    ripple: Profile = profile
    return replace(beam, profiles=(ripple,))


def test_even_sky_with_hardly_a_body_below_comes_back_unchanged() -> None:
    beam = replace(OVER_PLANE, efficiency=1.0)
    scene = moving_scene(EvenSky(16, 1000.0, 2.5), beam, 2, reflection=False)
    no_body = replace(
        scene, pointing=replace(scene.pointing, limb_angle_rad=np.full(2, 1e-3), nadir=-scene.pointing.nadir)
    )
    frequency = np.array([45.0, 60.0, 110.0])
    temperature, response = evaluate(no_body, frequency, quiet)
    hidden = 1 - response
    expected = 1000.0 * (frequency / 70) ** -2.5 * response + rayleigh_jeans_k(230.0, frequency) * hidden
    assert temperature == pytest.approx(expected, rel=1e-12)
    # A disk of a milliradian hides 2.5e-7 of the sphere; at most one pixel of 3,072 lies under it, nearly all clear.
    assert hidden.max() < 2e-4


def test_even_sky_at_the_surface_temperature_returns_it_whatever_hides_and_mirrors() -> None:
    beam = replace(OVER_PLANE, efficiency=1.0)
    scene = moving_scene(EvenSky(16, 230.0, None), beam, 5)
    frequency = np.array([45.0, 60.0, 110.0])
    temperature, _ = evaluate(scene, frequency, quiet)
    # Energy is conserved sample by sample to rounding.
    assert temperature == pytest.approx(np.tile(rayleigh_jeans_k(230.0, frequency), (5, 1)), rel=1e-12)


def test_even_sky_is_seen_through_the_signal_response() -> None:
    scene = moving_scene(EvenSky(16, 1000.0, 2.5), OVER_PLANE, 4)
    frequency = np.array([45.0, 110.0])
    temperature, w = evaluate(scene, frequency, quiet)
    eta = OVER_PLANE.efficiency
    expected = w * 1000.0 * (frequency / 70) ** -2.5
    expected += (eta - w) * rayleigh_jeans_k(230.0, frequency) + (1 - eta) * rayleigh_jeans_k(270.0, frequency)
    assert temperature == pytest.approx(expected, rel=1e-12)


def facing(beam: Beam, nside: int, orientations: int) -> Scene:
    """Boresight straight up, 100 km above the Moon, the pixels of the sky turned at random under it."""
    turns = Rotation.random(orientations, random_state=np.random.default_rng(1)).as_matrix()
    pointing = Pointing(
        axes=scene_axes(beam, turns),
        nadir=np.ascontiguousarray(-turns[:, :, 2]),
        limb_angle_rad=np.full(orientations, LIMB_100_KM_RAD),
        north=np.ascontiguousarray(turns[:, :, 0]),
        pole=np.ascontiguousarray(turns[:, :, 0]),
    )
    surface = config.Surface(temperature_k=230.0, permittivity=2.7, reflection=False)
    return Scene(EvenSky(nside, 1000.0, 2.5), beam, pointing, surface, sphere=True)


def test_response_of_a_two_metre_dipole_100_km_above_the_moon() -> None:
    """0.625, 0.623, 0.618 at 50, 80, 120 MHz, printed to three decimals; a separate integration of the same beam."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    _, response = evaluate(facing(beam, 64, 20), np.array([50.0, 80.0, 120.0]), quiet)
    # Half a unit of the third decimal.
    assert response.mean(axis=0) == pytest.approx([0.625, 0.623, 0.618], abs=5e-4)


def test_response_of_a_short_dipole_in_closed_form() -> None:
    """Hidden share of a horizontal short dipole: (3/8)((1 - c) + (1 - c^3)/3), c the cosine of the limb angle."""
    beam = beam_from(config.ShortDipole(kind="short-dipole", efficiency=1.0, structure_temperature_k=270.0))
    c = np.cos(LIMB_100_KM_RAD)
    expected = 1 - 3 / 8 * ((1 - c) + (1 - c**3) / 3)
    scatter = {}
    for nside in (16, 32, 64):
        _, response = evaluate(facing(beam, nside, 40), np.array([60.0]), quiet)
        scatter[nside] = np.sqrt(np.mean((response - expected) ** 2))
    # The taper is resolved by the grid: the scatter over orientations falls at second order or faster.
    assert scatter[32] < scatter[16] / 4
    # What is left at nside 64 comes from single pixels of odd shape.
    assert scatter[64] < 3e-7


def test_moving_moon_against_a_sum_at_four_and_eight_times_the_resolution() -> None:
    """The same smooth sky on finer grids: the antialiased limb converges at second order or faster."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    frequency = np.array([80.0])
    series = {
        nside: evaluate(moving_scene(SmoothSky(nside), beam, 8), frequency, quiet)[0][:, 0]
        for nside in (16, 32, 64, 128, 256)
    }
    error = {nside: np.abs(series[nside] - series[256]).max() for nside in (16, 32, 64)}
    assert error[32] < error[16] / 4
    assert error[64] < error[32] / 2.5  # what is left there comes from single pixels of odd shape, and scatters
    # 1e-6 to 2e-6 of the sky, 2,000 K here: 3.8 mK at nside 64.
    assert error[64] < 5e-3
    # Eight times the resolution apart, at nside 128 and 1024, would take a gigabyte; 128 against 256 stands for it.
    assert np.abs(series[128] - series[256]).max() < 2e-3


@pytest.mark.parametrize("reflection", [True, False])
def test_moving_moon_against_an_independent_sum_with_a_sharp_limb(reflection: bool) -> None:
    """Plain NumPy at four times the resolution, every pixel in or out, no taper, no ring weights."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    surface = {"reflection": reflection}
    scene = moving_scene(SmoothSky(64), beam, 6, **surface)
    got = evaluate(scene, np.array([80.0]), quiet)
    fine = sharp_sum(replace(scene, sky=SmoothSky(256)), 80.0)
    # The sharp limb of the reference: 1,500 pixels of 786,432 in or out at random, 2,000 K: 0.05 K, w to 2e-5.
    assert np.abs(got[0][:, 0] - fine[0]).max() < 0.15
    assert np.abs(got[1][:, 0] - fine[1]).max() < 6e-5


def sharp_sum(scene: Scene, frequency_mhz: float) -> tuple[np.ndarray, np.ndarray]:
    """Antenna temperature and response; the mirror traced ray by ray from each visible pixel of the Moon's disk."""
    directions = pixel_grid(scene.sky.nside).directions
    brightness = scene.sky.brightness_k(np.array([frequency_mhz]))[:, 0]
    temperature, response = np.empty(len(scene.pointing)), np.empty(len(scene.pointing))
    for s in range(len(scene.pointing)):
        nadir = scene.pointing.nadir[s]
        below = directions @ nadir
        power = scene.beam.profiles[0](
            np.array([frequency_mhz]), np.clip(directions @ scene.pointing.axes[s, 0], -1, 1)
        )[:, 0]
        hidden = below > np.cos(LIMB_100_KM_RAD)
        sky, share = np.sum((power * brightness)[~hidden]), np.sum(power[~hidden])
        if scene.surface.reflection:
            seen = directions[hidden]
            distance = 1 / np.sin(LIMB_100_KM_RAD)
            path = below[hidden] * distance - np.sqrt(1 - distance**2 * (1 - below[hidden] ** 2))
            normal = path[:, None] * seen - distance * nadir
            cosine = -np.einsum("pa,pa->p", seen, normal)
            source = seen + 2 * cosine[:, None] * normal
            weight = power[hidden] * fresnel_reflectivity(cosine, scene.surface.permittivity)
            pixel = hp.vec2pix(scene.sky.nside, *source.T)
            sky, share = sky + np.sum(weight * brightness[pixel]), share + np.sum(weight)
        total = np.sum(power)
        surface_k = rayleigh_jeans_k(scene.surface.temperature_k, frequency_mhz)
        temperature[s] = sky / total + (1 - share / total) * surface_k
        response[s] = share / total
    return temperature, response


def test_delta_function_sky_shows_the_beam() -> None:
    """One bright pixel: T = T_pixel D times its share of the sphere, as exactly as the beam is normalised."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    frequency = np.array([50.0, 100.0])
    errors = {}
    for nside in (16, 64):
        scene = facing(beam, nside, 1)
        directions = pixel_grid(nside).directions
        turn = scene.pointing.axes[0, 0], -scene.pointing.nadir[0]
        towards = np.array([0.3 * turn[0] + 0.9 * turn[1]])
        pixel = int(np.argmax(directions @ towards[0]))
        lit = replace(
            scene, sky=OnePixel(nside, pixel), surface=scene.surface.model_copy(update={"temperature_k": 0.01})
        )
        temperature, response = evaluate(lit, frequency, quiet)
        to_antenna = np.stack([turn[0], np.cross(turn[1], turn[0]), turn[1]])
        weight = pixel_grid(nside).weights[pixel] / len(directions)
        expected = 1e6 * weight * beam.directivity(frequency, directions[pixel][None] @ to_antenna.T)[0]
        dark_k = (1.0 - response[0]) * rayleigh_jeans_k(0.01, frequency)
        errors[nside] = np.abs((temperature[0] - dark_k) / expected - 1).max()
    # With ring weights the sum that normalises a beam this smooth is exact to 1e-8 at nside 64; a dipole of two thirds
    # of a wave is not quite band-limited to the 32 degrees of nside 16.
    assert errors[16] < 1e-6
    assert errors[64] < 1e-8


class OnePixel:
    """A dark sky with one bright pixel."""

    def __init__(self, nside: int, pixel: int) -> None:
        self.nside, self.pixel = nside, pixel

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        brightness = np.zeros((12 * self.nside**2, len(frequency_mhz)))
        brightness[self.pixel] = 1e6
        return brightness


@pytest.mark.parametrize("nside", [32, 64])
def test_series_has_no_jumps_as_the_limb_crosses_pixels(nside: int) -> None:
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    scene = moving_scene(SmoothSky(nside), beam, 1)
    angle = 0.3 + np.arange(120) * pixel_grid(nside).side_rad / 100
    axes = np.repeat(scene.pointing.axes, len(angle), axis=0)
    series, _ = evaluate(replace(scene, pointing=along_an_orbit(axes, angle, np.eye(3))), np.array([60.0]), quiet)
    # A jump stands out of the second difference; a limb in or out by pixels would make some of 40 mK at nside 64.
    assert np.abs(np.diff(series[:, 0], n=2)).max() < 1e-3


def test_eccentric_orbit_sees_each_distance_as_a_circular_one_does() -> None:
    limb_rad = np.linspace(0.4, 1.3, 9)
    scene = moving_scene(SmoothSky(32), OVER_PLANE, 9)
    scene = replace(scene, pointing=replace(scene.pointing, limb_angle_rad=limb_rad))
    frequency = np.array([60.0, 100.0])
    together, _ = evaluate(scene, frequency, quiet)
    alone = [evaluate(scene.part(np.array([row])), frequency, quiet)[0] for row in range(9)]
    # The mirror is interpolated over limb angles to 3e-9, and the smallest disk has room for the taper of all.
    assert len({scene.part(np.array([row])).taper_rad for row in range(9)}) == 1
    assert together == pytest.approx(np.concatenate(alone), rel=1e-8)


def test_even_sky_at_the_temperature_of_a_layered_surface_returns_it() -> None:
    layer = config.Layer(thickness_m=6.0, permittivity=6.0, loss_tangent=0.02)
    beam = replace(OVER_PLANE, efficiency=1.0)
    scene = moving_scene(EvenSky(16, 230.0, None), beam, 4, layer=layer)
    frequency = np.array([45.0, 60.0, 110.0])
    temperature, _ = evaluate(scene, frequency, quiet)
    # Energy is conserved sample by sample to rounding, whatever the reflectivity.
    assert temperature == pytest.approx(np.tile(rayleigh_jeans_k(230.0, frequency), (4, 1)), rel=1e-12)


def test_layered_surface_equals_plain_sum_and_ripples() -> None:
    layer = config.Layer(thickness_m=6.0, permittivity=6.0)
    scene = moving_scene(SmoothSky(16), FREE_DIPOLE, 2, layer=layer)
    frequency = np.linspace(60.0, 90.0, 40)
    temperature, response = evaluate(scene, frequency, quiet)
    plain = plain_at(scene, frequency)
    # The reflectivity's table holds 1e-9 of a reflected sky of some hundred kelvin.
    assert np.abs(temperature - plain[0]).max() < 1e-5
    assert np.abs(response - plain[1]).max() < 1e-8
    # Half a wave in the layer apart, c / (2 d sqrt(2.7)) = 15.2 MHz, the reflection comes back: about two turns.
    turns = np.diff(np.sign(np.diff(response[0] - np.polyval(np.polyfit(frequency, response[0], 2), frequency))))
    assert np.count_nonzero(turns) in (3, 4, 5)


def test_poles_colder_than_the_equator() -> None:
    """Black body of T0 + dT sin^2(latitude) under a short dipole over the pole, against a fine quadrature."""
    beam = beam_from(config.ShortDipole(kind="short-dipole", efficiency=1.0, structure_temperature_k=270.0))
    scene = moving_scene(EvenSky(32, 100.0, None), beam, 1, reflection=False, polar_temperature_k=130.0)
    axis, nadir = np.array([1.0, 0.0, 0.0]), np.array([0.0, 0.0, -1.0])
    pointing = Pointing(axis[None, None], nadir[None], np.array([LIMB_100_KM_RAD]), axis[None], -nadir[None])
    frequency = np.array([60.0])
    temperature, response = evaluate(replace(scene, pointing=pointing), frequency, quiet)
    x, w = np.polynomial.legendre.leggauss(400)
    cosine = np.cos(LIMB_100_KM_RAD) + (1 - np.cos(LIMB_100_KM_RAD)) * (x + 1) / 2
    eta = np.arccos(cosine)
    central = np.arcsin(np.sin(eta) / np.sin(LIMB_100_KM_RAD)) - eta  # angle at the Moon's centre, sine rule
    power = 1 - np.sin(eta) ** 2 / 2  # mean over azimuth
    share = np.sum(w * power * np.cos(central) ** 2) / 2 * (1 - np.cos(LIMB_100_KM_RAD)) / (4 / 3)
    equator, pole = rayleigh_jeans_k(230.0, 60.0), rayleigh_jeans_k(130.0, 60.0)
    expected = (
        response[0, 0] * rayleigh_jeans_k(100.0, 60.0) + (1 - response[0, 0]) * equator + share * (pole - equator)
    )
    # The step at the limb on pixels of nside 32: 3e-6 of 100 K; Gauss-Legendre is exact to 1e-6 at the square root.
    assert temperature[0, 0] == pytest.approx(expected, abs=5e-3)


def test_colder_when_seen_at_longer_waves() -> None:
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    law = {"temperature_exponent": 0.1, "temperature_frequency_mhz": 60.0}
    frequency = np.array([45.0, 60.0, 110.0])
    scene = moving_scene(EvenSky(16, 1e-3, None), beam, 1, reflection=False, **law)
    temperature, response = evaluate(scene, frequency, quiet)
    emitted = temperature - rayleigh_jeans_k(1e-3, frequency) * response
    expected = (1 - response) * rayleigh_jeans_k(230.0 * (frequency / 60.0) ** 0.1, frequency)
    assert emitted == pytest.approx(expected, rel=1e-12)


def test_mountains_hide_what_the_table_says(tmp_path: Path) -> None:
    """An even horizon as a table is that horizon; half a sky of mountains hides between none and all of it."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    level = moving_scene(EvenSky(32, 1000.0, 2.5), beam, 4, reflection=False)
    raised_rad = np.pi / 2 + np.deg2rad(12.0)
    level = replace(level, sphere=False, pointing=replace(level.pointing, limb_angle_rad=np.full(4, raised_rad)))
    flat = replace(level, pointing=replace(level.pointing, limb_angle_rad=np.full(4, np.pi / 2)))
    frequency = np.array([60.0])

    def hidden(elevations: str) -> np.ndarray:
        table = tmp_path / "horizon.csv"
        table.write_text("azimuth_deg,elevation_deg\n" + elevations)
        return 1 - evaluate(replace(flat, horizon=read_horizon(table)), frequency, quiet)[1]

    even = hidden("0,12\n90,12\n180,12\n270,12\n")
    # The look-up holds 1e-7 rad of elevation.
    assert even == pytest.approx(1 - evaluate(level, frequency, quiet)[1], abs=1e-6)
    none = 1 - evaluate(flat, frequency, quiet)[1]
    half = hidden("0,12\n179.9,12\n180,0\n359.9,0\n") + hidden("0,0\n179.9,0\n180,12\n359.9,12\n")
    # Two halves make a whole: the beam's sum over the band between 0 and 12 deg, split in azimuth.
    assert half == pytest.approx(even + none, abs=1e-4)
