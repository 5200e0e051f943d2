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

from hurstfit.clock import BinNodes, CosmicClock
from hurstfit.fractions.definition import Definition
from hurstfit.fractions.spline import Surface

__all__ = ["BinPrediction"]

Array = NDArray[np.float64]

#: Relative error of the average over a bin that is good enough: a hundredth of the table's own error.
AVERAGING = 1e-5
#: Points that a bin is averaged over at most.
MOST_POINTS = 16
#: A proposal far out in the tail of the prior may be a step of zero; no step is shorter than this, in Myr.
SHORTEST_STEP = 1e-6


@dataclass(frozen=True)
class BinPrediction:
    """Predicted true fractions of a set of bins.

    Attributes
    ----------
    surface : Surface
        Fraction over H and the walk, for the definition in force.
    definition : Definition
        Window, and threshold where it follows the clock.
    clock : CosmicClock
        Cosmic ages.
    z_lo, z_hi : ndarray, shape (bins,)
        Redshift ranges.
    fixed_clock : tuple of float, or None
        (step in Myr, z_start) where both are fixed, which makes the prediction much faster.
    latest_start : float, or None
        Redshift after which walks hardly ever start, by which the points within a bin are chosen.
    """

    surface: Surface
    definition: Definition
    clock: CosmicClock
    z_lo: Array
    z_hi: Array
    fixed_clock: tuple[float, float] | None = None
    latest_start: float | None = None

    @cached_property
    def _nodes(self) -> tuple[Array, Array]:
        """Cosmic ages (Myr) and weights of the points that a bin is averaged over, both (bins, points).

        Bins are mostly narrow: the fewest points that average powers of the walk's age to :data:`AVERAGING` do, as zero fractions
        go with such powers.  They vary fastest for the walks that start last.
        """
        start = self.fixed_clock[1] if self.fixed_clock is not None else self.latest_start
        born = float(self.clock.age(start)) if start is not None else 0.0

        def averages(nodes: BinNodes) -> Array:
            # a bin that the latest walks have only just reached, or not yet, is no reason for points without end
            ages = self.clock.age(nodes.z)
            return nodes.average(np.maximum(ages - born, 0.05 * ages) ** np.array([-1.0, -0.5, 0.5])[:, None, None])

        most = self.clock.bin_nodes(self.z_lo, self.z_hi, order=MOST_POINTS)
        for order in range(2, MOST_POINTS):
            nodes = self.clock.bin_nodes(self.z_lo, self.z_hi, order=order)
            if np.all(np.abs(averages(nodes) / averages(most) - 1.0) < AVERAGING):
                return self.clock.age(nodes.z), nodes.weight
        return self.clock.age(most.z), most.weight

    @cached_property
    def _fixed(self) -> tuple[Array, bool]:
        """Coefficients of the H-splines of every bin, (n_h, bins), with a fixed clock; and whether the table covers all bins."""
        assert self.fixed_clock is not None
        ages, weights = self._nodes
        steps, window, threshold = self.walks(ages, *(np.array([x]) for x in self.fixed_clock))
        # what lies outside is marked as impossible below; here it only has to be a number
        within = np.clip(steps, *self.surface.step_limits)
        averaging = np.einsum("bk,bknst->bnst", weights, self.surface.walk_basis(within, window, threshold)[0])
        coefficients = np.einsum("hnst,bnst->hb", self.surface.coefficients, averaging)
        return coefficients, bool(self._possible(steps)[0])

    def walks(self, ages: Array, step: Array, z_start: Array) -> tuple[Array, Array, Array]:
        """Describe the walks seen at given cosmic ages under given clocks.

        Parameters
        ----------
        ages : ndarray, shape (...)
            Cosmic ages in Myr.
        step, z_start : ndarray, shape (vectors,)
            Step length in Myr, and redshift at which walks start.

        Returns
        -------
        steps, window, threshold : ndarray, shapes that broadcast to (vectors, ...)
            Step number; tracer window in steps; theta.
        """
        shape = (-1, *(1,) * ages.ndim)
        length = np.maximum(step, SHORTEST_STEP).reshape(shape)
        walked = ages - self.clock.age(z_start).reshape(shape)
        window = np.full((1, *shape[1:]), self.definition.window)
        if self.definition.window_unit == "Myr":
            window = window / length
        threshold = np.ones((1, *shape[1:]))
        criterion = self.definition.criterion
        if criterion.kind == "ssfr":
            # (SFR / surviving mass) x cosmic age < T  <=>  SFR / mean SFR < T (1 - R) x age of the walk / cosmic age
            ratio = np.maximum(walked, SHORTEST_STEP) / ages
            threshold = criterion.limit * (1.0 - self.definition.returned_fraction) * ratio
        return walked / length, window, threshold

    def _possible(self, steps: Array) -> NDArray[np.bool_]:
        """Tell which vectors keep every bin between the first step and the end of the table."""
        lowest, highest = self.surface.step_limits
        inside = (steps >= lowest * (1 - 1e-12)) & (steps <= highest * (1 + 1e-12))
        return np.all(inside, axis=tuple(range(1, steps.ndim)))

    def step_range(self, step: Array, z_start: Array) -> tuple[Array, Array]:
        """Give the smallest and largest step number that each bin reaches at its edges, over given clocks.

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

    def threshold_range(self, z_start: Array) -> tuple[float, float]:
        """Give the smallest and largest theta over the bins, for given starts of the walks."""
        _, _, threshold = self.walks(self._nodes[0], np.ones(z_start.size), z_start)
        return float(threshold.min()), float(threshold.max())

    def __call__(self, H: Array, step: Array, z_start: Array) -> tuple[Array, NDArray[np.bool_]]:
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
        averaged, possible = self.averaged(H, step, z_start)
        return np.clip(averaged, 0.0, 1.0), possible

    def averaged(self, H: Array, step: Array, z_start: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Average the surface over every bin as it is, not kept within 0 and 1; parameters and shapes as in a call."""
        if self.fixed_clock is not None:
            coefficients, covered = self._fixed
            return self.surface.h_basis(H) @ coefficients, np.full(H.shape, covered)
        ages, weights = self._nodes
        steps, window, threshold = self.walks(ages, step, z_start)
        lowest, highest = self.surface.step_limits
        rows = self.surface.at_exponents(H)
        fraction = self.surface.along_walk(rows, np.clip(steps, lowest, highest), window, threshold)
        return np.einsum("wbk,bk->wb", fraction, weights), self._possible(steps)

    def at_redshifts(self, H: Array, step: Array, z_start: Array, z: Array) -> Array:
        """Predict the fraction at single redshifts, shape (vectors, z), walks kept within the table."""
        steps, window, threshold = self.walks(self.clock.age(z), step, z_start)
        lowest, highest = self.surface.step_limits
        fraction = self.surface(H[:, None], np.clip(steps, lowest, highest), window, threshold)
        return np.clip(fraction, 0.0, 1.0)
