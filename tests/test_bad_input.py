"""Bad input through the command: a clear error with its path, exit code 2, and every file as it was."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import healpy as hp
import numpy as np
import pytest
import xarray as xr
from config_cases import DEMO, small_with, substituted, with_knowledge
from typer.testing import CliRunner

from reduce.cli import EXIT_INPUT, app
from reduce.pipeline import STAGES
from reduce.runner import run_stages
from sims.config_load import load_config
from sims.products import write_product
from sims.schema import SPECTRA, describe

Change = tuple[str, str]
INVENTED = 'kind = "invented"            # "healpix" and "image" read a map of your own\n'
MAP_SEED = "map_seed = 7\n"
SIGNAL_POINTS = DEMO[DEMO.index('kind = "turning-points"') : DEMO.index("[bins]")]
KNOWN_SCALE = 'sky.scale = { distribution = "normal", sd = 0.05 }'
FIXED_E = 'e = { frequency = "180 MHz", temperature = "0 mK" }\nb = { frequency = ['


@pytest.fixture(scope="module")
def campaign(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the products of a small campaign in ``out``, that every bad run is pointed at."""
    folder = tmp_path_factory.mktemp("campaign")
    path = folder / "campaign.toml"
    path.write_text(small_with(), encoding="utf-8")
    without_report = STAGES[:-1]
    run_stages(without_report, load_config(path), folder / "out", update=False, progress=None, given={})
    return folder


def contents(folder: Path) -> dict[str, bytes]:
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}


def call(*words: str | Path) -> Any:
    return CliRunner().invoke(app, [str(word) for word in words])


def refused(out: Path, words: Sequence[str | Path], expected: Sequence[str]) -> list[str]:
    """Problems told by a call that must be refused and leave `out` byte for byte as it was."""
    before = contents(out)
    result = call(*words)
    assert result.exit_code == EXIT_INPUT, (result.exit_code, result.exception, result.output)
    assert isinstance(result.exception, SystemExit)
    assert "Traceback" not in result.output
    for text in expected:
        assert text in result.output
    assert contents(out) == before
    # Progress bars may stand before, where a stage had begun.
    first, *problems = result.output[result.output.index("quietlimb: ") :].splitlines()
    assert first == f"quietlimb: {len(problems)} problem{'s' if len(problems) > 1 else ''}"
    return problems


# ---------------------------------------------------------------- configurations

