"""The true quiescent fraction of every bin: exponent, clock and fraction table brought together.

A bin spans a redshift range, hence a range of step numbers; its fraction is the average of the table over that range, weighted by
comoving volume (:meth:`hurstfit.clock.CosmicClock.bin_nodes`).  Averaging is linear, so that with a fixed clock everything
but H is one matrix, computed once.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from hurstfit.clock import CosmicClock
from hurstfit.fractions.spline import Surface, spline_basis

__all__ = ["BinPrediction"]


@dataclass(frozen=True)
class BinPrediction:
    """Predicted true fractions of a set of bins.

    Attributes
    ----------
    surface : Surface
        Fraction over H and step number, for the definition in force.
    clock : CosmicClock
        Cosmic ages.
    z_lo, z_hi : ndarray, shape (bins,)
        Redshift ranges.
    fixed_clock : tuple of float, or None
        (step in Myr, z_start) where both are fixed, which makes the prediction much faster.
    """

    surface: Surface
    clock: CosmicClock
    z_lo: NDArray[np.float64]
    z_hi: NDArray[np.float64]
    fixed_clock: tuple[float, float] | None = None

    @cached_property
    def _nodes(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Cosmic ages (Myr) and weights of the points that a bin is averaged over, both (bins, points)."""
        nodes = self.clock.bin_nodes(self.z_lo, self.z_hi)
        return self.clock.age(nodes.z), nodes.weight

    @cached_property
    def _fixed(self) -> tuple[NDArray[np.float64], bool]:
        """Coefficients of the H-splines of every bin, (n_h, bins), with a fixed clock; and whether n >= 1 everywhere."""
        assert self.fixed_clock is not None
        ages, weights = self._nodes
        step, z_start = self.fixed_clock
        steps = (ages - self.clock.age(np.array(z_start))) / step
        averaging = np.einsum("bk,bkn->bn", weights, self.surface.step_basis(steps))
        return self.surface.coefficients @ averaging.T, bool(np.all(steps >= 1.0))

    def step_range(
        self, step: NDArray[np.float64], z_start: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Smallest and largest step number that each bin reaches at its edges, over given clocks.

        Parameters
        ----------
        step, z_start : ndarray, shape (clocks,)
            Step lengths in Myr and redshifts at which walks start.

        Returns
        -------
        lowest, highest : ndarray, shape (bins,)
        """
        start = self.clock.age(z_start)[:, None]
        earliest = (self.clock.age(self.z_hi)[None, :] - start) / step[:, None]
        latest = (self.clock.age(self.z_lo)[None, :] - start) / step[:, None]
        return earliest.min(axis=0), latest.max(axis=0)

    def __call__(
        self, H: NDArray[np.float64], step: NDArray[np.float64], z_start: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
        """Predict every bin for many parameter vectors.

        Parameters
        ----------
        H, step, z_start : ndarray, shape (vectors,)
            Correlation exponent, step length in Myr, redshift at which walks start.

        Returns
        -------
        fraction : ndarray, shape (vectors, bins)
            True quiescent fractions.
        possible : ndarray of bool, shape (vectors,)
            False where a bin lies before the first step (n < 1) or beyond the table: there the likelihood is zero.
        """
        in_h = self.surface.h_basis(H)
        if self.fixed_clock is not None:
            coefficients, reached = self._fixed
            return np.clip(in_h @ coefficients, 0.0, 1.0), np.full(H.shape, reached)
        ages, weights = self._nodes
        # a proposal far out in the tail of the prior may be a step of zero
        lengths = np.maximum(step, 1e-6)[:, None, None]
        steps = (ages[None] - self.clock.age(z_start)[:, None, None]) / lengths
        nodes = self.surface.steps
        possible = np.all((steps >= nodes[0]) & (steps <= nodes[-1]), axis=(1, 2))
        rows = in_h @ self.surface.coefficients
        first, basis = spline_basis(self.surface.step_knots, np.log(np.clip(steps, nodes[0], nodes[-1])))
        flat = first.reshape(H.size, -1)
        gathered = sum(np.take_along_axis(rows, flat + b, axis=1).reshape(first.shape) * basis[..., b] for b in range(4))
        return np.clip(np.einsum("wbk,bk->wb", gathered, weights), 0.0, 1.0), possible
