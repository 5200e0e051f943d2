"""Effective counts: the pair of numbers whose Beta distribution has a quoted interval.

A count of x in m tells of a proportion what Beta(x + 1, m - x + 1) says: the posterior under a flat prior, whose quantiles
are good intervals also where the normal approximation is not (Cameron 2011, PASA 28, 128).  Read backwards, a published
interval gives the pair (x, m) that carries the same information, its skewness included.  The pair need not be whole numbers;
only 0 <= x <= m is asked, so that the likelihood p^x (1 - p)^(m - x) has its maximum within 0..1.

Two quantiles determine a Beta distribution (Shih 2015, Stat. Probab. Lett. 105, 83).  Where that one has x < 0 or x > m, the
closest pair has x = 0 or x = m, and what it misses is reported.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betaincinv, ndtri

__all__ = ["BetaPairs", "beta_interval", "beta_pairs", "limit_pairs"]

Array = NDArray[np.float64]

#: Steps of Newton's method, its largest step in the logarithm of a Beta parameter, and the step of numerical derivatives.
ITERATIONS, LARGEST_STEP, DIFFERENCE = 60, 1.0, 1e-6
#: Residual, in half-widths of the interval, from which a pair counts as exact.
EXACT = 1e-9
#: Iterations of the golden section along an edge, and the largest number of effective galaxies.
SECTIONS, MOST = 80, 2.0**53


@dataclass(frozen=True)
class BetaPairs:
    """Effective counts of intervals.

    Attributes
    ----------
    x, m : ndarray
        Effective number of quiescent galaxies and of all, 0 <= x <= m.
    lo, hi : ndarray
        Interval of Beta(x + 1, m - x + 1) at the level that was asked for.
    misfit : ndarray
        Larger distance of the two ends from those asked for, in half-widths of the interval asked for.
    """

    x: Array
    m: Array
    lo: Array
    hi: Array
    misfit: Array


def beta_interval(x: ArrayLike, m: ArrayLike, level: ArrayLike) -> tuple[Array, Array]:
    """Central interval of Beta(x + 1, m - x + 1).

    Parameters
    ----------
    x, m : array_like
        Effective counts.
    level : array_like
        Probability inside the interval, such as 0.68.

    Returns
    -------
    lo, hi : ndarray
        The broadcast shape.
    """
    x, m, level = np.broadcast_arrays(np.asarray(x, float), np.asarray(m, float), np.asarray(level, float))
    return betaincinv(x + 1, m - x + 1, (1 - level) / 2), betaincinv(x + 1, m - x + 1, (1 + level) / 2)


def beta_pairs(lo: ArrayLike, hi: ArrayLike, level: ArrayLike) -> BetaPairs:
    """Find the pairs whose Beta distributions have given central intervals.

    Parameters
    ----------
    lo, hi : array_like, shape (n,)
        Ends of the intervals, lo < hi.  Ends outside 0..1 (symmetric errors reach there) can only be missed.
    level : array_like, shape (n,)
        Probability inside each interval, between 0 and 1.

    Returns
    -------
    BetaPairs
        Arrays of shape (n,): the exact pair where there is one with 0 <= x <= m, else the pair at the edge of that range
        that is closest in the sum of squares of the distances of the two ends.

    Raises
    ------
    ValueError
        Where an interval is empty or a level is not between 0 and 1.
    """
    wanted = np.stack(np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, float)) for v in (lo, hi, level))))
    if not (np.all(wanted[0] < wanted[1]) and np.all((wanted[2] > 0) & (wanted[2] < 1))):
        raise ValueError("beta_pairs needs lo < hi and levels between 0 and 1")
    # rows of a table repeat themselves, since published numbers are rounded
    distinct, back = np.unique(wanted, axis=1, return_inverse=True)
    below, above, inner = distinct
    a, b = _exact(below, above, inner)
    inside = (a >= 1) & (b >= 1)
    a[~inside], b[~inside] = _edge(below[~inside], above[~inside], inner[~inside])
    back = np.asarray(back).reshape(-1)
    # a sum of its parts, so that x is never above m by rounding
    x, m = (a - 1)[back], ((a - 1) + (b - 1))[back]
    found = beta_interval(a - 1, (a - 1) + (b - 1), inner)
    misfit = np.maximum(np.abs(found[0] - below), np.abs(found[1] - above)) / ((above - below) / 2)
    return BetaPairs(x, m, found[0][back], found[1][back], misfit[back])


def _exact(lo: Array, hi: Array, level: Array) -> tuple[Array, Array]:
    """Beta parameters with given quantiles by Newton's method in their logarithms; below 1 where there are none above."""
    result = np.zeros((2, lo.size))
    todo = np.flatnonzero((lo > 0) & (hi < 1))
    centre, sd = (lo + hi)[todo] / 2, (hi - lo)[todo] / (2 * ndtri((1 + level[todo]) / 2))
    total = np.clip(centre * (1 - centre) / sd**2 - 1, 2.0, MOST)
    theta = np.log(np.maximum(np.stack([centre * total, (1 - centre) * total]), 1.0))
    for _ in range(ITERATIONS):
        if not todo.size:
            break
        residual = _residual(theta, lo[todo], hi[todo], level[todo])
        done = np.abs(residual).max(axis=0) < EXACT / 10
        # far below 1 the quantiles leave floating point; such a pair is not wanted any more
        lost = (theta < np.log(0.3)).any(axis=0) | ~np.isfinite(residual).all(axis=0)
        result[:, todo[done & ~lost]] = np.exp(theta[:, done & ~lost])
        keep = ~(done | lost)
        todo, theta, residual = todo[keep], theta[:, keep], residual[:, keep]
        at = lo[todo], hi[todo], level[todo]
        steps = DIFFERENCE * np.eye(2)[:, :, None]
        by_a, by_b = ((_residual(theta + step, *at) - _residual(theta - step, *at)) / (2 * DIFFERENCE) for step in steps)
        determinant = by_a[0] * by_b[1] - by_a[1] * by_b[0]
        determinant = np.where(determinant == 0, np.inf, determinant)
        move = np.stack([by_b[1] * residual[0] - by_b[0] * residual[1], by_a[0] * residual[1] - by_a[1] * residual[0]])
        move /= determinant
        theta = theta - move * np.minimum(1.0, LARGEST_STEP / np.maximum(np.abs(move).max(axis=0), 1e-300))
    # rounding keeps the residual of very narrow intervals from falling further; take them where they are as good as exact
    if todo.size:
        close = np.abs(_residual(theta, lo[todo], hi[todo], level[todo])).max(axis=0) < 1e-5
        result[:, todo[close]] = np.exp(theta[:, close])
    # a pair on the edge itself, such as that of no galaxy in ten, must not fall off it by rounding
    result = np.where(np.abs(result - 1) < 1e-7, 1.0, result)
    return result[0], result[1]


