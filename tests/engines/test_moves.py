"""The ensemble moves leave the target as it is."""

from __future__ import annotations

import emcee
import numpy as np
import pytest

from hurstfit.engines.convergence import ess_mean
from hurstfit.engines.joint import JointSettings, ensemble_moves


@pytest.mark.parametrize("dimension", [1, 3, 6, 12, 26])
def test_ensemble_keeps_the_variance_of_a_standard_normal(dimension: int) -> None:
    walkers = JointSettings().ensemble(dimension)
    sampler = emcee.EnsembleSampler(
        walkers, dimension, lambda x: -0.5 * (x**2).sum(axis=1), vectorize=True, moves=ensemble_moves(dimension)
    )
    sampler.random_state = np.random.RandomState(8).get_state()
    sampler.run_mcmc(np.random.default_rng(8).standard_normal((walkers, dimension)), 4000)
    squares = sampler.get_chain(discard=400) ** 2
    # the mean square of each coordinate is 1 with a standard error of sqrt(2 / effective draws); coordinates are independent
    z = [(s.mean() - 1.0) / np.sqrt(2.0 / ess_mean(s)) for s in np.moveaxis(squares, -1, 0)]
    # a biased move shifts all coordinates alike, so their sum over the square root of their number is the sharpest statistic;
    # 4 is exceeded by chance in 6e-5 of cases
    assert abs(np.sum(z) / np.sqrt(dimension)) < 4.0
