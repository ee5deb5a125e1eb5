"""The timeline: windows of a campaign against counting and closed forms, its page, tables, picture and command."""

from __future__ import annotations

import csv
import io
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from config_cases import DEMO, demo_with
from matplotlib.figure import Figure
from typer.testing import CliRunner

from reduce.cli import EXIT_INPUT, app
from reduce.report.style import look, png
from reduce.report.timeline_page import timeline_page, turns_csv, windows_csv
from reduce.report.timeline_plot import timeline_figure
from reduce.timeline import MOST_SAMPLES, Timeline, fine_observation, timeline
from sims.config import Config
from sims.config_load import load_config
from sims.errors import InputError
from sims.orbit import period_s
from sims.vantage import full_geometry

FILES = ["timeline.csv", "timeline.png"]
UP = '[vantage.boresight]\nkind = "vertical"\n\n'
PLACES = {
    "ground": '[vantage]\nkind = "ground"\nlatitude = "0 deg"\nlongitude = "30 deg"\nheight = "0 m"\n\n',
    "far side": '[vantage]\nkind = "lunar-surface"\nlatitude = "5 deg"\nlongitude = "178 deg"\nheight = "0 m"\n\n',
}


def orbit_text(count: int, step: str = "120 s", **changes: str) -> str:
    """The demo, its orbit without oblateness, shortened."""
    pairs = [("count = 22300", f"count = {count}"), ('step = "120 s"', f'step = "{step}"')]
    pairs.append(('phase = "0 deg"', 'phase = "0 deg"\noblateness = false'))
    return demo_with(*pairs, *changes.items())


def place_text(place: str, count: int, step: str) -> str:
    """The demo, from a place on the ground."""
    head, tail = DEMO[: DEMO.index("[vantage]")], DEMO[DEMO.index("[surface]") :]
    text = head + PLACES[place] + UP + tail
    for old, new in (
        ("count = 22300", f"count = {count}"),
        ('step = "120 s"', f'step = "{step}"'),
        ('require = ["earth-hidden", "sun-hidden"]', "require = []"),
        ('by = "pointing"\ncount = 8', 'by = "all"\ncount = 1'),
    ):
        assert old in text
        text = text.replace(old, new)
    return text


def written(text: str, folder: Path) -> Path:
    path = folder / "campaign.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def month(tmp_path_factory: pytest.TempPathFactory) -> tuple[Timeline, Config]:
    """The demo's own month."""
    config = load_config(written(orbit_text(22_300), tmp_path_factory.mktemp("month")))
    return timeline(config), config


@pytest.fixture(scope="module")
def hours(tmp_path_factory: pytest.TempPathFactory) -> tuple[Timeline, Config]:
    """Seventeen hours of the demo."""
    config = load_config(written(orbit_text(501), tmp_path_factory.mktemp("hours")))
    return timeline(config), config


@pytest.fixture(scope="module")
def nights(tmp_path_factory: pytest.TempPathFactory) -> tuple[Timeline, Config]:
    """Ninety days on the equator."""
    config = load_config(written(place_text("ground", 2161, "3600 s"), tmp_path_factory.mktemp("nights")))
    return timeline(config), config


@pytest.fixture(scope="module")
def lander(tmp_path_factory: pytest.TempPathFactory) -> tuple[Timeline, Config]:
    """Ninety days on the far side."""
    config = load_config(written(place_text("far side", 2161, "3600 s"), tmp_path_factory.mktemp("lander")))
    return timeline(config), config


def row(found: Timeline, kind: str) -> Any:
    return next(row for row in found.rows if row.kind == kind)


# --- windows --------------------------------------------------------------------------------------------------------


