"""Figures and summary: what they show agrees with the products, on sheets on which all can be read."""

from __future__ import annotations

import io
import itertools
from dataclasses import dataclass
from pathlib import Path

import matplotlib
import numpy as np
import pytest
import xarray as xr
from matplotlib.figure import Figure
from matplotlib.image import imread
from matplotlib.text import Text

from reduce.combine import Information
from reduce.handoff import bundle, information_from
from reduce.joint_fit import JointFit, covariance_modes_k, family_from, joint_fit
from reduce.pipeline import limits_on_gas
from reduce.removed import removed_from_signal
from reduce.report.facts import (
    beyond_foreground_k,
    bin_labels,
    left_of_signal_k,
    systematic_sigma_k,
    true_points,
)
from reduce.report.plots import plots
from reduce.report.residuals_plot import GROUP, group_means, residuals_figure
from reduce.report.spectra_plot import spectra_figure
from reduce.report.style import DPI, WIDTH_IN, look
from reduce.report.summary import COLUMNS, summary
from reduce.report.transfer_plot import measured_shapes, transfer_figure
from reduce.report.trough_plot import trough_figure
from reduce.report.turning_points_plot import CELLS, highest_density_level, smooth_density, turning_points_figure
from reduce.runner import Products
from reduce.transfer import transfer
from reduce.trough_model import TroughModel, trough_model
from reduce.turning_points import sample_posterior, summarise
from sims.config import Config, FitConfig, NoSignal
from sims.config_load import load_config
from sims.schema import SPECTRA, TRUTH, describe

BINS, CHANNELS = 3, 96
NAMES = {"spectra.png", "residuals.png", "trough.png", "turning_points.png", "transfer.png", "shapes.png"}


@dataclass(frozen=True)
class Case:
    """A small campaign, fitted."""

    products: Products
    config: Config
    model: TroughModel
    fit: JointFit

    @property
    def measured(self) -> tuple[Products, FitConfig]:
        """The same as somebody's measurement: no truth, and a configuration of the fit alone."""
        products = Products({name: made for name, made in self.products.items() if name != "truth.nc"})
        spectra = products.dataset("spectra.nc").copy(deep=True)
        spectra["signal_response"][:] = 1.0
        spectra.attrs = {"bin_labels": ["low", "dusk", "high"], "signal_response_given": 0, "source": "field.csv"}
        products["spectra.nc"] = spectra
        run = self.config.run.model_copy(update={"name": "Measured"})
        config = FitConfig(run=run, foreground=self.config.foreground, turning_points=self.config.turning_points)
        return products, config


def small_config() -> Config:
    demo = load_config(Path(__file__).parents[1] / "configs" / "demo.toml")
    boresight = demo.vantage.boresight
    assert boresight.kind == "fixed"
    return demo.model_copy(
        update={
            "foreground": demo.foreground.model_copy(update={"terms": 5}),
            "channels": demo.channels.model_copy(update={"count": CHANNELS}),
            "turning_points": demo.turning_points.model_copy(update={"walkers": 64, "steps": 400}),
            "bins": demo.bins.model_copy(update={"count": BINS}),
            "vantage": demo.vantage.model_copy(
                update={
                    "boresight": boresight.model_copy(update={"directions_deg": boresight.directions_deg[:BINS]}),
                }
            ),
        }
    )


