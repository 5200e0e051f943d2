"""The run file: what is written is read back, opens with other software, and cannot change unnoticed."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import fields, replace
from pathlib import Path

import h5py
import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.runs.store import KIND, RunRecord, is_run_file, read_run, write_run
from hurstfit.sealing import seal


@contextmanager
def changed(path: Path) -> Iterator[h5py.File]:
    """Change a run and seal it again, as somebody could who means it: the checks behind the seal must notice."""
    with h5py.File(path, "r+") as file:
        yield file
    seal(path, KIND)


@pytest.fixture
def record(small_run: Path) -> RunRecord:
    return read_run(small_run)


def assert_equal(a: RunRecord, b: RunRecord) -> None:
    for field in fields(RunRecord):
        ours, theirs = getattr(a, field.name), getattr(b, field.name)
        # the evidence of the joint engine is nan
        assert np.array_equal(ours, theirs, equal_nan=isinstance(ours, float)), field.name
        assert type(ours) is type(theirs), field.name


def test_what_is_written_is_read_back_bit_for_bit(record: RunRecord, tmp_path: Path) -> None:
    write_run(tmp_path / "copy.h5", record)
    assert_equal(read_run(tmp_path / "copy.h5"), record)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["copy.h5"]


def test_texts_of_any_characters_survive(record: RunRecord, tmp_path: Path) -> None:
    texts = {"config_name": "pläne/☉.toml", "config": '# "☉"\r\n\ttab', "measurements": "☉", "stopped": "naïve"}
    odd = replace(record, names=("H[☉ ä]",), **texts)
    write_run(tmp_path / "odd.h5", odd)
    assert_equal(read_run(tmp_path / "odd.h5"), odd)


def test_the_file_explains_itself_to_plain_h5py(small_run: Path, record: RunRecord) -> None:
    with h5py.File(small_run) as file:
        assert file.attrs["format_version"] == 1
        assert file.attrs["seed"] == 7
        assert bool(file.attrs["converged"]) is True
        assert file["draws/H"].attrs["description"] == "correlation (Hurst) exponent"
        assert np.array_equal(file["draws/H"][()], record.draws[..., 0])
        assert bytes(file["config"][()]).decode() == record.config
        assert set(file["versions"].attrs) >= {"hurstfit", "python", "numpy", "scipy", "emcee", "astropy", "h5py"}


def test_emcee_reads_the_chain(small_run: Path, record: RunRecord) -> None:
    from emcee.backends import HDFBackend

    backend = HDFBackend(str(small_run), name="chain", read_only=True)
    assert backend.iteration == record.coordinates.shape[0]
    assert np.array_equal(backend.get_chain(), record.coordinates)
    assert np.array_equal(backend.get_log_prob(), record.log_probability)


def data_sets(path: Path) -> list[str]:
    found: list[str] = []
    with h5py.File(path) as file:
        file.visititems(lambda name, item: found.append(name) if isinstance(item, h5py.Dataset) else None)
    return found


def test_a_changed_number_is_noticed_in_every_data_set(small_run: Path, tmp_path: Path) -> None:
    names = data_sets(small_run)
    assert len(names) >= 8
    for name in names:
        path = tmp_path / "changed.h5"
        path.write_bytes(small_run.read_bytes())
        with changed(path) as file:
            data = file[name][()]
            raw = bytearray(np.ascontiguousarray(data).tobytes())
            raw[len(raw) // 2] ^= 1
            file[name][()] = np.frombuffer(bytes(raw), dtype=data.dtype).reshape(data.shape)
        with pytest.raises(HurstfitError, match=f"damaged: the data set /{name} does not match"):
            read_run(path)


@pytest.mark.parametrize(
    ("place", "key", "value"),
    [
        ("/", "converged", False),
        ("/", "seed", 8),
        ("/", "stopped", "by itself"),
        ("versions", "numpy", "0.1"),
        ("draws/H", "unit", "Myr"),
        ("draws/H", "description", "something else"),
    ],
)
def test_a_changed_attribute_is_noticed(small_run: Path, tmp_path: Path, place: str, key: str, value: object) -> None:
    path = tmp_path / "changed.h5"
    path.write_bytes(small_run.read_bytes())
    with changed(path) as file:
        file[place].attrs[key] = value
    with pytest.raises(HurstfitError, match="damaged: its attributes"):
        read_run(path)


@pytest.mark.parametrize("name", ["config", "draws", "draws/H", "chain/chain", "versions", "log_likelihood"])
def test_a_missing_part_is_a_sentence(small_run: Path, tmp_path: Path, name: str) -> None:
    path = tmp_path / "part.h5"
    path.write_bytes(small_run.read_bytes())
    with changed(path) as file:
        del file[name]
    with pytest.raises(HurstfitError, match=r"part.h5 cannot be read: it is truncated, damaged or not HDF5"):
        read_run(path)


def test_a_change_without_a_new_seal_is_noticed(small_run: Path, tmp_path: Path) -> None:
    path = tmp_path / "changed.h5"
    path.write_bytes(small_run.read_bytes())
    with h5py.File(path, "r+") as file:
        file.attrs["converged"] = False
    with pytest.raises(HurstfitError, match=r"run file .*changed\.h5 is damaged or truncated"):
        read_run(path)


def test_no_flipped_bit_gets_as_far_as_the_hdf5_library(small_run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    content = bytearray(small_run.read_bytes())
    path = tmp_path / "flipped.h5"

    def opened(*_: object, **__: object) -> None:
        raise AssertionError("the HDF5 library was let at a damaged file")

    monkeypatch.setattr(h5py, "File", opened)
    for place in [*range(0, 512, 3), *np.random.default_rng(8).integers(512, len(content), 200)]:
        content[place] ^= 0x08
        path.write_bytes(content)
        with pytest.raises(HurstfitError, match=r"is damaged or truncated|hurstfit wrote|not a run file") as caught:
            read_run(path)
        assert "\n" not in str(caught.value)
        content[place] ^= 0x08


def test_a_newer_format_asks_for_an_update(small_run: Path, tmp_path: Path) -> None:
    path = tmp_path / "newer.h5"
    path.write_bytes(small_run.read_bytes())
    with changed(path) as file:
        file.attrs["format_version"] = 99
    with pytest.raises(HurstfitError, match="run format 99, newer than this hurstfit reads"):
        read_run(path)


def test_a_run_is_told_from_other_files(small_run: Path, tmp_path: Path) -> None:
    from hurstfit.fractions.store import shipped_path

    (tmp_path / "text.h5").write_text("text")
    assert is_run_file(small_run)
    for path in (tmp_path / "text.h5", tmp_path / "none.h5", tmp_path, shipped_path("type-I")):
        assert not is_run_file(path)


def test_a_failed_write_leaves_what_was_there(record: RunRecord, tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    path.write_bytes(b"precious")
    with pytest.raises(TypeError):
        write_run(path, replace(record, versions={"emcee": object()}))  # type: ignore[dict-item]
    assert path.read_bytes() == b"precious"
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"]
