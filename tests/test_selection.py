"""Selection: what the counted fraction must be, and how its terms are read."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hurstfit.errors import HurstfitError
from hurstfit.priors import Beta, Fixed
from hurstfit.selection import SelectionTerms, counted_fraction, parse_selection

share = st.floats(0.0, 1.0)
ratio = st.floats(0.01, 100.0)


@given(share)
def test_perfect_selection_counts_the_true_fraction(f: float) -> None:
    assert counted_fraction(f, 1.0, 0.0, 0.0) == pytest.approx(f, abs=1e-15)


@given(share, ratio, share, share)
def test_the_counted_fraction_is_a_probability(f: float, r: float, u: float, v: float) -> None:
    assert 0.0 <= counted_fraction(f, r, u, v) <= 1.0


@given(share, ratio, share, share)
def test_swapping_the_two_kinds_of_galaxy_swaps_the_labels(f: float, r: float, u: float, v: float) -> None:
    # star-forming galaxies are then found 1/r times as often, missed with v and contaminated by u
    assert counted_fraction(1 - f, 1 / r, v, u) == pytest.approx(1 - counted_fraction(f, r, u, v), abs=1e-12)


@given(share, share, ratio, share, share)
def test_the_counted_fraction_rises_with_the_true_one_where_labels_tell_more_than_chance(
    f: float, g: float, r: float, u: float, v: float
) -> None:
    if u + v < 1:
        lower, higher = sorted((f, g))
        assert counted_fraction(lower, r, u, v) <= counted_fraction(higher, r, u, v) + 1e-12


def test_labels_at_random_say_nothing_about_the_true_fraction() -> None:
    f = np.linspace(0, 1, 11)
    assert counted_fraction(f, 1.7, 0.7, 0.3) == pytest.approx(0.3, abs=1e-15)


def test_the_counted_fraction_is_that_of_a_simulated_catalogue() -> None:
    rng = np.random.default_rng(11)
    f, c_q, c_s, u, v, galaxies = 0.3, 0.6, 0.8, 0.1, 0.05, 400_000
    quiescent = rng.random(galaxies) < f
    found = rng.random(galaxies) < np.where(quiescent, c_q, c_s)
    labelled = rng.random(galaxies) < np.where(quiescent, 1 - u, v)
    expected = counted_fraction(f, c_q / c_s, u, v)
    error = np.sqrt(expected * (1 - expected) / found.sum())
    assert labelled[found].mean() == pytest.approx(float(expected), abs=4 * error)


def test_all_arguments_broadcast() -> None:
    assert counted_fraction(np.full((4, 1), 0.2), np.ones(3), 0.0, np.zeros((2, 1, 1))).shape == (2, 4, 3)


@given(share, ratio, share, share)
def test_an_impurity_is_the_share_of_those_labelled_quiescent_that_are_star_forming(
    f: float, r: float, u: float, v: float
) -> None:
    p = float(counted_fraction(f, r, u, v))
    labelled_quiescent, labelled_starforming = f * r * (1 - u), (1 - f) * v
    if labelled_quiescent > 1e-3:
        k = labelled_starforming / (labelled_quiescent + labelled_starforming)
        # a little less than what makes the contamination 1 to rounding
        k *= 1 - 1e-12
        assert counted_fraction(f, r, u, 0.0, k) == pytest.approx(p, rel=1e-8)


@given(share, ratio, share, share)
def test_an_impurity_gives_a_probability_exactly_where_its_contamination_is_one(f: float, r: float, u: float, k: float) -> None:
    p = float(counted_fraction(f, r, u, 0.0, k))
    enough = k < 1 and f * r * (1 - u) * k <= (1 - f) * (1 - k) * (1 + 1e-12)
    assert 0 <= p <= 1 if not np.isnan(p) else not enough or f * r * (1 - u) * k == pytest.approx((1 - f) * (1 - k), rel=1e-9)
    if k < 1 and f * r * (1 - u) * k > (1 - f) * (1 - k) * (1 + 1e-9):
        assert np.isnan(p)


def test_the_counted_fraction_with_an_impurity_is_that_of_a_simulated_catalogue() -> None:
    rng = np.random.default_rng(12)
    f, r, u, k, galaxies = 0.2, 0.8, 0.1, 0.15, 400_000
    v = float(counted_fraction(f, r, u, 0.0, k)) * k * (f * r + 1 - f) / (1 - f)
    quiescent = rng.random(galaxies) < f
    found = rng.random(galaxies) < np.where(quiescent, r, 1.0)
    labelled = rng.random(galaxies) < np.where(quiescent, 1 - u, v)
    expected = float(counted_fraction(f, r, u, 0.0, k))
    assert labelled[found].mean() == pytest.approx(expected, abs=4 * np.sqrt(expected / found.sum()))
    impure = (~quiescent)[found & labelled].mean()
    assert impure == pytest.approx(k, abs=4 * np.sqrt(k / (found & labelled).sum()))


def test_no_impurity_is_no_contamination() -> None:
    f = np.linspace(0, 1, 11)
    assert counted_fraction(f, 1.3, 0.2, 0.0, 0.0) == pytest.approx(counted_fraction(f, 1.3, 0.2, 0.0), abs=1e-15)


# -- reading -------------------------------------------------------------------------------------------------------------------

STUDIES = ("A", "B")


def parse(tables: dict) -> dict[str, SelectionTerms]:
    return parse_selection(tables, STUDIES, where="case.toml", table="bins.csv")


def test_without_a_word_selection_is_perfect_and_said_to_be_unstated() -> None:
    assert parse({}) == {study: SelectionTerms() for study in STUDIES}
    assert parse({})["A"].stated == frozenset()


def test_a_study_states_its_own_terms_and_takes_the_rest_from_the_default() -> None:
    terms = parse({"default": {"contamination": 0.1, "missed_fraction": 0.2}, "B": {"contamination": {"validation": [1, 9]}}})
    assert terms["A"].contamination == Fixed(0.1)
    assert terms["B"].contamination == Beta(2.0, 9.0)
    assert terms["B"].missed_fraction == Fixed(0.2)
    assert terms["B"].stated == {"contamination", "missed_fraction"}


def test_terms_are_found_by_name() -> None:
    terms = parse({"A": {"completeness_ratio": 1.5}})["A"]
    assert [terms.prior(name).mean for name in terms.terms] == [1.5, 0.0, 0.0]


def test_an_impurity_stands_in_the_place_of_a_contamination() -> None:
    terms = parse({"default": {"contamination": 0.1}, "B": {"impurity": {"beta": [2, 30]}}})
    assert terms["A"].terms[2] == "contamination"
    assert terms["B"].terms == ("completeness_ratio", "missed_fraction", "impurity")
    assert terms["B"].impurity == Beta(2.0, 30.0)
    assert terms["B"].stated == {"impurity"}
    terms = parse({"default": {"impurity": 0.1}, "B": {"contamination": 0.2}})
    assert (terms["A"].impurity, terms["B"].impurity, terms["B"].contamination) == (Fixed(0.1), None, Fixed(0.2))


def test_a_study_has_no_term_that_it_does_not_use() -> None:
    with pytest.raises(ValueError, match="no impurity"):
        SelectionTerms().prior("impurity")
    with pytest.raises(ValueError, match="either"):
        SelectionTerms(contamination=Fixed(0.1), impurity=Fixed(0.1))


@pytest.mark.parametrize(
    ("tables", "sentence"),
    [
        ({"A": {"contamination": 0.1, "impurity": 0.1}}, r"\[selection.A\]: found both contamination and impurity"),
        ({"A": {"impurity": 1.5}}, "from 0 to 1"),
        ({"A": {"impurty": 0.1}}, r"unknown key 'impurty' \(did you mean 'impurity'\?\)"),
        ({"C": {}}, r"\[selection.C\]: bins.csv has no study of this name; it has A, B"),
        ({"A": 3}, r"\[selection\] A: found 3, allowed is a table"),
        ({"A": {"contaminaton": 0.1}}, r"unknown key 'contaminaton' \(did you mean 'contamination'\?\)"),
        ({"A": {"contamination": -0.1}}, "from 0 to 1"),
        ({"A": {"completeness_ratio": 0.0}}, "above 0"),
        ({"A": {"missed_fraction": {"lognormal": [0.1, 0.1]}}}, "does not suit"),
    ],
)
def test_bad_terms_are_refused(tables: dict, sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence):
        parse(tables)
