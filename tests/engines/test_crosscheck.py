"""Comparing engines: agreement where there is, and a loud difference where there is one."""

from __future__ import annotations

import numpy as np
import pytest

from hurstfit.engines.crosscheck import LIMIT, compare_draws


def draws(seed: int, centre: float = 0.0, scale: float = 1.0) -> np.ndarray:
    return centre + scale * np.random.default_rng(seed).standard_normal((2000, 4, 1))


def test_draws_of_the_same_distribution_agree() -> None:
    (found,) = compare_draws(("H",), draws(1), draws(2))
    assert found.agrees
    assert "DISAGREES" not in found.line(3)


# 8000 draws tell the median to 1.25 / sqrt(8000) = 0.014, two of them to 0.020; a shift of 0.15 is 7.5 of these
@pytest.mark.parametrize(("centre", "scale"), [(0.15, 1.0), (-0.15, 1.0), (0.0, 1.15), (0.0, 0.85)])
def test_a_shift_or_another_width_is_found(centre: float, scale: float) -> None:
    (found,) = compare_draws(("H",), draws(1), draws(2, centre, scale))
    assert not found.agrees
    assert np.abs(found.z).max() > LIMIT
    assert found.line(3).endswith("DISAGREES")


def test_differences_are_in_units_of_their_standard_error() -> None:
    z = np.concatenate([compare_draws(("H",), draws(2 * i), draws(2 * i + 1))[0].z for i in range(40)])
    # 200 differences, correlated within a comparison: their mean square is near one, give or take 0.3
    assert 0.6 < np.mean(z**2) < 1.5


def test_every_parameter_is_compared() -> None:
    a, b = (np.concatenate([draws(seed), draws(seed + 10)], axis=2) for seed in (1, 2))
    b[..., 1] += 1.0
    found = compare_draws(("H", "step"), a, b)
    assert [c.name for c in found] == ["H", "step"]
    assert [c.agrees for c in found] == [True, False]


def test_parameters_that_do_not_vary_are_no_disagreement() -> None:
    same = np.full((100, 4, 1), 0.3)
    with np.errstate(all="raise"):
        (found,) = compare_draws(("H",), same, same)
    assert found.agrees
    (apart,) = compare_draws(("H",), same, same + 0.1)
    assert not apart.agrees
