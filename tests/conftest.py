"""What several test files share: a small invented case on disk, and the command line run in this process."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from copy import deepcopy
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result

HEADER = "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,rising"
#: Invented counts, close to what the model gives at H = 0.8 with the selection terms below.
ROWS = (
    "Larkspur-A,0.5,1.0,10.0,11.0,900,122,true",
    "Larkspur-A,1.0,1.5,10.0,11.0,700,102,true",
    "Larkspur-A,1.5,2.0,10.0,11.0,500,80,true",
    "Larkspur-B,1.0,2.0,10.0,11.0,400,60,true",
    "Larkspur-B,2.0,3.0,10.0,11.0,200,34,true",
    "Larkspur-B,0.2,0.4,11.0,11.5,300,120,false",
)
#: One free parameter, H, and a stopping rule that is met in a second.
CONFIG: dict[str, dict[str, Any]] = {
    "measurements": {"table": "bins.csv"},
    "walk": {"noise": "type-II"},
    "galaxies": {"min_mass": "all", "criterion": "zero"},
    "clock": {"cosmology": "Planck18", "step": 20.0, "z_start": 12.0},
    "selection": {"default": {"completeness_ratio": 0.95, "missed_fraction": 0.05, "contamination": 0.02}},
    "exponent": {"prior": {"uniform": [0.05, 1.3]}, "above": 0.9},
    "engine": {"kind": "joint", "seed": 7, "target_ess": 400.0, "max_rhat": 1.05},
}


@dataclass(frozen=True)
class Case:
    """A folder with ``case.toml`` and ``bins.csv``, which tests may change before they run anything."""

    folder: Path

    def config(self, *, drop: tuple[str, ...] = (), **changes: dict[str, Any]) -> Path:
        """Write the configuration; keyword arguments update its tables, `drop` leaves some out."""
        from hurstfit.config import to_toml

        path = self.folder / "case.toml"
        path.write_text(to_toml(self.contents(drop=drop, **changes)), encoding="utf-8")
        return path

    def contents(self, *, drop: tuple[str, ...] = (), **changes: dict[str, Any]) -> dict[str, Any]:
        """Give the configuration as nested dictionaries."""
        contents = deepcopy(CONFIG)
        for table, body in changes.items():
            if isinstance(body, dict):
                contents.setdefault(table, {}).update(body)
            else:
                contents[table] = body
        for name in drop:
            table, _, key = name.partition(".")
            if key:
                del contents[table][key]
            else:
                del contents[table]
        return contents

    def bins(self, *rows: str, header: str = HEADER) -> Path:
        """Write the measurement table."""
        path = self.folder / "bins.csv"
        path.write_text("\n".join([header, *(rows or ROWS)]) + "\n", encoding="utf-8")
        return path


@pytest.fixture(scope="session")
def case_in() -> type[Case]:
    """Give the class, for fixtures that live longer than a test."""
    return Case


@pytest.fixture(scope="session")
def small_run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Give a run file of the small case that met its stopping rule; not to be changed."""
    from hurstfit.inference import infer

    made = Case(tmp_path_factory.mktemp("small"))
    made.bins()
    infer(made.config(), out=made.folder / "small.h5")
    return made.folder / "small.h5"


@pytest.fixture
def case(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Case:
    """Give a small case, in the current directory."""
    monkeypatch.chdir(tmp_path)
    made = Case(tmp_path)
    made.config()
    made.bins()
    return made


@pytest.fixture
def hurstfit_cli() -> Callable[..., Result]:
    """Run the command line in this process."""

    def run(*arguments: str | Path) -> Result:
        from hurstfit.cli import main

        return CliRunner().invoke(main, [str(a) for a in arguments], prog_name="hurstfit")

    return run


@pytest.fixture
def hurstfit_process() -> Callable[..., subprocess.Popen[str]]:
    """Start the command line as a process of its own, in the current directory."""
    import hurstfit

    # works from a checkout that is not installed, too
    home = str(Path(hurstfit.__file__).parents[1])

    def start(*arguments: str | Path) -> subprocess.Popen[str]:
        command = [sys.executable, "-m", "hurstfit", *map(str, arguments)]
        environment = {**os.environ, "PYTHONPATH": home}
        return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=environment)

    return start
