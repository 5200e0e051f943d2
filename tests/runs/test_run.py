"""A run in Python: draws, summary, and the problem that it answers."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from hurstfit.engines.convergence import assess
from hurstfit.errors import HurstfitError
from hurstfit.inference import infer
from hurstfit.runs.run import Run, open_run


@pytest.fixture
def run(small_run: Path) -> Run:
    return open_run(small_run)


def test_draws_are_all_walkers_after_the_warm_up(run: Run) -> None:
    record = run.record
    steps = record.coordinates.shape[0] - record.warmup
    assert run.draws("H").shape == (steps * record.coordinates.shape[1],)
    again = run.problem.posterior.physical(record.coordinates[record.warmup :])
    assert np.array_equal(run.draws("H"), again[..., 0].ravel())


def test_log_likelihoods_belong_to_the_draws(run: Run) -> None:
    again = run.problem.posterior.log_likelihood(run.draws("H")[:, None])
    assert run.record.log_likelihood.ravel() == pytest.approx(again, rel=1e-10, abs=1e-8)


def test_an_unknown_parameter_is_refused_with_the_nearest_one(run: Run) -> None:
    with pytest.raises(HurstfitError, match=r"no free parameter 'h'; it has H \(did you mean 'H'\?\)"):
        run.draws("h")


def test_the_summary_holds_quantiles_and_convergence(run: Run) -> None:
    summary = run.summary()
    wanted = ["name", "median", "lo68", "hi68", "lo95", "hi95", "ess_bulk", "ess_tail", "rhat", "unit", "description"]
    assert summary.colnames == wanted
    row = summary[0]
    quantiles = np.quantile(run.draws("H"), [0.5, 0.16, 0.84, 0.025, 0.975])
    assert [row[c] for c in ("median", "lo68", "hi68", "lo95", "hi95")] == pytest.approx(quantiles)
    convergence = assess(run.chains("H"))
    assert (row["rhat"], row["ess_bulk"], row["ess_tail"]) == (convergence.rhat, convergence.ess_bulk, convergence.ess_tail)
    assert summary.meta["converged"] is True


def test_the_summary_needs_neither_configuration_nor_table(run: Run) -> None:
    stripped = Run(replace(run.record, config="", measurements="", table_source="/nowhere.h5"))
    assert list(stripped.summary()["name"]) == ["H"]


def test_the_probability_of_a_large_exponent_is_a_share_of_draws(run: Run) -> None:
    prior, posterior = run.probability_above(0.7)
    assert prior == pytest.approx((1.3 - 0.7) / (1.3 - 0.05))
    assert posterior == (run.draws("H") > 0.7).mean()


def test_the_problem_is_what_was_fitted_whatever_became_of_the_files(case) -> None:
    path = case.folder / "run.h5"
    fitted = infer(case.config(engine={"max_steps": 100}), out=path)
    case.config(exponent={"prior": {"uniform": [0.5, 0.6]}})
    case.bins("Other,0.5,1.0,10.0,11.0,9,1,true")
    problem = open_run(path).problem
    assert problem.posterior.bins.studies == ("Larkspur-A", "Larkspur-B")
    assert problem.posterior.bins.rows.tolist() == [1, 2, 3, 4, 5]
    t = np.array([[0.3]])
    assert problem.posterior.log_probability(t) == fitted.problem.posterior.log_probability(t)


def test_a_table_that_has_changed_since_is_refused(run: Run) -> None:
    with pytest.raises(HurstfitError, match="has changed since"):
        _ = Run(replace(run.record, table_sha256="0" * 64)).problem


def test_thinned_draws_are_draws(run: Run) -> None:
    assert run.thinned(100).shape == (100, 1)
    assert np.isin(run.thinned(100)[:, 0], run.draws("H")).all()
    assert run.thinned(10**9).shape == (run.draws("H").size, 1)


def test_a_run_with_a_fixed_exponent_has_no_draws_of_it(case) -> None:
    run = infer(case.config(exponent={"prior": 0.8}, clock={"step": {"normal": [20.0, 2.0]}}, engine={"max_steps": 100}))
    assert run.names == ("step",)
    assert list(run.summary()["unit"]) == ["Myr"]
    for ask in (lambda: run.draws("H"), lambda: run.probability_above(0.9)):
        with pytest.raises(HurstfitError, match="no free parameter 'H'"):
            ask()
