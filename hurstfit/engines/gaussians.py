"""Gaussians that osculate a log-density at its maximum, for many vectors at once, and the search for the maximum.

They are what nodes of a quadrature are laid about, and what draws are proposed from.  Derivatives are numerical, on one stencil
of central differences; no result depends on how exact the maxima are, only the number of nodes that it takes.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from itertools import product

import numpy as np
from numpy.typing import NDArray

__all__ = ["Gaussian", "derivatives", "gauss_hermite", "inverse_root", "maximise", "stencil", "uphill"]

Array = NDArray[np.float64]

#: Step of numerical derivatives, in standard deviations of the prior.
DIFFERENCE = 1e-3
#: No step of the search for a mode goes further than this in any coordinate.
FURTHEST_STEP = 2.0
#: Shares of a step that are tried where the whole step does not go uphill.
SHORTER = np.array([0.5, 0.25, 0.1, 0.02, 0.004])
#: Least curvature: no density is taken to be wider than a few times its prior.
LEAST_CURVATURE = 0.05
#: The search ends where a whole step would be shorter than this, in standard deviations of the Gaussian.
CLOSE_ENOUGH = 0.01


@lru_cache(maxsize=64)
def gauss_hermite(order: int, dimension: int) -> tuple[Array, Array]:
    """Nodes and log-weights for integrals over a standard normal, as a tensor product.

    Returns
    -------
    nodes : ndarray, shape (order ** dimension, dimension)
    log_weights : ndarray, shape (order ** dimension,)
        Such that the sum of ``exp(log_weights) g(nodes)`` is the mean of g.
    """
    x, w = np.polynomial.hermite_e.hermegauss(order)
    nodes = np.array(list(product(x, repeat=dimension))).reshape(order**dimension, dimension)
    weights = np.array([np.sum(v) for v in product(np.log(w / np.sqrt(2 * np.pi)), repeat=dimension)])
    return nodes, weights


@dataclass(frozen=True)
class Gaussian:
    """The Gaussian that osculates a density at its mode, for each of many vectors.

    Attributes
    ----------
    mode : ndarray, shape (vectors, d)
        Mode.
    spread : ndarray, shape (vectors, d, d)
        Lower triangular L with covariance ``L L^T``.
    """

    mode: Array
    spread: Array

    def at(self, z: Array) -> Array:
        """Move standard normal nodes, (nodes, d) or (vectors, nodes, d), to each vector's Gaussian: (vectors, nodes, d)."""
        return self.mode[:, None, :] + z @ self.spread.transpose(0, 2, 1)

    @property
    def log_scale(self) -> Array:
        """Log of the volume of the spread, shape (vectors,)."""
        return np.log(np.einsum("vii->vi", self.spread)).sum(axis=1)

    def log_density(self, x: Array) -> Array:
        """Log-density at one point a vector, (vectors, d)."""
        z = np.linalg.solve(self.spread, (x - self.mode)[..., None])[..., 0]
        return -0.5 * (z**2).sum(axis=-1) - 0.5 * x.shape[-1] * np.log(2 * np.pi) - self.log_scale

    def take(self, index: NDArray[np.intp]) -> Gaussian:
        """Gaussians of chosen vectors."""
        return Gaussian(self.mode[index], self.spread[index])


@lru_cache(maxsize=32)
def stencil(d: int, difference: float = DIFFERENCE) -> Array:
    """Points of central differences: the centre, plus and minus each axis, then plus-plus and minus-minus each pair."""
    unit = difference * np.eye(d)
    pairs = _pairs(d)
    points = [np.zeros(d), *unit, *-unit, *(unit[i] + unit[j] for i, j in pairs), *(-unit[i] - unit[j] for i, j in pairs)]
    return np.array(points).reshape(len(points), d)


def _pairs(d: int) -> list[tuple[int, int]]:
    return [(i, j) for i in range(d) for j in range(i)]


