"""How much is enough: evidence and prediction against dense Gaussians; a foreground of six terms is known again."""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from compare_cases import COEFFICIENTS, TROUGH, demo_config, model_on, spectra_on
from config_cases import small_with
from numpy.typing import NDArray
from scipy.special import logsumexp
from scipy.stats import multivariate_normal
from typer.testing import CliRunner

from reduce.cli import EXIT_INPUT, app
from reduce.compare import COUNTED, candidates, compare, marked, still_beyond
from reduce.evidence import DECAY, coefficient_prior, cross_validated, evidence, linear_model
from reduce.handoff import bundle
from reduce.joint_fit import JointFit, covariance_modes_k, family_from, joint_fit
from reduce.judge import Judged, best_trough, channel_blocks, judged
from reduce.quick_posterior import CompressedBank, compressed_bank
from reduce.report.compare_page import numbers_from, read_run
from reduce.report.compare_plot import compare_figure
from reduce.report.compare_text import compare_csv, compare_page
from reduce.report.style import look, png
from reduce.runner import Products
from reduce.trough_model import TroughModel
from sims.config import Config, Foreground
from sims.errors import InputError
from sims.products import write_product

FloatArray = NDArray[np.float64]
BINS, CHANNELS = 3, 24
SERIES = Foreground(family="power-series", terms=4)
CONFIGURED = Foreground(family="log-polynomial", terms=8)


@pytest.fixture(scope="module")
def config(tmp_path_factory: pytest.TempPathFactory) -> Config:
    return demo_config(tmp_path_factory.mktemp("compare"))


@pytest.fixture(scope="module")
def model(config: Config) -> TroughModel:
    return model_on(config, CHANNELS)


@pytest.fixture(scope="module")
def bank(model: TroughModel) -> CompressedBank:
    return compressed_bank(model, np.random.default_rng(1))


@pytest.fixture(scope="module")
def fit(model: TroughModel, bank: CompressedBank) -> JointFit:
    # A cool foreground, 7 K at mid-band: a dense covariance keeps its digits.
    coefficients = np.array([2.0, *COEFFICIENTS[1:3]])
    spectra = spectra_on(model, BINS, CHANNELS, 2e-3, 2, coefficients=coefficients)
    return joint_fit(spectra, SERIES, model, np.random.default_rng(3), None, bank)


class Dense:
    """The same model written out: data, their covariance with all priors in it, and the response to a signal."""

    def __init__(self, fit: JointFit) -> None:
        good = fit.subtraction.good
        spectra = fit.spectra
        family = family_from(SERIES, spectra["frequency_mhz"].values)
        measured = spectra["antenna_temperature_k"].values
        prior = coefficient_prior(family, spectra["frequency_mhz"].values, measured, good, SERIES.galaxy_index)
        columns = [family.basis(spectra["frequency_mhz"].values, each) for each in prior.mean]
        mean = np.array([matrix @ each for matrix, each in zip(columns, prior.mean, strict=True)])
        blocks = np.zeros((*good.shape, BINS, family.terms))
        for number, matrix in enumerate(columns):
            blocks[number, :, number] = matrix * prior.sd[number]
        free = blocks[good].reshape(int(good.sum()), -1)
        modes = covariance_modes_k(spectra, fit.fiducial_signal_k)[good]
        self.data = (measured - mean)[good]
        self.covariance = np.diag(spectra["noise_variance"].values[good]) + modes @ modes.T + free @ free.T
        self.response = np.zeros((int(good.sum()), good.shape[1]))
        bin_of, channel_of = np.nonzero(good)
        self.response[np.arange(len(bin_of)), channel_of] = spectra["signal_response"].values[bin_of, channel_of]

    def log_likelihood(self, signals_k: FloatArray, rows: NDArray[np.bool_]) -> FloatArray:
        off = self.data[rows] - signals_k @ self.response[rows].T
        return np.asarray(
            multivariate_normal(np.zeros(int(rows.sum())), self.covariance[np.ix_(rows, rows)]).logpdf(off)
        )


