"""The posterior: likelihood times prior, the same for one vector or many, finite or minus infinity but never anything else."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad

from hurstfit.posterior import Posterior
from hurstfit.problem import load_problem

FREE = {
    "clock": {"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [9.0, 16.0]}},
    "selection": {
        "default": {
            "completeness_ratio": {"lognormal": [0.95, 0.05]},
            "missed_fraction": {"mean": 0.05, "sd": 0.02},
            "contamination": {"validation": [4, 200]},
        }
    },
}


@pytest.fixture
def free(case) -> Posterior:
    """Give the posterior of the small case with everything free: 3 + 2 x 3 parameters."""
    return load_problem(case.config(**FREE)).posterior


def test_free_parameters_come_in_a_fixed_order(free) -> None:
    terms = [f"{term}[{study}]" for study in "AB" for term in ("completeness_ratio", "missed_fraction", "contamination")]
    assert free.names == ("H", "step", "z_start", *(name.replace("[", "[Larkspur-") for name in terms))


def test_a_study_whose_bins_are_all_left_out_has_no_parameters(case) -> None:
    case.bins("Larkspur-A,0.5,1.0,10.0,11.0,900,122,true", "Larkspur-B,0.5,1.0,10.0,11.0,900,122,false")
    assert not any("Larkspur-B" in name for name in load_problem(case.config(**FREE)).posterior.names)


def test_the_likelihood_is_the_binomial_of_every_bin(free) -> None:
    x = free.physical(np.random.default_rng(1).standard_normal((5, 9)))
    expected = []
    for vector in x:
        named = dict(zip(free.names, vector, strict=True))
        f, _ = free.prediction(*(np.array([named[k]]) for k in ("H", "step", "z_start")))
        total = 0.0
        for i, study in enumerate(free.bins.study):
            r, u, v = (named[f"{k}[{study}]"] for k in ("completeness_ratio", "missed_fraction", "contamination"))
            p = (f[0, i] * r * (1 - u) + (1 - f[0, i]) * v) / (f[0, i] * r + 1 - f[0, i])
            total += stats.binom.logpmf(free.bins.n_quiescent[i], free.bins.n_total[i], p)
        expected.append(total)
    assert free.log_likelihood(x) == pytest.approx(expected, rel=1e-11)


def test_vectors_are_independent_of_their_company(free) -> None:
    t = np.random.default_rng(2).standard_normal((40, 9))
    together = free.log_probability(t)
    assert together == pytest.approx([float(free.log_probability(one[None])[0]) for one in t], rel=1e-12)


def test_coordinates_and_parameters_are_inverses(free) -> None:
    t = np.random.default_rng(3).uniform(-5, 5, (200, 9))
    assert free.coordinates(free.physical(t)) == pytest.approx(t, abs=1e-6)


def test_draws_from_the_standard_normal_are_draws_from_the_priors(free) -> None:
    draws = free.physical(np.random.default_rng(4).standard_normal((2000, 9)))
    for i, parameter in enumerate(free.parameters):
        # nine tests, one seed: a correct program fails once in 100,000
        assert stats.kstest(draws[:, i], parameter.prior.cdf).pvalue > 1e-6, parameter.name


def test_the_prior_is_normalised_in_sampling_coordinates(free) -> None:
    t = np.random.default_rng(5).standard_normal((3, 9))
    assert free.log_prior(t) == pytest.approx(stats.multivariate_normal.logpdf(t, np.zeros(9)))


def test_changing_coordinates_keeps_the_evidence(case) -> None:
    posterior = load_problem(case.config()).posterior
    prior = posterior.exponent.prior
    offset = float(posterior.log_likelihood(np.array([[0.8]]))[0])

    def in_coordinate(t: float) -> float:
        return float(np.exp(posterior.log_probability(np.array([[t]]))[0] - offset))

    def in_h(H: float) -> float:
        return float(np.exp(posterior.log_likelihood(np.array([[H]]))[0] - offset + prior.log_pdf(H)))

    peak = float(prior.to_normal(0.8))
    over_t = quad(in_coordinate, -8, 8, points=[peak - 0.1, peak, peak + 0.1], epsrel=1e-9, limit=200)[0]
    over_h = quad(in_h, prior.lo, prior.hi, points=[0.7, 0.8, 0.9], epsrel=1e-9, limit=200)[0]
    assert over_t == pytest.approx(over_h, rel=1e-7)


@pytest.mark.parametrize("scale", [1.0, 6.0, 40.0, 1e3, 1e9])
def test_far_out_proposals_are_numbers_or_minus_infinity(free, scale: float) -> None:
    t = scale * np.random.default_rng(6).standard_normal((300, 9))
    with np.errstate(all="raise", under="ignore"):
        found = free.log_probability(t)
    assert not np.isnan(found).any()
    assert (found < np.inf).all()
    assert np.isfinite(free.physical(t)).all()


EXTREMES = {
    "single galaxies": ["A,0.5,1.0,10.0,11.0,1,0,true", "A,1.0,1.5,10.0,11.0,1,1,true"],
    "nothing quiescent": ["A,0.5,1.0,10.0,11.0,900,0,true", "A,1.0,1.5,10.0,11.0,500,0,true"],
    "everything quiescent": ["A,0.5,1.0,10.0,11.0,900,900,true", "A,1.0,1.5,10.0,11.0,500,500,true"],
    "ten million galaxies": ["A,0.5,1.0,10.0,11.0,10000000,1400000,true"],
    "from redshift zero": ["A,0,5,10.0,11.0,900,122,true"],
    "up to the start": ["A,8,11.5,10.0,11.0,90,30,true"],
}
VARIANTS = {
    "as it is": {},
    "perfect selection": {"selection": {"default": {"completeness_ratio": 1, "missed_fraction": 0, "contamination": 0}}},
    "type I": {"walk": {"noise": "type-I"}, "exponent": {"prior": {"uniform": [0.05, 1.0]}}},
    "with mass": {"galaxies": {"min_mass": 0.1}},
    "rate": {"galaxies": {"criterion": "rate<0.2"}},
    "window": {"galaxies": {"window": 10.0}},
    "free": FREE,
}


@pytest.mark.parametrize("variant", VARIANTS)
@pytest.mark.parametrize("rows", EXTREMES)
def test_extreme_counts_and_choices_give_numbers(case, rows: str, variant: str) -> None:
    case.bins(*EXTREMES[rows])
    changes = dict(VARIANTS[variant])
    if rows == "up to the start" and variant == "free":
        changes = {**changes, "clock": {"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [12.0, 16.0]}}}
    posterior = load_problem(case.config(**changes)).posterior
    t = 2 * np.random.default_rng(7).standard_normal((200, len(posterior.parameters)))
    with np.errstate(all="raise", under="ignore"):
        found = posterior.log_probability(t)
    assert not np.isnan(found).any()
    assert (found < np.inf).all()
    if variant != "perfect selection" and rows != "up to the start":
        assert np.isfinite(found).all()
