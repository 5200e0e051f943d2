"""Exact zero fractions: where they exist, and that they rest on the right covariance."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from hurstfit.fractions.exact import backward_sum_covariance, exact_zero_fraction
from hurstfit.walks.noise import NOISE_TYPES, noise_type


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize("H", [0.1, 0.5, 0.85, 1.0])
@pytest.mark.parametrize("n", [1, 2, 5, 30])
def test_the_covariance_of_backward_sums_follows_from_the_response_to_single_impulses(noise: str, H: float, n: int) -> None:
    kind = noise_type(noise)
    # The increments are linear in white noise: X = B e, from the inverse transform of the transfer function.
    response = np.fft.ifft(kind.transfer(H, n))
    lag = np.subtract.outer(np.arange(n), np.arange(2 * n)) % (2 * n)
    matrix = response[lag]
    if noise == "type-II":
        # only the first n innovations are not zero
        matrix = matrix[:, :n]
        scale = 1.0
    else:
        # white noise in frequency, of unit variance in each of 2n places, is 2n times white in time over (2n)^2
        scale = 1.0 / (2 * n)
    increments = scale * (matrix @ matrix.conj().T).real
    sums = np.array([[1.0 if t >= n - 1 - i else 0.0 for t in range(n)] for i in range(n)])
    np.testing.assert_allclose(backward_sum_covariance(noise, H, n), sums @ increments @ sums.T, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("H", [0.05, 0.3, 0.75, 0.95, 1.0])
def test_backward_sums_of_type_1_are_fractional_brownian_motion(H: float) -> None:
    # C_ij = (i^{2H} + j^{2H} - |i-j|^{2H}) / 2 (Mandelbrot & Van Ness 1968)
    i = np.arange(1.0, 21.0)
    expected = (i[:, None] ** (2 * H) + i ** (2 * H) - np.abs(i[:, None] - i) ** (2 * H)) / 2
    np.testing.assert_allclose(backward_sum_covariance("type-I", H, 20), expected, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize("H", [0.05, 0.3, 0.5, 0.7, 0.95, 0.9875])
@pytest.mark.parametrize("n", [2, 3])
def test_closed_forms_agree_with_the_multivariate_normal_distribution(noise: str, H: float, n: int) -> None:
    covariance = backward_sum_covariance(noise, H, n)
    orthant = multivariate_normal(np.zeros(n), covariance, allow_singular=True, abseps=1e-6, releps=0, seed=0)
    # scipy's error estimate is that of a random shift of its lattice: ten times what is asked of it is never reached.
    assert exact_zero_fraction(noise, H, n) == pytest.approx(orthant.cdf(np.zeros(n)), abs=1e-5)


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize("n", [1, 2, 3, 4, 50, 600, 1200, 2048])
def test_at_one_half_the_value_is_the_central_binomial_one_whatever_the_noise(noise: str, n: int) -> None:
    expected = float(Fraction(math.comb(2 * n, n), 4**n))
    # Differences of log-gamma values near 2 n ln(2 n), each rounded.
    assert exact_zero_fraction(noise, 0.5, n) == pytest.approx(expected, rel=2e-16 * 8 * n * math.log(4 * n + 2))


def test_at_the_limit_of_type_1_half_of_all_walks_rest_for_ever() -> None:
    for n in (1, 2, 3, 4, 600, 2048):
        assert exact_zero_fraction("type-I", 1.0, n) == 0.5


def test_nothing_is_claimed_where_no_closed_form_exists() -> None:
    assert exact_zero_fraction("type-I", 0.75, 4) is None
    assert exact_zero_fraction("type-II", 0.75, 4) is None
    # H = 1 is a limit for type I only
    assert exact_zero_fraction("type-II", 1.0, 4) is None
    assert exact_zero_fraction("type-II", 1.0, 3) is not None


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_one_step_is_a_fair_coin_at_every_exponent(noise: str) -> None:
    assert all(exact_zero_fraction(noise, H, 1) == 0.5 for H in (0.05, 0.5, 0.8, 1.0))
