"""A Beta prior that is cut to the range of its quantity."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from hurstfit.errors import HurstfitError
from hurstfit.prior_entries import parse_prior
from hurstfit.priors import Beta, TruncatedBeta

CASES = [(2.0, 2.0, 0.05, 1.0), (0.5, 0.5, 0.05, 0.9), (30.0, 3.0, 0.05, 0.6), (3.0, 40.0, 0.4, 1.0), (1.0, 1.0, 0.2, 0.8)]


@pytest.mark.parametrize(("a", "b", "lo", "hi"), CASES)
def test_it_is_scipys_beta_between_its_limits(a: float, b: float, lo: float, hi: float) -> None:
    # reference: scipy.stats.beta, conditioned on the limits
    prior, whole = TruncatedBeta(a, b, lo, hi), stats.beta(a, b)
    mass = whole.cdf(hi) - whole.cdf(lo)
    x = np.linspace(lo, hi, 41)[1:-1]
    assert np.exp(prior.log_pdf(x)) == pytest.approx(whole.pdf(x) / mass, rel=1e-8)
    assert prior.cdf(x) == pytest.approx((whole.cdf(x) - whole.cdf(lo)) / mass, rel=1e-8)
    mean = integrate.quad(lambda v: v * whole.pdf(v), lo, hi)[0] / mass
    second = integrate.quad(lambda v: v**2 * whole.pdf(v), lo, hi)[0] / mass
    assert prior.mean == pytest.approx(mean, rel=1e-7)
    assert prior.sd == pytest.approx(np.sqrt(second - mean**2), rel=1e-5)
    assert prior.log_pdf(np.array([lo - 1e-3, min(hi + 1e-3, 2.0)]))[0] == -np.inf


@pytest.mark.parametrize(("a", "b", "lo", "hi"), CASES)
def test_normal_coordinates_go_there_and_back(a: float, b: float, lo: float, hi: float) -> None:
    prior = TruncatedBeta(a, b, lo, hi)
    t = np.linspace(-5, 5, 41)
    x = prior.from_normal(t)
    assert np.all((x >= lo) & (x <= hi))
    assert np.all(np.diff(x) > 0)
    assert prior.to_normal(x) == pytest.approx(t, abs=1e-5)


def test_a_beta_is_cut_only_where_its_quantity_is() -> None:
    assert parse_prior({"beta": [2, 2]}, where="key", lo=0.0, hi=1.0) == Beta(2.0, 2.0)
    assert parse_prior({"beta": [2, 2]}, where="key", lo=0.05, hi=1.3) == TruncatedBeta(2.0, 2.0, 0.05, 1.0)


def test_a_beta_outside_its_quantity_is_refused() -> None:
    with pytest.raises(HurstfitError, match=r"^key: beta = \[1e\+06, 1\] has next to no probability in"):
        parse_prior({"beta": [1e6, 1]}, where="key", lo=0.05, hi=0.5)


def test_h_may_have_a_beta_prior(case) -> None:
    from hurstfit.problem import load_problem

    problem = load_problem(case.config(exponent={"prior": {"beta": [4, 2]}}))
    assert "Beta(4, 2), truncated to 0.05..1" in problem.posterior.exponent.prior.describe()
