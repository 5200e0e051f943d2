"""The likelihood of one study with its selection terms integrated out.

Given the true fractions, the bins of different studies know nothing of each other's selection, so that the integral over all
selection terms is a product of small ones, one a study.  Each is done by adaptive Gauss-Hermite quadrature (Naylor & Smith
1982, Appl. Stat. 31, 214; Liu & Pierce 1994, Biometrika 81, 624): nodes are laid about the mode of likelihood times prior,
in units of its curvature there. Everything is vectorised over vectors of true fractions.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from itertools import product

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp, xlog1py, xlogy

from hurstfit.posterior import Posterior
from hurstfit.quantiles import Quantiles
from hurstfit.selection import TERMS, counted_fraction

__all__ = ["Gaussian", "StudyFactor", "gauss_hermite", "maximise", "study_factors"]

Array = NDArray[np.float64]

#: Vectors whose nodes are evaluated at one time.
CHUNK = 256
#: Step of numerical derivatives, in standard deviations of the prior.
DIFFERENCE = 1e-3
#: No step of the search for a mode goes further than this in any coordinate.
FURTHEST_STEP = 2.0
#: Shares of a step that are tried where the whole step does not go uphill.
SHORTER = np.array([0.5, 0.25, 0.1, 0.02])


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
    nodes = np.array(list(product(x, repeat=dimension))).reshape(-1, dimension)
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
        Matrix L with covariance ``L L^T``.
    """

    mode: Array
    spread: Array

    def at(self, z: Array) -> Array:
        """Move standard normal nodes, (nodes, d) or (vectors, nodes, d), to each vector's Gaussian: (vectors, nodes, d)."""
        return self.mode[:, None, :] + np.einsum("vij,...nj->vni" if z.ndim == 2 else "vij,vnj->vni", self.spread, z)

    @property
    def log_scale(self) -> Array:
        """Log of the volume of the spread, shape (vectors,)."""
        return np.log(np.abs(np.linalg.det(self.spread)))

    def log_density(self, x: Array) -> Array:
        """Log-density at one point a vector, (vectors, d)."""
        z = np.linalg.solve(self.spread, (x - self.mode)[..., None])[..., 0]
        return -0.5 * (z**2).sum(axis=-1) - 0.5 * x.shape[-1] * np.log(2 * np.pi) - self.log_scale

    def take(self, index: NDArray[np.intp]) -> Gaussian:
        """Gaussians of chosen vectors."""
        return Gaussian(self.mode[index], self.spread[index])


def maximise(function: Callable[[Array], Array], start: Array, iterations: int = 40, difference: float = DIFFERENCE) -> Gaussian:
    """Find the maximum of a smooth log-density by a damped Newton method with numerical derivatives, for many vectors at once.

    Parameters
    ----------
    function : callable
        From points (vectors, points, d) to log-densities (vectors, points).
    start : ndarray, shape (vectors, d)
        Where to start.
    iterations : int
        At most so many steps.
    difference : float
        Step of the numerical derivatives; larger for a function that is itself the result of an iteration.

    Returns
    -------
    Gaussian
        Mode, and the inverse square root of the curvature there.
    """
    x = start.copy()
    vectors, d = x.shape
    if d == 0:
        return Gaussian(x, np.zeros((vectors, 0, 0)))
    offsets, pairs = _stencil(d, difference)
    for _ in range(iterations):
        values = function(x[:, None, :] + offsets)
        gradient, curvature = _derivatives(values, d, pairs, difference)
        eigenvalues, vectors_ = np.linalg.eigh(curvature)
        # a density no wider than a few times its prior: curvature is kept positive, so that every step goes uphill
        eigenvalues = np.maximum(eigenvalues, 0.05)
        step = np.einsum("vij,vj,vkj,vk->vi", vectors_, 1 / eigenvalues, vectors_, gradient)
        step *= np.minimum(1.0, FURTHEST_STEP / np.maximum(np.abs(step).max(axis=1, keepdims=True), 1e-300))
        tried = function((x + step)[:, None, :])
        if not np.all(tried[:, 0] > values[:, 0]):
            tried = np.concatenate([tried, function(x[:, None, :] + SHORTER[:, None] * step[:, None, :])], axis=1)
        best = np.argmax(np.where(np.isfinite(tried), tried, -np.inf), axis=1)
        better = tried[np.arange(vectors), best] > values[:, 0]
        size = np.abs(step).max(axis=1)
        # close to the mode the gain drowns in rounding, and Newton's own step is the better judge
        x = x + np.where(size < 1e-3, 1.0, np.where(better, np.append(1.0, SHORTER)[best], 0.0))[:, None] * step
        if np.all((size < 1e-6) | ((size >= 1e-3) & ~better)):
            break
    _, curvature = _derivatives(function(x[:, None, :] + offsets), d, pairs, difference)
    eigenvalues, vectors_ = np.linalg.eigh(curvature)
    spread = vectors_ / np.sqrt(np.maximum(eigenvalues, 0.05))[:, None, :]
    return Gaussian(x, spread)


