"""Cubic splines on a table's axes.

Interpolation is linear in the tabulated values.  A definition (parent sample, window, threshold) therefore is a set of weights on
the nodes of those three axes, the same for every H and step number and for every replicate of the table, and what remains is a
smooth surface over H and the logarithm of the step number.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import make_interp_spline

from hurstfit.fractions.axes import window_scale

__all__ = ["Axis", "Surface", "cardinal_weights", "spline_basis"]


def cardinal_weights(nodes: NDArray[np.float64], x: ArrayLike) -> NDArray[np.float64]:
    """Weights of a not-a-knot cubic spline through `nodes`, so that ``weights @ values`` interpolates.

    Parameters
    ----------
    nodes : ndarray, shape (n,)
        Increasing nodes; with fewer than four, linear interpolation.
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
class Axis:
    """One axis of a spline: its nodes, in the coordinate in which the spline is cubic.

    Attributes
    ----------
    nodes : ndarray, shape (n,)
        Increasing; a single node makes an axis along which nothing varies.
    """

    nodes: NDArray[np.float64]

    @cached_property
    def knots(self) -> NDArray[np.float64]:
        """Knots of the not-a-knot cubic spline through the nodes (of lower degree where there are fewer than four)."""
        if self.nodes.size < 4:
            raise ValueError(f"a cubic spline needs four nodes, not {self.nodes.size}")
        inner = self.nodes[2:-2]
        return np.concatenate([np.repeat(self.nodes[0], 4), inner, np.repeat(self.nodes[-1], 4)])

    def basis(self, x: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Find the basis functions that are not zero at points kept within the nodes: index of the first, and values."""
        if self.nodes.size == 1:
            return np.zeros(x.shape, dtype=np.int64), np.ones((*x.shape, 1))
        return spline_basis(self.knots, np.clip(x, self.nodes[0], self.nodes[-1]))

    def dense_basis(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        """All basis functions, shape x.shape + (n,)."""
        first, values = self.basis(x)
        full = np.zeros((*x.shape, self.nodes.size))
        np.put_along_axis(full, first[..., None] + np.arange(values.shape[-1]), values, axis=-1)
        return full

    def coefficients(self, values: NDArray[np.float64], axis: int) -> NDArray[np.float64]:
        """Coefficients of the spline through `values` along one axis."""
        if self.nodes.size == 1:
            return values
        return np.moveaxis(make_interp_spline(self.nodes, values, k=3, axis=axis).c, 0, axis)


@dataclass(frozen=True)
class Surface:
    """The fraction of one definition, smooth over H, ln(steps), the scale of the tracer window, and the threshold.

    Attributes
    ----------
    h, steps, scale, threshold : Axis
        Nodes in the noise type's own coordinate of H, in ln(steps), in window scale (a single node where the window is one step),
        and in ln(theta) (a single node where the threshold is the same everywhere).
    coefficients : ndarray, shape (..., n_h, n_steps, n_scales, n_thresholds)
        B-spline coefficients; leading axes hold replicates of the table.
    h_coordinate : callable
        Coordinate of H.
    """

    h: Axis
    steps: Axis
    scale: Axis
    threshold: Axis
    coefficients: NDArray[np.float64]
    h_coordinate: Callable[[ArrayLike], NDArray[np.float64]]

    @classmethod
    def through(
        cls,
        h: NDArray[np.float64],
        steps: NDArray[Any],
        scales: NDArray[np.float64],
        thresholds: NDArray[np.float64],
        values: NDArray[np.float64],
        h_coordinate: Callable[[ArrayLike], NDArray[np.float64]],
    ) -> Surface:
        """Lay a surface through values at nodes, shape (..., n_h, n_steps, n_scales, n_thresholds)."""
        axes = Axis(h_coordinate(h)), Axis(np.log(steps)), Axis(scales), Axis(np.log(thresholds))
        for k, axis in enumerate(axes):
            values = axis.coefficients(values, k - 4)
        return cls(*axes, np.ascontiguousarray(values), h_coordinate)

    @property
    def step_limits(self) -> tuple[float, float]:
        """Smallest and largest step number of the table."""
        return float(np.exp(self.steps.nodes[0])), float(np.exp(self.steps.nodes[-1]))

    def h_basis(self, H: ArrayLike) -> NDArray[np.float64]:
        """All basis functions in H, shape H.shape + (n_h,)."""
        return self.h.dense_basis(self.h_coordinate(H))

    def at_exponents(self, H: NDArray[np.float64]) -> NDArray[np.float64]:
        """Contract the coefficients in H, shape (vectors, n_steps, n_scales, n_thresholds)."""
        # four rows a vector, not a product with all of them, which would also wake the threads of a linear-algebra library
        first, values = self.h.basis(self.h_coordinate(H))
        return np.asarray(sum(self.coefficients[first + a] * values[:, a, None, None, None] for a in range(values.shape[-1])))

    def walk_basis(self, steps: ArrayLike, window: ArrayLike, threshold: ArrayLike) -> NDArray[np.float64]:
        """All basis functions in the rest, shape steps.shape + (n_steps, n_scales, n_thresholds)."""
        steps, window, threshold = _broadcast(steps, window, threshold)
        in_steps = self.steps.dense_basis(np.log(steps))
        in_scale = self.scale.dense_basis(window_scale(window, steps))
        in_threshold = self.threshold.dense_basis(np.log(threshold))
        return np.einsum("...a,...b,...c->...abc", in_steps, in_scale, in_threshold)

    def along_walk(
        self, rows: NDArray[np.float64], steps: ArrayLike, window: ArrayLike, threshold: ArrayLike
    ) -> NDArray[np.float64]:
        """Evaluate many walks whose H is already contracted.

        Parameters
        ----------
        rows : ndarray, shape (vectors, n_steps, n_scales, n_thresholds)
            from :meth:`at_exponents`.
        steps, window, threshold : array_like, shape (vectors, ...)
            Step numbers, tracer windows in steps, and theta, broadcast against each other.

        Returns
        -------
        ndarray, the broadcast shape
        """
        steps, window, threshold = _broadcast(steps, window, threshold)
        shape = steps.shape
        steps, window, threshold = (x.reshape(shape[0], -1) for x in (steps, window, threshold))
        vector = np.arange(shape[0])[:, None]
        total = np.zeros(steps.shape)
        for (i, j, k), weight in self._corners(steps, window, threshold):
            total += rows[vector, i, j, k] * weight
        return total.reshape(shape)

    def __call__(
        self, H: ArrayLike, steps: ArrayLike, window: ArrayLike = 1.0, threshold: ArrayLike = 1.0
    ) -> NDArray[np.float64]:
        """Interpolate; points outside the table are moved to its edge.

        Parameters
        ----------
        H, steps, window, threshold : array_like
            Correlation exponents, step numbers, tracer windows in steps and theta, broadcast against each other; a window or
            threshold matters only where the surface has an axis for it.

        Returns
        -------
        ndarray
            The broadcast shape, after the leading axes of `coefficients`.
        """
        H, steps, window, threshold = _broadcast(H, steps, window, threshold)
        first, in_h = self.h.basis(self.h_coordinate(H))
        total = np.zeros((*self.coefficients.shape[:-4], *H.shape))
        for (i, j, k), weight in self._corners(steps, window, threshold):
            for a in range(in_h.shape[-1]):
                total += self.coefficients[..., first + a, i, j, k] * (weight * in_h[..., a])
        return total

    def _corners(
        self, steps: NDArray[np.float64], window: NDArray[np.float64], threshold: NDArray[np.float64]
    ) -> Iterator[tuple[tuple[NDArray[np.int64], ...], NDArray[np.float64]]]:
        """Go through the coefficients around each point: their indices, and the product of basis functions there."""
        found = (
            self.steps.basis(np.log(steps)),
            self.scale.basis(window_scale(window, steps)),
            self.threshold.basis(np.log(threshold)),
        )
        for corner in product(*(range(values.shape[-1]) for _, values in found)):
            index = tuple(first + c for (first, _), c in zip(found, corner, strict=True))
            weight = found[0][1][..., corner[0]]
            for (_, values), c in zip(found[1:], corner[1:], strict=True):
                if values.shape[-1] > 1:
                    weight = weight * values[..., c]
            yield index, weight


def _broadcast(*arrays: ArrayLike) -> tuple[NDArray[np.float64], ...]:
    return tuple(np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in arrays)))