def observed(config: Config, model: TroughModel, frequency: np.ndarray, width: np.ndarray) -> Products:
    """A foreground that a log polynomial holds, the configured trough, a ripple as systematic, and noise."""
    rng = np.random.default_rng(11)
    x = np.log(frequency / 70.0)
    number = np.arange(BINS)[:, None]
    foreground = 2500.0 * (1 + 0.2 * number) * np.exp(-(2.5 + 0.02 * number) * x - 0.04 * x**2)
    response = 0.65 + 0.03 * number + 0.02 * x
    points = (config.signal.b, config.signal.c, config.signal.d)
    signal = model.signal_k(
        np.array([point.frequency_mhz for point in points] + [point.temperature_mk for point in points])
    )
    modes = np.stack([2e-6 * foreground * np.cos(2 * np.pi * frequency / 30.0), 0.01 * foreground])
    sigma = (foreground + 150.0) / np.sqrt(width * 1e6 * 1e6)
    temperature = foreground + response * signal + sigma * rng.standard_normal(foreground.shape)
    temperature += np.tensordot([0.7, 0.1], modes, axes=1)
    flag = np.zeros(foreground.shape, dtype=np.uint8)
    flag[:, 57] = 1
    flag[1, 80:84] = 2
    axes = {"frequency_mhz": ("channel", frequency), "width_mhz": ("channel", width)}
    cells = ("bin", "channel")
    spectra = xr.Dataset(
        {
            **axes,
            "antenna_temperature_k": (cells, np.where(flag == 0, temperature, np.nan)),
            "noise_variance": (cells, np.where(flag == 0, sigma**2, np.nan)),
            "signal_response": (cells, response),
            "flag": (cells, flag),
            "weight_s": ("bin", np.array([3.6e5, 3.6e5, 7.2e5])),
            "systematic_modes": (("mode", *cells), modes),
            "response_modes": (("mode", *cells), np.stack([0.0 * response, 0.01 * response])),
        },
        attrs={
            "sky": "invented",
            "engine": '{"nodes": 20, "error_k": 2e-9, "evaluations": 20}',
            "mode_names": ["receiver.ripple_fraction", "receiver.scale"],
        },
    )
    truth = xr.Dataset(
        {
            **axes,
            "signal_k": ("channel", signal),
            "foreground_k": (cells, foreground),
            "signal_response": (cells, response),
        }
    )
    return Products({"spectra.nc": describe(spectra, SPECTRA), "truth.nc": describe(truth, TRUTH)})


@pytest.fixture(scope="module")
def case() -> Case:
    config = small_config()
    edges = np.linspace(40.0, 120.0, CHANNELS + 1)
    frequency, width = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges)
    model = trough_model(config.turning_points, frequency, width)
    products = observed(config, model, frequency, width)
    rng = np.random.default_rng(5)
    fit = joint_fit(products.dataset("spectra.nc"), config.foreground, model, rng)
    products["bundle.nc"] = bundle(fit)
    products["transfer.nc"] = transfer(products.dataset("bundle.nc"), model, rng)
    information: Information = information_from(products.dataset("bundle.nc"))
    posterior = sample_posterior(information, model, config.turning_points, rng, lambda steps: None)
    products["posterior.nc"] = posterior.samples
    products["turning_points.json"] = {
        **summarise(posterior, model, information),
        "gas": limits_on_gas(posterior, config),
    }
    return Case(products, config, model, fit)


@pytest.fixture(scope="module")
def pictures(case: Case) -> dict[str, bytes]:
    return plots(case.products, case.config, case.model)


@pytest.fixture(scope="module")
def of_mock(case: Case) -> dict[str, Figure]:
    return figures(case.products, case.config, case.model)


@pytest.fixture(scope="module")
def of_measurement(case: Case) -> dict[str, Figure]:
    return figures(*case.measured, case.model)


def figures(products: Products, config: FitConfig, model: TroughModel) -> dict[str, Figure]:
    """Figures with everything in its place."""
    with look():
        made = _figures(products, config, model)
        for figure in made.values():
            figure.draw_without_rendering()
    return made


def _figures(products: Products, config: FitConfig, model: TroughModel) -> dict[str, Figure]:
    return {
        "spectra": spectra_figure(products, config),
        "residuals": residuals_figure(products, config),
        "trough": trough_figure(products, config, model),
        "turning_points": turning_points_figure(products, config, model),
        "transfer": transfer_figure(products, config, model),
    }