@pytest.fixture(scope="module")
def dense(fit: JointFit) -> Dense:
    return Dense(fit)


def prior_of(fit: JointFit) -> Any:
    spectra = fit.spectra
    return coefficient_prior(
        family_from(SERIES, spectra["frequency_mhz"].values),
        spectra["frequency_mhz"].values,
        spectra["antenna_temperature_k"].values,
        fit.subtraction.good,
        SERIES.galaxy_index,
    )


# ---------------------------------------------------------------- evidence and prediction


def test_likelihood_with_all_priors_is_the_dense_gaussian(fit: JointFit, dense: Dense) -> None:
    linear = linear_model(fit, prior_of(fit), np.eye(CHANNELS))
    signals_k = 0.1 * np.random.default_rng(4).standard_normal((5, CHANNELS))
    # A dense covariance with eigenvalues over eight powers of ten keeps some eight digits of ln L.
    everything = np.ones(len(dense.data), bool)
    found = linear.information()
    assert found.log_constant + found.log_likelihood(signals_k) == pytest.approx(
        dense.log_likelihood(signals_k, everything), abs=1e-4
    )
    some = np.random.default_rng(5).uniform(size=len(dense.data)) < 0.7
    part = linear.information(some)
    assert part.log_constant + part.log_likelihood(signals_k) == pytest.approx(
        dense.log_likelihood(signals_k, some), abs=1e-4
    )


def test_evidence_is_the_mean_of_dense_gaussians_over_the_prior(
    fit: JointFit, dense: Dense, model: TroughModel, bank: CompressedBank
) -> None:
    linear = linear_model(fit, prior_of(fit), bank.directions)
    found = evidence(linear.information(), model, bank, np.random.default_rng(6))
    signals_k = model.signal_k(model.draw_prior(np.random.default_rng(7), 100_000))
    everything = np.ones(len(dense.data), bool)
    values = dense.log_likelihood(signals_k, everything)
    mean = float(logsumexp(values) - np.log(len(values)))
    # Each side is a mean over draws of which several hundred carry the weight: 5 % each, and three times that.
    assert found.trough == pytest.approx(mean, abs=0.2)
    assert found.no_signal == pytest.approx(dense.log_likelihood(np.zeros((1, CHANNELS)), everything).item(), abs=1e-4)


@pytest.mark.parametrize("over", ["channels", "bins"])
def test_left_out_rows_are_predicted_as_by_brute_force(
    fit: JointFit, dense: Dense, model: TroughModel, bank: CompressedBank, over: str
) -> None:
    good = fit.subtraction.good
    groups = channel_blocks(good) if over == "channels" else np.nonzero(good)[0]
    linear = linear_model(fit, prior_of(fit), bank.directions)
    rng = np.random.default_rng(8)
    found = cross_validated(linear, groups, model, bank, rng, evidence(linear.information(), model, bank, rng))
    signals_k = model.signal_k(model.draw_prior(np.random.default_rng(9), 100_000))
    for number, value in enumerate(found):
        others, left_out = groups != number, groups == number
        weight = dense.log_likelihood(signals_k, others)
        both = dense.log_likelihood(signals_k, others | left_out)
        brute = float(logsumexp(both) - logsumexp(weight))
        # A tenth of error by draws on either side at worst.
        assert value == pytest.approx(brute, abs=0.3)


def test_blocks_are_contiguous_and_share_all_channels(fit: JointFit) -> None:
    good = fit.subtraction.good
    blocks = channel_blocks(good)
    channel = np.nonzero(good)[1]
    order = np.argsort(channel, kind="stable")
    assert np.all(np.diff(blocks[order]) >= 0)
    counts = [len(np.unique(channel[blocks == number])) for number in range(blocks.max() + 1)]
    assert sum(counts) == CHANNELS - 1
    assert max(counts) - min(counts) <= 1


