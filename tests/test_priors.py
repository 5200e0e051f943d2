"""Priors: density, tails and quantiles against scipy.stats, and every way of writing one wrongly."""

import dataclasses
import math
import re
import tomllib
import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from hurstfit.errors import HurstfitError
from hurstfit.prior_entries import parse_prior
from hurstfit.priors import (
    Beta,
    Fixed,
    LogNormal,
    TruncatedNormal,
    Uniform,
    beta_from_mean_sd,
)

INF = math.inf


def _cut_normal(mean, sd, lo, hi):
    return stats.truncnorm((lo - mean) / sd, (hi - mean) / sd, loc=mean, scale=sd)


# The reference for every density, distribution function, quantile and moment is scipy.stats.
CASES = [
    (Uniform(0.05, 1.3), stats.uniform(0.05, 1.25)),
    (Uniform(-3.0, -1.0), stats.uniform(-3.0, 2.0)),
    (Beta(3, 57), stats.beta(3, 57)),
    (Beta(57, 3), stats.beta(57, 3)),
    (Beta(1, 1), stats.beta(1, 1)),
    (Beta(0.5, 0.5), stats.beta(0.5, 0.5)),
    (Beta(401, 99602), stats.beta(401, 99602)),
    (TruncatedNormal(0.8, 0.1, 0.0, 1.0), _cut_normal(0.8, 0.1, 0.0, 1.0)),
    (TruncatedNormal(0.0, 0.05, 0.0, 1.0), _cut_normal(0.0, 0.05, 0.0, 1.0)),
    (TruncatedNormal(1.0, 0.2, 0.0, INF), _cut_normal(1.0, 0.2, 0.0, INF)),
    (TruncatedNormal(-0.3, 0.1, 0.0, 1.0), _cut_normal(-0.3, 0.1, 0.0, 1.0)),
    (TruncatedNormal(1.4, 0.1, 0.0, 1.0), _cut_normal(1.4, 0.1, 0.0, 1.0)),
    (TruncatedNormal(2.0, 3.0, -INF, INF), stats.norm(2.0, 3.0)),
    (LogNormal(1.0, 0.2), stats.lognorm(0.2, scale=1.0)),
    (LogNormal(40.0, 1.5), stats.lognorm(1.5, scale=40.0)),
]
IDS = [repr(prior) for prior, _ in CASES]
U = np.linspace(0.001, 0.999, 401)


