"""Tabulated quantiles must be the quantiles of the priors, and finite wherever a sampler may go."""

from __future__ import annotations

import numpy as np
import pytest

from hurstfit.priors import Beta, LogNormal, TruncatedNormal, Uniform
from hurstfit.quantiles import FURTHEST, REACH, Quantiles

PRIORS = (
    Uniform(0.05, 1.3),
    Beta(1.0, 1.0),
    Beta(10.0, 412.0),
    TruncatedNormal(20.0, 2.0, 0.0, np.inf),
    Beta(0.5, 50.0),
    Beta(1e6, 3.0),
    LogNormal(0.9, 0.1),
    Beta(1e8, 1e8),
    Beta(0.05, 0.05),
)


@pytest.mark.parametrize("reach", [1.0, REACH, FURTHEST])
def test_values_are_the_quantiles_of_each_prior(reach: float) -> None:
    t = np.random.default_rng(3).uniform(-reach, reach, (4000, len(PRIORS)))
    exact = np.stack([prior.from_normal(t[:, i]) for i, prior in enumerate(PRIORS)], axis=-1)
    error = np.abs(Quantiles(PRIORS)(t) - exact) / [prior.sd for prior in PRIORS]
    assert error[:, :-1].max() < 1e-9
    assert error[:, -1].max() < 1e-7  # all but a step from 0 to 1


def test_nothing_far_out_is_infinite_or_outside_the_support() -> None:
    with np.errstate(all="raise", under="ignore"):
        values = Quantiles(PRIORS)(np.array([[-1e6], [-50.0], [50.0], [1e6]]) * np.ones(len(PRIORS)))
    assert np.isfinite(values).all()
    assert (values >= [prior.lo for prior in PRIORS]).all()
    assert (values <= [prior.hi for prior in PRIORS]).all()


@pytest.mark.parametrize("priors", [PRIORS, PRIORS[:1], PRIORS[1:3]])
def test_any_leading_shape_is_kept(priors: tuple) -> None:
    t = np.random.default_rng(4).standard_normal((3, 5, len(priors)))
    values = Quantiles(priors)(t)
    assert values.shape == t.shape
    assert values[2, 4] == pytest.approx(Quantiles(priors)(t[2, 4][None])[0], rel=1e-15)
