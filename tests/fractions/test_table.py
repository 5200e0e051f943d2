"""The table: its nodes, what lies between them, its error, and what it refuses."""

from __future__ import annotations

import dataclasses
import functools
import itertools
import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats
from scipy.special import ndtr

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes, default_axes, window_scale
from hurstfit.fractions.building import Build, average_batches
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.exact import exact_zero_fraction
from hurstfit.fractions.simulate import BATCH_WALKS, BatchResult, simulate_batch
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable
from hurstfit.fractions.weights import LARGEST_THRESHOLD
from hurstfit.walks import NOISE_TYPES, draw_noise, formed_mass, reflect

# Statistical tests fail by chance once in a thousand over all their comparisons (Bonferroni), at fixed seeds.
FALSE_ALARM = 1e-3
AXES = TableAxes(
    h=np.array([0.3, 0.5, 0.7, 0.85, 1.0]),
    steps=np.array([1, 2, 4, 9, 16, 25]),
    masses=np.array([0.0, 0.05, 0.1, 0.2, 0.4]),
    scales=np.array([0.0, 0.25, 0.5, 0.75, 1.0]),
    thresholds=np.array([0.05, 0.1, 0.2, 0.5, 1.0, 1.5]),
)
MASSES = [None, *AXES.masses]
THETAS = [theta for theta in AXES.thresholds if theta <= LARGEST_THRESHOLD]
#: Criteria that may be asked for: the largest threshold only serves the convolution with scatter.
CRITERIA = ["zero", *(f"rate<{theta:g}" for theta in THETAS)]
BUILD = Build("type-II", AXES, 10, BATCH_WALKS, 951)


@functools.cache
def shipped_table(noise: str) -> FractionTable:
    """Load a table that ships, once."""
    return load_table(noise)


@pytest.fixture(scope="module")
def batches() -> list[BatchResult]:
    return [BUILD.simulate(k) for k in range(BUILD.batches)]


@pytest.fixture(scope="module")
def table(batches: list[BatchResult]) -> FractionTable:
    return average_batches(BUILD, batches)


# -- nodes -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("p", "c"), list(itertools.product(range(len(MASSES)), range(len(CRITERIA)))))
def test_at_its_nodes_the_table_gives_its_values_and_errors(table: FractionTable, p: int, c: int) -> None:
    choice: dict[str, Any] = {"criterion": CRITERIA[c], "min_mass": MASSES[p]}
    grid = AXES.h[:, None], AXES.steps[None, :]
    np.testing.assert_allclose(table.fraction(*grid, **choice), table.values[:, :, p, 0, c], rtol=0, atol=1e-12)
    np.testing.assert_allclose(table.standard_error(*grid, **choice), table.errors[:, :, p, 0, c], rtol=1e-9, atol=1e-15)
    for j, n in enumerate(AXES.steps[1:], start=1):
        for s, scale in enumerate(AXES.scales):
            value = table.fraction(AXES.h, int(n), window=float(n) ** scale, **choice)
            # the spline onto the scales may leave 0..1, what is read does not
            expected = np.clip(table.values[:, j, p, s, c], 0, 1)
            np.testing.assert_allclose(value, expected, rtol=0, atol=1e-11)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_exact_values_stand_where_they_are_known_and_have_no_error(noise: str) -> None:
    build = dataclasses.replace(BUILD, noise=noise, batches=8)
    table = average_batches(build, [build.simulate(k) for k in range(8)])
    known = 0
    for H, n in itertools.product(AXES.h, AXES.steps):
        exact = exact_zero_fraction(noise, float(H), int(n))
        if exact is not None:
            known += 1
            assert float(table.fraction(H, n)) == pytest.approx(exact, abs=1e-13)
            assert float(table.standard_error(H, n)) == 0.0
        else:
            assert float(table.standard_error(H, n)) > 0.0
    # n = 1 and 2 at five H, H = 1/2 at four more n, and for type I the limit H = 1 as well
    assert known == {"type-I": 18, "type-II": 14}[noise]


# -- between nodes ---------------------------------------------------------------------------------------------------


