"""Files that appear whole or not at all."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from stillground.errors import OutputError


@contextmanager
def whole(path: Path) -> Iterator[Path]:
    """Lend a temporary path beside ``path`` and move it there when the block ends well.

    The folder is created. When the block raises, the temporary file is removed and whatever stood
    at ``path`` is untouched. Errors of the block itself (a full disk) pass through as they are.

    Parameters
    ----------
    path : Path
        Where the file shall appear; an older file there is replaced.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    temporary = path.with_name(f".{secrets.token_hex(4)}-{path.name}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        temporary.touch(exist_ok=False)
    except OSError as error:
        raise _unwritable(path, error) from error
    try:
        yield temporary
        try:
            os.replace(temporary, path)
        except OSError as error:
            raise _unwritable(path, error) from error
    finally:
        temporary.unlink(missing_ok=True)


def require_writable(folder: Path) -> None:
    """Make a folder and prove that files can be put there, before long work; else `OutputError`."""
    proof = folder / f".{secrets.token_hex(4)}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        proof.touch(exist_ok=False)
        proof.unlink()
    except OSError as error:
        raise _unwritable(folder, error) from error


def _unwritable(path: Path, error: OSError) -> OutputError:
    return OutputError(f"{path} cannot be written ({error.strerror}): choose another output folder")
