"""Fractions of walks against closed forms, another library, and asymptotic laws.

Every statistical comparison names its seed, takes its tolerance from standard errors, and fails by chance once in a thousand
over all comparisons of its test (Bonferroni).
"""

from __future__ import annotations

import functools
import itertools
import math
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from fractions import Fraction

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats
from scipy.integrate import quad
from scipy.special import ndtr
from scipy.stats import multivariate_normal

from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.exact import exact_zero_fraction
from hurstfit.fractions.simulate import BATCH_WALKS, simulate_batch
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable
from hurstfit.walks import NOISE_TYPES, draw_noise, reflect

FALSE_ALARM = 1e-3


@functools.cache
def shipped_table(noise: str) -> FractionTable:
    """Load a table that ships, once."""
    return load_table(noise)


def z_limit(comparisons: int) -> float:
    return float(stats.norm.isf(FALSE_ALARM / (2 * comparisons)))


def t_limit(comparisons: int, batches: int) -> float:
    return float(stats.t.isf(FALSE_ALARM / (2 * comparisons), batches - 1))


def batches_of(noise: str, axes: TableAxes, batches: int, seed: int) -> NDArray[np.float64]:
    """Fractions of independent batches of 8192 walks, shape (batches, *axes.shape); no exact value is put in."""
    seeds = np.random.SeedSequence(seed).spawn(batches)

    def one(child: np.random.SeedSequence) -> NDArray[np.float64]:
        return simulate_batch(noise, axes, BATCH_WALKS, np.random.default_rng(child)).fraction.astype(float)

    with ThreadPoolExecutor(2) as pool:
        return np.array(list(pool.map(one, seeds)))


def zero_only(h: Sequence[float], steps: Sequence[int]) -> TableAxes:
    """All walks, and those with mass, at zero at one step."""
    return TableAxes(np.array(h), np.array(steps), np.array([0.0]), np.array([0.0]), np.array([0.2]))


# -- exact values ----------------------------------------------------------------------------------------------------


def orthant_correlations(noise: str, H: float, n: int) -> dict[tuple[int, int], float]:
    """Correlations c_ij of the sums whose common non-positivity means zero, from the formulas in plain loops."""
    if noise == "type-I":
        # Sums of type I forward in time do as well as backward: C_ij = (i^{2H} + j^{2H} - |i-j|^{2H}) / 2.
        def covariance(i: int, j: int) -> float:
            return (i ** (2 * H) + j ** (2 * H) - abs(i - j) ** (2 * H)) / 2
    else:
        d = H - 0.5
        psi = [1.0, d, d * (d + 1) / 2][:n]

        def weight(i: int, k: int) -> float:
            """Weight of innovation e_k in the backward sum X_n + ... + X_{n-i+1}."""
            return sum(psi[t - k] for t in range(n - i + 1, n + 1) if t >= k)

        def covariance(i: int, j: int) -> float:
            return sum(weight(i, k) * weight(j, k) for k in range(1, n + 1))

    return {
        (i, j): covariance(i, j) / math.sqrt(covariance(i, i) * covariance(j, j))
        for i in range(1, n + 1)
        for j in range(i + 1, n + 1)
    }


def closed_form(noise: str, H: float, n: int) -> float:
    """One half; Sheppard (1899): 1/4 + arcsin c / (2 pi); and for three 1/8 + (sum of arcsin c) / (4 pi)."""
    angles = [math.asin(min(1.0, c)) for c in orthant_correlations(noise, H, n).values()]
    return {1: 1 / 2, 2: 1 / 4 + sum(angles) / (2 * math.pi), 3: 1 / 8 + sum(angles) / (4 * math.pi)}[n]


SMALL_H = [0.05, 0.3, 0.5, 0.75, 0.95]


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize("n", [1, 2, 3])
@pytest.mark.parametrize("H", [*SMALL_H, 1.0])
def test_exact_values_up_to_three_steps(noise: str, H: float, n: int) -> None:
    # arcsin loses half of the digits where its argument is 1, as it is for type I at H = 1.
    assert exact_zero_fraction(noise, H, n) == pytest.approx(closed_form(noise, H, n), abs=1e-7 if H == 1 else 1e-13)


@pytest.mark.parametrize(("H", "value"), [(0.30, 0.283762), (0.75, 0.362817), (0.95, 0.436905)])
def test_recorded_values_at_three_steps_of_type_1(H: float, value: float) -> None:
    assert round(closed_form("type-I", H, 3), 6) == value
    assert exact_zero_fraction("type-I", H, 3) == pytest.approx(value, abs=5e-7)


