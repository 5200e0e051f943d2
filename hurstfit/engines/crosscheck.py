"""Two engines on one posterior, and whether they agree."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hurstfit.engines.convergence import mcse_quantile

__all__ = ["LIMIT", "Comparison", "compare_draws"]

#: Combined Monte Carlo standard errors beyond which engines disagree.
LIMIT = 4.0
#: What is compared: the median, and the ends of the 68 and 95 % intervals.
PROBABILITIES = (0.025, 0.16, 0.5, 0.84, 0.975)


@dataclass(frozen=True)
class Comparison:
    """One parameter under two engines.

    Attributes
    ----------
    name : str
        Parameter.
    first, second : ndarray, shape (5,)
        Quantiles at 2.5, 16, 50, 84 and 97.5 %.
    errors : ndarray, shape (5,)
        Combined Monte Carlo standard errors of their differences.
    """

    name: str
    first: NDArray[np.float64]
    second: NDArray[np.float64]
    errors: NDArray[np.float64]

    @property
    def z(self) -> NDArray[np.float64]:
        """Differences in units of their errors; where a parameter does not vary, 0 if it is the same and infinite if not."""
        difference = self.second - self.first
        known = np.isfinite(self.errors) & (self.errors > 0)
        apart = np.where(difference == 0, 0.0, np.copysign(np.inf, difference))
        return np.where(known, difference / np.where(known, self.errors, 1.0), apart)

    @property
    def agrees(self) -> bool:
        """Whether no difference is beyond the limit."""
        return bool(np.all(np.abs(self.z) <= LIMIT))

    def line(self, width: int) -> str:
        """Put it into one line: median, 68 % width and largest tail difference."""
        mark = "" if self.agrees else "   DISAGREES"
        widths = self.first[3] - self.first[1], self.second[3] - self.second[1]
        return (
            f"  {self.name.ljust(width)}  median {self.first[2]:9.4g} {self.second[2]:9.4g} ({self.z[2]:+.1f})   "
            f"68 % width {widths[0]:8.4g} {widths[1]:8.4g}   tails ({self.z[0]:+.1f}, {self.z[4]:+.1f}){mark}"
        )


def compare_draws(names: tuple[str, ...], first: NDArray[np.float64], second: NDArray[np.float64]) -> list[Comparison]:
    """Compare two sets of draws, parameter by parameter.

    Parameters
    ----------
    names : tuple of str
        Parameters.
    first, second : ndarray, shapes (steps, chains, parameters)
        Draws of the two engines.

    Returns
    -------
    list of Comparison
    """
    found = []
    for i, name in enumerate(names):
        a, b = first[..., i], second[..., i]
        errors = [np.hypot(mcse_quantile(a, p), mcse_quantile(b, p)) for p in PROBABILITIES]
        found.append(Comparison(name, np.quantile(a, PROBABILITIES), np.quantile(b, PROBABILITIES), np.array(errors)))
    return found
