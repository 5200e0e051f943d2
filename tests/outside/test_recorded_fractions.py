"""Fractions that were recorded from separate simulations, to three decimals, for every kind of definition.

They come from about 300,000 walks each, so that their own error counts beside that of the walks simulated here.  Every test fails
by chance once in a thousand over all its comparisons (Bonferroni); seeds are fixed.
"""

from __future__ import annotations

import functools
import math
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.simulate import BATCH_WALKS, simulate_batch
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable

FALSE_ALARM = 1e-3
RECORDED_WALKS = 300_000
WINDOW_10 = math.log(10) / math.log(600)


def z_limit(comparisons: int) -> float:
    return float(stats.norm.isf(FALSE_ALARM / (2 * comparisons)))


def t_limit(comparisons: int) -> float:
    return float(stats.t.isf(FALSE_ALARM / (2 * comparisons), BATCHES - 1))


@functools.cache
def shipped_table(noise: str) -> FractionTable:
    """Load a table that ships, once."""
    return load_table(noise)


H_I, H_II = [0.7, 0.75, 0.8, 0.85, 0.9, 0.95, 0.99], [0.85, 0.9, 0.95, 1.0]
STEPS = [150, 600, 1200]
MASSES = [None, 0.0, 0.1, 0.3]
# noise, H, n, min_mass, window, criterion, fraction to three decimals
RECORDED = [
    ("type-I", 0.85, 600, None, 1, "zero", 0.147),
    ("type-I", 0.95, 600, None, 1, "zero", 0.279),
    ("type-II", 0.85, 600, None, 1, "zero", 0.118),
    ("type-II", 0.95, 600, None, 1, "zero", 0.173),
    ("type-II", 1.0, 600, None, 1, "zero", 0.203),
    ("type-II", 1.0, 600, 0.0, 1, "zero", 0.202),
    ("type-II", 1.0, 600, 0.1, 1, "zero", 0.113),
    ("type-II", 1.0, 600, 0.3, 1, "zero", 0.063),
    ("type-II", 1.0, 600, 0.1, 1, "rate<0.2", 0.166),
    ("type-I", 0.7, 600, 0.1, 1, "zero", 0.059),
    ("type-I", 0.8, 600, 0.1, 1, "zero", 0.074),
    ("type-I", 0.9, 600, 0.1, 1, "zero", 0.068),
    ("type-I", 0.95, 600, 0.1, 1, "zero", 0.048),
    ("type-I", 0.99, 600, 0.1, 1, "zero", 0.012),
    ("type-II", 0.9, 600, None, 10, "zero", 0.047),
    ("type-II", 0.9, 600, None, 1, "zero", 0.145),
    ("type-I", 0.75, 150, None, 1, "zero", 0.123),
    ("type-I", 0.75, 1200, None, 1, "zero", 0.072),
    ("type-I", 0.75, 150, None, 1, "rate<0.2", 0.169),
    ("type-I", 0.75, 1200, None, 1, "rate<0.2", 0.149),
]
BATCHES = 16


@pytest.fixture(scope="module")
def simulated() -> dict[str, NDArray[np.float64]]:
    """Batches of both types on the nodes of the recorded values: 16 of 8192 walks."""
    result = {}
    for noise, h in (("type-I", H_I), ("type-II", H_II)):
        scales = np.array([0.0, WINDOW_10, 1.0])
        axes = TableAxes(np.array(h), np.array(STEPS), np.array([0.0, 0.1, 0.3]), scales, np.array([0.2]))
        seeds = np.random.SeedSequence([712, len(noise)]).spawn(BATCHES)

        def one(seed: np.random.SeedSequence, noise: str = noise, axes: TableAxes = axes) -> NDArray[np.float64]:
            return simulate_batch(noise, axes, BATCH_WALKS, np.random.default_rng(seed)).fraction.astype(float)

        with ThreadPoolExecutor(2) as pool:
            result[noise] = np.array(list(pool.map(one, seeds)))
    return result


def at_node(
    simulated: dict[str, NDArray[np.float64]], noise: str, H: float, n: int, mass: float | None, window: int, crit: str
) -> tuple[float, float]:
    h = H_I if noise == "type-I" else H_II
    index = (h.index(H), STEPS.index(n), MASSES.index(mass), int(window > 1), int(crit != "zero"))
    values = simulated[noise][(slice(None), *index)]
    return float(values.mean()), float(values.std(ddof=1) / math.sqrt(BATCHES))


@pytest.mark.parametrize(("noise", "H", "n", "mass", "window", "criterion", "recorded"), RECORDED)
def test_simulated_fractions_are_the_recorded_ones(
    simulated: dict[str, NDArray[np.float64]],
    noise: str,
    H: float,
    n: int,
    mass: float | None,
    window: int,
    criterion: str,
    recorded: float,
) -> None:
    value, se = at_node(simulated, noise, H, n, mass, window, criterion)
    error = math.hypot(se, math.sqrt(recorded * (1 - recorded) / RECORDED_WALKS))
    assert abs(value - recorded) < 0.0005 + t_limit(len(RECORDED)) * error


@pytest.mark.parametrize(("noise", "H", "n", "mass", "window", "criterion", "recorded"), RECORDED)
def test_the_shipped_table_gives_the_recorded_fractions(
    noise: str, H: float, n: int, mass: float | None, window: int, criterion: str, recorded: float
) -> None:
    table = shipped_table(noise)
    value = float(table.fraction(H, n, criterion, window=window, min_mass=mass))
    se = float(table.standard_error(H, n, criterion, window=window, min_mass=mass))
    error = math.hypot(se, math.sqrt(recorded * (1 - recorded) / RECORDED_WALKS))
    assert abs(value - recorded) < 0.0005 + z_limit(len(RECORDED)) * error


def test_almost_every_walk_forms_mass_at_h_one_of_type_2() -> None:
    # No mass at all means 600 increments that are all negative; next to nothing even among walks as persistent as these.
    axes = TableAxes(np.array([1.0]), np.array([600]), np.array([0.0]), np.array([0.0]), np.array([0.2]))
    members = simulate_batch("type-II", axes, 8 * BATCH_WALKS, np.random.default_rng(713)).members[0, 0]
    # P < 1e-3 would have to be wrong by a factor of fifteen for this to fail by chance even once in a thousand.
    assert 1 - members[1] / members[0] < 1e-3


def test_fractions_of_walks_with_some_mass_are_not_monotone_in_h(simulated: dict[str, NDArray[np.float64]]) -> None:
    values, errors = zip(
        *(at_node(simulated, "type-I", H, 600, 0.1, 1, "zero") for H in (0.7, 0.8, 0.9, 0.95, 0.99)), strict=True
    )
    z = np.diff(values) / np.hypot(errors[1:], errors[:-1])
    assert z[0] > t_limit(4)
    assert (z[1:] < -t_limit(4)).all()


def test_the_rate_criterion_falls_far_less_with_time_than_the_zero_criterion(
    simulated: dict[str, NDArray[np.float64]],
) -> None:
    falls = {}
    for criterion in ("zero", "rate<0.2"):
        early, late = (at_node(simulated, "type-I", 0.75, n, None, 1, criterion)[0] for n in (150, 1200))
        falls[criterion] = late / early
    # 0.072 / 0.123 and 0.149 / 0.169, each ratio good to a per cent or two
    assert falls["zero"] < 0.65 < 0.80 < falls["rate<0.2"]
