"""How the errors of a table hang together.

All nodes of a table share walks, so that its errors are correlated over H, steps and definitions, and an independent error
for each bin would be wrong.  A table therefore keeps replicates: means over groups of its independent batches.  With R of
them, d_r the deviation of replicate r from the table divided by sqrt(R (R - 1)), the sum over r of d_r d_r^T estimates the
covariance of the table.

Replicates are kept in units of the standard error, to a quarter of it, and on every second or third node of the definition axes;
between these they are interpolated.  That is enough for an error of an error.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hurstfit.fractions.axes import TableAxes

__all__ = ["REPLICATES", "Replicates"]

#: Replicates of a table.
REPLICATES = 16
#: Steps of a stored deviation in one standard error.
RESOLUTION = 4


def _nodes_kept(axes: TableAxes) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Give the nodes of parent sample, window scale and criterion on which replicates are kept."""
    parents, scales, criteria = axes.shape[2:]
    return (
        np.unique([0, *range(1, parents, 2), parents - 1]),
        np.unique([*range(0, scales, 2), scales - 1]),
        np.unique([0, *range(1, criteria, 3), criteria - 1]),
    )


def _spread(kept: NDArray[np.int64], size: int) -> NDArray[np.float64]:
    """Linear interpolation from the kept nodes to all, shape (size, kept)."""
    return np.stack([np.interp(np.arange(size), kept, unit) for unit in np.eye(kept.size)], axis=1)


@dataclass(frozen=True)
class Replicates:
    """Deviations of a table's replicates.

    Attributes
    ----------
    axes : TableAxes
        Grid of the table.
    units : ndarray of int8, shape (replicates, n_h, n_steps, kept parents, kept scales, kept criteria)
        d_r sqrt(R - 1) over the standard error, in quarters.
    """

    axes: TableAxes
    units: NDArray[np.int8]

    @classmethod
    def of(cls, axes: TableAxes, groups: Sequence[NDArray[np.float64]], errors: NDArray[np.float64]) -> Replicates:
        """Take replicates from the means of groups of batches, each of shape axes.shape."""
        kept = np.ix_(*(np.arange(n) for n in axes.shape[:2]), *_nodes_kept(axes))
        stack = np.stack([group[kept] for group in groups])
        deviations = (stack - stack.mean(axis=0)) / np.sqrt(len(groups))
        return cls._packed(axes, deviations, errors[kept])

    @classmethod
    def independent(cls, axes: TableAxes) -> Replicates | None:
        """One replicate for each node of H and steps, where errors are independent of each other; None for too many nodes."""
        nodes = axes.shape[0] * axes.shape[1]
        unit = round(RESOLUTION * np.sqrt(nodes - 1))
        if unit > np.iinfo(np.int8).max:
            return None
        kept = tuple(k.size for k in _nodes_kept(axes))
        units = np.zeros((nodes, nodes, *kept), dtype=np.int8)
        units[np.arange(nodes), np.arange(nodes)] = unit
        return cls(axes, units.reshape(nodes, *axes.shape[:2], *kept))

    @classmethod
    def _packed(cls, axes: TableAxes, deviations: NDArray[np.float64], errors: NDArray[np.float64]) -> Replicates:
        units = RESOLUTION * deviations / np.where(errors > 0, errors, np.inf)
        return cls(axes, np.clip(np.round(units), -127, 127).astype(np.int8))

    def merged(self, other: Replicates, shares: tuple[float, float], errors: Sequence[NDArray[np.float64]]) -> Replicates:
        """Replicates of a weighted mean of two independent tables.

        Parameters
        ----------
        other : Replicates
            Those of the other table.
        shares : tuple of float
            Weights of the two tables in the mean.
        errors : sequence of three ndarray
            Standard errors of the two tables and of the mean.
        """
        kept = np.ix_(*(np.arange(n) for n in self.axes.shape[:2]), *_nodes_kept(self.axes))
        # a table of fewer replicates gets empty ones: its covariance is the same
        count = max(self.units.shape[0], other.units.shape[0])
        total = np.zeros((count, *self.units.shape[1:]))
        for table, share, error in zip((self, other), shares, errors[:2], strict=True):
            scale = share / RESOLUTION * np.sqrt((count - 1) / (table.units.shape[0] - 1))
            total[: table.units.shape[0]] += scale * table.units * error[kept]
        return self._packed(self.axes, total, errors[2][kept])

    def deviations(
        self,
        errors: NDArray[np.float64],
        parent: NDArray[np.float64],
        scales: int,
        criterion: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """Deviations d_r of one definition.

        Parameters
        ----------
        errors : ndarray, shape axes.shape
            Standard errors of the table.
        parent : ndarray, shape (n_parents,)
            Weights of the parent sample.
        scales : int
            How many window scales are needed, from the first.
        criterion : ndarray, shape (m, n_criteria)
            Weights of the criterion.

        Returns
        -------
        ndarray, shape (replicates, n_h, n_steps, scales, m)
        """
        spreads = [_spread(kept, size) for kept, size in zip(_nodes_kept(self.axes), self.axes.shape[2:], strict=True)]
        p, c = np.flatnonzero(parent), np.flatnonzero(criterion.any(axis=0))
        units = np.einsum(
            "rhnabd,pa,sb,cd->rhnpsc",
            self.units.astype(np.float32),
            spreads[0][p],
            spreads[1][:scales],
            spreads[2][c],
            optimize=True,
        )
        weighted = units * errors[:, :, p, :scales][..., c] / (RESOLUTION * np.sqrt(self.units.shape[0] - 1))
        return np.einsum("rhnpsc,p,mc->rhnsm", weighted, parent[p], criterion[:, c], optimize=True)
