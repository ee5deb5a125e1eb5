"""Configuration: what a file may say, what it resolves to, and what does not belong together."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from config_cases import DEMO, demo_with, load_text, only_problem, problems_of, substituted, with_knowledge
from small_campaign import CONFIGS, small_tree

from sims.config import FORWARD_SECTIONS, Channels, Config, Engine, FitConfig, cross_problems
from sims.config_load import load_config, load_fit_config, parse_config
from sims.config_paths import follow, is_number, root, value_at
from sims.errors import InputError
from sims.frequency import channel_grid
from sims.knowledge import Knowledge

# ---------------------------------------------------------------- what is read


def test_the_demo_resolves_to_what_it_says(tmp_path: Path) -> None:
    config = load_text(DEMO, tmp_path)
    assert config.channels.start_mhz == 40.0
    assert config.channels.masks_mhz == ((87.5, 88.5),)
    assert config.observation.start == datetime(2027, 6, 1, tzinfo=UTC)
    assert config.vantage.boresight.kind == "fixed"
    assert len(config.vantage.boresight.directions_deg) == 8
    assert config.vantage.boresight.dwell_s == 4 * 3600
    assert config.turning_points.c.temperature_mk == (-300.0, -10.0)
    leaves = {leaf.path: leaf for leaf in config.knowledge.leaves}
    assert leaves["beam.length_m"].sd == pytest.approx(1e-3, rel=1e-15)  # one rounding of mm to m
    assert leaves["receiver.scale"].distribution == "lognormal"
    assert config.knowledge.index_field is not None
    assert config.knowledge.index_field.correlation_length_deg == 20.0


def test_a_resolved_configuration_can_be_read_back(tmp_path: Path) -> None:
    config = load_text(DEMO, tmp_path)
    assert Config.model_validate_json(config.model_dump_json()) == config


def test_both_names_of_a_quantity_mean_the_same(tmp_path: Path) -> None:
    by_number = demo_with(('start = "40 MHz"', "start_mhz = 40"), ('tilt = "0 deg"', "tilt_deg = 0.0"))
    assert load_text(by_number, tmp_path) == load_text(DEMO, tmp_path)


def test_knowledge_takes_both_names_and_both_ways_of_nesting(tmp_path: Path) -> None:
    texts = [
        with_knowledge(DEMO, "[knowledge]", 'beam.length = { distribution = "normal", sd = "1 mm" }'),
        with_knowledge(DEMO, "[knowledge]", 'beam.length_m = { distribution = "normal", sd = "1 mm" }'),
        with_knowledge(DEMO, "[knowledge]", '"beam.length" = { distribution = "normal", sd = "1 mm" }'),
        with_knowledge(DEMO, "[knowledge.beam.length]", 'distribution = "normal"', 'sd = "1 mm"'),
    ]
    read = [load_text(text, tmp_path).knowledge for text in texts]
    assert read[0].leaves[0].path == "beam.length_m"
    assert all(other == read[0] for other in read)


@pytest.mark.parametrize("lines", [(), ("[knowledge]",), ("[knowledge.map_noise]", 'sd = "100 mK"')])
def test_knowledge_may_be_empty_or_hold_fields_alone(lines: tuple[str, ...], tmp_path: Path) -> None:
    knowledge = load_text(with_knowledge(DEMO, *lines), tmp_path).knowledge
    assert knowledge.leaves == ()
    assert (knowledge.map_noise is None) == ("[knowledge.map_noise]" not in lines)


def test_sections_with_a_neutral_meaning_may_be_left_out(tmp_path: Path) -> None:
    config = load_text(with_knowledge(substituted(DEMO, [("[engine]\nnodes = *\n", "")])), tmp_path)
    assert config.engine == Engine()
    assert config.knowledge == Knowledge()


@pytest.mark.parametrize(
    ("written", "read"),
    [
        ("2027-06-01T00:00:00Z", datetime(2027, 6, 1, tzinfo=UTC)),
        ("2027-06-01T02:00:00+02:00", datetime(2027, 6, 1, tzinfo=UTC)),
        ("2027-06-01T00:00:00", datetime(2027, 6, 1, tzinfo=UTC)),
        ('"2027-06-01 00:00:00"', datetime(2027, 6, 1, tzinfo=UTC)),
    ],
)
def test_times_are_utc_whatever_the_offset(written: str, read: datetime, tmp_path: Path) -> None:
    config = load_text(demo_with(("start = 2027-06-01T00:00:00Z", f"start = {written}")), tmp_path)
    assert config.observation.start == read
    assert config.observation.start.utcoffset() == UTC.utcoffset(None)


@pytest.mark.parametrize(
    "changes",
    [
        [("start = 2027-", "start = 1430-")],  # 584.6 years of int64 nanoseconds earlier than 2014
        [("start = 2027-", "start = 2099-12-31T23:59:59Z # ")],
        [('step = "120 s"', 'step = "1e12 s"')],
        [("count = 22300", "count = 9999999"), ('step = "120 s"', 'step = "1 h"')],
    ],
)
def test_samples_lie_where_the_ephemerides_hold(changes: list[tuple[str, str]], tmp_path: Path) -> None:
    line = only_problem(demo_with(*changes), tmp_path)
    assert line.startswith("observation: start, ")
    assert "1973-01-02 to 2100-01-01" in line


def test_files_are_found_beside_the_configuration(tmp_path: Path) -> None:
    (tmp_path / "trough.csv").write_text("frequency_mhz,temperature_k\n")
    start = DEMO.index("[signal]")
    text = DEMO[:start] + '[signal]\nkind = "table"\nfile = "trough.csv"\n\n' + DEMO[DEMO.index("[bins]") :]
    config = load_text(text, tmp_path)
    assert config.signal.kind == "table"
    assert config.signal.file == tmp_path / "trough.csv"


def test_fit_needs_its_own_sections_only(tmp_path: Path) -> None:
    path = tmp_path / "fit.toml"
    run = DEMO[DEMO.index("[run]") : DEMO.index("[channels]")]
    reduction = DEMO[DEMO.index("[foreground]") : DEMO.index("[engine]")]
    path.write_text(run + reduction)
    config = load_fit_config(path)
    assert type(config) is FitConfig
    with pytest.raises(InputError) as caught:
        load_config(path)
    missing = {problem.split("[")[1].split("]")[0] for problem in caught.value.problems}
    assert missing == set(FORWARD_SECTIONS) - {"engine", "correction", "knowledge"}
    path.write_text(DEMO)
    assert type(load_fit_config(path)) is Config
    path.write_text(run + reduction + "[surface]\nreflection = true\n")
    with pytest.raises(InputError, match=r"surface\.temperature: missing"):
        load_fit_config(path)


# ---------------------------------------------------------------- what is not


def test_all_problems_are_told_at_once(tmp_path: Path) -> None:
    text = demo_with(
        ('start = "40 MHz"', 'start = "40 K"'),
        ("nside = 64", "nside = 63"),
        ('tilt = "0 deg"', 'tiltt = "0 deg"'),
        ("efficiency = 0.97", "efficiency = 97"),
        ('by = "pointing"', 'by = "sidereal-time"'),
        ("receiver.offset", "receiver.ofset"),
        ("[engine]\nnodes = ", "[engin]\nnodes = "),
    )
    told = {problem.split(": ")[0] for problem in problems_of(text, tmp_path)}
    assert told >= {"channels.start", "sky.nside", "beam.tiltt", "beam.efficiency", "engin", "knowledge.receiver.ofset"}
    assert any(problem.startswith('bins.by = "sidereal-time" needs') for problem in problems_of(text, tmp_path))


def test_an_unknown_kind_does_not_drag_knowledge_of_its_keys_along(tmp_path: Path) -> None:
    line = only_problem(demo_with(('kind = "dipole"', 'kind = "horn"')), tmp_path)
    assert line == 'beam.kind: got \'horn\'; allowed are "short-dipole", "dipole", "gaussian", "file"'


def test_a_quantity_given_by_both_names_is_refused(tmp_path: Path) -> None:
    line = only_problem(demo_with(('start = "40 MHz"', 'start_mhz = 40\nstart = "40 MHz"')), tmp_path)
    assert line == "channels.start: given twice, as start and as start_mhz; keep one"


def test_long_lists_are_not_repeated_in_the_message(tmp_path: Path) -> None:
    line = only_problem(demo_with(('["70 deg", "-50 deg"]', '["70 deg", "-50 K"]')), tmp_path)
    assert line.startswith("vantage.boresight.directions: item 0: item 1: wrong unit (K)")
    assert len(line) < 300


@pytest.mark.parametrize(
    ("entry", "problem"),
    [
        ('sky.bright = { distribution = "normal", sd = 1.0 }', "sky.bright: names no quantity that can be uncertain"),
        ('signal.c.temperature = { distribution = "normal", sd = "1 mK" }', "signal.c.temperature: names no quantity"),
        ('channels.start = { distribution = "normal", sd = "1 MHz" }', "channels.start: names no quantity"),
        ('observation.duty_cycle = { distribution = "normal", sd = 0.1 }', "duty_cycle: names no quantity"),
        ('sky.valid_to = { distribution = "normal", sd = "1 MHz" }', "sky.valid_to: names no quantity"),
        ('beam.kind = { distribution = "normal", sd = 1.0 }', "beam.kind: names no real number"),
        ('sky.nside = { distribution = "normal", sd = 1.0 }', "sky.nside: names no real number"),
        ('beam = { distribution = "normal", sd = 1.0 }', "beam: names no real number"),
        ("sky.scale = 0.05", 'sky.scale: write { distribution = "normal"'),
        ("sky.scale = { sd = 0.05 }", 'sky.scale: write { distribution = "normal"'),
        ('sky.scale = { distribution = "normal" }', "sky.scale: normal needs sd"),
        ('sky.scale = { distribution = "normal", sd = true }', "sky.scale.sd: should be a valid number (got True)"),
        ('sky.scale = { distribution = "normal", sd = nan }', "sky.scale.sd: should be a finite number"),
        ('sky.scale = { distribution = "normal", sd = -1.0 }', "sky.scale.sd: should be greater than 0"),
        ('sky.scale = { distribution = "gamma", sd = 1.0 }', "sky.scale.distribution: should be 'normal', 'uniform'"),
        ('sky.scale = { distribution = "normal", sd = 1.0, wide = 2 }', "sky.scale.wide: unknown key; allowed are"),
        ('sky.scale = { distribution = "normal", sd = 1.0, path = "x" }', "sky.scale.path: unknown key"),
        ('sky.zero_level = { distribution = "normal", sd = 3.0 }', "sky.zero_level.sd: a quantity needs its unit"),
        ('sky.zero_level = { distribution = "normal", sd = "3 m" }', "sky.zero_level.sd: wrong unit (m)"),
        ('sky.zero_level = { distribution = "lognormal", sd = 0.1 }', "lognormal needs a median above zero (got 0.0)"),
        (
            'beam.height = { distribution = "normal", sd = "1 cm" }',
            "beam.height_m: the configuration gives it no value",
        ),
        (
            'beam.length = { distribution = "normal", sd = "1 mm" }\nbeam.length_m = { distribution = "normal", sd = "1 mm" }',
            "a leaf is named twice",
        ),
    ],
)
def test_knowledge_of_nothing_or_half_of_something_is_refused(entry: str, problem: str, tmp_path: Path) -> None:
    assert problem in only_problem(with_knowledge(DEMO, "[knowledge]", entry), tmp_path)


# ---------------------------------------------------------------- what does not belong together


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ([('valid_from = "30 MHz"', 'valid_from = "50 MHz"')], ("sky.valid_from", "channels.start", "50.0")),
        ([('valid_to = "500 MHz"', 'valid_to = "20 MHz"')], ("sky: valid_to (20.0 MHz)", "above valid_from")),
        ([('by = "pointing"\ncount = 8', 'by = "pointing"\ncount = 7')], ("bins.count must be 8", "got 7")),
        ([('by = "pointing"\ncount = 8', 'by = "all"\ncount = 8')], ("bins.count must be 1",)),
        ([('by = "pointing"', 'by = "sidereal-time"')], ('vantage.kind = "ground"', 'got "lunar-orbit"')),
        (
            [('a = { frequency = "17 MHz", temperature = "-42 mK" }\nb', 'a = { frequency = "41 MHz", temperature = "-42 mK" }\nb')],
            ("signal.a to signal.e, 41.0", "must enclose"),
        ),
        (
            [('a = { frequency = "17 MHz", temperature = "-42 mK" }\ne = { frequency = "180 MHz"',
              'a = { frequency = "17 MHz", temperature = "-42 mK" }\ne = { frequency = "119 MHz"'),
             ('["85 MHz", "120 MHz"]', '["85 MHz", "118 MHz"]')],
            ("turning_points.a to turning_points.e", "119.0", "must enclose"),
        ),
        ([("terms = *", "terms = 20"), ("count = 256", "count = 20")], ("foreground.terms", "more channels than the 18")),
        ([('["40 MHz", "58 MHz"]', '["58 MHz", "40 MHz"]')], ("turning_points.b", "must rise", "[58.0, 40.0]")),
        (
            [('["40 MHz", "58 MHz"]', '["80 MHz", "90 MHz"]'), ('["85 MHz", "120 MHz"]', '["60 MHz", "75 MHz"]')],
            ("no room for a < b < c < d < e",),
        ),
        ([('["-300 mK", "-10 mK"]', '["70 mK", "90 mK"]')], ("no room for c below b and d",)),
        ([("walkers = *", "walkers = 161")], ("turning_points: walkers", "multiple of 4", "161")),
        ([("nodes = *", "nodes = 60\nnodes_cap = 50")], ("nodes_cap (50)", "nodes (60)")),
        ([('length = "1.6 m"', 'length = "1.6 m"\nwire = "vertical"\nheight = "70 cm"')], ("beam.height, 0.7 m",)),
    ],
)  # fmt: skip
def test_settings_that_clash_are_refused_with_both_paths(
    changes: list[tuple[str, str]], words: tuple[str, ...], tmp_path: Path
) -> None:
    line = only_problem(demo_with(*changes), tmp_path)
    for word in words:
        assert word in line


def test_the_earth_cannot_be_hidden_from_the_ground(tmp_path: Path) -> None:
    start, end = DEMO.index("[vantage]"), DEMO.index("[vantage.boresight]")
    ground = '[vantage]\nkind = "ground"\nlatitude = "-30 deg"\nlongitude = "20 deg"\nheight = "1 km"\n\n'
    text = DEMO[:start] + ground + DEMO[end:]
    assert 'observation.require: "earth-hidden"' in only_problem(text, tmp_path)
    assert load_text(text.replace('["earth-hidden", "sun-hidden"]', "[]"), tmp_path).vantage.kind == "ground"


def test_turning_points_that_only_just_leave_room_pass(tmp_path: Path) -> None:
    text = demo_with(
        ('["40 MHz", "58 MHz"]', '["60 MHz", "70 MHz"]'),
        ('["55 MHz", "95 MHz"]', '["50 MHz", "62 MHz"]'),
        ('["85 MHz", "120 MHz"]', '["55 MHz", "61 MHz"]'),
    )
    assert load_text(text, tmp_path).turning_points.d.frequency_mhz == (55.0, 61.0)


@pytest.mark.parametrize(("start", "stop"), [(50.0, 52.0), (50.1, 50.2), (30.0, 117.9), (118.4, 200.0)])
def test_channels_left_are_counted_as_the_grid_masks_them(start: float, stop: float, tmp_path: Path) -> None:
    config = load_text(DEMO, tmp_path)
    channels = Channels(start_mhz=40.0, stop_mhz=120.0, count=80, masks_mhz=((start, stop),))
    left = int(np.sum(~channel_grid(channels).masked))
    terms_that_fit = config.foreground.model_copy(update={"terms": left - 1})
    one_too_many = config.foreground.model_copy(update={"terms": left})
    assert cross_problems({"channels": channels, "foreground": terms_that_fit}) == []
    assert f"the {left} that" in cross_problems({"channels": channels, "foreground": one_too_many})[0]


def test_absent_sections_are_not_judged() -> None:
    assert cross_problems({}) == []
    assert cross_problems({"channels": None}) == []


# ---------------------------------------------------------------- finding one's way


def test_paths_lead_through_tables_kinds_and_lists(tmp_path: Path) -> None:
    config = load_text(DEMO, tmp_path)
    top = root(Config, {"beam": {"kind": "dipole"}, "vantage": {"kind": "ground", "boresight": {"kind": "fixed"}}})
    place = follow(top, "vantage.boresight.directions.1.0")
    assert place is not None
    assert place.path == "vantage.boresight.directions_deg.1.0"
    assert place.unit is not None
    assert place.unit.unit == "deg"
    assert is_number(place)
    assert value_at(config, place.path) == 115.0
    height = follow(top, "beam.height")
    assert height is not None
    assert height.path == "beam.height_m"
    assert is_number(height)
    for path in ("", "beam", "beam.kind", "beam.wire"):
        found = follow(top, path)
        assert found is None or not is_number(found)
    for path in ("beam.width", "vantage.boresight.directions.1.2", "vantage.altitude", "beam.height.x", "nowhere"):
        assert follow(top, path) is None


def test_a_table_in_memory_is_read_like_a_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"^run: section \[run\] is missing"):
        parse_config({}, tmp_path)


@pytest.mark.parametrize(
    ("source", "line"),
    [
        ({"format": "nec", "files": ["a"], "gain": 1}, "beam.source.gain: unknown key; allowed are format, files"),
        ({"format": "pdf"}, 'beam.source.format: got \'pdf\'; allowed are "nec", "table", "healpix", "netcdf"'),
        ({"files": ["a"]}, "beam.source.format: got 'nothing'; allowed are"),
    ],
)
def test_a_wrong_source_of_a_beam_is_told_by_its_path(source: dict[str, Any], line: str) -> None:
    """Tables that are told apart by another key than `kind`."""
    tree = small_tree(beam={"kind": "file", "source": source, "quantity": "gain", "missing_power": "efficiency"})
    tree.pop("knowledge")
    with pytest.raises(InputError) as error:
        parse_config(tree, CONFIGS)
    assert any(problem.startswith(line) for problem in error.value.problems), error.value.problems
