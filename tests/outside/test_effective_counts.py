"""Effective counts against published intervals of a proportion and against astropy's."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.stats import binom_conf_interval

from hurstfit.measurements.beta_pair import beta_interval, beta_pairs


@pytest.mark.parametrize("level", [0.68, 0.6827, 0.9, 0.95])
@pytest.mark.parametrize("n", [2, 5, 40, 3000])
def test_beta_quantiles_are_those_of_the_flat_prior(n: int, level: float) -> None:
    # Reference: astropy.stats.binom_conf_interval, interval "flat" (Cameron 2011, PASA 28, 128).
    # Where none or all are counted, astropy moves one end to 0 or 1.
    k = np.unique(np.linspace(0, n, 11).round())
    k = k[(k > 0) & (k < n)]
    reference = binom_conf_interval(k, n, level, interval="flat")
    assert np.array(beta_interval(k, float(n), level)) == pytest.approx(np.asarray(reference), rel=1e-10)


def test_the_recipe_of_cameron() -> None:
    # Reference: Cameron (2011): quantiles of Beta(k + 1, n - k + 1); for none of five this is F(x) = 1 - (1 - x)^6.
    lo, hi = beta_interval(0.0, 5.0, 0.683)
    assert (1 - lo) ** 6 == pytest.approx(1 - 0.1585, rel=1e-12)
    assert (1 - hi) ** 6 == pytest.approx(0.1585, rel=1e-12)


@pytest.mark.parametrize("n", [3, 25, 700])
def test_intervals_made_by_astropy_give_back_their_counts(n: int) -> None:
    # Reference: as above; intervals near none or all are as skewed as they get.
    k = np.arange(1.0, n)[:: max(1, n // 25)]
    pairs = beta_pairs(*binom_conf_interval(k, n, 0.68, interval="flat"), 0.68)
    assert pairs.m == pytest.approx(np.full(k.size, n), rel=1e-6)
    assert pairs.x == pytest.approx(k, rel=1e-6, abs=1e-5)