def test_answers_have_the_broadcast_shape(table: FractionTable) -> None:
    H, steps = np.array([[0.4], [0.9]]), np.array([3.0, 10.0, 20.0])
    for read in (table.fraction, table.standard_error):
        assert read(0.4, 10).shape == ()
        assert read(H, 10).shape == (2, 1)
        grid = read(H, steps, "rate<0.2", window=2.5, min_mass=0.07)
        assert grid.shape == (2, 3)
        one = [[float(read(h, n, "rate<0.2", window=2.5, min_mass=0.07)) for n in steps] for h in H[:, 0]]
        np.testing.assert_allclose(grid, one, rtol=1e-12)


def test_windows_shorter_than_a_step_and_longer_than_the_walk(table: FractionTable) -> None:
    H, n = np.array([0.4, 0.7, 0.95]), np.array([3.0, 7.3, 25.0])
    for criterion in ("zero", "rate<0.2"):
        step = table.fraction(H, n, criterion)
        np.testing.assert_allclose(table.fraction(H, n, criterion, window=0.01), step, rtol=0, atol=1e-12)
        walk = [float(table.fraction(h, t, criterion, window=t)) for h, t in zip(H, n, strict=True)]
        np.testing.assert_allclose(table.fraction(H, n, criterion, window=1e6), walk, rtol=0, atol=1e-12)
        assert (step > walk).all()
    # A window of one step is not lost where the walk has only one.
    assert float(table.fraction(0.7, 1.0, window=5.0)) == pytest.approx(0.5, abs=1e-12)


def test_window_scale_is_the_ratio_of_logarithms_between_one_step_and_the_walk() -> None:
    assert window_scale(10.0, 1000.0) == pytest.approx(1 / 3)
    assert window_scale(1.0, 50.0) == 0.0
    assert window_scale(0.3, 50.0) == 0.0
    assert window_scale(50.0, 50.0) == 1.0
    assert window_scale(70.0, 50.0) == 1.0
    assert window_scale(1.0, 1.0) == 0.0
    assert window_scale([1.0, 4.0], [[16.0], [4.0]]).tolist() == [[0.0, 0.5], [0.0, 1.0]]


def test_fractions_and_errors_stay_within_bounds_everywhere(table: FractionTable) -> None:
    rng = np.random.default_rng(952)
    for _ in range(200):
        choice: dict[str, Any] = {
            "criterion": "zero" if rng.random() < 0.3 else f"rate<{math.exp(rng.uniform(math.log(0.05), math.log(1.0)))}",
            "window": math.exp(rng.uniform(-1, 4)),
            "min_mass": (None, 0.0, rng.uniform(0.05, 0.4))[rng.integers(3)],
        }
        H, n = rng.uniform(0.3, 1.0, 50), rng.uniform(1, 25, 50)
        fraction, error = table.fraction(H, n, **choice), table.standard_error(H, n, **choice)
        assert (fraction >= 0).all()
        assert (fraction <= 1).all()
        assert (error >= 0).all()
        assert error.max() < 2 * table.errors.max()


def test_the_error_between_nodes_lies_between_those_at_nodes(table: FractionTable) -> None:
    H, n = 0.6, math.sqrt(9 * 16)
    corners = [float(table.standard_error(h, t, "rate<0.2")) for h in (0.5, 0.7) for t in (9, 16)]
    assert min(corners) < float(table.standard_error(H, n, "rate<0.2")) < max(corners)
    # halfway in H and in ln n: the mean of the four
    assert float(table.standard_error(H, n, "rate<0.2")) == pytest.approx(np.mean(corners), rel=1e-9)


