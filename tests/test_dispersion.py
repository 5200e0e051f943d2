"""Overdispersion: what a correlation does to counts, where it comes from, and which rows get it."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hurstfit.counts import BetaBinomialCounts, BinomialCounts, log_rising
from hurstfit.dispersion import Dispersion
from hurstfit.engines.quadrature import NotSettledError
from hurstfit.errors import HurstfitError
from hurstfit.problem import load_problem

HEADER = "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,fraction,fraction_err,limit,confidence,rising"
ROWS = (
    "A,0.5,1.0,10,11,900,122,,,,,true",
    "A,1.0,1.5,10,11,500,,0.14,,,,true",
    "A,1.5,2.0,10,11,500,,0.14,0.0155,,,true",
    "A,2.0,2.5,10,11,500,,0.14,0.04,,,true",
    "B,1.0,1.5,10,11,,,0.14,0.03,,,true",
    "B,1.5,2.0,10,11,,,0.3,,upper,0.95,true",
    "B,2.0,2.5,10,11,300,0,,,,,true",
)


def one(n: float, k: float, rho: float) -> BetaBinomialCounts:
    return BetaBinomialCounts(np.array([n], float), np.array([k], float), np.array([rho], float))


@pytest.mark.parametrize("rho", [0.0, 1e-300, 1e-40, 1e-28])
@pytest.mark.parametrize("p", [0.0, 1e-9, 0.3, 1.0])
def test_without_correlation_counts_are_binomial_to_rounding(p: float, rho: float) -> None:
    for n, k in ((0, 0), (1, 1), (100, 0), (100, 37), (1e7, 2e6), (17.3, 4.2)):
        binomial = BinomialCounts(np.array([float(n)]), np.array([float(k)])).log_likelihood(np.array([p]))
        assert one(n, k, rho).log_likelihood(np.array([p])) == pytest.approx(binomial, rel=1e-14, abs=1e-15 * max(n, 1) * 50)


def test_a_small_correlation_changes_the_probability_as_its_expansion_says() -> None:
    # to first order ln P changes by rho [k (k-1) / p + l (l-1) / q - n (n-1)] / 2, with l = n - k and q = 1 - p
    n, k, p, rho = 5000.0, 1000.0, 0.21, 1e-12
    change = one(n, k, rho).log_kernel(np.array([p])) - one(n, k, 0.0).log_kernel(np.array([p]))
    change += one(n, k, rho).log_coefficient - one(n, k, 0.0).log_coefficient
    expected = rho * (k * (k - 1) / p + (n - k) * (n - k - 1) / (1 - p) - n * (n - 1)) / 2
    # rounding of numbers of order n log n
    assert change == pytest.approx(expected, abs=1e-11)


@given(st.floats(1e-6, 1.0), st.integers(0, 60), st.floats(1e-9, 100.0))
def test_rising_products_are_products(p: float, count: int, theta: float) -> None:
    direct = np.sum(np.log(p + theta * np.arange(count)))
    assert log_rising(p, count, theta) == pytest.approx(direct, rel=1e-12, abs=1e-11)


@pytest.mark.parametrize("rho", [1e-6, 0.1, 0.9])
def test_probabilities_of_all_counts_add_up_to_one(rho: float) -> None:
    p = np.array([[0.0], [0.2], [0.999], [1.0]])
    assert sum(np.exp(one(12, k, rho).log_likelihood(p)) for k in range(13)) == pytest.approx(1.0, abs=1e-12)


def test_impossible_counts_and_fractions_have_no_probability() -> None:
    with np.errstate(all="raise", under="ignore"):
        assert one(5, 1, 0.1).log_likelihood(np.array([0.0])) == -np.inf
        assert one(5, 1, 0.1).log_likelihood(np.array([1.0])) == -np.inf
        assert one(5, 1, 0.1).log_likelihood(np.array([np.nan])) == -np.inf
        assert BinomialCounts(np.array([5.0]), np.array([1.0])).log_likelihood(np.array([np.nan])) == -np.inf


def test_simulated_counts_scatter_as_the_correlation_says() -> None:
    rng = np.random.default_rng(8)
    n, p, rho, draws = 50, 0.2, 0.1, 40_000
    k = one(n, 0, rho).simulate(np.full((draws, 1), p), rng)
    variance = n * p * (1 - p) * (1 + (n - 1) * rho)
    assert k.mean() == pytest.approx(n * p, abs=4 * np.sqrt(variance / draws))
    # its kurtosis is below 5, so that a sample variance scatters by at most sqrt(4 / draws) of itself
    assert k.var() == pytest.approx(variance, abs=4 * variance * np.sqrt(4 / draws))


def test_simulated_effective_counts_keep_their_fraction() -> None:
    rng = np.random.default_rng(9)
    counts = BinomialCounts(np.array([31.7, 0.3, 0.0]), np.array([4.0, 0.1, 0.0]))
    draws = counts.simulate(np.full((20_000, 3), 0.25), rng)
    share = draws[:, :2] / counts.n_total[:2]
    galaxies = np.array([32, 1])
    assert share.mean(axis=0) == pytest.approx(0.25, abs=4 * np.sqrt(0.25 * 0.75 / galaxies.min() / 20_000))
    assert (draws[:, 2] == 0).all()


def test_chosen_bins_keep_their_correlation() -> None:
    counts = BetaBinomialCounts(np.array([5.0, 6, 7]), np.array([1.0, 2, 3]), np.array([0.1, 0.2, 0.3]))
    p = np.array([0.2, 0.3, 0.4])
    parts = [float(counts.select(np.array([i])).log_likelihood(p[i : i + 1])) for i in range(3)]
    assert counts.log_likelihood(p) == pytest.approx(sum(parts), rel=1e-14)


# -- from a configuration ------------------------------------------------------------------------------------------------------


def test_only_counts_get_the_correlation(case) -> None:
    case.bins(*ROWS, header=HEADER)
    posterior = load_problem(case.config(counts={"model": "beta-binomial", "rho": 0.02})).posterior
    assert posterior.counts.rho.tolist() == [0.02, 0.02, 0.02, 0, 0, 0, 0.02]


def test_field_scatter_becomes_a_correlation_at_the_fraction_of_the_row(case) -> None:
    case.bins(*ROWS, header=HEADER)
    counts = {"model": "beta-binomial", "field_scatter": {"A": 0.04, "B": 0.02}, "fields": {"A": 4, "default": 1}}
    rho = load_problem(case.config(counts=counts)).posterior.counts.rho
    f = 122 / 900
    assert rho[0] == pytest.approx(0.04**2 / (f * (1 - f)) / 4, rel=1e-14)
    assert rho[1] == pytest.approx(0.04**2 / (0.14 * 0.86) / 4, rel=1e-14)
    # none of 300: the fraction is kept 1 / 302 away from zero
    assert rho[6] == pytest.approx(0.02**2 / (301 / 302**2), rel=1e-14)
    assert rho[3:6].tolist() == [0, 0, 0]


def test_a_bin_of_many_fields_scatters_as_the_mean_of_its_fields_does() -> None:
    # K fields of n galaxies: the variance of the share is sigma_f^2 / K beside that of counting, for n large
    n, k_fields, sigma, p = 1e7, 4, 0.05, 0.2
    rho = sigma**2 / (p * (1 - p)) / k_fields
    assert p * (1 - p) * (1 + (n - 1) * rho) / n == pytest.approx(sigma**2 / k_fields, rel=1e-3)


def test_no_correlation_is_the_binomial_posterior(case) -> None:
    case.bins(*ROWS, header=HEADER)
    vectors = np.linspace(0.1, 1.2, 9)[:, None]
    plain = load_problem(case.config()).posterior.log_likelihood(vectors)
    zero = load_problem(case.config(counts={"model": "beta-binomial", "rho": 0.0})).posterior
    assert zero.log_likelihood(vectors) == pytest.approx(plain, rel=1e-14)
    tiny = load_problem(case.config(counts={"model": "beta-binomial", "rho": 1e-25})).posterior
    assert tiny.log_likelihood(vectors) == pytest.approx(plain, rel=1e-12)


def test_a_free_correlation_is_one_more_shared_parameter(case) -> None:
    case.bins(*ROWS, header=HEADER)
    case.config(
        counts={"model": "beta-binomial", "rho": {"beta": [1, 30]}}, selection={"A": {"contamination": {"beta": [2, 50]}}}
    )
    free = load_problem(case.folder / "case.toml").posterior
    assert free.names == ("H", "rho", "contamination[A]")
    assert free.shared_names == ("H", "rho")
    x = np.array([[0.8, 0.03, 0.02], [0.7, 0.2, 0.05]])
    for vector, found in zip(x, free.log_likelihood(x), strict=True):
        case.config(counts={"model": "beta-binomial", "rho": vector[1]}, selection={"A": {"contamination": vector[2]}})
        fixed = load_problem(case.folder / "case.toml").posterior
        assert found == pytest.approx(float(fixed.log_likelihood(vector[None, :1])[0]), rel=1e-12)
    t = np.random.default_rng(1).standard_normal((200, 3)) * 6
    with np.errstate(all="raise", under="ignore"):
        assert not np.isnan(free.log_probability(t)).any()


def test_the_quadrature_leaves_a_free_correlation_to_the_ensemble(case) -> None:
    from hurstfit.engines.choice import _by_quadrature
    from hurstfit.engines.joint import JointSettings

    case.config(counts={"model": "beta-binomial", "rho": {"beta": [1, 30]}})
    with pytest.raises(NotSettledError, match="rho"):
        _by_quadrature(load_problem(case.folder / "case.toml").posterior, JointSettings(seed=1), None)


def test_correlation_widens_the_posterior_of_h(case) -> None:
    vectors = np.linspace(0.05, 1.3, 2001)[:, None]

    def width(**counts: object) -> float:
        p = load_problem(case.config(counts={"model": "beta-binomial", **counts})).posterior.log_likelihood(vectors)
        weight = np.exp(p - p.max())
        mean = np.average(vectors[:, 0], weights=weight)
        return float(np.sqrt(np.average((vectors[:, 0] - mean) ** 2, weights=weight)))

    assert width(rho=0.0) < 0.9 * width(rho=0.002) < 0.8 * width(rho=0.01)


BAD = {
    "rho with the binomial": ({"rho": 0.1}, r"\[counts\] rho: found 0.1 with model = \"binomial\""),
    "neither": ({"model": "beta-binomial"}, "found neither of rho and field_scatter"),
    "both": ({"model": "beta-binomial", "rho": 0.1, "field_scatter": 0.1}, "found both of rho and field_scatter"),
    "rho of one": ({"model": "beta-binomial", "rho": 1.0}, "rho: found 1.0, allowed is a number from 0 to below 1"),
    "negative rho": ({"model": "beta-binomial", "rho": -0.1}, "rho.*-0.1.*from 0 to 1"),
    "rho of text": ({"model": "beta-binomial", "rho": "some"}, "rho.*'some'"),
    "fields with rho": ({"model": "beta-binomial", "rho": 0.1, "fields": 3}, "fields: found 3 beside rho"),
    "no scatter": ({"model": "beta-binomial", "field_scatter": 0.0}, "field_scatter: found 0.0, allowed is a standard deviation"),
    "flag": ({"model": "beta-binomial", "field_scatter": True}, "field_scatter: found True"),
    "no field": ({"model": "beta-binomial", "field_scatter": 0.1, "fields": 0}, "fields: found 0, allowed is a number of fields"),
    "unknown study": (
        {"model": "beta-binomial", "field_scatter": {"Larkspur-a": 0.1}},
        "'Larkspur-a'.*did you mean 'Larkspur-A'",
    ),
    "study left out": ({"model": "beta-binomial", "field_scatter": {"Larkspur-A": 0.1}}, "nothing for the study 'Larkspur-B'"),
    "scatter too large": ({"model": "beta-binomial", "field_scatter": 0.4}, r"bins.csv, row 1 \(Larkspur-A.*0.4.*sqrt"),
    "unknown model": ({"model": "poisson"}, "'binomial' or 'beta-binomial'"),
}


@pytest.mark.parametrize("mistake", BAD)
def test_a_bad_table_of_counts_is_refused(case, mistake: str) -> None:
    counts, sentence = BAD[mistake]
    case.config(counts=counts)
    with pytest.raises(HurstfitError, match=sentence) as caught:
        load_problem(case.folder / "case.toml")
    assert "\n" not in str(caught.value)


def test_a_field_scatter_of_all_studies_is_described_study_by_study() -> None:
    words = Dispersion(0.0, {"A": 0.04, "B": 0.02}, {"A": 4, "B": 1}).describe()
    assert words.endswith("0.04 over 4 fields (A), 0.02 over 1 field (B)")
