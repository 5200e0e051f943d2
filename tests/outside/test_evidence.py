"""The evidence against closed forms and against the quadrature and the binomial distribution of scipy."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

from hurstfit.engines.conditionals import draw_conditionals
from hurstfit.engines.quadrature import integrate
from hurstfit.posterior import Posterior
from hurstfit.problem import load_problem

PERFECT = {"completeness_ratio": 1.0, "missed_fraction": 0.0, "contamination": 0.0}


@pytest.mark.parametrize(("n", "k"), [(1, 0), (5, 2), (60, 0), (60, 60), (900, 122), (200_000, 30_000)])
def test_a_free_proportion_under_a_flat_prior_has_evidence_one_over_n_plus_one(case, n: int, k: int) -> None:
    # conjugate Beta and binomial: where hardly a quiescent galaxy is found at all, the counted fraction is the contamination
    case.bins(f"A,0.5,1.0,10.0,11.0,{n},{k},true")
    terms = {"completeness_ratio": 1e-12, "missed_fraction": 0.0, "contamination": {"uniform": [0.0, 1.0]}}
    posterior = load_problem(case.config(selection={"default": terms})).posterior
    marginal = integrate(posterior)
    assert marginal.log_evidence == pytest.approx(-np.log(n + 1), abs=max(3 * marginal.log_evidence_error, 1e-3))
    draws, _ = draw_conditionals(posterior, marginal, 4000, np.random.default_rng(1))
    v = posterior.physical(draws)[:, posterior.names.index("contamination[A]")]
    # one test, one seed: a correct program fails once in 10,000
    assert stats.kstest(v, stats.beta(k + 1, n - k + 1).cdf).pvalue > 1e-4
    h = posterior.physical(draws)[:, 0]
    assert stats.kstest(h, posterior.exponent.prior.cdf).pvalue > 1e-4


def by_scipy(posterior: Posterior, points: list[float]) -> float:
    """Integrate prior density times binomial likelihood over H in its own units."""
    prior, bins = posterior.exponent.prior, posterior.bins

    def log_integrand(H: float | np.ndarray) -> np.ndarray:
        H = np.atleast_1d(H)
        step, z_start = (np.full(H.size, q.prior.mean) for q in (posterior.step, posterior.z_start))
        p = posterior.prediction(H, step, z_start)[0]
        return stats.binom.logpmf(bins.n_quiescent, bins.n_total, p).sum(axis=1) + prior.log_pdf(H)

    top = log_integrand(np.linspace(prior.lo, prior.hi, 20_001)).max()
    pieces = np.unique([prior.lo, *points, prior.hi])
    total = sum(
        quad(lambda H: float(np.exp(log_integrand(H)[0] - top)), a, b, epsrel=1e-7, epsabs=0, limit=200)[0]
        for a, b in pairwise(pieces)
    )
    return float(np.log(total) + top)


ALONE = {
    "moderate": ((900, 122), {}),
    "five galaxies": ((5, 1), {}),
    "none quiescent": ((400, 0), {}),
    "all quiescent": ((40, 40), {}),
    "piled up at the edge": ((500, 200), {}),
    "200,000 galaxies": ((200_000, 29_000), {}),
    "ten million galaxies": ((10_000_000, 1_450_000), {}),
    "normal prior": ((900, 122), {"exponent": {"prior": {"normal": [0.7, 0.1]}}}),
    "hardly any prior": ((900, 122), {"exponent": {"prior": {"normal": [0.8, 1e-5]}}}),
}


@pytest.mark.parametrize("name", ALONE)
def test_h_alone_matches_quad_over_the_binomial(case, name: str) -> None:
    (n, k), changes = ALONE[name]
    case.bins(f"A,0.5,1.0,10.0,11.0,{n},{k},true")
    posterior = load_problem(case.config(selection={"default": PERFECT}, **changes)).posterior
    marginal = integrate(posterior)
    centre = posterior.exponent.prior.from_normal(marginal.quantile(np.array([1e-9, 1e-4, 0.5, 1 - 1e-4, 1 - 1e-9])))
    assert marginal.log_evidence == pytest.approx(by_scipy(posterior, list(centre)), abs=1e-3)


@pytest.mark.parametrize("n", [600, 20_000, 2_000_000])
def test_two_modes_are_both_found_and_weighed(case, n: int) -> None:
    # type I, galaxies above a tenth of the mean mass: the fraction rises and falls with H (0.059, 0.074, 0.068 at H = 0.7, 0.8,
    # 0.9 after 600 steps), so that one count has two explanations
    case.bins(f"A,0.5,0.52,10.0,11.0,{n},{round(0.066 * n)},true")
    posterior = load_problem(
        case.config(
            walk={"noise": "type-I"},
            galaxies={"min_mass": 0.1},
            selection={"default": PERFECT},
            exponent={"prior": {"uniform": [0.5, 0.995]}},
        )
    ).posterior
    marginal = integrate(posterior)
    prior = posterior.exponent.prior
    H = np.linspace(0.5, 0.995, 200_001)
    f = posterior.prediction(H, np.full(H.size, 20.0), np.full(H.size, 12.0))[0][:, 0]
    log_like = stats.binom.logpmf(round(0.066 * n), n, f)
    density = np.exp(log_like - log_like.max())
    valley = H[f.argmax()]
    assert 0.7 < valley < 0.9
    expected = np.trapezoid(density * (valley > H), H) / np.trapezoid(density, H)
    probability = np.linspace(0, 1, 100_001)
    found = np.mean(prior.from_normal(marginal.quantile(probability)) < valley)
    assert 0.2 < expected < 0.8
    assert found == pytest.approx(expected, abs=2e-3)
    evidence = np.log(np.trapezoid(density, H) / 0.495) + log_like.max()
    assert marginal.log_evidence == pytest.approx(evidence, abs=1e-3)