@lru_cache(maxsize=16)
def _stencil(d: int, difference: float) -> tuple[Array, tuple[tuple[int, int], ...]]:
    """Points of central differences: the centre, plus and minus each axis, then plus-plus and minus-minus each pair."""
    unit = difference * np.eye(d)
    pairs = tuple((i, j) for i in range(d) for j in range(i))
    points = [np.zeros(d), *unit, *-unit, *(unit[i] + unit[j] for i, j in pairs), *(-unit[i] - unit[j] for i, j in pairs)]
    return np.array(points), pairs


def _derivatives(values: Array, d: int, pairs: tuple[tuple[int, int], ...], difference: float) -> tuple[Array, Array]:
    """Gradient, and minus the matrix of second derivatives, from values on the stencil; not finite counts as flat."""
    values = np.where(np.isfinite(values), values, values.min(initial=0.0, where=np.isfinite(values)))
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


@dataclass(frozen=True)
class StudyFactor:
    """One study: its counts, and its selection terms of which some are free.

    Attributes
    ----------
    bins : ndarray of int, shape (b,)
        Its bins among those of the posterior.
    n_total, n_quiescent : ndarray, shape (b,)
        Its counts.
    places : ndarray of int, shape (d,)
        Its free selection terms among the free parameters of the posterior.
    quantiles : Quantiles
        Priors of these.
    terms : tuple
        For each of completeness ratio, missed fraction and contamination: its place among the d free ones, or its fixed value.
    """

    bins: NDArray[np.intp]
    n_total: Array
    n_quiescent: Array
    places: NDArray[np.intp]
    quantiles: Quantiles
    terms: tuple[int | float, ...]

    @property
    def dimension(self) -> int:
        """Number of free selection terms."""
        return self.places.size

    def log_kernel(self, fraction: Array, t: Array) -> Array:
        """Log of likelihood times prior, without their constants.

        Parameters
        ----------
        fraction : ndarray, shape (vectors, b)
            True fractions.
        t : ndarray, shape (vectors, points, d)
            Selection terms in sampling coordinates.

        Returns
        -------
        ndarray, shape (vectors, points)
        """
        free = self.quantiles(t)
        r, u, v = (free[..., x, None] if isinstance(x, int) else x for x in self.terms)
        p = counted_fraction(fraction[:, None, :], r, u, v)
        k, n = self.n_quiescent, self.n_total
        return (xlogy(k, p) + xlog1py(n - k, -p)).sum(axis=-1) - 0.5 * (t**2).sum(axis=-1)

    def gaussian(self, fraction: Array, start: Array | None = None) -> Gaussian:
        """Osculating Gaussian of the selection terms for each vector of true fractions, (vectors, b)."""
        begin = np.zeros((fraction.shape[0], self.dimension)) if start is None else start
        return maximise(lambda t: self.log_kernel(fraction, t), begin)

    def log_integral(self, fraction: Array, gaussian: Gaussian, order: int) -> Array:
        """Log of the integral over the selection terms of likelihood (binomial coefficient left out) times prior.

        Parameters
        ----------
        fraction : ndarray, shape (vectors, b)
            True fractions.
        gaussian : Gaussian
            From :meth:`gaussian`, for the same vectors.
        order : int
            Nodes along each term; 1 is Laplace's approximation.

        Returns
        -------
        ndarray, shape (vectors,)
        """
        z, log_weights = gauss_hermite(order, self.dimension)
        log_weights = log_weights + 0.5 * (z**2).sum(axis=1)
        result = np.empty(fraction.shape[0])
        for i in range(0, fraction.shape[0], CHUNK):
            part = gaussian.take(np.arange(i, min(i + CHUNK, fraction.shape[0])))
            values = self.log_kernel(fraction[i : i + CHUNK], part.at(z))
            result[i : i + CHUNK] = logsumexp(values + log_weights, axis=1) + part.log_scale
        return result


def study_factors(posterior: Posterior) -> list[StudyFactor]:
    """Split a posterior into its studies."""
    place = {name: i for i, name in enumerate(posterior.names)}
    factors = []
    for study in posterior.bins.studies:
        mine = np.flatnonzero(posterior.bins.study == study)
        priors = {term: posterior.selection[study].prior(term) for term in TERMS}
        free = [term for term in TERMS if not priors[term].is_fixed]
        factors.append(
            StudyFactor(
                bins=mine,
                n_total=posterior.bins.n_total[mine],
                n_quiescent=posterior.bins.n_quiescent[mine],
                places=np.array([place[f"{term}[{study}]"] for term in free], dtype=np.intp),
                quantiles=Quantiles(tuple(priors[term] for term in free)),
                terms=tuple(free.index(term) if term in free else float(priors[term].mean) for term in TERMS),
            )
        )
    return factors
