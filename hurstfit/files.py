"""Writing files so that nothing is lost: never over an existing file unasked, never half a file."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from hurstfit.errors import HurstfitError

__all__ = ["require_writable", "written_aside"]


def require_writable(path: Path, *, overwrite: bool, what: str) -> None:
    """Refuse a file that cannot or must not be written, before any work is done.

    Parameters
    ----------
    path : Path
        File to be written.
    overwrite : bool
        Whether the user asked to replace an existing file.
    what : str
        How to call the file, say ``"run file"``.

    Raises
    ------
    HurstfitError
        If the file exists, its directory does not, or the directory is not writable.
    """
    if path.is_dir():
        raise HurstfitError(f"{what} {path} is a directory; name a file")
    if path.exists() and not overwrite:
        raise HurstfitError(f"{what} {path} exists and is not overwritten; name another file or give --overwrite")
    if not path.parent.is_dir():
        raise HurstfitError(f"{what} {path} cannot be written: there is no directory {path.parent}")
    if not os.access(path.parent, os.W_OK | os.X_OK):
        raise HurstfitError(f"{what} {path} cannot be written: the directory {path.parent} is not writable")


@contextmanager
def written_aside(path: Path) -> Iterator[Path]:
    """Write a file aside and move it into place when it is complete and on disk.

    Yields
    ------
    Path
        Temporary file in the same directory; it is removed if the block fails.
    """
    aside = path.with_name(f".{path.name}.{secrets.token_hex(4)}.tmp")
    try:
        yield aside
        with open(aside, "rb") as handle:
            os.fsync(handle.fileno())
        os.replace(aside, path)
    finally:
        aside.unlink(missing_ok=True)
