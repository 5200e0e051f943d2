"""The reflecting walk: a star formation rate that cannot fall below zero.

``S_t = max(0, S_{t-1} + X_t)`` with S_0 = 0 (Lindley 1952), computed in its closed form
``S_t = W_t - min(0, W_1, ..., W_t)`` with W the running sum of the increments (the discrete Skorokhod map).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["formed_mass", "reflect"]


def reflect(increments: ArrayLike) -> NDArray[np.float64]:
    """Turn increments into non-negative star formation rates.

    Parameters
    ----------
    increments : array_like, shape (..., n)
        X_1 ... X_n along the last axis.

    Returns
    -------
    ndarray, shape (..., n)
        S_1 ... S_n, exactly 0 where the walk rests at zero.
    """
    walk = np.cumsum(np.asarray(increments, dtype=float), axis=-1)
    return walk - np.minimum(np.minimum.accumulate(walk, axis=-1), 0.0)


def formed_mass(rates: ArrayLike) -> NDArray[np.float64]:
    """Formed mass A_t = S_1 + ... + S_t.

    Parameters
    ----------
    rates : array_like, shape (..., n)
        Star formation rates S_1 ... S_n along the last axis.

    Returns
    -------
    ndarray, shape (..., n)
        A_1 ... A_n, in units of rate times step.
    """
    return np.cumsum(np.asarray(rates, dtype=float), axis=-1)
