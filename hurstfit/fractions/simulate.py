"""Simulation of one batch of walks: the share of quiescent walks on every node of a table, from one pass.

What makes it fast, and what it does to the errors:

* one white spectrum serves every H (common random numbers), so errors are correlated over H as well as over steps and
  definitions;
* the real and imaginary part of a transform, each also with its sign reversed (antithetic), and for type I both halves of the
  period are walks of their own, so that one transform of length 2n gives 4 (type II) or 8 (type I) walks that are not
  independent.

A batch's own binomial error would therefore be wrong.  Errors are taken only from the scatter of independent batches, see
:mod:`hurstfit.fractions.table`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from hurstfit.fractions.axes import TableAxes, window_scale
from hurstfit.fractions.kernel import shape_spectrum, tally, walk
from hurstfit.fractions.spline import cardinal_weights
from hurstfit.walks.noise import noise_type

__all__ = ["BATCH_WALKS", "BatchResult", "simulate_batch"]

#: Complex columns that are transformed together: wide enough for vector units, small enough for the second-level cache.
COLUMNS = 16
#: Walks whose masses are held at once; the mean formed mass of a parent sample is the mean over these.
BLOCK_WALKS = 8192
#: Walks of a batch are a multiple of this.
BATCH_WALKS = BLOCK_WALKS


@dataclass(frozen=True)
class BatchResult:
    """Quiescent fractions from one independent batch of walks.

    Attributes
    ----------
    fraction : ndarray of float32, shape of the axes
        Share of quiescent walks among the walks of each parent sample; 0 where a parent sample is empty.
    members : ndarray of int, shape (n_h, n_steps, n_parents)
        Number of walks in each parent sample.
    """

    fraction: NDArray[np.float32]
    members: NDArray[np.int64]


@dataclass(frozen=True)
class _Recording:
    """At which steps the formed mass is kept, and where."""

    times: NDArray[np.int64]
    slots: NDArray[np.int64]

    @classmethod
    def of(cls, axes: TableAxes) -> _Recording:
        n = int(axes.steps[-1])
        starts = [step - axes.windows(step) for step in axes.steps]
        times = np.unique(np.concatenate([axes.steps, *starts, [0]]))
        slots = np.full(n + 1, -1, dtype=np.int64)
        slots[times] = np.arange(times.size)
        return cls(times, slots)


def simulate_batch(
    noise: str,
    axes: TableAxes,
    walks: int,
    rng: np.random.Generator,
    report: Callable[[int], None] | None = None,
) -> BatchResult:
    """Simulate one batch and count quiescent walks on every node.

    Parameters
    ----------
    noise : {'type-I', 'type-II'}
        Construction of the increments.
    axes : TableAxes
        Nodes to fill.
    walks : int
        Number of walks at every H, a multiple of :data:`BATCH_WALKS`.
    rng : numpy.random.Generator
        Source of random numbers; the result depends on nothing else.
    report : callable, optional
        Called with the number of walk-steps done since the last call.

    Returns
    -------
    BatchResult
    """
    if walks < 1 or walks % BATCH_WALKS:
        raise ValueError(f"walks must be a positive multiple of {BATCH_WALKS}, not {walks}")
    counts = np.zeros((*axes.shape[:2], axes.scales.size, axes.masses.size + 1, axes.thresholds.size + 2), dtype=np.int64)
    for _ in range(walks // BLOCK_WALKS):
        _simulate_block(noise, axes, rng, counts, report)
    # rows hold walks that pass exactly i mass limits: sum from the top; columns exactly j thresholds: sum from the bottom
    passed = np.cumsum(counts[..., ::-1, :], axis=-2)[..., ::-1, :]
    quiescent = np.cumsum(passed, axis=-1)
    members = quiescent[:, :, 0, :, -1]
    share = _to_scales(axes, quiescent[..., :-1] / np.maximum(quiescent[..., -1:], 1))
    return BatchResult(np.ascontiguousarray(share.transpose(0, 1, 3, 2, 4), dtype=np.float32), members)


def _simulate_block(
    noise: str,
    axes: TableAxes,
    rng: np.random.Generator,
    counts: NDArray[np.int64],
    report: Callable[[int], None] | None,
) -> None:
    kind = noise_type(noise)
    n = int(axes.steps[-1])
    recording = _Recording.of(axes)
    per_column = 4 * kind.windows
    groups = BLOCK_WALKS // (per_column * COLUMNS)
    spectra = [_split(kind.white_spectrum(n, COLUMNS, rng)) for _ in range(groups)]
    work = np.empty((2 * n, COLUMNS), dtype=np.complex64)
    lanes = 2 * COLUMNS
    masses = np.zeros((recording.times.size, groups * 2 * kind.windows, lanes))
    for i, H in enumerate(axes.h):
        transfer = kind.transfer(float(H), n).astype(np.complex64)
        run = 0
        for spectrum in spectra:
            shape_spectrum(spectrum, transfer, work.view(np.float32))
            x = scipy.fft.ifft(work, axis=0, overwrite_x=True).view(np.float32)
            for window in range(kind.windows):
                part = x[window * n : (window + 1) * n]
                for sign in (1.0, -1.0):
                    walk(part, sign, recording.slots, masses[:, run])
                    run += 1
        _tally_block(axes, recording, masses.reshape(recording.times.size, -1), counts[i])
        if report is not None:
            report(BLOCK_WALKS * n)


def _split(spectrum: NDArray[np.complex64]) -> NDArray[np.float32]:
    """Lay real and imaginary parts out apart, shape (m, 2, columns), as the compiled product wants them."""
    return np.ascontiguousarray(np.stack([spectrum.real, spectrum.imag], axis=1))


def _tally_block(axes: TableAxes, recording: _Recording, masses: NDArray[np.float64], counts: NDArray[np.int64]) -> None:
    thresholds = axes.thresholds.astype(np.float32)
    for j, n in enumerate(axes.steps):
        now = recording.slots[n]
        floors = axes.masses * masses[now].mean()
        widths = axes.windows(n)
        tally(masses, now, recording.slots[n - widths], n / widths, floors, thresholds, counts[j, : widths.size])


def _to_scales(axes: TableAxes, share: NDArray[np.float64]) -> NDArray[np.float64]:
    """Move fractions, (H, steps, windows counted, ...), from the whole-step windows counted to the window scales of the table."""
    moved = np.empty((*share.shape[:2], axes.scales.size, *share.shape[3:]))
    for j, n in enumerate(axes.steps):
        scales = window_scale(axes.windows(n), n)
        weights = cardinal_weights(scales, axes.scales)
        moved[:, j] = np.einsum("sw,hw...->hs...", weights, share[:, j, : scales.size])
    return moved