@pytest.mark.parametrize(("prior", "reference"), CASES, ids=IDS)
class TestAgainstScipyStats:
    # scipy.special reaches about 1e-12 relative here; 1e-9 is far below any use and far above rounding.
    def test_density_is_the_reference_density(self, prior, reference):
        x = reference.ppf(U)
        np.testing.assert_allclose(prior.log_pdf(x), reference.logpdf(x), rtol=1e-9, atol=1e-9)

    def test_distribution_function_is_the_reference_one(self, prior, reference):
        x = reference.ppf(U)
        np.testing.assert_allclose(prior.cdf(x), reference.cdf(x), rtol=1e-9)

    def test_quantile_is_the_reference_one(self, prior, reference):
        np.testing.assert_allclose(prior.ppf(U), reference.ppf(U), rtol=1e-9, atol=1e-12)

    def test_mean_and_sd_are_the_reference_ones(self, prior, reference):
        assert prior.mean == pytest.approx(reference.mean(), rel=1e-8)
        assert prior.sd == pytest.approx(reference.std(), rel=1e-6)

    def test_mapped_normal_numbers_are_quantiles_in_both_tails(self, prior, reference):
        t = np.array([-6.0, -3.0, -0.2, 0.0, 0.2, 3.0, 6.0])
        expected = np.where(t <= 0, reference.ppf(stats.norm.cdf(t)), reference.isf(stats.norm.sf(t)))
        # scipy's truncnorm is itself good to about 1e-7 at the edge of its support.
        np.testing.assert_allclose(prior.from_normal(t), expected, rtol=1e-7, atol=1e-10 * prior.sd)

    def test_density_integrates_to_one_and_vanishes_outside(self, prior, reference):
        t = np.linspace(-8.0, 8.0, 40_001)
        x = prior.from_normal(t)
        # Change of variable: pdf(x) dx = phi(t) dt, so the density times dx/dt must be the standard normal density.
        # Within 4 sd: further out x may lie so near to 1 that rounding spoils the finite difference.
        middle = slice(10_000, 30_001, 1_000)
        slope = np.gradient(x, t)[middle]
        np.testing.assert_allclose(np.exp(prior.log_pdf(x[middle])) * slope, stats.norm.pdf(t[middle]), rtol=1e-4)
        if math.isfinite(prior.lo):
            assert prior.log_pdf(prior.lo - 0.01) == -INF
            assert prior.cdf(prior.lo - 0.01) == 0.0
        if math.isfinite(prior.hi):
            assert prior.log_pdf(prior.hi + 0.01) == -INF
            assert prior.cdf(prior.hi + 0.01) == pytest.approx(1.0, abs=1e-12)
            assert prior.to_normal(prior.hi + 0.01) == INF

    def test_normal_numbers_survive_the_round_trip(self, prior, reference):
        t = np.linspace(-7.0, 7.0, 1401)
        x = prior.from_normal(t)
        # What rounding allows: x is known to eps times the largest number on the way, and dt = pdf(x) / phi(t) dx;
        # a further 2e-9 for the accuracy of the incomplete beta functions (about 1e-10 relative in p at large a, b).
        scale = max([abs(x).max(), *(abs(v) for v in (prior.lo, prior.hi) if math.isfinite(v))])
        if isinstance(prior, TruncatedNormal):
            scale = max(scale, abs(prior.centre), 10 * prior.spread)
        eps = np.finfo(float).eps
        x_error = eps * (np.abs(x) if prior.lo == 0.0 and isinstance(prior, Beta | LogNormal) else scale)
        with np.errstate(all="ignore"):
            allowed = 2e-9 + 8.0 * x_error * np.exp(prior.log_pdf(x)) / stats.norm.pdf(t)
        # Where less than half a unit of t survives in x, the number itself no longer holds t.
        held = allowed < 0.5
        assert held[np.abs(t) < 4].all()
        back = prior.to_normal(x)
        assert (np.abs(back - t)[held] <= allowed[held]).all()

    def test_samples_follow_the_reference(self, prior, reference):
        # Seed 20; Kolmogorov-Smirnov at p > 1e-4 for 15 cases: a false alarm in 1 of 700 seeds, and this one passes.
        x = prior.sample(np.random.default_rng(20), 4000)
        assert x.shape == (4000,)
        assert stats.kstest(x, reference.cdf).pvalue > 1e-4

    def test_everything_stays_in_the_support_far_out(self, prior, reference):
        t = np.array([-INF, -60.0, -38.0, -20.0, -9.0, 9.0, 20.0, 38.0, 60.0, INF])
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            x = prior.from_normal(t)
        assert ((x >= prior.lo) & (x <= prior.hi)).all()
        assert (np.diff(x[np.isfinite(x)]) >= 0).all()

    def test_shapes_are_kept(self, prior, reference):
        grid = np.full((2, 3), prior.mean)
        for function in (prior.log_pdf, prior.cdf, prior.to_normal):
            assert function(grid).shape == (2, 3)
            assert np.ndim(function(prior.mean)) == 0
        for function in (prior.ppf, prior.from_normal):
            assert function(np.full((2, 3), 0.4)).shape == (2, 3)
            assert np.ndim(function(0.4)) == 0
        assert prior.sample(np.random.default_rng(1), (2, 3)).shape == (2, 3)

    def test_not_a_number_stays_one(self, prior, reference):
        assert math.isnan(prior.from_normal(math.nan))
        assert math.isnan(prior.to_normal(math.nan))
        assert prior.log_pdf(math.nan) == -INF
        assert np.isnan(prior.ppf([-0.1, 1.1])).all()