def texts_of(figure: Figure) -> list[Text]:
    """Every text that is drawn, but for the numbers along the axes."""
    ticks = set()
    for axes in figure.findobj(matplotlib.axes.Axes):
        for axis in (axes.xaxis, axes.yaxis):
            ticks |= {label for which in ("major", "minor") for label in axis.get_ticklabels(which=which)}
            ticks |= {label for tick in (*axis.majorTicks, *axis.minorTicks) for label in (tick.label1, tick.label2)}
    return [
        text for text in figure.findobj(Text) if text not in ticks and text.get_visible() and text.get_text().strip()
    ]


def words(figure: Figure) -> str:
    return " ".join(text.get_text() for text in texts_of(figure))


def test_every_figure_is_a_page_wide_png(pictures: dict[str, bytes]) -> None:
    assert set(pictures) == NAMES
    for name, picture in pictures.items():
        assert picture.startswith(b"\x89PNG\r\n\x1a\n"), name
        pixels = imread(io.BytesIO(picture))
        height, width = pixels.shape[:2]
        assert width == round(WIDTH_IN * DPI)
        assert 0.4 * width < height < 1.42 * width  # no taller than a page of A4
        ink = np.mean(pixels[..., :3].min(axis=2) < 0.9)
        assert 0.02 < ink < 0.6, name  # neither blank nor blotted


def test_the_same_products_give_the_same_bytes_whatever_the_settings_round_them(
    case: Case, pictures: dict[str, bytes]
) -> None:
    with matplotlib.rc_context({"axes.grid": True, "font.size": 20.0, "lines.linewidth": 5.0}):
        before = dict(matplotlib.rcParams)
        again = plots(case.products, case.config, case.model)
        assert dict(matplotlib.rcParams) == before
    assert again == pictures


@pytest.mark.parametrize("which", ["of_mock", "of_measurement"])
def test_no_text_is_clipped_small_or_on_other_text(which: str, request: pytest.FixtureRequest) -> None:
    for name, figure in request.getfixturevalue(which).items():
        page = figure.bbox
        boxes = [(text, text.get_window_extent()) for text in texts_of(figure)]
        assert len(boxes) > 5
        for text, box in boxes:
            where = f"{name}: {text.get_text()!r}"
            assert text.get_fontsize() >= 8.0, where
            assert box.x0 >= page.x0 - 1, where  # a pixel of antialiasing
            assert box.x1 <= page.x1 + 1, where
            assert box.y0 >= page.y0 - 1, where
            assert box.y1 <= page.y1 + 1, where
        for (one, box), (other, against) in itertools.combinations(boxes, 2):
            assert not box.padded(-1).overlaps(against.padded(-1)), f"{name}: {one} on {other}"


def test_every_panel_has_its_units(of_mock: dict[str, Figure]) -> None:
    pure = ("redshift of the line", "signal response w", "direction, best measured first")
    for name, figure in of_mock.items():
        labels = [label for axes in figure.axes if axes.axison for label in (axes.get_xlabel(), axes.get_ylabel())]
        written = [label for label in labels if label]
        assert len(written) >= 2, name
        assert all(label.endswith((", MHz", ", mK", ", K")) or label in pure for label in written), written


def test_a_figure_names_its_campaign_and_says_when_it_is_invented(
    case: Case, of_mock: dict[str, Figure], of_measurement: dict[str, Figure]
) -> None:
    for figure in of_mock.values():
        assert case.config.run.name in words(figure)
        assert "Invented sky and campaign" in words(figure)
    for figure in of_measurement.values():
        assert "Measured" in words(figure)
        assert "nvented" not in words(figure)


def test_a_truth_is_drawn_only_where_there_is_one(
    of_mock: dict[str, Figure], of_measurement: dict[str, Figure]
) -> None:
    said = {"residuals": "left of the true signal", "trough": "truth put in", "turning_points": "truth put in"}
    for name, phrase in said.items():
        assert phrase in words(of_mock[name])
    for name, figure in of_measurement.items():
        assert not any(phrase in words(figure) for phrase in said.values()), name


