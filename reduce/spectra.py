"""Reading binned spectra: ours, or anyone's, from NetCDF or a plain CSV table.

Whatever the source, what leaves here keeps to `sims.schema.SPECTRA` and is fit for the
subtraction: frequencies rise, used values are finite, and variances are positive.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from sims.campaign import FLAG_EMPTY
from sims.csv_table import finite_number
from sims.errors import InputError, raise_if_any
from sims.products import read_netcdf
from sims.schema import SPECTRA, check, describe

FloatArray = NDArray[np.float64]
COLUMNS = ("frequency_mhz", "temperature_k", "sigma_k", "bin", "w", "width_mhz")
POSITIVE = ("frequency_mhz", "sigma_k", "width_mhz")
SIGMA_AGREEMENT = 0.01
SAME_CHANNEL = 1e-6  # of the frequency: what rounding does to a channel's frequency from bin to bin, 40 Hz at 40 MHz
CLOSEST = 0.1  # of the spacing within a bin: frequencies of two bins nearer than that are hardly two channels
FIRST_TOLD = 5


def read_spectra(path: Path, covariance: Path | None = None) -> xr.Dataset:
    """Read spectra that somebody measured.

    Parameters
    ----------
    path : Path
        ``.nc``: a Dataset that keeps to the `spectra` product. ``.csv``: columns frequency_mhz,
        temperature_k, sigma_k, and optionally bin (a label), w (the signal response,
        taken as 1 where absent) and width_mhz; one row a channel of a bin. Frequencies that differ by less
        than a millionth are those of one channel, and take the lowest of them.
    covariance : Path, optional
        CSV without header: the covariance in K^2 of all rows of the CSV table, in their
        order. It takes the place of sigma_k.

    Returns
    -------
    xarray.Dataset

    Raises
    ------
    InputError
        With every problem found, each with file, line or variable.
    """
    if path.suffix == ".nc":
        if covariance is not None:
            raise InputError(f"{covariance}: a covariance file goes with a CSV table; {path} carries its own")
        spectra = read_netcdf(path)
        check(spectra, SPECTRA, str(path))
    elif path.suffix == ".csv":
        spectra = _from_table(_read_table(path), path, covariance)
    else:
        raise InputError(f"{path}: ending {path.suffix!r} is not known; allowed are .nc and .csv")
    raise_if_any([f"{path}: {problem}" for problem in spectra_problems(spectra)])
    return spectra


def spectra_problems(spectra: xr.Dataset) -> list[str]:
    """What keeps spectra from being fitted: order of channels, used values that are no numbers, variances."""
    problems = []
    frequency = spectra["frequency_mhz"].values
    if np.any(np.diff(frequency) <= 0.0):
        at = int(np.argmax(np.diff(frequency) <= 0.0))
        problems.append(f"frequency_mhz must rise; channel {at + 1} ({frequency[at + 1]} MHz) does not")
    if np.any(frequency <= 0.0) or np.any(spectra["width_mhz"].values <= 0.0):
        problems.append("frequency_mhz and width_mhz must be positive")
    used = spectra["flag"].values == 0
    if not used.any():
        problems.append("every channel is flagged; nothing is left to fit")
    for name in ("antenna_temperature_k", "noise_variance"):
        bad = used & ~np.isfinite(spectra[name].values)
        if bad.any():
            problems.append(f"{name} is not finite in {int(bad.sum())} unflagged cells, first {_first(bad)}")
    bad = used & ~(spectra["noise_variance"].values > 0.0)
    if bad.any():
        problems.append(f"noise_variance is not positive in {int(bad.sum())} unflagged cells, first {_first(bad)}")
    response = spectra["signal_response"].values
    if np.any(response < 0.0) or np.any(response > 1.5):
        problems.append(f"signal_response must lie within 0 to 1.5, got {response.min():.3g} to {response.max():.3g}")
    if "response_modes" in spectra and "systematic_modes" not in spectra:
        problems.append("response_modes go with systematic_modes, and there are none")
    return problems


def _first(where: NDArray[np.bool_]) -> str:
    bin_number, channel = (int(index) for index in np.argwhere(where)[0])
    return f"bin {bin_number}, channel {channel}"


@dataclass(frozen=True)
class _Table:
    columns: dict[str, FloatArray]
    labels: list[str]
    lines: list[int]


def _read_table(path: Path) -> _Table:
    try:
        with path.open(newline="", encoding="utf-8-sig") as handle:
            rows = [(number, row) for number, row in enumerate(csv.reader(handle), start=1)
                    if row and not row[0].lstrip().startswith("#")]  # fmt: skip
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputError(f"{path}: cannot be read as a CSV table ({error})") from None
    if not rows:
        raise InputError(f"{path}: holds no header line; it should name {', '.join(COLUMNS[:3])}")
    header = [name.strip() for name in rows[0][1]]
    problems = [f"{path}: unknown column {name!r}; allowed are {', '.join(COLUMNS)}"
                for name in header if name not in COLUMNS]  # fmt: skip
    problems += [f"{path}: column {name!r} stands twice" for name in sorted(set(header)) if header.count(name) > 1]
    problems += [f"{path}: column {name!r} is missing" for name in COLUMNS[:2] if name not in header]
    raise_if_any(problems)
    values: dict[str, list[float]] = {name: [] for name in header if name != "bin"}
    labels = []
    whole = [(number, row) for number, row in rows[1:] if len(row) == len(header)]
    bad_cells: dict[str, list[tuple[int, str]]] = {name: [] for name in values}
    for number, row in whole:
        for name, cell in zip(header, row, strict=True):
            if name == "bin":
                labels.append(cell.strip())
                continue
            value = finite_number(cell)
            if value is None or (name in POSITIVE and value <= 0.0):
                bad_cells[name].append((number, cell))
            else:
                values[name].append(value)
    torn = [(number, len(row)) for number, row in rows[1:] if len(row) != len(header)]
    problems += [f"{path}: {problem}" for problem in _torn_problem(torn, len(header))]
    problems += [f"{path}: {_cell_problem(name, bad)}" for name, bad in bad_cells.items() if bad]
    if len(rows) < 2:
        problems.append(f"{path}: holds a header but no rows")
    raise_if_any(problems)
    columns = {name: np.array(column) for name, column in values.items()}
    return _Table(columns, labels or ["all"] * len(whole), [number for number, _ in whole])


def _torn_problem(torn: list[tuple[int, int]], cells: int) -> list[str]:
    """Lines of another number of cells than the header has, in one line if there are any."""
    if len(torn) < 2:
        return [f"line {line} has {got} cells, the header {cells}" for line, got in torn]
    told = _some([f"line {line} has {got}" for line, got in torn], torn[-1][0])
    return [f"{len(torn)} lines do not have the {cells} cells of the header: {told}"]


def _cell_problem(name: str, bad: list[tuple[int, str]]) -> str:
    """The bad cells of a column in one line."""
    allowed = "a finite number" + " above 0" * (name in POSITIVE)
    if len(bad) == 1:
        return f"line {bad[0][0]}, {name}: {bad[0][1]!r} is not {allowed}"
    told = _some([f"line {line} {cell!r}" for line, cell in bad], bad[-1][0])
    return f"{name}: {len(bad)} cells are not {allowed}: {told}"


def _some(offenders: list[str], last_line: int) -> str:
    """The first offenders, and how many follow down to which line."""
    more = len(offenders) - FIRST_TOLD
    return ", ".join(offenders[:FIRST_TOLD]) + (f" and {more} more up to line {last_line}" if more > 0 else "")


def _from_table(table: _Table, path: Path, covariance: Path | None) -> xr.Dataset:
    columns = table.columns
    if "sigma_k" not in columns and covariance is None:
        raise InputError(f"{path}: column 'sigma_k' is missing, and no covariance file is given in its place")
    frequency, row_channel = _channels(columns["frequency_mhz"])
    if len(frequency) < 2:
        raise InputError(f"{path}: holds fewer than two frequencies")
    names = list(dict.fromkeys(table.labels))
    row_bin = np.array([names.index(label) for label in table.labels])
    cell = row_bin * len(frequency) + row_channel
    if len(np.unique(cell)) < len(cell):
        twice = int(np.argmax(np.bincount(cell) > 1))
        where = f"{frequency[twice % len(frequency)]} MHz of bin {names[twice // len(frequency)]!r}"
        lines = [table.lines[row] for row in np.flatnonzero(cell == twice)]
        raise InputError(f"{path}: {where} stands more than once, on lines {' and '.join(map(str, lines[:2]))}")
    problems = _order_problems(columns, row_bin, row_channel, names)
    problems += _spacing_problems(frequency, row_bin, row_channel, table.lines)
    raise_if_any([f"{path}: {problem}" for problem in problems])
    variance, modes = _noise(columns, path, covariance)
    shape = (len(names), len(frequency))

    def spread(values: FloatArray, absent: float) -> FloatArray:
        grid = np.full((*values.shape[:-1], shape[0] * shape[1]), absent)
        grid[..., cell] = values
        return grid.reshape(values.shape[:-1] + shape)

    rows = np.ones(len(cell))
    width = np.gradient(frequency)
    if "width_mhz" in columns:
        width[row_channel] = columns["width_mhz"]
    spectra = xr.Dataset(
        {
            "frequency_mhz": ("channel", frequency),
            "width_mhz": ("channel", width),
            "antenna_temperature_k": (("bin", "channel"), spread(columns["temperature_k"], np.nan)),
            "noise_variance": (("bin", "channel"), spread(variance, np.nan)),
            "signal_response": (("bin", "channel"), spread(columns.get("w", rows), 0.0)),
            "flag": (("bin", "channel"), spread(1.0 - rows, FLAG_EMPTY).astype(np.uint8)),
        },
        attrs={"source": path.name, "bin_labels": names, "signal_response_given": int("w" in columns)},
    )
    if modes is not None:
        spectra["systematic_modes"] = (("mode", "bin", "channel"), spread(modes, 0.0))
    return describe(spectra, SPECTRA)


def _channels(row_mhz: FloatArray) -> tuple[FloatArray, NDArray[np.int64]]:
    """Frequencies of the channels, MHz, and the channel of each row; rounding makes no channel of its own."""
    distinct = np.unique(row_mhz)
    begins = np.diff(distinct, prepend=-np.inf) > SAME_CHANNEL * distinct
    channel = np.cumsum(begins) - 1
    return distinct[begins], channel[np.searchsorted(distinct, row_mhz)]


def _spacing_problems(
    frequency: FloatArray, row_bin: NDArray[np.int64], row_channel: NDArray[np.int64], lines: list[int]
) -> list[str]:
    """Frequencies of different bins that are too close for two channels and too far apart for one."""
    within = [np.diff(np.sort(frequency[row_channel[row_bin == number]])) for number in range(row_bin.max() + 1)]
    spacing = float(np.min(np.concatenate(within), initial=np.inf))
    close = np.flatnonzero(np.diff(frequency) < CLOSEST * spacing) if np.isfinite(spacing) else np.array([], int)
    if not len(close):
        return []

    def place(channel: int) -> str:
        return f"{frequency[channel]} MHz (line {lines[int(np.argmax(row_channel == channel))]})"

    pairs = [f"{place(channel)} and {place(channel + 1)}" for channel in close]
    more = f" and {len(pairs) - FIRST_TOLD} more" if len(pairs) > FIRST_TOLD else ""
    return [
        f"frequencies of different bins lie within a tenth of the spacing of a bin's own, {spacing:g} MHz, "
        f"and are not the same: {', '.join(pairs[:FIRST_TOLD])}{more}; give one channel one frequency"
    ]


def _order_problems(
    columns: dict[str, FloatArray], row_bin: NDArray[np.int64], row_channel: NDArray[np.int64], names: list[str]
) -> list[str]:
    """Bins whose frequencies do not rise, and frequencies whose width differs from bin to bin."""
    problems = []
    for number, name in enumerate(names):
        frequency = columns["frequency_mhz"][row_bin == number]
        falls = np.flatnonzero(np.diff(frequency) < 0.0)
        if len(falls):
            before, after = frequency[falls[0]], frequency[falls[0] + 1]
            problems.append(f"frequency_mhz must rise; in bin {name!r} {after} MHz follows {before} MHz")
    if "width_mhz" in columns:
        last = np.zeros(row_channel.max() + 1)
        last[row_channel] = columns["width_mhz"]
        differs = columns["width_mhz"] != last[row_channel]
        if differs.any():
            at = int(np.argmax(differs))
            problems.append(f"width_mhz differs between bins at {columns['frequency_mhz'][at]} MHz; allowed is one")
    return problems


def _noise(columns: dict[str, FloatArray], path: Path, covariance: Path | None) -> tuple[FloatArray, FloatArray | None]:
    """Variance of each row, and what correlates the rows as modes."""
    if covariance is None:
        return columns["sigma_k"] ** 2, None
    matrix = _read_covariance(covariance, len(columns["frequency_mhz"]))
    if "sigma_k" in columns:
        off = np.abs(np.sqrt(np.diag(matrix)) / columns["sigma_k"] - 1.0)
        if not np.all(off < SIGMA_AGREEMENT):
            raise InputError(
                f"{covariance}: its diagonal and sigma_k of {path} differ by up to {np.nanmax(off):.1%}, "
                f"allowed is {SIGMA_AGREEMENT:.0%}; leave sigma_k out where the covariance is right"
            )
    return diagonal_and_modes(matrix)


def diagonal_and_modes(covariance_k2: FloatArray) -> tuple[FloatArray, FloatArray]:
    """A dense covariance as a diagonal and modes, without loss.

    Parameters
    ----------
    covariance_k2 : ndarray[row, row]
        Positive definite, K^2.

    Returns
    -------
    variance_k2 : ndarray[row]
        The smallest eigenvalue of the correlation times each variance, K^2.
    modes_k : ndarray[mode, row]
        What is left, K; modes below rounding are dropped.
    """
    sigma = np.sqrt(np.diag(covariance_k2))
    values, vectors = np.linalg.eigh(covariance_k2 / np.outer(sigma, sigma))
    excess = values - values[0]
    kept = excess > 1e-12 * values[-1]
    return values[0] * sigma**2, (vectors[:, kept] * np.sqrt(excess[kept]) * sigma[:, None]).T


def _read_covariance(path: Path, rows: int) -> FloatArray:
    try:
        matrix = np.loadtxt(path, delimiter=",", ndmin=2)
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read as a matrix of numbers ({error})") from None
    problems = []
    if matrix.shape != (rows, rows):
        raise InputError(f"{path}: is {matrix.shape[0]} x {matrix.shape[1]}, the table has {rows} rows")
    if not np.all(np.isfinite(matrix)):
        raise InputError(f"{path}: holds values that are not finite")
    if not np.allclose(matrix, matrix.T, rtol=1e-8, atol=0.0):
        problems.append(f"{path}: is not symmetric")
    if np.any(np.diag(matrix) <= 0.0):
        problems.append(f"{path}: its diagonal must be positive")
    raise_if_any(problems)
    sigma = np.sqrt(np.diag(matrix))
    smallest = float(np.linalg.eigvalsh(matrix / np.outer(sigma, sigma))[0])
    if smallest <= 1e-10:
        raise InputError(f"{path}: is not positive definite (smallest eigenvalue of the correlation {smallest:.1e})")
    return matrix