def test_two_steps_of_type_1_in_the_words_of_the_formula() -> None:
    for H in SMALL_H:
        expected = 1 / 4 + math.asin(2 ** (H - 1)) / (2 * math.pi)
        assert exact_zero_fraction("type-I", H, 2) == pytest.approx(expected, abs=1e-14)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_simulated_walks_reach_the_exact_values_up_to_three_steps(noise: str) -> None:
    h = [*SMALL_H, 1.0]
    batches = batches_of(noise, zero_only(h, [1, 2, 3]), 48, 701)[:, :, :, 0, 0, 0]
    expected = np.array([[closed_form(noise, H, n) for n in (1, 2, 3)] for H in h])
    se = batches.std(axis=0, ddof=1) / math.sqrt(48)
    # Mirror images make one step, and all of type I at H = 1, right to the last walk; 1e-6 is single precision.
    error = np.abs(batches.mean(axis=0) - expected)
    assert (error <= t_limit(error.size, 48) * se + 1e-6).all()


def orthant_probability(noise: str, H: float, n: int, accuracy: float) -> float:
    """P(S_n = 0) by scipy's multivariate normal distribution, from covariances without the package's own matrices."""
    if noise == "type-I":
        t = np.arange(1.0, n + 1)
        covariance = (t[:, None] ** (2 * H) + t ** (2 * H) - np.abs(t[:, None] - t) ** (2 * H)) / 2
    else:
        psi = [math.gamma(k + H - 0.5) / (math.gamma(H - 0.5) * math.gamma(k + 1)) for k in range(n)]
        response = np.array([[psi[a - b] if a >= b else 0.0 for b in range(n)] for a in range(n)])
        backward = np.cumsum(response[::-1], axis=0)
        covariance = backward @ backward.T
    orthant = multivariate_normal(np.zeros(n), covariance, abseps=accuracy, releps=0, maxpts=10**6, seed=703)
    return float(orthant.cdf(np.zeros(n)))


MVN_H = [("type-I", [0.1, 0.3, 0.75, 0.9375, 0.99]), ("type-II", [0.1, 0.3, 0.75, 0.95, 1.1, 1.3])]


@pytest.mark.parametrize(("noise", "h"), MVN_H)
def test_the_shipped_table_agrees_with_the_multivariate_normal_distribution_to_twenty_steps(noise: str, h: list[float]) -> None:
    table = shipped_table(noise)
    steps = [n for n in table.axes.steps.tolist() if 4 <= n <= 20]
    assert steps[-1] == 20
    assert set(h) <= set(table.axes.h)
    grid = np.array(h)[:, None], np.array(steps)
    expected = np.array([[orthant_probability(noise, H, n, 1e-4) for n in steps] for H in h])
    # scipy's abseps bounds a multiple of the standard error of its lattice rule
    z = (table.fraction(*grid) - expected) / np.hypot(table.standard_error(*grid), 1e-4)
    assert np.abs(z).max() < t_limit(z.size, int(table.made_by["batches"]))
    # the table resolves five per ten thousand there
    assert table.standard_error(*grid).max() < 5e-4


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_simulated_walks_agree_with_the_multivariate_normal_distribution_up_to_ten_steps(noise: str) -> None:
    h, steps = [0.3, 0.75, 0.95], [4, 5, 7, 10]
    batches = batches_of(noise, zero_only(h, steps), 64, 702)[:, :, :, 0, 0, 0]
    expected = np.array([[orthant_probability(noise, H, n, 1e-5) for n in steps] for H in h])
    se = np.hypot(batches.std(axis=0, ddof=1) / 8, 1e-5)
    z = (batches.mean(axis=0) - expected) / se
    assert np.abs(z).max() < t_limit(z.size, 64)
    # 64 batches resolve differences of a few per mille of the fraction.
    assert se.max() < 1e-3


CENTRAL = {n: float(Fraction(math.comb(2 * n, n), 4**n)) for n in (1, 2, 5, 20, 50, 150, 600, 1200)}


