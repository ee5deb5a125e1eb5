"""Files are complete or not there: a failure half-way leaves what stood, and nothing beside it."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from sims.errors import InputError
from sims.products import read_netcdf, read_product, replacing, sha256_of, write_bytes, write_product, write_text
from sims.schema import Product, Variable

PRODUCT: Product = {"temperature_k": Variable(("bin", "channel"), "K", "temperature")}


def product(bins: int = 2, channels: int = 3000) -> xr.Dataset:
    values = np.random.default_rng(5).standard_normal((bins, channels))
    return xr.Dataset(
        {"temperature_k": (("bin", "channel"), values, {"units": "K"}), "flag": ("channel", np.zeros(3000, np.uint8))},
        attrs={"campaign": "Sable Lantern", "labels": ["a", "b"], "seed": 7},
    )


def test_a_product_is_read_back_as_it_was_written(tmp_path: Path) -> None:
    path = tmp_path / "spectra.nc"
    written = product()
    write_product(written, path)
    read = read_product(path, PRODUCT)
    xr.testing.assert_equal(read, written)
    assert read["flag"].dtype == np.uint8
    assert read.attrs["campaign"] == "Sable Lantern"
    assert list(read.attrs["labels"]) == ["a", "b"]
    assert [file.name for file in tmp_path.iterdir()] == ["spectra.nc"]


def test_a_failure_half_way_leaves_the_old_file_whole_and_no_temporary(tmp_path: Path) -> None:
    path = tmp_path / "spectra.nc"
    write_product(product(), path)
    before = path.read_bytes()
    unwritable = product().assign(odd=("channel", np.array([object()] * 3000)))
    with pytest.raises((TypeError, ValueError)):
        write_product(unwritable, path)
    assert path.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["spectra.nc"]


@pytest.mark.parametrize("error", [OSError("disk full"), KeyboardInterrupt()])
def test_replacing_undoes_itself_whatever_the_failure(error: BaseException, tmp_path: Path) -> None:
    path = tmp_path / "log.txt"
    write_text(path, "old")

    def half_way() -> None:
        with replacing(path) as temporary:
            temporary.write_text("half of the n")
            assert path.read_text() == "old"
            raise error

    with pytest.raises(type(error)):
        half_way()
    assert path.read_text() == "old"
    assert [file.name for file in tmp_path.iterdir()] == ["log.txt"]


def test_replacing_makes_a_file_that_was_not_there(tmp_path: Path) -> None:
    write_bytes(tmp_path / "new.png", b"\x89")
    assert (tmp_path / "new.png").read_bytes() == b"\x89"
    write_text(tmp_path / "new.txt", "µ\n")
    assert (tmp_path / "new.txt").read_bytes() == "µ\n".encode()


def test_the_temporary_stands_beside_its_place(tmp_path: Path) -> None:
    """A rename within a folder is one step; across file systems it is not."""
    with replacing(tmp_path / "a.nc") as temporary:
        assert temporary.parent == tmp_path
        assert temporary.suffix == ".nc"
        temporary.write_bytes(b"")


def test_files_that_are_no_products_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such file"):
        read_netcdf(tmp_path / "none.nc")
    with pytest.raises(InputError, match="no such file"):
        read_netcdf(tmp_path)
    (tmp_path / "text.nc").write_text("frequency_mhz,temperature_k\n")
    with pytest.raises(InputError, match="not readable as NetCDF-4"):
        read_netcdf(tmp_path / "text.nc")
    write_product(product(), tmp_path / "whole.nc")
    whole = (tmp_path / "whole.nc").read_bytes()
    (tmp_path / "cut.nc").write_bytes(whole[: len(whole) // 2])
    with pytest.raises(InputError, match=r"cut\.nc: not readable as NetCDF-4"):
        read_netcdf(tmp_path / "cut.nc")
    other: Product = {"b": Variable(("channel",), "1/K", "b")}
    with pytest.raises(InputError, match=r"whole.nc: variable b\['channel'\] is missing"):
        read_product(tmp_path / "whole.nc", other)


def test_checksum_is_sha_256_of_the_content(tmp_path: Path) -> None:
    (tmp_path / "x").write_bytes(b"abc")
    # FIPS 180-2, appendix B.1: the digest of "abc".
    assert sha256_of(tmp_path / "x") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert sha256_of(tmp_path / "x") == hashlib.sha256(b"abc").hexdigest()
