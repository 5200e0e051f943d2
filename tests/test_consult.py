"""The command that asks a table: answers, a figure, and one sentence for what it cannot answer."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

from hurstfit.fractions.store import KIND, shipped_path
from hurstfit.sealing import seal


@pytest.fixture(autouse=True)
def own_tables(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Write invented tables of the user's own into the current directory."""
    monkeypatch.chdir(tmp_path)
    steps = (50.0, 100.0, 200.0, 400.0, 800.0)
    rows = [(h, n, 0.2 * h**2, 0.004) for h in (0.3, 0.5, 0.7, 0.9) for n in steps]
    Table(rows=rows, names=("H", "steps", "fraction", "error")).write("own.ecsv")
    rows = [(m, n, f, 0.004) for m, f in (("Quiet wind", 0.05), ("Gale", 0.2)) for n in steps]
    Table(rows=rows, names=("model", "steps", "fraction", "error")).write("models.ecsv")


def one_line(text: str) -> str:
    return " ".join(text.split())


def refused(result, *fragments: str) -> None:
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    assert result.stderr.count("\n") == 1
    assert result.stderr.startswith("hurstfit: ")
    for fragment in fragments:
        assert fragment in result.stderr


def test_every_default_definition_is_answered(hurstfit_cli) -> None:
    result = hurstfit_cli("consult", "type-II", "--fraction", "0.1", "--redshift", "1")
    assert result.exit_code == 0, result.output
    head, *lines = result.output.splitlines()
    assert "fraction of 0.1 at redshift 1 (274 steps of 20 Myr since redshift 12)" in head
    assert "type-II noise" in head
    assert len(lines) == 5
    assert all(line.startswith("  H = ") for line in lines)
    # who is counted, and as what, moves H by far more than any survey's error
    found = [float(line.split()[2]) for line in lines]
    assert max(found) - min(found) > 0.2


def test_two_answers_and_none(hurstfit_cli) -> None:
    definition = ("--definition", "min_mass=0.1")
    two = hurstfit_cli("consult", "type-I", "--fraction", "0.06", "--redshift", "1", *definition)
    assert two.output.splitlines()[1].split("  ")[1].count(" or ") == 1
    none = hurstfit_cli("consult", "type-I", "--fraction", "0.4", "--redshift", "1", *definition)
    assert none.exit_code == 0
    assert none.output.splitlines()[1].startswith("  no H (the table goes from ")


def test_the_clock_and_the_cosmology_are_those_asked_for(hurstfit_cli) -> None:
    question = ("consult", "type-II", "--fraction", "0.1", "--redshift", "1", "--definition", "min_mass=0.1")
    answers = {
        hurstfit_cli(*question, *change).output
        for change in ((), ("--step", "40"), ("--z-start", "6"), ("--cosmology", "WMAP9"), ("--redshift", "2"))
    }
    assert len(answers) == 5


@pytest.mark.parametrize(("name", "magic"), [("slide.png", b"\x89PNG"), ("slide.PDF", b"%PDF")])
def test_a_figure_is_written(hurstfit_cli, tmp_path: Path, name: str, magic: bytes) -> None:
    result = hurstfit_cli("consult", "type-I", "--figure", name)
    assert result.exit_code == 0, result.output
    assert result.output == f"written: {name}\n"
    assert (tmp_path / name).read_bytes().startswith(magic)
    before = (tmp_path / name).read_bytes()
    refused(hurstfit_cli("consult", "type-I", "--figure", name), name, "exists", "--overwrite")
    assert (tmp_path / name).read_bytes() == before
    both = hurstfit_cli("consult", "type-II", "--fraction", "0.1", "--figure", name, "--overwrite")
    assert both.exit_code == 0, both.output
    assert len(both.output.splitlines()) == 7
    assert not [p for p in tmp_path.iterdir() if p.name.startswith(".")]


def test_a_png_is_fine_enough_for_a_slide(hurstfit_cli, tmp_path: Path) -> None:
    from matplotlib.image import imread

    assert hurstfit_cli("consult", "type-I", "--figure", "slide.png").exit_code == 0
    height, width = imread(tmp_path / "slide.png").shape[:2]
    assert width >= 1920
    assert 1.3 < width / height < 2


def test_a_table_of_the_users_own_is_asked_like_any_other(hurstfit_cli, tmp_path: Path) -> None:
    result = hurstfit_cli("consult", "own.ecsv", "--fraction", "0.1", "--redshift", "1", "--figure", "own.png")
    assert result.exit_code == 0, result.output
    head, line, written = result.output.splitlines()
    assert "a table of your own" in head
    # 0.2 H^2 = 0.1
    assert line.split()[:3] == ["H", "=", f"{np.sqrt(0.5):.3f}"]
    assert line.endswith("as the table defines it")
    assert written == "written: own.png"
    refused(hurstfit_cli("consult", "own.ecsv", "--fraction", "0.1", "--definition", "min_mass=0.1"), "built in", "--definition")


def test_labelled_models_are_compared_with_the_fraction(hurstfit_cli) -> None:
    result = hurstfit_cli("consult", "models.ecsv", "--fraction", "0.1", "--redshift", "1")
    assert result.exit_code == 0, result.output
    lines = [one_line(line) for line in result.output.splitlines()]
    assert lines[1:] == [
        "Gale 0.2000 +- 0.004, +0.1000 from the fraction given",
        "Quiet wind 0.0500 +- 0.004, -0.0500 from the fraction given",
    ]
    refused(hurstfit_cli("consult", "models.ecsv", "--figure", "x.png"), "labelled models, not H")
    refused(hurstfit_cli("consult", "models.ecsv", "--fraction", "2"), "--fraction is 2")
    refused(hurstfit_cli("consult", "models.ecsv", "--fraction", "0.1", "--step", "1"), "from 50 to 800")


