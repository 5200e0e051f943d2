"""The increments: exact by construction, checked without random numbers where possible and by their moments otherwise."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from hurstfit.walks.noise import (
    NOISE_TYPES,
    draw_noise,
    fractional_gaussian_autocovariance,
    fractional_integration_weights,
    noise_type,
)

# Every statistical test below fails by chance once in a thousand over all its comparisons (Bonferroni), and its seed is fixed.
FALSE_ALARM = 1e-3


def z_limit(comparisons: int) -> float:
    return float(stats.norm.isf(FALSE_ALARM / (2 * comparisons)))


def covariance_by_hand(noise: str, H: float, n: int) -> NDArray[np.float64]:
    """Covariance of X_1 ... X_n, from the published formulas in plain loops."""
    if noise == "type-I":
        # Mandelbrot & Van Ness 1968
        g = [(abs(k + 1) ** (2 * H) - 2 * abs(k) ** (2 * H) + abs(k - 1) ** (2 * H)) / 2 for k in range(n)]
        return np.array([[g[abs(i - j)] for j in range(n)] for i in range(n)])
    # Hosking 1981, with d = H - 1/2; 1 / Gamma(d) is 0 at d = 0
    d = H - 0.5
    psi = [1.0] + [0.0 if d == 0 else math.gamma(j + d) / (math.gamma(d) * math.gamma(j + 1)) for j in range(1, n)]
    return np.array([[sum(psi[i - k] * psi[j - k] for k in range(min(i, j) + 1)) for j in range(n)] for i in range(n)])


@pytest.mark.parametrize("H", [0.05, 0.3, 0.5, 0.75, 0.95, 0.9875, 1.0])
@pytest.mark.parametrize("n", [1, 2, 5, 64, 2048])
def test_type_1_transfer_carries_the_autocovariance_at_every_lag(H: float, n: int) -> None:
    power = np.abs(noise_type("type-I").transfer(H, n)) ** 2 / (2 * n) ** 2
    implied = (np.fft.fft(power).real)[: n + 1]
    k = np.arange(n + 1, dtype=float)
    expected = ((k + 1) ** (2 * H) - 2 * k ** (2 * H) + np.abs(k - 1) ** (2 * H)) / 2
    # Rounding of the second difference: terms as large as n^{2H} cancel, and the transform sums 2n of them.
    rounding = 20 * np.finfo(float).eps * (n + 1) ** (2 * H)
    np.testing.assert_allclose(implied, expected, rtol=0, atol=max(rounding, 1e-13))


@pytest.mark.parametrize("H", [0.05, 0.3, 0.5, 0.75, 1.0, 1.3])
def test_type_2_transfer_is_that_of_the_weights_and_of_nothing_else(H: float) -> None:
    n = 100
    weights = np.fft.ifft(noise_type("type-II").transfer(H, n))
    d = H - 0.5
    expected = [1.0] + [0.0 if d == 0 else math.exp(math.lgamma(j + d) - math.lgamma(j + 1)) / math.gamma(d) for j in range(1, n)]
    np.testing.assert_allclose(weights.real[:n], expected, rtol=1e-11, atol=1e-14)
    np.testing.assert_allclose(weights.real[n:], 0.0, atol=1e-14)
    np.testing.assert_allclose(weights.imag, 0.0, atol=1e-14)


def test_the_first_weights_of_type_2_are_one_and_d() -> None:
    assert fractional_integration_weights(0.8, 1).tolist() == [1.0]
    np.testing.assert_allclose(fractional_integration_weights(0.8, 3), [1.0, 0.3, 0.3 * 1.3 / 2], rtol=1e-15)


def test_type_2_at_one_half_repeats_its_innovations_and_at_three_halves_would_sum_them() -> None:
    assert fractional_integration_weights(0.5, 5).tolist() == [1.0, 0.0, 0.0, 0.0, 0.0]
    assert fractional_integration_weights(1.5, 5).tolist() == [1.0, 1.0, 1.0, 1.0, 1.0]


def test_autocovariance_is_even_one_at_lag_zero_and_that_of_white_noise_at_one_half() -> None:
    lags = np.arange(-4, 5)
    g = fractional_gaussian_autocovariance(0.7, lags)
    np.testing.assert_array_equal(g, g[::-1])
    assert g[4] == 1.0
    np.testing.assert_allclose(fractional_gaussian_autocovariance(0.5, lags), lags == 0, atol=1e-15)
    np.testing.assert_array_equal(fractional_gaussian_autocovariance(1.0, lags), 1.0)


@pytest.mark.parametrize(
    ("noise", "H"), [("type-I", 0.3), ("type-I", 0.75), ("type-I", 0.95), ("type-II", 0.3), ("type-II", 1.0)]
)
@pytest.mark.parametrize("n", [7, 24])
def test_covariance_of_drawn_increments_is_that_of_the_formula(noise: str, H: float, n: int) -> None:
    size = 40_000
    x = draw_noise(noise, H, n, size, np.random.default_rng(101))
    expected = covariance_by_hand(noise, H, n)
    # Var of the mean of X_i X_j over independent Gaussian draws: (C_ii C_jj + C_ij^2) / size (Isserlis 1918).
    variance = np.diag(expected)
    se = np.sqrt((np.outer(variance, variance) + expected**2) / size)
    z = (x.T @ x / size - expected) / se
    assert np.abs(z).max() < z_limit(n * (n + 1) // 2)
    mean_z = x.mean(axis=0) / np.sqrt(variance / size)
    assert np.abs(mean_z).max() < z_limit(n)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_realisations_of_one_call_are_independent_of_each_other(noise: str) -> None:
    n, size = 16, 4
    rng = np.random.default_rng(102)
    calls = np.stack([draw_noise(noise, 0.8, n, size, rng) for _ in range(20_000)])
    variance = np.diag(covariance_by_hand(noise, 0.8, n))
    se = np.sqrt(np.outer(variance, variance) / len(calls))
    pairs = [(a, b) for a in range(size) for b in range(a)]
    z = [np.abs(calls[:, a].T @ calls[:, b] / len(calls) / se).max() for a, b in pairs]
    assert max(z) < z_limit(len(pairs) * n * n)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_increments_are_normal(noise: str) -> None:
    size = 20_000
    x = draw_noise(noise, 0.8, 12, size, np.random.default_rng(103))
    sd = np.sqrt(np.diag(covariance_by_hand(noise, 0.8, 12)))
    p = [stats.kstest(x[:, t] / sd[t], "norm").pvalue for t in range(12)]
    assert min(p) > FALSE_ALARM / 12


def test_at_h_one_all_type_1_increments_of_a_walk_are_equal() -> None:
    x = draw_noise("type-I", 1.0, 300, 200, np.random.default_rng(104))
    # Single precision: each value is rounded to 6e-8 of itself a few times.
    np.testing.assert_allclose(x, x[:, :1] * np.ones(300), rtol=1e-5)
    assert np.unique(x[:, 0]).size == 200


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_neighbouring_h_share_their_random_numbers(noise: str) -> None:
    # d X / d H is of order one, so that a difference of 1e-3 in H moves X by about 1e-3.
    a, b = (draw_noise(noise, H, 50, 100, np.random.default_rng(105)) for H in (0.7, 0.701))
    assert 0 < np.abs(a - b).max() < 0.05


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize(("n", "size"), [(1, 1), (1, 5), (4, 1), (9, 3), (10, 4)])
def test_draws_have_the_shape_asked_for_and_repeat_with_the_seed(noise: str, n: int, size: int) -> None:
    x = draw_noise(noise, 0.8, n, size, np.random.default_rng(106))
    assert x.shape == (size, n)
    assert x.dtype == np.float64
    np.testing.assert_array_equal(x, draw_noise(noise, 0.8, n, size, np.random.default_rng(106)))
    assert not np.array_equal(x, draw_noise(noise, 0.8, n, size, np.random.default_rng(107)))


@pytest.mark.parametrize(
    ("noise", "H"),
    [("type-I", 0.0), ("type-I", -0.1), ("type-I", 1.01), ("type-I", math.nan), ("type-II", 0.0), ("type-II", 1.5)],
)
def test_an_exponent_without_noise_is_refused(noise: str, H: float) -> None:
    with pytest.raises(ValueError, match=rf"{noise} noise exists for H in \(0, 1"):
        draw_noise(noise, H, 10, 10, np.random.default_rng(0))


def test_an_unknown_noise_type_and_empty_draws_are_refused() -> None:
    with pytest.raises(ValueError, match="'type-III' is not one of type-I, type-II"):
        noise_type("type-III")
    for n, size in ((0, 1), (1, 0), (-3, 5)):
        with pytest.raises(ValueError, match=f"must be positive, not {n} and {size}"):
            draw_noise("type-I", 0.7, n, size, np.random.default_rng(0))
