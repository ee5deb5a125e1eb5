"""Beams in delimited text: delimiters, units of frequency, rows in any order, and files without a heading."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from reader_cases import FREQUENCY_MHZ, on_grid, table_source, table_text, tilted

from sims.beam_table_file import read_table_files
from sims.config_beam import PowerColumn
from sims.errors import InputError

POWER = on_grid(tilted)
LINES = table_text(POWER).splitlines()


def power_of(path: Path, **changes: object) -> np.ndarray:
    return read_table_files(table_source(path, **changes)).power


def written(folder: Path, lines: list[str]) -> Path:
    path = folder / "beam.txt"
    path.write_text("\n".join(lines) + "\n")
    return path


# Sixteen digits are written, so what is read is what was; the poles are averaged over phi, to rounding.
EXACT = pytest.approx(POWER, abs=1e-15)


@pytest.mark.parametrize(("name", "mark"), [("comma", ","), ("tab", "\t"), ("space", "   "), ("semicolon", " ; ")])
def test_delimiters(name: str, mark: str, tmp_path: Path) -> None:
    assert power_of(written(tmp_path, [line.replace(";", mark) for line in LINES]), delimiter=name) == EXACT


def test_rows_stand_in_any_order(tmp_path: Path) -> None:
    rows = np.random.default_rng(4).permutation(LINES[1:]).tolist()
    assert power_of(written(tmp_path, [LINES[0], *rows])) == EXACT


@pytest.mark.parametrize(("unit", "per_mhz"), [("Hz", 1e6), ("kHz", 1e3), ("GHz", 1e-3)])
def test_units_of_frequency(unit: str, per_mhz: float, tmp_path: Path) -> None:
    cells = [line.split(";") for line in LINES[1:]]
    path = written(tmp_path, [LINES[0]] + [";".join([repr(float(c[0]) * per_mhz), *c[1:]]) for c in cells])
    table = read_table_files(table_source(path, frequency_unit=unit))
    assert table.frequency_mhz.tolist() == FREQUENCY_MHZ.tolist()
    assert table.power == EXACT


def test_comments_blank_lines_and_closing_delimiters_are_passed_over(tmp_path: Path) -> None:
    lines = [LINES[0], "# from the chamber", "", *[f"{line};" for line in LINES[1:]], "# end"]
    assert power_of(written(tmp_path, lines)) == EXACT


@pytest.mark.parametrize("start", [b"", b"\xef\xbb\xbf"])
def test_numbers_from_the_first_byte_on(start: bytes, tmp_path: Path) -> None:
    """No heading, and perhaps the mark of an encoding before the first number."""
    path = tmp_path / "beam.txt"
    path.write_bytes(start + "\n".join(LINES[1:]).encode())
    changes = {"header_lines": 0, "frequency": 1, "theta": 2, "phi": 3}
    assert power_of(path, **changes, power=PowerColumn(column=4, unit="linear")) == EXACT


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"angle_unit": "rad"}, r"phi must stay within one turn, got 0 to 20454\.\d+ deg: is its unit right"),
        ({"theta_from": "horizon"}, r"theta must lie within 0 to 180 deg, got -90"),
        ({"files": ("beam.txt", "beam.txt")}, r"50 MHz, theta 0, phi 0 deg.* is given twice"),
        ({"phi": 0}, r"column 0: columns are numbered from 1"),
        ({"phi": 9}, r"line 2: 4 columns; column 9 is needed"),
    ],
)
def test_a_declaration_that_is_not_of_the_file(changes: dict[str, object], told: str, tmp_path: Path) -> None:
    path = written(tmp_path, LINES)
    if "files" in changes:
        changes = {"files": (path, path)}
    with pytest.raises(InputError, match=told) as caught:
        power_of(path, **changes)
    assert all("beam.txt" in problem for problem in caught.value.problems)
