"""A seal on HDF5 files: what the file is, and a checksum of all of it that is verified before the HDF5 library reads a byte.

The library trusts its own structures; a single flipped bit in them can make it crash or hang, which no error handling
catches.  HDF5 lets a file begin with a block that belongs to the user, and the seal stands there, in plain text.  Sealed
files open with plain h5py.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import h5py

from hurstfit.errors import HurstfitError
from hurstfit.files import written_aside

__all__ = ["kind_of", "open_sealed", "seal", "sealed_file"]

#: Bytes at the start of a file that belong to the seal; HDF5 wants a power of two of at least 512.
BLOCK = 512
_MARK = "hurstfit "
#: What a file may say that it is: anything else is damage.
_KIND = re.compile(rf"{_MARK}([a-z][a-z -]{{0,40}})")


def _block(kind: str, digest: str) -> bytes:
    text = f"{_MARK}{kind}\nHDF5 behind this block of {BLOCK} bytes; SHA-256 of what is behind it: {digest}\n"
    return text.encode().ljust(BLOCK, b"\0")


def seal(path: Path, kind: str) -> None:
    """Seal a closed HDF5 file that was made with ``userblock_size=512``.

    Parameters
    ----------
    path : Path
        File.
    kind : str
        What it is, say ``"run file"``.
    """
    with open(path, "r+b") as file:
        file.seek(BLOCK)
        digest = hashlib.file_digest(file, "sha256").hexdigest()
        file.seek(0)
        file.write(_block(kind, digest))


@contextmanager
def sealed_file(path: Path, kind: str) -> Iterator[h5py.File]:
    """Write an HDF5 file aside, seal it, and move it into place when it is complete."""
    with written_aside(path) as aside:
        with h5py.File(aside, "w", userblock_size=BLOCK) as file:
            yield file
        seal(aside, kind)


def kind_of(path: Path) -> str | None:
    """Tell what a sealed file says that it is; None for any other file."""
    try:
        with open(path, "rb") as file:
            first = file.read(BLOCK).split(b"\n")[0].decode("ascii", "replace")
    except OSError:
        return None
    match = _KIND.fullmatch(first)
    return match.group(1) if match else None


@contextmanager
def open_sealed(path: Path, kind: str) -> Iterator[h5py.File]:
    """Verify a sealed file and open it for reading.

    Parameters
    ----------
    path : Path
        File to be read.
    kind : str
        What it must be.

    Raises
    ------
    HurstfitError
        If it is missing, is something else, or was changed or cut since it was sealed.
    """
    if path.is_dir():
        raise HurstfitError(f"{kind} {path} is a directory; name a file")
    try:
        with open(path, "rb") as file:
            block = file.read(BLOCK)
            digest = hashlib.file_digest(file, "sha256").hexdigest()
    except FileNotFoundError as error:
        raise HurstfitError(f"{kind} {path} does not exist") from error
    except OSError as error:
        raise HurstfitError(f"{kind} {path} cannot be read: {error.strerror or error}") from error
    found = kind_of(path)
    if found is None:
        raise HurstfitError(f"{path} is not a {kind} that hurstfit wrote, or its first bytes are damaged")
    if block != _block(found, digest):
        raise HurstfitError(f"{found} {path} is damaged or truncated: its contents do not match its checksum")
    if found != kind:
        raise HurstfitError(f"{path} is a {found}, not a {kind}")
    with h5py.File(path, "r") as file:
        yield file
