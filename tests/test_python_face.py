"""The names that scripts may rely on."""

from __future__ import annotations

import importlib
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from astropy.table import QTable

import hurstfit as hf

REPOSITORY = Path(__file__).parents[1]
MODULES = sorted(
    ".".join(path.relative_to(REPOSITORY).with_suffix("").parts)
    for path in (REPOSITORY / "hurstfit").rglob("*.py")
    if path.stem not in ("__init__", "__main__")
)


def test_tables_are_loaded_and_read() -> None:
    table = hf.load_table("type-II")
    H, steps = np.array([[0.5], [0.9]]), np.array([50.0, 150.0, 600.0])
    fraction = table.fraction(H, steps)
    assert fraction.shape == (2, 3)
    # exact at one half: C(2n, n) / 4^n (Sparre Andersen 1953)
    assert fraction[0] == pytest.approx([0.0795892, 0.0460275, 0.0230281], abs=2e-4)
    for criterion in ("zero", "rate<0.2"):
        for window in (1, 10):
            for min_mass in (None, 0, 0.1):
                chosen = {"criterion": criterion, "window": window, "min_mass": min_mass}
                assert ((table.fraction(H, steps, **chosen) > 0) & (table.fraction(H, steps, **chosen) < 1)).all()
                error = table.standard_error(H, steps, **chosen)
                assert error.shape == (2, 3)
                assert ((error >= 0) & (error < 0.02)).all()
    assert (table.fraction(0.9, 600, criterion="rate<0.2") > table.fraction(0.9, 600)).all()


def test_measurements_are_a_table_of_astropy() -> None:
    bins = hf.read_measurements(REPOSITORY / "configs" / "larkspur.ecsv")
    assert isinstance(bins.table, QTable)
    assert set(bins.table["study"]) == {"Larkspur-Wide", "Larkspur-Deep", "Larkspur-Far"}
    assert str(bins.table["logm_lo"].unit) == "dex(solMass)"


def test_a_run_is_inferred_opened_and_summarised(case) -> None:
    run = hf.infer(case.contents(), out="demo.h5")
    assert isinstance(run, hf.Run)
    opened = hf.open_run("demo.h5")
    draws = opened.draws("H")
    assert draws.ndim == 1
    assert np.array_equal(draws, run.draws("H"))
    summary = opened.summary()
    assert isinstance(summary, QTable)
    assert summary.colnames[:9] == ["name", "median", "lo68", "hi68", "lo95", "hi95", "ess_bulk", "ess_tail", "rhat"]
    assert summary["median"][0] == np.median(draws)


def test_mistakes_are_errors_that_a_script_can_catch() -> None:
    with pytest.raises(hf.HurstfitError, match="does not exist"):
        hf.infer("nowhere.toml")
    with pytest.raises(hf.HurstfitError, match=r"did you mean 'type-II'\?|type-I"):
        hf.load_table("type-2")
    with pytest.raises(AttributeError, match="no attribute 'infre'"):
        _ = hf.infre


def test_all_public_names_are_there_and_listed() -> None:
    for name in hf.__all__:
        assert getattr(hf, name) is not None
    assert dir(hf) == sorted(hf.__all__)


@pytest.mark.parametrize("name", hf.__all__)
def test_a_name_means_the_same_whatever_was_imported_before(name: str) -> None:
    before = getattr(hf, name)
    for module in MODULES:
        importlib.import_module(module)
    vars(hf).pop(name, None)
    assert getattr(hf, name) is before
    assert callable(before)


def test_importing_the_package_costs_nothing() -> None:
    script = "import sys, hurstfit as hf; print(sorted({m.split('.')[0] for m in sys.modules} & {'numpy', 'astropy', 'scipy'}))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, cwd=REPOSITORY, check=True)
    assert done.stdout == "[]\n"
