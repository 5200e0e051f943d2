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
#: Effective number of draws below which weights say no more than that the table's error is wider than the posterior.
FEWEST_EFFECTIVE = 50.0
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
    reliable : bool
        False where hardly any draw is likely under some of the tables: the table's error is then wider than the posterior, and
        the other numbers are too small.
    """

    moves: float
    widens: float
    shifts: float
    reliable: bool


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
    # antithetic pairs: the mean over tables is then free of the first-order term
    normals = rng.standard_normal((TABLES // 2, deviations.coefficients.shape[0]))
    replicates = deviations.coefficients
    if replicates.shape[0] > normals.shape[0]:
        # fewer tables than replicates: put the tables together first
        replicates, normals = np.tensordot(normals, replicates, axes=1), np.eye(TABLES // 2)
    shifts = []
    for coefficients in replicates:
        prediction = replace(posterior.prediction, surface=replace(deviations, coefficients=coefficients))
        shifts.append(prediction.averaged(full[:, 0], full[:, 1], full[:, 2])[0])
    counts = posterior.counts_at(draws)
    base = counts.log_likelihood(posterior.selected(fraction, draws))
    H = full[:, 0]
    centre, width = H.mean(), H.std()
    means, total, fewest = [], np.full(H.size, -np.inf), float(H.size)
    for z in np.concatenate([normals, -normals]):
        shifted = np.clip(fraction + np.tensordot(z, shifts, axes=1), 0.0, 1.0)
        change = counts.log_likelihood(posterior.selected(shifted, draws)) - base
        weights = np.exp(change - change.max())
        total = np.logaddexp(total, change)
        means.append(np.average(H, weights=weights))
        fewest = min(fewest, float(weights.sum() ** 2 / (weights**2).sum()))
    total = np.exp(total - total.max())
    total /= total.sum()
    mean = float(total @ H)
    marginal = float(np.sqrt(total @ (H - mean) ** 2))
    return TableEffect(
        float(np.std(means) / width), float(marginal / width), float((mean - centre) / width), fewest >= FEWEST_EFFECTIVE
    )
