"""What the table's own error does to H, against refits by brute force on tables drawn from its replicates."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from hurstfit.problem import Problem, load_problem
from hurstfit.table_error import TABLES, table_effect

#: Counts of this many galaxies a bin: enough for the table's error to be felt, not so many that draws hardly overlap with refits.
MANY = 1_500_000
EXPONENTS = np.linspace(0.7, 0.9, 4001)


def rows(galaxies: int) -> list[str]:
    """Five invented bins whose counted fractions are those of type II, criterion zero, at H = 0.8."""
    spans, shares = ("0.5,1.0", "1.0,1.5", "1.5,2.0", "2.0,2.5", "2.5,3.0"), (0.125263, 0.133813, 0.141773, 0.149548, 0.157021)
    return [
        f"Larkspur,{span},10.0,11.0,{galaxies},{round(share * galaxies)},true" for span, share in zip(spans, shares, strict=True)
    ]


def problem_of(case, galaxies: int, **changes) -> Problem:
    case.bins(*rows(galaxies))
    case.config(selection={"default": {"completeness_ratio": 1.0, "missed_fraction": 0.02, "contamination": 0.02}}, **changes)
    return load_problem("case.toml")


def posterior_on_grid(problem: Problem, fractions: NDArray[np.float64]) -> NDArray[np.float64]:
    """Log-likelihood on :data:`EXPONENTS` with given true fractions, (H, bins), from scipy's binomial."""
    bins = problem.posterior.bins
    # r = 1: Rogan & Gladen's apparent prevalence
    counted = fractions * (1 - 0.02) + (1 - fractions) * 0.02
    return stats.binom.logpmf(np.asarray(bins.n_quiescent), np.asarray(bins.n_total), counted).sum(axis=1)


def moments(log_density: NDArray[np.float64]) -> tuple[float, float]:
    density = np.exp(log_density - log_density.max())
    density /= density.sum()
    mean = float(density @ EXPONENTS)
    return mean, float(np.sqrt(density @ (EXPONENTS - mean) ** 2))


def exact_draws(log_density: NDArray[np.float64], size: int) -> NDArray[np.float64]:
    """Quantiles of the posterior in place of random draws, so that no Monte Carlo error enters."""
    density = np.exp(log_density - log_density.max())
    cumulative = np.cumsum(density) - density / 2
    return np.interp((np.arange(size) + 0.5) / size, cumulative / cumulative[-1], EXPONENTS)


@pytest.fixture
def problem(case) -> Problem:
    return problem_of(case, MANY)


def test_the_effect_is_that_of_refits_with_tables_drawn_from_the_replicates(problem: Problem) -> None:
    prediction, deviations = problem.posterior.prediction, problem.table.deviations(problem.definition)
    clock = np.full(EXPONENTS.size, 20.0), np.full(EXPONENTS.size, 12.0)
    base = prediction.averaged(EXPONENTS, *clock)[0]
    log_density = posterior_on_grid(problem, base)
    mean, width = moments(log_density)
    # the same tables: the normals are those that the generator gives
    normals = np.random.default_rng(991).standard_normal((TABLES // 2, deviations.coefficients.shape[0]))
    means, marginal = [], np.zeros(EXPONENTS.size)
    for z in np.concatenate([normals, -normals]):
        # a table of its own, put together before anything is averaged over a bin
        table = replace(
            prediction.surface, coefficients=prediction.surface.coefficients + np.tensordot(z, deviations.coefficients, 1)
        )
        refit = posterior_on_grid(problem, replace(prediction, surface=table).averaged(EXPONENTS, *clock)[0])
        means.append(moments(refit)[0])
        marginal += np.exp(refit - log_density.max())
    moves = float(np.std(means) / width)
    marginal_mean, marginal_width = moments(np.log(np.maximum(marginal, 1e-300)))
    # enough to be seen, and far less than the posterior is wide
    assert 0.1 < moves < 1.0
    found = table_effect(problem.posterior, deviations, exact_draws(log_density, 8000)[:, None], np.random.default_rng(991))
    # the draws are quantiles, dense but few in the tails that a displaced table asks for: a per cent or two
    assert found.moves == pytest.approx(moves, rel=0.03)
    assert found.widens == pytest.approx(marginal_width / width, rel=0.01)
    assert found.shifts == pytest.approx((marginal_mean - mean) / width, abs=0.02)
    # shifts of H and its own uncertainty add in quadrature
    assert found.widens == pytest.approx(np.hypot(1, moves), rel=0.03)


def test_the_effect_grows_as_the_root_of_the_counts(case) -> None:
    moves = []
    for galaxies in (MANY // 16, MANY // 4, MANY):
        problem = problem_of(case, galaxies)
        clock = np.full(EXPONENTS.size, 20.0), np.full(EXPONENTS.size, 12.0)
        log_density = posterior_on_grid(problem, problem.posterior.prediction.averaged(EXPONENTS, *clock)[0])
        draws = exact_draws(log_density, 4000)[:, None]
        effect = table_effect(problem.posterior, problem.table.deviations(problem.definition), draws, np.random.default_rng(992))
        moves.append(effect.moves)
    # the width goes as one over the root of the counts, the table's error does not know of them
    assert moves[1] / moves[0] == pytest.approx(2, rel=0.05)
    assert moves[2] / moves[1] == pytest.approx(2, rel=0.05)


def test_neighbouring_bins_share_their_error(problem: Problem) -> None:
    deviations = problem.table.deviations(problem.definition)
    clock = np.array([20.0]), np.array([12.0])
    d = np.array(
        [
            replace(problem.posterior.prediction, surface=replace(deviations, coefficients=c)).averaged(np.array([0.8]), *clock)[
                0
            ][0]
            for c in deviations.coefficients
        ]
    )
    covariance = d.T @ d
    sd = np.sqrt(np.diag(covariance))
    neighbours = np.diag(covariance / np.outer(sd, sd), 1)
    # bins of a few hundred steps share half of their walks' lives; each correlation is known to 1 / sqrt(15)
    assert neighbours.mean() > 1 / np.sqrt(15)


def test_for_counts_of_today_the_effect_is_negligible_with_the_table_that_ships(case) -> None:
    problem = problem_of(case, 1000)
    clock = np.full(EXPONENTS.size, 20.0), np.full(EXPONENTS.size, 12.0)
    log_density = posterior_on_grid(problem, problem.posterior.prediction.averaged(EXPONENTS, *clock)[0])
    draws = exact_draws(log_density, 2000)[:, None]
    effect = table_effect(problem.posterior, problem.table.deviations(problem.definition), draws, np.random.default_rng(993))
    assert effect.moves < 0.02
    assert abs(effect.widens - 1) < 0.001


def test_the_run_says_what_the_error_of_its_table_does(case, hurstfit_cli) -> None:
    problem_of(case, MANY, engine={"kind": "auto"})
    result = hurstfit_cli("infer", "case.toml")
    assert result.exit_code == 0, result.output
    text = " ".join(result.output.split())
    assert "table's error moves H by" in text
    assert "the fraction table's own error moves H by" in text
    assert "make a more precise table (hurstfit tabulate, with --merge)" in text
