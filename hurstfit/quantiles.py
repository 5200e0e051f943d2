"""From sampling coordinates to parameters, fast.

In sampling coordinates every prior is standard normal, and a parameter is its prior's quantile at the normal's probability.  That
of a Beta distribution has no closed form; found anew for every proposal it costs as much as all predictions together.  So it is
tabulated once for each prior: the logit of a Beta quantile is a smooth function of the normal coordinate, close to a straight
line, and a cubic spline on 1025 even nodes follows it to better than 1e-9 of the parameter (1e-7 for the most extreme shapes that
a configuration admits).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.special import expit

from hurstfit.priors import Beta, Prior

__all__ = ["FURTHEST", "Quantiles"]

#: Coordinates further out than this are moved here: beyond it the normal's tail probability leaves floating point.
FURTHEST = 37.0
#: Tabulated range of the coordinate, and nodes per unit.
REACH, DENSITY = 8, 64


@dataclass(frozen=True)
class Quantiles:
    """The quantile functions of several priors.

    Attributes
    ----------
    priors : tuple of Prior
        One for each coordinate.
    """

    priors: tuple[Prior, ...]

    @cached_property
    def _tabulated(self) -> tuple[NDArray[np.intp], NDArray[np.float64]]:
        """Which priors are tabulated, and the cubic pieces of their logits, (priors, cells, 4), highest power first."""
        which, pieces = [], []
        t = np.linspace(-REACH, REACH, 2 * REACH * DENSITY + 1)
        for i, prior in enumerate(self.priors):
            if not isinstance(prior, Beta):
                continue
            # near 1 the distance from 1 is the quantile of the mirrored prior, which has all its digits
            with np.errstate(divide="ignore"):
                logit = np.log(prior.from_normal(t)) - np.log(Beta(prior.b, prior.a).from_normal(-t))
            if np.isfinite(logit).all():
                which.append(i)
                pieces.append(CubicSpline(t, logit).c.T)
        return np.array(which, dtype=np.intp), np.array(pieces)

    @cached_property
    def _others(self) -> list[int]:
        """Priors whose quantiles are cheap, or cannot be tabulated."""
        return [i for i in range(len(self.priors)) if i not in self._tabulated[0]]

    def __call__(self, coordinates: NDArray[np.float64]) -> NDArray[np.float64]:
        """Turn sampling coordinates into parameters, both of shape (..., priors)."""
        t = np.clip(coordinates, -FURTHEST, FURTHEST)
        values = np.empty_like(t)
        tabulated, pieces = self._tabulated
        if tabulated.size:
            place = (t[..., tabulated] + REACH) * DENSITY
            cell = np.clip(place.astype(np.intp), 0, pieces.shape[1] - 1)
            x = (place - cell) / DENSITY
            c3, c2, c1, c0 = np.moveaxis(pieces[np.arange(tabulated.size), cell], -1, 0)
            values[..., tabulated] = expit(((c3 * x + c2) * x + c1) * x + c0)
        for i in self._others:
            values[..., i] = self.priors[i].from_normal(t[..., i])
        beyond = np.abs(t[..., tabulated]) > REACH
        for i in tabulated[beyond.reshape(-1, tabulated.size).any(axis=0)] if beyond.any() else ():
            far = np.abs(t[..., i]) > REACH
            values[far, i] = self.priors[i].from_normal(t[far, i])
        return values
