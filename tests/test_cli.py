"""The command line: what it prints, how fast it answers, and how it ends."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from pathlib import Path
from types import SimpleNamespace

import pytest
from astropy.table import QTable

from hurstfit.digest.figures import corner_figure, fraction_figure
from hurstfit.digest.words import choice_lines
from hurstfit.fractions.store import shipped_path
from hurstfit.problem import load_problem
from hurstfit.runs.run import open_run

REPOSITORY = Path(__file__).parents[1]


def one_line(text: str) -> str:
    """Undo the wrapping of long lines."""
    return " ".join(text.split())


# -- help ----------------------------------------------------------------------------------------------------------------------


def test_help_lists_the_commands(hurstfit_cli) -> None:
    for arguments in ((), ("--help",), ("-h",)):
        output = hurstfit_cli(*arguments).output
        for command in ("vet", "infer", "digest", "tabulate"):
            assert f"\n  {command} " in output


@pytest.mark.parametrize("command", ["vet", "infer", "digest", "tabulate"])
def test_every_command_has_help(hurstfit_cli, command: str) -> None:
    result = hurstfit_cli(command, "--help")
    assert result.exit_code == 0
    assert result.output.startswith(f"Usage: hurstfit {command}")


def test_version_names_what_can_change_a_number(hurstfit_cli) -> None:
    result = hurstfit_cli("--version")
    assert result.exit_code == 0
    assert result.output.startswith("hurstfit ")
    assert "numpy" in result.output


def test_help_loads_nothing_slow(hurstfit_process) -> None:
    script = "import sys; from hurstfit.cli import main; main(['--help'], standalone_mode=False); import json; "
    script += "print('MODULES', json.dumps([m for m in sys.modules if '.' not in m]))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, cwd=REPOSITORY, check=True)
    loaded = json.loads(done.stdout.split("MODULES")[1])
    assert "click" in loaded
    assert not {"astropy", "matplotlib", "emcee", "numpy", "scipy", "h5py", "numba", "corner", "pydantic"} & set(loaded)


def test_help_answers_within_half_a_second(hurstfit_process) -> None:
    def seconds() -> float:
        begun = time.perf_counter()
        assert hurstfit_process("--help").wait(timeout=60) == 0
        return time.perf_counter() - begun

    # the best of several: the machine may be busy with something else
    assert min(seconds() for _ in range(5)) < 0.5


# -- vet -----------------------------------------------------------------------------------------------------------------------


def test_vet_says_what_will_be_fitted(case, hurstfit_cli) -> None:
    case.config(
        clock={"step": {"normal": [20.0, 2.0]}, "z_start": {"uniform": [9.0, 16.0]}},
        galaxies={"min_mass": 0.1, "criterion": "rate<0.2"},
    )
    result = hurstfit_cli("vet", "case.toml")
    assert result.exit_code == 0
    said = one_line(result.output)
    for words in (
        "case.toml is in order.",
        "bins.csv: 5 of 6 bins are fitted, 2 studies, 398 of 2,700 galaxies quiescent",
        "left out row 6 (Larkspur-B, z 0.2-0.4): the mean SFR does not rise there",
        "type II",
        "walks that have formed more than 0.1 of the mean mass",
        "below 0.2 of the mean SFR so far",
        "walk starts at a free redshift, prior: uniform from 9 to 16",
        "step free, in Myr, prior: normal 20 +- 2",
        "H 0.05 to 1.3, steps 1 to 2048",
        "Free parameters (3)",
        "H uniform from 0.05 to 1.3",
        "contamination[Larkspur-B] 0.02",
        "3 Larkspur-A 1.50-2.00 10.00-11.00 500 80 0.160",
    ):
        assert words in said
    assert sorted(p.name for p in case.folder.iterdir()) == ["bins.csv", "case.toml"]


def test_a_fixed_clock_reads_well(case) -> None:
    lines = [" ".join(line.split()) for line in choice_lines(load_problem(case.config()))]
    assert "walk starts at redshift 12 (fixed)" in lines
    assert "step 20 Myr (fixed)" in lines


def test_vet_describes_tables_of_every_kind(case, hurstfit_cli, small_run: Path) -> None:
    bins = hurstfit_cli("vet", "bins.csv")
    assert bins.exit_code == 0
    assert "Larkspur-A: 3 bins, redshift 0.5 to 2" in bins.output
    assert "6 in all, 5 in the rising regime" in bins.output
    fractions = hurstfit_cli("vet", shipped_path("type-I"))
    assert fractions.exit_code == 0
    assert "checksum verified" in fractions.output
    assert "steps 1 to 2048" in one_line(fractions.output)
    run = hurstfit_cli("vet", small_run)
    assert run.exit_code == 0
    assert "checksums verified" in run.output
    assert "H = " in run.output


# -- infer and digest ----------------------------------------------------------------------------------------------------------


def test_infer_answers_and_digest_repeats_it(case, hurstfit_cli) -> None:
    inferred = hurstfit_cli("infer", "case.toml")
    assert inferred.exit_code == 0, inferred.output
    assert inferred.stderr == ""
    answer = next(line for line in inferred.output.splitlines() if line.startswith("H = "))
    assert "68 %" in answer
    assert "95 %" in answer
    said = one_line(inferred.output)
    for words in ("P(H > 0.9)", "under the prior 0.320", "converged, the stopping rule was met", "R-hat 1.0", "left out row 6"):
        assert words in said
    assert "NOT CONVERGED" not in said
    assert "written: case.h5" in said
    digested = hurstfit_cli("digest", "case.h5")
    assert digested.exit_code == 0, digested.output
    assert answer in digested.output
    written = sorted(p.name for p in (case.folder / "case-digest").iterdir())
    assert written == ["fractions.pdf", "fractions.png", "parameters.pdf", "parameters.png", "summary.ecsv"]
    summary = QTable.read(case.folder / "case-digest" / "summary.ecsv")
    assert summary.meta["converged"] is True
    assert list(summary["name"]) == ["H"]
    assert hurstfit_cli("digest", "case.h5").exit_code == 2
    assert hurstfit_cli("digest", "case.h5", "--overwrite", "--into", "case-digest").exit_code == 0


def test_a_run_that_has_not_converged_says_so_everywhere(case, hurstfit_cli) -> None:
    case.config(engine={"max_steps": 100})
    reason = "the step limit of 100 was reached"
    outputs = [hurstfit_cli("infer", "case.toml"), hurstfit_cli("digest", "case.h5"), hurstfit_cli("vet", "case.h5")]
    for result in outputs:
        assert result.exit_code == 0, result.output
        said = one_line(result.output)
        assert f"*** NOT CONVERGED: {reason} ***" in said
        assert f"convergence NOT CONVERGED, {reason}" in said
        assert f"- NOT CONVERGED ({reason}): medians and intervals may be wrong" in said
    summary = QTable.read(case.folder / "case-digest" / "summary.ecsv")
    assert summary.meta["converged"] is False
    assert summary.meta["stopped"] == reason
    assert summary.meta["cautions"][0].startswith("NOT CONVERGED")
    run = open_run("case.h5")
    for figure in (corner_figure(run), fraction_figure(run)):
        assert "NOT CONVERGED" in [text.get_text() for text in figure.texts]


def test_a_run_with_a_fixed_exponent_says_so(case, hurstfit_cli) -> None:
    case.config(exponent={"prior": 0.8}, clock={"step": {"normal": [20.0, 2.0]}}, engine={"max_steps": 100})
    for arguments in (("infer", "case.toml"), ("digest", "case.h5"), ("vet", "case.h5")):
        result = hurstfit_cli(*arguments)
        assert result.exit_code == 0, result.output
        assert "H is fixed at 0.8 in this run" in result.output


# -- interruption --------------------------------------------------------------------------------------------------------------


def interrupting(monkeypatch: pytest.MonkeyPatch, updates: int) -> None:
    """Make the progress bar raise what Ctrl-C raises."""
    from contextlib import contextmanager

    seen = 0

    def update(_: int) -> None:
        nonlocal seen
        seen += 1
        if seen == updates:
            raise KeyboardInterrupt

    @contextmanager
    def bar(*_: object):
        yield SimpleNamespace(update=update, set_postfix_str=lambda *_, **__: None)

    monkeypatch.setattr("hurstfit.cli._bar", bar)


def test_an_interrupted_run_goes_on_with_the_same_command(case, hurstfit_cli, monkeypatch) -> None:
    with monkeypatch.context() as patch:
        interrupting(patch, 60)
        result = hurstfit_cli("infer", "case.toml")
    assert result.exit_code == 130
    assert "give the same command again to go on" in result.stderr
    assert sorted(p.name for p in case.folder.iterdir()) == ["bins.csv", "case.h5.parts", "case.toml"]
    result = hurstfit_cli("infer", "case.toml")
    assert result.exit_code == 0
    assert open_run("case.h5").converged
    assert sorted(p.name for p in case.folder.iterdir()) == ["bins.csv", "case.h5", "case.toml"]


def test_an_interrupt_before_the_first_move_leaves_nothing(case, hurstfit_cli, monkeypatch) -> None:
    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("hurstfit.engines.joint._starting_points", interrupted)
    result = hurstfit_cli("infer", "case.toml")
    assert result.exit_code == 130
    assert result.stderr == "hurstfit: interrupted; nothing was written\n"
    assert sorted(p.name for p in case.folder.iterdir()) == ["bins.csv", "case.toml"]


@pytest.mark.skipif(sys.platform == "win32", reason="signals differ")
def test_ctrl_c_ends_without_a_traceback(case, hurstfit_process) -> None:
    case.config(engine={"target_ess": 1e9, "max_steps": 10**8})
    process = hurstfit_process("infer", "case.toml")
    time.sleep(5)
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 130, err
    assert "Traceback" not in err + out
    left = {p.name for p in case.folder.iterdir()} - {"bins.csv", "case.toml"}
    # either it was still starting, or it kept what it had
    if left:
        assert left == {"case.h5.parts"}
        assert "give the same command again to go on" in err
    else:
        assert err == "hurstfit: interrupted; nothing was written\n"


# -- the demo ------------------------------------------------------------------------------------------------------------------


def test_the_demo_converges_within_a_minute(case, hurstfit_process) -> None:
    begun = time.perf_counter()
    process = hurstfit_process("infer", REPOSITORY / "configs" / "demo.toml", "--out", "demo.h5")
    out, err = process.communicate(timeout=300)
    seconds = time.perf_counter() - begun
    assert process.returncode == 0, err
    run = open_run("demo.h5")
    assert run.converged
    convergence = run.convergence["H"]
    assert convergence.rhat < 1.01
    assert min(convergence.ess_bulk, convergence.ess_tail) > 1000
    # the counts were drawn at H = 0.83: within the central 99.9 % of the posterior
    assert 0.0005 < (run.draws("H") < 0.83).mean() < 0.9995
    assert "P(H > 0.9)" in out
    assert seconds < 60