OFF_NODES = {"type-I": [0.62, 0.87, 0.93], "type-II": [0.62, 0.92, 1.12]}


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_the_table_that_ships_interpolates_to_what_walks_do_between_its_nodes(noise: str) -> None:
    # H, steps, parent samples and thresholds between the nodes of the table; windows of 1, sqrt(n) and n steps.
    axes = TableAxes(
        h=np.array(OFF_NODES[noise]),
        steps=np.array([9, 36, 225, 900]),
        masses=np.array([0.0, 0.03, 0.15, 0.4]),
        scales=np.array([0.0, 0.5, 1.0]),
        thresholds=np.array([0.05, 0.13, 0.24, 0.47]),
    )
    shipped = default_axes(noise)
    assert not set(axes.h) & set(shipped.h)
    assert not set(axes.steps) & set(shipped.steps)
    table = shipped_table(noise)
    rng = np.random.default_rng(953)
    count = 16
    batches = np.array([simulate_batch(noise, axes, BATCH_WALKS, rng).fraction for _ in range(count)], dtype=float)
    mean, se = batches.mean(axis=0), batches.std(axis=0, ddof=1) / math.sqrt(count)
    # Where hardly any walk is quiescent the batches know little of their own scatter: a floor of three walks in all.
    floor = 3 / (count * BATCH_WALKS)
    criteria = ["zero", *(f"rate<{theta}" for theta in axes.thresholds)]
    places = [
        (j, p, s, c)
        for j, p, s, c in np.ndindex(axes.shape[1:])
        # SFR over the whole life is the mean rate itself, and then a rate criterion says nothing: it jumps from 0 to 1 at 1
        if s < 2 or c == 0
    ]
    limit = stats.t.isf(FALSE_ALARM / (2 * len(places) * axes.h.size), count - 1)
    wrong = []
    for j, p, s, c in places:
        n = int(axes.steps[j])
        choice: dict[str, Any] = {
            "criterion": criteria[c],
            "window": float(n) ** axes.scales[s],
            "min_mass": (None, *axes.masses)[p],
        }
        read, error = table.fraction(axes.h, n, **choice), table.standard_error(axes.h, n, **choice)
        # Interpolation itself may be wrong by a tenth of a per cent, less than any survey resolves.
        allowed = 0.001 + limit * np.sqrt(se[:, j, p, s, c] ** 2 + error**2 + floor**2)
        if (np.abs(read - mean[:, j, p, s, c]) > allowed).any():
            wrong.append((n, choice, read, mean[:, j, p, s, c], allowed))
    assert wrong == []


# -- scatter and the clock's criterion -------------------------------------------------------------------------------


@functools.cache
def walks_of(noise: str) -> tuple[float, NDArray[np.float64], NDArray[np.float64]]:
    """Give H, the last eight rates in units of the mean so far, and formed masses, of 100,000 walks of 64 steps."""
    H, n = 0.84 if noise == "type-I" else 0.9, 64
    rates = reflect(draw_noise(noise, H, n, 100_000, np.random.default_rng(954)))
    mass = formed_mass(rates)[:, -1]
    with np.errstate(invalid="ignore"):
        return H, np.where(mass[:, None] > 0, rates[:, -8:] * n / mass[:, None], 0.0), mass


SCATTERS = [(0.2, 0.25), (0.1, 0.3), (0.5, 0.2), (0.05, 0.3)]


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize(("theta", "scatter"), SCATTERS)
@pytest.mark.parametrize("mass", [None, 0.1])
@pytest.mark.parametrize("window", [1, 8])
def test_scatter_moves_rates_across_the_threshold_as_it_does_single_walks(
    noise: str, theta: float, scatter: float, mass: float | None, window: int
) -> None:
    H, recent, formed = walks_of(noise)
    members = formed >= 0 if mass is None else formed > mass * formed.mean()
    q = recent[members, -window:].mean(axis=1)
    # direct convolution, walk by walk: the chance that a normal of this width in log10 brings q below theta
    with np.errstate(divide="ignore"):
        chance = np.where(q > 0, ndtr((math.log10(theta) - np.log10(q)) / scatter), 1.0)
    blurred, sharp = (
        Definition(mass, parse_criterion(f"rate<{theta}"), float(window), scatter=width) for width in (scatter, 0.0)
    )
    table = shipped_table(noise)
    found, without = (float(table.surface(d)(H, 64, window)) for d in (blurred, sharp))
    error = float(table.error_of(blurred, H, 64, window))
    comparisons = 2 * 2 * 2 * 2 * len(SCATTERS)
    limit = stats.norm.isf(FALSE_ALARM / (2 * comparisons))
    assert abs(found - chance.mean()) < limit * math.hypot(error, chance.std() / math.sqrt(q.size))
    # what scatter adds is known better than the fraction itself, from the same walks
    added = chance - (q < theta)
    assert abs(found - without - added.mean()) < limit * math.hypot(error, added.std() / math.sqrt(q.size))


def test_scatter_of_nothing_changes_nothing_and_more_of_it_finds_more_below_a_low_threshold(
    table: FractionTable,
) -> None:
    exact, none, little, more = (
        float(table.surface(Definition(0.1, parse_criterion("rate<0.2"), scatter=x))(0.85, 16.0)) for x in (0.0, 1e-9, 0.05, 0.2)
    )
    assert none == pytest.approx(exact, abs=1e-9)
    assert little != exact
    assert more > exact