def _residual(theta: Array, lo: Array, hi: Array, level: Array) -> Array:
    """Distance of both quantiles from those wanted, in half-widths, shape (2, n)."""
    a, b = np.exp(theta)
    half = (hi - lo) / 2
    return np.stack([(betaincinv(a, b, (1 - level) / 2) - lo) / half, (betaincinv(a, b, (1 + level) / 2) - hi) / half])


def _edge(lo: Array, hi: Array, level: Array) -> tuple[Array, Array]:
    """Closest Beta parameters of which one is 1 and the other at least 1; the quantiles there are closed forms."""
    below, above = (1 - level) / 2, (1 + level) / 2

    def nothing(log_b: Array) -> Array:  # x = 0: Beta(1, b)
        b = np.exp(log_b)
        return (-np.expm1(np.log1p(-below) / b) - lo) ** 2 + (-np.expm1(np.log1p(-above) / b) - hi) ** 2

    def everything(log_a: Array) -> Array:  # x = m: Beta(a, 1)
        a = np.exp(log_a)
        return (np.exp(np.log(below) / a) - lo) ** 2 + (np.exp(np.log(above) / a) - hi) ** 2

    results = []
    for cost in (nothing, everything):
        left, right = np.zeros(lo.size), np.full(lo.size, np.log(MOST))
        shrink = (np.sqrt(5) - 1) / 2
        for _ in range(SECTIONS):
            width = shrink * (right - left)
            first, second = right - width, left + width
            lower = cost(first) <= cost(second)
            left, right = np.where(lower, left, first), np.where(lower, second, right)
        best = (left + right) / 2
        best = np.where(cost(np.zeros(lo.size)) <= cost(best), 0.0, best)
        results.append((cost(best), np.exp(best)))
    empty = results[0][0] <= results[1][0]
    return np.where(empty, 1.0, results[1][1]), np.where(empty, results[0][1], 1.0)


def limit_pairs(limit: ArrayLike, confidence: ArrayLike, upper: ArrayLike) -> tuple[Array, Array]:
    """Effective counts of limits: none in m for an upper limit, all of m for a lower one.

    An upper limit L at confidence c is the c-quantile of Beta(1, m + 1), 1 - (1 - c)^(1 / (m + 1)) = L; a lower limit is the
    mirror image.

    Parameters
    ----------
    limit, confidence : array_like, shape (n,)
        Limits, and the probability on their allowed side.
    upper : array_like of bool, shape (n,)
        Whether each is an upper limit.

    Returns
    -------
    x, m : ndarray, shape (n,)
        m is negative where the limit is weaker than a flat prior makes it (L > c for an upper limit).
    """
    limit, confidence, upper = np.asarray(limit, float), np.asarray(confidence, float), np.asarray(upper, bool)
    with np.errstate(divide="ignore"):
        m = np.log1p(-confidence) / np.where(upper, np.log1p(-limit), np.log(limit)) - 1
    # L = c carries nothing, whatever rounding says
    m = np.where(np.abs(m) < 1e-12, 0.0, m)
    return np.where(upper, 0.0, m), m
