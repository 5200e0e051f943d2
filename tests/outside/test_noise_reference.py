"""Increments against another generator of fractional Gaussian noise, and against the definition of fractional integration.

The reference is the package fbm 0.3 (Flynn, PyPI), an implementation of its own of Davies & Harte (1987) and of Cholesky
factors.  Distributions are compared, through moments whose standard errors are known, not numbers.
"""

from __future__ import annotations

import numpy as np
import pytest
from fbm import FBM
from numpy.typing import NDArray
from scipy import stats
from scipy.signal import lfilter
from scipy.special import binom

from hurstfit.walks import draw_noise, reflect

# Each test fails by chance once in a thousand over all its comparisons (Bonferroni); seeds are fixed.
FALSE_ALARM = 1e-3
N = 16


def z_limit(comparisons: int) -> float:
    return float(stats.norm.isf(FALSE_ALARM / (2 * comparisons)))


def reference_noise(H: float, size: int, method: str, seed: int) -> NDArray[np.float64]:
    """Draw from the other package, which takes its random numbers from NumPy's global state."""
    np.random.seed(seed)  # noqa: NPY002
    generator = FBM(N, H, N, method)
    return np.array([generator.fgn() for _ in range(size)])


def second_moments(x: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Estimate Cov(X_i, X_j) of independent rows of mean zero, with standard errors from their scatter."""
    products = np.einsum("si,sj->sij", x, x)
    return products.mean(axis=0), products.std(axis=0, ddof=1) / np.sqrt(len(x))


# At large H the other package falls back from circulants on Hosking's recursion, which is exact as well.
@pytest.mark.filterwarnings("ignore:Combination of increments n and Hurst value H:UserWarning")
@pytest.mark.parametrize("H", [0.3, 0.5, 0.75, 0.9])
@pytest.mark.parametrize(("method", "size"), [("daviesharte", 8_000), ("cholesky", 40_000)])
def test_covariances_are_those_of_the_other_generator(H: float, method: str, size: int) -> None:
    theirs, their_se = second_moments(reference_noise(H, size, method, 601))
    ours, our_se = second_moments(draw_noise("type-I", H, N, 40_000, np.random.default_rng(602)))
    z = (ours - theirs) / np.hypot(our_se, their_se)
    assert np.abs(z).max() < z_limit(N * (N + 1) // 2)
    # The comparison sees a wrong exponent: at another H the same moments are far off.
    wrong, wrong_se = second_moments(draw_noise("type-I", H + 0.08, N, 40_000, np.random.default_rng(603)))
    assert np.abs((wrong - theirs) / np.hypot(wrong_se, their_se)).max() > z_limit(N * (N + 1) // 2)


@pytest.mark.parametrize("H", [0.3, 0.75, 0.9])
def test_sums_grow_as_those_of_the_other_generator_and_as_n_to_the_two_h(H: float) -> None:
    size = 40_000
    theirs = np.cumsum(reference_noise(H, size, "cholesky", 604), axis=1)
    ours = np.cumsum(draw_noise("type-I", H, N, size, np.random.default_rng(605)), axis=1)
    # Var of a Gaussian's sample variance about a known mean: 2 sigma^4 / size; so ln(variance) has error sqrt(2 / size).
    z = (np.log((ours**2).mean(axis=0)) - np.log((theirs**2).mean(axis=0))) / np.sqrt(4 / size)
    assert np.abs(z).max() < z_limit(N)
    # Mandelbrot & Van Ness 1968: Var W_n = n^{2H}
    exact = (np.log((ours**2).mean(axis=0)) - 2 * H * np.log(np.arange(1, N + 1))) / np.sqrt(2 / size)
    assert np.abs(exact).max() < z_limit(N)


@pytest.mark.parametrize("H", [0.3, 0.75, 0.9])
def test_walks_on_the_other_noise_rest_at_zero_as_often(H: float) -> None:
    size = 40_000
    theirs = (reflect(reference_noise(H, size, "cholesky", 606)) == 0).mean(axis=0)
    ours = (reflect(draw_noise("type-I", H, N, size, np.random.default_rng(607))) == 0).mean(axis=0)
    pooled = (ours + theirs) / 2
    z = (ours - theirs) / np.sqrt(2 * pooled * (1 - pooled) / size)
    assert np.abs(z).max() < z_limit(N)


@pytest.mark.parametrize("H", [0.3, 0.75, 1.0, 1.3])
def test_fractional_differences_of_type_2_are_white(H: float) -> None:
    # The definition (1 - B)^d X = e of Granger & Joyeux (1980) and Hosking (1981), d = H - 1/2, by the binomial series.
    n, size = 30, 20_000
    x = draw_noise("type-II", H, n, size, np.random.default_rng(608))
    series = (-1.0) ** np.arange(n) * binom(H - 0.5, np.arange(n))
    innovations = lfilter(series, [1.0], x, axis=1)
    moments, se = second_moments(innovations)
    z = (moments - np.eye(n)) / se
    assert np.abs(z).max() < z_limit(n * (n + 1) // 2)
