"""Points along H: close where the posterior is, near every mode however narrow, and the density between them."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from hurstfit.engines.peaks import Peaks

__all__ = ["NotSettledError", "find_nodes", "refined"]

Array = NDArray[np.float64]

#: Range of the sampling coordinate of H (beyond lie 1e-14 of the prior) and points of the first look at it.
REACH, FIRST_LOOK = 7.5, 61
#: Points with a density below that of the highest by more than this, in natural logarithms, do not count.
DEPTH = 22.0
#: What stands for the log-density of the impossible.
IMPOSSIBLE = -1e299
#: Points along H that are too many: the peaks of everything else are then not found well enough to lay them.
MOST_NODES = 1500
#: Neighbouring points that count differ by less than this in log-density.
CLOSE = 1.5


class NotSettledError(RuntimeError):
    """The quadrature does not apply, or did not reach its accuracy; another engine must be used."""


def refined(nodes: Array, log_density: Array, pieces: int = 64) -> tuple[Array, Array]:
    """Density on a finer grid, from a cubic spline through its logarithm."""
    spline = CubicSpline(nodes, log_density)
    share = np.arange(pieces) / pieces
    fine = np.append((nodes[:-1, None] + np.diff(nodes)[:, None] * share).ravel(), nodes[-1])
    return fine, np.exp(spline(fine))


def find_nodes(find: Callable[[Array, Peaks | None], Peaks]) -> tuple[Array, Peaks]:
    """Lay nodes so that neighbours that count are close in log-density, near every mode however narrow; and peaks there."""
    h = np.linspace(-REACH, REACH, FIRST_LOOK)
    peaks = find(h, None)
    peaks = _mended(find, h, peaks, np.flatnonzero(~peaks.found))
    for _ in range(60):
        g = _log_laplace(h, peaks)
        padded = np.concatenate([[-np.inf], g, [-np.inf]])
        peak = (g >= padded[:-2]) & (g >= padded[2:])
        gap = np.abs(np.diff(g))
        # the neighbourhood of every peak is resolved whatever its height: a narrow mode may hide between two points
        beside = (peak[:-1] | peak[1:]) & (np.maximum(g[:-1], g[1:]) > IMPOSSIBLE)
        counts = np.maximum(g[:-1], g[1:]) > g.max() - DEPTH
        # where the density is as high on either side of a peak, only the spacing of the neighbours tells
        width = np.diff(h)
        uneven = width > 2.5 * np.minimum(np.append(width[1:], np.inf), np.insert(width[:-1], 0, np.inf))
        split = np.flatnonzero(((gap > CLOSE) & (beside | counts) | uneven & counts) & (width > 1e-9))
        if not split.size:
            break
        if h.size + split.size > MOST_NODES:
            raise NotSettledError("counts this large tie all parameters to a sheet too thin to follow")
        middle = (h[split] + h[split + 1]) / 2
        higher = np.where(g[split] > g[split + 1], split, split + 1)
        joined = peaks.joined(find(middle, peaks.take(higher)))
        order = np.argsort(np.concatenate([h, middle]))
        h, peaks = np.concatenate([h, middle])[order], joined.take(order)
    g = _log_laplace(h, peaks)
    peaks = _mended(find, h, peaks, np.flatnonzero((g > g.max() - DEPTH) | ~peaks.found))
    g = _log_laplace(h, peaks)
    near = g > g.max() - DEPTH
    near = (near | np.append(near[1:], False) | np.insert(near[:-1], 0, False)) & (g > g.max() - 2 * DEPTH)
    return h[near], peaks.take(np.flatnonzero(near))


def _mended(find: Callable[[Array, Peaks | None], Peaks], h: Array, peaks: Peaks, chosen: NDArray[np.intp]) -> Peaks:
    """Search again from the peaks of either neighbour and keep what is higher: a search may be stuck alone."""
    for shift in (1, -1) if chosen.size else ():
        again = find(h[chosen], peaks.take(np.clip(chosen + shift, 0, h.size - 1)))
        better = _log_laplace(h[chosen], again) > _log_laplace(h, peaks)[chosen] + 0.01
        peaks = peaks.replaced(chosen[better], again.take(np.flatnonzero(better)))
    return peaks


def _log_laplace(h: Array, peaks: Peaks) -> Array:
    """Approximate log-density of H, a number everywhere."""
    g = peaks.log_laplace - 0.5 * h**2
    return np.where(np.isfinite(g), g, 10 * IMPOSSIBLE)
