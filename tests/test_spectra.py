"""Reading spectra that somebody measured: CSV, NetCDF, covariances, and tables that are refused."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from reduce.spectra import diagonal_and_modes, read_spectra, spectra_problems
from sims.errors import InputError
from sims.products import write_product
from sims.schema import SPECTRA, describe

RNG = np.random.default_rng(17)
FREQUENCY_MHZ = np.linspace(50.0, 100.0, 11)


def table_text(
    bins: tuple[str, ...] = ("north", "south"), header: str = "bin,frequency_mhz,temperature_k,sigma_k"
) -> str:
    rows = [f"{name},{f},{3000 * (f / 70) ** -2.5 + 7 * number:.6f},{0.01 * (number + 1)}"
            for number, name in enumerate(bins) for f in FREQUENCY_MHZ]  # fmt: skip
    return "\n".join([header, *rows]) + "\n"


def written(folder: Path, text: str, name: str = "spectra.csv") -> Path:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def problems_of(path: Path, covariance: Path | None = None) -> tuple[str, ...]:
    with pytest.raises(InputError) as caught:
        read_spectra(path, covariance)
    return caught.value.problems


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


# ---------------------------------------------------------------- tables


def test_a_table_becomes_spectra(tmp_path: Path) -> None:
    spectra = read_spectra(written(tmp_path, table_text()))
    assert dict(spectra.sizes) == {"channel": 11, "bin": 2}
    np.testing.assert_array_equal(spectra["frequency_mhz"], FREQUENCY_MHZ)
    np.testing.assert_allclose(spectra["width_mhz"], 5.0, rtol=1e-13)  # rounding of the spacing
    expected = 3000 * (FREQUENCY_MHZ / 70) ** -2.5
    # Six decimals are written.
    np.testing.assert_allclose(spectra["antenna_temperature_k"], [expected, expected + 7], atol=5.1e-7)
    np.testing.assert_allclose(spectra["noise_variance"].values[:, 0], [1e-4, 4e-4], rtol=1e-15)  # one rounding
    np.testing.assert_array_equal(spectra["signal_response"], 1.0)
    np.testing.assert_array_equal(spectra["flag"], 0)
    assert spectra.attrs["bin_labels"] == ["north", "south"]
    assert spectra.attrs["signal_response_given"] == 0


def test_bins_may_be_interleaved_and_lack_channels(tmp_path: Path) -> None:
    lines = table_text().splitlines()
    north, south = lines[1:12], lines[12:]
    mixed = [lines[0]]
    for number in range(11):
        mixed += [south[number]] + ([north[number]] if number != 4 else [])
    spectra = read_spectra(written(tmp_path, "\n".join(mixed)))
    assert spectra.attrs["bin_labels"] == ["south", "north"]
    flag = spectra["flag"].values
    assert flag[1, 4] != 0
    assert np.count_nonzero(flag) == 1
    assert np.isnan(spectra["antenna_temperature_k"].values[1, 4])
    whole = read_spectra(written(tmp_path, table_text()))
    np.testing.assert_array_equal(
        spectra["antenna_temperature_k"].values[1, [0, 10]], whole["antenna_temperature_k"].values[0, [0, 10]]
    )


def test_columns_may_stand_in_any_order_with_comments_between(tmp_path: Path) -> None:
    text = (
        "\ufeff# ours\nsigma_k, temperature_k ,frequency_mhz,w,width_mhz\n0.1,10,50,0.6,2\n\n# more\n0.2,9,53,0.7,3\n"
    )
    spectra = read_spectra(written(tmp_path, text))
    np.testing.assert_array_equal(spectra["signal_response"], [[0.6, 0.7]])
    np.testing.assert_array_equal(spectra["width_mhz"], [2.0, 3.0])
    assert spectra.attrs["signal_response_given"] == 1
    assert spectra.attrs["bin_labels"] == ["all"]


def edited(line: int, old: str, new: str) -> Callable[[str], str]:
    """The table with one of its lines (1 is the header) changed."""

    def edit(text: str) -> str:
        lines = text.splitlines()
        assert old in lines[line - 1]
        lines[line - 1] = lines[line - 1].replace(old, new)
        return "\n".join(lines)

    return edit


@pytest.mark.parametrize(
    ("edit", "words"),
    [
        (edited(1, "temperature_k", "temp"), ("unknown column 'temp'", "frequency_mhz, temperature_k")),
        (edited(1, ",sigma_k", ",temperature_k"), ("column 'temperature_k' stands twice",)),
        (edited(1, "sigma_k", "w"), ("column 'sigma_k' is missing, and no covariance",)),
        (edited(4, "60.0", "sixty"), ("line 4, frequency_mhz: 'sixty' is not a finite number above 0",)),
        (edited(4, "60.0", "nan"), ("line 4, frequency_mhz: 'nan'",)),
        (edited(4, "60.0", "-60.0"), ("line 4, frequency_mhz: '-60.0'", "above 0")),
        (edited(4, "60.0", "6_0.0"), ("line 4, frequency_mhz: '6_0.0'",)),
        (edited(5, ",0.01", ",nan"), ("line 5, sigma_k: 'nan' is not a finite number above 0",)),
        (edited(5, ",0.01", ",-0.01"), ("line 5, sigma_k: '-0.01'",)),
        (edited(5, ",0.01", ",0"), ("line 5, sigma_k: '0'",)),
        (edited(5, ",0.01", ",inf"), ("line 5, sigma_k: 'inf'",)),
        (edited(5, ",0.01", ""), ("line 5 has 3 cells, the header 4",)),
        (edited(5, ",0.01", ",0.01,"), ("line 5 has 5 cells, the header 4",)),
        (edited(4, "60.0", "55.0"), ("55.0 MHz of bin 'north' stands more than once",)),
        (edited(4, "60.0", "51.0"), ("must rise; in bin 'north' 51.0 MHz follows 55.0 MHz",)),
        (lambda text: "", ("holds no header line",)),
        (lambda text: text.splitlines()[0], ("holds a header but no rows",)),
        (lambda text: "\n".join(text.splitlines()[:2]), ("fewer than two frequencies",)),
    ],
)
def test_bad_tables_are_refused_with_file_and_line(
    edit: Callable[[str], str], words: tuple[str, ...], tmp_path: Path
) -> None:
    path = written(tmp_path, edit(table_text()))
    problems = problems_of(path)
    assert all(problem.startswith(str(path)) for problem in problems)
    for word in words:
        assert word in "\n".join(problems)


def test_every_bad_cell_is_told(tmp_path: Path) -> None:
    text = edited(3, "55.0", "x")(edited(5, ",0.01", ",-1")(edited(8, "80.0", "inf")(table_text())))
    assert [problem.split("line ")[1].split(",")[0] for problem in problems_of(written(tmp_path, text))] == [
        "3",
        "5",
        "8",
    ]


def test_one_frequency_has_one_width(tmp_path: Path) -> None:
    text = "bin,frequency_mhz,temperature_k,sigma_k,width_mhz\na,50,10,1,2\na,53,9,1,2\nb,50,10,1,2\nb,53,9,1,3\n"
    (problem,) = problems_of(written(tmp_path, text))
    assert "width_mhz differs between bins at 53.0 MHz" in problem


@pytest.mark.parametrize("w", ["-0.1", "1.6"])
def test_a_response_is_a_fraction_of_the_sky(w: str, tmp_path: Path) -> None:
    text = f"frequency_mhz,temperature_k,sigma_k,w\n50,10,1,0.5\n53,9,1,{w}\n"
    (problem,) = problems_of(written(tmp_path, text))
    assert "signal_response must lie within 0 to 1.5" in problem


def test_files_of_another_kind_are_refused(tmp_path: Path) -> None:
    assert "no such file" in problems_of(tmp_path / "none.nc")[0].lower()
    assert "cannot be read as a CSV table" in problems_of(tmp_path / "none.csv")[0]
    assert "allowed are .nc and .csv" in problems_of(written(tmp_path, table_text(), "spectra.txt"))[0]
    (tmp_path / "binary.csv").write_bytes(b"\xff\xfe\x00,\x80")
    assert "cannot be read as a CSV table" in problems_of(tmp_path / "binary.csv")[0]


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