def test_a_name_with_signs_of_mathematics_is_written_as_it_is(case: Case) -> None:
    run = case.config.run.model_copy(update={"name": "cost $5_0$ to $\\frac"})
    with look():
        figure = spectra_figure(case.products, case.config.model_copy(update={"run": run}))
        figure.draw_without_rendering()
    assert "cost $5_0$ to $\\frac" in words(figure)


def test_what_is_left_of_a_signal_is_what_the_joint_fit_leaves(case: Case) -> None:
    packed, fit = case.products.dataset("bundle.nc"), case.fit
    frequency = packed["frequency_mhz"].values
    signal = -0.2 * np.exp(-0.5 * ((frequency - 82.0) / 6.0) ** 2)
    expected = removed_from_signal(
        fit.subtraction,
        frequency_mhz=frequency,
        family=family_from(case.config.foreground, frequency),
        signal_response=packed["signal_response"].values,
        signal_k=signal,
    ).left_k
    # The generalised fit and the bin-by-bin one agree because modes have no part along the foreground; the tangents of
    # the first and the last fit differ by the share of the systematics, so 1e-6 of the signal.
    np.testing.assert_allclose(left_of_signal_k(packed, signal), expected, atol=2e-7)
    assert np.nanmax(np.abs(expected)) > 1e-3


def test_a_foreground_leaves_nothing_and_flagged_cells_are_absent(case: Case) -> None:
    packed = case.products.dataset("bundle.nc")
    tangent = np.moveaxis(packed["foreground_modes"].values, 1, -1)
    left = beyond_foreground_k(packed, tangent)
    assert np.array_equal(np.isnan(left[..., 0]), packed["flag"].values != 0)
    scale = np.nanmax(np.abs(tangent))
    assert np.nanmax(np.abs(left)) < 1e-12 * scale  # rounding, two passes


def test_systematics_that_the_foreground_imitates_add_nothing(case: Case) -> None:
    """The mode of 1 % of the foreground is hundreds of times the ripple, yet the ripple is what is left."""
    packed = case.products.dataset("bundle.nc")
    sigma = systematic_sigma_k(packed)
    assert sigma is not None
    ripple = beyond_foreground_k(packed, covariance_modes_k(packed, np.zeros(CHANNELS)))[..., 0]
    gain_error = 0.01 * packed["fiducial_signal_k"].values * packed["signal_response"].values
    extra = beyond_foreground_k(packed, gain_error)
    np.testing.assert_allclose(sigma, np.hypot(ripple, extra), rtol=1e-3, atol=1e-6)
    bare = packed.drop_vars(["systematic_modes", "response_modes"])
    assert systematic_sigma_k(bare) is None


def test_group_means_weigh_by_noise_and_leave_flagged_channels_out() -> None:
    frequency = np.arange(2.0 * GROUP + 3)
    sigma = np.where(frequency % 2 == 0, 1.0, 2.0)
    values = np.where(frequency % 2 == 0, 3.0, 8.0)
    values[GROUP : 2 * GROUP] = np.nan
    centre, mean, error = group_means(frequency, values, sigma)
    # weights 1 and 1/4: of 8 channels (4 * 3 + 8) / 5; of the last 3, two even, (2 * 3 + 2) / 2.25
    np.testing.assert_allclose(mean, [4.0, 8.0 / 2.25])
    np.testing.assert_allclose(error, [5.0**-0.5, 2.25**-0.5])
    np.testing.assert_allclose(centre, [(12.0 + 16.0 / 4.0) / 5.0, 17.0])


def test_highest_density_regions_of_normal_draws_have_the_area_of_the_ellipse() -> None:
    """Area -2 ln(1 - p) pi sx sy, grown by the kernel: each variance by 1 + n^(-1/3)."""
    rng = np.random.default_rng(3)
    draws = 40_000
    pair = rng.normal([70.0, -120.0], [1.5, 25.0], (draws, 2))
    density = smooth_density(pair, np.array([[40.0, -400.0], [100.0, 100.0]]), draws)
    cell = np.prod([edge[1] - edge[0] for edge in density.edges])
    for mass in (0.68, 0.95):
        area = cell * np.sum(density.cells >= highest_density_level(density.cells, mass))
        ellipse = -2.0 * np.log(1.0 - mass) * np.pi * 1.5 * 25.0 * (1.0 + draws ** (-1.0 / 3.0))
        assert area == pytest.approx(ellipse, rel=0.03)  # noise of the draws along the contour, and cells of 1 %