def test_quantiles_of_a_beta_hold_where_scipy_gives_none():
    # betaincinv(1.036, 0.0936, 1e-17) is NaN in scipy 1.17; to leading order p = x^a / (a B(a, b)).
    prior = Beta(1.0360189978937466, 0.09361018830806217)
    t = np.linspace(-12.0, -8.0, 41)
    x = prior.from_normal(t)
    np.testing.assert_allclose(stats.beta(prior.a, prior.b).cdf(x), stats.norm.cdf(t), rtol=1e-8)


@pytest.mark.parametrize("a", [0.3, 1.0, 3.0, 20.0])
@pytest.mark.parametrize("b", [0.3, 1.0, 3.0, 20.0])
def test_beta_quantiles_far_out_are_finite_and_rise(a, b):
    x = Beta(a, b).from_normal(np.linspace(-37.0, 37.0, 741))
    assert np.isfinite(x).all()
    assert (np.diff(x) >= -1e-15).all()


@pytest.mark.parametrize(("lo", "hi"), [(0.4999, 0.5001), (0.9, 0.90001), (0.05, 0.0501)])
def test_a_normal_cut_to_a_narrow_range_is_nearly_uniform(lo, hi):
    # Over a range of 0.002 sd the density varies by less than 1 %.
    prior, flat = TruncatedNormal(0.5, 0.1, lo, hi), Uniform(lo, hi)
    x = np.linspace(lo, hi, 11)
    np.testing.assert_allclose(prior.log_pdf(x), flat.log_pdf(x), atol=0.01)
    assert prior.sd == pytest.approx(flat.sd, rel=1e-4)
    assert prior.mean == pytest.approx(flat.mean, abs=0.01 * (hi - lo))


class TestFixed:
    def test_a_fixed_value_has_no_coordinate_and_no_scatter(self):
        prior = Fixed(0.02)
        assert prior.is_fixed
        assert (prior.mean, prior.sd, prior.lo, prior.hi) == (0.02, 0.0, 0.02, 0.02)
        np.testing.assert_array_equal(prior.from_normal([-7.0, 0.0, 7.0]), 0.02)
        np.testing.assert_array_equal(prior.ppf([0.0, 0.3, 1.0]), 0.02)
        np.testing.assert_array_equal(prior.sample(np.random.default_rng(1), 3), 0.02)
        np.testing.assert_array_equal(prior.to_normal([0.02, 0.02]), 0.0)

    def test_a_fixed_value_is_all_the_probability(self):
        np.testing.assert_array_equal(Fixed(0.02).cdf([0.019, 0.02, 0.021]), [0.0, 1.0, 1.0])
        np.testing.assert_array_equal(Fixed(0.02).log_pdf([0.019, 0.02, 0.021]), [-INF, 0.0, -INF])

    def test_nothing_else_is_fixed(self):
        assert not any(prior.is_fixed for prior, _ in CASES)


@pytest.mark.parametrize(
    ("prior", "text"),
    [
        (Fixed(0.02), "fixed at 0.02"),
        (Uniform(0.05, 1.3), "uniform from 0.05 to 1.3"),
        (Beta(3, 57), "Beta(3, 57): mean 0.05, sd 0.028"),
        (LogNormal(1, 0.2), "lognormal with median 1, scatter of ln 0.2"),
        (TruncatedNormal(0.5, 0.1, 0.0, 1.0), "normal 0.5 +- 0.1, truncated to 0..1: mean 0.5, sd 0.1"),
        (TruncatedNormal(100, 20, 0.0, INF), "normal 100 +- 20, truncated to above 0: mean 100, sd 20"),
        (TruncatedNormal(-5, 2, -INF, 0.0), "normal -5 +- 2, truncated to below 0: mean -5.04, sd 2"),
        (TruncatedNormal(2, 3, -INF, INF), "normal 2 +- 3"),
    ],
)
def test_a_prior_says_what_it_is(prior, text):
    assert prior.describe() == text


def test_priors_cannot_be_changed():
    with pytest.raises(dataclasses.FrozenInstanceError):
        Beta(3, 57).a = 4


