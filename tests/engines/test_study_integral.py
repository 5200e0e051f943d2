"""The likelihood of a study with its selection terms integrated out, against dense sums and quadrature by others."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import quad
from scipy.special import logsumexp

from hurstfit.engines.gaussians import Gaussian, derivatives, gauss_hermite, inverse_root, maximise, stencil
from hurstfit.engines.study_integral import StudyFactor, study_factors
from hurstfit.problem import load_problem

FREE = {
    "completeness_ratio": {"lognormal": [0.95, 0.05]},
    "missed_fraction": {"mean": 0.06, "sd": 0.02},
    "contamination": {"validation": [8, 400]},
}
FIXED = {"completeness_ratio": 0.9, "missed_fraction": 0.07, "contamination": 0.02}
SUBSETS = [subset for d in range(4) for subset in combinations(FREE, d)]


def factor_of(case, free: tuple[str, ...], rows: tuple[str, ...] = (), **changes) -> StudyFactor:
    """Give the first study of the small case with some terms free."""
    if rows:
        case.bins(*rows)
    terms = {**FIXED, **{term: FREE[term] for term in free}}
    return study_factors(load_problem(case.config(selection={"default": terms}, **changes)).posterior)[0]


def dense(factor: StudyFactor, fraction: np.ndarray, reach: float = 8.0, points: int = 81) -> np.ndarray:
    """Sum over an even grid: for smooth functions that vanish at both ends the error falls exponentially with its spacing."""
    axis = np.linspace(-reach, reach, points)
    t = np.stack(np.meshgrid(*[axis] * factor.dimension, indexing="ij"), axis=-1).reshape(1, -1, factor.dimension)
    cell = factor.dimension * (np.log(axis[1] - axis[0]) - 0.5 * np.log(2 * np.pi))
    return np.array([logsumexp(factor.log_kernel(f[None], t)) + cell for f in fraction])


@pytest.mark.parametrize("free", SUBSETS, ids=lambda terms: "+".join(terms) or "none")
def test_every_combination_of_free_terms_matches_a_dense_sum(case, free: tuple[str, ...]) -> None:
    factor = factor_of(case, free)
    assert factor.dimension == len(free)
    fraction = np.array([[0.11, 0.12, 0.13], [0.13, 0.14, 0.15], [0.15, 0.16, 0.17]])
    expected = dense(factor, fraction) if free else factor.log_kernel(fraction, np.zeros((3, 1, 0)))[:, 0]
    for bent in (False, True):
        gaussian = factor.gaussian(fraction, np.zeros((3, len(free))))
        found = factor.log_integral(fraction, gaussian, 12, bent=bent)
        assert found == pytest.approx(expected, abs=1e-4)


def test_one_free_term_matches_quadrature_of_the_binomial(case) -> None:
    # outside source: scipy.integrate.quad over scipy.stats.beta and scipy.stats.binom, in the term's own units
    factor = factor_of(case, ("contamination",), ("A,0.5,1.0,10.0,11.0,300,40,true", "A,1.0,1.5,10.0,11.0,200,31,true"))
    fraction = np.array([[0.10, 0.12]])

    def integrand(v: float) -> float:
        f, r, u = fraction[0], FIXED["completeness_ratio"], FIXED["missed_fraction"]
        p = (f * r * (1 - u) + (1 - f) * v) / (f * r + 1 - f)
        return float(np.prod(stats.binom.pmf([40, 31], [300, 200], p)) * stats.beta.pdf(v, 9, 393))

    expected = np.log(quad(integrand, 0, 0.2, epsrel=1e-10, points=[0.02, 0.04])[0])
    gaussian = factor.gaussian(fraction, np.zeros((1, 1)))
    found = factor.log_integral(fraction, gaussian, 12)[0] + factor.counts.log_coefficient
    assert found == pytest.approx(expected, abs=1e-5)


@pytest.mark.parametrize("n", [200_000, 10_000_000])
def test_counts_that_tie_the_terms_to_a_bent_sheet_are_integrated_along_it(case, n: int) -> None:
    # given the fraction, ten million galaxies fix the counted fraction to 1e-4: contamination is then a curved function of
    # the other two terms.  Reference: an even grid in these two, and the third by its own fine grid about its own mode
    factor = factor_of(case, tuple(FREE), (f"A,0.5,1.0,10.0,11.0,{n},{round(0.15 * n)},true",))
    fraction = np.array([[0.14]])
    axis = np.linspace(-7, 7, 57)
    outer = np.stack(np.meshgrid(axis, axis, indexing="ij"), axis=-1).reshape(-1, 2)
    v = 0.15 * (0.14 * (r := factor.quantiles(np.c_[outer, outer[:, :1]])[:, 0]) + 0.86)
    u = factor.quantiles(np.c_[outer, outer[:, :1]])[:, 1]
    v = (v - 0.14 * r * (1 - u)) / 0.86
    inside = (v > 1e-4) & (v < 0.3)
    prior = factor.quantiles.priors[2]
    centre = np.asarray(prior.to_normal(v[inside]))
    slope = np.exp(-0.5 * centre**2) / np.sqrt(2 * np.pi) / np.exp(prior.log_pdf(v[inside]))
    width = np.sqrt(0.15 * 0.85 / n) * (0.14 * r[inside] + 0.86) / 0.86 / slope
    line = np.linspace(-12, 12, 97)
    t = np.concatenate([np.repeat(outer[inside, None], line.size, axis=1), (centre + width * line[:, None]).T[..., None]], axis=2)
    values = factor.log_kernel(np.repeat(fraction, t.shape[0], axis=0), t)
    cell = 2 * np.log(axis[1] - axis[0]) + np.log(line[1] - line[0]) - 1.5 * np.log(2 * np.pi)
    expected = logsumexp(values + np.log(width)[:, None]) + cell
    gaussian = factor.gaussian(fraction, np.zeros((1, 3)))
    orders = {order: factor.log_integral(fraction, gaussian, order, bent=True)[0] for order in (6, 12)}
    assert orders[12] == pytest.approx(expected, abs=2e-3)
    assert orders[6] == pytest.approx(expected, abs=2e-2)


def test_ridges_give_the_same_as_straight_nodes_where_all_is_normal(case) -> None:
    # a prior alone is a standard normal: both maps are then the identity
    factor = factor_of(case, tuple(FREE), ("A,0.5,1.0,10.0,11.0,1,0,true",))
    z, _ = gauss_hermite(3, 3)
    gaussian = factor.gaussian(np.array([[1e-9]]), np.zeros((1, 3)))
    points, log_volume = factor.along_ridge(np.array([[1e-9]]), gaussian, z[None])
    assert points[0] == pytest.approx(gaussian.at(z)[0], abs=0.05)
    assert log_volume[0] == pytest.approx(gaussian.log_scale[0], abs=0.05)


@pytest.mark.parametrize("d", [1, 2, 3, 5])
def test_a_quadratic_is_maximised_in_one_step_and_integrated_exactly(d: int) -> None:
    rng = np.random.default_rng(d)
    root = rng.standard_normal((4, d, d))
    precision = root @ root.transpose(0, 2, 1) + 0.5 * np.eye(d)
    centre = 0.5 * rng.standard_normal((4, d))

    def quadratic(chosen: np.ndarray, x: np.ndarray) -> np.ndarray:
        y = x - centre[chosen, None]
        return -0.5 * np.einsum("vni,vij,vnj->vn", y, precision[chosen], y)

    found = maximise(quadratic, np.zeros((4, d)))
    assert found.mode == pytest.approx(centre, abs=1e-5)
    covariance = found.spread @ found.spread.transpose(0, 2, 1)
    assert covariance == pytest.approx(np.linalg.inv(precision), abs=1e-5)
    assert found.log_scale == pytest.approx(-0.5 * np.linalg.slogdet(precision)[1], abs=1e-5)


@pytest.mark.parametrize("d", [0, 1, 2, 3, 4])
def test_derivatives_of_a_cubic_are_exact(d: int) -> None:
    # central differences of second order miss the third derivative of the gradient only by difference^2
    x = stencil(d)
    gradient, curvature = derivatives((np.sum(x, axis=1) + np.sum(x, axis=1) ** 2)[None], d)
    assert gradient[0] == pytest.approx(np.ones(d), abs=1e-8)
    assert curvature[0] == pytest.approx(-2 * np.ones((d, d)), abs=1e-6)


def test_the_inverse_root_is_triangular_and_positive_whatever_the_curvature() -> None:
    rng = np.random.default_rng(3)
    symmetric = rng.standard_normal((50, 3, 3))
    symmetric = symmetric + symmetric.transpose(0, 2, 1)
    root = inverse_root(symmetric)
    assert np.isfinite(root).all()
    assert np.abs(np.triu(root, 1)).max() < 1e-12
    assert (np.einsum("vii->vi", root) > 0).all()
    positive = symmetric @ symmetric.transpose(0, 2, 1) + 0.1 * np.eye(3)
    root = inverse_root(positive)
    assert root @ root.transpose(0, 2, 1) @ positive == pytest.approx(np.broadcast_to(np.eye(3), positive.shape), abs=1e-9)


@pytest.mark.parametrize("dimension", [0, 1, 2, 3])
def test_gauss_hermite_weights_average_polynomials_exactly(dimension: int) -> None:
    # moments of a standard normal: mean 0, variance 1, fourth moment 3
    z, log_weights = gauss_hermite(4, dimension)
    assert z.shape == (4**dimension, dimension)
    weights = np.exp(log_weights)
    assert weights.sum() == pytest.approx(1.0)
    assert weights @ z**2 == pytest.approx(np.ones(dimension))
    assert weights @ z**4 == pytest.approx(3 * np.ones(dimension))


def test_the_log_density_of_a_gaussian_is_that_of_scipy() -> None:
    rng = np.random.default_rng(4)
    spread = np.tril(rng.standard_normal((3, 2, 2))) + 2 * np.eye(2)
    gaussian, x = Gaussian(rng.standard_normal((3, 2)), spread), rng.standard_normal((3, 2))
    expected = [stats.multivariate_normal.logpdf(x[i], gaussian.mode[i], spread[i] @ spread[i].T) for i in range(3)]
    assert gaussian.log_density(x) == pytest.approx(expected)
