"""The seal on HDF5 files: verified before the library reads, open to plain h5py, and put on whole files only."""

from __future__ import annotations

import hashlib
import re
from pathlib import Path

import h5py
import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.sealing import BLOCK, kind_of, open_sealed, seal, sealed_file

NUMBERS = np.arange(500) ** 2


@pytest.fixture
def file(tmp_path: Path) -> Path:
    path = tmp_path / "sealed.h5"
    with sealed_file(path, "run file") as handle:
        handle["numbers"] = NUMBERS
    return path


def refused(path: Path, kind: str, sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence) as caught, open_sealed(path, kind):
        raise AssertionError("opened")
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_what_is_sealed_opens_again_with_and_without_the_seal(file: Path) -> None:
    with open_sealed(file, "run file") as sealed, h5py.File(file) as plain:
        np.testing.assert_array_equal(sealed["numbers"], NUMBERS)
        np.testing.assert_array_equal(plain["numbers"], NUMBERS)
    assert [p.name for p in file.parent.iterdir()] == ["sealed.h5"]


def test_the_seal_is_plain_text_that_anybody_can_verify(file: Path) -> None:
    content = file.read_bytes()
    text = content[:BLOCK].rstrip(b"\0").decode("ascii")
    assert text.splitlines()[0] == "hurstfit run file"
    stated = re.search(r"SHA-256 of what is behind it: ([0-9a-f]{64})", text)
    assert stated is not None
    assert stated.group(1) == hashlib.sha256(content[BLOCK:]).hexdigest()
    assert content[BLOCK:].startswith(b"\x89HDF\r\n\x1a\n")


def test_a_flipped_bit_in_any_byte_of_the_seal_or_behind_it_is_refused_unopened(
    file: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    content = bytearray(file.read_bytes())

    def opened(*_: object, **__: object) -> None:
        raise AssertionError("the HDF5 library was let at a damaged file")

    monkeypatch.setattr(h5py, "File", opened)
    for place in [*range(BLOCK), *range(BLOCK, len(content), 29)]:
        content[place] ^= 1 << place % 8
        file.write_bytes(content)
        refused(file, "run file", "is damaged or truncated|not a run file")
        content[place] ^= 1 << place % 8


@pytest.mark.parametrize("change", [lambda c: c[:-1], lambda c: c + b"\0", lambda c: c[: BLOCK - 1], lambda c: c[BLOCK:]])
def test_a_file_cut_or_made_longer_is_refused(file: Path, change) -> None:
    file.write_bytes(change(file.read_bytes()))
    refused(file, "run file", "is damaged or truncated|its first bytes are damaged")


def test_a_file_of_another_kind_is_named_for_what_it_is(file: Path) -> None:
    refused(file, "fraction table", "is a run file, not a fraction table")


@pytest.mark.parametrize(
    ("content", "kind"),
    [
        (b"hurstfit run file\nrest", "run file"),
        (b"hurstfit run fi\x00e\nrest", None),
        (b"hurstfit \nrest", None),
        (b"hurstfit " + b"x" * 200 + b"\nrest", None),
        (b"hurstfit RUN\nrest", None),
        (b"\x89HDF\r\n\x1a\n", None),
        (b"", None),
    ],
)
def test_only_a_plain_word_or_two_tell_a_kind(tmp_path: Path, content: bytes, kind: str | None) -> None:
    (tmp_path / "file.h5").write_bytes(content)
    assert kind_of(tmp_path / "file.h5") == kind


def test_what_is_not_there_or_no_file_has_no_kind_and_is_refused(tmp_path: Path) -> None:
    assert kind_of(tmp_path / "none.h5") is None
    assert kind_of(tmp_path) is None
    refused(tmp_path / "none.h5", "run file", "run file .*none.h5 does not exist")
    refused(tmp_path, "run file", "is a directory")


def test_a_file_that_may_not_be_read_is_refused_with_the_reason(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def denied(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied", str(file))

    monkeypatch.setattr("builtins.open", denied)
    refused(file, "run file", "cannot be read: Permission denied")


def test_a_new_seal_makes_a_changed_file_whole(file: Path) -> None:
    with h5py.File(file, "r+") as handle:
        handle["numbers"][0] = 7
    refused(file, "run file", "is damaged or truncated")
    seal(file, "run file")
    with open_sealed(file, "run file") as handle:
        assert handle["numbers"][0] == 7


def test_nothing_is_sealed_or_replaced_when_writing_fails(file: Path) -> None:
    before = file.read_bytes()
    with pytest.raises(TypeError), sealed_file(file, "run file") as handle:
        handle["objects"] = [object()]
    assert file.read_bytes() == before
    assert [p.name for p in file.parent.iterdir()] == ["sealed.h5"]