@pytest.mark.parametrize(
    ("arguments", "fragments"),
    [
        (("type-II",), ("nothing was asked", "--fraction, --figure")),
        (("type-2", "--fraction", "0.1"), ("'type-2'", "type-I or type-II", "did you mean")),
        (("none.h5", "--fraction", "0.1"), ("none.h5",)),
        (("none.ecsv", "--fraction", "0.1"), ("none.ecsv does not exist",)),
        (("type-II", "--fraction", "1.5"), ("--fraction is 1.5", "between 0 and 1")),
        (("type-II", "--fraction", "nan"), ("--fraction is nan",)),
        (("type-II", "--fraction", "ten"), ("--fraction", "'ten'")),
        (("type-II", "--fraction", "0.1", "--redshift", "13"), ("--redshift is 13", "start of the walk at 12")),
        (("type-II", "--fraction", "0.1", "--step", "0"), ("--step is 0",)),
        (("type-II", "--fraction", "0.1", "--step", "1"), ("step number from 1 to 2048",)),
        (("type-II", "--fraction", "0.1", "--z-start", "99"), ("--z-start is 99",)),
        (("type-II", "--fraction", "0.1", "--cosmology", "Plank18"), ("--cosmology", "did you mean 'Planck18'?")),
        (("type-II", "--fraction", "0.1", "--definition", "criterion=nought"), ("'nought' is not a criterion",)),
        (("type-II", "--fraction", "0.1", "--definition", "criterion=rate<9"), ("thresholds from 0.01 to 1, not 9",)),
        (("type-II", "--fraction", "0.1", "--definition", "criterion=rate<0.001"), ("thresholds from 0.01 to 1, not 0.001",)),
        (("type-II", "--fraction", "0.1", "--definition", "min_mass=0.9"), ("0.01 to 0.5", "not 0.9")),
        (("type-II", "--fraction", "0.1", "--definition", "window=0"), ("window is '0'",)),
        (("type-II", "--fraction", "0.1", "--definition", "scatter=0.2"), ("scatter has no effect on the criterion zero",)),
        (("type-II", "--fraction", "0.1", "--definition", "criterion=rate<0.9,scatter=0.9"), ("reaches beyond",)),
        (("type-II", "--fraction", "0.1", "--definition", "windw=3"), ("did you mean 'window'?",)),
        (("type-II", "--figure", "slide.jpg"), ("slide.jpg", ".png or .pdf")),
        (("type-II", "--figure", "no/such/slide.png"), ("no directory no/such",)),
        (("type-II", "--figure", "slide.png", "--definition", "window=9,window_unit=Myr"), ("follows the clock",)),
    ],
)
def test_what_cannot_be_answered_is_one_sentence(hurstfit_cli, tmp_path: Path, arguments, fragments) -> None:
    before = sorted(p.name for p in tmp_path.iterdir())
    refused(hurstfit_cli("consult", *arguments), *fragments)
    assert sorted(p.name for p in tmp_path.iterdir()) == before


def test_damaged_and_newer_tables_are_refused_by_every_command(case, hurstfit_cli) -> None:
    import h5py

    content = bytearray(shipped_path("type-II").read_bytes())
    content[len(content) // 2] ^= 0x04
    (case.folder / "flipped.h5").write_bytes(content)
    (case.folder / "newer.h5").write_bytes(shipped_path("type-II").read_bytes())
    with h5py.File(case.folder / "newer.h5", "r+") as file:
        file.attrs["format_version"] = 99
    seal(case.folder / "newer.h5", KIND)
    for name, sentence in (
        ("flipped.h5", "is damaged or truncated"),
        ("newer.h5", "has table format 99, newer than this hurstfit"),
    ):
        case.config(walk={"table": name})
        for arguments in (
            ("consult", name, "--fraction", "0.1"),
            ("vet", name),
            ("vet", "case.toml"),
            ("infer", "case.toml"),
            ("tabulate", "type-II", "--merge", name, "--merge", name, "--out", "x.h5"),
        ):
            refused(hurstfit_cli(*arguments), name, sentence)


SPECIFIC = {"min_mass": 0.1, "criterion": "ssfr<0.2", "returned_fraction": 0.4}


@pytest.mark.parametrize("window", [{}, {"window": 100.0, "window_unit": "Myr"}, {"scatter": 0.2}])
def test_definitions_that_follow_the_clock_are_vetted_and_inferred(case, hurstfit_cli, window) -> None:
    case.config(galaxies={**SPECIFIC, **window}, engine={"kind": "auto"})
    vetted = hurstfit_cli("vet", "case.toml")
    assert vetted.exit_code == 0, vetted.output
    assert "specific SFR" in one_line(vetted.output)
    assert "standard error up to 0.000" in one_line(vetted.output)
    result = hurstfit_cli("infer", "case.toml")
    assert result.exit_code == 0, result.output
    assert "table's error" in result.output


@pytest.mark.parametrize("limit", ["0.001", "9"])
def test_a_specific_rate_out_of_range_is_refused_before_sampling(case, hurstfit_cli, limit: str) -> None:
    case.config(galaxies={**SPECIFIC, "criterion": f"ssfr<{limit}"})
    for command in ("vet", "infer"):
        refused(hurstfit_cli(command, "case.toml"), "[galaxies] criterion", f"ssfr<{limit}", "thresholds from 0.01 to 1")
