"""The file of a table: what is written comes back, and what is damaged is refused in one sentence."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import h5py
import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.building import Build, average_batches
from hurstfit.fractions.exact import exact_zero_fraction
from hurstfit.fractions.simulate import BATCH_WALKS
from hurstfit.fractions.store import FORMAT_VERSION, KIND, load_table, read_table, shipped_path, write_table
from hurstfit.fractions.table import FractionTable
from hurstfit.sealing import seal
from hurstfit.walks import NOISE_TYPES

AXES = TableAxes(
    h=np.array([0.3, 0.5, 0.7, 0.9]),
    steps=np.array([1, 2, 4, 8, 16]),
    masses=np.array([0.0, 0.1]),
    scales=np.array([0.0, 1.0]),
    thresholds=np.array([0.1, 0.2, 0.4, 1.5]),
)
AXIS_NAMES = ("h", "steps", "masses", "scales", "thresholds")


@pytest.fixture(scope="module")
def table() -> FractionTable:
    build = Build("type-II", AXES, 8, BATCH_WALKS, 901)
    return average_batches(build, (build.simulate(k) for k in range(8)))


@pytest.fixture
def file(table: FractionTable, tmp_path: Path) -> Path:
    path = tmp_path / "small.h5"
    write_table(path, table)
    return path


@contextmanager
def changed(path: Path) -> Iterator[h5py.File]:
    """Change a table and seal it again, as somebody could who means it: the checks behind the seal must notice."""
    with h5py.File(path, "r+") as handle:
        yield handle
    seal(path, KIND)


def refused(path: Path, sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence) as caught:
        read_table(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_table_comes_back_to_six_decimals(table: FractionTable, file: Path) -> None:
    back = read_table(file)
    assert back.noise == "type-II"
    for name in AXIS_NAMES:
        np.testing.assert_array_equal(getattr(back.axes, name), getattr(AXES, name))
    # half of the last decimal, and the rounding of single precision below 1
    np.testing.assert_allclose(back.values, table.values, rtol=0, atol=0.5e-6 + 1e-7)
    np.testing.assert_allclose(back.errors, table.errors, rtol=0, atol=0.5e-6 + 1e-7)
    assert dict(back.made_by) == dict(table.made_by)
    assert back.replicates is not None
    assert table.replicates is not None
    np.testing.assert_array_equal(back.replicates.units, table.replicates.units)


def test_exact_values_come_back_exactly(file: Path) -> None:
    back = read_table(file)
    for i, H in enumerate(AXES.h):
        for j, n in enumerate(AXES.steps):
            exact = exact_zero_fraction("type-II", float(H), int(n))
            if exact is not None:
                assert back.values[i, j, 0, 0, 0] == exact
                assert back.errors[i, j, 0, 0, 0] == 0.0


def test_a_table_written_again_is_the_same_table(file: Path, tmp_path: Path) -> None:
    first = read_table(file)
    write_table(tmp_path / "again.h5", first)
    again = read_table(tmp_path / "again.h5")
    assert again.digest == first.digest
    np.testing.assert_array_equal(again.values, first.values)
    np.testing.assert_array_equal(again.errors, first.errors)


def test_the_digest_tells_tables_apart(table: FractionTable, file: Path, tmp_path: Path) -> None:
    values = table.values.copy()
    values[2, 3, 0, 0, 0] += 2e-6
    other = FractionTable("type-II", AXES, values, table.errors, table.made_by, "", table.replicates)
    write_table(tmp_path / "other.h5", other)
    assert len(read_table(file).digest) == 64
    assert read_table(tmp_path / "other.h5").digest != read_table(file).digest


def test_writing_leaves_no_other_file_behind(table: FractionTable, file: Path) -> None:
    write_table(file, table)
    assert [p.name for p in file.parent.iterdir()] == ["small.h5"]


def test_a_failed_write_leaves_the_old_file_alone(table: FractionTable, file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before = file.read_bytes()

    def fail(*_: object, **__: object) -> None:
        raise OSError("no space left")

    monkeypatch.setattr(h5py.Group, "create_dataset", fail)
    with pytest.raises(OSError, match="no space left"):
        write_table(file, table)
    assert file.read_bytes() == before
    assert [p.name for p in file.parent.iterdir()] == ["small.h5"]


# -- damage ----------------------------------------------------------------------------------------------------------


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    refused(tmp_path / "nowhere.h5", "does not exist")
    refused(tmp_path, "is a directory")


@pytest.mark.parametrize("share", [0.0, 0.1, 0.5, 0.9, 0.999])
def test_a_truncated_file_is_refused(file: Path, share: float) -> None:
    file.write_bytes(file.read_bytes()[: int(share * file.stat().st_size)])
    refused(file, "is damaged or truncated" if share else "not a fraction table that hurstfit wrote")


def test_a_file_that_is_not_hdf5_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "table.h5"
    path.write_text("H, n, fraction\n0.5, 600, 0.023\n")
    refused(path, "is not a fraction table that hurstfit wrote")


def test_an_hdf5_file_of_something_else_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "else.h5"
    with h5py.File(path, "w") as file:
        file["values"] = np.arange(3)
    refused(path, "is not a fraction table that hurstfit wrote")
    with h5py.File(path, "w", userblock_size=512) as file:
        file["values"] = np.arange(3)
    seal(path, KIND)
    refused(path, "cannot be read")
    seal(path, "run file")
    refused(path, "is a run file, not a fraction table")


def test_a_table_of_a_newer_version_is_refused_with_advice(file: Path) -> None:
    with changed(file) as handle:
        handle.attrs["format_version"] = FORMAT_VERSION + 1
    refused(file, rf"format {FORMAT_VERSION + 1}, newer than this hurstfit reads \({FORMAT_VERSION}\); update hurstfit")


@pytest.mark.parametrize("name", ["values", "errors", "replicates", *AXIS_NAMES, "made_by"])
def test_a_file_without_one_of_its_parts_is_refused(file: Path, name: str) -> None:
    with changed(file) as handle:
        del handle[name]
    refused(file, "damaged")


@pytest.mark.parametrize("name", ["values", "errors", "replicates", *AXIS_NAMES])
def test_a_number_changed_afterwards_is_noticed(file: Path, name: str) -> None:
    with changed(file) as handle:
        array = handle[name][...]
        array.flat[-1] = array.flat[-1] + 1
        handle[name][...] = array
    # axes that are no longer axes do not get as far as the checksum
    refused(file, "damaged")


def test_a_setting_changed_afterwards_is_noticed(file: Path) -> None:
    with changed(file) as handle:
        attributes = handle["made_by"].attrs
        key = next(iter(attributes))
        attributes[key] = type(attributes[key])(b"other" if isinstance(attributes[key], bytes) else "other")
    refused(file, "damaged: its contents do not match its checksum")


def test_a_change_without_a_new_seal_is_noticed(file: Path) -> None:
    with h5py.File(file, "r+") as handle:
        handle.attrs["noise"] = "type-I"
    refused(file, "is damaged or truncated")


@pytest.mark.parametrize("name", ["values", "errors", "replicates"])
def test_a_byte_flipped_in_the_stored_numbers_is_noticed(file: Path, name: str) -> None:
    with h5py.File(file, "r") as handle:
        stored = handle[name].id.get_chunk_info(1)
    content = bytearray(file.read_bytes())
    content[stored.byte_offset + stored.size // 2] ^= 0xFF
    file.write_bytes(content)
    refused(file, "damaged")


def test_no_flipped_bit_gets_as_far_as_the_hdf5_library(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    content = file.read_bytes()

    def opened(*_: object, **__: object) -> None:
        raise AssertionError("the HDF5 library was let at a damaged file")

    monkeypatch.setattr(h5py, "File", opened)
    # one bit of every byte of the seal, and of a few hundred behind it
    for place in [*range(512), *range(512, len(content), len(content) // 300)]:
        damaged = bytearray(content)
        damaged[place] ^= 1 << place % 8
        file.write_bytes(damaged)
        refused(file, "is damaged or truncated|hurstfit wrote|not a fraction table")


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_no_flipped_bit_in_a_table_that_ships_goes_unnoticed(noise: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    content = bytearray(shipped_path(noise).read_bytes())
    path = tmp_path / "flipped.h5"
    monkeypatch.setattr(h5py, "File", None)
    for place in np.random.default_rng(961).integers(0, len(content), 40):
        content[place] ^= 0x10
        path.write_bytes(content)
        refused(path, "is damaged or truncated|hurstfit wrote")
        content[place] ^= 0x10


# -- by name ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_the_tables_that_ship_are_found_by_name_and_sound(noise: str) -> None:
    table = load_table(noise)
    assert table.noise == noise
    assert table.digest == read_table(shipped_path(noise)).digest
    single_step = table.values[:, :, :, 0]
    assert single_step.min() >= 0
    assert single_step.max() <= 1
    # Over longer windows values are moved from whole numbers of steps to the scales of the table by a spline, which for
    # criteria up to the mean rate passes 0 or 1 by no more than a few per mille.
    below_mean = table.values[..., : 1 + int((table.axes.thresholds <= 1).sum())]
    assert below_mean.min() > -0.003
    assert below_mean.max() < 1.003
    assert table.errors.min() >= 0
    assert table.errors.max() < 2e-3
    assert table.replicates is not None
    assert {"seed", "batches", "walks_per_batch", "numpy"} <= set(table.made_by)


def test_a_table_is_found_by_path(file: Path) -> None:
    assert load_table(file).digest == load_table(str(file)).digest == read_table(file).digest


def test_an_unknown_name_is_refused_with_the_nearest_one() -> None:
    with pytest.raises(HurstfitError, match=r"no fraction table 'type-2'.*type-I or type-II") as caught:
        load_table("type-2")
    assert "did you mean" in str(caught.value)
