"""Convergence measures against arviz-stats, which follows the same paper.

Two differences are on purpose.  Of draws that are all equal arviz-stats says that each is independent, and of a single
chain that R-hat is not defined; here the first is nan and the second is defined, from the two halves of the chain.
"""

from __future__ import annotations

import numpy as np
import pytest
from arviz_stats.base import array_stats
from scipy.signal import lfilter

from hurstfit.engines import convergence

FloatArray = np.ndarray


def autoregressive(rng: np.random.Generator, steps: int, chains: int, phi: float) -> FloatArray:
    return lfilter([1.0], [1.0, -phi], rng.standard_normal((steps, chains)), axis=0)


def example(name: str) -> FloatArray:
    rng = np.random.default_rng(20)
    if name == "autoregressive":
        return autoregressive(rng, 1000, 4, 0.8)
    if name == "odd number of steps":
        return autoregressive(rng, 777, 5, 0.5)
    if name == "antithetic":
        return autoregressive(rng, 1000, 4, -0.9)
    if name == "heavy-tailed":
        return rng.standard_cauchy((1000, 4))
    if name == "unequal means":
        return autoregressive(rng, 500, 4, 0.3) + np.array([0.0, 0.0, 0.0, 2.0])
    if name == "unequal widths":
        return autoregressive(rng, 500, 4, 0.3) * np.array([1.0, 1.0, 1.0, 3.0])
    if name == "ties":
        return np.round(autoregressive(rng, 1000, 4, 0.8), 1)
    if name == "piled up at a bound":
        return np.minimum(autoregressive(rng, 1000, 4, 0.8), 0.5)
    if name == "hardly moved":
        return np.cumsum(rng.standard_normal((400, 3)), axis=0)
    if name == "very short":
        return rng.standard_normal((7, 2))
    raise KeyError(name)


EXAMPLES = [
    "autoregressive",
    "odd number of steps",
    "antithetic",
    "heavy-tailed",
    "unequal means",
    "unequal widths",
    "ties",
    "piled up at a bound",
    "hardly moved",
    "very short",
]
# The same sums in another order, over up to 8000 draws.
RTOL = 1e-8


@pytest.mark.parametrize("name", EXAMPLES)
def test_rhat_and_effective_sample_sizes_agree(name: str) -> None:
    draws = example(name)
    axes = {"chain_axis": 1, "draw_axis": 0}
    pairs = [
        (convergence.split_rhat(draws), array_stats.rhat(draws, method="rank", **axes)),
        (convergence.ess_bulk(draws), array_stats.ess(draws, method="bulk", **axes)),
        (convergence.ess_tail(draws), array_stats.ess(draws, method="tail", prob=0.05, **axes)),
        (convergence.ess_mean(draws), array_stats.ess(draws, method="mean", **axes)),
        (convergence.ess_quantile(draws, 0.16), array_stats.ess(draws, method="quantile", prob=0.16, **axes)),
        (convergence.ess_quantile(draws, 0.5), array_stats.ess(draws, method="median", **axes)),
        (convergence.mcse_mean(draws), array_stats.mcse(draws, method="mean", **axes)),
    ]
    for ours, reference in pairs:
        np.testing.assert_allclose(ours, float(reference), rtol=RTOL)


@pytest.mark.parametrize("prob", [0.025, 0.16, 0.5, 0.84])
@pytest.mark.parametrize("name", [name for name in EXAMPLES if name != "piled up at a bound"])
def test_the_error_of_a_quantile_agrees(name: str, prob: float) -> None:
    # arviz-stats rounds the probabilities of one standard deviation to seven digits; here the same draws are picked.
    draws = example(name)
    reference = array_stats.mcse(draws, method="quantile", prob=prob, chain_axis=1, draw_axis=0)
    np.testing.assert_allclose(convergence.mcse_quantile(draws, prob), float(reference), rtol=RTOL)


def test_all_measures_at_once_are_those_taken_one_by_one() -> None:
    draws = example("autoregressive")
    assert convergence.assess(draws) == convergence.Convergence(
        rhat=convergence.split_rhat(draws),
        ess_bulk=convergence.ess_bulk(draws),
        ess_tail=convergence.ess_tail(draws),
        tau=convergence.autocorrelation_time(draws),
    )
