"""Convergence measures where the truth is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.special import ndtri
from scipy.stats import chi2

from hurstfit.engines.convergence import (
    assess,
    autocorrelation_time,
    ess_bulk,
    ess_mean,
    ess_quantile,
    ess_tail,
    mcse_mean,
    mcse_quantile,
    split_rhat,
)

MEASURES = [split_rhat, ess_bulk, ess_tail, ess_mean, mcse_mean, autocorrelation_time]


def autoregressive(rng: np.random.Generator, steps: int, chains: int, phi: float) -> np.ndarray:
    """Stationary AR(1) chains of unit variance; their integrated autocorrelation time is (1 + phi) / (1 - phi)."""
    noise = rng.standard_normal((steps, chains)) * np.sqrt(1.0 - phi**2)
    noise[0] /= np.sqrt(1.0 - phi**2)
    return lfilter([1.0], [1.0, -phi], noise, axis=0)


def relative_error(tau: float, draws: int) -> float:
    # Madras & Sokal (1988, J. Stat. Phys. 50, 109): var(tau) / tau^2 = 2 (2 M + 1) / N for a window of M lags; here
    # 5 tau, and ten lags at least since Geyer's sequence goes on until the noise ends it.
    return float(np.sqrt(2.0 * (2.0 * max(5.0 * tau, 10.0) + 1.0) / draws))


@pytest.mark.parametrize("phi", [-0.5, 0.0, 0.5, 0.9])
def test_the_size_for_the_mean_is_the_draws_over_the_autocorrelation_time(phi: float) -> None:
    draws = autoregressive(np.random.default_rng(31), 20000, 4, phi)
    tau = (1.0 + phi) / (1.0 - phi)
    tolerance = 4.0 * relative_error(tau, draws.size)
    assert abs(draws.size / tau / ess_mean(draws) - 1.0) < tolerance
    # Normal draws: ranks change nothing of order one.
    assert abs(draws.size / tau / ess_bulk(draws) - 1.0) < tolerance


@pytest.mark.parametrize("phi", [0.0, 0.5, 0.9])
def test_the_autocorrelation_time_is_the_known_one(phi: float) -> None:
    draws = autoregressive(np.random.default_rng(32), 20000, 4, phi)
    tau = (1.0 + phi) / (1.0 - phi)
    assert abs(autocorrelation_time(draws) / tau - 1.0) < 4.0 * relative_error(tau, draws.size)


def test_standard_errors_cover_the_truth_as_often_as_they_should() -> None:
    rng = np.random.default_rng(33)
    repeats = 400
    scores = np.empty((repeats, 3))
    for i in range(repeats):
        draws = autoregressive(rng, 1000, 4, 0.5)
        scores[i, 0] = draws.mean() / mcse_mean(draws)
        for j, prob in enumerate((0.05, 0.5), start=1):
            scores[i, j] = (np.quantile(draws, prob) - ndtri(prob)) / mcse_quantile(draws, prob)
    # Squares of standard normal scores have mean one and variance two; four standard errors.
    np.testing.assert_allclose((scores**2).mean(axis=0), 1.0, atol=4.0 * np.sqrt(2.0 / repeats))


def test_independent_draws_have_rhat_of_one_within_its_own_spread() -> None:
    steps, chains = 1000, 4
    draws = np.random.default_rng(34).standard_normal((steps, chains))
    n, m = steps // 2, 2 * chains
    # n var(means) / W is chi-square over its degrees of freedom; a chance of 1e-6 to lie beyond.
    highest = np.sqrt((n - 1) / n + chi2.isf(1e-6, m - 1) / (m - 1) / n)
    assert np.sqrt((n - 1) / n) <= split_rhat(draws) < highest < 1.01


@pytest.mark.parametrize(
    ("scale", "shift"), [([1.0, 1.0, 1.0, 1.0], [0.0, 0.0, 0.0, 1.0]), ([1.0, 1.0, 1.0, 3.0], [0.0, 0.0, 0.0, 0.0])]
)
def test_a_chain_that_differs_in_place_or_in_width_is_caught(scale: list[float], shift: list[float]) -> None:
    draws = np.random.default_rng(35).standard_normal((1000, 4))
    assert split_rhat(draws) < 1.01
    assert split_rhat(draws * scale + shift) > 1.05


def test_a_single_chain_that_drifts_is_caught() -> None:
    draws = np.random.default_rng(36).standard_normal((2000, 1))
    assert split_rhat(draws) < 1.01
    assert split_rhat(draws + np.linspace(0.0, 2.0, 2000)[:, None]) > 1.05


def test_chains_that_have_not_mixed_are_worth_few_draws() -> None:
    walks = np.cumsum(np.random.default_rng(37).standard_normal((2000, 4)), axis=0)
    result = assess(walks)
    assert result.rhat > 1.01
    assert result.ess_bulk < 100.0
    assert result.tau > 50.0


def test_the_bulk_and_the_tails_do_not_depend_on_the_unit_or_scale() -> None:
    draws = autoregressive(np.random.default_rng(38), 501, 3, 0.7)
    # Ranks are the same, so every later operation is too.
    assert ess_bulk(np.exp(draws)) == ess_bulk(draws)
    assert ess_tail(np.exp(draws)) == ess_tail(draws)


def test_the_tail_size_is_the_smaller_of_both_tails() -> None:
    rng = np.random.default_rng(39)
    # The upper tail is slow, the lower is not.
    draws = rng.standard_normal((4000, 4)) + 4.0 * (autoregressive(rng, 4000, 4, 0.99) > 1.5)
    assert ess_quantile(draws, 0.95) < 0.5 * ess_quantile(draws, 0.05)
    assert ess_tail(draws) == ess_quantile(draws, 0.95)


def test_draws_piled_up_at_a_bound_leave_the_other_tail_to_decide() -> None:
    draws = np.minimum(autoregressive(np.random.default_rng(40), 1000, 4, 0.5), 0.5)
    assert np.isnan(ess_quantile(draws, 0.95))
    assert np.isnan(mcse_quantile(draws, 0.95))
    assert ess_tail(draws) == ess_quantile(draws, 0.05)


def test_the_order_of_the_chains_does_not_matter() -> None:
    draws = autoregressive(np.random.default_rng(41), 300, 4, 0.5)
    here, there = assess(draws), assess(draws[:, ::-1])
    for name in ("rhat", "ess_bulk", "ess_tail", "tau"):
        # The same sums in another order.
        assert getattr(here, name) == pytest.approx(getattr(there, name), rel=1e-12)


@pytest.mark.parametrize("measure", MEASURES)
@pytest.mark.parametrize(
    "draws",
    [
        np.full((100, 4), 0.1),
        np.arange(12.0).reshape(3, 4),
        np.empty((0, 4)),
        np.empty((100, 0)),
        np.where(np.arange(400).reshape(100, 4) == 7, np.nan, 1.0 * np.arange(400).reshape(100, 4)),
        np.where(np.arange(400).reshape(100, 4) == 7, -np.inf, 1.0 * np.arange(400).reshape(100, 4)),
    ],
    ids=["all equal", "three steps", "no step", "no chain", "a nan", "an infinity"],
)
def test_what_is_not_defined_is_nan(measure: object, draws: np.ndarray) -> None:
    assert np.isnan(measure(draws))  # type: ignore[operator]
    assert np.isnan(mcse_quantile(draws, 0.5))
    assert all(np.isnan(value) for value in vars(assess(draws)).values())


def test_a_chain_that_is_stuck_among_others_is_caught() -> None:
    draws = np.random.default_rng(42).standard_normal((400, 4))
    draws[:, 2] = 0.1
    assert np.isnan(autocorrelation_time(draws))
    assert split_rhat(draws) > 1.01


def test_chains_that_never_move_but_differ_are_as_bad_as_can_be() -> None:
    draws = np.broadcast_to([0.1, 0.2, 0.3, 0.4], (400, 4))
    assert split_rhat(draws) > 1e6
    # One draw a half chain at the very most.
    assert ess_bulk(draws) < 8.0


@pytest.mark.parametrize("measure", [*MEASURES, assess])
def test_draws_without_chains_are_refused(measure: object) -> None:
    with pytest.raises(ValueError, match=r"shape \(n_steps, n_chains\)"):
        measure(np.arange(10.0))  # type: ignore[operator]


@pytest.mark.parametrize("prob", [0.0, 1.0, 5.0, np.nan])
def test_a_quantile_beyond_all_draws_is_refused(prob: float) -> None:
    with pytest.raises(ValueError, match="between 0 and 1"):
        ess_quantile(np.random.default_rng(43).standard_normal((100, 4)), prob)
