"""Which H a fraction implies: every crossing, and none that is not there."""

from __future__ import annotations

import numpy as np
import pytest

from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.implied import implied_exponents
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable
from hurstfit.walks import NOISE_TYPES


@pytest.fixture(scope="module", params=NOISE_TYPES)
def table(request: pytest.FixtureRequest) -> FractionTable:
    return load_table(request.param)


@pytest.mark.parametrize("mass", [None, 0.1])
@pytest.mark.parametrize("criterion", ["zero", "rate<0.2"])
@pytest.mark.parametrize(("n", "window"), [(50, 1.0), (600, 1.0), (600, 10.0)])
def test_reading_the_table_at_its_own_answers_gives_the_fraction_back(
    table: FractionTable, mass: float | None, criterion: str, n: float, window: float
) -> None:
    definition = Definition(mass, parse_criterion(criterion), window)
    grid = table.fraction(np.linspace(table.axes.h[0], table.axes.h[-1], 400), n, criterion, window, mass)
    for fraction in np.linspace(grid.min(), grid.max(), 9)[1:-1]:
        found = implied_exponents(table, definition, fraction, n, window, 1.0)
        assert found.size >= 1
        assert (np.diff(found) > 0).all()
        np.testing.assert_allclose(table.fraction(found, n, criterion, window, mass), fraction, rtol=0, atol=1e-10)


def test_at_one_half_the_central_binomial_value_gives_one_half_back(table: FractionTable) -> None:
    # Sparre Andersen 1953: 0.0230281 at n = 600, whatever the noise
    found = implied_exponents(table, Definition(), 0.0230281, 600, 1.0, 1.0)
    slope = float(np.diff(table.fraction([0.49, 0.51], 600))[0] / 0.02)
    # half of the last printed digit
    assert found == pytest.approx([0.5], abs=0.5e-7 / slope + 1e-9)


def test_a_fraction_that_is_not_monotone_has_two_answers() -> None:
    # type I, more than a tenth of the mean mass, 600 steps: 0.059, 0.074, 0.068, 0.048 at H = 0.7, 0.8, 0.9, 0.95
    table = load_table("type-I")
    found = implied_exponents(table, Definition(0.1), 0.065, 600, 1.0, 1.0)
    assert found.size == 2
    assert 0.7 < found[0] < 0.8
    assert 0.9 < found[1] < 0.95


def test_a_fraction_that_no_h_has_gets_no_answer(table: FractionTable) -> None:
    for fraction in (0.9, 1e-6):
        assert implied_exponents(table, Definition(), fraction, 600, 1.0, 1.0).size == 0


def test_a_threshold_on_specific_rates_is_read_where_the_clock_puts_it(table: FractionTable) -> None:
    specific = Definition(0.1, parse_criterion("ssfr<0.4"), returned_fraction=0.4)
    for theta in (0.1, 0.2, 0.23):
        plain = Definition(0.1, parse_criterion(f"rate<{theta}"))
        for fraction in (0.05, 0.12):
            expected = implied_exponents(table, plain, fraction, 300, 1.0, 1.0)
            np.testing.assert_allclose(implied_exponents(table, specific, fraction, 300, 1.0, theta), expected, atol=1e-9)
