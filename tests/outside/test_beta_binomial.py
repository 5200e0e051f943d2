"""Beta-binomial counts against the rat tumour data and against scipy."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.optimize import minimize

from hurstfit.counts import BetaBinomialCounts

# Tumours and rats of the 70 historical groups: Tarone (1982), as in Gelman et al., Bayesian Data Analysis (3rd ed.), table 5.1.
# Written down from memory; that the maximum likelihood comes out to five digits says that it was right.
TUMOURS = [0] * 14 + [1] * 8 + [2] * 9 + [1, 5, 2, 5, 3, 2, 7, 7, 3, 3, 2, 9, 10] + [4] * 7
TUMOURS += [10, 4, 4, 4, 5, 11, 12, 5, 5, 6, 5, 6, 6, 6, 6, 16, 15, 15, 9]
RATS = [20] * 7 + [19] * 4 + [18, 18, 17] + [20] * 4 + [19, 19, 18, 18] + [25, 24, 23] + [20] * 6
RATS += [10, 49, 19, 46, 27, 17, 49, 47, 20, 20, 13, 48, 50] + [20] * 7
RATS += [48, 19, 19, 19, 22, 46, 49, 20, 20, 23, 19, 22, 20, 20, 20, 52, 47, 46, 24]


def rats(alpha: np.ndarray, beta: np.ndarray, tumours: list[int], total: list[int]) -> np.ndarray:
    """Log-likelihood of all groups at many (alpha, beta)."""
    k, n = np.array(tumours, float), np.array(total, float)
    p, rho = alpha / (alpha + beta), 1 / (alpha + beta + 1)
    counts = BetaBinomialCounts(n, k, np.broadcast_to(rho[..., None], (*rho.shape, n.size)))
    return counts.log_likelihood(np.broadcast_to(p[..., None], (*p.shape, n.size)))


def test_maximum_likelihood_of_the_rat_tumours() -> None:
    # Reference: (2.3048, 14.0797), printed in the vignette of the R package BayesGOF.  scipy.stats.betabinom has its maximum at
    # (2.30478, 14.07981), so that the fifth digit of the printed values is that of their search: they are good to 1e-5.
    assert len(TUMOURS) == len(RATS) == 70

    def cost(log_parameters: np.ndarray) -> float:
        alpha, beta = np.exp(log_parameters)
        return -float(rats(np.array(alpha), np.array(beta), TUMOURS, RATS))

    found = minimize(cost, np.log([1.0, 10.0]), method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-11})
    assert np.exp(found.x) == pytest.approx([2.3048, 14.0797], rel=1e-5)
    alpha, beta = np.exp(found.x)
    assert -found.fun == pytest.approx(stats.betabinom.logpmf(TUMOURS, RATS, alpha, beta).sum(), rel=1e-12)


def test_posterior_means_of_the_rat_tumours() -> None:
    # Reference: 2.4 and 14.3 in Bayesian Data Analysis, section 5.3 (from memory); 2.40 and 14.32 by quadrature.
    log_odds, log_total = np.meshgrid(np.linspace(-2.5, -1.0, 121), np.linspace(0.5, 5.0, 161))
    total, p = np.exp(log_total), 1 / (1 + np.exp(-log_odds))
    alpha, beta = total * p, total * (1 - p)
    # hyperprior (alpha + beta)^(-5/2), and alpha beta for the change of variables
    log_density = np.log(alpha * beta) - 2.5 * np.log(total) + rats(alpha, beta, [*TUMOURS, 4], [*RATS, 14])
    weight = np.exp(log_density - log_density.max())
    means = [float((weight * v).sum() / weight.sum()) for v in (alpha, beta)]
    assert means == pytest.approx([2.40, 14.32], abs=0.01)


@pytest.mark.parametrize("rho", [1e-3, 0.05, 0.5, 0.97])
@pytest.mark.parametrize("p", [1e-5, 0.13, 0.5, 0.999])
@pytest.mark.parametrize("n", [1, 17, 400])
def test_probabilities_are_those_of_scipy(rho: float, p: float, n: int) -> None:
    # Reference: scipy.stats.betabinom.
    k = np.arange(n + 1.0)
    reference = stats.betabinom.logpmf(k, n, p * (1 - rho) / rho, (1 - p) * (1 - rho) / rho)
    ours = [
        float(BetaBinomialCounts(np.array([float(n)]), np.array([x]), np.array([rho])).log_likelihood(np.array([p]))) for x in k
    ]
    # scipy subtracts logarithms of gamma functions of size up to (1 / rho) log(1 / rho)
    assert ours == pytest.approx(reference, rel=1e-12, abs=1e-11 / rho)
