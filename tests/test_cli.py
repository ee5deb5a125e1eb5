"""The command: it teaches itself, its exit codes hold, and `new` and `check` do what they say."""

from __future__ import annotations

import re
import subprocess
import sysconfig
from pathlib import Path
from typing import Any

import pytest
from config_cases import DEMO, demo_with, small_with
from typer.testing import CliRunner

from reduce import pipeline, preview, starter
from reduce.cli import EXIT_FAILED, EXIT_INPUT, app
from sims.config_load import load_config

COMMANDS = ("run", "fit", "check", "compare", "new", "timeline", "sky", "beam", "trust")


def call(*words: str | Path) -> Any:
    return CliRunner().invoke(app, [str(word) for word in words])


# ---------------------------------------------------------------- teaching


def test_help_says_what_each_command_does_and_where_to_begin() -> None:
    result = call("--help")
    assert result.exit_code == 0
    for command in COMMANDS:
        # A line of its own with words behind it.
        assert re.search(rf"^ +{command} +[A-Z]\w+ .*\w", result.output, re.MULTILINE)
    text = " ".join(result.output.split())
    assert "Begin with `quietlimb new DIR`" in text
    assert "Exit codes: 0 done; 2 bad input" in text
    assert "..." not in result.output.split("Commands:")[1]


@pytest.mark.parametrize(
    ("command", "words"),
    [
        ("run", ["CONFIG", "--out", "--update", "spectra.nc", "turning_points.json", "refused without --update"]),
        ("fit", ["SPECTRA", "CONFIG", "--out", "--covariance", "frequency_mhz, temperature_k, sigma_k", "K^2"]),
        ("check", ["CONFIG", "geometry", "noise", "time and memory", "Writes nothing"]),
        ("trust", ["CONFIG", "--out", "--mocks", "default: 200", "--outside", "--processes", "trust.nc"]),
        ("new", ["DIR", "starter configuration", "campaign.toml"]),
    ],
)
def test_each_command_explains_its_arguments(command: str, words: list[str]) -> None:
    result = call(command, "--help")
    assert result.exit_code == 0
    text = " ".join(result.output.split())
    for word in words:
        assert word in text


def test_help_names_every_product_of_a_run() -> None:
    text = call("run", "--help").output
    made = [name for stage in pipeline.STAGES for name in stage.makes if not name.endswith(".png")]
    assert all(name in text for name in [*made, "run.json", "log.txt"])
    plots = [name for stage in pipeline.STAGES for name in stage.makes if name.endswith(".png")]
    assert len(plots) == 6
    assert "six plots" in text


@pytest.mark.parametrize(
    "words", [[], ["frobnicate"], ["run"], ["run", "a.toml"], ["check"], ["fit", "a.csv", "--out", "b"]]
)
def test_what_is_no_command_is_a_matter_of_input(words: list[str]) -> None:
    result = call(*words)
    assert result.exit_code == EXIT_INPUT
    assert "Usage:" in result.output


def test_the_command_is_installed_and_quick_to_answer(tmp_path: Path) -> None:
    command = Path(sysconfig.get_path("scripts")) / "quietlimb"
    helped = subprocess.run([command, "--help"], capture_output=True, text=True, timeout=60, check=False)
    assert helped.returncode == 0
    assert "Commands:" in helped.stdout
    refused = subprocess.run(
        [command, "new", tmp_path / "a" / "b"], capture_output=True, text=True, timeout=60, check=False
    )
    assert refused.returncode == 0
    again = subprocess.run(
        [command, "new", tmp_path / "a" / "b"], capture_output=True, text=True, timeout=60, check=False
    )
    assert again.returncode == EXIT_INPUT
    assert again.stdout == ""
    assert again.stderr.startswith("quietlimb: 1 problem\n")


# ---------------------------------------------------------------- exit codes


