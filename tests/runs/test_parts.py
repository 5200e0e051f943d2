"""A run that is interrupted, killed or out of disk space goes on to the chain that would have been."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.inference import infer
from hurstfit.runs.parts import opened_parts, parts_folder
from hurstfit.runs.run import open_run

#: A few blocks of a joint run, a second or two.
ENGINE = {"kind": "joint", "seed": 11, "max_steps": 1500, "target_ess": 1e6}
FREE_CLOCK = {"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [9.0, 16.0]}}


#: The package under test, whether or not it is installed.
ENVIRONMENT = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])}


def command(config: Path, out: Path) -> list[str]:
    return [sys.executable, "-m", "hurstfit", "infer", str(config), "--out", str(out)]


@pytest.fixture
def config(case) -> Path:
    return case.config(engine=ENGINE, clock=FREE_CLOCK)


@pytest.fixture
def whole(config: Path, tmp_path: Path) -> np.ndarray:
    """Give the chain of the uninterrupted run."""
    return infer(config, out=tmp_path / "whole.h5").record.coordinates


@pytest.mark.parametrize("after", [1, 2, 4])
def test_a_run_taken_up_after_any_block_is_the_uninterrupted_one(
    config: Path, whole: np.ndarray, tmp_path: Path, after: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    from hurstfit.runs.parts import RunParts

    keep = RunParts.keep

    def keep_some(self: RunParts, index: int, block: object) -> None:
        keep(self, index, block)  # type: ignore[arg-type]
        if index + 1 == after:
            raise KeyboardInterrupt

    out = tmp_path / "again.h5"
    monkeypatch.setattr(RunParts, "keep", keep_some)
    with pytest.raises(KeyboardInterrupt):
        infer(config, out=out)
    assert not out.exists()
    assert parts_folder(out).is_dir()
    monkeypatch.undo()
    run = infer(config, out=out)
    assert np.array_equal(run.record.coordinates, whole)
    assert not parts_folder(out).exists()


def killed_until_finished(config: Path, out: Path, kills: int, rng: np.random.Generator, longest: float) -> int:
    """Kill the command at random moments, up to a number of times; give the number of kills."""
    done = 0
    while True:
        process = subprocess.Popen(command(config, out), stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, env=ENVIRONMENT)
        if done == kills:
            error = process.communicate()[1]
            assert process.returncode == 0, error
            return done
        time.sleep(rng.uniform(0.0, longest))
        process.send_signal(signal.SIGKILL)
        process.communicate()
        done += process.returncode != 0
        if out.exists():
            # the kill came when the run file was in place already and only the words were missing
            return done


def test_a_run_killed_at_random_moments_ends_as_the_uninterrupted_one(config: Path, whole: np.ndarray, tmp_path: Path) -> None:
    out = tmp_path / "killed.h5"
    assert killed_until_finished(config, out, 5, np.random.default_rng(1), 2.5) > 0
    assert np.array_equal(open_run(out).record.coordinates, whole)
    assert sorted(p.name for p in tmp_path.iterdir() if "tmp" in p.suffix and p.name.startswith(".killed.h5")) == []


@pytest.mark.heavy
def test_a_run_survives_a_hundred_kills(case, tmp_path: Path) -> None:
    config = case.config(engine={**ENGINE, "max_steps": 12_000}, clock=FREE_CLOCK)
    whole = infer(config, out=tmp_path / "whole.h5").record.coordinates
    rng, kills, rounds = np.random.default_rng(2), 0, 0
    while kills < 100:
        out = tmp_path / f"killed-{rounds}.h5"
        kills += killed_until_finished(config, out, 100 - kills, rng, 4.0)
        assert np.array_equal(open_run(out).record.coordinates, whole)
        rounds += 1


def test_ctrl_c_leaves_a_run_that_goes_on_and_says_how(config: Path, whole: np.ndarray, tmp_path: Path) -> None:
    out = tmp_path / "stopped.h5"
    process = subprocess.Popen(command(config, out), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=ENVIRONMENT)
    first = parts_folder(out) / "block-00000.h5"
    for _ in range(600):
        if first.exists() or process.poll() is not None:
            break
        time.sleep(0.05)
    process.send_signal(signal.SIGINT)
    _, error = process.communicate()
    if process.returncode == 0:
        pytest.fail("the run was over before it could be interrupted; make it longer")
    assert process.returncode == 130
    assert "give the same command again" in error
    assert "Traceback" not in error
    assert np.array_equal(infer(config, out=out).record.coordinates, whole)


def test_a_second_process_on_the_same_run_is_refused(config: Path, tmp_path: Path) -> None:
    out = tmp_path / "shared.h5"
    with opened_parts(out, "of another process"):
        answer = subprocess.run(command(config, out), capture_output=True, text=True, check=False, env=ENVIRONMENT)
    assert answer.returncode == 2
    assert "is being made by another process" in answer.stderr
    assert not out.exists()


def test_blocks_of_another_configuration_are_refused(case, config: Path, tmp_path: Path) -> None:
    out = tmp_path / "mixed.h5"
    stop_after_a_block(config, out)
    other = case.config(engine={**ENGINE, "seed": 12}, clock=FREE_CLOCK)
    with pytest.raises(HurstfitError, match="another configuration"):
        infer(other, out=out)
    assert parts_folder(out).is_dir()


def test_a_damaged_block_is_named(config: Path, tmp_path: Path) -> None:
    out = tmp_path / "damaged.h5"
    stop_after_a_block(config, out)
    block = parts_folder(out) / "block-00000.h5"
    contents = bytearray(block.read_bytes())
    contents[-100] ^= 1
    block.write_bytes(contents)
    with pytest.raises(HurstfitError, match=r"block-00000\.h5 is damaged"):
        infer(config, out=out)


def stop_after_a_block(config: Path, out: Path) -> None:
    from hurstfit.runs.parts import RunParts

    keep = RunParts.keep
    with pytest.MonkeyPatch.context() as patch:

        def keep_one(self: RunParts, index: int, block: object) -> None:
            keep(self, index, block)  # type: ignore[arg-type]
            raise KeyboardInterrupt

        patch.setattr(RunParts, "keep", keep_one)
        with pytest.raises(KeyboardInterrupt):
            infer(config, out=out)


@pytest.mark.skipif(os.geteuid() != 0 or shutil.which("mount") is None, reason="mounting a small file system needs the superuser")
def test_a_full_disk_loses_only_the_block_in_progress(config: Path, whole: np.ndarray, tmp_path: Path) -> None:
    disk = tmp_path / "disk"
    disk.mkdir()
    mounted = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=100k", "tmpfs", str(disk)], capture_output=True, check=False)
    if mounted.returncode:
        pytest.skip(f"no file system can be mounted here: {mounted.stderr.decode().strip()}")
    try:
        out = disk / "full.h5"
        answer = subprocess.run(command(config, out), capture_output=True, text=True, check=False, env=ENVIRONMENT)
        assert answer.returncode == 2
        assert "make room and give the same command again" in answer.stderr
        assert "Traceback" not in answer.stderr
        assert not out.exists()
        subprocess.run(["mount", "-o", "remount,size=20m", str(disk)], check=True)
        assert np.array_equal(infer(config, out=out).record.coordinates, whole)
    finally:
        subprocess.run(["umount", str(disk)], check=True)
