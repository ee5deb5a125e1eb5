"""Tables of spectra for the tests of what reads them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from reduce.spectra import read_spectra
from sims.errors import InputError

FREQUENCY_MHZ = np.linspace(50.0, 100.0, 11)


def table_text(
    bins: tuple[str, ...] = ("north", "south"), header: str = "bin,frequency_mhz,temperature_k,sigma_k"
) -> str:
    """A CSV table of a power law in each bin, a row a channel."""
    rows = [f"{name},{f},{3000 * (f / 70) ** -2.5 + 7 * number:.6f},{0.01 * (number + 1)}"
            for number, name in enumerate(bins) for f in FREQUENCY_MHZ]  # fmt: skip
    return "\n".join([header, *rows]) + "\n"


def written(folder: Path, text: str, name: str = "spectra.csv") -> Path:
    """A file with this text."""
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


def problems_of(path: Path, covariance: Path | None = None) -> tuple[str, ...]:
    """What is told of spectra that must be refused."""
    with pytest.raises(InputError) as caught:
        read_spectra(path, covariance)
    return caught.value.problems