@pytest.mark.parametrize(
    "make",
    [
        lambda: Fixed(math.nan),
        lambda: Uniform(1.0, 1.0),
        lambda: Uniform(0.0, INF),
        lambda: Beta(0.0, 1.0),
        lambda: Beta(1.0, INF),
        lambda: TruncatedNormal(0.5, 0.0, 0.0, 1.0),
        lambda: TruncatedNormal(0.5, 0.1, 1.0, 0.0),
        lambda: TruncatedNormal(50.0, 0.1, 0.0, 1.0),
        lambda: LogNormal(0.0, 1.0),
    ],
)
def test_impossible_parameters_are_refused_at_construction(make):
    with pytest.raises(ValueError, match=r"need|must be"):
        make()


def test_a_lognormal_whose_quantiles_overflow_is_refused_at_construction():
    with pytest.raises(ValueError, match="too wide"):
        LogNormal(1.0, 20.0)


@pytest.mark.parametrize(("mean", "sd"), [(0.5, 0.5), (0.0, 0.1), (1.0, 0.1), (0.5, 0.0), (0.5, math.nan)])
def test_no_beta_is_made_up_for_impossible_moments(mean, sd):
    with pytest.raises(ValueError, match="no Beta"):
        beta_from_mean_sd(mean, sd)


@settings(deadline=None)
@given(st.floats(0.001, 0.999), st.floats(0.01, 0.99))
def test_matched_beta_has_the_mean_and_sd_asked_for(mean, share):
    sd = share * math.sqrt(mean * (1 - mean))
    prior = beta_from_mean_sd(mean, sd)
    assert prior.mean == pytest.approx(mean, rel=1e-9)
    assert prior.sd == pytest.approx(sd, rel=1e-9)


WHERE = "demo.toml, [selection.Larkspur-Deep] contamination"
SHARE = {"lo": 0.0, "hi": 1.0}
RATIO = {"lo": 0.0, "hi": INF, "lo_open": True}
EXPONENT = {"lo": 0.05, "hi": 1.3}


def _parse(text, limits):
    """Parse what stands right of the equals sign in a TOML file."""
    return parse_prior(tomllib.loads(f"x = {text}")["x"], where=WHERE, **limits)


@pytest.mark.parametrize(
    ("text", "limits", "prior"),
    [
        ("0.02", SHARE, Fixed(0.02)),
        ("0", SHARE, Fixed(0.0)),
        ("1", SHARE, Fixed(1.0)),
        ("2", RATIO, Fixed(2.0)),
        ("0.05", EXPONENT, Fixed(0.05)),
        ("{uniform = [0, 0.2]}", SHARE, Uniform(0.0, 0.2)),
        ("{uniform = [0, 2]}", RATIO, Uniform(0.0, 2.0)),
        ("{beta = [3, 57]}", SHARE, Beta(3.0, 57.0)),
        ("{beta = [3, 57]}", RATIO, Beta(3.0, 57.0)),
        ("{mean = 0.05, sd = 0.01}", SHARE, beta_from_mean_sd(0.05, 0.01)),
        ("{normal = [0.8, 0.1]}", EXPONENT, TruncatedNormal(0.8, 0.1, 0.05, 1.3)),
        ("{normal = [0.8, 0.1], between = [0.5, 1]}", EXPONENT, TruncatedNormal(0.8, 0.1, 0.5, 1.0)),
        ("{normal = [1, 0.1]}", RATIO, TruncatedNormal(1.0, 0.1, 0.0, INF)),
        ("{lognormal = [1, 0.2]}", RATIO, LogNormal(1.0, 0.2)),
        ("{validation = [2, 401]}", SHARE, Beta(3.0, 400.0)),
        ("{validation = [0, 20]}", SHARE, Beta(1.0, 21.0)),
        ("{validation = [20, 20]}", SHARE, Beta(21.0, 1.0)),
    ],
)
def test_every_form_gives_its_prior(text, limits, prior):
    assert _parse(text, limits) == prior


def test_numbers_of_numpy_are_numbers():
    assert parse_prior(np.float64(0.2), where=WHERE, **SHARE) == Fixed(0.2)
    assert parse_prior({"beta": (np.int64(3), 57)}, where=WHERE, **SHARE) == Beta(3.0, 57.0)


