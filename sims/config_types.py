"""Types that several tables of the configuration share: paths, dates, frames, resolutions."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator


def _path(value: Any) -> Any:
    return Path(value) if isinstance(value, str) and value else value


def _utc(value: Any) -> Any:
    if isinstance(value, str):
        try:
            value = datetime.fromisoformat(value)
        except ValueError:
            value = None
    if isinstance(value, datetime):
        return value.replace(tzinfo=UTC) if value.tzinfo is None else value.astimezone(UTC)
    raise ValueError("not a date and time: write 2027-06-01T00:00:00Z")


FilePath = Annotated[Path, BeforeValidator(_path)]
Utc = Annotated[datetime, BeforeValidator(_utc)]
Frame = Literal["galactic", "icrs", "fk5", "fk4"]
EARLIEST = datetime(1973, 1, 2, tzinfo=UTC)  # IERS tables start here
LATEST = datetime(2100, 1, 1, tzinfo=UTC)  # ERFA's series for the Earth and the Moon end here
Nside = Literal[4, 8, 16, 32, 64, 128, 256, 512]
