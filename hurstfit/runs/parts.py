"""The folder of a run that is not finished: sealed blocks, and a lock.

Each block is written aside, synced and renamed, so that a kill at any moment or a full disk loses at most the block in progress.
A fingerprint of everything that determines the chain tells blocks of another configuration apart; the lock, which the system
takes back from a dead process, keeps a second process out.
"""

from __future__ import annotations

import hashlib
import json
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hurstfit.engines.blocks import Block
from hurstfit.errors import HurstfitError
from hurstfit.sealing import open_sealed, sealed_file

__all__ = ["RunParts", "fingerprint_of", "opened_parts", "parts_folder"]

KIND = "block of a run"
ARRAYS = ("coordinates", "log_probability", "accepted", "random_key")


def fingerprint_of(contents: Mapping[str, object]) -> str:
    """Hash of everything that determines a chain."""
    return hashlib.sha256(json.dumps(contents, sort_keys=True).encode()).hexdigest()


@dataclass(frozen=True)
class RunParts:
    """Finished blocks of a run.

    Attributes
    ----------
    folder : Path
        Where they are.
    fingerprint : str
        Of what they belong to.
    """

    folder: Path
    fingerprint: str

    @property
    def begun(self) -> bool:
        """Whether there is a finished block."""
        return self._path(0).exists()

    def _path(self, index: int) -> Path:
        return self.folder / f"block-{index:05d}.h5"

    def finished(self) -> list[Block]:
        """Read the blocks that are there, in order.

        Raises
        ------
        HurstfitError
            If a block is damaged, or belongs to another configuration.
        """
        blocks: list[Block] = []
        while self._path(len(blocks)).exists():
            path = self._path(len(blocks))
            with open_sealed(path, KIND) as file:
                if file.attrs["fingerprint"] != self.fingerprint:
                    raise HurstfitError(
                        f"{self.folder} holds an unfinished run of another configuration, table or version; finish that one with "
                        "what it was begun with, or remove the folder"
                    )
                arrays = {name: file[name][...] for name in ARRAYS}
                position, has_normal, normal = file.attrs["random_rest"]
            blocks.append(Block(**arrays, random_rest=(int(position), int(has_normal), float(normal))))
        return blocks

    def keep(self, index: int, block: Block) -> None:
        """Write a block.

        Raises
        ------
        HurstfitError
            If it cannot be written, say because the disk is full; earlier blocks stay.
        """
        try:
            with sealed_file(self._path(index), KIND) as file:
                file.attrs["fingerprint"] = self.fingerprint
                file.attrs["random_rest"] = np.array(block.random_rest, dtype=float)
                for name in ARRAYS:
                    file[name] = getattr(block, name)
        except OSError as error:
            raise HurstfitError(
                f"block {index + 1} of the run cannot be written into {self.folder} ({error.strerror or error}); what came "
                "before it is kept: make room and give the same command again"
            ) from error

    def remove(self) -> None:
        """Remove the folder once the run is finished."""
        shutil.rmtree(self.folder, ignore_errors=True)


def parts_folder(run: Path) -> Path:
    """Folder of the parts of a run that is not finished: beside the run file, with ``.parts`` behind its name."""
    return run.with_name(f"{run.name}.parts")


@contextmanager
def opened_parts(run: Path, fingerprint: str) -> Iterator[RunParts]:
    """Open the folder of an unfinished run for this process alone; make it if it is missing.

    Parameters
    ----------
    run : Path
        The run file that is to be made.
    fingerprint : str
        From :func:`fingerprint_of`.

    Raises
    ------
    HurstfitError
        If another process is at the run, or the folder cannot be made.
    """
    import fcntl

    folder = parts_folder(run)
    try:
        folder.mkdir(exist_ok=True)
        lock = open(folder / "lock", "a")  # noqa: SIM115 - held for as long as the run takes
    except OSError as error:
        raise HurstfitError(f"folder {folder} for the unfinished run cannot be made: {error.strerror}") from error
    with lock:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            raise HurstfitError(f"run {run} is being made by another process; wait for it, or name another file") from error
        parts = RunParts(folder, fingerprint)
        try:
            yield parts
        finally:
            if not parts.begun:
                parts.remove()
