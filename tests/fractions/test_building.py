"""Building a table: the same numbers however it is run, interrupted or resumed, with errors that mean what they say."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy import stats

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.building import MIN_BATCHES, Build, average_batches, remove_batches, run_build
from hurstfit.fractions.simulate import BATCH_WALKS, BatchResult
from hurstfit.fractions.table import FractionTable

AXES = TableAxes(
    h=np.array([0.3, 0.6, 0.8, 0.95]),
    steps=np.array([2, 4, 8, 12, 16]),
    masses=np.array([0.0, 0.1, 0.3]),
    scales=np.array([0.0, 1.0]),
    thresholds=np.array([0.1, 0.3]),
)
BUILD = Build("type-I", AXES, 8, BATCH_WALKS, 41)


class OneByOne(Executor):
    """Runs everything at once, in the caller's thread, and counts."""

    def __init__(self) -> None:
        self.submitted = 0

    def submit(self, function: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        self.submitted += 1
        future: Future[Any] = Future()
        try:
            future.set_result(function(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


def assert_identical(a: FractionTable, b: FractionTable) -> None:
    assert a.values.tobytes() == b.values.tobytes()
    assert a.errors.tobytes() == b.errors.tobytes()
    assert a.made_by == b.made_by


@pytest.fixture(scope="module")
def reference(tmp_path_factory: pytest.TempPathFactory) -> FractionTable:
    return run_build(BUILD, tmp_path_factory.mktemp("reference") / "batches", OneByOne())


def test_the_number_and_kind_of_workers_leave_every_bit_alone(reference: FractionTable, tmp_path: Path) -> None:
    with ThreadPoolExecutor(3) as threads:
        assert_identical(run_build(BUILD, tmp_path / "threads", threads), reference)
    with ProcessPoolExecutor(2) as processes:
        assert_identical(run_build(BUILD, tmp_path / "processes", processes, keep=3), reference)


@pytest.mark.parametrize("after", [1, 5])
def test_an_interrupted_build_goes_on_to_the_same_table(reference: FractionTable, tmp_path: Path, after: int) -> None:
    finished: list[int] = []

    def interrupt(batches: int) -> None:
        finished.append(batches)
        if sum(finished) == after:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt), ThreadPoolExecutor(2) as threads:
        run_build(BUILD, tmp_path / "batches", threads, interrupt)
    executor = OneByOne()
    again: list[int] = []
    assert_identical(run_build(BUILD, tmp_path / "batches", executor, again.append), reference)
    assert executor.submitted == BUILD.batches - after
    assert again == [after] + [1] * (BUILD.batches - after)


def test_a_finished_build_is_not_run_again(reference: FractionTable, tmp_path: Path) -> None:
    run_build(BUILD, tmp_path / "batches", OneByOne())
    idle = OneByOne()
    assert_identical(run_build(BUILD, tmp_path / "batches", idle), reference)
    assert idle.submitted == 0
    remove_batches(tmp_path / "batches")
    assert not (tmp_path / "batches").exists()


def test_a_batch_that_fails_ends_the_build_and_keeps_what_was_finished(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    simulate = Build.simulate

    def fail_at_third(build: Build, batch: int) -> BatchResult:
        if batch == 2:
            raise MemoryError("no memory left")
        return simulate(build, batch)

    monkeypatch.setattr(Build, "simulate", fail_at_third)
    with pytest.raises(MemoryError, match="no memory left"):
        run_build(BUILD, tmp_path / "batches", OneByOne(), keep=1)
    monkeypatch.undo()
    rest = OneByOne()
    run_build(BUILD, tmp_path / "batches", rest)
    assert rest.submitted == BUILD.batches - 2


@pytest.mark.parametrize("keep", [1, 2])
def test_no_more_batches_wait_than_asked_for(tmp_path: Path, keep: int) -> None:
    waiting: list[int] = []

    class Watching(OneByOne):
        finished = 0

        def submit(self, function: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
            future = super().submit(function, *args, **kwargs)
            waiting.append(self.submitted - self.finished)
            return future

    executor = Watching()

    def done(batches: int) -> None:
        executor.finished += batches

    run_build(BUILD, tmp_path / "batches", executor, done, keep=keep)
    assert max(waiting) == keep


@pytest.mark.parametrize(
    "other",
    [
        {"noise": "type-II"},
        {"seed": 42},
        {"batch_walks": 2 * BATCH_WALKS},
        {"axes": dataclasses.replace(AXES, thresholds=np.array([0.1, 0.31]))},
    ],
)
def test_a_folder_of_another_build_is_refused(tmp_path: Path, other: dict[str, Any]) -> None:
    run_build(BUILD, tmp_path, OneByOne())
    with pytest.raises(HurstfitError, match="holds batches of a build with other settings") as caught:
        run_build(dataclasses.replace(BUILD, **other), tmp_path, OneByOne())
    assert str(tmp_path) in str(caught.value)


def test_a_build_can_be_made_longer(tmp_path: Path) -> None:
    run_build(BUILD, tmp_path, OneByOne())
    longer = dataclasses.replace(BUILD, batches=10)
    executor = OneByOne()
    extended = run_build(longer, tmp_path, executor)
    assert executor.submitted == 2
    assert_identical(extended, average_batches(longer, (longer.simulate(k) for k in range(10))))


@pytest.mark.parametrize("damage", [b"", b"no HDF5 file", None])
def test_a_damaged_batch_is_named_and_refused(tmp_path: Path, damage: bytes | None) -> None:
    run_build(BUILD, tmp_path, OneByOne())
    path = sorted(tmp_path.iterdir())[3]
    # None: half of the file
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2] if damage is None else damage)
    with pytest.raises(HurstfitError, match="cannot be read") as caught:
        run_build(BUILD, tmp_path, OneByOne())
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_folder_that_cannot_be_made_is_refused(tmp_path: Path) -> None:
    with pytest.raises(HurstfitError, match="cannot make the folder"):
        run_build(BUILD, tmp_path / "no" / "such" / "place", OneByOne())
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(HurstfitError, match="cannot make the folder"):
        run_build(BUILD, tmp_path / "file", OneByOne())


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"batches": MIN_BATCHES - 1}, f"batches must be at least {MIN_BATCHES}"),
        ({"batch_walks": 1000}, f"multiple of {BATCH_WALKS}, not 1000"),
        ({"batch_walks": 0}, f"multiple of {BATCH_WALKS}, not 0"),
        ({"seed": -1}, "seed must not be negative, not -1"),
    ],
)
def test_settings_that_make_no_table_are_refused(change: dict[str, int], sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence):
        dataclasses.replace(BUILD, **change)


