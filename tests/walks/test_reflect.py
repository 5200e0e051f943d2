"""The reflecting walk: its closed form against the recursion that defines it."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hurstfit.walks.reflect import formed_mass, reflect

# Whole increments make every sum exact, so that equality can be asked for.
whole_increments = st.lists(st.integers(-20, 20), min_size=1, max_size=60)


def walk_by_recursion(increments: list[float]) -> list[float]:
    """S_t = max(0, S_{t-1} + X_t) with S_0 = 0 (Lindley 1952)."""
    rate, rates = 0.0, []
    for x in increments:
        rate = max(0.0, rate + x)
        rates.append(rate)
    return rates


@settings(deadline=None, derandomize=True)
@given(whole_increments)
def test_the_closed_form_is_the_recursion(increments: list[int]) -> None:
    assert reflect(increments).tolist() == walk_by_recursion([float(x) for x in increments])


@settings(deadline=None, derandomize=True)
@given(whole_increments)
def test_the_last_rate_is_the_largest_backward_sum_or_zero(increments: list[int]) -> None:
    backward = np.cumsum(increments[::-1])
    assert reflect(increments)[-1] == max(0, backward.max())


@settings(deadline=None, derandomize=True)
@given(whole_increments)
def test_a_walk_never_forms_stars_only_if_no_increment_is_positive(increments: list[int]) -> None:
    assert (formed_mass(reflect(increments))[-1] == 0) == (max(increments) <= 0)


@settings(deadline=None, derandomize=True)
@given(whole_increments, st.integers(1, 50))
def test_the_walk_scales_with_its_increments(increments: list[int], factor: int) -> None:
    np.testing.assert_array_equal(reflect(factor * np.array(increments)), factor * reflect(increments))


def test_rates_of_real_increments_match_the_recursion_to_rounding() -> None:
    x = np.random.default_rng(201).standard_normal((50, 400))
    expected = [walk_by_recursion(list(row)) for row in x]
    rates = reflect(x)
    # Sums of 400 numbers of order one: rounding of the running sum, whose size stays below 400.
    np.testing.assert_allclose(rates, expected, rtol=0, atol=400 * 400 * np.finfo(float).eps)
    assert (rates >= 0).all()
    # At rest exactly where the recursion is, not merely near it.
    np.testing.assert_array_equal(rates == 0, np.array(expected) == 0)


def test_a_small_walk_by_hand() -> None:
    assert reflect([1.0, -3.0, 2.0, 2.0, -1.0]).tolist() == [1.0, 0.0, 2.0, 4.0, 3.0]
    assert formed_mass([1.0, 0.0, 2.0, 4.0, 3.0]).tolist() == [1.0, 1.0, 3.0, 7.0, 10.0]


@pytest.mark.parametrize("shape", [(1,), (3, 5), (2, 3, 4)])
def test_the_last_axis_is_time(shape: tuple[int, ...]) -> None:
    x = np.random.default_rng(202).integers(-5, 6, shape)
    rates, mass = reflect(x), formed_mass(reflect(x))
    assert rates.shape == mass.shape == shape
    for index in np.ndindex(shape[:-1]):
        np.testing.assert_array_equal(rates[index], reflect(x[index]))
        np.testing.assert_array_equal(mass[index], np.cumsum(rates[index]))
