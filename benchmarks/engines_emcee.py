"""Opponents of the engines: emcee over every parameter, as one would write it by hand.

    python benchmarks/engines_emcee.py CONFIG plain|vectorised|differences MOVES OUT

`plain` evaluates one walker at a time with scipy.stats over all bins; only its time per move is wanted, as its moves are
those of `vectorised`.  `vectorised` evaluates all walkers at once with emcee's default
stretch move; `differences` takes differential-evolution moves and is the long reference.  All start near the peak of
the posterior, which is a present to them: the search for it is not timed.
"""

from __future__ import annotations

import sys
import time

import emcee
import numpy as np
from scipy import stats

from hurstfit.posterior import Posterior
from hurstfit.problem import load_problem


def one_walker(posterior: Posterior, t: np.ndarray) -> float:
    """Log-posterior of one walker with scipy.stats; predictions and quantiles of priors are hurstfit's, which is generous."""
    p, possible = posterior.counted_fractions(posterior.physical(t[None]))
    if not possible[0]:
        return -np.inf
    bins = posterior.bins
    return float(stats.norm.logpdf(t).sum() + stats.binom.logpmf(bins.n_quiescent, bins.n_total, p[0]).sum())


def main(config: str, kind: str, moves: int, out: str) -> None:
    """Sample, and write draws of H after a warm-up."""
    begun = time.perf_counter()
    posterior = load_problem(config).posterior
    dimension = len(posterior.parameters)
    walkers = 4 * dimension
    rng = np.random.default_rng(3)
    np.random.seed(3)  # noqa: NPY002
    start = 0.3 * rng.standard_normal((walkers, dimension))
    start[:, 0] += posterior.exponent.prior.to_normal(0.83)
    if kind == "plain":
        sampler = emcee.EnsembleSampler(walkers, dimension, lambda t: one_walker(posterior, t))
        before = time.perf_counter() - begun
        sampler.run_mcmc(start, moves)
        took = time.perf_counter() - begun - before
        np.savez(out, H=sampler.get_chain()[..., 0], before=before, seconds_per_move=took / moves)
        return
    proposals = [(emcee.moves.DEMove(), 0.8), (emcee.moves.StretchMove(), 0.2)] if kind == "differences" else None
    sampler = emcee.EnsembleSampler(walkers, dimension, posterior.log_probability, vectorize=True, moves=proposals)
    sampler.run_mcmc(start, moves, thin_by=1)
    t = sampler.get_chain(discard=moves // 5, thin=5)
    H = posterior.exponent.prior.from_normal(t[..., 0])
    np.savez(out, H=H, before=0.0, seconds_per_move=(time.perf_counter() - begun) / moves)


if __name__ == "__main__":
    main(sys.argv[1], sys.argv[2], int(sys.argv[3]), sys.argv[4])