def test_the_prior_is_a_power_law_with_falling_terms(model: TroughModel) -> None:
    spectra = spectra_on(model, BINS, CHANNELS, 1e-4, 2)
    frequency, good = spectra["frequency_mhz"].values, spectra["flag"].values == 0
    measured = spectra["antenna_temperature_k"].values
    for name in ("log-polynomial", "power-series", "galaxy-ionosphere"):
        family = family_from(Foreground(family=name, terms=6), frequency)
        prior = coefficient_prior(family, frequency, measured, good, 2.5)
        for number, mask in enumerate(good):
            law = family.evaluate(frequency, prior.mean[number])
            assert np.diff(np.log(law)) / np.diff(np.log(frequency)) == pytest.approx(np.full(CHANNELS - 1, -2.5))
            assert np.mean(law[mask] / measured[number, mask]) == pytest.approx(1.0, abs=0.1)
            assert prior.sd[number] / prior.sd[number, 0] == pytest.approx(DECAY ** -np.arange(6.0))
            middle_k = np.interp(np.sqrt(frequency[0] * frequency[-1]), frequency, law)
            relative = prior.sd[number, 0] / (middle_k if family.linear else 1.0)
            assert relative == pytest.approx(1.0, abs=0.01)  # the law bends between channels


# ---------------------------------------------------------------- judging


@pytest.fixture(scope="module")
def six(config: Config) -> tuple[list[Judged], TroughModel, xr.Dataset]:
    model = model_on(config, 96)
    spectra = spectra_on(model, 4, 96, 2e-6, 12)
    tried = candidates(["log-polynomial"], range(5, 9), CONFIGURED, ensemble=False)
    done: list[int] = []
    rows = compare(spectra, tried, model, 1, None, done.append)
    assert sum(done) == len(tried)
    return rows, model, spectra


def test_a_foreground_of_six_terms_is_known_again(six: tuple[list[Judged], TroughModel, xr.Dataset]) -> None:
    rows = six[0]
    assert all(row.fitted for row in rows)
    for value in ("bic", "log_evidence", "predicted_bins", "predicted_channels"):
        sign = 1.0 if value == "bic" else -1.0
        assert min(rows, key=lambda row: sign * getattr(row, value)).terms == 6
    chosen = marked(rows)
    assert chosen is not None
    assert rows[chosen].terms == 6
    for row in rows:
        if row.terms < 6:
            assert row.chance < 1e-6
            assert row.white is not None
            assert row.white.lag_one.deviation > 4.0
        else:
            # Three fits of the same noise: one chance in a thousand each.
            assert row.chance > 1e-3
            assert row.white is not None
            assert abs(row.white.lag_one.deviation) < 3.3
            assert abs(row.mean[1] - TROUGH[1]) < 4.0 * row.sd[1]
            assert abs(row.mean[4] - TROUGH[4]) < 4.0 * row.sd[4]


def test_numbers_agree_with_each_other(fit: JointFit, model: TroughModel, bank: CompressedBank) -> None:
    row = judged(fit, SERIES, model, bank, np.random.default_rng(10))
    rows = int(fit.subtraction.good.sum())
    assert row.chi_squared_none == pytest.approx(fit.subtraction.chi_squared, abs=1e-6)
    assert row.freedom_none == fit.subtraction.degrees_of_freedom
    assert row.chi_squared_any <= row.chi_squared_trough <= row.chi_squared_none
    assert row.bic - row.aic == pytest.approx((np.log(rows) - 2.0) * (4 * BINS + 6))
    assert row.white is not None
    # The residual whose whiteness is judged is the one whose chi-squared is printed.
    assert row.white.chi_squared == pytest.approx(row.chi_squared_trough, abs=1e-6)
    sigma = np.sqrt(fit.spectra["noise_variance"].values)
    assert row.dynamic_range == pytest.approx(np.nanmax(fit.subtraction.foreground_k / sigma))


def test_the_best_trough_is_the_one_put_in(model: TroughModel, fit: JointFit) -> None:
    information = fit.information
    at_truth = -2.0 * information.log_likelihood(model.signal_k(TROUGH)).item()
    _, value = best_trough(information, model, fit.posterior)
    assert value <= at_truth