def test_a_fit_that_does_not_converge_is_told_in_one_line(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    def stuck(*words: Any, **options: Any) -> None:
        raise RuntimeError("bin 3 did not converge in 50 iterations")

    monkeypatch.setattr(pipeline, "run", stuck)
    result = call("run", tmp_path / "a.toml", "--out", tmp_path / "out")
    assert result.exit_code == EXIT_FAILED
    assert result.output == "quietlimb: bin 3 did not converge in 50 iterations\n"


def test_a_mistake_of_ours_is_not_hidden(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    def broken(path: Path) -> str:
        raise ZeroDivisionError

    monkeypatch.setattr(preview, "preview", broken)
    result = call("check", tmp_path / "a.toml")
    assert result.exit_code == EXIT_FAILED
    assert isinstance(result.exception, ZeroDivisionError)


# ---------------------------------------------------------------- trust


def test_trust_tells_all_problems_at_once_and_computes_nothing(tmp_path: Path) -> None:
    path, out = tmp_path / "campaign.toml", tmp_path / "out"
    path.write_text(demo_with(("nside = 64", "nside = 63")), encoding="utf-8")
    out.mkdir()
    (out / "trust.txt").write_text("mine")
    outside = [tmp_path / "a" / "sky.toml", tmp_path / "b" / "sky.toml"]
    for each in outside:
        each.parent.mkdir()
        each.write_text(DEMO, encoding="utf-8")
    words = ["--mocks", "3", "--processes", "0", "--outside", outside[0], "--outside", outside[1]]
    result = call("trust", path, "--out", out, *words, "--outside", tmp_path / "none.toml")
    assert result.exit_code == EXIT_INPUT
    assert result.output.startswith("quietlimb: 6 problems\n")
    for part in (
        "sky.nside: should be",
        "none.toml",
        "--mocks: got 3; allowed are at least 10",
        "--processes: got 0; allowed are at least 1",
        "--outside: two worlds would be named sky",
        "already holds trust.txt; name another folder, or give --update",
    ):
        assert part in result.output
    assert [file.name for file in out.iterdir()] == ["trust.txt"]
    assert (out / "trust.txt").read_text() == "mine"


def test_trust_needs_a_folder(tmp_path: Path) -> None:
    result = call("trust", tmp_path / "a.toml")
    assert result.exit_code == EXIT_INPUT
    assert "Usage:" in result.output


# ---------------------------------------------------------------- new


def test_new_writes_the_starter_and_does_not_overwrite_it(tmp_path: Path) -> None:
    folder = tmp_path / "my" / "campaign"
    result = call("new", folder)
    assert result.exit_code == 0
    path = folder / "campaign.toml"
    assert f"quietlimb check {path}" in result.output
    assert path.read_text(encoding="utf-8") == DEMO
    load_config(path)
    path.write_text("mine", encoding="utf-8")
    result = call("new", folder)
    assert result.exit_code == EXIT_INPUT
    assert "is not overwritten" in result.output
    assert path.read_text(encoding="utf-8") == "mine"
    assert [file.name for file in folder.iterdir()] == ["campaign.toml"]


def test_new_leaves_what_else_is_in_the_folder(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    assert call("new", tmp_path).exit_code == 0
    assert (tmp_path / "notes.txt").read_text() == "mine"


def test_the_starter_explains_itself() -> None:
    text = starter.starter_text()
    assert text.startswith("#")
    commented = [line for line in text.splitlines() if "#" in line]
    assert len(commented) > 25


# ---------------------------------------------------------------- check


def number(text: str, pattern: str) -> float:
    found = re.search(pattern, text)
    assert found is not None, pattern
    return float(found.group(1))


def test_check_prints_what_a_run_would_be_like_and_writes_nothing(tmp_path: Path) -> None:
    path = tmp_path / "campaign.toml"
    path.write_text(small_with(), encoding="utf-8")
    result = call("check", path)
    assert result.exit_code == 0, result.output
    text = result.output
    config = load_config(path)
    for name in type(config).model_fields:
        assert f"\n[{name}]\n" in text
    assert "start_mhz = 40.0" in text
    assert "boresight.dwell_s = 14400.0" in text
    assert "nodes_cap = 64" in text  # a default that the file does not name
    # The Moon from 100 km: asin(1737.4 / 1837.4) = 71.010 deg, 33.7 % of the sphere (geometry, mean radius 1737.4 km).
    assert "71.010 deg, 33.7% of the sphere" in text
    kept = int(number(text, r"samples kept +(\d+) of 250"))
    in_bins = re.search(r"samples in each bin +\[([\d, ]+)\]", text)
    assert in_bins is not None
    assert sum(int(count) for count in in_bins.group(1).split(",")) == kept
    response = re.search(r"signal response +([\d.]+)", text)
    assert response is not None
    assert 0.5 < float(response.group(1)) < 0.97
    assert number(text, r"engine time +about (\d+) s") >= 1
    assert number(text, r"memory +about (\d+) MB") >= 1
    assert [file.name for file in tmp_path.iterdir()] == ["campaign.toml"]


def test_check_tells_the_noise_of_the_radiometer_equation(tmp_path: Path) -> None:
    path = tmp_path / "campaign.toml"
    path.write_text(small_with(), encoding="utf-8")
    text = call("check", path).output
    antenna_k = number(text, r"antenna +([\d.]+) K")
    noise_mk = number(text, r"noise, a bin +([\d.]+) mK")
    # Dicke (1946): 800 h on the sky, half of it on the antenna, in 8 bins; channels of 5 MHz; 150 K receiver.
    expected_mk = 1e3 * (antenna_k + 150.0) / (5e6 * 800 * 3600 * 0.5 / 8) ** 0.5
    # Printed to 0.1 mK.
    assert noise_mk == pytest.approx(expected_mk, abs=0.06)


def test_check_tells_all_problems_as_run_does(tmp_path: Path) -> None:
    path = tmp_path / "campaign.toml"
    path.write_text(demo_with(("nside = 64", "nside = 63"), ('tilt = "0 deg"', 'tilt = "0 K"')), encoding="utf-8")
    for words in (["check", path], ["run", path, "--out", tmp_path / "out"]):
        result = call(*words)
        assert result.exit_code == EXIT_INPUT
        assert result.output.startswith("quietlimb: 2 problems\n")
        assert f"{path}: sky.nside: should be 4, 8," in result.output
        assert f"{path}: beam.tilt: wrong unit (K)" in result.output
    assert not (tmp_path / "out").exists()
