"""The engine against plain sums, closed forms and conservation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from engine_cases import LIMB_100_KM_RAD, EvenSky, KinkedSky, SmoothSky, moving_scene, plain_at, plain_channels
from scipy.spatial.transform import Rotation

from sims import config
from sims.beam import Beam, Profile, beam_from
from sims.constants import rayleigh_jeans_k
from sims.frequency import channel_grid, mean_points
from sims.pixel_sum import Pointing
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


def test_even_sky_without_a_body_below_comes_back_unchanged() -> None:
    beam = replace(OVER_PLANE, efficiency=1.0)
    scene = moving_scene(EvenSky(16, 1000.0, 2.5), beam, 2, reflection=False)
    no_body = replace(
        scene, pointing=replace(scene.pointing, limb_angle_rad=np.full(2, 1e-3), nadir=-scene.pointing.nadir)
    )
    frequency = np.array([45.0, 60.0, 110.0])
    temperature, response = evaluate(no_body, frequency, quiet)
    # One pixel's corner may be hidden by a disk of a milliradian; none is: the disk lies within the ramp of no centre.
    hidden = 1 - response
    assert np.abs(temperature - (1000.0 * (frequency / 70) ** -2.5 * response + 230.0 * hidden)).max() < 3e-3
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
        scene_axes(beam, turns), np.ascontiguousarray(-turns[:, :, 2]), np.full(orientations, LIMB_100_KM_RAD)
    )
    surface = config.Surface(temperature_k=230.0, permittivity=2.7, reflection=False)
    return Scene(EvenSky(nside, 1000.0, 2.5), beam, pointing, surface, sphere=True)


def test_response_of_a_two_metre_dipole_100_km_above_the_moon() -> None:
    """0.625, 0.623, 0.618 at 50, 80, 120 MHz, printed to three decimals; a separate integration of the same beam."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    _, response = evaluate(facing(beam, 64, 20), np.array([50.0, 80.0, 120.0]), quiet)
    # Half a unit of the third decimal, and 4e-5 of one orientation of the pixels.
    assert response.mean(axis=0) == pytest.approx([0.625, 0.623, 0.618], abs=5.4e-4)


def test_response_of_a_short_dipole_in_closed_form() -> None:
    """Hidden share of a horizontal short dipole: (3/8)((1 - c) + (1 - c^3)/3), c the cosine of the limb angle."""
    beam = beam_from(config.ShortDipole(kind="short-dipole", efficiency=1.0, structure_temperature_k=270.0))
    c = np.cos(LIMB_100_KM_RAD)
    expected = 1 - 3 / 8 * ((1 - c) + (1 - c**3) / 3)
    scatter = {}
    for nside in (8, 64):
        _, response = evaluate(facing(beam, nside, 100), np.array([60.0]), quiet)
        scatter[nside] = np.sqrt(np.mean((response - expected) ** 2))
    # A ramp of one pixel on pixels of many shapes: the scatter over orientations falls as nside^-1.7.
    assert scatter[64] < scatter[8] / 8**1.5
    assert scatter[64] < 2e-5


def test_delta_function_sky_shows_the_beam() -> None:
    """One bright pixel: T = T_pixel D / (number of pixels), to the error of the pixel sum that normalises the beam."""
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    frequency = np.array([50.0, 100.0])
    errors = {}
    for nside in (16, 64):
        scene = facing(beam, nside, 1)
        directions = scene.sky.directions
        turn = scene.pointing.axes[0, 0], -scene.pointing.nadir[0]
        towards = np.array([0.3 * turn[0] + 0.9 * turn[1]])
        pixel = int(np.argmax(directions @ towards[0]))
        lit = replace(
            scene, sky=OnePixel(nside, pixel), surface=scene.surface.model_copy(update={"temperature_k": 0.01})
        )
        temperature, _ = evaluate(lit, frequency, quiet)
        to_antenna = np.stack([turn[0], np.cross(turn[1], turn[0]), turn[1]])
        expected = 1e6 * beam.directivity(frequency, directions[pixel][None] @ to_antenna.T)[0] / len(directions)
        dark_k = 0.4 * rayleigh_jeans_k(0.01, frequency)
        errors[nside] = np.abs((temperature[0] - dark_k) / expected - 1).max()
    # HEALPix sums of a smooth function err as the pixel's solid angle: 16 times less at four times the resolution.
    assert errors[64] < 2e-5
    assert errors[64] < errors[16] / 8


class OnePixel:
    """A dark sky with one bright pixel."""

    def __init__(self, nside: int, pixel: int) -> None:
        self.nside, self.pixel = nside, pixel
        self.directions = EvenSky(nside, 1.0, None).directions

    def brightness_k(self, frequency_mhz: np.ndarray) -> np.ndarray:
        brightness = np.zeros((len(self.directions), len(frequency_mhz)))
        brightness[self.pixel] = 1e6
        return brightness


def test_series_has_no_jumps_as_the_limb_crosses_pixels() -> None:
    beam = replace(FREE_DIPOLE, efficiency=1.0)
    scene = moving_scene(SmoothSky(16), beam, 2)
    pixel = np.sqrt(4 * np.pi / (12 * 16**2))
    angle = np.arange(60) * pixel / 100
    nadir = np.stack([np.cos(angle), np.sin(angle), np.zeros(60)], axis=1)
    axes = np.repeat(scene.pointing.axes[:1], 60, axis=0)
    series, _ = evaluate(
        replace(scene, pointing=Pointing(axes, nadir, np.full(60, LIMB_100_KM_RAD))), np.array([60.0]), quiet
    )
    second = np.abs(np.diff(series[:, 0], n=2))
    # A pixel of 3,072 weighs 1 K here; an aliased limb would jump by that, the ramp bends by a hundredth of it.
    assert second.max() < 0.03
