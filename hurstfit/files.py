"""Writing files so that nothing is lost: never over an existing file unasked, never half a file."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from hurstfit.errors import HurstfitError

__all__ = ["require_writable", "require_writable_folder", "written_aside"]


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
    if not path.parent.is_dir():
        raise HurstfitError(f"{what} {path} cannot be written: there is no directory {path.parent}")
    if os.path.lexists(path) and not overwrite:
        raise HurstfitError(f"{what} {path} exists and is not overwritten; name another file or give --overwrite")
    require_writable_folder(path.parent, f"{what} {path}", path.name)


def require_writable_folder(folder: Path, what: str, name: str = "file") -> None:
    """Refuse a folder in which no file of a given name can be made, by making one.

    Permissions alone do not tell: the superuser has them all, on a file system that is read-only too.

    Parameters
    ----------
    folder : Path
        Existing folder.
    what : str
        What is to be written, for the message.
    name : str
        Name of the file that is to be made; the trial's is a little longer.

    Raises
    ------
    HurstfitError
        If it cannot.
    """
    trial = _aside(folder / name)
    try:
        trial.touch(exist_ok=False)
        trial.unlink()
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise HurstfitError(f"{what} cannot be written: the directory {folder} is not writable ({reason})") from error


@contextmanager
def written_aside(path: Path) -> Iterator[Path]:
    """Write a file aside and move it into place when it is complete and on disk.

    Yields
    ------
    Path
        Temporary file in the same directory; it is removed if the block fails.
    """
    aside = _aside(path)
    try:
        yield aside
        with open(aside, "rb") as handle:
            os.fsync(handle.fileno())
        os.replace(aside, path)
    finally:
        aside.unlink(missing_ok=True)


def _aside(path: Path) -> Path:
    return path.with_name(f".{path.name}.{secrets.token_hex(4)}.tmp")
