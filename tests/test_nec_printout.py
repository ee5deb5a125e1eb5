"""Print-outs of NEC-2 in every layout that they come in, and malformed ones, which are refused with file and line."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from nec_cases import columns, listing, rows, two_metre_dipole, written

from sims.beam_nec import read_nec_files
from sims.config_beam import NecSource
from sims.errors import InputError

Edit = Callable[[list[str]], list[str]]


def lines_of(step_deg: float = 30.0) -> list[str]:
    return listing([two_metre_dipole(40.0, step_deg=step_deg), two_metre_dipole(60.0, step_deg=step_deg)])


@pytest.mark.parametrize("style", [{"fortran": True}, {"blank_sense": True}, {"fortran": True, "blank_sense": True}])
def test_layouts_of_the_code_and_its_translations_read_the_same(style: dict[str, bool], tmp_path: Path) -> None:
    runs = [two_metre_dipole(40.0, step_deg=15.0), two_metre_dipole(100.0, step_deg=15.0)]
    styled = read_nec_files(written(tmp_path / "styled.txt", listing(runs, **style)))
    plain = read_nec_files(written(tmp_path / "plain.txt", listing(runs)))
    # Five digits and six.
    assert styled.power == pytest.approx(plain.power, rel=5e-4, abs=1e-9)


@pytest.mark.parametrize(
    "unusual",
    [
        lambda text: text.lower(),
        lambda text: text.upper(),
        lambda text: re.sub(r"(E[-+]\d\d) (MHz|Watts)", r"\1\2", text),
        lambda text: re.sub(r" *([:=]) *(?=\d)", r"\1", text),
        lambda text: re.sub(r" *([:=]) *(?=\d)", r"   \1    ", text),
        lambda text: "  --- COMMENTS ---\n Radiation patterns\n FREQUENCY: 40 to 60\n INPUT POWER = any\n" + text,
        lambda text: text.replace("\n", "\r\n"),
    ],
    ids=["lower", "upper", "touching", "tight", "wide", "comments", "carriage-returns"],
)
def test_spacing_case_and_comments_change_nothing(unusual: Callable[[str], str], tmp_path: Path) -> None:
    plain = "\n".join(lines_of())
    changed = unusual(plain)
    assert changed != plain
    (tmp_path / "unusual.txt").write_bytes(changed.encode())
    table = read_nec_files(NecSource(format="nec", files=(tmp_path / "unusual.txt",)))
    assert np.array_equal(table.power, read_nec_files(written(tmp_path / "plain.txt", lines_of())).power)
    assert not any("no INPUT POWER" in note for note in table.notes)


def replaced(old: str, new: str) -> Edit:
    return lambda lines: [line.replace(old, new) for line in lines]


def at(number: int, line: str | None) -> Edit:
    """A line replaced, by its number from 1, or left out."""
    return lambda lines: [*lines[: number - 1], *([] if line is None else [line]), *lines[number:]]


def column(line: int, number: int, text: str) -> Edit:
    """A word of a row replaced, both counted from 1."""

    def edit(lines: list[str]) -> list[str]:
        words = lines[line - 1].split()
        return at(line, " ".join([*words[: number - 1], text, *words[number:]]))(lines)

    return edit


def value_of(name: str, text: str) -> Edit:
    """What is printed after a name replaced, with its unit."""
    return lambda lines: [re.sub(rf"({name}\s*[:=]).*", rf"\1 {text}", line) for line in lines]


def fine_rows_to(theta_deg: float) -> list[str]:
    return [line for line in rows(two_metre_dipole(40.0, step_deg=15.0)) if float(line.split()[0]) <= theta_deg]


FIRST_ROW = 1 + next(number for number, line in enumerate(lines_of()) if line.split()[:2] == ["0.00", "0.00"])
ROW = lines_of()[FIRST_ROW - 1]
SECOND_MHZ = 1 + next(number for number, line in enumerate(lines_of()) if "FREQUENCY : 6" in line)
BAD: dict[str, tuple[Edit, str]] = {
    "other file": (lambda lines: ["theta,phi,gain", "0,0,1"], "no table headed RADIATION PATTERNS"),
    "empty": (lambda lines: [], "no table headed RADIATION PATTERNS"),
    "stars for a number": (at(FIRST_ROW, ROW.replace("-999.99", "*******", 1)), f"line {FIRST_ROW}: '*******' is not"),
    "nan": (at(FIRST_ROW, ROW.replace("0.0000", "   nan", 1)), f"line {FIRST_ROW}: 'nan' is not a number"),
    "short row": (at(FIRST_ROW, ROW[:60]), f"line {FIRST_ROW}: 6 columns"),
    "missing row": (at(FIRST_ROW + 1, None), "directions are missing at 40 MHz: theta 30, phi 0 deg"),
    "row twice": (at(FIRST_ROW + 1, ROW), f"line {FIRST_ROW + 1}: theta 0, phi 0 deg at 40 MHz is given twice"),
    "frequency in GHz": (replaced("MHz", "GHz"), "a frequency in 'GHz'"),
    "frequency unreadable": (replaced("6.0000E+01 MHz", "?????????? MHz"), f"line {SECOND_MHZ}: a frequency must be"),
    "no frequency": (lambda lines: [line for line in lines if "FREQUENCY :" not in line], "without a FREQUENCY"),
    "frequency left out": (value_of("FREQUENCY", ""), "a frequency must be a positive number, got ''"),
    "no power": (value_of("INPUT POWER", "0.0000E+00 WATTS"), "an input power must be a positive number"),
    "power in stars": (value_of("INPUT POWER", "********** WATTS"), "must be a positive number, got '**********'"),
    "power left out": (value_of("INPUT POWER", ""), "an input power must be a positive number, got ''"),
    "stars for an angle": (column(FIRST_ROW + 1, 1, "*****"), f"line {FIRST_ROW + 1}: '*****' is not a number"),
    "too large": (column(FIRST_ROW + 1, 9, "1.0E+400"), f"line {FIRST_ROW + 1}: '1.0E+400' is not a number"),
    "square too large": (column(FIRST_ROW + 1, 9, "1.0E+200"), f"line {FIRST_ROW + 1}: the printed gain lies"),
    "underscore": (column(FIRST_ROW + 1, 10, "1_0.00"), f"line {FIRST_ROW + 1}: '1_0.00' is not a number"),
    "underscore in an angle": (column(FIRST_ROW + 1, 1, "3_0.00"), f"line {FIRST_ROW + 1}: '3_0.00' is not a number"),
    "digits of another script": (
        column(FIRST_ROW + 1, 10, "\N{ARABIC-INDIC DIGIT FIVE}.00"),
        f"line {FIRST_ROW + 1}: '\N{ARABIC-INDIC DIGIT FIVE}.00' is not",
    ),
    "negative magnitude": (column(FIRST_ROW + 1, 9, "-3.6468E-02"), f"line {FIRST_ROW + 1}: the magnitude of a field"),
    # The second row has 0.036468 V: its exponent off, a digit off (0.235 dB); and a gain that no field bears out.
    "exponent off": (column(FIRST_ROW + 1, 9, "3.6468E+01"), f"line {FIRST_ROW + 1}: the printed gain lies"),
    "digit off": (column(FIRST_ROW + 1, 9, "3.7468E-02"), f"line {FIRST_ROW + 1}: the printed gain lies -0.24 dB"),
    "gain off": (column(FIRST_ROW, 5, "1.97"), f"line {FIRST_ROW}: the printed gain lies +0.10 dB"),
    "no gain and no budget": (
        lambda lines: [
            re.sub(r"^( +\S+ +\S+ +-999.99 +-999.99 +)\S+", r"\1-999.99", line)
            for line in lines if "INPUT POWER" not in line
        ],
        "the printed gain lies",
    ),
    "other grid": (
        lambda lines: [*lines[: SECOND_MHZ - 2], *listing([two_metre_dipole(60.0, step_deg=15.0)])],
        "directions are missing at 40 MHz",
    ),
    "last phi cut": (
        lambda lines: listing([two_metre_dipole(40.0, step_deg=15.0)])[:-3 - 13],
        "phi ends at 330 deg, 30 deg before the turn closes",
    ),
    "cut after a frequency": (lambda lines: lines[:SECOND_MHZ], f"line {SECOND_MHZ}: no table of radiation patterns"),
    "negative power": (replaced("POWER   = ", "POWER   = -"), "an input power must be a positive number"),
    "cut short": (lambda lines: lines[:-40], "directions are missing at 60 MHz"),
    "head only": (lambda lines: lines[: FIRST_ROW - 1], "without a row"),
    "another input power": (replaced("INPUT POWER   =  1", "INPUT POWER   =  2"), "the printed gain lies"),
    "one frequency twice": (replaced("6.0000E+01 MHz", "4.0000E+01 MHz"), "at 40 MHz is given twice; first at"),
    "half of free space": (
        lambda lines: ["FREQUENCY : 4.0E+01 MHz", "FREE SPACE", *columns(fortran=False), *fine_rows_to(90.0)],
        "line 4: an antenna in FREE SPACE radiates below theta 90 deg",
    ),
    "theta to 75": (
        lambda lines: ["FREQUENCY : 4.0E+01 MHz", *columns(fortran=False), *fine_rows_to(75.0)],
        "a gap of 210 deg in theta",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", sorted(BAD))
def test_malformed_print_out(case: str, tmp_path: Path) -> None:
    edit, told = BAD[case]
    source = written(tmp_path / "bad.txt", edit(lines_of()))
    with pytest.raises(InputError) as caught:
        read_nec_files(source)
    text = "\n".join(caught.value.problems)
    assert told in text
    assert "bad.txt" in text


def test_faults_of_all_files_are_told_at_once(tmp_path: Path) -> None:
    one = written(tmp_path / "one.txt", at(FIRST_ROW, ROW[:60])(lines_of())).files[0]
    two = written(tmp_path / "two.txt", ["nothing"]).files[0]
    with pytest.raises(InputError) as caught:
        read_nec_files(NecSource(format="nec", files=(one, two, tmp_path / "gone.txt")))
    assert [name for name in ("one.txt", "two.txt", "gone.txt") if name in "\n".join(caught.value.problems)] == [
        "one.txt", "two.txt", "gone.txt",
    ]  # fmt: skip


def test_faults_of_a_file_are_told_at_once(tmp_path: Path) -> None:
    def spoilt(lines: list[str]) -> list[str]:
        lines = value_of("INPUT POWER", "0.0 WATTS")(lines)
        return column(FIRST_ROW, 3, "nan")(column(FIRST_ROW + 3, 1, "****")(at(FIRST_ROW + 5, ROW[:60])(lines)))

    with pytest.raises(InputError) as caught:
        read_nec_files(written(tmp_path / "bad.txt", spoilt(lines_of())))
    found = [int(number) for number in re.findall(r"bad\.txt: line (\d+): ", "\n".join(caught.value.problems))]
    powers = [1 + number for number, line in enumerate(lines_of()) if "INPUT POWER" in line]
    assert sorted(found) == sorted([*powers, FIRST_ROW, FIRST_ROW + 3, FIRST_ROW + 5])


@pytest.mark.parametrize(("printed", "value"), [("1.2345-117", 0.0), ("1.2345D-01", 0.12345), (".12345", 0.12345)])
def test_numbers_as_fortran_prints_them(printed: str, value: float, tmp_path: Path) -> None:
    """Exponents of three digits lose their letter, and those of double precision have a D."""
    words = lines_of()[FIRST_ROW].split()
    assert words[:2] == ["30.00", "0.00"]
    # The printed total gain has to bear the changed field out.
    total = float(words[4]) + 10 * np.log10(1.0 + (value / float(words[8])) ** 2)
    changed = " ".join([*words[:4], f"{total:.2f}", *words[5:10], printed, *words[11:]])
    table = read_nec_files(written(tmp_path / "fortran.txt", at(FIRST_ROW + 1, changed)(lines_of())))
    plain = read_nec_files(written(tmp_path / "plain.txt", lines_of()))
    assert table.e_phi is not None
    assert plain.e_theta is not None
    scale = np.abs(plain.e_theta[0, 1, 0]) / float(words[8])
    # The sum and its parts are rounded in double precision only.
    assert np.abs(table.e_phi[0, 1, 0]) == pytest.approx(scale * value, rel=1e-9, abs=1e-90)