def test_windows_hold_the_samples_that_are_hidden(hours: tuple[Timeline, Config]) -> None:
    found, config = hours
    observation = config.observation.model_copy(update={"require": (), "step_s": 5.0, "count": 12_000})
    geometry = full_geometry(config.vantage, observation)
    times = geometry["time"].values
    sampled = {body: geometry[f"{body}_hidden"].values for body in ("earth", "sun")}
    sampled["both"] = sampled["earth"] & sampled["sun"]
    for kind, hidden in sampled.items():
        windows = row(found, kind).windows
        begun, ended = (np.searchsorted(edges, times, side="right") for edges in (windows.start, windows.stop))
        # The last sample is the end of a window that the span cuts.
        np.testing.assert_array_equal((begun > ended)[:-1], hidden[:-1])
        # Samples every 5 s, each edge off by half of that at random, at most twice 17 edges.
        assert windows.share_s(times[[0, -1]])[0] == pytest.approx(5.0 * hidden.sum(), abs=34 * 2.5)


def test_step_and_conditions_of_the_observation_do_not_matter(hours: tuple[Timeline, Config], tmp_path: Path) -> None:
    # Once every 4 h, 60 000 s in all: no sample of the observation follows the orbit of 118 min.
    coarse = timeline(written(orbit_text(6, "12000 s"), tmp_path))
    fine, _ = hours
    assert (coarse.first, coarse.last, coarse.step_s) == (fine.first, fine.last, 60.0)
    for kind in ("earth", "sun", "both"):
        assert np.array_equal(row(coarse, kind).windows.start, row(fine, kind).windows.start)
        assert np.array_equal(row(coarse, kind).windows.stop, row(fine, kind).windows.stop)


def test_both_hidden_lies_within_each(month: tuple[Timeline, Config]) -> None:
    found, _ = month
    earth, sun, both = (row(found, kind).windows for kind in ("earth", "sun", "both"))
    assert 0.0 < both.total_s < min(earth.total_s, sun.total_s)
    for windows in (earth, sun):
        # Each window of both lies in one of each body: the overlap with it changes nothing.
        assert both.overlap(windows).total_s == pytest.approx(both.total_s, abs=1e-6)  # nanoseconds, summed


def test_the_disk_hides_longer_in_part_than_whole(month: tuple[Timeline, Config]) -> None:
    found, _ = month
    for kind, degrees in (("earth", 1.9), ("sun", 0.53)):
        windows, partly = row(found, kind).windows, row(found, kind).partly
        assert windows.overlap(partly).total_s == pytest.approx(windows.total_s, abs=1e-6)
        # A diameter of the disk at the least, at either edge, at the orbit's rate; more where it is crossed aslant.
        fading_s = (partly.total_s - windows.total_s) / (2.0 * len(windows.start))
        assert fading_s > degrees / 360.0 * period_s(100.0)


def test_windows_open_at_the_ends_are_marked(month: tuple[Timeline, Config]) -> None:
    found, _ = month
    earth = row(found, "earth").windows
    assert earth.cut_at_start.tolist() == [True] + [False] * (len(earth.start) - 1)
    lines = list(csv.DictReader(io.StringIO(windows_csv(found))))
    first = next(line for line in lines if line["kind"] == "Earth hidden")
    assert first["cut"] == "start"
    assert first["start_utc"] == "2027-06-01T00:00:00.000"


def test_a_single_sample_has_no_timeline_and_a_life_is_too_long(hours: tuple[Timeline, Config]) -> None:
    _, config = hours
    with pytest.raises(InputError, match="needs a span, at least 2 samples"):
        fine_observation(config.observation.model_copy(update={"count": 1}))
    with pytest.raises(InputError, match=f"at most {MOST_SAMPLES}"):
        fine_observation(config.observation.model_copy(update={"count": 2_000_000}))
    finer = fine_observation(config.observation.model_copy(update={"step_s": 7.0, "count": 100}))
    assert (finer.step_s, finer.count, finer.require) == (7.0, 100, ())


# --- orbits, days and months ----------------------------------------------------------------------------------------