def test_specific_rates_are_read_at_the_threshold_that_the_clock_gives(table: FractionTable) -> None:
    surface = table.surface(Definition(0.1, parse_criterion("ssfr<0.3")))
    for theta in (0.05, 0.13, 0.2, 1.0):
        expected = table.surface(Definition(0.1, parse_criterion(f"rate<{theta}")))(0.85, 16.0)
        assert float(surface(0.85, 16.0, 1.0, theta)) == pytest.approx(float(expected), abs=1e-12)


# -- how errors hang together ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(("mass", "criterion"), [(None, "zero"), (0.0, "zero"), (0.1, "rate<0.05"), (0.4, "rate<0.5")])
def test_replicates_carry_the_standard_error_and_the_correlations(
    table: FractionTable, batches: list[BatchResult], mass: float | None, criterion: str
) -> None:
    # Definitions for which replicates are kept themselves.
    deviations = table.deviations(Definition(mass, parse_criterion(criterion)))
    d = deviations(AXES.h[:, None], AXES.steps[None, 2:]).reshape(BUILD.batches, -1)
    p, c = MASSES.index(mass), CRITERIA.index(criterion)
    shares = np.array([b.fraction[:, 2:, p, 0, c] for b in batches], dtype=float).reshape(BUILD.batches, -1)
    simulated = table.errors[:, 2:, p, 0, c].ravel() > 0
    covariance = np.cov(shares[:, simulated].T) / BUILD.batches
    sd = np.sqrt(np.diag(covariance))
    found = d[:, simulated].T @ d[:, simulated] / np.outer(sd, sd)
    # There are as many replicates as batches, so that nothing but rounding is between the two.  In standard errors, R
    # deviations whose squares sum to R - 1 are rounded by up to 1/8 each: the sum of products over R - 1 moves by at most
    # 2/8 sqrt(R / (R - 1)) + (1/8)^2 R / (R - 1).
    ratio = BUILD.batches / (BUILD.batches - 1)
    assert np.abs(found - covariance / np.outer(sd, sd)).max() < 0.25 * math.sqrt(ratio) + ratio / 64
    assert (np.abs(covariance / np.outer(sd, sd)) > 0.5).sum() > 2 * sd.size


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize(
    "definition",
    [
        Definition(),
        Definition(0.1),
        Definition(0.07),
        Definition(None, parse_criterion("rate<0.2")),
        Definition(0.1, parse_criterion("rate<0.15")),
    ],
)
def test_replicates_of_the_table_that_ships_are_as_large_as_its_standard_errors(noise: str, definition: Definition) -> None:
    table = shipped_table(noise)
    H, n = table.axes.h[5:-2, None], table.axes.steps[None, 8:]
    size = np.sqrt((table.deviations(definition)(H, n) ** 2).sum(axis=0))
    error = table.standard_error(H, n, str(definition.criterion), min_mass=definition.min_mass)
    ratio = size[error > 0] / error[error > 0]
    # Each is the root of a chi-square variable of 15 degrees of freedom over 15, of spread 0.18; interpolation between
    # the definitions that are kept averages, and takes some off.
    assert 0.85 < np.median(ratio) < 1.1
    assert np.quantile(ratio, 0.05) > 0.5
    assert np.quantile(ratio, 0.95) < 1.5


def test_replicates_do_not_move_exact_values(table: FractionTable) -> None:
    d = table.deviations(Definition())(0.5, AXES.steps)
    np.testing.assert_allclose(d, 0.0, atol=1e-15)
    assert table.deviations(Definition())(0.85, 16.0).any()


def test_a_table_without_replicates_says_so(table: FractionTable) -> None:
    bare = dataclasses.replace(table, replicates=None)
    with pytest.raises(HurstfitError, match="the type-II table keeps no replicates"):
        bare.deviations(Definition())


