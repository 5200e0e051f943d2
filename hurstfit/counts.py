"""The count of a bin: how probable a number of quiescent galaxies is, given the counted fraction."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, xlog1py, xlogy

__all__ = ["BinomialCounts"]


@dataclass(frozen=True)
class BinomialCounts:
    """Binomial counts: n_quiescent of n_total in every bin, independent given the counted fraction.

    Attributes
    ----------
    n_total, n_quiescent : ndarray, shape (bins,)
        Galaxies of each bin, and those labelled quiescent.
    """

    n_total: NDArray[np.float64]
    n_quiescent: NDArray[np.float64]

    @cached_property
    def log_coefficient(self) -> float:
        """Log of the product of the binomial coefficients."""
        k, n = self.n_quiescent, self.n_total
        return float(np.sum(gammaln(n + 1) - gammaln(k + 1) - gammaln(n - k + 1)))

    def log_likelihood(self, p: NDArray[np.float64]) -> NDArray[np.float64]:
        """Log-probability of all counts, binomial coefficient included.

        Parameters
        ----------
        p : ndarray, shape (..., bins)
            Counted fraction; 0 and 1 are allowed.

        Returns
        -------
        ndarray, shape (...)
            Sum over bins; -inf where a count is impossible.
        """
        k, n = self.n_quiescent, self.n_total
        return (xlogy(k, p) + xlog1py(n - k, -p)).sum(axis=-1) + self.log_coefficient

    def simulate(self, p: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.float64]:
        """Draw counts for every bin, the shape of `p`."""
        return rng.binomial(self.n_total.astype(np.int64), p).astype(float)