def test_orbits_follow_kepler(month: tuple[Timeline, Config]) -> None:
    found, _ = month
    lengths_s = np.diff(found.turns.edges) / np.timedelta64(1, "ns") / 1e9
    assert found.turns.whole.tolist() == [True] * 378 + [False]
    # From phase 0, in a circle: even to the rounding of phases, 1e-12 of a turn.
    np.testing.assert_allclose(lengths_s[:-1], period_s(100.0), atol=1e-6)


@pytest.mark.parametrize("campaign", ["month", "nights"])
def test_parts_add_up(campaign: str, request: pytest.FixtureRequest) -> None:
    found, _ = request.getfixturevalue(campaign)
    for each in found.rows:
        for turns in (found.turns, found.months):
            assert turns.edges[0] == found.first
            assert turns.edges[-1] == found.last
            assert each.windows.share_s(turns.edges).sum() == pytest.approx(each.windows.total_s, abs=1e-6)  # rounding


def test_months_are_those_of_the_calendar(month: tuple[Timeline, Config], nights: tuple[Timeline, Config]) -> None:
    assert month[0].months.edges.astype("datetime64[D]").astype(str).tolist() == [
        "2027-06-01", "2027-07-01", "2027-07-01"
    ]  # fmt: skip
    assert month[0].months.whole.tolist() == [True, False]
    assert nights[0].months.edges.astype(str).tolist() == [
        f"2027-{day}T00:00:00.000000000" for day in ("06-01", "07-01", "08-01", "08-30")
    ]
    assert nights[0].months.whole.tolist() == [True, True, False]


def test_the_terminator_is_crossed_twice_an_orbit(month: tuple[Timeline, Config]) -> None:
    found, _ = month
    assert found.day_below is not None
    assert found.beta_deg is not None
    orbits = found.span_s / period_s(100.0)
    assert len(found.day_below.start) == pytest.approx(orbits, abs=1.0)
    # The point below is lit for half of each orbit, whatever beta is below 90 deg.
    assert found.day_below.total_s / found.span_s == pytest.approx(0.5, abs=0.5 / orbits)
    # The Sun moves by 30.5 deg of longitude in 31 days, and beta by no more.
    assert 0.0 < np.ptp(found.beta_deg) < 30.5


# --- on the ground and on the Moon ----------------------------------------------------------------------------------


def test_nights_on_the_equator_are_half_a_day_less_the_disk(nights: tuple[Timeline, Config]) -> None:
    found, _ = nights
    assert [each.title for each in found.rows] == ["Sun below horizon"]
    assert found.beta_deg is None
    assert found.day_below is None
    windows = row(found, "sun").windows
    assert int(windows.whole.sum()) in (89, 90)
    # The Sun is gone when its centre is 0.2627 deg down in June, 0.2639 in August; its hour angle runs at 15 deg/h and
    # the depth at that times the cosine of the declination, 23.44 deg at most. The day is within 30 s of 24 h and the
    # parallax of the Sun is 0.6 s.
    half_s = 240.0 * 0.263
    lengths = windows.duration_s[windows.whole]
    assert lengths.max() < 43_200.0 - 2.0 * half_s + 16.0
    assert lengths.min() > 43_200.0 - 2.0 * half_s / np.cos(np.deg2rad(23.44)) - 16.0


def test_nights_of_a_lander_are_half_a_lunar_day(lander: tuple[Timeline, Config]) -> None:
    found, _ = lander
    sun = row(found, "sun").windows
    # Synodic month 29.53 days, 29.27 to 29.83 by the eccentricity of the orbits; the Sun's disk and the lander's
    # latitude (5 deg) with the Sun's (1.5 deg) change half of it by less than 0.1 day.
    assert np.all(np.abs(sun.duration_s[sun.whole] / 86_400.0 - 14.765) < 0.3)
    assert len(sun.start) in (3, 4)
    # At 178 deg the Earth never rises: librations reach 8 deg.
    earth = row(found, "earth").windows
    assert earth.total_s == found.span_s
    assert row(found, "both").windows.total_s == sun.total_s
    assert found.beta_deg is None


# --- page and tables ------------------------------------------------------------------------------------------------


