"""Reading spectra that somebody measured: NetCDF, and covariances beside tables."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from spectra_cases import FREQUENCY_MHZ, problems_of, table_text, written

from reduce.spectra import diagonal_and_modes, read_spectra, spectra_problems
from sims.products import write_product
from sims.schema import SPECTRA, describe

RNG = np.random.default_rng(17)


def netcdf_spectra(bins: int = 2) -> xr.Dataset:
    shape = (bins, FREQUENCY_MHZ.size)
    dims = ("bin", "channel")
    return describe(
        xr.Dataset(
            {
                "frequency_mhz": ("channel", FREQUENCY_MHZ),
                "width_mhz": ("channel", np.full(FREQUENCY_MHZ.size, 5.0)),
                "antenna_temperature_k": (dims, RNG.uniform(1000.0, 3000.0, shape)),
                "noise_variance": (dims, np.full(shape, 1e-4)),
                "signal_response": (dims, np.full(shape, 0.6)),
                "flag": (dims, np.zeros(shape, np.uint8)),
            }
        ),
        SPECTRA,
    )


# ---------------------------------------------------------------- covariances


def dense_covariance(rows: int, modes: int) -> np.ndarray:
    sigma = RNG.uniform(0.01, 0.5, rows)
    factors = RNG.standard_normal((rows, modes)) * 0.3
    return np.asarray(np.diag(sigma**2) + factors @ factors.T)


def covariance_file(folder: Path, matrix: np.ndarray) -> Path:
    path = folder / "covariance.csv"
    np.savetxt(path, matrix, delimiter=",", fmt="%.17g")
    return path


def without_sigma(text: str) -> str:
    return "\n".join(line.rpartition(",")[0] for line in text.splitlines())


@pytest.mark.parametrize("modes", [0, 1, 5, 40])
def test_a_dense_covariance_is_split_without_loss(modes: int) -> None:
    matrix = dense_covariance(30, modes)
    variance, columns = diagonal_and_modes(matrix)
    again = np.diag(variance) + columns.T @ columns
    scale = np.sqrt(np.outer(np.diag(matrix), np.diag(matrix)))
    # Modes below 1e-12 of the largest are dropped, so nothing larger is lost.
    assert np.abs((again - matrix) / scale).max() < 1e-12
    assert np.all(variance > 0)


def test_a_diagonal_covariance_has_no_modes() -> None:
    # Exact: the correlation is the unit matrix, whose eigenvalues are one.
    variance, columns = diagonal_and_modes(np.diag([1.0, 4.0, 9.0]))
    np.testing.assert_array_equal(variance, [1.0, 4.0, 9.0])
    assert columns.shape == (0, 3)


def test_a_covariance_file_belongs_to_the_rows_of_the_table(tmp_path: Path) -> None:
    """Rows of two bins interleaved, one channel absent: each element arrives where its two rows do."""
    lines = without_sigma(table_text()).splitlines()
    rows = [line for pair in zip(lines[1:12], lines[12:], strict=True) for line in pair]
    del rows[6]
    path = written(tmp_path, "\n".join([lines[0], *rows]))
    matrix = dense_covariance(21, 4)
    spectra = read_spectra(path, covariance_file(tmp_path, matrix))
    modes = spectra["systematic_modes"].values.reshape(spectra.sizes["mode"], -1)
    whole = np.diag(spectra["noise_variance"].values.ravel()) + modes.T @ modes
    names = spectra.attrs["bin_labels"]
    cell = [names.index(row.split(",")[0]) * 11 + int(np.searchsorted(FREQUENCY_MHZ, float(row.split(",")[1])))
            for row in rows]  # fmt: skip
    scale = np.sqrt(np.outer(np.diag(matrix), np.diag(matrix)))
    assert np.abs((whole[np.ix_(cell, cell)] - matrix) / scale).max() < 1e-12  # as above
    absent = np.setdiff1d(np.arange(22), cell)
    assert np.all(spectra["flag"].values.ravel()[absent] != 0)
    np.testing.assert_array_equal(modes[:, absent], 0.0)


def test_sigma_beside_a_covariance_must_agree_with_it(tmp_path: Path) -> None:
    path = written(tmp_path, table_text())
    sigma = np.repeat([0.01, 0.02], 11)
    correlation = 0.5 * np.eye(22) + 0.5
    fits = covariance_file(tmp_path, correlation * np.outer(sigma, sigma))
    assert read_spectra(path, fits).sizes["mode"] >= 1
    covariance_file(tmp_path, correlation * np.outer(sigma, sigma) * 1.05)
    (problem,) = problems_of(path, fits)
    assert "differ by up to 2.5%" in problem
    assert "allowed is 1%" in problem


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda m: m[:-1], "is 21 x 22, the table has 22 rows"),
        (lambda m: m[:-1, :-1], "is 21 x 21, the table has 22 rows"),
        (lambda m: m + np.eye(22, k=3) * 1e-3, "is not symmetric"),
        (lambda m: m - 2 * np.eye(22) * m[0, 0], "diagonal must be positive"),
        (lambda m: np.diag(np.diag(m)) * 0 + np.outer(np.arange(1, 23), np.arange(1, 23)), "not positive definite"),
        (lambda m: np.where(np.eye(22) > 0, m, -0.9 * np.sqrt(np.outer(np.diag(m), np.diag(m)))), "not positive definite"),
        (lambda m: m * np.where(np.arange(22) == 4, np.nan, 1.0), "not finite"),
    ],
)  # fmt: skip
def test_what_is_no_covariance_is_refused(
    spoil: Callable[[np.ndarray], np.ndarray], words: str, tmp_path: Path
) -> None:
    path = written(tmp_path, without_sigma(table_text()))
    covariance = covariance_file(tmp_path, spoil(dense_covariance(22, 2)))
    problems = problems_of(path, covariance)
    assert all(problem.startswith(str(covariance)) for problem in problems)
    assert words in "\n".join(problems)


def test_a_covariance_that_is_no_matrix_is_refused(tmp_path: Path) -> None:
    path = written(tmp_path, without_sigma(table_text()))
    for text in ("a,b\nc,d\n", "1,2\n3\n"):
        assert "cannot be read as a matrix" in problems_of(path, written(tmp_path, text, "covariance.csv"))[0]
    assert "cannot be read as a matrix" in problems_of(path, tmp_path / "none.csv")[0]


# ---------------------------------------------------------------- NetCDF


def test_spectra_in_netcdf_are_read_back(tmp_path: Path) -> None:
    spectra = netcdf_spectra()
    spectra["systematic_modes"] = (("mode", "bin", "channel"), RNG.standard_normal((3, 2, 11)))
    spectra["response_modes"] = (("mode", "bin", "channel"), np.zeros((3, 2, 11)))
    write_product(describe(spectra, SPECTRA), tmp_path / "spectra.nc")
    xr.testing.assert_equal(read_spectra(tmp_path / "spectra.nc"), spectra)


def test_a_covariance_file_does_not_go_with_netcdf(tmp_path: Path) -> None:
    write_product(netcdf_spectra(), tmp_path / "spectra.nc")
    assert "carries its own" in problems_of(tmp_path / "spectra.nc", tmp_path / "covariance.csv")[0]


def spoilt(name: str, index: tuple[int, ...], value: float) -> Callable[[xr.Dataset], xr.Dataset]:
    def spoil(spectra: xr.Dataset) -> xr.Dataset:
        changed = spectra.copy(deep=True)
        changed[name].values[index] = value
        return changed

    return spoil


def with_units(name: str, units: str) -> Callable[[xr.Dataset], xr.Dataset]:
    def spoil(spectra: xr.Dataset) -> xr.Dataset:
        changed = spectra.copy(deep=True)
        changed[name].attrs["units"] = units
        return changed

    return spoil


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda s: s.drop_vars("flag"), "variable flag['bin', 'channel'] is missing"),
        (with_units("antenna_temperature_k", "mK"), "has units 'mK', allowed is 'K'"),
        (with_units("frequency_mhz", "Hz"), "has units 'Hz', allowed is 'MHz'"),
        (lambda s: s.transpose("channel", "bin"), "has dims ['channel', 'bin'], allowed are ['bin', 'channel']"),
        (lambda s: s.isel(bin=0), "has dims ['channel'], allowed are ['bin', 'channel']"),
        (lambda s: s.isel(channel=slice(None, None, -1)), "must rise; channel 1 (95.0 MHz) does not"),
        (spoilt("frequency_mhz", (3,), 60.0), "must rise; channel 3 (60.0 MHz) does not"),
        (spoilt("frequency_mhz", (3,), np.nan), "frequency_mhz has 1 values that are not finite"),
        (spoilt("width_mhz", (3,), 0.0), "width_mhz must be positive"),
        (spoilt("antenna_temperature_k", (1, 3), np.nan), "not finite in 1 unflagged cells, first bin 1, channel 3"),
        (spoilt("noise_variance", (0, 2), 0.0), "noise_variance is not positive in 1 unflagged cells"),
        (spoilt("noise_variance", (0, 2), -1.0), "noise_variance is not positive in 1 unflagged cells"),
        (spoilt("noise_variance", (0, 2), np.nan), "noise_variance is not finite in 1 unflagged cells"),
        (spoilt("signal_response", (0, 2), 2.0), "signal_response must lie within 0 to 1.5"),
        (spoilt("flag", (), 1), "every channel is flagged"),
        (
            lambda s: s.assign(
                response_modes=(("mode", "bin", "channel"), np.zeros((1, 2, 11)), {"units": "1"})
            ),
            "response_modes go with systematic_modes",
        ),
    ],
)  # fmt: skip
def test_bad_netcdf_is_refused_with_file_and_variable(
    spoil: Callable[[xr.Dataset], xr.Dataset], words: str, tmp_path: Path
) -> None:
    path = tmp_path / "spectra.nc"
    write_product(spoil(netcdf_spectra()), path)
    problems = problems_of(path)
    assert all(problem.startswith(f"{path}: ") for problem in problems)
    assert words in "\n".join(problems)


def test_flagged_cells_may_hold_anything() -> None:
    spectra = netcdf_spectra()
    spectra["flag"].values[0, 2] = 1
    spectra["antenna_temperature_k"].values[0, 2] = np.nan
    spectra["noise_variance"].values[0, 2] = -5.0
    assert spectra_problems(spectra) == []
