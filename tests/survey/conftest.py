"""Small invented tables."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

RAYS = (
    "source_x",
    "source_y",
    "source_z",
    "receiver_x",
    "receiver_y",
    "receiver_z",
    "time",
    "time_error",
)


@pytest.fixture
def rays() -> tuple[str, ...]:
    """Columns of a kind that measures travel times between two places."""
    return RAYS


@pytest.fixture
def picks(tmp_path: Path) -> Callable[..., Path]:
    """Write rows under a header; row 2 of the file is the first of them."""

    def write(
        *rows: str,
        header: str = "source_x [m],source_y [m],source_z [m],receiver_x [m],receiver_y [m],receiver_z [m],"
        "time [ms],time_error [ms]",
        name: str = "picks.csv",
    ) -> Path:
        path = tmp_path / name
        path.write_text("".join(f"{line}\n" for line in (header, *rows)), encoding="utf-8")
        return path

    return write
