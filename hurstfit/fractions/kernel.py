"""The inner loops of a table, compiled: shape a spectrum, walk, tally.

They run over lanes, that is over walks side by side in memory, so that the compiler can use the processor's vector units.  Rates
and masses are in double precision although increments are single: a walk at rest then adds exactly nothing to its mass, so that
"at zero over the last w steps" is the exact statement ``A_n == A_{n-w}``.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = ["shape_spectrum", "tally", "walk"]


@njit(cache=True, nogil=True, fastmath=True)
def shape_spectrum(
    spectrum: NDArray[np.float32], transfer: NDArray[np.complex64], out: NDArray[np.float32]
) -> None:  # pragma: no cover - compiled
    """Multiply white spectra by a transfer function.

    Parameters
    ----------
    spectrum : ndarray of float32, shape (m, 2, columns)
        Real parts, then imaginary parts, of each frequency.
    transfer : ndarray of complex64, shape (m,)
        Transfer function.
    out : ndarray of float32, shape (m, 2 * columns)
        Filled with the product, real and imaginary parts interleaved.
    """
    columns = spectrum.shape[2]
    for f in range(spectrum.shape[0]):
        re = transfer[f].real
        im = transfer[f].imag
        for k in range(columns):
            a = spectrum[f, 0, k]
            b = spectrum[f, 1, k]
            out[f, 2 * k] = a * re - b * im
            out[f, 2 * k + 1] = a * im + b * re


@njit(cache=True, nogil=True)
def walk(
    increments: NDArray[np.float32], sign: float, slots: NDArray[np.int64], masses: NDArray[np.float64]
) -> None:  # pragma: no cover - compiled
    """Walk all lanes and record the formed mass at chosen steps.

    Parameters
    ----------
    increments : ndarray of float32, shape (n, lanes)
        X_1 ... X_n.
    sign : float
        +1, or -1 for the mirrored walk.
    slots : ndarray of int, shape (n + 1,)
        Where to record the mass after step t; -1 for nowhere.
    masses : ndarray, shape (n_slots, lanes)
        Filled with A_t.
    """
    lanes = increments.shape[1]
    rate = np.zeros(lanes)
    mass = np.zeros(lanes)
    for t in range(increments.shape[0]):
        for k in range(lanes):
            value = rate[k] + sign * increments[t, k]
            value = value if value > 0.0 else 0.0
            rate[k] = value
            mass[k] += value
        slot = slots[t + 1]
        if slot >= 0:
            for k in range(lanes):
                masses[slot, k] = mass[k]


@njit(cache=True, nogil=True)
def tally(
    masses: NDArray[np.float64],
    now: int,
    before: NDArray[np.int64],
    scales: NDArray[np.float64],
    floors: NDArray[np.float64],
    thresholds: NDArray[np.float32],
    counts: NDArray[np.int64],
) -> None:  # pragma: no cover - compiled
    """Sort walks by formed mass and by rate relative to the mean rate so far, at one step and for several windows.

    Parameters
    ----------
    masses : ndarray, shape (n_slots, lanes)
        Formed masses as :func:`walk` recorded them.
    now : int
        Slot of A_n.
    before : ndarray of int, shape (n_windows,)
        Slots of A_{n-w}, the mass at the start of each window.
    scales : ndarray, shape (n_windows,)
        n / w, so that q = (1 - A_{n-w} / A_n) n / w.
    floors : ndarray, shape (n_masses,)
        Increasing mass limits of the parent samples, the first one 0.
    thresholds : ndarray of float32, shape (n_thresholds,)
        Increasing theta.  Single precision doubles the width of the vector units; a rate within 1e-7 of a threshold is rare
        enough.
    counts : ndarray of int, shape (n_windows, n_masses + 1, n_thresholds + 2)
        Added to.  Row i: walks that pass exactly the first i mass limits.  Column 0: at zero over the window; column j: not at
        zero and q at or above exactly the first j - 1 thresholds.
    """
    lanes = masses.shape[1]
    chunk = 512
    row = np.zeros(chunk, dtype=np.int32)
    column = np.zeros(chunk, dtype=np.int32)
    q = np.zeros(chunk, dtype=np.float32)
    inverse = np.zeros(chunk)
    for start in range(0, lanes, chunk):
        size = min(chunk, lanes - start)
        for k in range(size):
            row[k] = 0
            mass = masses[now, start + k]
            inverse[k] = 1.0 / (mass if mass > 0.0 else 1.0)
        for i in range(floors.shape[0]):
            floor = floors[i]
            for k in range(size):
                row[k] += 1 if masses[now, start + k] > floor else 0
        for w in range(before.shape[0]):
            scale = scales[w]
            start_slot = before[w]
            for k in range(size):
                grown = masses[now, start + k] - masses[start_slot, start + k]
                column[k] = 1 if grown > 0.0 else 0
                q[k] = np.float32(grown * inverse[k] * scale)
            for j in range(thresholds.shape[0]):
                threshold = thresholds[j]
                for k in range(size):
                    column[k] += 1 if q[k] >= threshold else 0
            for k in range(size):
                counts[w, row[k], column[k]] += 1
