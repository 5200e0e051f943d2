"""Prediction: a bin's fraction is the table's, averaged over the bin."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad

from hurstfit.clock import CosmicClock
from hurstfit.cosmology import cosmology_from
from hurstfit.fractions.definition import Criterion, Definition
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable
from hurstfit.prediction import BinPrediction

Z_LO, Z_HI = np.array([0.2, 1.0, 1.0, 3.0]), np.array([1.5, 1.2, 3.0, 4.0])


@pytest.fixture(scope="module")
def clock() -> CosmicClock:
    return CosmicClock.build(cosmology_from("Planck18", where="test"))


@pytest.fixture(scope="module")
def table() -> FractionTable:
    return load_table("type-II")


def prediction(
    table: FractionTable, clock: CosmicClock, fixed: tuple[float, float] | None = None, definition: Definition | None = None
) -> BinPrediction:
    definition = definition or Definition()
    return BinPrediction(table.surface(definition), definition, clock, Z_LO, Z_HI, fixed)


def vectors(*values: float) -> tuple[np.ndarray, ...]:
    return tuple(np.array([value]) for value in values)


def test_a_bin_is_the_average_over_its_comoving_volume(table, clock) -> None:
    cosmology = clock.cosmology
    H, step, z_start = 0.8, 20.0, 12.0
    start = cosmology.age(z_start).to_value("Myr")

    def volume(z: float) -> float:
        return float(cosmology.differential_comoving_volume(z).value)

    def weighted(z: float) -> float:
        n = (cosmology.age(z).to_value("Myr") - start) / step
        return volume(z) * float(table.fraction(H, n))

    expected = [quad(weighted, a, b, epsrel=1e-6)[0] / quad(volume, a, b)[0] for a, b in zip(Z_LO, Z_HI, strict=True)]
    found, possible = prediction(table, clock)(*vectors(H, step, z_start))
    assert possible.all()
    # the spline has kinks in its third derivative at the table's nodes, which no rule of few points integrates better
    assert found[0] == pytest.approx(expected, rel=2e-4)


@pytest.mark.parametrize(
    "definition",
    [
        Definition(),
        Definition(min_mass=0.1, criterion=Criterion("rate", 0.2)),
        Definition(min_mass=0.1, criterion=Criterion("rate", 0.2), window=10.0),
        Definition(min_mass=0.1, criterion=Criterion("rate", 0.2), window=100.0, window_unit="Myr", scatter=0.2),
        Definition(min_mass=0.1, criterion=Criterion("ssfr", 0.2), returned_fraction=0.4),
    ],
    ids=str,
)
def test_a_fixed_clock_changes_the_speed_and_not_the_answer(table, clock, definition) -> None:
    H = np.linspace(0.05, 1.3, 9)
    step, z_start = np.full(9, 20.0), np.full(9, 12.0)
    free, _ = prediction(table, clock, definition=definition)(H, step, z_start)
    fixed, possible = prediction(table, clock, (20.0, 12.0), definition)(H, step, z_start)
    assert possible.all()
    assert fixed == pytest.approx(free, rel=1e-10, abs=1e-13)


def test_vectors_do_not_see_each_other(table, clock) -> None:
    rng = np.random.default_rng(2)
    H, step, z_start = rng.uniform(0.1, 1.2, 20), rng.uniform(15, 30, 20), rng.uniform(9, 16, 20)
    predict = prediction(table, clock)
    together, _ = predict(H, step, z_start)
    alone = np.concatenate([predict(*vectors(*v))[0] for v in zip(H, step, z_start, strict=True)])
    assert together == pytest.approx(alone, rel=1e-13)


def test_a_vector_is_impossible_before_the_first_step_and_beyond_the_table(table, clock) -> None:
    H = np.full(4, 0.8)
    step, z_start = np.array([20.0, 1.0, 2000.0, 20.0]), np.array([12.0, 12.0, 12.0, 3.5])
    fraction, possible = prediction(table, clock)(H, step, z_start)
    # as it is; more than 2048 steps; no step taken by z = 3; walks start inside the last bin
    assert possible.tolist() == [True, False, False, False]
    assert np.isfinite(fraction).all()
    for i, expected in enumerate(possible):
        fixed = prediction(table, clock, (step[i], z_start[i]))(H[:1], step[i : i + 1], z_start[i : i + 1])[1]
        assert fixed.tolist() == [expected]


def test_a_step_of_zero_is_impossible_and_no_accident(table, clock) -> None:
    fraction, possible = prediction(table, clock)(*vectors(0.8, 0.0, 12.0))
    assert not possible[0]
    assert np.isfinite(fraction).all()


def test_fractions_stay_between_zero_and_one_over_all_of_the_table(table, clock) -> None:
    rng = np.random.default_rng(3)
    H, step, z_start = rng.uniform(0.05, 1.3, 500), rng.uniform(8, 400, 500), rng.uniform(5, 25, 500)
    for definition in (Definition(), Definition(min_mass=0.1), Definition(min_mass=0.0, window=10.0)):
        fraction, _ = prediction(table, clock, definition=definition)(H, step, z_start)
        assert ((fraction >= 0) & (fraction <= 1)).all()


def test_step_numbers_reach_from_the_far_to_the_near_edge(table, clock) -> None:
    lowest, highest = prediction(table, clock).step_range(np.array([10.0, 20.0]), np.array([12.0, 9.0]))
    assert highest == pytest.approx(clock.steps(Z_LO, 10.0, 12.0))
    assert lowest == pytest.approx(clock.steps(Z_HI, 20.0, 9.0))


def test_single_redshifts_give_the_table_itself(table, clock) -> None:
    z = np.array([0.5, 2.0])
    found = prediction(table, clock).at_redshifts(*vectors(0.7, 20.0, 12.0), z)
    assert found[0] == pytest.approx(table.fraction(0.7, clock.steps(z, 20.0, 12.0)), rel=1e-12)


@pytest.mark.parametrize(("z_lo", "z_hi"), [(0.2, 0.4), (3.0, 4.0), (6.0, 8.0), (5.0, 8.5), (0.0, 4.0)])
def test_few_points_average_a_bin_well_even_near_the_start_of_the_walk(clock, z_lo: float, z_hi: float) -> None:
    # zero fractions go with powers of the walk's age
    table = load_table("type-II")
    bins = BinPrediction(table.surface(Definition()), Definition(), clock, np.array([z_lo]), np.array([z_hi]), latest_start=9.0)
    ages, weights = bins._nodes
    born = float(clock.age(9.0))
    fine = clock.bin_nodes(np.array([z_lo]), np.array([z_hi]), order=60)
    for power in (-0.9, -0.5, -0.1):
        few = float((weights * (ages - born) ** power).sum())
        assert few == pytest.approx(float(fine.average((clock.age(fine.z) - born) ** power)[0]), rel=2e-5)