CASES: dict[str, tuple[list[Change], list[str]]] = {
    # quantities
    "wrong unit": ([('length = "1.6 m"', 'length = "1.6 s"')], ["beam.length: wrong unit (s)", '"<number> m"', "'1.6 s'"]),
    "missing unit": ([('start = "40 MHz"', "start = 40")], ["channels.start: a quantity needs its unit", "…_mhz", "got 40"]),
    "unit left out of the text": ([('start = "40 MHz"', 'start = "40"')], ["channels.start: wrong unit (no unit)"]),
    "unit twice": ([('start = "40 MHz"', 'start_mhz = "40 MHz"')], ["channels.start_mhz", "already carries the unit MHz"]),
    "quantity twice": ([('start = "40 MHz"', 'start = "40 MHz"\nstart_mhz = 40')], ["channels.start: given twice"]),
    "unknown unit": ([('length = "1.6 m"', 'length = "1.6 ells"')], ["beam.length: not a quantity", "'1.6 ells'"]),
    "NaN with a unit": ([('tilt = "0 deg"', 'tilt = "nan deg"')], ["beam.tilt: not finite"]),
    "NaN": ([("efficiency = *", "efficiency = nan")], ["beam.efficiency: should be a finite number (got nan)"]),
    "infinity": ([("permittivity = 2.7", "permittivity = inf")], ["surface.permittivity: should be a finite number"]),
    # keys and sections
    "unknown key": ([('tilt = "0 deg"', 'tlit = "0 deg"')], ["beam.tlit: unknown key; allowed are tilt, tilt_azimuth"]),
    "unknown section": ([("[engine]", "[engin]")], ["engin: unknown section; allowed are run,", "engine"]),
    "missing section": (
        [("[surface]\n", ""), ('temperature = "230 K"\n', ""), ("permittivity = 2.7\n", ""), ("reflection = true ", "#")],
        ["surface: section [surface] is missing"],
    ),
    "missing key": ([("permittivity = 2.7\n", "")], ["surface.permittivity: missing"]),
    "section that is none": ([("[run]", "surfaces = 1\n[run]")], ["surfaces: unknown section"]),
    "bad kind": ([('kind = "dipole"', 'kind = "horn"')], ["beam.kind: got 'horn'", '"short-dipole", "dipole", "gaussian"']),
    "no kind": ([('kind = "dipole"\n', "")], ["beam.kind: got 'nothing'; allowed are"]),
    "bad kind of boresight": ([('kind = "fixed"', 'kind = "free"')], ["vantage.boresight.kind: got 'free'", '"vertical"']),
    # types and ranges
    "out of range": ([("efficiency = *", "efficiency = 1.2")], ["beam.efficiency: should be less than or equal to 1"]),
    "wrong type": ([("count = 16", 'count = "many"')], ["channels.count: should be a valid integer (got 'many')"]),
    "bool for a number": ([("efficiency = *", "efficiency = true")], ["beam.efficiency: should be a valid number"]),
    "number for a bool": ([("reflection = true", "reflection = 1")], ["surface.reflection: should be a valid boolean"]),
    "real for an integer": ([("count = 16", "count = 16.0")], ["channels.count: should be a valid integer (got 16.0)"]),
    "nside": ([("nside = 8", "nside = 12")], ["sky.nside: should be 4, 8, 16,", "got 12"]),
    "negative seed": ([("seed = *", "seed = -1")], ["run.seed: should be greater than or equal to 0 (got -1)"]),
    "no date": ([("start = 2027-06-01T00:00:00Z", 'start = "soon"')], ["observation.start: not a date", "'soon'"]),
    "no condition": ([('"sun-hidden"]', '"moon-hidden"]')], ["observation.require.1: should be", "'sun-hidden'"]),
    "declination": ([('"-50 deg"]', '"-95 deg"]')], ["vantage.boresight: declinations must lie within -90 to 90 deg"]),
    # what does not belong together
    "band outside sky.valid": ([('valid_to = "500 MHz"', 'valid_to = "100 MHz"')], ["sky.valid_to, 30.0 to 100.0 MHz"]),
    "band reversed": ([('stop = "120 MHz"', 'stop = "30 MHz"')], ["channels: stop (30.0 MHz) must lie above start (40.0 MHz)"]),
    "mask falling": ([('"87.5 MHz", "88.5 MHz"', '"88.5 MHz", "87.5 MHz"')], ["channels: masks must rise", "88.5, 87.5"]),
    "mask over everything": ([('"87.5 MHz", "88.5 MHz"', '"30 MHz", "130 MHz"')], ["foreground.terms:", "the 0 that"]),
    "mask outside the band": ([('"87.5 MHz", "88.5 MHz"', '"121 MHz", "122 MHz"')], ["channels.masks.0, 121 to 122 MHz"]),
    "trough outside the band": ([('stop = "120 MHz"', 'stop = "70 MHz"'), ('["87.5 MHz", "88.5 MHz"]', "")], ["signal.c, 71 MHz"]),
    "turning point outside the band": (
        [('["55 MHz", "95 MHz"]', '["25 MHz", "39 MHz"]'), ('["40 MHz", "58 MHz"]', '["20 MHz", "30 MHz"]')],
        ["turning_points.c.frequency, 25 to 39 MHz"],
    ),
    "bins and directions": ([('by = "pointing"\ncount = 8', 'by = "pointing"\ncount = 9')], ["bins.count must be 8", "got 9"]),
    "bins and vantage": ([('by = "pointing"', 'by = "sidereal-time"')], ['bins.by = "sidereal-time" needs vantage.kind']),
    "turning points inside the band": (
        [(FIXED_E, FIXED_E.replace("180 MHz", "119 MHz")), ('["85 MHz", "120 MHz"]', '["85 MHz", "118 MHz"]')],
        ["turning_points.a to turning_points.e, 17.0 to 119.0 MHz, must enclose"],
    ),
    "signal out of order": ([('b = { frequency = "48 MHz"', 'b = { frequency = "88 MHz"')], ["signal: frequencies must rise"]),
    "prior reversed": ([('["55 MHz", "95 MHz"]', '["95 MHz", "55 MHz"]')], ["turning_points.c: frequency must rise"]),
    "prior of one number": ([('["55 MHz", "95 MHz"]', '"70 MHz"')], ["turning_points.c.frequency", "should be a list"]),
    "no room in the prior": ([('["-300 mK", "-10 mK"]', '["61 mK", "70 mK"]')], ["turning_points: the ranges leave no room"]),
    "odd walkers": ([("walkers = *", "walkers = 102")], ["turning_points: walkers must be a multiple of 4", "got 102"]),
    "too few walkers": ([("walkers = *", "walkers = 8")], ["turning_points.walkers: should be greater than or equal to 64"]),
    "vertical wire in the ground": (
        [('length = "1.6 m"', 'length = "1.6 m"\nwire = "vertical"\nheight = "0.5 m"')], ["beam.height, 0.5 m"],
    ),
    # files
    "map not there": (
        [(INVENTED, 'kind = "healpix"\nfile = "no.fits"\nframe = "galactic"\nunit = "K"\n'), (MAP_SEED, "")],
        ["sky.file: no such file (got 'no.fits'"],
    ),
    "index map not there": ([("index = 2.52", 'index_map = "no.fits"\nindex = 2.52')], ["sky.index_map: no such file"]),
    "signal table not there": ([(SIGNAL_POINTS, 'kind = "table"\nfile = "no.csv"\n')], ["signal.file: no such file"]),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_a_bad_configuration_is_refused(name: str, campaign: Path, tmp_path: Path) -> None:
    changes, expected = CASES[name]
    path = tmp_path / "bad.toml"
    path.write_text(substituted(small_with(), changes), encoding="utf-8")
    problems = refused(campaign / "out", ["run", path, "--out", campaign / "out", "--update"], expected)
    assert len(problems) == 1, problems
    assert problems[0].startswith(f"  {path}: ")


KNOWLEDGE_CASES = {
    "unknown path": ("beam.wobble = { distribution = \"normal\", sd = 1.0 }", "knowledge.beam.wobble: names no quantity"),
    "text leaf": ("beam.kind = { distribution = \"normal\", sd = 1.0 }", "knowledge.beam.kind: names no real number"),
    "wrong unit": ("beam.tilt = { distribution = \"normal\", sd = \"1 K\" }", "knowledge.beam.tilt.sd: wrong unit (K)"),
    "missing unit": ("beam.tilt = { distribution = \"normal\", sd = 1.0 }", "beam.tilt.sd: a quantity needs its unit"),
    "missing sd": ("sky.scale = { distribution = \"normal\" }", "knowledge.sky.scale: normal needs sd"),
    "bad distribution": ("sky.scale = { distribution = \"flat\", sd = 1.0 }", "should be 'normal', 'uniform' or 'lognormal'"),
    "lognormal of zero": ("beam.tilt = { distribution = \"lognormal\", sd = 1.0 }", "needs a median above zero (got 0.0)"),
    "not a matrix": (
        f'{KNOWN_SCALE}\nsky.index = {{ distribution = "normal", sd = 0.1 }}\n[[knowledge.correlated]]\n'
        'paths = ["sky.scale", "sky.index"]\ncorrelation = [[1, 2], [2, 1]]',
        "knowledge.correlated.0: correlation must have no negative eigenvalue",
    ),
    "group of strangers": (
        f'{KNOWN_SCALE}\n[[knowledge.correlated]]\npaths = ["sky.scale", "sky.index"]\ncorrelation = [[1, 0], [0, 1]]',
        "correlated path 'sky.index' has no entry of its own",
    ),
    "period of no ripple": (
        'receiver.ripple_period = { distribution = "normal", sd = "1 MHz" }',
        "knowledge.receiver.ripple_period_mhz: moves nothing with receiver.ripple_fraction = 0",
    ),
    "field": ('[knowledge.index_field]\nsd = 0.05\ncorrelation_length = "20 K"', "correlation_length: wrong unit (K)"),
}  # fmt: skip


@pytest.mark.parametrize("name", KNOWLEDGE_CASES)
def test_bad_knowledge_is_refused(name: str, campaign: Path, tmp_path: Path) -> None:
    entry, expected = KNOWLEDGE_CASES[name]
    path = tmp_path / "bad.toml"
    path.write_text(with_knowledge(small_with(), "[knowledge]", entry), encoding="utf-8")
    problems = refused(campaign / "out", ["run", path, "--out", campaign / "out", "--update"], [expected])
    assert len(problems) == 1, problems


def test_a_file_that_is_no_configuration_is_refused(campaign: Path, tmp_path: Path) -> None:
    out = campaign / "out"
    (tmp_path / "syntax.toml").write_text("[run\nname = 3\n")
    refused(out, ["run", tmp_path / "syntax.toml", "--out", out], ["syntax.toml: not valid TOML", "line 1"])
    (tmp_path / "twice.toml").write_text("[run]\nseed = 1\nseed = 2\n")
    refused(out, ["run", tmp_path / "twice.toml", "--out", out], ["twice.toml: not valid TOML", "line 3"])
    refused(out, ["run", tmp_path / "none.toml", "--out", out], ["none.toml: cannot be read as a text file"])
    refused(out, ["run", tmp_path, "--out", out], ["cannot be read as a text file"])
    (tmp_path / "binary.toml").write_bytes(b"\x89HDF\r\n\xff\xfe")
    refused(out, ["run", tmp_path / "binary.toml", "--out", out], ["binary.toml: cannot be read as a text file"])
    refused(out, ["check", tmp_path / "none.toml"], ["none.toml: cannot be read as a text file"])


def test_several_errors_are_told_at_once(campaign: Path, tmp_path: Path) -> None:
    path = tmp_path / "bad.toml"
    names = ("wrong unit", "unknown key", "nside", "out of range", "mask falling", "odd walkers", "no date")
    path.write_text(substituted(small_with(), [change for name in names for change in CASES[name][0]]))
    expected = [text for name in names for text in CASES[name][1]]
    for command in (["run", path, "--out", campaign / "out", "--update"], ["check", path]):
        assert len(refused(campaign / "out", command, expected)) == len(names)


# ---------------------------------------------------------------- what only a stage can find


def stage_cases(folder: Path) -> dict[str, tuple[list[Change], list[str]]]:
    """Files that are there but no good, and settings that leave nothing: with what the message must hold."""
    hp.write_map(
        folder / "hole.fits", np.where(np.arange(768) == 5, hp.UNSEEN, 30.0), column_units="K", dtype=np.float64
    )
    (folder / "text.fits").write_text("not a map")
    (folder / "short.csv").write_text("frequency_mhz,temperature_k\n" + "".join(f"{f},-0.1\n" for f in range(50, 90)))
    (folder / "words.csv").write_text("frequency_mhz,temperature_k\n40,deep\n60,0\n80,0\n120,0\n")
    healpix = 'kind = "healpix"\nfile = "{}"\nframe = "galactic"\nunit = "K"\n'
    return {
        "map with a hole": ([(INVENTED, healpix.format("hole.fits")), (MAP_SEED, "")], ["hole.fits", "missing = 'fill'"]),
        "map that is none": ([(INVENTED, healpix.format("text.fits")), (MAP_SEED, "")], ["text.fits"]),
        "signal that ends in the band": ([(SIGNAL_POINTS, 'kind = "table"\nfile = "short.csv"\n')], ["outside", "50", "89"]),
        "signal of words": ([(SIGNAL_POINTS, 'kind = "table"\nfile = "words.csv"\n')], ["words.csv: line 2", "'deep'"]),
        "long before": ([("start = 2027-", "start = 1527-")], ["observation: start, 1527-06-01", "1973-01-02 to 2100-01-01"]),
        "nothing kept": ([("count = 250", "count = 1")], ["observation.require"]),
        "knowledge too poor": ([("sd = 0.005, upper = 1.0", "sd = 50.0")], ["a drawn value of beam.efficiency,", "lower or upper bound"]),
    }  # fmt: skip


STAGE_CASES = ("map with a hole", "map that is none", "signal that ends in the band", "signal of words", "long before",
               "nothing kept", "knowledge too poor")  # fmt: skip


@pytest.mark.parametrize("name", STAGE_CASES)
def test_what_a_stage_finds_leaves_the_folder_as_it_was(name: str, campaign: Path, tmp_path: Path) -> None:
    changes, expected = stage_cases(tmp_path)[name]
    path = tmp_path / "bad.toml"
    path.write_text(substituted(small_with(), changes), encoding="utf-8")
    refused(campaign / "out", ["run", path, "--out", campaign / "out", "--update"], expected)


# ---------------------------------------------------------------- folders


def test_an_output_folder_that_cannot_be_is_refused(campaign: Path, tmp_path: Path) -> None:
    config = campaign / "campaign.toml"
    (tmp_path / "out").write_text("a letter")
    refused(
        tmp_path, ["run", config, "--out", tmp_path / "out"], [f"--out: {tmp_path / 'out'} is a file; name a folder"]
    )
    refused(tmp_path, ["run", config, "--out", tmp_path / "out" / "in"], ["--out: ", "cannot be made"])


def test_a_folder_of_other_things_is_refused(campaign: Path, tmp_path: Path) -> None:
    (tmp_path / "thesis.tex").write_text("precious")
    for update in ([], ["--update"]):
        words = ["run", campaign / "campaign.toml", "--out", tmp_path, *update]
        refused(tmp_path, words, [f"--out: {tmp_path} is not empty and holds no run.json"])


def test_a_folder_of_another_configuration_is_refused_without_update(campaign: Path, tmp_path: Path) -> None:
    path = tmp_path / "other.toml"
    path.write_text(substituted(small_with(), [("seed = *", "seed = 5"), ("terms = *", "terms = 4")]))
    expected = ["holds products of another run", "[run] differs", "[foreground] differs", "--update", "spectra.nc"]
    refused(campaign / "out", ["run", path, "--out", campaign / "out"], expected)


def test_a_fit_into_the_folder_of_a_mock_is_refused(campaign: Path) -> None:
    out = campaign / "out"
    for update in ([], ["--update"]):
        words = ["fit", out / "spectra.nc", campaign / "campaign.toml", "--out", out, *update]
        refused(out, words, ["holds spectra.nc, truth.nc, which this command does not make"])


def test_new_does_not_overwrite(tmp_path: Path) -> None:
    (tmp_path / "campaign.toml").write_text("mine")
    refused(tmp_path, ["new", tmp_path], ["campaign.toml: is already there and is not overwritten"])
    (tmp_path / "file").write_text("mine")
    refused(tmp_path, ["new", tmp_path / "file"], ["file: cannot be made a folder"])


# ---------------------------------------------------------------- spectra

TABLE = "frequency_mhz,temperature_k,sigma_k\n" + "".join(
    f"{f},{3000 * (f / 70) ** -2.5:.4f},0.01\n" for f in range(50, 90, 2)
)
SPECTRA_CASES: dict[str, tuple[Callable[[str], str], str]] = {
    "unordered": (lambda t: t.replace("\n60,", "\n51.5,"), "must rise; in bin 'all' 51.5 MHz follows 58.0 MHz"),
    "duplicate rows": (lambda t: t.replace("\n60,", "\n58,"), "58.0 MHz of bin 'all' stands more than once"),
    "non-numeric cell": (lambda t: t.replace("\n60,", "\nsixty,"), "line 7, frequency_mhz: 'sixty' is not a finite number"),
    "missing column": (lambda t: t.replace("temperature_k", "w"), "column 'temperature_k' is missing"),
    "unknown column": (lambda t: t.replace("sigma_k", "sigma"), "unknown column 'sigma'; allowed are"),
    "no sigma": (
        lambda t: "\n".join(line.rpartition(",")[0] for line in t.splitlines()), "column 'sigma_k' is missing, and no",
    ),
    "NaN sigma": (lambda t: t.replace("0.01\n", "nan\n", 1), "line 2, sigma_k: 'nan' is not a finite number above 0"),
    "negative sigma": (lambda t: t.replace("0.01\n", "-0.01\n", 1), "line 2, sigma_k: '-0.01' is not a finite number above"),
    "NaN temperature": (lambda t: t.replace("6957.3098", "nan"), "line 2, temperature_k: 'nan' is not a finite number"),
    "column of words": (
        lambda t: t.replace(",0.01\n", ",x\n"), "sigma_k: 20 cells are not a finite number above 0: line 2 'x', line 3 'x'",
    ),
    "twice but for rounding": (
        lambda t: t.replace("\n60,", "\n58.0000001,"), "58.0 MHz of bin 'all' stands more than once, on lines 6 and 7",
    ),
    "short row": (lambda t: t.replace(",0.01\n", "\n", 1), "line 2 has 2 cells, the header 3"),
    "empty": (lambda t: "", "holds no header line"),
    "outside the turning points": (lambda t: t.replace("\n50,", "\n10,"), "do not enclose the channels"),
    "fewer channels than terms": (lambda t: "\n".join(t.splitlines()[:6]), "terms"),
}  # fmt: skip


def fit_refused(campaign: Path, folder: Path, name: str, expected: str, *more: str | Path) -> None:
    out = folder / "out"
    out.mkdir(exist_ok=True)
    problems = refused(
        campaign / "out", ["fit", folder / name, campaign / "campaign.toml", "--out", out, *more], [expected]
    )
    assert len(problems) == 1, problems
    assert set(contents(out)) <= {"run.json"}


@pytest.mark.parametrize("name", SPECTRA_CASES)
def test_bad_spectra_are_refused(name: str, campaign: Path, tmp_path: Path) -> None:
    spoil, expected = SPECTRA_CASES[name]
    (tmp_path / "spectra.csv").write_text(spoil(TABLE))
    fit_refused(campaign, tmp_path, "spectra.csv", expected)


def test_spectra_that_are_not_there_are_refused(campaign: Path, tmp_path: Path) -> None:
    fit_refused(campaign, tmp_path, "none.csv", "none.csv: cannot be read as a CSV table")
    fit_refused(campaign, tmp_path, "none.nc", "none.nc: no such file")
    (tmp_path / "spectra.dat").write_text(TABLE)
    fit_refused(campaign, tmp_path, "spectra.dat", "ending '.dat' is not known; allowed are .nc and .csv")


COVARIANCES = {
    "wrong shape": (np.eye(19), "is 19 x 19, the table has 20 rows"),
    "not square": (np.eye(20)[:, :7], "is 20 x 7, the table has 20 rows"),
    "not symmetric": (np.eye(20) + np.eye(20, k=1) * 0.1, "is not symmetric"),
    "not positive definite": (np.ones((20, 20)), "is not positive definite"),
    "negative diagonal": (-np.eye(20), "its diagonal must be positive"),
    "not finite": (np.diag(np.where(np.arange(20) == 3, np.inf, 1.0)), "holds values that are not finite"),
    "at odds with sigma": (np.eye(20), "its diagonal and sigma_k of"),
}


@pytest.mark.parametrize("name", COVARIANCES)
def test_bad_covariances_are_refused(name: str, campaign: Path, tmp_path: Path) -> None:
    matrix, expected = COVARIANCES[name]
    (tmp_path / "spectra.csv").write_text(TABLE)
    np.savetxt(tmp_path / "covariance.csv", matrix, delimiter=",")
    fit_refused(campaign, tmp_path, "spectra.csv", expected, "--covariance", tmp_path / "covariance.csv")


def test_a_covariance_that_is_not_there_is_refused(campaign: Path, tmp_path: Path) -> None:
    (tmp_path / "spectra.csv").write_text(TABLE)
    missing = tmp_path / "none.csv"
    fit_refused(campaign, tmp_path, "spectra.csv", f"{missing}: cannot be read as a matrix", "--covariance", missing)


def test_bad_netcdf_is_refused(campaign: Path, tmp_path: Path) -> None:
    shape, dims = (1, 20), ("bin", "channel")
    good = describe(
        xr.Dataset(
            {
                "frequency_mhz": ("channel", np.arange(50.0, 90.0, 2.0)),
                "width_mhz": ("channel", np.full(20, 2.0)),
                "antenna_temperature_k": (dims, np.full(shape, 1000.0)),
                "noise_variance": (dims, np.full(shape, 1e-4)),
                "signal_response": (dims, np.full(shape, 0.6)),
                "flag": (dims, np.zeros(shape, np.uint8)),
            }
        ),
        SPECTRA,
    )
    units = good.copy(deep=True)
    units["antenna_temperature_k"].attrs["units"] = "mK"
    variance = good.copy(deep=True)
    variance["noise_variance"].values[0, 3] = 0.0
    cases = {
        "units.nc": (units, "antenna_temperature_k has units 'mK', allowed is 'K'"),
        "dims.nc": (good.transpose(), "has dims ['channel', 'bin'], allowed are ['bin', 'channel']"),
        "missing.nc": (good.drop_vars("signal_response"), "variable signal_response['bin', 'channel'] is missing"),
        "order.nc": (
            good.isel(channel=slice(None, None, -1)),
            "frequency_mhz must rise; channel 1 (86.0 MHz) does not",
        ),
        "variance.nc": (variance, "noise_variance is not positive in 1 unflagged cells, first bin 0, channel 3"),
    }
    for name, (dataset, expected) in cases.items():
        write_product(dataset, tmp_path / name)
        if name == "dims.nc":
            refused(campaign / "out", ["fit", tmp_path / name, campaign / "campaign.toml", "--out", tmp_path / "o"],
                    [f"{tmp_path / name}: antenna_temperature_k {expected}"])  # fmt: skip
        else:
            fit_refused(campaign, tmp_path, name, expected)
    (tmp_path / "text.nc").write_text(TABLE)
    fit_refused(campaign, tmp_path, "text.nc", "text.nc: not readable as NetCDF-4")


def test_a_fit_needs_its_sections(campaign: Path, tmp_path: Path) -> None:
    (tmp_path / "spectra.csv").write_text(TABLE)
    (tmp_path / "fit.toml").write_text('[run]\nname = "x"\nseed = 1\n')
    words = ["fit", tmp_path / "spectra.csv", tmp_path / "fit.toml", "--out", tmp_path / "out"]
    problems = refused(
        campaign / "out", words, ["section [foreground] is missing", "section [turning_points] is missing"]
    )
    assert len(problems) == 2
    assert not (tmp_path / "out").exists()