# What is wrong, and the parts that the sentence must contain, in order.
MALFORMED = [
    # a single value
    ("1.2", SHARE, ["found 1.2", "from 0 to 1"]),
    ("-1", SHARE, ["found -1", "from 0 to 1"]),
    ("0", RATIO, ["found 0;", "above 0"]),
    ("-0.0", RATIO, ["found -0;", "above 0"]),
    ("0.01", EXPONENT, ["found 0.01", "from 0.05 to 1.3"]),
    ("true", SHARE, ["found true", "a number from 0 to 1", "uniform = "]),
    ("nan", SHARE, ["found nan", "a number"]),
    ("inf", RATIO, ["found inf", "a number above 0"]),
    ("-inf", SHARE, ["found -inf", "a number"]),
    ("'0.02'", SHARE, ["found '0.02'", "a number"]),
    ("'a\\nb'", SHARE, ["found 'a", "a number"]),
    ("[0.1, 0.2]", SHARE, [r"found \[0.1, 0.2\]", "uniform = "]),
    ("[]", SHARE, [r"found \[\]", "a number"]),
    ("1999-01-01", SHARE, ["found datetime.date", "a number"]),
    ("1" + "0" * 400, RATIO, ["found 1", "a number"]),
    ("0x" + "f" * 9000, RATIO, ["found a number beyond", "a number"]),
    # which form
    ("{}", SHARE, ["found an empty table", "exactly one of", "uniform = "]),
    ("{unifrom = [0, 1]}", SHARE, ["unknown key 'unifrom'", "did you mean 'uniform'", "allowed"]),
    ("{Beta = [3, 57]}", SHARE, ["unknown key 'Beta'", "did you mean 'beta'"]),
    ("{gaussian = [0, 1]}", SHARE, ["unknown key 'gaussian'", "allowed", "normal = "]),
    ("{uniform = [0, 1], beta = [3, 57]}", SHARE, ["found 'uniform' and 'beta'", "exactly one of"]),
    ("{sd = 0.1}", SHARE, ["found 'sd'", "exactly one of", "{mean = m, sd = s}"]),
    ("{between = [0, 1]}", SHARE, ["found 'between'", "exactly one of"]),
    ("{uniform = [0, 1], sd = 0.1}", SHARE, ["found 'sd' beside 'uniform'"]),
    ("{beta = [1, 1], between = [0, 1]}", SHARE, ["found 'between' beside 'beta'"]),
    ("{mean = 0.1}", SHARE, ["'mean' without 'sd'", "{mean = m, sd = s}"]),
    # a form that the number cannot have
    ("{beta = [3, 57]}", {"lo": 2.0, "hi": 3.0}, ["'beta' does not suit", "from 2 to 3", "meets 0 to 1"]),
    ("{mean = 0.5, sd = 0.1}", RATIO, ["'mean' does not suit", "above 0", "the range 0 to 1", "lognormal = "]),
    ("{validation = [1, 2]}", RATIO, ["'validation' does not suit", "the range 0 to 1"]),
    ("{lognormal = [1, 0.2]}", SHARE, ["'lognormal' does not suit", "without upper end"]),
    # pairs
    ("{uniform = 0.5}", SHARE, ["found uniform = 0.5", "list of two numbers", r"\[a, b\]"]),
    ("{uniform = [0.5]}", SHARE, [r"found uniform = \[0.5\]", "list of two numbers"]),
    ("{uniform = [0, 0.5, 1]}", SHARE, [r"found uniform = \[0, 0.5, 1\]", "list of two numbers"]),
    ("{uniform = 'wide'}", SHARE, ["found uniform = 'wide'", "list of two numbers"]),
    ("{uniform = {lo = 0}}", SHARE, ["found uniform = a table", "list of two numbers"]),
    ("{uniform = [0, true]}", SHARE, ["found true in 'uniform'", "finite number"]),
    ("{uniform = [nan, 1]}", SHARE, ["found nan in 'uniform'", "finite number"]),
    ("{uniform = [0, inf]}", RATIO, ["found inf in 'uniform'", "finite number"]),
    ("{uniform = ['0', 1]}", SHARE, ["found '0' in 'uniform'", "finite number"]),
    ("{uniform = [0, [1]]}", SHARE, [r"found \[1\] in 'uniform'", "finite number"]),
    ("{uniform = [0.5, 0.5]}", SHARE, [r"uniform = \[0.5, 0.5\]", "rising order"]),
    ("{uniform = [0.7, 0.5]}", SHARE, [r"uniform = \[0.7, 0.5\]", "rising order"]),
    ("{uniform = [0, 1.1]}", SHARE, [r"uniform = \[0, 1.1\]", "from 0 to 1"]),
    ("{uniform = [-0.1, 1]}", SHARE, [r"uniform = \[-0.1, 1\]", "from 0 to 1"]),
    ("{uniform = [0, 1]}", EXPONENT, [r"uniform = \[0, 1\]", "from 0.05 to 1.3"]),
    ("{uniform = [-1.5e308, 1.5e308]}", {"lo": -INF, "hi": INF}, ["too wide", "finite width"]),
    ("{beta = [0, 57]}", SHARE, [r"beta = \[0, 57\]", "from 0.05 to 1e"]),
    ("{beta = [-3, 57]}", SHARE, [r"beta = \[-3, 57\]", "from 0.05"]),
    ("{beta = [1, 1e12]}", SHARE, [r"beta = \[1, 1e\+12\]", "to 1e"]),
    ("{mean = 0, sd = 0.1}", SHARE, ["mean = 0;", "between 0 and 1"]),
    ("{mean = 1.5, sd = 0.1}", SHARE, ["mean = 1.5", "between 0 and 1"]),
    ("{mean = 0.5, sd = 0}", SHARE, ["sd = 0;", "above 0 and below 0.5"]),
    ("{mean = 0.5, sd = -0.1}", SHARE, ["sd = -0.1;", "above 0"]),
    ("{mean = 0.5, sd = 0.5}", SHARE, ["sd = 0.5;", "below 0.5"]),
    ("{mean = 0.05, sd = 0.3}", SHARE, ["sd = 0.3;", "below 0.2179"]),
    ("{mean = 0.5, sd = 1e-9}", SHARE, ["sd = 1e-09", "fix the value"]),
    ("{mean = 0.5, sd = 1e-300}", SHARE, ["sd = 1e-300", "fix the value"]),
    ("{mean = 0.05, sd = 0.21}", SHARE, ["sd = 0.21", "from 0.05"]),
    ("{mean = '0.5', sd = 0.1}", SHARE, ["found '0.5' in 'mean'", "finite number"]),
    ("{mean = 0.5, sd = false}", SHARE, ["found false in 'sd'", "finite number"]),
    ("{normal = [0.5, 0]}", SHARE, ["sd 0 in normal", "above 0"]),
    ("{normal = [0.5, -1]}", SHARE, ["sd -1 in normal", "above 0"]),
    ("{normal = [50, 1]}", SHARE, [r"normal = \[50, 1\]", "next to no probability in 0..1", "1e-12"]),
    ("{normal = [0.5, 0.1], between = [0, 2]}", SHARE, [r"between = \[0, 2\]", "from 0 to 1"]),
    ("{normal = [0.5, 0.1], between = [1, 0]}", SHARE, [r"between = \[1, 0\]", "rising order"]),
    ("{normal = [0.5, 0.1], between = 1}", SHARE, ["between = 1", "list of two numbers"]),
    ("{normal = [0.5, 0.1], betwen = [0, 1]}", SHARE, ["unknown key 'betwen'", "did you mean 'between'"]),
    ("{lognormal = [0, 0.2]}", RATIO, [r"lognormal = \[0, 0.2\]", "above 0"]),
    ("{lognormal = [1, -0.2]}", RATIO, [r"lognormal = \[1, -0.2\]", "above 0"]),
    ("{lognormal = [1, 100]}", RATIO, [r"lognormal = \[1, 100\]", "too wide"]),
    ("{validation = [3, 2]}", SHARE, [r"validation = \[3, 2\]", "0 <= j <= m"]),
    ("{validation = [-1, 2]}", SHARE, [r"validation = \[-1, 2\]", "0 <= j <= m"]),
    ("{validation = [0, 0]}", SHARE, [r"validation = \[0, 0\]", "m from 1"]),
    ("{validation = [1.5, 2]}", SHARE, [r"validation = \[1.5, 2\]", "whole numbers"]),
    ("{validation = [1, 1e12]}", SHARE, ["validation = ", "m from 1 to"]),
]


