"""A problem: what is fitted, what is left out, and what a reader is told beforehand."""

from __future__ import annotations

import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.fractions.store import shipped_path
from hurstfit.priors import Uniform
from hurstfit.problem import load_problem


def test_bins_outside_the_rising_regime_are_left_out_and_named(case) -> None:
    problem = load_problem(case.config())
    assert problem.used.tolist() == [True] * 5 + [False]
    assert problem.posterior.bins.n_bins == 5
    assert problem.left_out() == ["row 6 (Larkspur-B, z 0.2-0.4): the mean SFR does not rise there (rising = false)"]


def test_bins_outside_the_rising_regime_are_kept_on_demand_with_a_caution(case) -> None:
    problem = load_problem(case.config(measurements={"keep_not_rising": True}))
    assert problem.used.all()
    assert problem.left_out() == []
    assert any("1 bins outside the rising regime" in caution for caution in problem.cautions)


def test_the_exponent_may_lie_anywhere_in_the_table_unless_told_otherwise(case) -> None:
    for noise, highest in (("type-I", 1.0), ("type-II", 1.3)):
        problem = load_problem(case.config(drop=("exponent",), walk={"noise": noise}))
        assert problem.posterior.exponent.prior == Uniform(0.05, highest)


def test_a_table_of_the_users_is_found_beside_the_configuration(case) -> None:
    (case.folder / "own.h5").write_bytes(shipped_path("type-II").read_bytes())
    own = load_problem(case.config(walk={"table": "own.h5"}))
    assert own.table.digest == load_problem(case.config()).table.digest


def test_step_numbers_span_bins_and_priors(case) -> None:
    problem = load_problem(case.config(clock={"step": {"uniform": [10.0, 40.0]}, "z_start": {"uniform": [9.0, 16.0]}}))
    clock = problem.clock
    # all but a millionth of the prior at either end
    assert problem.step_numbers[0] == pytest.approx(clock.steps(3.0, 40.0, 9.0), rel=1e-4)
    assert problem.step_numbers[1] == pytest.approx(clock.steps(0.5, 10.0, 16.0), rel=1e-4)


def test_an_impossible_part_of_the_prior_is_a_caution(case) -> None:
    problem = load_problem(case.config(clock={"z_start": {"uniform": [2.5, 16.0]}}))
    assert any(caution.startswith("1 bin lies before the first step") for caution in problem.cautions)


def test_all_walks_and_unstated_selection_are_cautions(case) -> None:
    said = load_problem(case.config(selection={"default": {}})).cautions
    assert any("all walks are counted" in caution for caution in said)
    problem = load_problem(case.contents(drop=("selection",), galaxies={"min_mass": 0.1}))
    assert not any("all walks" in caution for caution in problem.cautions)
    for study in ("Larkspur-A", "Larkspur-B"):
        sentence = f"study {study}: no completeness ratio, missed fraction, contamination is stated; assumed perfect"
        assert sentence in problem.cautions


@pytest.mark.parametrize("step", [{"uniform": [1.0, 20.0]}, {"normal": [20.0, 4.0]}, 2.0])
def test_a_clock_that_leaves_the_table_is_refused(case, step: object) -> None:
    with pytest.raises(HurstfitError, match="type-II table holds up to 2048"):
        load_problem(case.config(clock={"step": step}))


def test_any_number_of_walkers_that_fills_the_dimension_will_do(case) -> None:
    load_problem(case.config(engine={"walkers": 8}))
    terms = {term: {"uniform": [0.1, 0.2]} for term in ("completeness_ratio", "missed_fraction", "contamination")}
    clock = {"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [9.0, 16.0]}}
    with pytest.raises(HurstfitError, match="found 8, allowed is an even number of at least 18 for 9 free"):
        load_problem(case.config(engine={"walkers": 8}, clock=clock, selection={"default": terms}))


def test_cosmologies_are_named_or_given(case) -> None:
    named = load_problem(case.config())
    given = load_problem(case.config(clock={"cosmology": {"H0": 70.0, "Om0": 0.3}}))
    z = np.array([0.5, 2.0])
    assert named.clock.age(z) != pytest.approx(given.clock.age(z), rel=1e-3)
