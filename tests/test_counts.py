"""Counts: what the probability of a number of quiescent galaxies must be."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from hurstfit.counts import BinomialCounts


def counts(total: list[float], quiescent: list[float]) -> BinomialCounts:
    return BinomialCounts(np.array(total, float), np.array(quiescent, float))


def test_probabilities_of_all_counts_of_a_bin_add_up_to_one() -> None:
    p = np.array([[0.0], [0.2], [0.999], [1.0]])
    total = sum(np.exp(counts([12], [k]).log_likelihood(p)) for k in range(13))
    assert total == pytest.approx(1.0, abs=1e-13)


def test_bins_are_independent() -> None:
    p = np.array([0.1, 0.4, 0.7])
    together = counts([10, 20, 30], [1, 2, 3]).log_likelihood(p)
    alone = [float(counts([n], [k]).log_likelihood(p[i : i + 1])) for i, (n, k) in enumerate([(10, 1), (20, 2), (30, 3)])]
    assert together == pytest.approx(sum(alone), rel=1e-14)


@pytest.mark.parametrize("n", [1, 100, 10_000_000])
@pytest.mark.parametrize("share", [0.0, 1.0])
def test_impossible_counts_have_no_probability_and_certain_ones_all(n: int, share: float) -> None:
    with np.errstate(all="raise"):
        assert counts([n], [n * share]).log_likelihood(np.array([share])) == pytest.approx(0.0, abs=1e-9)
        assert counts([n], [n * (1 - share)]).log_likelihood(np.array([share])) == -np.inf


def test_a_shape_in_front_of_the_bins_is_kept() -> None:
    assert counts([5, 6], [1, 2]).log_likelihood(np.full((3, 4, 2), 0.3)).shape == (3, 4)


def test_simulated_counts_have_the_mean_and_scatter_of_the_binomial() -> None:
    rng = np.random.default_rng(5)
    n, p, draws = 40, 0.3, 20_000
    k = counts([n], [0]).simulate(np.full((draws, 1), p), rng)
    variance = n * p * (1 - p)
    assert k.mean() == pytest.approx(n * p, abs=4 * np.sqrt(variance / draws))
    # the variance of a sample variance is close to 2 sigma^4 / draws for counts as many as these
    assert k.var() == pytest.approx(variance, abs=4 * variance * np.sqrt(2 / draws))
    assert stats.binom.pmf(0, n, p) < 1e-6  # so that the normal approximation just used holds