def number(text: str, pattern: str) -> float:
    match = re.search(pattern, text)
    assert match is not None, pattern
    return float(match.group(1))


def test_page_and_tables_say_the_same(month: tuple[Timeline, Config]) -> None:
    found, config = month
    page = timeline_page(found, config)
    windows = list(csv.DictReader(io.StringIO(windows_csv(found))))
    orbits = list(csv.DictReader(io.StringIO(turns_csv(found))))
    assert len(orbits) == 379
    for title in ("Earth hidden", "Sun hidden", "Both hidden"):
        listed = [line for line in windows if line["kind"] == title]
        hours = sum(float(line["minutes"]) for line in listed) / 60.0
        by_orbit = sum(float(line["minutes_" + title.lower().replace(" ", "_")]) for line in orbits) / 60.0
        # Printed to 0.01 h; minutes written to 1e-4, some 300 of them.
        assert number(page, rf"  {title} +([\d.]+) +[\d.]+%") == pytest.approx(hours, abs=0.006)
        assert by_orbit == pytest.approx(hours, abs=5e-4)
        assert number(page, rf"  {title} +[\d.]+ +[\d.]+% +(\d+)") == len(listed)
        whole = [float(line["minutes"]) for line in listed if not line["cut"]]
        longest = number(page, rf"  {title} +[\d.]+ +[\d.]+% +\d+ +\d+ +([\d.]+)")
        assert longest == pytest.approx(max(whole), abs=0.006)
        for line in listed:
            start, stop = np.datetime64(line["start_utc"]), np.datetime64(line["stop_utc"])
            # Both edges are rounded to a millisecond.
            assert (stop - start) / np.timedelta64(1, "ms") / 6e4 == pytest.approx(float(line["minutes"]), abs=1e-4)
            assert line["orbit"].isdigit()
    assert f"{found.beta_deg.min():+.2f} to {found.beta_deg.max():+.2f}" in page
    assert max(len(line) for line in page.splitlines()) < 160


def test_what_does_not_apply_is_not_printed(nights: tuple[Timeline, Config], month: tuple[Timeline, Config]) -> None:
    text = timeline_page(*nights) + windows_csv(nights[0]) + turns_csv(nights[0])
    for word in ("orbit", "Earth below", "Both", "beta", "terminator", "limb"):
        assert word not in text.replace(nights[1].run.name, "")
    page = timeline_page(*month)
    assert "horizon" not in page
    assert "nan" not in page + text


# --- picture --------------------------------------------------------------------------------------------------------


def drawn(found: Timeline, config: Config) -> Figure:
    with look():
        figure = timeline_figure(found, config)
        assert png(figure).startswith(b"\x89PNG")
    return figure


@pytest.mark.parametrize(("campaign", "panels"), [("month", 4), ("hours", 3), ("nights", 3), ("lander", 3)])
def test_picture_shows_each_kind_and_its_hours(campaign: str, panels: int, request: pytest.FixtureRequest) -> None:
    found, config = request.getfixturevalue(campaign)
    figure = drawn(found, config)
    strip, bars, *others = figure.axes
    assert len(others) + 1 == panels
    assert [label.get_text() for label in bars.get_yticklabels()] == [each.title for each in found.rows][::-1]
    key = [text.get_text() for text in strip.get_legend().get_texts()]
    assert key == [
        f"{each.title}: {each.windows.total_s / 3600.0:.1f} h, {each.windows.total_s / found.span_s:.1%}"
        for each in found.rows
    ]
    last = others[-1]
    ends = [line.get_ydata()[-1] for line in last.lines]
    np.testing.assert_allclose(ends, [each.windows.total_s / 3600.0 for each in found.rows], atol=1e-9)  # rounding
    assert last.get_xlabel() == "UTC, 2027"
    assert "2027" not in " ".join(label.get_text() for label in last.get_xticklabels())
    assert config.run.name in figure.get_suptitle()


