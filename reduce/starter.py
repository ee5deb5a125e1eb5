"""The commented starter configuration: the file of the demo, as it travels with the package."""

from __future__ import annotations

from pathlib import Path

from sims.errors import InputError
from sims.products import write_text

STARTER = "demo.toml"
STARTER_NAME = "campaign.toml"


def starter_text() -> str:
    """The starter configuration: from the installed package, or from the checkout it is run in."""
    package = Path(__file__).parent
    folders = (package / "configs", package.parent / "configs")
    found = next(folder / STARTER for folder in folders if (folder / STARTER).is_file())
    return found.read_text(encoding="utf-8")


def new(folder: Path) -> Path:
    """Write the starter configuration into a folder.

    Parameters
    ----------
    folder : Path
        Made if it is not there.

    Returns
    -------
    Path
        The file written.

    Raises
    ------
    InputError
        If the file is already there, or the folder cannot be made.
    """
    path = folder / STARTER_NAME
    if path.exists():
        raise InputError(f"{path}: is already there and is not overwritten; name another folder")
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{folder}: cannot be made a folder ({error.strerror})") from None
    write_text(path, starter_text())
    return path
