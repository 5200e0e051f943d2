"""The true H must lie within the 68 % interval in 68 % of cases.

Data sets are drawn from the model at parameters drawn from their priors; then equal-tailed intervals of the posterior cover
the truth as often as they say, exactly, and the number of hits among 40 is binomial(40, 0.68).  Seeds of the data are fixed
here beforehand.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import cumulative_trapezoid

from hurstfit.counts import BinomialCounts
from hurstfit.engines.choice import run_engine
from hurstfit.engines.joint import JointSettings
from hurstfit.measurements import Measurements
from hurstfit.posterior import Posterior
from hurstfit.problem import load_problem

DATA_SEEDS = range(4200, 4240)
FEWEST, MOST = stats.binom.ppf([0.005, 0.995], 40, 0.68)


def drawn(posterior: Posterior, seed: int) -> tuple[float, Posterior]:
    """Draw parameters from their priors, and counts at these: the true H, and the posterior of the drawn counts."""
    rng = np.random.default_rng(seed)
    truth = posterior.physical(rng.standard_normal((1, len(posterior.parameters))))
    p, possible = posterior.counted_fractions(truth)
    assert possible.all()
    bins = posterior.bins
    table = bins.table.copy()
    table["n_quiescent"] = BinomialCounts(bins.n_total, bins.n_quiescent).simulate(p[0], rng).astype(int)
    return float(truth[0, posterior.names.index("H")]), replace(posterior, bins=Measurements(bins.path, table, bins.rows))


@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"walk": {"noise": "type-I"}, "exponent": {"prior": {"uniform": [0.3, 0.95]}}},
        {"galaxies": {"min_mass": 0.1, "criterion": "rate<0.2"}, "exponent": {"prior": {"normal": [0.8, 0.1]}}},
    ],
    ids=["type II, all walks", "type I, all walks", "type II, with mass, below a fifth of the mean rate"],
)
def test_the_exact_integral_over_the_exponent_covers_the_truth(case, changes: dict) -> None:
    posterior = load_problem(case.config(**changes)).posterior
    prior = posterior.exponent.prior
    H = np.linspace(prior.lo, prior.hi, 4001)
    hits = 0
    for seed in DATA_SEEDS:
        truth, one = drawn(posterior, seed)
        log_density = one.log_likelihood(H[:, None]) + prior.log_pdf(H)
        cumulative = cumulative_trapezoid(np.exp(log_density - log_density.max()), H, initial=0.0)
        lo, hi = np.interp([0.16, 0.84], cumulative / cumulative[-1], H)
        hits += lo <= truth <= hi
    assert FEWEST <= hits <= MOST


@pytest.mark.parametrize("engine", ["quadrature", pytest.param("joint", marks=pytest.mark.heavy)])
def test_intervals_over_clock_and_selection_cover_the_truth(case, engine: str) -> None:
    posterior = load_problem(
        case.config(
            clock={"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [9.0, 16.0]}},
            selection={
                "default": {
                    "completeness_ratio": {"lognormal": [0.95, 0.05]},
                    "missed_fraction": {"mean": 0.05, "sd": 0.02},
                    "contamination": {"validation": [4, 200]},
                }
            },
        )
    ).posterior
    hits = 0
    for seed in DATA_SEEDS:
        truth, one = drawn(posterior, seed)
        chain = run_engine(one, engine, JointSettings(seed=seed, target_ess=1000.0, max_rhat=1.02, max_steps=60_000))
        assert chain.converged, seed
        draws = one.physical(chain.coordinates[chain.warmup :])[..., 0]
        lo, hi = np.quantile(draws, [0.16, 0.84])
        hits += lo <= truth <= hi
    assert FEWEST <= hits <= MOST
