"""The count of a bin: how probable a number of quiescent galaxies is, given the counted fraction.

Counts are binomial, or beta-binomial where galaxies of one bin are alike because they share fields (Skellam 1948, J. R.
Stat. Soc. B 10, 257; Williams 1975, Biometrics 31, 949): the share of the bin's sky is then itself Beta distributed about p,
with intra-class correlation rho.  Effective counts need not be whole numbers; factorials become gamma functions.

This is the one place where a likelihood of counts is computed.  It is split into `log_kernel`, which depends on the counted
fraction, and `log_coefficient`, which does not.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gammaln, xlog1py, xlogy

__all__ = ["BetaBinomialCounts", "BinomialCounts", "log_rising"]

Array = NDArray[np.float64]

#: Argument from which Stirling's series gives the logarithm of the gamma function to rounding.
STIRLING = 20.0
#: A correlation below this is none, to rounding, for any number of galaxies.
NO_CORRELATION = 1e-30


@dataclass(frozen=True)
class BinomialCounts:
    """Binomial counts: n_quiescent of n_total in every bin, independent given the counted fraction.

    Attributes
    ----------
    n_total, n_quiescent : ndarray, shape (bins,)
        Galaxies of each bin, and those labelled quiescent; effective numbers, where the bin is not a count.
    """

    n_total: Array
    n_quiescent: Array

    def select(self, bins: NDArray[np.intp] | NDArray[np.bool_]) -> BinomialCounts:
        """Keep the counts of chosen bins."""
        return BinomialCounts(self.n_total[bins], self.n_quiescent[bins])

    @cached_property
    def log_coefficient(self) -> float | Array:
        """Log of the product of the binomial coefficients: what the likelihood has that does not depend on the fractions."""
        k, n = self.n_quiescent, self.n_total
        return float(np.sum(gammaln(n + 1) - gammaln(k + 1) - gammaln(n - k + 1)))

    def log_kernel(self, p: Array) -> Array:
        """Log-probability of all counts without :attr:`log_coefficient`.

        Parameters
        ----------
        p : ndarray, shape (..., bins)
            Counted fraction; 0 and 1 are allowed, and nan stands for one that cannot be.

        Returns
        -------
        ndarray, shape (...)
            Sum over bins; -inf where a count or a fraction is impossible.
        """
        k, n = self.n_quiescent, self.n_total
        total: Array = (xlogy(k, p) + xlog1py(n - k, -p)).sum(axis=-1)
        return np.where(np.isnan(total), -np.inf, total)

    def log_likelihood(self, p: Array) -> Array:
        """Log-probability of all counts, binomial coefficient included; shapes as :meth:`log_kernel`."""
        return self.log_kernel(p) + self.log_coefficient

    def simulate(self, p: Array, rng: np.random.Generator) -> Array:
        """Draw counts for every bin, the shape of `p`.

        Effective counts are drawn as the nearest whole number of galaxies, at least one, and scaled to the effective number.
        """
        galaxies = np.maximum(np.rint(self.n_total), 1.0)
        return rng.binomial(galaxies.astype(np.int64), p) * (self.n_total / galaxies)


@dataclass(frozen=True)
class BetaBinomialCounts(BinomialCounts):
    """Beta-binomial counts: Beta(alpha, beta) mixed, alpha = p (1 - rho) / rho and beta = (1 - p) (1 - rho) / rho.

    Attributes
    ----------
    rho : ndarray, shape (bins,) or (..., bins)
        Intra-class correlation, 0 <= rho <= 1, possibly another one for each vector of fractions; the variance is that of
        the binomial times 1 + (n - 1) rho.
    """

    rho: Array

    @cached_property
    def _theta(self) -> Array:
        # a correlation of 1 to rounding is as close to 1 as floating point goes
        return np.where(self.rho > NO_CORRELATION, self.rho / np.maximum(1 - self.rho, 1e-16), 0.0)

    def select(self, bins: NDArray[np.intp] | NDArray[np.bool_]) -> BetaBinomialCounts:
        """Keep the counts of chosen bins."""
        return BetaBinomialCounts(self.n_total[bins], self.n_quiescent[bins], self.rho[..., bins])

    @cached_property
    def log_coefficient(self) -> float | Array:
        """Log of what the likelihood has that does not depend on the fractions, of each vector where rho differs between them."""
        coefficient = BinomialCounts(self.n_total, self.n_quiescent).log_coefficient
        return coefficient - log_rising(1.0, self.n_total, self._theta).sum(axis=-1)

    def log_kernel(self, p: Array) -> Array:
        """Log-probability of all counts without :attr:`log_coefficient`; as for binomial counts."""
        k, n = self.n_quiescent, self.n_total
        total: Array = (log_rising(p, k, self._theta) + log_rising(1 - p, n - k, self._theta)).sum(axis=-1)
        return np.where(np.isnan(total), -np.inf, total)

    def simulate(self, p: Array, rng: np.random.Generator) -> Array:
        """Draw counts for every bin, the shape of `p`; see :meth:`BinomialCounts.simulate`."""
        theta = np.where(self._theta > 0, self._theta, 1.0)
        a, b = np.maximum(p / theta, 1e-300), np.maximum((1 - p) / theta, 1e-300)
        certain = (p <= 0) | (p >= 1) | (self._theta == 0)
        return super().simulate(np.where(certain, p, rng.beta(a, b)), rng)


def log_rising(p: ArrayLike, count: ArrayLike, theta: ArrayLike) -> Array:
    """Log of p (p + theta) (p + 2 theta) ... with `count` factors, continued to counts that are not whole.

    This is log Gamma(p / theta + count) - log Gamma(p / theta) + count log(theta), without the cancellation that these terms
    suffer where theta is small; at theta = 0 it is count log(p).

    Parameters
    ----------
    p : array_like
        0 or more.
    count : array_like
        Number of factors, 0 or more.
    theta : array_like
        0 or more; all three broadcast.

    Returns
    -------
    ndarray
        The broadcast shape; -inf where p = 0 and count > 0, nan where p is.
    """
    p, count, theta = np.asarray(p, float), np.asarray(count, float), np.asarray(theta, float)
    spread = np.where(theta > 0, theta, 1.0)
    z = p / spread
    # log Gamma(z) = (z - 1/2) log z - z + log(2 pi) / 2 + S(z)
    large = np.maximum(z, STIRLING)
    end = large + count
    stirling = (end - 0.5) * np.log1p(count / large) - count + _series(end) - _series(large) + xlogy(count, p)
    small = np.clip(z, 1e-300, STIRLING)
    direct = gammaln(small + count) - gammaln(small) + count * np.log(spread)
    result = np.where(z < STIRLING, direct, stirling)
    result = np.where((p <= 0) & (count > 0), -np.inf, np.where(count == 0, 0.0, result))
    result = np.where(theta > 0, result, xlogy(count, p))
    return np.where(np.isnan(p), np.nan, result)


def _series(z: Array) -> Array:
    """Stirling's series of log Gamma (Abramowitz & Stegun 6.1.41); the first term left out is below 1e-16 at z = 20."""
    w = 1.0 / z**2
    return (1 / 12 - w * (1 / 360 - w * (1 / 1260 - w * (1 / 1680 - w * (1 / 1188 - w * 691 / 360360))))) / z
