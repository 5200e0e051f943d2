"""The joint engine: right where the answer is known, repeatable, and honest about not having converged."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import cumulative_trapezoid

from hurstfit.engines.chain import Chain
from hurstfit.engines.convergence import ess_quantile, mcse_quantile
from hurstfit.engines.joint import INTERRUPTED, JointSettings, sample_joint
from hurstfit.errors import HurstfitError
from hurstfit.posterior import Posterior
from hurstfit.problem import load_problem

FAST = JointSettings(seed=1, target_ess=1000.0, max_rhat=1.02)
CLOCK = {"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [9.0, 16.0]}}


def kept(posterior: Posterior, chain: Chain) -> np.ndarray:
    return posterior.physical(chain.coordinates[chain.warmup :])


def exact_quantiles(posterior: Posterior, probabilities: tuple[float, ...]) -> np.ndarray:
    """Quantiles of H where it is the only free parameter."""
    prior = posterior.exponent.prior
    H = np.linspace(prior.lo, prior.hi, 40_001)
    log_density = posterior.log_likelihood(H[:, None]) + prior.log_pdf(H)
    cumulative = cumulative_trapezoid(np.exp(log_density - log_density.max()), H, initial=0.0)
    return np.interp(probabilities, cumulative / cumulative[-1], H)


VARIANTS = {
    "as it is": {},
    "type I": {"walk": {"noise": "type-I"}, "exponent": {"prior": {"uniform": [0.05, 1.0]}}},
    "walks with mass": {"galaxies": {"min_mass": 0.1, "criterion": "rate<0.2"}},
    "another prior": {"exponent": {"prior": {"normal": [0.6, 0.05]}}},
}


@pytest.mark.parametrize("variant", VARIANTS)
def test_a_single_parameter_has_its_exact_posterior(case, variant: str) -> None:
    posterior = load_problem(case.config(**VARIANTS[variant])).posterior
    chain = sample_joint(posterior, FAST)
    assert chain.converged
    probabilities = (0.025, 0.16, 0.5, 0.84, 0.975)
    draws = kept(posterior, chain)[..., 0]
    exact = exact_quantiles(posterior, probabilities)
    # the share of draws below an exact quantile scatters by the binomial error of the effective draws
    for probability, value in zip(probabilities, exact, strict=True):
        error = np.sqrt(probability * (1 - probability) / ess_quantile(draws, probability))
        assert (draws <= value).mean() == pytest.approx(probability, abs=4 * error)


def test_a_nuisance_parameter_is_integrated_over(case) -> None:
    terms = {"completeness_ratio": 1.0, "missed_fraction": 0.0, "contamination": {"mean": 0.05, "sd": 0.02}}
    case.bins("A,0.5,1.0,10.0,11.0,900,130,true", "A,1.0,1.5,10.0,11.0,700,110,true")
    posterior = load_problem(case.config(selection={"default": terms})).posterior
    assert posterior.names == ("H", "contamination[A]")
    chain = sample_joint(posterior, FAST)
    # exact: a grid in the coordinates of the prior, in which the prior is the standard normal
    t = np.linspace(-5, 5, 601)
    grid = np.stack(np.meshgrid(t, t, indexing="ij"), axis=-1).reshape(-1, 2)
    density = np.exp(posterior.log_probability(grid) - chain.log_probability.max()).reshape(601, 601)
    for axis in (0, 1):
        marginal = density.sum(axis=1 - axis)
        cumulative = cumulative_trapezoid(marginal, t, initial=0.0)
        exact = np.interp(0.5, cumulative / cumulative[-1], t)
        draws = chain.coordinates[chain.warmup :, :, axis]
        assert np.median(draws) == pytest.approx(exact, abs=4 * mcse_quantile(draws, 0.5))


def test_data_that_say_nothing_leave_the_prior(case) -> None:
    case.bins("A,0.5,1.0,10.0,11.0,1,0,true")
    terms = {"completeness_ratio": 1.0, "missed_fraction": 1.0, "contamination": 0.0}
    posterior = load_problem(case.config(selection={"default": terms}, clock=CLOCK)).posterior
    chain = sample_joint(posterior, FAST)
    assert chain.converged
    for i in range(3):
        draws = chain.coordinates[chain.warmup :, :, i]
        for probability, quantile in ((0.16, -0.9944579), (0.5, 0.0), (0.84, 0.9944579)):  # of the standard normal
            error = np.sqrt(probability * (1 - probability) / ess_quantile(draws, probability))
            assert (draws <= quantile).mean() == pytest.approx(probability, abs=4 * error)


@pytest.mark.parametrize("clock", [{}, CLOCK, {"step": {"normal": [20.0, 2.0]}, "z_start": 12.0}])
def test_the_same_seed_gives_the_same_chain_and_another_seed_another(case, clock: dict) -> None:
    posterior = load_problem(case.config(clock=clock)).posterior
    settings = JointSettings(seed=5, max_steps=300)
    np.random.seed(1)  # noqa: NPY002 - the global state must not matter
    first = sample_joint(posterior, settings)
    np.random.seed(2)  # noqa: NPY002
    again = sample_joint(load_problem(case.config(clock=clock)).posterior, settings)
    other = sample_joint(posterior, JointSettings(seed=6, max_steps=300))
    assert np.array_equal(first.coordinates, again.coordinates)
    assert np.array_equal(first.log_probability, again.log_probability)
    assert np.array_equal(first.accepted, again.accepted)
    assert not np.array_equal(first.coordinates[0], other.coordinates[0])


def test_stored_log_probabilities_are_those_of_the_stored_positions(case) -> None:
    posterior = load_problem(case.config(clock=CLOCK)).posterior
    chain = sample_joint(posterior, JointSettings(max_steps=200))
    again = posterior.log_probability(chain.coordinates.reshape(-1, 3)).reshape(chain.log_probability.shape)
    assert chain.log_probability == pytest.approx(again, rel=1e-12)
    assert np.isfinite(chain.log_probability).all()


def test_the_step_limit_is_kept_and_said(case) -> None:
    posterior = load_problem(case.config(clock=CLOCK)).posterior
    chain = sample_joint(posterior, JointSettings(max_steps=120, target_ess=1e6))
    assert chain.coordinates.shape[0] * chain.thin == 120
    assert not chain.converged
    assert chain.stopped == "the step limit of 120 was reached"


def interrupt_after(calls: int):
    seen = 0

    def progress(moves: int, words: str) -> None:
        nonlocal seen
        seen += moves
        if seen >= calls:
            raise KeyboardInterrupt

    return progress


def test_an_interrupted_chain_is_kept_as_not_converged(case) -> None:
    posterior = load_problem(case.config()).posterior
    settings = JointSettings(target_ess=1e6)
    chain = sample_joint(posterior, settings, interrupt_after(700))
    assert (chain.converged, chain.stopped) == (False, INTERRUPTED)
    assert chain.coordinates.shape[0] == chain.log_probability.shape[0] == 700
    whole = sample_joint(posterior, JointSettings(target_ess=1e6, max_steps=700))
    assert np.array_equal(chain.coordinates, whole.coordinates)


def test_an_interrupt_before_there_is_a_chain_leaves_none(case) -> None:
    posterior = load_problem(case.config()).posterior
    with pytest.raises(KeyboardInterrupt):
        sample_joint(posterior, JointSettings(), interrupt_after(3))


def test_progress_counts_every_move(case) -> None:
    posterior = load_problem(case.config(clock=CLOCK)).posterior
    moves = []
    chain = sample_joint(posterior, JointSettings(max_steps=700, target_ess=1e6), lambda n, words: moves.append((n, words)))
    assert sum(n for n, _ in moves) == chain.coordinates.shape[0] * chain.thin
    assert moves[0][1] == "warming up"
    assert moves[-1][1].startswith("largest R-hat 1.")


def test_a_prior_that_the_data_exclude_is_said_to_be(case) -> None:
    # no contamination and every quiescent galaxy missed, yet some are labelled quiescent
    terms = {"completeness_ratio": 1.0, "missed_fraction": 1.0, "contamination": 0.0}
    posterior = load_problem(case.config(selection={"default": terms})).posterior
    with pytest.raises(HurstfitError, match="0 of 4096 draws from the prior are possible"):
        sample_joint(posterior, JointSettings())


@pytest.mark.parametrize("walkers", [7, 4])
def test_an_ensemble_that_cannot_move_is_a_programming_error(case, walkers: int) -> None:
    posterior = load_problem(case.config(clock=CLOCK)).posterior
    with pytest.raises(ValueError, match="even number of at least 6"):
        sample_joint(posterior, JointSettings(walkers=walkers))


EXTREMES = {
    "single galaxies": ["A,0.5,1.0,10.0,11.0,1,0,true", "A,1.0,1.5,10.0,11.0,1,1,true"],
    "nothing quiescent": ["A,0.5,1.0,10.0,11.0,900,0,true"],
    "everything quiescent": ["A,0.5,1.0,10.0,11.0,900,900,true"],
}
NUISANCE = {"completeness_ratio": 1.0, "missed_fraction": {"mean": 0.05, "sd": 0.02}, "contamination": {"mean": 0.02, "sd": 0.01}}


@pytest.mark.parametrize("rows", EXTREMES)
@pytest.mark.parametrize("fixed", [{}, {"exponent": {"prior": 0.8}}], ids=["H free", "H fixed"])
def test_extreme_counts_are_sampled_to_the_end(case, rows: str, fixed: dict) -> None:
    case.bins(*EXTREMES[rows])
    changes = {"selection": {"default": NUISANCE}, "clock": {"step": {"normal": [20.0, 2.0]}}, **fixed}
    posterior = load_problem(case.config(**changes)).posterior
    chain = sample_joint(posterior, JointSettings(target_ess=400.0, max_rhat=1.05, max_steps=10_000))
    assert chain.converged
    assert np.isfinite(chain.log_probability).all()
    assert np.isfinite(kept(posterior, chain)).all()


def test_ten_million_galaxies_in_a_bin_are_no_accident(case) -> None:
    # four parameters on a sheet a thousandth wide: too thin to converge on soon, but never a number that is none
    case.bins("A,0.5,1.0,10.0,11.0,10000000,1500000,true")
    posterior = load_problem(case.config(selection={"default": NUISANCE}, clock={"step": {"normal": [20.0, 2.0]}})).posterior
    chain = sample_joint(posterior, JointSettings(max_steps=1000))
    assert np.isfinite(chain.log_probability).all()
    p, _ = posterior.counted_fractions(kept(posterior, chain).reshape(-1, 4))
    assert np.median(p) == pytest.approx(0.15, abs=4 * np.sqrt(0.15 * 0.85 / 1e7))