@pytest.mark.parametrize(("text", "limits", "parts"), MALFORMED, ids=[text[:45] for text, _, _ in MALFORMED])
def test_a_malformed_prior_is_refused_with_one_sentence(text, limits, parts):
    with pytest.raises(HurstfitError) as caught:
        _parse(text, limits)
    sentence = str(caught.value)
    assert sentence.startswith(f"{WHERE}: ")
    assert re.search(".*".join(parts), sentence), sentence
    assert "\n" not in sentence
    assert len(sentence) < 450


@pytest.mark.parametrize(
    ("limits", "words"),
    [
        ({"lo": -INF, "hi": INF}, "a number of any size,"),
        ({"lo": -INF, "hi": 2.0}, "a number of 2 or less,"),
        ({"lo": 1.0, "hi": INF}, "a number of 1 or more,"),
        ({"lo": 0.0, "hi": 2.0, "lo_open": True}, "a number above 0 and up to 2,"),
    ],
)
def test_the_allowed_range_is_said_in_words(limits, words):
    with pytest.raises(HurstfitError, match=words):
        _parse("'text'", limits)


@pytest.mark.parametrize("limits", [SHARE, RATIO, EXPONENT], ids=["share", "ratio", "exponent"])
def test_only_forms_that_would_be_accepted_are_offered(limits):
    with pytest.raises(HurstfitError) as caught:
        _parse("'text'", limits)
    examples = {
        "uniform": "{uniform = [0.2, 0.9]}",
        "beta": "{beta = [3, 57]}",
        "mean": "{mean = 0.5, sd = 0.1}",
        "normal": "{normal = [0.8, 0.1]}",
        "lognormal": "{lognormal = [1, 0.2]}",
        "validation": "{validation = [2, 40]}",
    }
    for key, example in examples.items():
        if f"{{{key} = " in str(caught.value):
            assert not _parse(example, limits).is_fixed
        else:
            with pytest.raises(HurstfitError):
                _parse(example, limits)


