"""Cubic splines on a table's axes.

Interpolation is linear in the tabulated values.  A definition (parent sample, window, threshold) therefore is a set of weights on
the nodes of those three axes, the same for every H and step number and for every replicate of the table, and what remains is a
smooth surface over H and the logarithm of the step number.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import make_interp_spline

__all__ = ["Surface", "cardinal_weights", "spline_basis"]


def cardinal_weights(nodes: NDArray[np.float64], x: ArrayLike) -> NDArray[np.float64]:
    """Weights of a not-a-knot cubic spline through `nodes`, so that ``weights @ values`` interpolates.

    Parameters
    ----------
    nodes : ndarray, shape (n,)
        Increasing nodes, n >= 4 (fewer: the polynomial through all of them).
    x : array_like
        Where to interpolate, any shape.

    Returns
    -------
    ndarray, shape x.shape + (n,)
    """
    degree = min(3, nodes.size - 1)
    if degree == 0:
        return np.ones((*np.shape(x), 1))
    odd = degree if degree % 2 else 1
    return make_interp_spline(nodes, np.eye(nodes.size), k=odd)(np.asarray(x, dtype=float))


def spline_basis(knots: NDArray[np.float64], x: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Evaluate the four cubic B-splines that are not zero at each point (Cox-de Boor recursion).

    Parameters
    ----------
    knots : ndarray, shape (n + 4,)
        Knots with fourfold ends.
    x : ndarray
        Points within the knots, any shape.

    Returns
    -------
    first : ndarray of int, x.shape
        Index of the first of the four coefficients.
    values : ndarray, x.shape + (4,)
        Values of the four basis functions.
    """
    n = knots.size - 4
    cell = np.clip(np.searchsorted(knots, x, side="right") - 1, 3, n - 1)
    right = [knots[cell + j] - x for j in (1, 2, 3)]
    left = [x - knots[cell + 1 - j] for j in (1, 2, 3)]
    values = [np.ones_like(x)]
    for degree in range(3):
        saved = np.zeros_like(x)
        raised = []
        for r in range(degree + 1):
            share = values[r] / (right[r] + left[degree - r])
            raised.append(saved + right[r] * share)
            saved = left[degree - r] * share
        values = [*raised, saved]
    return cell - 3, np.stack(values, axis=-1)


@dataclass(frozen=True)
class Surface:
    """A quantity over H and step number, smooth in H and ln(steps).

    Attributes
    ----------
    h, steps : ndarray
        Nodes.
    values : ndarray, shape (n_h, n_steps) or (replicates, n_h, n_steps)
        Values at the nodes.
    """

    h: NDArray[np.float64]
    steps: NDArray[np.float64]
    values: NDArray[np.float64]

    @cached_property
    def _spline(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        along_h = make_interp_spline(self.h, self.values, k=3, axis=-2)
        along_n = make_interp_spline(np.log(self.steps), np.moveaxis(along_h.c, 0, -2), k=3, axis=-1)
        return along_h.t, along_n.t, np.moveaxis(along_n.c, 0, -1)

    def covers(self, H: ArrayLike, steps: ArrayLike) -> NDArray[np.bool_]:
        """Tell where the surface is defined, after broadcasting `H` and `steps`."""
        H, steps = np.asarray(H, dtype=float), np.asarray(steps, dtype=float)
        return (self.h[0] <= H) & (self.h[-1] >= H) & (steps >= self.steps[0]) & (steps <= self.steps[-1])

    def h_basis(self, H: NDArray[np.float64]) -> NDArray[np.float64]:
        """All basis functions in H, shape H.shape + (n_h,), H clipped to the nodes."""
        return _dense(self._spline[0], np.clip(H, self.h[0], self.h[-1]))

    def step_basis(self, steps: NDArray[np.float64]) -> NDArray[np.float64]:
        """All basis functions in ln(steps), shape steps.shape + (n_steps,), steps clipped to the nodes."""
        return _dense(self._spline[1], np.log(np.clip(steps, self.steps[0], self.steps[-1])))

    @property
    def step_knots(self) -> NDArray[np.float64]:
        """Knots of the spline in ln(steps)."""
        return self._spline[1]

    @property
    def coefficients(self) -> NDArray[np.float64]:
        """B-spline coefficients, the shape of `values`."""
        return self._spline[2]

    def __call__(self, H: ArrayLike, steps: ArrayLike) -> NDArray[np.float64]:
        """Interpolate; points outside are moved to the edge (ask :meth:`covers` first).

        Parameters
        ----------
        H, steps : array_like
            Correlation exponents and step numbers, broadcast against each other.

        Returns
        -------
        ndarray
            The broadcast shape, after a leading replicate axis if `values` has one.
        """
        H, steps = np.asarray(H, dtype=float), np.asarray(steps, dtype=float)
        knots_h, knots_n, coefficients = self._spline
        i, in_h = spline_basis(knots_h, np.clip(H, self.h[0], self.h[-1]))
        j, in_n = spline_basis(knots_n, np.log(np.clip(steps, self.steps[0], self.steps[-1])))
        total = np.zeros((*self.values.shape[:-2], *np.broadcast_shapes(H.shape, steps.shape)))
        for a in range(4):
            for b in range(4):
                total += coefficients[..., i + a, j + b] * (in_h[..., a] * in_n[..., b])
        return total


def _dense(knots: NDArray[np.float64], x: NDArray[np.float64]) -> NDArray[np.float64]:
    first, values = spline_basis(knots, x)
    full = np.zeros((*x.shape, knots.size - 4))
    np.put_along_axis(full, first[..., None] + np.arange(4), values, axis=-1)
    return full
