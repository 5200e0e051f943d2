"""Splines: what they reproduce exactly, and the same surfaces from scipy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import BSpline, CubicSpline, NdBSpline, make_interp_spline

from hurstfit.fractions.axes import window_scale
from hurstfit.fractions.spline import Axis, Surface, cardinal_weights, spline_basis

EPS = np.finfo(float).eps
NODES = np.log([1.0, 2.0, 3.0, 5.0, 8.0, 16.0, 64.0])
H = np.array([0.1, 0.3, 0.5, 0.6, 0.9, 1.0])
STEPS = np.array([1.0, 2.0, 4.0, 7.0, 20.0, 90.0, 300.0])
SCALES = np.array([0.0, 0.25, 0.5, 0.75, 1.0])
THRESHOLDS = np.array([0.1, 0.2, 0.3, 0.5, 1.0])


def inside(nodes: NDArray[np.float64], size: int, seed: int) -> NDArray[np.float64]:
    """Points between the ends of `nodes`, both ends and all nodes among them."""
    return np.concatenate([np.random.default_rng(seed).uniform(nodes[0], nodes[-1], size), nodes])


def identity(H: ArrayLike) -> NDArray[np.float64]:
    return np.asarray(H, dtype=float)


def over_h_and_steps(values: NDArray[np.float64]) -> Surface:
    """Lay a surface through values (..., H, STEPS); window and threshold do not matter."""
    return Surface.through(H, STEPS, np.array([0.0]), np.array([1.0]), values[..., None, None], identity)


@pytest.fixture(scope="module")
def values() -> NDArray[np.float64]:
    return np.random.default_rng(501).uniform(0, 1, (H.size, STEPS.size))


@pytest.fixture(scope="module")
def rough(values: NDArray[np.float64]) -> Surface:
    return over_h_and_steps(values)


@pytest.fixture(scope="module")
def full() -> tuple[NDArray[np.float64], Surface]:
    """Lay a surface with all four axes; the values at its nodes come first."""
    shape = (H.size, STEPS.size, SCALES.size, THRESHOLDS.size)
    at_nodes = np.random.default_rng(516).uniform(0, 1, shape)
    return at_nodes, Surface.through(H, STEPS, SCALES, THRESHOLDS, at_nodes, identity)


# -- weights on one axis ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", [1, 2, 3, 4, 5, 7])
def test_weights_sum_to_one_and_pass_through_the_nodes(size: int) -> None:
    nodes = NODES[:size]
    x = inside(nodes, 40, 502)
    weights = cardinal_weights(nodes, x)
    assert weights.shape == (40 + size, size)
    # A few dozen operations on numbers of order one.
    np.testing.assert_allclose(weights.sum(axis=-1), 1.0, rtol=0, atol=100 * EPS)
    np.testing.assert_allclose(cardinal_weights(nodes, nodes), np.eye(size), rtol=0, atol=100 * EPS)


@pytest.mark.parametrize(("size", "degree"), [(1, 0), (2, 1), (3, 1), (4, 3), (5, 3), (7, 3)])
def test_weights_reproduce_polynomials(size: int, degree: int) -> None:
    nodes = NODES[:size]
    x = inside(nodes, 40, 503)
    polynomial = np.polynomial.Polynomial([0.3, -1.2, 0.7, 0.4][: degree + 1])
    np.testing.assert_allclose(cardinal_weights(nodes, x) @ polynomial(nodes), polynomial(x), rtol=0, atol=1e-12)


def test_weights_are_those_of_the_not_a_knot_spline() -> None:
    values = np.random.default_rng(504).standard_normal(NODES.size)
    x = inside(NODES, 100, 505).reshape(-1, 1)
    expected = CubicSpline(NODES, values, bc_type="not-a-knot")(x)
    np.testing.assert_allclose(cardinal_weights(NODES, x) @ values, expected, rtol=0, atol=1e-12)


# -- B-splines -------------------------------------------------------------------------------------------------------


def test_the_four_basis_functions_are_those_of_scipy_and_the_others_are_zero() -> None:
    knots = make_interp_spline(NODES, NODES, k=3).t
    x = inside(NODES, 100, 506)
    first, values = spline_basis(knots, x)
    dense = np.zeros((x.size, NODES.size))
    np.put_along_axis(dense, first[:, None] + np.arange(4), values, axis=-1)
    np.testing.assert_allclose(dense, BSpline.design_matrix(x, knots, 3).toarray(), rtol=0, atol=1e-13)
    np.testing.assert_allclose(values.sum(axis=-1), 1.0, rtol=0, atol=20 * EPS)
    assert values.min() >= 0


def test_the_basis_keeps_the_shape_of_its_points() -> None:
    knots = make_interp_spline(NODES, NODES, k=3).t
    x = inside(NODES, 5, 507).reshape(3, 4)
    first, values = spline_basis(knots, x)
    assert first.shape == (3, 4)
    assert values.shape == (3, 4, 4)


def test_an_axis_has_the_knots_of_the_not_a_knot_spline() -> None:
    np.testing.assert_array_equal(Axis(NODES).knots, make_interp_spline(NODES, NODES, k=3).t)
    with pytest.raises(ValueError, match="needs four nodes, not 3"):
        _ = Axis(NODES[:3]).knots


def test_an_axis_keeps_points_within_its_nodes() -> None:
    axis = Axis(NODES)
    outside = axis.dense_basis(np.array([NODES[0] - 1, NODES[-1] + 1]))
    np.testing.assert_array_equal(outside, axis.dense_basis(NODES[[0, -1]]))
    np.testing.assert_allclose(outside, np.eye(NODES.size)[[0, -1]], rtol=0, atol=20 * EPS)


def test_nothing_varies_along_an_axis_of_one_node() -> None:
    single = Axis(np.array([0.0]))
    np.testing.assert_array_equal(single.dense_basis(np.array([-3.0, 0.0, 7.0])), 1.0)


def test_coefficients_times_basis_interpolate_along_any_axis() -> None:
    values = np.random.default_rng(517).standard_normal((2, NODES.size, 3))
    axis, x = Axis(NODES), inside(NODES, 20, 518)
    result = np.einsum("xn,anb->axb", axis.dense_basis(x), axis.coefficients(values, 1))
    np.testing.assert_allclose(result, CubicSpline(NODES, values, axis=1, bc_type="not-a-knot")(x), rtol=0, atol=1e-12)


# -- surfaces --------------------------------------------------------------------------------------------------------


def test_a_surface_passes_through_its_nodes(
    rough: Surface, values: NDArray[np.float64], full: tuple[NDArray[np.float64], Surface]
) -> None:
    np.testing.assert_allclose(rough(H[:, None], STEPS), values, rtol=0, atol=1e-13)
    at_nodes, surface = full
    # On the nodes of the window scale w = n^s.  At one step all windows are one step: only s = 0 can be asked for.
    h, n, s, theta = np.meshgrid(H, STEPS[1:], SCALES, THRESHOLDS, indexing="ij")
    np.testing.assert_allclose(surface(h, n, n**s, theta), at_nodes[:, 1:], rtol=0, atol=1e-12)
    np.testing.assert_allclose(surface(H[:, None], 1.0, 1.0, THRESHOLDS), at_nodes[:, 0, 0], rtol=0, atol=1e-12)


def test_a_surface_reproduces_a_product_of_cubics() -> None:
    def cubic(h: ArrayLike, n: ArrayLike, s: ArrayLike, theta: ArrayLike) -> NDArray[np.float64]:
        h, y, s, u = np.asarray(h), np.log(n), np.asarray(s), np.log(theta)
        in_h = 1 - 2 * h + 0.5 * h**2 + h**3
        return in_h * (0.2 + y - 0.3 * y**2 + 0.02 * y**3) * (1 + s - s**3) * (2 - u + 0.3 * u**2 + 0.1 * u**3)

    grid = cubic(*np.meshgrid(H, STEPS, SCALES, THRESHOLDS, indexing="ij"))
    surface = Surface.through(H, STEPS, SCALES, THRESHOLDS, grid, identity)
    h, n = inside(H, 61, 508), np.exp(inside(np.log(STEPS), 60, 509))
    s, theta = np.random.default_rng(519).uniform(0, 1, 67), np.exp(inside(np.log(THRESHOLDS), 62, 520))
    # n^s may miss its scale by a rounding of the exponent, which near n = 1 is divided by a small ln n.
    expected = cubic(h, n, window_scale(n**s, n), theta)
    np.testing.assert_allclose(surface(h, n, n**s, theta), expected, rtol=0, atol=1e-10)


def test_a_surface_is_the_tensor_product_spline_of_scipy(rough: Surface, values: NDArray[np.float64]) -> None:
    h, n = inside(H, 200, 510), np.exp(inside(np.log(STEPS), 199, 511)).clip(1, 300)
    along_h = make_interp_spline(H, values, k=3, axis=0)
    along_n = make_interp_spline(np.log(STEPS), along_h.c.T, k=3, axis=0)
    reference = NdBSpline((along_h.t, along_n.t), along_n.c.T, k=3)
    np.testing.assert_allclose(rough(h, n), reference(np.stack([h, np.log(n)], axis=-1)), rtol=0, atol=1e-12)


def test_a_surface_interpolates_one_axis_after_the_other(full: tuple[NDArray[np.float64], Surface]) -> None:
    # One-dimensional splines alone, with no coefficients in between.
    at_nodes, surface = full
    h, n, w, theta = 0.47, 11.0, 3.7, 0.26
    result = at_nodes
    for nodes, x in (
        (H, h),
        (np.log(STEPS), math.log(n)),
        (SCALES, math.log(w) / math.log(n)),
        (np.log(THRESHOLDS), math.log(theta)),
    ):
        result = CubicSpline(nodes, result, axis=0, bc_type="not-a-knot")(x)
    assert float(surface(h, n, w, theta)) == pytest.approx(float(result), abs=1e-12)


@pytest.mark.parametrize("power", [1.0, 0.5])
def test_a_surface_is_a_spline_in_the_coordinate_of_h_that_it_is_given(values: NDArray[np.float64], power: float) -> None:
    def coordinate(h: ArrayLike) -> NDArray[np.float64]:
        return -((1 - np.asarray(h)) ** power)

    surface = Surface.through(H, STEPS, np.array([0.0]), np.array([1.0]), values[..., None, None], coordinate)
    h = inside(H, 20, 521)
    expected = CubicSpline(coordinate(H), values[:, 2], bc_type="not-a-knot")(coordinate(h))
    np.testing.assert_allclose(surface(h, STEPS[2]), expected, rtol=0, atol=1e-12)


def test_points_outside_are_moved_to_the_edge(rough: Surface, full: tuple[NDArray[np.float64], Surface]) -> None:
    h, n = np.array([0.05, 0.5, 1.1, 0.5, 0.5]), np.array([10.0, 10.0, 10.0, 0.5, 301.0])
    np.testing.assert_array_equal(rough(h, n), rough(np.clip(h, 0.1, 1.0), np.clip(n, 1.0, 300.0)))
    surface = full[1]
    # longer than the walk is the walk, shorter than a step is a step
    assert surface(0.5, 20.0, 50.0, 0.2) == surface(0.5, 20.0, 20.0, 0.2)
    assert surface(0.5, 20.0, 0.1, 0.2) == surface(0.5, 20.0, 1.0, 0.2)


def test_a_surface_broadcasts_and_carries_replicates(rough: Surface, values: NDArray[np.float64]) -> None:
    replicates = np.stack([values, 2 * values, values**2])
    surface = over_h_and_steps(replicates)
    h, n = inside(H, 4, 512)[:, None], inside(STEPS, 3, 513)[None, :]
    result = surface(h, n)
    assert result.shape == (3, 10, 10)
    for k in range(3):
        np.testing.assert_allclose(result[k], over_h_and_steps(replicates[k])(h, n), rtol=0, atol=1e-13)
    assert rough(0.5, 10.0).shape == ()


def test_window_and_threshold_do_not_matter_to_a_surface_without_them(rough: Surface) -> None:
    assert rough(0.5, 10.0, 7.0, 0.3) == rough(0.5, 10.0)


def test_full_bases_and_coefficients_give_the_surface(full: tuple[NDArray[np.float64], Surface]) -> None:
    surface = full[1]
    h, n, w, theta = inside(H, 11, 514), inside(STEPS, 10, 515), np.linspace(0.5, 400, 17), np.linspace(0.1, 1, 17)
    assert surface.h_basis(h).shape == (17, H.size)
    walk = surface.walk_basis(n, w, theta)
    assert walk.shape == (17, STEPS.size, SCALES.size, THRESHOLDS.size)
    result = np.einsum("xh,hnst,xnst->x", surface.h_basis(h), surface.coefficients, walk)
    np.testing.assert_allclose(result, surface(h, n, w, theta), rtol=0, atol=1e-13)


def test_walks_of_many_vectors_with_h_contracted_first(full: tuple[NDArray[np.float64], Surface]) -> None:
    surface = full[1]
    h = np.array([0.2, 0.55, 0.97])
    rows = np.tensordot(surface.h_basis(h), surface.coefficients, axes=(1, 0))
    rng = np.random.default_rng(522)
    n, w, theta = rng.uniform(1, 300, (3, 4, 5)), rng.uniform(1, 40, (1, 4, 5)), rng.uniform(0.1, 1, (3, 1, 5))
    result = surface.along_walk(rows, n, w, theta)
    assert result.shape == (3, 4, 5)
    np.testing.assert_allclose(result, surface(h[:, None, None], n, w, theta), rtol=0, atol=1e-13)


def test_a_surface_knows_the_step_numbers_that_it_covers(rough: Surface) -> None:
    assert rough.step_limits == pytest.approx((1.0, 300.0), rel=1e-14)