@pytest.mark.parametrize(("n", "printed"), [(50, 0.0795892), (150, 0.0460275), (600, 0.0230281), (1200, 0.0162851)])
def test_exact_values_at_one_half_are_central_binomial(n: int, printed: float) -> None:
    # Sparre Andersen 1953; Feller vol. II, ch. XII
    assert round(CENTRAL[n], 7) == printed
    for noise in NOISE_TYPES:
        assert exact_zero_fraction(noise, 0.5, n) == pytest.approx(CENTRAL[n], rel=1e-10)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_walks_drawn_at_one_half_reach_the_central_binomial_value_up_to_1200_steps(noise: str) -> None:
    rng = np.random.default_rng(704)
    steps = np.array(list(CENTRAL))
    size, at_rest = 40_000, np.zeros(steps.size)
    for _ in range(20):
        at_rest += (reflect(draw_noise(noise, 0.5, 1200, size // 20, rng))[:, steps - 1] == 0).sum(axis=0)
    expected = np.array(list(CENTRAL.values()))
    z = (at_rest / size - expected) / np.sqrt(expected * (1 - expected) / size)
    assert np.abs(z).max() < z_limit(steps.size)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_batches_at_one_half_reach_the_central_binomial_value_up_to_1200_steps(noise: str) -> None:
    steps = list(CENTRAL)
    batches = batches_of(noise, zero_only([0.5], steps), 16, 705)[:, 0, :, 0, 0, 0]
    se = batches.std(axis=0, ddof=1) / 4
    error = np.abs(batches.mean(axis=0) - list(CENTRAL.values()))
    assert (error <= t_limit(len(steps), 16) * se + 1e-6).all()


def test_type_1_at_h_one_half_of_all_walks_and_none_with_mass() -> None:
    batches = batches_of("type-I", zero_only([1.0], [1, 7, 150, 600]), 2, 706)
    # Mirror images make it exact; 1e-6 is single precision.
    np.testing.assert_allclose(batches[:, :, :, 0, 0, 0], 0.5, rtol=0, atol=1e-6)
    np.testing.assert_array_equal(batches[:, :, :, 1, 0, 0], 0.0)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_the_shipped_table_holds_the_exact_values(noise: str) -> None:
    table = shipped_table(noise)
    for n, value in CENTRAL.items():
        if n in table.axes.steps:
            assert float(table.fraction(0.5, n)) == pytest.approx(value, abs=1e-10)
            assert float(table.standard_error(0.5, n)) == 0.0
    for H in (0.3, 0.75):
        for n in (1, 2, 3):
            assert float(table.fraction(H, n)) == pytest.approx(closed_form(noise, H, n), abs=1e-9)
    if noise == "type-I":
        np.testing.assert_allclose(table.fraction(1.0, [1, 7, 64, 2048]), 0.5, atol=1e-9)
        np.testing.assert_allclose(table.fraction(1.0, [1, 7, 64, 2048], min_mass=0.0), 0.0, atol=1e-9)


# -- rates below a threshold, up to three steps -----------------------------------------------------------------------


def increments_covariance(noise: str, H: float) -> NDArray[np.float64]:
    """Covariance of X_1, X_2, X_3 from the formulas."""
    if noise == "type-I":
        g = [1.0, (2 ** (2 * H) - 2) / 2, (3 ** (2 * H) - 2 * 2 ** (2 * H) + 1) / 2]
        return np.array([[g[abs(i - j)] for j in range(3)] for i in range(3)])
    d = H - 0.5
    b = np.array([[1.0, 0.0, 0.0], [d, 1.0, 0.0], [d * (d + 1) / 2, d, 1.0]])
    return b @ b.T


def below_threshold(noise: str, H: float, n: int, theta: float, window: int) -> tuple[float, float]:
    """P(quiescent) of all walks, and of walks with mass, after n = 2 or 3 steps, by integrating the Gaussian density.

    A walk is quiescent if the last increment leaves it below a bound that follows from the ones before, so that the integral over
    the last one is a conditional normal distribution function; the others are integrated by quadrature, on each side of
    every line at which the bound has a kink.
    """
    covariance = increments_covariance(noise, H)[:n, :n]
    earlier, cross = covariance[:-1, :-1], covariance[:-1, -1]
    inverse = np.linalg.inv(earlier)
    drift = inverse @ cross
    sd = math.sqrt(covariance[-1, -1] - cross @ drift)
    norm = 1 / math.sqrt((2 * math.pi) ** (n - 1) * np.linalg.det(earlier))

    def density(*x: float) -> float:
        """Density of the earlier increments times the probability that the last one leaves the walk quiescent."""
        rates: list[float] = []
        for step in x:
            rates.append(max(0.0, (rates[-1] if rates else 0.0) + step))
        formed = sum(rates)
        # mean of the last w rates below theta times the mean of all n, solved for the last rate; at w = n only an empty walk is
        recent = sum(rates[n - window :]) if window < n else formed
        bound = (theta * formed / n - recent / window) / (1 / window - theta / n)
        if formed > 0 and bound <= 0:
            return 0.0
        v = np.array(x)
        # the last rate is below the bound where the last increment is below the bound less the rate before
        return norm * math.exp(-0.5 * v @ inverse @ v) * float(ndtr((bound - rates[-1] - drift @ v) / sd))

    far = 8.0 * math.sqrt(covariance.diagonal().max())
    total = 0.0
    for a, b in ((-far, 0.0), (0.0, far)):
        if n == 2:
            total += quad(density, a, b, epsabs=1e-8, epsrel=0)[0]
            continue

        def over_second(x: float) -> float:
            # the walk falls to zero at -x; the bound of a window of two steps is positive up to (theta / (1.5 - theta) - 1) x
            rate = max(x, 0.0)
            kinks = sorted({-far, 0.0, -rate, (theta / (1.5 - theta) - 1) * rate, far})
            return sum(quad(lambda y: density(x, y), lo, hi, epsabs=1e-7, epsrel=0)[0] for lo, hi in itertools.pairwise(kinks))

        total += quad(over_second, a, b, epsabs=1e-6, epsrel=0)[0]
    empty = multivariate_normal(np.zeros(n), covariance, abseps=1e-7, releps=0, seed=703).cdf(np.zeros(n))
    return total, (total - empty) / (1 - empty)


RATE_H = {"type-I": [0.3, 0.75, 0.96], "type-II": [0.3, 0.8, 1.1]}


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_rates_below_a_threshold_agree_with_integrals_of_the_gaussian_density_up_to_three_steps(noise: str) -> None:
    h, thetas = RATE_H[noise], [0.2, 0.5]
    # windows of one, two and three steps at n = 3; of one and two steps (the last scale) at n = 2
    scales = np.array([0.0, math.log(2) / math.log(3), 1.0])
    batches = batches_of(noise, TableAxes(np.array(h), np.array([1, 2, 3]), np.array([0.0]), scales, np.array(thetas)), 64, 714)
    mean, se = batches.mean(axis=0), batches.std(axis=0, ddof=1) / 8
    comparisons = list(itertools.product(range(len(h)), (2, 3), range(2), (1, 2)))
    limit = t_limit(2 * len(comparisons), 64)
    for i, n, k, window in comparisons:
        node = (i, n - 1, slice(None), 0 if window == 1 else 1 - n, 1 + k)
        expected = below_threshold(noise, h[i], n, thetas[k], window)
        # 1e-5 for the quadrature and for single precision
        assert (np.abs(mean[node] - expected) < limit * se[node] + 1e-5).all(), (h[i], n, thetas[k], window)
    # after one step a walk is at its mean rate or at zero
    np.testing.assert_allclose(mean[:, 0, 0, :, 1:], 0.5, atol=1e-6)
    np.testing.assert_allclose(mean[:, 0, 1, :, 1:], 0.0, atol=1e-6)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_the_shipped_table_agrees_with_integrals_of_the_gaussian_density_up_to_three_steps(noise: str) -> None:
    table = shipped_table(noise)
    limit = t_limit(24, int(table.made_by["batches"]))
    for H, n, theta in itertools.product(RATE_H[noise], (2, 3), (0.2, 0.55)):
        expected = below_threshold(noise, H, n, theta, 1)
        for mass, value in zip((None, 0.0), expected, strict=True):
            found = float(table.fraction(H, n, f"rate<{theta}", min_mass=mass))
            error = float(table.standard_error(H, n, f"rate<{theta}", min_mass=mass))
            assert abs(found - value) < limit * error + 1e-5, (H, n, theta, mass)


# -- asymptotic laws -------------------------------------------------------------------------------------------------


def slopes(batches: NDArray[np.float64], ratio: float) -> tuple[float, float]:
    """Log-slope between the two columns of `batches` (batches, 2), and its standard error, by the jackknife."""
    total, count = batches.sum(axis=0), len(batches)
    estimate = math.log(total[1] / total[0]) / math.log(ratio)
    without = np.log((total[1] - batches[:, 1]) / (total[0] - batches[:, 0])) / math.log(ratio)
    return estimate, math.sqrt((count - 1) * np.var(without))


#: H and the slope recorded with 300,000 walks, standard error about 0.01.
MOLCHAN = [(0.3, -0.696), (0.6, -0.395), (0.7, -0.299), (0.75, -0.253)]


def check_zero_fraction_slopes(batches: NDArray[np.float64]) -> None:
    limit = t_limit(2 * len(MOLCHAN), len(batches))
    for i, (H, recorded) in enumerate(MOLCHAN):
        slope, se = slopes(batches[:, i], 4.0)
        assert abs(slope - recorded) < limit * math.hypot(se, 0.01)
        # Persistence exponent of fractional Brownian motion, 1 - H: Molchan 1999, Commun. Math. Phys. 205, 97.  It is a
        # limit; at a few hundred steps the slope may still differ from it by 0.01.
        assert abs(slope + (1 - H)) < limit * se + 0.01


def test_the_zero_fraction_of_type_1_falls_with_molchans_exponent() -> None:
    axes = zero_only([H for H, _ in MOLCHAN], [300, 1200])
    check_zero_fraction_slopes(batches_of("type-I", axes, 24, 707)[:, :, :, 0, 0, 0])


@pytest.mark.heavy
def test_the_zero_fraction_of_type_1_falls_with_molchans_exponent_to_a_few_per_mille() -> None:
    axes = zero_only([H for H, _ in MOLCHAN], [300, 1200])
    check_zero_fraction_slopes(batches_of("type-I", axes, 300, 708)[:, :, :, 0, 0, 0])


def rates_at(
    noise: str, H: float, steps: Sequence[int], seed: int, reduce: Callable[[NDArray[np.float64]], object]
) -> NDArray[np.float64]:
    """Reduce the rates at some steps of 20 independent groups of 1000 walks each."""
    rng = np.random.default_rng(seed)
    at = np.array(steps) - 1
    return np.array([reduce(reflect(draw_noise(noise, H, max(steps), 1000, rng))[:, at]) for _ in range(20)])


@pytest.mark.parametrize("H", [0.6, 0.75, 0.95])
def test_the_mean_rate_of_type_1_grows_as_n_to_the_h(H: float) -> None:
    means = rates_at("type-I", H, [300, 1200], 709, lambda rates: rates.mean(axis=0))
    slope, se = slopes(means, 4.0)
    # Self-similarity of fractional Brownian motion; 0.01 is what the discrete walk still differs by at these steps.
    assert abs(slope - H) < 0.01 + t_limit(3, 20) * se


def test_the_mean_rate_at_one_half_is_that_of_the_reflected_gaussian_walk() -> None:
    steps = [1, 10, 300, 1200]
    means = rates_at("type-I", 0.5, steps, 710, lambda rates: rates.mean(axis=0))
    # Spitzer (1956): E S_n = sum over k of E max(W_k, 0) / k = sum of 1 / sqrt(2 pi k), near sqrt(2 n / pi) - 0.58.
    exact = np.array([sum(1 / math.sqrt(2 * math.pi * k) for k in range(1, n + 1)) for n in steps])
    np.testing.assert_allclose(exact[2:], [math.sqrt(2 * n / math.pi) - 0.58 for n in steps[2:]], atol=0.02)
    z = (means.mean(axis=0) - exact) / (means.std(axis=0, ddof=1) / math.sqrt(20))
    assert np.abs(z).max() < t_limit(len(steps), 20)


#: H and sd / mean of S, type II, n = 1200, among walks not at zero, as recorded with a standard error of 0.003.
SPREAD = [(0.5, 0.755), (0.75, 0.975), (0.95, 1.020), (1.0, 1.008)]


@pytest.mark.parametrize(("H", "recorded"), SPREAD)
def test_the_spread_of_rates_of_type_2_is_near_the_square_root_of_h(H: float, recorded: float) -> None:
    def moments(rates: NDArray[np.float64]) -> list[float]:
        forming = rates[rates > 0]
        return [forming.size, forming.sum(), (forming**2).sum()]

    groups = rates_at("type-II", H, [1200], 711, moments)

    def spread(totals: NDArray[np.float64]) -> NDArray[np.float64]:
        n, first, second = totals.T
        return np.sqrt(second / n - (first / n) ** 2) / (first / n)

    total = groups.sum(axis=0)
    value = float(spread(total[None])[0])
    se = math.sqrt(19 * np.var(spread(total - groups)))
    limit = t_limit(2 * len(SPREAD), 20)
    assert abs(value - recorded) < limit * math.hypot(se, 0.003)
    assert abs(value / math.sqrt(H) - 1) < 0.15 + limit * se
