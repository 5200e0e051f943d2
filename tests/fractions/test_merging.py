"""Merging tables: the mean weighted by walks, an error that shrinks as it should, and walks that are never counted twice."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.building import Build, average_batches
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.exact import exact_zero_fraction
from hurstfit.fractions.merging import merge_tables
from hurstfit.fractions.simulate import BATCH_WALKS
from hurstfit.fractions.store import read_table, write_table
from hurstfit.fractions.table import FractionTable

AXES = TableAxes(
    h=np.array([0.5, 0.65, 0.8, 0.9]),
    steps=np.array([2, 4, 8, 16]),
    masses=np.array([0.0, 0.1]),
    scales=np.array([0.0]),
    thresholds=np.array([0.1, 0.2, 0.4, 1.0]),
)


def build(seed: int, batches: int = 8, noise: str = "type-II", axes: TableAxes = AXES) -> FractionTable:
    made = Build(noise, axes, batches, BATCH_WALKS, seed)
    return average_batches(made, (made.simulate(k) for k in range(batches)))


@pytest.fixture(scope="module")
def tables() -> list[FractionTable]:
    return [build(981), build(982, 16), build(983)]


def test_values_are_the_mean_weighted_by_walks(tables: list[FractionTable]) -> None:
    merged = merge_tables(tables, ["a", "b", "c"])
    expected = (tables[0].values + 2 * tables[1].values + tables[2].values) / 4
    np.testing.assert_allclose(merged.values, expected, rtol=1e-13, atol=1e-15)


def test_errors_are_those_of_a_weighted_mean_of_independent_tables(tables: list[FractionTable]) -> None:
    merged = merge_tables(tables, ["a", "b", "c"])
    expected = np.sqrt(tables[0].errors ** 2 + 4 * tables[1].errors ** 2 + tables[2].errors ** 2) / 4
    np.testing.assert_allclose(merged.errors, expected, rtol=1e-12, atol=1e-16)
    # 32 batches instead of 8: half the error, but for the scatter of errors from few batches (a quarter from 8)
    simulated = merged.errors > 0
    assert np.median(merged.errors[simulated] / tables[0].errors[simulated]) == pytest.approx(0.5, rel=0.25)


def test_the_merged_table_differs_from_its_parts_by_as_much_as_its_error_says() -> None:
    # the scatter of merged tables over seeds is the error that they state
    merged = [merge_tables([build(2 * s), build(2 * s + 1)], ["a", "b"]) for s in range(500, 516)]
    scatter = np.var([t.values for t in merged], axis=0, ddof=1)
    stated = np.mean([t.errors**2 for t in merged], axis=0)
    simulated = stated > 0
    # variances from 16 tables: each ratio has a relative spread of sqrt(2 / 15) = 0.37, and nodes share walks, so that their
    # mean may scatter as much as one does
    assert abs((scatter[simulated] / stated[simulated]).mean() - 1) < 3.3 * np.sqrt(2 / 15)


def test_exact_values_stay_exact(tables: list[FractionTable]) -> None:
    merged = merge_tables(tables, ["a", "b", "c"])
    exact = exact_zero_fraction("type-II", 0.5, 16)
    assert float(merged.fraction(0.5, 16)) == pytest.approx(exact, abs=1e-14)
    assert float(merged.standard_error(0.5, 16)) == 0.0


def test_covariances_are_those_of_the_weighted_mean(tables: list[FractionTable]) -> None:
    merged = merge_tables(tables[:2], ["a", "b"])
    definition = Definition(None, parse_criterion("rate<0.1"))

    def covariance(table: FractionTable) -> np.ndarray:
        d = table.deviations(definition)(AXES.h[1:, None], AXES.steps[None, 1:])
        d = d.reshape(d.shape[0], -1)
        return d.T @ d

    found = covariance(merged)
    expected = covariance(tables[0]) / 9 + 4 * covariance(tables[1]) / 9
    sd = np.sqrt(np.diag(expected))
    # replicates of two tables are added one by one: independent, so that their products vanish on average, with a scatter of
    # 2 w v sd_a sd_b / sqrt(7), at most 1 / sqrt(7) of the variance (eight replicates of one, of seven degrees of freedom)
    assert np.abs((found - expected) / np.outer(sd, sd)).max() < 3.5 / np.sqrt(7)
    assert abs(np.mean(np.diag(found) / np.diag(expected)) - 1) < 1 / np.sqrt(7)


def test_a_merged_table_says_what_it_is_made_of_and_is_written_and_read(tables: list[FractionTable], tmp_path) -> None:
    merged = merge_tables(tables, ["a", "b", "c"])
    assert merged.made_by["walks"] == str(32 * BATCH_WALKS)
    assert merged.made_by["seed"] == "981, 982, 983"
    assert "merged" in merged.made_by["command"]
    write_table(tmp_path / "merged.h5", merged)
    back = read_table(tmp_path / "merged.h5")
    # six decimals
    np.testing.assert_allclose(back.values, merged.values, rtol=0, atol=0.6e-6)
    again = merge_tables([back, build(984)], ["d", "e"])
    assert again.made_by["walks"] == str(40 * BATCH_WALKS)


def test_merging_in_another_order_gives_the_same_table(tables: list[FractionTable]) -> None:
    a, b = merge_tables(tables, ["a", "b", "c"]), merge_tables(tables[::-1], ["c", "b", "a"])
    np.testing.assert_allclose(a.values, b.values, rtol=1e-13, atol=1e-15)
    np.testing.assert_allclose(a.errors, b.errors, rtol=1e-12, atol=1e-16)


def refused(tables: list[FractionTable], sentence: str) -> None:
    names = [f"{chr(97 + i)}.h5" for i in range(len(tables))]
    with pytest.raises(HurstfitError, match=sentence) as caught:
        merge_tables(tables, names)
    assert "\n" not in str(caught.value)


def test_what_cannot_be_merged_is_refused(tables: list[FractionTable]) -> None:
    first = tables[0]
    refused([first], "merging takes two tables or more")
    refused([], "merging takes two tables or more")
    refused([first, first], r"b\.h5 and a\.h5 share the seed 981, hence their walks; merge tables of different seeds")
    merged = merge_tables(tables[:2], ["a", "b"])
    refused([tables[2], merged, tables[1]], r"c\.h5 and b\.h5 share the seed 982")
    refused([first, build(985, noise="type-I")], r"b\.h5 holds type-I and a\.h5 type-II; only tables of one noise type")
    other = dataclasses.replace(AXES, steps=np.array([2, 4, 8, 15]))
    refused([first, build(986, axes=other)], r"b\.h5 and a\.h5 have different nodes")
    shorter = dataclasses.replace(AXES, thresholds=AXES.thresholds[:-1])
    refused([first, build(987, axes=shorter)], "different nodes")
    refused([first, dataclasses.replace(tables[1], made_by={})], r"b\.h5 does not say from how many walks it is made")
    refused([first, dataclasses.replace(tables[1], replicates=None)], "does not say from how many walks")
