"""Writing a page's files into a folder: nothing in the way is replaced unless that is asked for.

Used by the commands that judge one part of a campaign (`timeline`, `sky`, `beam`); the stages of a
run have their own record in `reduce.runner`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path

from sims.errors import InputError
from sims.products import write_bytes, write_text


def claim(out: Path, names: Iterable[str], *, update: bool) -> None:
    """See that a folder can take files of these names, before anything is computed.

    Parameters
    ----------
    out : Path
        Folder; it need not exist.
    names : iterable of str
        Files to be written.
    update : bool
        Allow files of these names to be replaced.

    Raises
    ------
    InputError
        If `out` is no folder, or files are in the way.
    """
    if out.exists() and not out.is_dir():
        raise InputError(f"--out: {out} is a file; name a folder")
    there = [name for name in names if (out / name).exists()]
    if there and not update:
        raise InputError(f"--out: {out} already holds {', '.join(there)}; name another folder, or give --update")


def write_all(out: Path, contents: Mapping[str, str | bytes]) -> None:
    """Write files, each to a temporary name first; the folder is made if it is not there.

    Raises
    ------
    InputError
        If the folder cannot be made or written to.
    """
    try:
        out.mkdir(parents=True, exist_ok=True)
        for name, content in contents.items():
            if isinstance(content, str):
                write_text(out / name, content)
            else:
                write_bytes(out / name, content)
    except OSError as error:
        raise InputError(f"--out: {out} cannot be written to ({error.strerror})") from None