# -- what is refused -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("H", "steps", "choice", "sentence"),
    [
        (0.2, 10, {}, "the type-II table holds H from 0.3 to 1, not 0.2"),
        (1.01, 10, {}, "holds H from 0.3 to 1, not 1.01"),
        (math.nan, 10, {}, "holds H from 0.3 to 1, not nan"),
        ([0.5, 1.2, 1.4], 10, {}, "not 1.2"),
        (0.7, 0.5, {}, "holds step number from 1 to 25, not 0.5"),
        (0.7, 26, {}, "holds step number from 1 to 25, not 26"),
        (0.7, 10, {"min_mass": 0.01}, "not 0.01"),
        (0.7, 10, {"min_mass": 0.5}, "more than 0.05 to 0.4 of the mean mass; not 0.5"),
        (0.7, 10, {"min_mass": -0.1}, "not -0.1"),
        (0.7, 10, {"criterion": "rate<0.01"}, "thresholds from 0.05 to 1, not 0.01"),
        (0.7, 10, {"criterion": "rate<1.2"}, "thresholds from 0.05 to 1, not 1.2"),
        (0.7, 10, {"criterion": "rate<-1"}, "'rate<-1' is not a criterion"),
        (0.7, 10, {"criterion": "rate<nan"}, "'rate<nan' is not a criterion"),
        (0.7, 10, {"criterion": "rate"}, "'rate' is not a criterion"),
        (0.7, 10, {"criterion": "Zero"}, "'Zero' is not a criterion"),
        (0.7, 10, {"criterion": "ssfr<0.2"}, "depends on the clock"),
        (0.7, 10, {"window": 0.0}, "window must be longer than zero steps, not 0"),
        (0.7, 10, {"window": -2.0}, "window must be longer than zero steps, not -2"),
        (0.7, 10, {"window": math.nan}, "window must be longer than zero steps, not nan"),
    ],
)
def test_what_the_table_does_not_hold_is_refused_in_one_sentence(
    table: FractionTable, H: Any, steps: Any, choice: dict[str, Any], sentence: str
) -> None:
    for read in (table.fraction, table.standard_error):
        with pytest.raises(HurstfitError) as caught:
            read(H, steps, **choice)
        assert sentence in str(caught.value)
        assert "\n" not in str(caught.value)


def test_scatter_that_the_table_cannot_follow_is_refused(table: FractionTable) -> None:
    with pytest.raises(HurstfitError, match="scatter has no effect on the criterion zero"):
        table.surface(Definition(scatter=0.2))
    with pytest.raises(HurstfitError, match=r"scatter of 0\.5 dex about rate<0\.5 reaches beyond the largest threshold"):
        table.surface(Definition(None, parse_criterion("rate<0.5"), scatter=0.5))


@pytest.mark.parametrize("name", ["values", "errors"])
def test_arrays_that_do_not_fit_the_axes_are_refused(table: FractionTable, name: str) -> None:
    array: NDArray[np.float64] = getattr(table, name)[:, :-1]
    with pytest.raises(ValueError, match=f"{name} have shape"):
        dataclasses.replace(table, **{name: array})


@pytest.mark.parametrize(
    ("text", "kind", "limit"),
    [("zero", "zero", 0.0), (" zero ", "zero", 0.0), ("rate<0.2", "rate", 0.2), ("rate < 1e-1", "rate", 0.1)],
)
def test_criteria_are_read_as_users_write_them(text: str, kind: str, limit: float) -> None:
    criterion = parse_criterion(text)
    assert (criterion.kind, criterion.limit) == (kind, limit)
    assert parse_criterion(str(criterion)) == criterion


@pytest.mark.parametrize("scatter", [0.0, 0.1])
def test_the_error_at_a_threshold_that_follows_the_clock_is_that_at_the_threshold(table: FractionTable, scatter: float) -> None:
    specific = Definition(0.1, parse_criterion("ssfr<0.3"), scatter=scatter)
    for theta in (0.05, 0.1, 0.2, 0.5):
        plain = Definition(0.1, parse_criterion(f"rate<{theta}"), scatter=scatter)
        expected = table.error_of(plain, AXES.h[:, None], AXES.steps[None, 1:])
        found = table.error_of(specific, AXES.h[:, None], AXES.steps[None, 1:], threshold=theta)
        np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-15)
    between = float(table.error_of(specific, 0.85, 16, threshold=math.sqrt(0.1 * 0.2)))
    ends = [float(table.error_of(specific, 0.85, 16, threshold=theta)) for theta in (0.1, 0.2)]
    assert between == pytest.approx(np.mean(ends), rel=1e-9)
