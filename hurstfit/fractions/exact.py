"""Zero fractions that are known exactly, among all walks.

A reflected walk is at zero after n steps if and only if none of the backward sums X_n, X_n + X_{n-1}, ..., X_n + ... + X_1 is
positive.  For n <= 3 that orthant probability is elementary (Sheppard 1899); at H = 1/2 it is ``C(2n, n) / 4^n`` at every n
(Sparre Andersen 1953; Feller, vol. II, ch. XII); and at H = 1 all type-I increments are equal, so that half of the walks
rest at zero for ever and the other half never do.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from hurstfit.walks.noise import fractional_gaussian_autocovariance, fractional_integration_weights

__all__ = ["backward_sum_covariance", "exact_zero_fraction"]


def backward_sum_covariance(noise: str, H: float, n: int) -> NDArray[np.float64]:
    """Covariance of the backward sums X_n, X_n + X_{n-1}, ..., X_n + ... + X_1.

    Parameters
    ----------
    noise : {'type-I', 'type-II'}
        Construction of the increments.
    H : float
        Correlation exponent.
    n : int
        Number of steps.

    Returns
    -------
    ndarray, shape (n, n)
    """
    lags = np.arange(n)
    if noise == "type-I":
        covariance = fractional_gaussian_autocovariance(H, lags[:, None] - lags[None, :])
    else:
        weights = fractional_integration_weights(H, n)
        filtered = np.where(lags[:, None] >= lags[None, :], weights[np.abs(lags[:, None] - lags[None, :])], 0.0)
        covariance = filtered @ filtered.T
    sums = np.tril(np.ones((n, n)))
    return sums @ covariance[::-1, ::-1] @ sums.T


def exact_zero_fraction(noise: str, H: float, n: int) -> float | None:
    """Exact share of all walks that are at zero after n steps, where it is known.

    Parameters
    ----------
    noise : {'type-I', 'type-II'}
        Construction of the increments.
    H : float
        Correlation exponent.
    n : int
        Number of steps.

    Returns
    -------
    float or None
        None where there is no closed form (n > 3 and H not 1/2, nor 1 for type I).
    """
    if n == 1 or (noise == "type-I" and H == 1.0):
        return 0.5
    if H == 0.5:
        return math.exp(gammaln(2 * n + 1) - 2 * gammaln(n + 1) - 2 * n * math.log(2.0))
    if n > 3:
        return None
    covariance = backward_sum_covariance(noise, H, n)
    sd = np.sqrt(np.diag(covariance))
    angles = np.arcsin(np.clip(covariance / np.outer(sd, sd), -1.0, 1.0)[np.triu_indices(n, 1)])
    # two and three dimensions: Sheppard's theorem and its consequence
    return float(0.25 + angles.sum() / (2 * np.pi)) if n == 2 else float(0.125 + angles.sum() / (4 * np.pi))
