"""The quadrature engine: right where a dense sum can say so, settled or honest about it, repeatable."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.special import logsumexp

from hurstfit.engines import conditionals
from hurstfit.engines.conditionals import draw_conditionals
from hurstfit.engines.joint import JointSettings, sample_joint
from hurstfit.engines.quadrature import Marginal, MarginalLikelihood, NotSettledError, integrate
from hurstfit.posterior import Posterior
from hurstfit.problem import load_problem

NUISANCE = {
    "completeness_ratio": {"lognormal": [0.95, 0.05]},
    "missed_fraction": {"mean": 0.06, "sd": 0.02},
    "contamination": {"validation": [8, 400]},
}
FIXED = {"completeness_ratio": 0.95, "missed_fraction": 0.05, "contamination": 0.02}
STEP, START = {"normal": [20.0, 2.0]}, {"uniform": [9.0, 16.0]}
FREE = {"selection": {"default": NUISANCE}, "clock": {"step": STEP, "z_start": START}}
#: Problems of at most four parameters, for dense sums.
SMALL = {
    "step": {"clock": {"step": STEP}},
    "start": {"clock": {"z_start": START}},
    "step and start": {"clock": {"step": STEP, "z_start": START}},
    "wide step": {"clock": {"step": {"lognormal": [40.0, 0.3]}}},
    "contamination": {"selection": {"default": {**FIXED, "contamination": NUISANCE["contamination"]}}},
    "flat contamination": {"selection": {"default": {**FIXED, "contamination": {"uniform": [0.0, 1.0]}}}},
    "step and missed fraction": {
        "clock": {"step": STEP},
        "selection": {"default": {**FIXED, "missed_fraction": {"beta": [2.0, 8.0]}}},
    },
}


def posterior_of(case, *rows: str, **changes) -> Posterior:
    if rows:
        case.bins(*rows)
    return load_problem(case.config(**changes)).posterior


def dense(posterior: Posterior, h: np.ndarray, reach: float = 8.0) -> np.ndarray:
    """Marginal log-likelihood of H by an even grid over everything else, which is exact to rounding for smooth functions."""
    rest = len(posterior.parameters) - 1
    axis = np.linspace(-reach, reach, {1: 2001, 2: 101}[rest])
    others = np.stack(np.meshgrid(*[axis] * rest, indexing="ij"), axis=-1).reshape(-1, rest)
    found = []
    for x in h:
        t = np.column_stack([np.full(others.shape[0], x), others])
        log_prior_h = -0.5 * x**2 - 0.5 * np.log(2 * np.pi)
        found.append(logsumexp(posterior.log_probability(t)) + rest * np.log(axis[1] - axis[0]) - log_prior_h)
    return np.array(found)


@pytest.mark.parametrize("name", SMALL)
@pytest.mark.parametrize("rows", [(60, 9), (60, 0), (600, 80)], ids=["60", "zero count", "600"])
def test_the_marginal_of_h_matches_a_dense_sum(case, name: str, rows: tuple[int, int]) -> None:
    n, k = rows
    posterior = posterior_of(case, f"A,0.5,1.0,10.0,11.0,{n},{k},true", f"A,1.0,2.0,10.0,11.0,{n},{k},true", **SMALL[name])
    marginal = integrate(posterior)
    bulk = np.flatnonzero(marginal.log_density > marginal.log_density.max() - 6.0)[::3]
    h = marginal.nodes[bulk]
    ours = marginal.log_density[bulk] + marginal.log_evidence + 0.5 * h**2 + 0.5 * np.log(2 * np.pi)
    # the accuracy that is promised: 0.01 relative over the bulk, and the evidence within three of its errors
    difference = ours - dense(posterior, h)
    assert np.ptp(difference) / 2 < 0.01
    assert np.ptp(difference) / 2 < 2 * marginal.likelihood_error + 1e-4
    assert np.abs(difference.mean()) < 3 * marginal.log_evidence_error + 1e-3


def test_the_log_density_is_normalised_and_its_quantiles_invert_it(case) -> None:
    marginal = integrate(posterior_of(case, **FREE))
    fine = np.linspace(marginal.nodes[0], marginal.nodes[-1], 20_001)
    from scipy.interpolate import CubicSpline

    density = np.exp(CubicSpline(marginal.nodes, marginal.log_density)(fine))
    assert np.trapezoid(density, fine) == pytest.approx(1.0, abs=1e-4)
    quantiles = marginal.quantile(np.array([0.025, 0.5, 0.975]))
    below = [np.trapezoid(density * (fine < q), fine) for q in quantiles]
    assert below == pytest.approx([0.025, 0.5, 0.975], abs=1e-3)


HARD = {
    "one galaxy": ((1,), {}),
    "five galaxies": ((5,), {}),
    "200,000 galaxies": ((200_000,), {}),
    "ten million galaxies": ((10_000_000,), {}),
    "three bins of 200,000": ((200_000, 200_000, 200_000), {}),
}


@pytest.mark.parametrize("name", HARD)
def test_the_accuracy_that_is_claimed_holds_against_more_nodes(case, name: str) -> None:
    sizes, _ = HARD[name]
    spans = ("0.5,1.0", "1.0,1.5", "1.5,2.5")
    rows = [f"A,{span},10.0,11.0,{n},{round(0.15 * n)},true" for n, span in zip(sizes, spans, strict=False)]
    posterior = posterior_of(case, *rows, selection={"default": NUISANCE})
    marginal = integrate(posterior)
    again = MarginalLikelihood(posterior)(marginal.nodes, marginal.peaks, (10, 1), bent=True)
    finer = again - 0.5 * marginal.nodes**2 - 0.5 * np.log(2 * np.pi) - marginal.log_evidence
    bulk = marginal.log_density > marginal.log_density.max() - 6.0
    assert np.ptp((finer - marginal.log_density)[bulk]) / 2 < 0.01


@pytest.mark.parametrize("seed", range(4))
def test_the_evidence_matches_importance_sampling_on_random_problems(case, seed: int) -> None:
    rng = np.random.default_rng(100 + seed)
    rows = []
    for study in "AB":
        for lo, hi in ((0.5, 1.0), (1.0, 2.0)):
            n = int(rng.integers(20, 1500))
            rows.append(f"{study},{lo},{hi},10.0,11.0,{n},{rng.binomial(n, rng.uniform(0.1, 0.25))},true")
    posterior = posterior_of(case, *rows, **FREE)
    marginal = integrate(posterior)
    draws, _ = draw_conditionals(posterior, marginal, 4000, rng)
    # outside the engine: a multivariate Student t about the draws, which has wider tails than any of it
    proposal = stats.multivariate_t(draws.mean(axis=0), np.cov(draws.T), df=6, seed=rng)
    t = proposal.rvs(150_000)
    log_weight = posterior.log_probability(t) - proposal.logpdf(t)
    weight = np.exp(log_weight - log_weight.max())
    estimate = np.log(weight.mean()) + log_weight.max()
    error = weight.std() / weight.mean() / np.sqrt(weight.size)
    assert error < 0.05
    assert abs(marginal.log_evidence - estimate) < 4 * np.hypot(error, marginal.log_evidence_error)
    mean = np.average(t, weights=weight, axis=0)
    ess = weight.sum() ** 2 / (weight**2).sum()
    scatter = draws.std(axis=0) * np.sqrt(1 / ess + 1 / draws.shape[0])
    # nine parameters in four problems: 4.5 standard errors are exceeded by chance once in 4,000 suites
    assert np.abs((draws.mean(axis=0) - mean) / scatter).max() < 4.5


def test_piled_up_at_the_edge_of_the_prior(case) -> None:
    rows = ("A,0.5,1.0,10.0,11.0,500,250,true", "A,1.0,1.5,10.0,11.0,500,250,true")
    posterior = posterior_of(case, *rows, selection={"default": NUISANCE})
    marginal = integrate(posterior)
    H = posterior.exponent.prior.from_normal(marginal.quantile(np.array([0.05, 0.5])))
    assert 1.2 < H[0] < H[1] < 1.3


def test_a_degenerate_prior_gives_the_prior_back(case) -> None:
    posterior = posterior_of(case, exponent={"prior": {"normal": [0.8, 1e-7]}}, **FREE)
    marginal = integrate(posterior)
    draws, _ = draw_conditionals(posterior, marginal, 2000, np.random.default_rng(1))
    # no more than rounding moves H within a prior this narrow
    assert stats.kstest(draws[:, 0], stats.norm.cdf).pvalue > 1e-4


def ideal_acceptance(dimensions: list[int], rng: np.random.Generator) -> float:
    """Compute the acceptance of independent blocks where the target is exactly Gaussian."""
    size = 50_000
    here = [rng.standard_normal((size, d)) for d in dimensions]
    blocks = [conditionals._block(size, d, rng) for d in dimensions]
    gain = np.zeros(size)
    for z, (proposed, log_proposed) in zip(here, blocks, strict=True):
        gain += -0.5 * (proposed**2).sum(axis=1) - log_proposed
        gain -= -0.5 * (z**2).sum(axis=1) - conditionals._log_density(z)
    return float(np.minimum(1.0, np.exp(gain)).mean())


def test_draws_have_the_marginal_of_h_and_repeat_with_the_seed(case) -> None:
    posterior = posterior_of(case, **FREE)
    marginal = integrate(posterior)
    first, acceptance = draw_conditionals(posterior, marginal, 2000, np.random.default_rng(5))
    second, _ = draw_conditionals(posterior, marginal, 2000, np.random.default_rng(5))
    third, _ = draw_conditionals(posterior, marginal, 2000, np.random.default_rng(6))
    assert np.array_equal(first, second)
    assert not np.array_equal(first, third)
    # most of what would be accepted if the Gaussians fitted perfectly
    dimensions = [2, *(factor.dimension for factor in MarginalLikelihood(posterior).factors)]
    assert acceptance > 0.8 * ideal_acceptance(dimensions, np.random.default_rng(7))
    ranks = np.sort(first[:, 0])
    # one draw from each of 2000 equal slices of probability
    assert np.abs(ranks - marginal.quantile((np.arange(2000) + 0.5) / 2000)).max() < 0.5 * ranks.std()
    assert np.quantile(first[:, 0], 0.5) == pytest.approx(marginal.quantile(np.array([0.5]))[0], abs=ranks.std() / 500)
    assert np.isfinite(posterior.log_probability(first)).all()


def test_the_same_problem_gives_the_same_marginal(case) -> None:
    a, b = (integrate(posterior_of(case, **FREE)) for _ in range(2))
    assert np.array_equal(a.nodes, b.nodes)
    assert np.array_equal(a.log_density, b.log_density)


def test_a_bin_before_the_first_step_is_noticed(case) -> None:
    # walks that start at redshift 11 have not begun at 11.5: the clock's prior has an edge inside
    posterior = posterior_of(case, "A,8,11.5,10.0,11.0,90,30,true", clock={"step": STEP, "z_start": {"uniform": [11.0, 16.0]}})
    with pytest.raises(NotSettledError, match="before the first step"):
        integrate(posterior)


def test_h_that_is_fixed_is_refused(case) -> None:
    with pytest.raises(NotSettledError, match="H is fixed"):
        integrate(posterior_of(case, exponent={"prior": 0.8}, selection={"default": NUISANCE}))


def test_what_does_not_settle_is_not_given_out(case, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("hurstfit.engines.quadrature.TOLERANCE", 1e-12)
    monkeypatch.setattr("hurstfit.engines.quadrature.MOST", 7)
    with pytest.raises(NotSettledError, match="still changes by"):
        integrate(posterior_of(case, **FREE))


def test_what_is_being_done_is_reported(case) -> None:
    said: list[str] = []
    assert isinstance(integrate(posterior_of(case), said.append), Marginal)
    assert said[0] == "looking for modes"
    assert any("integrating with" in words for words in said)


@pytest.mark.heavy
@pytest.mark.parametrize("name", ["everything free", "ten million galaxies"])
def test_draws_agree_with_a_long_joint_run(case, name: str) -> None:
    from hurstfit.engines.crosscheck import LIMIT, compare_draws

    rows = () if name == "everything free" else ("A,0.5,1.0,10.0,11.0,200000,30000,true",)
    posterior = posterior_of(case, *rows, **(FREE if not rows else {"selection": {"default": NUISANCE}}))
    draws, _ = draw_conditionals(posterior, integrate(posterior), 20_000, np.random.default_rng(1))
    chain = sample_joint(posterior, JointSettings(seed=3, target_ess=10_000.0, max_steps=400_000))
    assert chain.converged
    ours = posterior.physical(draws).reshape(5000, 4, -1)
    theirs = posterior.physical(chain.coordinates[chain.warmup :])
    # walkers of an ensemble are not quite independent chains: over six seeds of the demo its medians scattered 1.27 times as
    # much as
    # their standard errors say, which half as much again covers
    assert [c.name for c in compare_draws(posterior.names, ours, theirs) if np.abs(c.z).max() > 1.5 * LIMIT] == []