def test_what_cannot_be_fitted_says_why_and_stops_nothing(model: TroughModel) -> None:
    spectra = spectra_on(model, BINS, CHANNELS, 1e-4, 2)
    cold = spectra.copy(deep=True)
    cold["antenna_temperature_k"][1, 3] = -5.0
    tried = [Foreground(family="log-polynomial", terms=4), Foreground(family="power-series", terms=4)]
    rows = compare(cold, tried, model, 1, None, lambda done: None)
    assert "bin 1: 1 temperatures not positive" in rows[0].problem
    assert not rows[0].fitted
    assert rows[1].fitted
    assert marked(rows[:1]) is None


# ---------------------------------------------------------------- the rule


def row_of(terms: int, c_mhz: float, error_mhz: float, *, fits: bool = True, log_evidence: float = 0.0) -> Judged:
    mean, sd = np.zeros(6), np.ones(6)
    mean[1], sd[1] = c_mhz, error_mhz
    return Judged(
        Foreground(family="log-polynomial", terms=terms),
        chi_squared_trough=100.0 if fits else 300.0,
        freedom_trough=100,
        log_evidence=log_evidence,
        mean=mean,
        sd=sd,
    )


def test_the_rule_asks_for_a_fit_and_for_rest() -> None:
    rows = [row_of(4, 70.0, 1.0, fits=False), row_of(5, 75.0, 1.0), row_of(6, 71.0, 1.0), row_of(7, 71.4, 1.0)]
    assert still_beyond(rows[1], rows) is False
    # An error that grows from 1 to 3 MHz lets chance move C by 2.8 MHz: a move of 4 tells nothing, one of 6 does.
    assert still_beyond(row_of(5, 75.0, 1.0), [row_of(6, 71.0, 3.0)]) is True
    assert still_beyond(row_of(5, 77.0, 1.0), [row_of(6, 71.0, 3.0)]) is False
    assert still_beyond(rows[2], rows) is True
    assert still_beyond(rows[3], rows) is None
    assert marked(rows) == 2
    assert marked(rows[:1]) is None
    assert marked(rows[1:2]) == 0  # one number of terms need only fit
    series = Judged(
        Foreground(family="power-series", terms=5),
        chi_squared_trough=100.0,
        freedom_trough=100,
        log_evidence=1.0,
        mean=np.zeros(6),
        sd=np.ones(6),
    )
    assert marked([*rows, series]) == 4


def test_candidates_are_what_was_asked_for() -> None:
    every = candidates(None, None, CONFIGURED, ensemble=False)
    assert [(each.family, each.terms) for each in every] == [
        (family, terms) for family, counts in COUNTED.items() for terms in counts
    ]
    process = next(each for each in every if each.family == "gaussian-process")
    assert (process.amplitude, process.length) == (1e-3, 0.5)
    twelve = CONFIGURED.model_copy(update={"terms": 12})
    assert twelve in candidates(None, None, twelve, ensemble=False)
    assert candidates(None, None, CONFIGURED, ensemble=True)[-1].family == "ensemble"
    steep = Foreground(family="power-series", terms=5, index=2.7)
    assert {each.index for each in candidates(["power-series"], [4, 6], steep, ensemble=False)} == {2.7}
    with pytest.raises(InputError, match="'splines' is unknown") as raised:
        candidates(["splines", "ensemble"], None, CONFIGURED, ensemble=False)
    assert len(raised.value.problems) == 2
    with pytest.raises(InputError, match="terms must be at least 3"):
        candidates(["galaxy-ionosphere"], [2], CONFIGURED, ensemble=False)


# ---------------------------------------------------------------- page, table, plot, command


