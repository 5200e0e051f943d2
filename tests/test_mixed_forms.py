"""Rows of every form, and impurities, in one posterior: against the formulas written out, and what must not change it."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from hurstfit.engines.study_integral import study_factors
from hurstfit.errors import HurstfitError
from hurstfit.problem import load_problem

HEADER = (
    "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,n_effective,"
    "fraction,fraction_err,fraction_lo,fraction_hi,limit,confidence,rising"
)
ROWS = (
    "A,0.5,0.8,10,10.5,812,101,,,,,,,,true",
    "A,0.8,1.0,10,10.5,100,,,0.13,,,,,,true",
    "A,1.0,1.2,10,10.5,,,,0.13,0.03,,,,,true",
    "A,1.2,1.4,10,10.5,100,,,0.13,0.06,,,,,true",
    "A,1.8,2.0,10,10.5,,,,0.13,,0.10,0.18,,,true",
    "B,1.8,2.0,10,10.5,,,,0.25,,,,upper,0.95,true",
    "B,2.0,2.2,10,10.5,,,,0.12,,,,lower,0.95,true",
    "B,2.2,2.4,10,10.5,,,31.7,0.12,,,,,,true",
)
SELECTION = {
    "default": {"completeness_ratio": {"lognormal": [0.95, 0.05]}, "missed_fraction": 0.05},
    "A": {"impurity": {"beta": [3, 57]}},
    "B": {"contamination": {"beta": [3, 57]}},
}


def test_the_likelihood_is_that_of_the_formulas(case) -> None:
    case.bins(*ROWS, header=HEADER)
    posterior = load_problem(case.config(selection=SELECTION)).posterior
    assert posterior.names == ("H", "completeness_ratio[A]", "impurity[A]", "completeness_ratio[B]", "contamination[B]")
    x, m = posterior.bins.effective.x, posterior.bins.effective.m
    vectors = np.array([[0.8, 0.9, 0.04, 1.0, 0.05], [0.6, 1.1, 0.2, 0.9, 0.01]])
    for vector, found in zip(vectors, posterior.log_likelihood(vectors), strict=True):
        H, r_a, k, r_b, v = vector
        f, _ = posterior.prediction(*(np.array([value]) for value in (H, 20.0, 12.0)))
        r = np.where(posterior.bins.study == "A", r_a, r_b)
        q, s = f[0] * r * 0.95, 1 - f[0]
        p = np.where(posterior.bins.study == "A", q / (1 - k) / (f[0] * r + s), (q + s * v) / (f[0] * r + s))
        total = stats.binom.logpmf(101, 812, p[0]) + stats.binom.logpmf(13, 100, p[1])
        for i in range(2, 8):
            # Beta(x + 1, m - x + 1) has this kernel, and a maximum of the same height as that of gamma functions for factorials
            total += stats.beta.logpdf(p[i], x[i] + 1, m[i] - x[i] + 1) - np.log(m[i] + 1)
        assert found == pytest.approx(total, rel=1e-10)


def test_a_study_integral_uses_the_same_likelihood(case) -> None:
    case.bins(*ROWS, header=HEADER)
    for counts in ({}, {"model": "beta-binomial", "rho": 0.01}):
        posterior = load_problem(case.config(selection=SELECTION, counts=counts)).posterior
        t = np.random.default_rng(1).standard_normal((20, len(posterior.names)))
        physical = posterior.physical(t)
        fraction, _ = posterior.true_fractions(physical)
        total = posterior.counts.log_coefficient - 0.5 * t[:, 0] ** 2 - 0.5 * t.shape[1] * np.log(2 * np.pi)
        for factor in study_factors(posterior):
            total = total + factor.log_kernel(fraction[:, factor.bins], t[:, None, factor.places])[:, 0]
        assert total == pytest.approx(posterior.log_probability(t), rel=1e-12)


def test_the_order_of_rows_and_studies_does_not_matter(case) -> None:
    vectors = np.linspace(0.1, 1.25, 50)[:, None]
    found = []
    for rows in (ROWS, ROWS[::-1], tuple(np.random.default_rng(2).permutation(ROWS))):
        case.bins(*rows, header=HEADER)
        found.append(load_problem(case.config()).posterior.log_likelihood(vectors))
    assert found[1] == pytest.approx(found[0], rel=1e-12)
    assert found[2] == pytest.approx(found[0], rel=1e-12)


def test_merging_two_bins_of_the_same_expectation_leaves_the_posterior_of_h(case) -> None:
    # two mass bins at one redshift have the same predicted fraction; their sum says the same
    two = ("A,0.5,1.0,10.0,10.5,900,122,true", "A,0.5,1.0,10.5,11.0,300,51,true")
    one = ("A,0.5,1.0,10.0,11.0,1200,173,true",)
    vectors = np.linspace(0.1, 1.25, 200)[:, None]
    found = []
    for rows in (two, one):
        case.bins(*rows)
        found.append(load_problem(case.config()).posterior.log_likelihood(vectors))
    difference = found[0] - found[1]
    assert np.ptp(difference) < 1e-9  # rounding of logarithms near 500
    case.bins(*two)
    overdispersed = load_problem(case.config(counts={"model": "beta-binomial", "rho": 0.01})).posterior.log_likelihood(vectors)
    assert np.ptp(overdispersed - found[1]) > 1


def test_counts_and_the_fraction_and_n_that_they_make_are_the_same(case) -> None:
    vectors = np.linspace(0.1, 1.25, 50)[:, None]
    case.bins("A,0.5,1.0,10,11,800,100,,,,,,,,true", header=HEADER)
    counts = load_problem(case.config()).posterior.log_likelihood(vectors)
    case.bins("A,0.5,1.0,10,11,800,,,0.125,,,,,,true", header=HEADER)
    assert load_problem(case.config()).posterior.log_likelihood(vectors) == pytest.approx(counts, rel=1e-14)


def test_an_impossible_impurity_has_no_likelihood_and_is_never_a_number_that_is_none(case) -> None:
    selection = {"default": {"completeness_ratio": {"lognormal": [1.0, 0.3]}, "impurity": {"uniform": [0.0, 1.0]}}}
    posterior = load_problem(case.config(selection=selection)).posterior
    place = posterior.names.index("impurity[Larkspur-A]")
    vectors = np.tile([0.8, 1.0, 0.1, 1.0, 0.1], (5, 1))
    vectors[:, place] = [0.1, 0.8, 0.9, 0.999, 1.0]
    found = posterior.log_likelihood(vectors)
    # at H = 0.8 about 0.12 of the galaxies are quiescent: an impurity above 0.88 takes more star-forming ones than there are
    assert np.isfinite(found[:2]).all()
    assert (found[2:] == -np.inf).all()
    t = 3 * np.random.default_rng(3).standard_normal((500, 5))
    with np.errstate(all="raise", under="ignore"):
        found = posterior.log_probability(t)
    assert not np.isnan(found).any()
    assert (found < np.inf).all()


@pytest.mark.parametrize("impurity", [0.99, {"uniform": [0.985, 1.0]}, {"mean": 0.99, "sd": 0.001}])
def test_an_impurity_that_is_impossible_everywhere_is_refused(case, impurity) -> None:
    case.config(selection={"Larkspur-B": {"impurity": impurity, "completeness_ratio": 2.0}})
    with pytest.raises(
        HurstfitError, match=r"impurity of Larkspur-B.*bins.csv, row \d \(Larkspur-B.*contamination above 1.*allowed"
    ):
        load_problem(case.folder / "case.toml")


def test_an_impurity_that_is_possible_somewhere_is_not_refused(case) -> None:
    case.config(selection={"Larkspur-B": {"impurity": {"uniform": [0.0, 1.0]}}})
    load_problem(case.folder / "case.toml")


def test_vet_says_how_rows_were_read(case, hurstfit_cli) -> None:
    case.bins(*ROWS, header=HEADER)
    case.config(selection=SELECTION, counts={"model": "beta-binomial", "field_scatter": 0.02, "fields": 4})
    said = hurstfit_cli("vet", "bins.csv")
    assert said.exit_code == 0
    flat = " ".join(said.output.split())
    for words in (
        "row 1 (A, z 0.5-0.8): counts: 101 of 812 galaxies labelled quiescent",
        "row 3 (A, z 1-1.2): fraction and error: 0.13 +- 0.03, central 68 % (assumed, since no interval is stated)",
        "row 6 (B, z 1.8-2): upper limit: < 0.25 at 95 % confidence (stated), counts as none of 9.41",
    ):
        assert words in flat
    said = hurstfit_cli("vet", "case.toml")
    assert said.exit_code == 0
    flat = " ".join(said.output.split())
    for words in (
        "field-to-field scatter of the fraction: 0.02 over 4 fields (A)",
        "not added to 5 of 8 bins",
        "impurity[A]",
        "fraction and effective N",
    ):
        assert words in flat


def test_mixed_forms_go_through_inference_and_digest(case, hurstfit_cli) -> None:
    case.bins(*ROWS, header=HEADER)
    case.config(counts={"model": "beta-binomial", "rho": 0.01}, engine={"kind": "joint"})
    said = hurstfit_cli("infer", "case.toml", "--out", "mixed.h5")
    assert said.exit_code == 0, said.output
    assert hurstfit_cli("vet", "mixed.h5").exit_code == 0
    said = hurstfit_cli("digest", "mixed.h5")
    assert said.exit_code == 0, said.output
