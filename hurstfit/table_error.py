"""What the fraction table's own error does to a posterior.

The nodes of a table share walks, so that its error shifts all bins together and does not average out over them.  It is
carried along coherently: tables are drawn from the covariance of the table in use (:mod:`hurstfit.fractions.replicates`),
and draws of the posterior are weighted by the likelihood under each of them.  The mean H under each table says how far the
table's error moves H; the average weight makes the posterior marginal over it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from hurstfit.fractions.spline import Surface
from hurstfit.posterior import Posterior

__all__ = ["NEGLIGIBLE_SHARE", "TableEffect", "table_effect"]

#: Tables drawn.
TABLES = 100
#: Share of the posterior width below which the table's error is not worth a word.
NEGLIGIBLE_SHARE = 0.02


@dataclass(frozen=True)
class TableEffect:
    """How much the error of the fraction table does to H.

    Attributes
    ----------
    moves : float
        Standard deviation of the posterior mean of H over tables, in units of the posterior's standard deviation.
    widens : float
        Standard deviation of H marginal over tables, over that with the table as it is.
    shifts : float
        Mean of H marginal over tables less that with the table as it is, in units of the posterior's standard deviation.
    """

    moves: float
    widens: float
    shifts: float


def table_effect(posterior: Posterior, deviations: Surface, draws: NDArray[np.float64], rng: np.random.Generator) -> TableEffect:
    """Weight posterior draws by the likelihood under tables drawn from the table's covariance.

    Parameters
    ----------
    posterior : Posterior
        What the draws are from; H must be its first free parameter.
    deviations : Surface
        Deviations of the table's replicates (:meth:`hurstfit.fractions.table.FractionTable.deviations`).
    draws : ndarray, shape (draws, parameters)
        Posterior draws in their own units; one or two thousand are enough.
    rng : numpy.random.Generator
        Source of random numbers.

    Returns
    -------
    TableEffect
    """
    full = posterior.complete(draws)
    fraction, _ = posterior.true_fractions(draws)
    shifts = []
    for coefficients in deviations.coefficients:
        prediction = replace(posterior.prediction, surface=replace(deviations, coefficients=coefficients))
        shifts.append(prediction.averaged(full[:, 0], full[:, 1], full[:, 2])[0])
    base = posterior.counts.log_likelihood(posterior.selected(fraction, draws))
    H = full[:, 0]
    centre, width = H.mean(), H.std()
    # antithetic pairs: the mean over tables is then free of the first-order term
    normals = rng.standard_normal((TABLES // 2, len(shifts)))
    means, total = [], np.zeros(H.size)
    for z in np.concatenate([normals, -normals]):
        shifted = np.clip(fraction + np.tensordot(z, shifts, axes=1), 0.0, 1.0)
        change = posterior.counts.log_likelihood(posterior.selected(shifted, draws)) - base
        weights = np.exp(change)
        total += weights
        means.append(np.average(H, weights=weights))
    total /= total.sum()
    mean = float(total @ H)
    marginal = float(np.sqrt(total @ (H - mean) ** 2))
    return TableEffect(float(np.std(means) / width), float(marginal / width), float((mean - centre) / width))