def test_shaded_are_the_windows_themselves(hours: tuple[Timeline, Config]) -> None:
    found, config = hours
    bars = drawn(found, config).axes[1]
    origin = found.first
    for each, collection in zip(reversed(found.rows), bars.collections, strict=True):
        corners = np.array([path.vertices for path in collection.get_paths()])
        if not len(each.windows.start):
            assert len(corners) == 0
            continue
        days = (np.stack([each.windows.start, each.windows.stop]) - origin) / np.timedelta64(1, "ns") / 86_400e9
        offset = corners[:, :, 0].min() - days.min()
        # Day numbers of dates near 2e4 carry 4e-12 d.
        np.testing.assert_allclose(corners[:, :, 0].min(axis=1) - offset, days[0], atol=1e-10)
        np.testing.assert_allclose(corners[:, :, 0].max(axis=1) - offset, days[1], atol=1e-10)


def test_the_same_timeline_gives_the_same_picture(hours: tuple[Timeline, Config]) -> None:
    with look():
        assert png(timeline_figure(*hours)) == png(timeline_figure(*hours))


# --- command --------------------------------------------------------------------------------------------------------


def call(*words: str | Path) -> Any:
    return CliRunner().invoke(app, ["timeline", *(str(word) for word in words)])


def test_the_command_prints_and_writes(tmp_path: Path, hours: tuple[Timeline, Config]) -> None:
    config, out = written(orbit_text(501), tmp_path), tmp_path / "new" / "out"
    result = call(config, "--out", out)
    assert result.exit_code == 0, result.output
    found, settings = hours
    assert timeline_page(found, settings) in result.output
    assert sorted(file.name for file in out.iterdir()) == ["timeline.csv", "timeline.png", "timeline_orbits.csv"]
    assert (out / "timeline.csv").read_text(encoding="utf-8") == windows_csv(found)
    assert (out / "timeline_orbits.csv").read_text(encoding="utf-8") == turns_csv(found)
    assert (out / "timeline.png").read_bytes().startswith(b"\x89PNG")


def test_the_command_replaces_only_when_told(tmp_path: Path) -> None:
    config, out = written(orbit_text(121), tmp_path), tmp_path / "out"
    out.mkdir()
    for name in [*FILES, "notes.txt"]:
        (out / name).write_text("mine", encoding="utf-8")
    refused = call(config, "--out", out)
    assert refused.exit_code == EXIT_INPUT
    assert "already holds timeline.csv, timeline.png; name another folder, or give --update" in refused.output
    assert {file.name: file.read_text() for file in out.iterdir()} == dict.fromkeys([*FILES, "notes.txt"], "mine")
    assert call(config, "--out", out, "--update").exit_code == 0
    assert sorted(file.name for file in out.iterdir()) == sorted([*FILES, "notes.txt", "timeline_orbits.csv"])
    assert (out / "timeline.csv").read_text().startswith("kind,start_utc,stop_utc,minutes,cut,orbit\n")
    assert (out / "notes.txt").read_text() == "mine"


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (demo_with(("nside = 64", "nside = 63"), ('altitude = "100 km"', 'altitude = "100 s"')), "2 problems"),
        (orbit_text(1), "at least 2 samples"),
    ],
)
def test_bad_input_is_told_and_nothing_is_written(text: str, words: str, tmp_path: Path) -> None:
    result = call(written(text, tmp_path), "--out", tmp_path / "out")
    assert result.exit_code == EXIT_INPUT
    assert words in result.output
    assert not (tmp_path / "out").exists()


def test_a_file_is_no_folder(tmp_path: Path) -> None:
    config = written(orbit_text(121), tmp_path)
    result = call(config, "--out", config)
    assert result.exit_code == EXIT_INPUT
    assert "is a file; name a folder" in result.output


def test_help_names_what_is_written() -> None:
    text = " ".join(call("--help").output.split())
    for word in (*FILES, "timeline_orbits.csv", "timeline_days.csv", "--out", "--update", "CONFIG"):
        assert word in text
