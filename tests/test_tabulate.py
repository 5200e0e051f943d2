"""The command that builds tables: interrupted, resumed, shared between workers, merged, and never over what is there."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import hurstfit
from hurstfit.fractions import axes as axes_module
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.store import read_table, shipped_path
from hurstfit.fractions.table import FractionTable

#: A grid of which a batch takes a twentieth of a second.
SMALL = TableAxes(
    h=np.array([0.5, 0.65, 0.8, 0.9]),
    steps=np.array([2, 4, 8, 16]),
    masses=np.array([0.0, 0.1]),
    scales=np.array([0.0]),
    thresholds=np.array([0.1, 0.2, 0.4, 1.0]),
)
QUICK = ("--batches", "8", "--walks", "8192")


@pytest.fixture
def small_grid(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(axes_module, "default_axes", lambda noise: SMALL)
    monkeypatch.chdir(tmp_path)


def same(a: Path, b: Path) -> bool:
    first, second = read_table(a), read_table(b)
    return first.digest == second.digest and np.array_equal(first.values, second.values)


def refused(result, *fragments: str) -> None:
    assert result.exit_code == 2, result.output
    assert result.stderr.count("\n") == 1
    assert result.stderr.startswith("hurstfit: ")
    for fragment in fragments:
        assert fragment in result.stderr


@pytest.mark.usefixtures("small_grid")
def test_a_table_is_built_reported_and_left_alone_in_its_folder(hurstfit_cli, tmp_path: Path) -> None:
    result = hurstfit_cli("tabulate", "type-I", *QUICK, "--seed", "5", "--out", "t.h5")
    assert result.exit_code == 0, result.output
    assert "written: t.h5" in result.output
    assert "largest standard error" in result.output
    assert [p.name for p in tmp_path.iterdir()] == ["t.h5"]
    made_by = read_table(tmp_path / "t.h5").made_by
    assert made_by["command"] == "hurstfit tabulate type-I --batches 8 --walks 8192 --seed 5 --out type-I.h5"
    assert made_by["walks"] == "65536"


@pytest.mark.usefixtures("small_grid")
def test_vet_describes_a_fraction_table(hurstfit_cli, tmp_path: Path) -> None:
    assert hurstfit_cli("tabulate", "type-I", *QUICK, "--seed", "5", "--out", "t.h5").exit_code == 0
    text = " ".join(hurstfit_cli("vet", "t.h5").output.split())
    for words in (
        "t.h5 is in order (checksum verified)",
        "noise type-I",
        "H 0.5 to 0.9, 4 nodes",
        "steps 2 to 16, 4 nodes",
        "formed mass above 0, 0.1 of the mean",
        "rate below 0.1, 0.2, 0.4, 1",
        "command hurstfit tabulate type-I --batches 8 --walks 8192 --seed 5",
        "seed 5",
    ):
        assert words in text
    content = bytearray((tmp_path / "t.h5").read_bytes())
    content[len(content) // 3] ^= 1
    (tmp_path / "t.h5").write_bytes(content)
    refused(hurstfit_cli("vet", "t.h5"), "fraction table t.h5 is damaged")


@pytest.mark.usefixtures("small_grid")
def test_the_number_of_workers_does_not_change_the_table(hurstfit_cli, tmp_path: Path) -> None:
    for workers in ("1", "2"):
        result = hurstfit_cli("tabulate", "type-II", *QUICK, "--workers", workers, "--out", f"{workers}.h5")
        assert result.exit_code == 0, result.output
    assert same(tmp_path / "1.h5", tmp_path / "2.h5")


#: The command line on the small grid, as a process that can be sent a signal.
CHILD = """
import sys
import numpy as np
from hurstfit.fractions import axes
small = axes.TableAxes(np.array([0.5, 0.65, 0.8, 0.9]), np.array([2, 4, 8, 16]), np.array([0.0, 0.1]), np.array([0.0]),
                       np.array([0.1, 0.2, 0.4, 1.0]))