def derivatives(values: Array, d: int, difference: float = DIFFERENCE) -> tuple[Array, Array]:
    """Gradient (vectors, d) and minus the matrix of second derivatives (vectors, d, d) from values on the stencil.

    Values that are not finite count as flat.
    """
    if not np.isfinite(values).all():
        values = np.where(np.isfinite(values), values, values.min(initial=0.0, where=np.isfinite(values)))
    pairs = _pairs(d)
    centre, up, down = values[:, 0], values[:, 1 : 1 + d], values[:, 1 + d : 1 + 2 * d]
    gradient = (up - down) / (2 * difference)
    curvature = np.empty((values.shape[0], d, d))
    second = (up + down - 2 * centre[:, None]) / difference**2
    for i in range(d):
        curvature[:, i, i] = -second[:, i]
    for q, (i, j) in enumerate(pairs):
        both = values[:, 1 + 2 * d + q] + values[:, 1 + 2 * d + len(pairs) + q] - 2 * centre
        curvature[:, i, j] = curvature[:, j, i] = -(both / difference**2 - second[:, i] - second[:, j]) / 2
    return gradient, curvature


def inverse_root(curvature: Array) -> Array:
    """Find lower triangular L with ``L L^T`` the inverse of a curvature (..., d, d), small and negative eigenvalues lifted."""
    d = curvature.shape[-1]
    if d <= 1:
        return 1 / np.sqrt(np.maximum(curvature, LEAST_CURVATURE))
    eigenvalues, axes = np.linalg.eigh(curvature)
    # a Cholesky factor that rounding cannot break: QR of the other root
    root = axes / np.sqrt(np.maximum(eigenvalues, LEAST_CURVATURE))[..., None, :]
    triangle = np.swapaxes(np.linalg.qr(np.swapaxes(root, -1, -2), mode="r"), -1, -2)
    return triangle * np.where(np.einsum("...ii->...i", triangle) < 0, -1.0, 1.0)[..., None, :]


def maximise(function: Callable[[NDArray[np.intp], Array], Array], start: Array, iterations: int = 60) -> Gaussian:
    """Find the maximum of a smooth log-density by a damped Newton method, for many vectors at once.

    Parameters
    ----------
    function : callable
        From chosen vectors and points (chosen, points, d) to log-densities (chosen, points).
    start : ndarray, shape (vectors, d)
        Where to start.
    iterations : int
        At most so many steps.

    Returns
    -------
    Gaussian
        Mode, and the inverse square root of the curvature where the last step began.
    """
    mode = start.copy()
    d = start.shape[1]
    spread = np.zeros((*start.shape, d))
    active = np.arange(start.shape[0])
    for _ in range(iterations if d else 0):
        if not active.size:
            break
        x = mode[active]
        values = function(active, x[:, None, :] + stencil(d))
        gradient, curvature = derivatives(values, d)
        root = spread[active] = inverse_root(curvature)
        scaled = np.einsum("vij,vi->vj", root, gradient)
        step = np.einsum("vij,vj->vi", root, scaled)
        near = (scaled**2).sum(axis=1) < CLOSE_ENOUGH**2
        share = np.ones((active.size, 1))
        if not near.all():
            step *= np.minimum(1.0, FURTHEST_STEP / np.maximum(np.abs(step).max(axis=1, keepdims=True), 1e-300))

            def along(part: Array, active: NDArray[np.intp] = active, x: Array = x, step: Array = step) -> Array:
                return function(active, (x + part * step)[:, None, :])[:, 0]

            share = uphill(along, values[:, 0], near)
        mode[active] = x + share * step
        active = active[~near & (share[:, 0] > 0)]
    return Gaussian(mode, spread)


def uphill(along: Callable[[Array], Array], here: Array, near: NDArray[np.bool_]) -> Array:
    """Choose the share of each step that goes uphill most: the whole one if it does, else shorter ones, else none.

    Parameters
    ----------
    along : callable
        From shares (vectors, 1) of the step to log-densities (vectors,).
    here : ndarray, shape (vectors,)
        Log-density where the steps begin.
    near : ndarray of bool, shape (vectors,)
        Where the gain would drown in rounding, so that the whole step is taken unseen.

    Returns
    -------
    ndarray, shape (vectors, 1)
    """
    best = np.ones((here.size, 1))
    gained = (along(best) > here) | near
    if not gained.all():
        tried = np.stack([along(np.full((here.size, 1), share)) for share in SHORTER], axis=1)
        tried = np.where(np.isfinite(tried), tried, -np.inf)
        shorter = np.where(tried.max(axis=1) > here, SHORTER[tried.argmax(axis=1)], 0.0)
        best = np.where(gained, 1.0, shorter)[:, None]
    return best