_toml_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.dictionaries(
            st.sampled_from(["uniform", "beta", "mean", "sd", "normal", "between", "lognormal", "validation"]) | st.text(),
            inner,
            max_size=3,
        )
    ),
    max_leaves=8,
)


def _parse_or_sentence(spec, limits):
    try:
        return parse_prior(spec, where=WHERE, **limits)
    except HurstfitError as error:
        return str(error)


@settings(deadline=None)
@given(_toml_values, st.sampled_from([SHARE, RATIO, EXPONENT]))
def test_anything_at_all_gives_a_prior_or_a_sentence(spec, limits):
    result = _parse_or_sentence(spec, limits)
    if isinstance(result, str):
        assert result.startswith(WHERE)
        assert len(result.splitlines()) == 1
    else:
        assert result.lo >= limits["lo"]
        assert result.hi <= limits["hi"]


_number = st.floats(-2, 3) | st.integers(-2, 500) | st.floats()
_forms = st.one_of(
    st.fixed_dictionaries({key: st.tuples(_number, _number)}) for key in ("uniform", "beta", "normal", "lognormal", "validation")
) | st.fixed_dictionaries({"mean": _number, "sd": _number})


@settings(deadline=None)
@given(_forms, st.sampled_from([SHARE, RATIO, EXPONENT]))
def test_every_accepted_form_can_be_sampled(spec, limits):
    prior = _parse_or_sentence(spec, limits)
    if isinstance(prior, str):
        return
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        x = prior.from_normal(np.array([-8.0, -1.0, 0.0, 1.0, 8.0]))
    assert np.isfinite(x).all()
    assert ((x >= limits["lo"]) & (x <= limits["hi"])).all()
    assert math.isfinite(prior.mean)
    assert prior.sd >= 0.0
    assert prior.describe()
