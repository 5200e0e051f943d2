"""Whether a posterior can be had at all: step numbers, thresholds and impurities over the whole prior.

A proposal outside the table has likelihood zero.  That is right before the first step of a walk, where there is nothing to see;
but where only the table ends, a posterior would be cut off without a word, so that this is refused before sampling.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import HurstfitError
from hurstfit.fractions.table import FractionTable
from hurstfit.fractions.weights import LARGEST_THRESHOLD
from hurstfit.measurements import Measurements
from hurstfit.posterior import Posterior
from hurstfit.prediction import BinPrediction
from hurstfit.priors import Prior

__all__ = ["TAILS", "check_impurities", "check_steps", "check_thresholds"]

#: Clocks are checked over the central share of their priors, all but this much on either side.
TAILS = np.array([1e-6, 1 - 1e-6])


def check_steps(
    name: str, bins: Measurements, prediction: BinPrediction, table: FractionTable, step: Prior, z_start: Prior
) -> tuple[tuple[float, float], list[str]]:
    """Check that the table covers the step numbers of all bins.

    Parameters
    ----------
    name : str
        How to call the configuration in a message.
    bins : Measurements
        Bins that are fitted.
    prediction : BinPrediction
        Their prediction.
    table : FractionTable
        The table that it reads.
    step, z_start : Prior
        Step length in Myr, and redshift at which walks start.

    Returns
    -------
    numbers : tuple of float
        Smallest and largest step number over the bins and the priors.
    cautions : list of str
        What a reader of the result must know.

    Raises
    ------
    HurstfitError
        Naming the first bin that is never reached, or outside the table.
    """
    (shortest, longest), (latest, earliest) = step.ppf(TAILS), z_start.ppf(TAILS)
    clock = f"({name}, [clock])"

    def refuse_where(bad: NDArray[np.bool_], sentence: str, *numbers: NDArray[np.float64]) -> None:
        if bad.any():
            i = int(bad.argmax())
            raise HurstfitError(f"{bins.path}, {bins.row_label(i)}: {sentence.format(*(x[i] for x in numbers))}")

    refuse_where(
        bins.z_hi >= earliest,
        f"z_hi {{:g}} is not below the start of the walk, z_start = {earliest:g} at the earliest {clock}",
        bins.z_hi,
    )
    # a walk has taken most steps when it started early with short ones
    lowest, highest = prediction.step_range(np.array([longest, shortest]), np.array([latest, earliest]))
    at_most, _ = prediction.step_range(np.array([shortest]), np.array([earliest]))
    refuse_where(
        at_most < 1,
        f"at z_hi {{:g}} the walk has not taken its first step, even if it starts at redshift {earliest:.4g} with steps of "
        f"{shortest:.4g} Myr {clock}; allowed are later bins",
        bins.z_hi,
    )
    refuse_where(
        highest > table.axes.steps[-1],
        f"up to {{:.4g}} steps, where they are as short as {shortest:.4g} Myr {clock}, but the {table.noise} table holds up to "
        f"{table.axes.steps[-1]}; allow only longer steps or make a longer table",
        highest,
    )
    # below one step a bin is impossible whatever the table holds
    lowest_seen = np.maximum(lowest, 1.0)
    refuse_where(
        lowest_seen < table.axes.steps[0],
        f"as few as {{:.3g}} steps, where they are as long as {longest:.4g} Myr {clock}, but the {table.noise} table starts at "
        f"{table.axes.steps[0]}; allow only shorter steps",
        lowest_seen,
    )
    cautions = []
    early = int((lowest < 1).sum())
    if early:
        some = "1 bin lies" if early == 1 else f"{early} bins lie"
        cautions.append(
            f"{some} before the first step of the walk for part of the prior of step and z_start, which is therefore excluded"
        )
    return (float(max(lowest.min(), 0.0)), float(highest.max())), cautions


def check_thresholds(name: str, prediction: BinPrediction, table: FractionTable, z_start: Prior) -> None:
    """Check that a threshold that follows the clock stays within the table for all bins.

    Parameters
    ----------
    name, prediction, table, z_start
        As in :func:`check_steps`.

    Raises
    ------
    HurstfitError
        If it does not.
    """
    if prediction.definition.criterion.kind != "ssfr":
        return
    lowest, highest = prediction.threshold_range(z_start.ppf(TAILS))
    held = np.minimum(np.exp(prediction.surface.threshold.nodes[[0, -1]]), LARGEST_THRESHOLD)
    if lowest < held[0] or highest > held[1]:
        raise HurstfitError(
            f"{name}, [galaxies] criterion: {prediction.definition.criterion} is {lowest:.3g} to {highest:.3g} of the mean SFR "
            f"so far over these bins, but the {table.noise} table holds thresholds from {held[0]:.3g} to {held[1]:.3g}"
        )


def check_impurities(name: str, posterior: Posterior) -> None:
    """Check that the impurity of every bin is possible somewhere in the prior.

    An impurity implies a contamination, which grows with the impurity, the fraction and the completeness ratio, and falls with
    the missed fraction.  Where even the smallest that the priors admit exceeds 1, the likelihood is zero everywhere.

    Parameters
    ----------
    name : str
        How to call the configuration in a message.
    posterior : Posterior
        Likelihood and priors.

    Raises
    ------
    HurstfitError
        Naming the first bin whose implied contamination exceeds 1 everywhere.
    """
    bins = posterior.bins
    impure = np.array([posterior.selection[study].impurity is not None for study in bins.study.tolist()], bool)
    if not impure.any():
        return
    shares = np.concatenate([TAILS, np.linspace(0.02, 0.98, 25)])
    h, step, z_start = np.meshgrid(
        posterior.exponent.prior.ppf(shares),
        *(parameter.prior.ppf(np.append(TAILS, 0.5)) for parameter in (posterior.step, posterior.z_start)),
    )
    fraction, possible = posterior.prediction(h.ravel(), step.ravel(), z_start.ravel())
    lowest = fraction.min(axis=0, initial=1.0, where=possible[:, None])
    for i in np.flatnonzero(impure):
        study = bins.study[i]
        terms = posterior.selection[study]
        r, k = (float(terms.prior(term).ppf(TAILS[0])) for term in ("completeness_ratio", "impurity"))
        f, u = float(lowest[i]), float(terms.missed_fraction.ppf(TAILS[1]))
        if f * r * (1 - u) * k > (1 - f) * (1 - k):
            raise HurstfitError(
                f"{name}, [selection] impurity of {study}: found a prior from {k:.3g} upwards, which takes more star-forming "
                f"galaxies than there are in {bins.path}, {bins.row_label(int(i))} (a contamination above 1), whatever the other "
                f"parameters are; allowed are priors with impurities below {(1 - f) / (1 - f + f * r * (1 - u)):.3g}"
            )
