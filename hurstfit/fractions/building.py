"""Building a table: independent batches, run by any executor, kept as they come, averaged at the end.

Batch k of a build with seed s draws from ``SeedSequence([s, noise, k])`` and nothing else, so the table does not
depend on how many workers there are, nor on how often the build was interrupted.
"""

from __future__ import annotations

import hashlib
import json
import shutil
from collections.abc import Callable, Iterable
from concurrent.futures import Executor, Future, as_completed
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.replicates import REPLICATES, Replicates
from hurstfit.fractions.simulate import BATCH_WALKS, BatchResult, simulate_batch
from hurstfit.fractions.table import FractionTable, with_exact_values
from hurstfit.sealing import open_sealed, sealed_file
from hurstfit.versions import versions
from hurstfit.walks.noise import NOISE_TYPES

__all__ = ["Build", "average_batches", "run_build"]

#: Fewer batches than this do not give a standard error worth the name.
MIN_BATCHES = 8
#: What the file of a finished batch is.
KIND = "batch of walks"


@dataclass(frozen=True)
class Build:
    """What determines a table.

    Attributes
    ----------
    noise : str
        ``"type-I"`` or ``"type-II"``.
    axes : TableAxes
        Nodes.
    batches : int
        Number of independent batches, at least 8.
    batch_walks : int
        Walks of one batch, a multiple of 8192.
    seed : int
        Seed, not negative.
    """

    noise: str
    axes: TableAxes
    batches: int
    batch_walks: int
    seed: int

    def __post_init__(self) -> None:
        """Refuse settings that cannot make a table."""
        if self.batches < MIN_BATCHES:
            raise HurstfitError(f"batches must be at least {MIN_BATCHES} for an honest standard error, not {self.batches}")
        if self.batch_walks < 1 or self.batch_walks % BATCH_WALKS:
            raise HurstfitError(f"walks a batch must be a multiple of {BATCH_WALKS}, not {self.batch_walks}")
        if self.seed < 0:
            raise HurstfitError(f"the seed must not be negative, not {self.seed}")

    def settings(self) -> dict[str, str]:
        """Everything that determines the numbers, as text for the file."""
        return {
            "command": (
                f"hurstfit tabulate {self.noise} --batches {self.batches} --walks {self.batch_walks} --seed {self.seed} "
                f"--out {self.noise}.h5"
            ),
            "noise": self.noise,
            "batches": str(self.batches),
            "walks_per_batch": str(self.batch_walks),
            "walks": str(self.batches * self.batch_walks),
            "seed": str(self.seed),
            "largest_step": str(int(self.axes.steps[-1])),
        }

    def fingerprint(self) -> str:
        """Hash of the settings of one batch: batches of equal fingerprint belong together."""
        axes = {name: np.asarray(getattr(self.axes, name), dtype=float).tolist() for name in self.axes.__dict__}
        text = json.dumps([self.noise, self.batch_walks, self.seed, axes], sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()

    def simulate(self, batch: int) -> BatchResult:
        """Simulate one batch; the result depends on the settings and `batch` only."""
        entropy = [self.seed, list(NOISE_TYPES).index(self.noise), batch]
        return simulate_batch(self.noise, self.axes, self.batch_walks, np.random.default_rng(np.random.SeedSequence(entropy)))


def run_build(
    build: Build, folder: Path, executor: Executor, done: Callable[[int], None] | None = None, keep: int = 4
) -> FractionTable:
    """Run the batches that are missing from a folder, then average all.

    Parameters
    ----------
    build : Build
        What to build.
    folder : Path
        Where finished batches are kept; made if missing.  An interrupted build goes on from what is there.
    executor : concurrent.futures.Executor
        Runs the batches.
    done : callable, optional
        Called with the number of batches finished since the last call.
    keep : int
        How many batches to have submitted at one time.

    Returns
    -------
    FractionTable

    Raises
    ------
    HurstfitError
        If the folder holds batches of another build, or cannot be written.
    """
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise HurstfitError(f"cannot make the folder {folder} for finished batches: {error.strerror}") from error
    missing = [k for k in range(build.batches) if not _batch_path(folder, k).exists()]
    for k in set(range(build.batches)) - set(missing):
        _read_batch(build, folder, k)
    if done is not None:
        done(build.batches - len(missing))
    waiting = iter(missing)
    running: dict[Future[BatchResult], int] = {}
    try:
        while True:
            for k in waiting:
                running[executor.submit(build.simulate, k)] = k
                if len(running) >= keep:
                    break
            if not running:
                break
            finished = next(as_completed(running))
            _write_batch(build, folder, running.pop(finished), finished.result())
            if done is not None:
                done(1)
    except BaseException:
        for future in running:
            future.cancel()
        raise
    return average_batches(build, (_read_batch(build, folder, k) for k in range(build.batches)))


def average_batches(build: Build, batches: Iterable[BatchResult]) -> FractionTable:
    """Average independent batches; standard errors come from their scatter.

    The mean is over batches; its standard error is their standard deviation over the square root of their number.  Where no batch
    saw a quiescent walk the scatter says nothing, and one over the number of walks stands in for it.
    """
    total = np.zeros(build.axes.shape)
    squares = np.zeros(build.axes.shape)
    members = np.zeros(build.axes.shape[:3])
    groups = [np.zeros(build.axes.shape) for _ in range(min(REPLICATES, build.batches))]
    sizes = np.zeros(len(groups))
    count = 0
    for count, batch in enumerate(batches, start=1):
        share = batch.fraction.astype(float)
        # Welford's update: batches agree to many digits
        difference = share - total
        total += difference / count
        squares += difference * (share - total)
        members += batch.members
        group = (count - 1) % len(groups)
        groups[group] += share
        sizes[group] += 1
    if count < max(len(groups), 2):
        raise ValueError(f"{count} batches were given for a build of {build.batches}")
    errors = np.sqrt(squares / (count * (count - 1)))
    floor = (1.0 / np.maximum(members, 1.0))[..., None, None]
    errors = np.where((total == 0) | (total == 1), np.maximum(errors, floor), errors)
    replicates = Replicates.of(build.axes, [g / n for g, n in zip(groups, sizes, strict=True)], errors)
    with_exact_values(build.noise, build.axes, total, errors)
    return FractionTable(build.noise, build.axes, total, errors, {**build.settings(), **versions()}, replicates=replicates)


def remove_batches(folder: Path) -> None:
    """Remove a folder of finished batches once the table is written."""
    shutil.rmtree(folder)


def _batch_path(folder: Path, batch: int) -> Path:
    return folder / f"batch-{batch:04d}.h5"


def _write_batch(build: Build, folder: Path, batch: int, result: BatchResult) -> None:
    with sealed_file(_batch_path(folder, batch), KIND) as file:
        file.attrs["fingerprint"] = build.fingerprint()
        file["fraction"], file["members"] = result.fraction, result.members


def _read_batch(build: Build, folder: Path, batch: int) -> BatchResult:
    path = _batch_path(folder, batch)
    try:
        with open_sealed(path, KIND) as file:
            same = file.attrs["fingerprint"] == build.fingerprint()
            result = BatchResult(file["fraction"][...], file["members"][...])
    except (HurstfitError, KeyError) as error:
        raise HurstfitError(f"finished batch {path} cannot be read; remove it and start again") from error
    if not same:
        raise HurstfitError(f"{folder} holds batches of a build with other settings; finish that one or remove the folder")
    return result