axes.default_axes = lambda noise: small
from hurstfit.cli import main
main(sys.argv[1:], prog_name="hurstfit")
"""


def start(folder: Path, script: str, *arguments: str) -> subprocess.Popen[str]:
    home = str(Path(hurstfit.__file__).parents[1])
    command = [sys.executable, "-c", script, *arguments]
    environment = {"PYTHONPATH": home, "PATH": "/usr/bin:/bin", "HOME": str(folder)}
    # a session of its own, so that the signal can go to the whole group as Ctrl-C in a terminal does
    return subprocess.Popen(
        command, cwd=folder, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
    )


def interrupt_after(process: subprocess.Popen[str], batches: Path, count: int) -> tuple[str, str]:
    """Press Ctrl-C when so many batches are there; returns standard output and error."""
    deadline = time.monotonic() + 120
    while len(list(batches.glob("batch-*.h5"))) < count:
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.01)
    os.killpg(process.pid, signal.SIGINT)
    return process.communicate(timeout=60)


@pytest.mark.usefixtures("small_grid")
def test_an_interrupted_build_keeps_its_batches_and_goes_on_to_the_same_table(
    hurstfit_cli, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    arguments = ("tabulate", "type-II", "--batches", "60", "--walks", "8192")
    process = start(tmp_path, CHILD, *arguments, "--workers", "2", "--out", "t.h5")
    out, err = interrupt_after(process, tmp_path / "t.h5.batches", 3)
    assert process.returncode == 130, err
    assert out == ""
    assert err.strip().splitlines()[-1].startswith("hurstfit: interrupted; finished batches are in t.h5.batches")
    assert "Traceback" not in err
    kept = {p.name: p.stat().st_mtime_ns for p in (tmp_path / "t.h5.batches").iterdir()}
    assert 3 <= len(kept) < 60
    assert all(name.startswith("batch-") for name in kept)
    assert not (tmp_path / "t.h5").exists()
    # leave the batches where they are, to see that finished ones were not made again
    with monkeypatch.context() as patch:
        patch.setattr("hurstfit.fractions.building.remove_batches", lambda folder: None)
        assert hurstfit_cli(*arguments, "--out", "t.h5").exit_code == 0
    there = {p.name: p.stat().st_mtime_ns for p in (tmp_path / "t.h5.batches").iterdir()}
    assert len(there) == 60
    assert {name: there[name] for name in kept} == kept
    assert hurstfit_cli(*arguments, "--out", "whole.h5").exit_code == 0
    assert same(tmp_path / "t.h5", tmp_path / "whole.h5")


@pytest.mark.heavy
def test_ctrl_c_does_not_wait_for_batches_of_the_default_grid(tmp_path: Path) -> None:
    script = "import sys\nfrom hurstfit.cli import main\nmain(sys.argv[1:], prog_name='hurstfit')"
    arguments = ("tabulate", "type-II", "--batches", "8", "--walks", "65536", "--workers", "2", "--out", "t.h5")
    process = start(tmp_path, script, *arguments)
    time.sleep(6)
    assert process.poll() is None
    begun = time.monotonic()
    os.killpg(process.pid, signal.SIGINT)
    _, err = process.communicate(timeout=60)
    # a batch of this size takes ten seconds or more
    assert time.monotonic() - begun < 5
    assert process.returncode == 130, err
    assert "Traceback" not in err


@pytest.mark.usefixtures("small_grid")
def test_tables_of_different_seeds_are_merged(hurstfit_cli, tmp_path: Path) -> None:
    for seed in ("1", "2"):
        assert hurstfit_cli("tabulate", "type-II", *QUICK, "--seed", seed, "--out", f"{seed}.h5").exit_code == 0
    result = hurstfit_cli("tabulate", "type-II", "--merge", "1.h5", "--merge", "2.h5", "--out", "both.h5")
    assert result.exit_code == 0, result.output
    one, two, both = (read_table(tmp_path / f"{name}.h5") for name in ("1", "2", "both"))
    # six decimals each
    np.testing.assert_allclose(both.values, (one.values + two.values) / 2, rtol=0, atol=1.2e-6)
    assert both.made_by["walks"] == "131072"
    refused(hurstfit_cli("tabulate", "type-II", "--merge", "1.h5", "--out", "x.h5"), "two tables or more")
    for merged in (("1.h5", "1.h5"), ("both.h5", "2.h5")):
        arguments = [a for path in merged for a in ("--merge", path)]
        refused(hurstfit_cli("tabulate", "type-II", *arguments, "--out", "x.h5"), "share the seed", *merged)
    refused(
        hurstfit_cli("tabulate", "type-I", "--merge", "1.h5", "--merge", "2.h5", "--out", "x.h5"),
        "1.h5 holds type-II, not type-I",
    )
    arguments = ("--merge", "1.h5", "--merge", str(shipped_path("type-II")), "--out", "x.h5")
    refused(hurstfit_cli("tabulate", "type-II", *arguments), "different nodes")
    refused(
        hurstfit_cli("tabulate", "type-II", "--merge", "1.h5", "--merge", "none.h5", "--out", "x.h5"), "none.h5 does not exist"
    )
    assert not (tmp_path / "x.h5").exists()


@pytest.fixture
def no_building(small_grid: None, monkeypatch: pytest.MonkeyPatch) -> None:
    def simulate(*_: object) -> FractionTable:
        raise AssertionError("walks were simulated")

    monkeypatch.setattr("hurstfit.fractions.building.run_build", simulate)


@pytest.mark.usefixtures("no_building")
@pytest.mark.parametrize(
    ("arguments", "fragments"),
    [
        (("type-II", "--out", "old.h5"), ("fraction table old.h5 exists", "--overwrite")),
        (("type-II", "--merge", "a.h5", "--merge", "b.h5", "--out", "old.h5"), ("old.h5 exists", "--overwrite")),
        (("type-II", "--overwrite", "--out", "old.h5"), ("old.h5 is not a fraction table", "not replaced")),
        (("type-II", "--out", "no/such/t.h5"), ("no directory no/such",)),
        (("type-II", "--out", "."), ("is a directory",)),
        (("type-II", "--batches", "7", "--out", "t.h5"), ("at least 8", "not 7")),
        (("type-II", "--walks", "1000", "--out", "t.h5"), ("multiple of 8192", "not 1000")),
        (("type-II", "--walks", "0", "--out", "t.h5"), ("multiple of 8192", "not 0")),
        (("type-II", "--seed", "-1", "--out", "t.h5"), ("must not be negative", "-1")),
        (("type-II", "--workers", "0", "--out", "t.h5"), ("--workers", "0")),
        (("type-II",), ("--out",)),
        (("own", "--out", "t.h5"), ("own", "type-I", "type-II")),
    ],
)
def test_what_makes_no_table_is_refused_before_a_walk_is_made(hurstfit_cli, tmp_path: Path, arguments, fragments) -> None:
    (tmp_path / "old.h5").write_bytes(b"precious")
    refused(hurstfit_cli("tabulate", *arguments), *fragments)
    assert [p.name for p in tmp_path.iterdir()] == ["old.h5"]
    assert (tmp_path / "old.h5").read_bytes() == b"precious"


@pytest.mark.usefixtures("small_grid")
def test_batches_of_another_build_are_refused_by_their_folder(hurstfit_cli, tmp_path: Path) -> None:
    from hurstfit.fractions.building import Build, _write_batch

    other = Build("type-II", SMALL, 8, 8192, 2)
    (tmp_path / "t.h5.batches").mkdir()
    _write_batch(other, tmp_path / "t.h5.batches", 3, other.simulate(3))
    refused(hurstfit_cli("tabulate", "type-II", *QUICK, "--out", "t.h5"), "t.h5.batches", "other settings")
