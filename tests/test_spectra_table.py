"""Reading spectra from CSV tables, and tables that are refused."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from spectra_cases import FREQUENCY_MHZ, problems_of, table_text, written

from reduce.spectra import read_spectra


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
    path = written(tmp_path, text)
    assert problems_of(path) == (
        f"{path}: frequency_mhz: 2 cells are not a finite number above 0: line 3 'x', line 8 'inf'",
        f"{path}: line 5, sigma_k: '-1' is not a finite number above 0",
    )


def test_bad_cells_by_the_hundred_are_counted_not_poured_out(tmp_path: Path) -> None:
    rows = [f"{40 + 0.1 * n:.1f},n/a,0" + ",1" * (n % 4 == 1) for n in range(400)]
    path = written(tmp_path, "\n".join(["frequency_mhz,temperature_k,sigma_k", *rows]))
    assert problems_of(path) == (
        f"{path}: 100 lines do not have the 3 cells of the header: line 3 has 4, line 7 has 4, line 11 has 4, "
        "line 15 has 4, line 19 has 4 and 95 more up to line 399",
        f"{path}: temperature_k: 300 cells are not a finite number: line 2 'n/a', line 4 'n/a', line 5 'n/a', "
        "line 6 'n/a', line 8 'n/a' and 295 more up to line 401",
        f"{path}: sigma_k: 300 cells are not a finite number above 0: line 2 '0', line 4 '0', line 5 '0', "
        "line 6 '0', line 8 '0' and 295 more up to line 401",
    )


@pytest.mark.parametrize("off", [1e-10, -1e-10, 4e-5])
def test_one_channel_is_one_however_its_frequency_was_rounded(off: float, tmp_path: Path) -> None:
    """40.156 MHz in one bin and 40.1560000001 MHz in the next: a channel of both, not two of one each."""
    text = (
        f"bin,frequency_mhz,temperature_k,sigma_k\na,40.156,10,1\na,40.469,9,1\nb,{40.156 + off!r},8,1\nb,40.469,7,1\n"
    )
    spectra = read_spectra(written(tmp_path, text))
    np.testing.assert_allclose(spectra["frequency_mhz"], [40.156, 40.469], rtol=1e-6)  # what is taken as the same
    np.testing.assert_allclose(spectra["width_mhz"], 0.313, rtol=2e-4)  # 4e-5 MHz of it
    np.testing.assert_array_equal(spectra["antenna_temperature_k"], [[10.0, 9.0], [8.0, 7.0]])
    np.testing.assert_array_equal(spectra["flag"], 0)


def test_frequencies_too_close_for_two_channels_and_too_far_for_one_are_refused(tmp_path: Path) -> None:
    text = "bin,frequency_mhz,temperature_k,sigma_k\na,40.156,10,1\na,40.469,9,1\nb,40.1565,8,1\nb,40.468,7,1\n"
    path = written(tmp_path, text)
    (problem,) = problems_of(path)
    assert problem.startswith(
        f"{path}: frequencies of different bins lie within a tenth of the spacing of a bin's own, 0.3115 MHz, "
        "and are not the same: 40.156 MHz (line 2) and 40.1565 MHz (line 4), "
        "40.468 MHz (line 5) and 40.469 MHz (line 3);"
    )
    assert "give one channel one frequency" in problem


def test_bins_on_staggered_channels_keep_their_own(tmp_path: Path) -> None:
    text = "bin,frequency_mhz,temperature_k,sigma_k\na,50,10,1\na,51,9,1\nb,50.5,8,1\nb,51.5,7,1\n"
    spectra = read_spectra(written(tmp_path, text))
    np.testing.assert_array_equal(spectra["frequency_mhz"], [50.0, 50.5, 51.0, 51.5])
    np.testing.assert_array_equal(spectra["flag"] == 0, [[True, False, True, False], [False, True, False, True]])


def test_a_frequency_that_stands_twice_is_told_with_its_lines(tmp_path: Path) -> None:
    text = "frequency_mhz,temperature_k,sigma_k\n50,10,1\n51,9,1\n51.00000001,8,1\n52,8,1\n"
    (problem,) = problems_of(written(tmp_path, text))
    assert "51.0 MHz of bin 'all' stands more than once, on lines 3 and 4" in problem


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