def test_every_seed_and_every_batch_has_random_numbers_of_its_own() -> None:
    batches = [BUILD.simulate(k) for k in range(BUILD.batches)]
    batches += [dataclasses.replace(BUILD, seed=seed).simulate(0) for seed in (40, 42, 0)]
    assert len({b.fraction.tobytes() for b in batches}) == len(batches)
    np.testing.assert_array_equal(BUILD.simulate(3).fraction, batches[3].fraction)


def test_a_table_says_what_made_it(reference: FractionTable) -> None:
    made_by = dict(reference.made_by)
    assert {key: made_by[key] for key in ("noise", "batches", "walks_per_batch", "seed")} == {
        "noise": "type-I",
        "batches": "8",
        "walks_per_batch": str(BATCH_WALKS),
        "seed": "41",
    }
    assert made_by["numpy"] == np.__version__


def test_values_are_means_over_batches_and_errors_their_standard_errors(reference: FractionTable) -> None:
    shares = np.array([BUILD.simulate(k).fraction for k in range(BUILD.batches)], dtype=float)
    # Exact values replace those at n = 2, all walks, zero, one step, and where no walk is quiescent the error is a floor.
    simulated = (reference.errors > 0) & (shares.mean(axis=0) > 0)
    np.testing.assert_allclose(reference.values[simulated], shares.mean(axis=0)[simulated], rtol=1e-12)
    expected = shares.std(axis=0, ddof=1) / np.sqrt(BUILD.batches)
    np.testing.assert_allclose(reference.errors[simulated], expected[simulated], rtol=1e-9)
    assert simulated.sum() > 0.6 * simulated.size


def test_where_no_batch_saw_a_quiescent_walk_the_error_is_one_walk(reference: FractionTable) -> None:
    # A window of the whole life: at zero throughout means no mass, so that no walk of these parent samples is quiescent.
    members = sum(BUILD.simulate(k).members for k in range(BUILD.batches))
    unseen = reference.values[:, :, 1:, 1, 0]
    np.testing.assert_array_equal(unseen, 0.0)
    np.testing.assert_allclose(reference.errors[:, :, 1:, 1, 0], 1.0 / members[:, :, 1:], rtol=1e-12)


@pytest.mark.parametrize("noise", ["type-I", "type-II"])
def test_standard_errors_agree_with_the_scatter_of_independent_tables(noise: str) -> None:
    axes = TableAxes(np.array([0.6, 0.95]), np.array([4, 16]), np.array([0.0, 0.3]), np.array([0.0, 0.5, 1.0]), np.array([0.2]))
    repetitions, batches = 30, 8
    build = Build(noise, axes, batches, BATCH_WALKS, 43)
    tables = [average_batches(build, (build.simulate(batches * r + k) for k in range(batches))) for r in range(repetitions)]
    scatter = np.var([t.values for t in tables], axis=0, ddof=1)
    quoted = np.mean([t.errors**2 for t in tables], axis=0)
    # Leave out nodes where nothing was seen: there the error is a floor, and values do not scatter.
    seen = np.min([t.values for t in tables], axis=0) > 1e-3
    ratio = scatter[seen] / quoted[seen]
    assert ratio.size >= 40
    # Ratio of two chi-square variables over their degrees of freedom; one false alarm in a thousand over all nodes.
    alarm = 1e-3 / (2 * ratio.size)
    law = stats.f(repetitions - 1, repetitions * (batches - 1))
    assert ratio.min() > law.ppf(alarm)
    assert ratio.max() < law.isf(alarm)
    # The mean over nodes as well: an error wrong by a tenth throughout would show here first.  The nodes share walks, so
    # that the scatter of the mean is at most that of one node.
    assert abs(ratio.mean() - 1) < stats.norm.isf(0.5e-3) * law.std()
