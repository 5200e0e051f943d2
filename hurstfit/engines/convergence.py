"""Judge whether chains have settled, and how many independent draws they are worth.

Chains of correlated draws are judged in three ways.  The rank-normalised split R-hat compares the spread between half
chains with the spread within them, once for the draws and once for their distance from the median, so that chains which
differ in place or in width are both caught.  The effective sample sizes say how many independent draws would give the
same error: in the bulk, in the tails, of the mean and of any quantile.  The integrated autocorrelation time says how
many steps one independent draw costs.

All of it follows Vehtari et al. (2021, Bayesian Analysis 16, 667), here V21, apart from the autocorrelation time, which
is that of Goodman & Weare (2010, CAMCoS 5, 65) with the window of Sokal.  Every function takes the draws of *one*
quantity, shape ``(n_steps, n_chains)``, and works for a single chain too, since each chain is split in two.  Where the
answer is not defined (fewer than four steps, a draw that is not finite, draws that are all equal) it is nan, never an
exception.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.fft
from scipy.special import betaincinv, ndtr, ndtri

__all__ = [
    "Convergence",
    "assess",
    "autocorrelation_time",
    "ess_bulk",
    "ess_mean",
    "ess_quantile",
    "ess_tail",
    "mcse_mean",
    "mcse_quantile",
    "split_rhat",
]

FloatArray = npt.NDArray[np.float64]

# A half chain of one step has no variance.
MIN_STEPS = 4
# The quantiles whose indicators make the tail effective sample size (V21, section on tail ESS).
TAILS = (0.05, 0.95)
# Half chains that are transformed at once: few enough for the transforms to stay in the cache.
FFT_BATCH = 8


@dataclass(frozen=True)
class Convergence:
    """What the chains of one quantity are worth.

    Attributes
    ----------
    rhat : float
        Rank-normalised split R-hat; V21 ask for less than 1.01.
    ess_bulk, ess_tail : float
        Effective number of independent draws, in the bulk and in the tails; V21 ask for more than 400 with four chains.
    tau : float
        Integrated autocorrelation time in steps.
    """

    rhat: float
    ess_bulk: float
    ess_tail: float
    tau: float


def assess(draws: npt.ArrayLike) -> Convergence:
    """Judge the chains of one quantity by all measures at once.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.

    Returns
    -------
    Convergence
        With nan where a measure is not defined.

    Raises
    ------
    ValueError
        If the draws are not two-dimensional.
    """
    chains = _chains(draws)
    if not _usable(chains):
        return Convergence(np.nan, np.nan, np.nan, np.nan)
    bulk, folded = _normal_scores(_split(chains))
    return Convergence(
        rhat=_larger_rhat(bulk, folded),
        ess_bulk=_effective_size(bulk),
        ess_tail=_tail_size(chains),
        tau=_sokal_time(chains),
    )


def split_rhat(draws: npt.ArrayLike) -> float:
    """Rank-normalised split R-hat: the larger of that of the draws and that of their distances from the median.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.

    Returns
    -------
    float
        V21, section on rank-normalised R-hat; near 1 where the chains agree, infinite where no chain moves but they
        differ.
    """
    chains = _chains(draws)
    return _larger_rhat(*_normal_scores(_split(chains))) if _usable(chains) else np.nan


def ess_bulk(draws: npt.ArrayLike) -> float:
    """Effective sample size of the rank-normalised draws.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.

    Returns
    -------
    float
        V21, section on bulk ESS.
    """
    chains = _chains(draws)
    return _effective_size(_normal_scores(_split(chains))[0]) if _usable(chains) else np.nan


def ess_tail(draws: npt.ArrayLike) -> float:
    """Effective sample size in the tails: the smaller of those of the 5 % and the 95 % quantile.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.

    Returns
    -------
    float
        V21, section on tail ESS.  Where the 95 % quantile is the highest draw, as with draws piled up at a bound, no
        draw lies above it to make an indicator, and the 5 % quantile decides alone.
    """
    chains = _chains(draws)
    return _tail_size(chains) if _usable(chains) else np.nan


def ess_mean(draws: npt.ArrayLike) -> float:
    """Effective sample size of the mean of the draws as they are, without ranks.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity with a finite variance.

    Returns
    -------
    float
        V21, section on ESS.
    """
    chains = _chains(draws)
    return _effective_size(_split(chains)) if _usable(chains) else np.nan


def ess_quantile(draws: npt.ArrayLike, prob: float) -> float:
    """Effective sample size of a quantile: that of the indicator of lying at or below it.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.
    prob : float
        Probability of the quantile, between 0 and 1.

    Returns
    -------
    float
        V21, section on ESS of quantiles; nan where all draws lie at or below the quantile.

    Raises
    ------
    ValueError
        If prob is not between 0 and 1.
    """
    _check_probability(prob)
    chains = _chains(draws)
    return _quantile_size(chains, np.quantile(chains, prob)) if _usable(chains) else np.nan


def mcse_mean(draws: npt.ArrayLike) -> float:
    """Monte Carlo standard error of the mean of the draws, in their own unit.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity with a finite variance.

    Returns
    -------
    float
        Standard deviation over the square root of the effective sample size of the mean.
    """
    chains = _chains(draws)
    return float(np.std(chains, ddof=1) / np.sqrt(ess_mean(chains))) if _usable(chains) else np.nan


def mcse_quantile(draws: npt.ArrayLike, prob: float) -> float:
    """Monte Carlo standard error of a quantile of the draws, in their own unit.

    With S effective draws the probability below the estimated quantile has a Beta(S prob + 1, S (1 - prob) + 1)
    distribution; half the distance between the draws at its 16 % and 84 % points is the standard error.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.
    prob : float
        Probability of the quantile, between 0 and 1.

    Returns
    -------
    float
        V21, section on Monte Carlo error estimates for quantiles; nan where the effective sample size is.

    Raises
    ------
    ValueError
        If prob is not between 0 and 1.
    """
    size = ess_quantile(draws, prob)
    if np.isnan(size):
        return np.nan
    ordered = np.sort(_chains(draws), axis=None)
    low, high = betaincinv(size * prob + 1.0, size * (1.0 - prob) + 1.0, ndtr([-1.0, 1.0]))
    first = max(int(np.floor(low * ordered.size)) - 1, 0)
    last = min(int(np.ceil(high * ordered.size)) - 1, ordered.size - 1)
    return float(ordered[last] - ordered[first]) / 2.0


def autocorrelation_time(draws: npt.ArrayLike) -> float:
    """Integrated autocorrelation time in steps, from the autocorrelation function averaged over the chains.

    Parameters
    ----------
    draws : array_like, shape (n_steps, n_chains)
        Draws of one quantity.

    Returns
    -------
    float
        1 + 2 sum of the autocorrelations up to the first lag beyond five times the running sum (Sokal's window, as in
        Goodman & Weare 2010); nan also where a single chain never moves, whose autocorrelation is not defined.  Too
        small where the chains are shorter than about 50 times its value.
    """
    chains = _chains(draws)
    return _sokal_time(chains) if _usable(chains) else np.nan


def _chains(draws: npt.ArrayLike) -> FloatArray:
    chains = np.asarray(draws, dtype=np.float64)
    if chains.ndim != 2:
        raise ValueError(f"draws of one quantity have the shape (n_steps, n_chains), not {chains.shape}")
    return chains


def _check_probability(prob: float) -> None:
    if not 0.0 < prob < 1.0:
        raise ValueError(f"the probability of a quantile lies between 0 and 1, not at {prob}")


def _usable(chains: FloatArray) -> bool:
    if chains.shape[0] < MIN_STEPS or chains.shape[1] < 1:
        return False
    low, high = chains.min(), chains.max()
    return bool(np.isfinite(low) and np.isfinite(high) and low < high)


def _split(chains: npt.NDArray) -> FloatArray:
    """Cut (n_steps, n_chains) into half chains (2 n_chains, n_steps // 2), without the middle step of an odd number."""
    half = chains.shape[0] // 2
    return np.ascontiguousarray(np.concatenate((chains[:half].T, chains[-half:].T)), dtype=np.float64)


def _normal_scores(values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Rank-normalise the values, and their distances from the median."""
    flat = values.ravel()
    order = np.argsort(flat)
    ordered = flat[order]
    median = 0.5 * (ordered[(flat.size - 1) // 2] + ordered[flat.size // 2])
    distance = np.abs(ordered - median)
    # Falling up to the median and rising from there.  With the first part turned round, these are two rising runs,
    # which a stable sort merges in one pass instead of sorting a second time.
    turn = int(np.argmin(distance))
    runs = np.concatenate((np.arange(turn)[::-1], np.arange(turn, distance.size)))
    runs = runs[np.argsort(distance[runs], kind="stable")]
    shape = values.shape
    return _scatter(ordered, order).reshape(shape), _scatter(distance[runs], order[runs]).reshape(shape)


def _scatter(ordered: FloatArray, places: npt.NDArray[np.intp]) -> FloatArray:
    """Put the normal score of each sorted value where the value came from; equal values share their mean rank."""
    starts = np.flatnonzero(np.concatenate(([True], ordered[1:] != ordered[:-1])))
    counts = np.diff(starts, append=ordered.size)
    ranks = starts + 0.5 * (counts + 1)
    # Blom (1958): (rank - 3/8) / (S + 1/4).
    scores = np.empty(ordered.size)
    scores[places] = np.repeat(ndtri((ranks - 0.375) / (ordered.size + 0.25)), counts)
    return scores


def _larger_rhat(bulk: FloatArray, folded: FloatArray) -> float:
    # fmax: draws with two values only have no distances from the median to compare.
    return float(np.fmax(_rhat(bulk), _rhat(folded)))


def _rhat(halves: FloatArray) -> float:
    """R-hat of half chains (Gelman & Rubin 1992, as in V21): sqrt(var+ / W)."""
    n = halves.shape[1]
    within = halves.var(axis=1, ddof=1).mean()
    between = halves.mean(axis=1).var(ddof=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        return float(np.sqrt((n - 1) / n + between / within))


def _tail_size(chains: FloatArray) -> float:
    # fmin: see ess_tail.
    return float(np.fmin.reduce([_quantile_size(chains, q) for q in np.quantile(chains, TAILS)]))


def _quantile_size(chains: FloatArray, quantile: float) -> float:
    return _effective_size(_split(chains <= quantile))


def _effective_size(halves: FloatArray) -> float:
    """Effective size of half chains (n_chains, n_steps), by Geyer's initial monotone sequence (1992, section 3.3).

    The autocorrelation at lag t combines all chains, rho_t = 1 - (W - mean autocovariance at t) / var+ (V21, section on
    ESS).
    """
    if halves.min() == halves.max():
        return np.nan
    total, n = halves.size, halves.shape[1]
    covariance = _mean_autocovariance(halves)
    within = covariance[0] * n / (n - 1)
    rho = 1.0 - (within - covariance) / (covariance[0] + halves.mean(axis=1).var(ddof=1))
    rho[0] = 1.0
    # Sums of neighbouring lags (0, 1), (2, 3), ... are positive and falling for any reversible chain.  The last lag has
    # one product only per chain, and is left out.
    pairs = rho[: max(n - 1, 2)]
    pairs = pairs[: pairs.size // 2 * 2].reshape(-1, 2).sum(axis=1)
    failed = np.flatnonzero(pairs <= 0.0)
    stop = int(failed[0]) if failed.size else pairs.size - 1
    # The even lag of the first pair left out counts once where it is positive: the sum of the pairs alone would stop
    # short of it for antithetic chains.
    tau = -1.0 + 2.0 * np.minimum.accumulate(pairs[:stop]).sum() + max(rho[2 * stop], 0.0)
    # V21 allow no more than S log10(S) effective draws, since the estimate is unreliable for chains that are very
    # antithetic.
    return float(total / max(tau, 1.0 / np.log10(total)))


def _mean_autocovariance(halves: FloatArray) -> FloatArray:
    """Autocovariance at lags 0 ... n-1 averaged over the chains (rows), each about its own mean and divided by n."""
    n_chains, n = halves.shape
    padded = scipy.fft.next_fast_len(2 * n, real=True)
    power = np.zeros(padded // 2 + 1)
    # The transform is linear: only the summed power has to be transformed back.
    for start in range(0, n_chains, FFT_BATCH):
        batch = halves[start : start + FFT_BATCH]
        modes = scipy.fft.rfft(batch - batch.mean(axis=1, keepdims=True), n=padded, axis=1)
        power += (modes.real**2 + modes.imag**2).sum(axis=0)
    return scipy.fft.irfft(power, n=padded)[:n] / (n * n_chains)


def _sokal_time(chains: FloatArray) -> float:
    # emcee takes most of a second to import, and nothing else here needs it.
    from emcee.autocorr import integrated_time

    if (chains.min(axis=0) == chains.max(axis=0)).any():
        return np.nan
    return float(integrated_time(chains, c=5, tol=0, quiet=True)[0])