def test_page_table_and_plot_say_the_same(six: tuple[list[Judged], TroughModel, xr.Dataset], config: Config) -> None:
    rows, _, spectra = six
    failed = Judged(Foreground(family="power-series", terms=4), problem="the family is far from the data")
    shown = [*rows, failed]
    products = Products({"spectra.nc": spectra})
    page = compare_page(shown, products, config)
    assert page.count("\n> log-polynomial 6") == 2
    assert "Marked (>): log-polynomial 6." in page
    assert "not fitted: power-series 4: the family is far from the data" in page
    assert "INVENTED" in page
    table = list(csv.DictReader(io.StringIO(compare_csv(shown))))
    assert [line["marked"] for line in table] == ["", "yes", "", "", ""]
    assert float(table[1]["frequency_c_mhz_mean"]) == pytest.approx(rows[1].mean[1], rel=1e-7)
    assert float(table[1]["bic"]) == pytest.approx(rows[1].bic, rel=1e-7)
    assert table[4]["bic"] == ""
    with look():
        figure = compare_figure(shown, marked(shown), products, config)
        assert png(figure).startswith(b"\x89PNG")
    labels = [
        text.get_text() for axes in figure.axes for text in (axes.get_legend().get_texts() if axes.get_legend() else [])
    ]
    assert labels == ["log-polynomial", "power-series", "marked"]


@pytest.mark.parametrize(
    ("text", "numbers"), [("4-10", range(4, 11)), ("5,7", [5, 7]), ("6", [6]), ("8,4-5", [4, 5, 8])]
)
def test_numbers_of_terms_as_people_write_them(text: str, numbers: Any) -> None:
    assert numbers_from(text) == list(numbers)


@pytest.mark.parametrize("text", ["", "a", "4-", "10-4", "4-5-6", "-3", "4.5"])
def test_other_numbers_are_refused(text: str) -> None:
    with pytest.raises(InputError, match="--terms"):
        numbers_from(text)


def test_the_command_takes_a_folder_or_a_configuration(tmp_path: Path) -> None:
    # A mock of 16 channels, then the same from its folder: page, table and plot are the same to the digit.
    source = tmp_path / "campaign.toml"
    source.write_text(small_with(), encoding="utf-8")
    words = ["--families", "log-polynomial", "--terms", "5"]
    call = CliRunner().invoke(app, ["run", str(source), "--out", str(tmp_path / "run")])
    assert call.exit_code == 0, call.output
    for given, out in ((source, "one"), (tmp_path / "run", "two")):
        call = CliRunner().invoke(app, ["compare", str(given), "--out", str(tmp_path / out), *words])
        assert call.exit_code == 0, call.output
        assert "What stands in the columns" in call.output
    for name in ("compare.txt", "compare.csv", "compare.png"):
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes()
    again = CliRunner().invoke(app, ["compare", str(source), "--out", str(tmp_path / "one"), *words])
    assert again.exit_code == EXIT_INPUT
    assert "already holds compare.txt, compare.csv, compare.png" in again.output


def test_a_folder_of_measured_spectra_gives_them_back(tmp_path: Path, model: TroughModel, config: Config) -> None:
    spectra = spectra_on(model, BINS, CHANNELS, 1e-4, 2)
    settings = Foreground(family="gaussian-process", terms=4, amplitude=1e-3, length=0.5)
    packed = bundle(joint_fit(spectra, settings, model, np.random.default_rng(3)))
    write_product(packed, tmp_path / "bundle.nc")
    tree = {name: getattr(config, name).model_dump(mode="json") for name in ("run", "foreground", "turning_points")}
    (tmp_path / "run.json").write_text(json.dumps({"configuration": tree}), encoding="utf-8")
    found, products = read_run(tmp_path)
    assert found.foreground == config.foreground
    back = products.dataset("spectra.nc")
    for name in ("antenna_temperature_k", "noise_variance", "systematic_modes", "response_modes"):
        np.testing.assert_array_equal(back[name].values, spectra[name].values)


def test_what_is_no_run_is_refused(tmp_path: Path) -> None:
    call = CliRunner().invoke(app, ["compare", str(tmp_path)])
    assert call.exit_code == EXIT_INPUT
    assert "not the folder of a run" in call.output
