"""Effective counts: the pair behind an interval, the closest pair where there is none, and limits."""

from __future__ import annotations

import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.optimize import minimize

from hurstfit.measurements.beta_pair import beta_interval, beta_pairs, limit_pairs


@pytest.mark.parametrize("level", [0.5, 0.68, 0.95, 0.9973])
def test_skewed_intervals_give_back_the_counts_that_they_came_from(level: float) -> None:
    rng = np.random.default_rng(1)
    m = 10 ** rng.uniform(0, 6, 1000)
    x = m * rng.beta(0.5, 0.5, 1000)
    pairs = beta_pairs(*beta_interval(x, m, level), level)
    assert pairs.m == pytest.approx(m, rel=1e-6)
    # an error in the counts matters in units of their Poisson error
    assert np.abs(pairs.x - x).max() < 1e-4
    assert pairs.misfit.max() < 1e-8


@pytest.mark.parametrize(("x", "m"), [(0, 0), (0, 10), (10, 10), (5, 5), (0, 1e6), (3, 7)])
def test_counts_at_the_edge_are_found_too(x: float, m: float) -> None:
    pairs = beta_pairs(*beta_interval(x, m, 0.68), 0.68)
    assert pairs.x[0] == pytest.approx(x, abs=1e-5 * (1 + x))
    assert pairs.m[0] == pytest.approx(m, rel=1e-6, abs=1e-5)


@settings(deadline=None, max_examples=60)
@given(st.floats(-0.2, 0.99), st.floats(0.001, 1.0), st.sampled_from([0.5, 0.68, 0.95]))
def test_every_interval_has_a_pair_within_bounds(lo: float, width: float, level: float) -> None:
    pairs = beta_pairs(lo, min(lo + width, 1.2), level)
    assert 0 <= pairs.x[0] <= pairs.m[0] < np.inf
    assert 0 <= pairs.lo[0] < pairs.hi[0] <= 1
    assert pairs.misfit[0] >= 0


def test_where_no_pair_fits_none_is_closer() -> None:
    # Reference: a direct search over all pairs, by scipy's Nelder-Mead from three starts.
    for lo, hi in [(-0.01, 0.05), (0.0, 0.04), (0.01, 0.3), (0.9, 1.0), (0.05, 0.95), (0.001, 0.6), (0.5, 0.999)]:
        pairs = beta_pairs(lo, hi, 0.68)

        def cost(v: np.ndarray, lo: float = lo, hi: float = hi) -> float:
            # so close to 1 that it is 1 to rounding, scipy's quantiles lose their digits
            a, b = 1 + np.round(np.abs(v), 9)
            return (stats.beta.ppf(0.16, a, b) - lo) ** 2 + (stats.beta.ppf(0.84, a, b) - hi) ** 2

        ours = cost(np.array([pairs.x[0], pairs.m[0] - pairs.x[0]]))
        starts = ([0.0, 0.0], [1.0, 20.0], [20.0, 1.0])
        best = min(minimize(cost, start, method="Nelder-Mead", options={"fatol": 1e-14}).fun for start in starts)
        assert ours <= best + 1e-9


def test_a_wider_interval_is_worth_fewer_galaxies() -> None:
    half = np.linspace(0.01, 0.12, 40)
    assert (np.diff(beta_pairs(0.2 - half, 0.2 + half, 0.68).m) < 0).all()


@given(st.floats(0.01, 0.9), st.floats(0.02, 0.5), st.sampled_from([0.68, 0.9]))
def test_swapping_quiescent_and_star_forming_mirrors_the_pair(lo: float, width: float, level: float) -> None:
    hi = min(lo + width, 0.99)
    one, other = beta_pairs(lo, hi, level), beta_pairs(1 - hi, 1 - lo, level)
    assert other.m == pytest.approx(one.m, rel=1e-5, abs=1e-5)
    assert other.x == pytest.approx(one.m - one.x, rel=1e-5, abs=1e-5)


def test_a_thousand_different_intervals_take_less_than_a_second() -> None:
    rng = np.random.default_rng(2)
    lo = rng.uniform(0, 0.9, 1000)
    start = time.process_time()
    beta_pairs(lo, lo + (1 - lo) * rng.uniform(0.01, 1, 1000), 0.68)
    assert time.process_time() - start < 1.0  # about 0.1 s


@pytest.mark.parametrize("confidence", [0.68, 0.9, 0.95, 0.9973])
@pytest.mark.parametrize("limit", [1e-4, 0.03, 0.3, 0.68])
def test_a_limit_is_the_quantile_of_its_pair(limit: float, confidence: float) -> None:
    x, m = limit_pairs(limit, confidence, True)
    assert x == 0
    assert stats.beta.ppf(confidence, 1, m + 1) == pytest.approx(limit, rel=1e-12)
    x, m = limit_pairs(1 - limit, confidence, False)
    assert x == m
    assert stats.beta.sf(1 - limit, m + 1, 1) == pytest.approx(confidence, rel=1e-9)


def test_a_limit_that_a_flat_prior_has_already_carries_nothing_and_a_weaker_one_less() -> None:
    assert limit_pairs(0.9, 0.9, True)[1] == 0
    assert limit_pairs(0.95, 0.9, True)[1] < 0
    assert limit_pairs(0.04, 0.95, False)[1] < 0


def test_an_empty_interval_is_a_mistake_of_the_caller() -> None:
    with pytest.raises(ValueError, match="lo < hi"):
        beta_pairs(0.2, 0.2, 0.68)