def test_density_does_not_fall_off_at_a_bound_of_the_prior() -> None:
    rng = np.random.default_rng(4)
    box = np.array([[40.0, -40.0], [58.0, 10.0]])
    density = smooth_density(rng.uniform(box[0], box[1], (200_000, 2)), box, 2000.0)
    assert density.cells.shape == (CELLS, CELLS)
    np.testing.assert_allclose(np.array(density.range), box)
    level = 200_000 / CELLS**2
    # 22 draws a cell, averaged over some hundred cells by the kernel: 2 %, and five times that
    np.testing.assert_allclose(density.cells, level, rtol=0.1)


def test_measured_shapes_are_the_signal_to_noise_of_independent_parameters() -> None:
    """s = a u + c v with standard deviations 3 and 1, u and v orthogonal, noise 0.5: ratios 6 and 2."""
    u, v = np.eye(6)[1], np.eye(6)[4]
    unit = np.sqrt(0.75) * np.array([[1.0, 1.0], [1.0, -1.0], [-1.0, 1.0], [-1.0, -1.0]])  # sample covariance 1
    found = measured_shapes(np.eye(6) / 0.5, 20.0 * u + unit @ np.array([3.0 * u, v]))
    np.testing.assert_allclose(found.signal_to_noise, [6.0, 2.0, 0.0, 0.0], atol=1e-12)
    np.testing.assert_allclose(found.shape_k[:2], [3.0 * u, v], atol=1e-12)


def test_summary_has_the_numbers_of_the_posterior(case: Case) -> None:
    page = summary(case.products, case.config)
    found = case.products["turning_points.json"]
    truth = true_points(case.products, case.config)
    assert truth is not None
    for point, marginals in found["points"].items():
        for at, name in enumerate(("frequency_mhz", "temperature_mk")):
            low, high = marginals[name]["interval_68"]
            line = next(line for line in page.splitlines() if f"{low:.2f} to {high:8.2f}" in line)
            assert f"{marginals[name]['median']:.2f}" in line
            assert line.endswith(f"{truth[point][at]:.2f}")
    numbers = case.products.dataset("bundle.nc").attrs
    chi, degrees = numbers["foreground_chi_squared"], numbers["foreground_degrees_of_freedom"]
    assert (
        f"{chi:.1f} /{degrees:6d} = {chi / degrees:.3f}; 1 ± {np.sqrt(2.0 / degrees):.3f} if nothing is missing" in page
    )
    best = found["best_trough"]["chi_squared"], found["best_trough"]["degrees_of_freedom"]
    assert f"{best[0]:.1f} /{best[1]:6d} = {best[0] / best[1]:.3f}" in page
    assert f"{numbers['signal_surviving_fraction']:.2%}" in page
    assert f"{found['detection_statistic']:.2f}. What counts as a detection" in page
    assert f"{max(found['convergence']['split_r_hat'].values()):.4f}" in page
    assert "20 nodes in frequency, off between them by 0.002 microkelvin" in page
    assert "log-polynomial, 5 terms a bin" in page
    assert "receiver.ripple_fraction" in page
    assert "3 bins by pointing, 96 channels from 40 to 120 MHz, 1 never used" in page
    assert "integration 400 h in all, 100 to 200 h a bin" in page
    assert "INVENTED" in page
    assert "knowledge.index_field" in page
    noise_mk = 1e3 * np.sqrt(np.median(case.products.dataset("spectra.nc")["noise_variance"].values[:, 0]))
    assert f"{noise_mk:.3g} mK at 40.4 MHz" in page


