"""Writing and reading files: products in NetCDF-4, always complete, never half-written.

A file is written under a temporary name beside its place and renamed, so that whatever
stood there stays whole until the new one is.
"""

from __future__ import annotations

import hashlib
import os
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import xarray as xr

from sims.errors import InputError
from sims.schema import Product, check


@contextmanager
def replacing(path: Path) -> Iterator[Path]:
    """Temporary path beside `path`, renamed to it on success and removed on failure."""
    temporary = path.with_name(f".{path.stem}-{uuid.uuid4().hex[:8]}{path.suffix}")
    try:
        yield temporary
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def write_bytes(path: Path, content: bytes) -> None:
    """Write a file in one step."""
    with replacing(path) as temporary:
        temporary.write_bytes(content)


def write_text(path: Path, text: str) -> None:
    """Write a text file in one step, UTF-8."""
    write_bytes(path, text.encode())


def write_product(dataset: xr.Dataset, path: Path) -> None:
    """Write a Dataset as NetCDF-4 in one step, large arrays compressed."""
    large = {name: {"zlib": True, "complevel": 2} for name, values in dataset.data_vars.items() if values.size > 4096}
    with replacing(path) as temporary:
        dataset.to_netcdf(temporary, engine="h5netcdf", encoding=large)


def read_product(path: Path, product: Product) -> xr.Dataset:
    """Read a product into memory and check it.

    Raises
    ------
    InputError
        If the file cannot be read or does not keep to its product.
    """
    dataset = read_netcdf(path)
    check(dataset, product, str(path))
    return dataset


def read_netcdf(path: Path) -> xr.Dataset:
    """Read any NetCDF-4 file into memory.

    Raises
    ------
    InputError
        If there is no such file or it is not NetCDF-4.
    """
    if not path.is_file():
        raise InputError(f"{path}: no such file")
    try:
        with xr.open_dataset(path, engine="h5netcdf") as opened:
            return opened.load()
    except (OSError, ValueError, KeyError) as error:
        raise InputError(f"{path}: not readable as NetCDF-4 ({error})") from None


def sha256_of(path: Path) -> str:
    """SHA-256 of a file's content, hexadecimal."""
    with path.open("rb") as handle:
        return hashlib.file_digest(handle, "sha256").hexdigest()
