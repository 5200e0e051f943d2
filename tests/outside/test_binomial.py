"""Binomial counts against scipy.stats, and against the conjugate Beta posterior (textbook result)."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad
from scipy.special import betaln

from hurstfit.counts import BinomialCounts


@pytest.mark.parametrize("n", [1, 7, 950, 10_000_000])
def test_log_probabilities_are_those_of_scipy(n: int) -> None:
    k = np.unique(np.round(np.array([0.0, 0.01, 0.3, 0.5, 0.99, 1.0]) * n))
    p = np.array([1e-12, 0.01, 0.2, 0.5, 0.97])
    ours = np.array([[float(BinomialCounts(np.array([n]), np.array([x])).log_likelihood(np.array([q]))) for q in p] for x in k])
    # log-gamma of n is rounded to 1e-16 n ln n, in scipy as here
    assert ours == pytest.approx(stats.binom.logpmf(k[:, None], n, p), rel=1e-11, abs=1e-14 * n * np.log(n + 1) + 1e-12)


@pytest.mark.parametrize(("n", "k"), [(1, 0), (1, 1), (20, 3), (400, 396)])
def test_a_flat_prior_gives_the_conjugate_beta(n: int, k: int) -> None:
    counts = BinomialCounts(np.array([float(n)]), np.array([float(k)]))
    peak = k / n

    def likelihood(p: float) -> float:
        return float(np.exp(counts.log_likelihood(np.array([p]))))

    def integral(hi: float) -> float:
        return quad(likelihood, 0, hi, points=[min(peak, hi)] if 0 < peak < 1 else None, epsabs=0, epsrel=1e-11, limit=200)[0]

    # with the binomial coefficient the evidence is 1 / (n + 1); without it, B(k + 1, n - k + 1)
    evidence = integral(1.0)
    assert evidence == pytest.approx(1 / (n + 1), rel=1e-9)
    assert evidence / np.exp(counts.log_coefficient) == pytest.approx(np.exp(betaln(k + 1, n - k + 1)), rel=1e-9)
    for probability in (0.025, 0.16, 0.5, 0.84, 0.975):
        quantile = stats.beta.ppf(probability, k + 1, n - k + 1)
        assert integral(quantile) / evidence == pytest.approx(probability, rel=1e-8)