def test_summary_is_a_page_of_plain_lines_with_all_flags(case: Case) -> None:
    long_flag = "C is colder than unheated gas can be in 99% of the posterior: " + "the data may hold foreground " * 6
    found = {**case.products["turning_points.json"], "flags": ["temperature_d_mk runs into its prior", long_flag]}
    page = summary(Products({**case.products, "turning_points.json": found}), case.config)
    lines = page.splitlines()
    assert page.endswith("\n")
    assert len(lines) <= 60  # of a printed page
    assert max(len(line) for line in lines) <= COLUMNS
    flat = " ".join(page.split())
    for flag in found["flags"]:
        assert " ".join(flag.split()) in flat
    unflagged = summary(Products({**case.products, "turning_points.json": {**found, "flags": []}}), case.config)
    assert "Flags\n  none\n" in unflagged


def test_summary_says_when_the_sampler_is_not_to_be_trusted(case: Case) -> None:
    found = case.products["turning_points.json"]
    for converged, said in ((True, ": converged"), (False, ": NOT CONVERGED")):
        changed = {**found, "convergence": {**found["convergence"], "converged": converged}}
        assert said in summary(Products({**case.products, "turning_points.json": changed}), case.config)


def test_summary_of_a_measurement_knows_no_truth_and_no_forward_model(case: Case) -> None:
    products, config = case.measured
    page = summary(products, config)
    assert "truth" not in page
    assert "INVENTED" not in page
    assert "no w came with the data" in page
    assert "any model of sky, beam and receiver" in page
    assert max(len(line) for line in page.splitlines()) <= COLUMNS


def test_summary_of_a_mock_without_signal_says_so(case: Case) -> None:
    config = case.config.model_copy(update={"signal": NoSignal(kind="none")})
    truth = case.products.dataset("truth.nc")
    products = Products({**case.products, "truth.nc": truth.assign(signal_k=0.0 * truth["signal_k"])})
    page = summary(products, config)
    assert "no signal was put in" in page
    assert true_points(products, config) is None
    with look():
        assert "left of the true signal" not in words(residuals_figure(products, config))


def test_summary_names_what_is_switched_off(case: Case) -> None:
    assert "surface.reflection" not in summary(case.products, case.config)
    dark = case.config.model_copy(update={"surface": case.config.surface.model_copy(update={"reflection": False})})
    assert "surface.reflection is off" in summary(case.products, dark)


def test_bins_are_named_by_what_distinguishes_them(case: Case) -> None:
    assert bin_labels(case.products, case.config)[1] == ["0: 70°, −50°", "1: 115°, −10°", "2: 160°, +30°"]
    products, config = case.measured
    assert bin_labels(products, config) == ("bin", ["low", "dusk", "high"])
    by_time = case.config.model_copy(
        update={"bins": case.config.bins.model_copy(update={"by": "sidereal-time"})},
    )
    assert bin_labels(case.products, by_time)[1] == ["0: 0 to 8 h", "1: 8 to 16 h", "2: 16 to 24 h"]


def test_one_bin_without_systematics_or_integration_can_be_reported(case: Case) -> None:
    """The poorest input that the fit allows: one bin, few channels, no modes."""
    whole = case.products.dataset("spectra.nc")
    spectra = whole[
        ["frequency_mhz", "width_mhz", "antenna_temperature_k", "noise_variance", "signal_response", "flag"]
    ]
    spectra = spectra.isel(bin=[0], channel=slice(0, None, 4))
    spectra.attrs = {
        "bin_labels": "all",
        "signal_response_given": 1,
    }  # a list of one comes back from a file as its item
    _, config = case.measured
    model = trough_model(config.turning_points, spectra["frequency_mhz"].values, spectra["width_mhz"].values)
    fit = joint_fit(spectra, config.foreground, model, np.random.default_rng(2))
    products = Products({**case.products, "spectra.nc": spectra, "bundle.nc": bundle(fit)})
    del products["truth.nc"]
    assert set(plots(products, config, model)) == NAMES
    page = summary(products, config)
    assert "1 bin, 24 channels" in page
    assert "0 systematic modes" in page
