"""Which engine is used, and what is said about it."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from hurstfit.engines.choice import run_engine
from hurstfit.engines.joint import JointSettings
from hurstfit.engines.quadrature import MOST_BINS
from hurstfit.errors import HurstfitError
from hurstfit.problem import load_problem

QUICK = JointSettings(seed=3, target_ess=200.0, max_rhat=1.1, max_steps=3000)
NUISANCE = {"contamination": {"validation": [8, 400]}}


def test_auto_takes_the_quadrature_and_says_why(case) -> None:
    posterior = load_problem(case.config(selection={"default": NUISANCE})).posterior
    chain = run_engine(posterior, "auto", QUICK)
    assert chain.engine == "quadrature"
    assert chain.converged
    assert "exact" in chain.chosen
    assert "exact to" in chain.stopped
    assert np.isfinite(chain.log_evidence)
    assert chain.log_evidence_error > 0
    assert chain.coordinates.shape[0] * chain.coordinates.shape[1] >= 4000
    flat = chain.coordinates.reshape(-1, len(posterior.parameters))
    assert chain.log_probability.reshape(-1) == pytest.approx(posterior.log_probability(flat))


def test_the_same_seed_gives_the_same_draws(case) -> None:
    posterior = load_problem(case.config(selection={"default": NUISANCE})).posterior
    a, b, c = (run_engine(posterior, "auto", JointSettings(seed=seed)) for seed in (3, 3, 4))
    assert np.array_equal(a.coordinates, b.coordinates)
    assert not np.array_equal(a.coordinates, c.coordinates)


def test_h_fixed_falls_back_to_the_ensemble_and_says_why(case) -> None:
    posterior = load_problem(case.config(exponent={"prior": 0.8}, selection={"default": NUISANCE})).posterior
    chain = run_engine(posterior, "auto", QUICK)
    assert chain.engine == "joint"
    assert "H is fixed" in chain.chosen


def test_the_quadrature_by_name_refuses_in_one_sentence(case) -> None:
    posterior = load_problem(case.config(exponent={"prior": 0.8}, selection={"default": NUISANCE})).posterior
    with pytest.raises(HurstfitError) as error:
        run_engine(posterior, "quadrature", QUICK)
    assert "H is fixed" in str(error.value)
    assert "[engine]" in str(error.value)
    assert "\n" not in str(error.value)


def test_joint_is_joint(case) -> None:
    posterior = load_problem(case.config(selection={"default": NUISANCE})).posterior
    assert run_engine(posterior, "joint", QUICK).engine == "joint"


def test_proposals_that_fit_badly_are_not_used(case, monkeypatch: pytest.MonkeyPatch) -> None:
    posterior = load_problem(case.config(selection={"default": NUISANCE})).posterior
    coordinates = np.zeros((4000, len(posterior.parameters)))
    monkeypatch.setattr("hurstfit.engines.choice.draw_conditionals", lambda *_: (coordinates, 0.05))
    chain = run_engine(posterior, "auto", QUICK)
    assert chain.engine == "joint"
    assert "5%" in chain.chosen


def test_more_bins_than_the_quadrature_is_made_for_go_to_the_ensemble(case) -> None:
    edges = np.round(np.linspace(0.2, 4.2, MOST_BINS + 2), 4)
    case.bins(*(f"A,{lo},{hi},10,11,50,6,true" for lo, hi in pairwise(edges)))
    posterior = load_problem(case.config()).posterior
    chain = run_engine(posterior, "auto", JointSettings(seed=3, target_ess=200.0, max_rhat=1.1, max_steps=600))
    assert chain.engine == "joint"
    assert f"{MOST_BINS + 1} bins are more than the {MOST_BINS}" in chain.chosen
