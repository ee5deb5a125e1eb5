"""Settings that would do nothing are refused, and nothing that does something is."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from config_cases import DEMO, demo_with, load_text, only_problem, small_with, with_knowledge

from sims.campaign import signal_to_inject_k, simulate
from sims.config import Channels, Config
from sims.draws import draw, leaf_value, with_leaves
from sims.frequency import channel_grid
from sims.receiver import gain, received_k
from sims.sky import sky_from
from sims.trough import flattened_gaussian_k
from sims.vantage import survey_geometry


@pytest.mark.parametrize(("start", "stop"), [(20.0, 40.0), (120.0, 121.0), (200.0, 300.0)])
def test_a_mask_that_touches_no_channel_is_refused(start: float, stop: float, tmp_path: Path) -> None:
    channels = Channels(start_mhz=40.0, stop_mhz=120.0, count=80, masks_mhz=((87.5, 88.5), (start, stop)))
    assert channel_grid(channels).masked.sum() == 2  # none but the first mask's
    text = demo_with(('"88.5 MHz"]', f'"88.5 MHz"], ["{start} MHz", "{stop} MHz"]'))
    line = only_problem(text, tmp_path)
    assert line.startswith(f"channels.masks.1, {start:g} to {stop:g} MHz, touches no channel")
    assert "channels.start to channels.stop, 40 to 120 MHz" in line


BAND = ('start = "40 MHz"', 'stop = "120 MHz"')


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        # The band above C: B does not reach it. Below C: D does not.
        ([(BAND[0], 'start = "72 MHz"')], ("signal.c, 71 MHz", "stop, 72 to 120 MHz: signal.b")),
        ([(BAND[1], 'stop = "70 MHz"'), ('["87.5 MHz", "88.5 MHz"]', "")], ("signal.c, 71 MHz", "70 MHz: signal.d")),
    ],
)  # fmt: skip
def test_a_trough_with_its_bottom_outside_the_band_is_refused(
    changes: list[tuple[str, str]], words: tuple[str, ...], tmp_path: Path
) -> None:
    line = only_problem(demo_with(*changes), tmp_path)
    for word in words:
        assert word in line


@pytest.mark.parametrize(
    ("b", "c", "d", "points"),
    [
        ((20.0, 30.0), (25.0, 40.0), (85.0, 119.0), "c"),
        ((40.0, 58.0), (120.0, 150.0), (125.0, 170.0), "c"),
        ((121.0, 130.0), (60.0, 150.0), (125.0, 170.0), "b"),
        ((20.0, 30.0), (25.0, 60.0), (32.0, 39.0), "d"),
    ],
)
def test_turning_points_that_cannot_reach_the_band_are_refused(
    b: tuple[float, float], c: tuple[float, float], d: tuple[float, float], points: str, tmp_path: Path
) -> None:
    def span(low: float, high: float) -> str:
        return f'["{low} MHz", "{high} MHz"]'

    changes = [
        ('["40 MHz", "58 MHz"]', span(*b)),
        ('["55 MHz", "95 MHz"]', span(*c)),
        ('["85 MHz", "120 MHz"]', span(*d)),
    ]
    line = only_problem(demo_with(*changes), tmp_path)
    low, high = {"b": b, "c": c, "d": d}[points]
    assert line.startswith(f"turning_points.{points}.frequency, {low:g} to {high:g} MHz")
    assert "channels.start to channels.stop, 40 to 120 MHz" in line


def test_a_point_beside_the_band_whose_flank_reaches_into_it_is_taken(tmp_path: Path) -> None:
    """B below the band and D above it shape what lies within, as the trough itself says."""
    text = demo_with(
        (BAND[0], 'start = "50 MHz"'),
        (BAND[1], 'stop = "95 MHz"'),
        ('["40 MHz", "58 MHz"]', '["40 MHz", "49 MHz"]'),
        ('["85 MHz", "120 MHz"]', '["96 MHz", "120 MHz"]'),
    )
    config = load_text(text, tmp_path)
    grid = channel_grid(config.channels)
    trough_k = signal_to_inject_k(config.signal, grid)
    for name in ("b", "d"):
        point = getattr(config.signal, name)
        moved = point.model_copy(update={"temperature_mk": point.temperature_mk + 10.0})
        other_k = signal_to_inject_k(config.signal.model_copy(update={name: moved}), grid)
        assert np.abs(other_k - trough_k).max() > 5e-3  # most of the 10 mK, the point being just outside


@pytest.mark.parametrize(("centre", "taken"), [(78.0, True), (25.0, True), (19.0, False), (141.0, False)])
@pytest.mark.parametrize("flattening", [0.0, 7.0])
def test_a_flattened_trough_far_from_the_band_is_refused(
    centre: float, taken: bool, flattening: float, tmp_path: Path
) -> None:
    start = DEMO.index("[signal]")
    signal = (
        f'[signal]\nkind = "flattened-gaussian"\ndepth = "200 mK"\ncentre = "{centre} MHz"\nwidth = "10 MHz"\n'
        f"flattening = {flattening}\n\n"
    )
    text = DEMO[:start] + signal + DEMO[DEMO.index("[bins]") :]
    if taken:
        assert load_text(text, tmp_path).signal.kind == "flattened-gaussian"
        return
    line = only_problem(text, tmp_path)
    assert line.startswith(f"signal.centre, {centre:g} MHz, lies more than two widths (signal.width, 10 MHz) outside")
    depth = flattened_gaussian_k(np.linspace(40.0, 120.0, 801), 0.2, centre, 10.0, flattening)
    assert np.abs(depth).max() < 2e-5 * 0.2  # 2^-16 of a Gaussian at two widths, less of a flatter one


RIPPLE_PERIOD = 'receiver.ripple_period = { distribution = "normal", sd = "1 MHz" }'
RIPPLE_FRACTION = 'receiver.ripple_fraction = { distribution = "normal", sd = 1e-5 }'
NOISE = 'receiver.temperature = { distribution = "normal", sd = "5 K" }'


@pytest.mark.parametrize(
    ("changes", "entries", "words"),
    [
        ([], [RIPPLE_PERIOD], ("receiver.ripple_period_mhz: moves nothing", "receiver.ripple_fraction = 0")),
        ([], ['receiver.ripple_phase = { distribution = "normal", sd = "9 deg" }'], ("receiver.ripple_phase_deg",)),
        ([], ['beam.ripple_phase = { distribution = "normal", sd = "9 deg" }'], ("beam.ripple_fraction = 0",)),
        ([], ['beam.tilt_azimuth = { distribution = "normal", sd = "9 deg" }'], ("beam.tilt_deg = 0",)),
        (
            [("efficiency = 0.97", "efficiency = 1.0")],
            ['beam.structure_temperature = { distribution = "normal", sd = "9 K" }'],
            ("beam.structure_temperature_k: moves nothing", "beam.efficiency = 1"),
        ),
        (
            [("reflection = true", "reflection = false")],
            ['surface.permittivity = { distribution = "normal", sd = 0.1 }'],
            ("surface.permittivity: moves nothing", "surface.reflection = false"),
        ),
        (
            [('length = "1.6 m"', 'length = "1.6 m"\nwire = "vertical"')],
            ['beam.turn = { distribution = "normal", sd = "1 deg" }'],
            ("beam.turn_deg: moves nothing", "round about its axis"),
        ),
        (
            [('kind = "dipole"\nlength = "1.6 m"', 'kind = "short-dipole" #')],
            ['beam.dimension_scale = { distribution = "lognormal", sd = 0.01 }'],
            ("beam.dimension_scale: moves nothing", "short-dipole"),
        ),
        (
            [('truth = "drawn"', 'truth = "nominal"')],
            [NOISE],
            ("receiver.temperature_k: moves nothing", 'run.truth = "nominal"', 'allowed with run.truth = "drawn"'),
        ),
        (
            [],
            [RIPPLE_PERIOD, 'beam.tilt = { distribution = "normal", sd = "1 deg" }', "[[knowledge.correlated]]",
             'paths = ["beam.tilt", "receiver.ripple_period"]', "correlation = [[1.0, 0.5], [0.5, 1.0]]"],
            ("receiver.ripple_period_mhz: moves nothing", "knowledge.correlated.0 names it too"),
        ),
    ],
)  # fmt: skip
def test_knowledge_that_moves_nothing_is_refused(
    changes: list[tuple[str, str]], entries: list[str], words: tuple[str, ...], tmp_path: Path
) -> None:
    line = only_problem(with_knowledge(demo_with(*changes), "[knowledge]", *entries), tmp_path)
    assert line.startswith("knowledge.")
    for word in words:
        assert word in line


@pytest.mark.parametrize(
    ("changes", "entries"),
    [
        ([], [RIPPLE_PERIOD, RIPPLE_FRACTION]),
        ([("ripple_fraction = 0.0", "ripple_fraction = 1e-4")], [RIPPLE_PERIOD]),
        ([], ['beam.tilt_azimuth = { distribution = "uniform", lower = "0 deg", upper = "360 deg" }',
              'beam.tilt = { distribution = "normal", sd = "1 deg" }']),
        ([], [NOISE]),
        ([], ['surface.permittivity = { distribution = "normal", sd = 0.1 }',
              'beam.turn = { distribution = "normal", sd = "1 deg" }']),
    ],
)  # fmt: skip
def test_knowledge_that_moves_something_is_taken(
    changes: list[tuple[str, str]], entries: list[str], tmp_path: Path
) -> None:
    config = load_text(with_knowledge(demo_with(*changes), "[knowledge]", *entries), tmp_path)
    assert len(config.knowledge.leaves) == len(entries)
    # A draw is a configuration like any other: what its leaves come out at puts none of them to sleep.
    assert draw(config, "any", 0).config.knowledge == config.knowledge


A_FEW = (("count = 250", "count = 60"), ('["earth-hidden", "sun-hidden"]', '["sun-hidden"]'))
VERTICAL = ('length = "1.6 m"', 'length = "1.6 m"\nwire = "vertical"')
SHORT = ('kind = "dipole"\nlength = "1.6 m"', 'kind = "short-dipole" #')
ROUND = (
    'kind = "dipole"\nlength = "1.6 m"',
    'kind = "gaussian"\nwidth = "60 deg"\nfrequency = "70 MHz"\nwidth_exponent = 0.0 #',
)
BACKGROUND = (
    "[beam]\n",
    '[sky.background]\ntemperature = "0 K"\nfrequency = "100 MHz"\nindex = 2.6\nin_maps = false\n\n[beam]\n',
)
WARMER = ("permittivity = 2.7", 'temperature_frequency = "70 MHz"\npermittivity = 2.7')


@pytest.mark.parametrize(
    ("path", "sd", "change", "step"),
    [
        ("receiver.ripple_period_mhz", '"1 MHz"', None, 5.0),
        ("receiver.ripple_phase_deg", '"1 deg"', None, 50.0),
        ("beam.ripple_period_mhz", '"1 MHz"', None, 5.0),
        ("beam.ripple_phase_deg", '"1 deg"', None, 50.0),
        ("beam.tilt_azimuth_deg", '"1 deg"', None, 50.0),
        ("beam.turn_deg", '"1 deg"', VERTICAL, 50.0),
        ("beam.turn_deg", '"1 deg"', ROUND, 50.0),
        ("beam.dimension_scale", "0.1", SHORT, 0.1),
        ("beam.dimension_scale", "0.1", ROUND, 0.1),
        ("beam.frequency_mhz", '"1 MHz"', ROUND, 5.0),
        ("beam.structure_temperature_k", '"1 K"', ("efficiency = 0.97", "efficiency = 1.0"), 50.0),
        ("surface.permittivity", "0.1", ("reflection = true", "reflection = false"), 0.5),
        ("surface.temperature_frequency_mhz", '"1 MHz"', WARMER, 5.0),
        ("sky.background.index", "0.1", BACKGROUND, 0.1),
        ("sky.background.frequency_mhz", '"1 MHz"', BACKGROUND, 5.0),
    ],
)
def test_what_is_refused_as_moving_nothing_moves_no_spectrum(
    path: str, sd: str, change: tuple[str, str] | None, step: float, tmp_path: Path
) -> None:
    """The whole chain with the number and with another one: the same but for rounding."""
    text = small_with(*A_FEW, *([] if change is None else [change]))
    entry = f'{path} = {{ distribution = "normal", sd = {sd} }}'
    assert "moves nothing" in only_problem(with_knowledge(text, "[knowledge]", entry), tmp_path)
    config = load_text(with_knowledge(text), tmp_path)
    other = with_leaves(config, {path: leaf_value(config, path) + step})
    # Rounding of sums over 768 pixels.
    np.testing.assert_allclose(reported(other), reported(config), rtol=1e-12)


@pytest.mark.parametrize(
    ("path", "change", "step"),
    [
        ("receiver.ripple_period_mhz", ("ripple_fraction = 0.0", "ripple_fraction = 1e-4"), 5.0),
        ("beam.tilt_azimuth_deg", ('tilt = "0 deg"', 'tilt = "5 deg"'), 50.0),
        ("beam.turn_deg", None, 50.0),
        ("beam.structure_temperature_k", None, 50.0),
        ("surface.permittivity", None, 0.5),
    ],
)
def test_the_same_numbers_move_the_spectra_where_they_are_taken(
    path: str, change: tuple[str, str] | None, step: float, tmp_path: Path
) -> None:
    config = load_text(with_knowledge(small_with(*A_FEW, *([] if change is None else [change]))), tmp_path)
    other = with_leaves(config, {path: leaf_value(config, path) + step})
    assert np.abs(reported(other)[0] - reported(config)[0]).max() > 0.01  # K


def reported(config: Config) -> np.ndarray:
    """What the receiver reports of every sample, K, and the signal response, without noise."""
    grid = channel_grid(config.channels)
    geometry = survey_geometry(config.vantage, config.observation)
    average = simulate(config, sky_from(config.sky), geometry, grid, lambda samples: None)
    channels = (grid.centre_mhz, grid.width_mhz)
    received = received_k(average.antenna_temperature_k, *channels, config.receiver)
    return np.stack([received, average.signal_response * gain(*channels, config.receiver)])
