"""What a user can get wrong ends in one sentence that says where and what, in exit status 2, and in nothing written."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

from hurstfit.fractions.store import shipped_path

ROW_1, ROW_2 = "A,0.5,1.0,10.0,11.0,900,122,true", "A,1.0,1.5,10.0,11.0,700,102,true"
HEADER = "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,rising"


def contents_of(folder: Path) -> dict[str, bytes | None]:
    return {str(p.relative_to(folder)): p.read_bytes() if p.is_file() else None for p in sorted(folder.rglob("*"))}


def assert_refused(result: Result, *fragments: str) -> None:
    lines = result.stderr.splitlines()
    assert result.exit_code == 2, result.output
    assert len(lines) == 1, result.stderr
    assert lines[0].startswith("hurstfit: ")
    assert "Traceback" not in result.output
    assert result.stdout == ""
    for fragment in fragments:
        assert fragment in lines[0]


# -- the measurement table -----------------------------------------------------------------------------------------------------

BAD_ROWS = {
    "text in a number": ("A,0.5,one,10.0,11.0,900,122,true", "row 2", "z_hi", "'one'", "allowed is a redshift"),
    "more quiescent than all": ("A,1.5,2.0,10.0,11.0,100,101,true", "row 2", "n_quiescent", "'101'", "from 0 to n_total"),
    "negative count": ("A,1.5,2.0,10.0,11.0,100,-1,true", "row 2", "n_quiescent", "'-1'", "whole number of 0 or more"),
    "no galaxies": ("A,1.5,2.0,10.0,11.0,0,0,true", "row 2", "n_total", "'0'", "whole number of 1 or more"),
    "count that is not whole": ("A,1.5,2.0,10.0,11.0,100,10.5,true", "row 2", "n_quiescent", "'10.5'", "whole number"),
    "nan": ("A,1.5,nan,10.0,11.0,100,10,true", "row 2", "z_hi", "'nan'", "a finite number"),
    "infinity": ("A,1.5,2.0,10.0,11.0,inf,10,true", "row 2", "n_total", "'inf'", "a finite number"),
    "empty redshift range": ("A,2.0,2.0,10.0,11.0,100,10,true", "row 2", "z_hi", "'2.0'", "a number above z_lo"),
    "reversed redshift range": ("A,3.0,2.0,10.0,11.0,100,10,true", "row 2", "z_hi", "'2.0'", "a number above z_lo"),
    "negative redshift": ("A,-0.5,0.4,10.0,11.0,100,10,true", "row 2", "z_lo", "'-0.5'", "a redshift of 0 or more"),
    "reversed mass range": ("A,1.5,2.0,11.0,10.0,100,10,true", "row 2", "logm_hi", "'10.0'", "a number above logm_lo"),
    "duplicate bin": (ROW_1, "rows 1", "and 2", "the same bin", "do not overlap"),
    "flag that is neither": ("A,1.5,2.0,10.0,11.0,100,10,yes", "row 2", "rising", "'yes'", "true or false"),
    "blank cell": ("A,1.5,2.0,10.0,,100,10,true", "row 2", "logm_hi", "blank", "allowed is"),
    "ragged row": ("A,1.5,2.0,10.0,11.0,100,10", "row 2", "7 cells", "8"),
    "decimal comma": ("A,1,5,2.0,10.0,11.0,100,10,true", "row 2", "9 cells", "8"),
}


@pytest.mark.parametrize("command", ["vet", "infer"])
@pytest.mark.parametrize("mistake", BAD_ROWS)
def test_a_bad_row_is_refused_by_its_number(case, hurstfit_cli, command: str, mistake: str) -> None:
    row, *fragments = BAD_ROWS[mistake]
    case.bins(ROW_1, row)
    before = contents_of(case.folder)
    assert_refused(hurstfit_cli(command, "case.toml"), "bins.csv", *fragments)
    assert contents_of(case.folder) == before


@pytest.mark.parametrize(
    ("header", "fragments"),
    [
        (HEADER.replace("n_quiescent", "n_quiesent"), ("'n_quiesent'", "did you mean 'n_quiescent'?", "allowed are")),
        (HEADER.replace(",rising", ""), ("'rising' is missing", "are needed")),
        (HEADER.replace("z_hi", "z_lo"), ("'z_lo' appears twice",)),
    ],
)
def test_a_bad_column_is_refused_by_its_name(case, hurstfit_cli, header: str, fragments: tuple[str, ...]) -> None:
    row = ROW_1 if "rising" in header else ROW_1.replace(",true", "")
    case.bins(row, header=header)
    before = contents_of(case.folder)
    assert_refused(hurstfit_cli("infer", "case.toml"), "bins.csv", *fragments)
    assert contents_of(case.folder) == before


@pytest.mark.parametrize(
    ("data", "fragments"),
    [
        (b"", ("empty", "allowed is")),
        (b"\n\n", ("empty", "allowed is")),
        (HEADER.encode() + b"\n", ("no rows", "one row or more")),
        (b"\x00\x01\x02\xff" * 40, ("binary", "text in UTF-8")),
        (b"\xff\xfe\xfa\n", ("line 1", "UTF-8")),
    ],
)
def test_a_file_that_is_no_table_is_refused(case, hurstfit_cli, data: bytes, fragments: tuple[str, ...]) -> None:
    (case.folder / "bins.csv").write_bytes(data)
    for command, path in (("vet", "bins.csv"), ("vet", "case.toml"), ("infer", "case.toml")):
        assert_refused(hurstfit_cli(command, path), "bins.csv", *fragments)
    assert sorted(p.name for p in case.folder.iterdir()) == ["bins.csv", "case.toml"]


def test_bins_that_no_walk_has_reached_are_refused(case, hurstfit_cli) -> None:
    case.bins(ROW_1, "A,11.0,13.0,10.0,11.0,100,10,true")
    fragments = ("bins.csv, row 2 (A, z 11-13)", "z_hi 13", "start of the walk", "z_start = 12", "case.toml, [clock]")
    assert_refused(hurstfit_cli("infer", "case.toml"), *fragments)


def test_a_bin_before_the_first_step_is_refused(case, hurstfit_cli) -> None:
    case.bins(ROW_1, "A,11.0,11.99,10.0,11.0,100,10,true")
    assert_refused(hurstfit_cli("vet", "case.toml"), "row 2 (A, z 11-11.99)", "has not taken its first step", "[clock]")


def test_bins_that_are_all_left_out_are_refused(case, hurstfit_cli) -> None:
    case.bins(ROW_1.replace("true", "false"))
    assert_refused(hurstfit_cli("infer", "case.toml"), "bins.csv", "rising = false", "keep_not_rising = true")


# -- the configuration ---------------------------------------------------------------------------------------------------------

BAD_CHANGES = {
    "misspelt key": ({"clock": {"z_strat": 12.0}}, "[clock]", "'z_strat'", "did you mean 'z_start'?", "allowed are"),
    "misspelt table": ({"exponant": {"above": 0.9}}, "'exponant'", "did you mean 'exponent'?", "allowed are"),
    "misspelt term": (
        {"selection": {"Larkspur-A": {"missed_fracton": 0.1}}},
        "[selection.Larkspur-A]",
        "'missed_fracton'",
        "did you mean 'missed_fraction'?",
    ),
    "misspelt study": ({"selection": {"Larkspur-a": {}}}, "[selection.Larkspur-a]", "bins.csv", "did you mean 'Larkspur-A'?"),
    "misspelt parameter of a model": (
        {"clock": {"cosmology": {"H0": 70, "Om": 0.3}}},
        "[clock] cosmology",
        "'Om'",
        "did you mean 'Om0'?",
    ),
    "unknown model": ({"clock": {"cosmology": "Plank18"}}, "[clock] cosmology", "'Plank18'", "did you mean 'Planck18'?"),
    "misspelt prior": ({"clock": {"step": {"nromal": [20, 2]}}}, "[clock] step", "'nromal'", "did you mean 'normal'?"),
    "misspelt noise": ({"walk": {"noise": "type-2"}}, "[walk] noise", "'type-2'", "'type-I', 'type-II' or 'own'", "did you mean"),
    "prior outside its support": (
        {"exponent": {"prior": {"uniform": [0.05, 2.0]}}},
        "[exponent] prior",
        "[0.05, 2]",
        "from 0.05 to 1.3",
    ),
    "share above one": (
        {"selection": {"default": {"contamination": 1.2}}},
        "[selection.default] contamination",
        "1.2",
        "from 0 to 1",
    ),
    "completeness ratio of zero": (
        {"selection": {"default": {"completeness_ratio": 0.0}}},
        "[selection.default] completeness_ratio",
        "found 0",
        "above 0",
    ),
    "more validated than counted": (
        {"selection": {"default": {"contamination": {"validation": [9, 4]}}}},
        "contamination",
        "[9, 4]",
        "0 <= j <= m",
    ),
    "negative step": ({"clock": {"step": -20.0}}, "[clock] step", "-20", "above 0"),
    "start beyond all clocks": ({"clock": {"z_start": 40.0}}, "[clock] z_start", "40", "from 0 to 30"),
    "criterion that is none": ({"galaxies": {"criterion": "nought"}}, "[galaxies] criterion", "'nought'", "'zero'"),
    "threshold beyond the table": ({"galaxies": {"criterion": "rate<9"}}, "[galaxies]", "9", "thresholds from"),
    "parent sample beyond the table": ({"galaxies": {"min_mass": 0.9}}, "[galaxies]", "0.9", "0.5"),
    "parent sample that is none": ({"galaxies": {"min_mass": "some"}}, "[galaxies] min_mass", "'some'", "'all'", "number"),
    "negative parent sample": ({"galaxies": {"min_mass": -0.1}}, "[galaxies] min_mass", "-0.1", "at least 0"),
    "window of nothing": ({"galaxies": {"window": 0}}, "[galaxies] window", "found 0", "above 0"),
    "selection that is no table": ({"selection": 3}, "[selection]", "found 3", "a table"),
    "study that is no table": ({"selection": {"Larkspur-A": 3}}, "[selection] Larkspur-A", "found 3", "a table"),
    "table that is no table": ({"walk": "type-II"}, "[walk]", "'type-II'", "a table"),
    "number as text": ({"engine": {"max_steps": "1000"}}, "[engine] max_steps", "'1000'", "whole number"),
    "text as number": ({"measurements": {"table": 3}}, "[measurements] table", "found 3", "text"),
    "prior as text": ({"clock": {"step": "20"}}, "[clock] step", "'20'", "above 0"),
    "flag as number": ({"measurements": {"keep_not_rising": 1}}, "keep_not_rising", "found 1", "true or false"),
    "number as flag": ({"exponent": {"above": True}}, "[exponent] above", "found true", "a number"),
    "prior as flag": ({"clock": {"step": True}}, "[clock] step", "found true", "above 0"),
    "nan": ({"exponent": {"above": float("nan")}}, "[exponent] above", "nan", "finite"),
    "infinity": ({"clock": {"z_start": float("inf")}}, "[clock] z_start", "inf", "from 0 to 30"),
    "fraction of a seed": ({"engine": {"seed": 1.5}}, "[engine] seed", "1.5", "whole number"),
    "negative seed": ({"engine": {"seed": -1}}, "[engine] seed", "-1", "at least 0"),
    "odd ensemble": ({"engine": {"walkers": 33}}, "[engine] walkers", "33", "even number"),
    "small ensemble": ({"engine": {"walkers": 4}}, "[engine] walkers", "4", "at least 8"),
    "lax stopping rule": ({"engine": {"max_rhat": 1.5}}, "[engine] max_rhat", "1.5", "at most 1.1"),
    "no name for a table": ({"measurements": {"table": ""}}, "[measurements] table", "''", "not empty"),
    "no such table": ({"measurements": {"table": "bons.csv"}}, "bons.csv", "no such file", "allowed is"),
    "bins beyond the table": ({"clock": {"step": 2.0}}, "bins.csv, row 1", "steps", "type-II table holds up to 2048"),
    "nothing to infer": ({"exponent": {"prior": 0.8}}, "every parameter is fixed", "give H a prior"),
}


@pytest.mark.parametrize("command", ["vet", "infer"])
@pytest.mark.parametrize("mistake", BAD_CHANGES)
def test_a_bad_configuration_is_refused_by_its_key(case, hurstfit_cli, command: str, mistake: str) -> None:
    changes, *fragments = BAD_CHANGES[mistake]
    case.config(**changes)
    before = contents_of(case.folder)
    # some mistakes are only found with the table, which then is the file to name
    assert_refused(hurstfit_cli(command, "case.toml"), *fragments)
    assert contents_of(case.folder) == before


@pytest.mark.parametrize("missing", ["measurements", "walk", "clock", "clock.step", "walk.noise", "measurements.table"])
def test_what_is_missing_is_named(case, hurstfit_cli, missing: str) -> None:
    case.config(drop=(missing,))
    table, _, key = missing.partition(".")
    assert_refused(
        hurstfit_cli("infer", "case.toml"), f"case.toml, [{table}] {key} is missing" if key else f"[{table}] is missing"
    )


@pytest.mark.parametrize(
    ("data", "fragment"),
    [
        (b"", "[measurements] is missing"),
        (b"[walk\n", "not valid TOML"),
        (b"a = 1\na = 2\n", "not valid TOML"),
        (b"\x00\x01\x02", "not valid TOML"),
        (b"\xff\xfe\x00", "not a text file"),
        (b"a = " + b"[" * 5000 + b"]" * 5000, "not valid TOML"),
        (b'["two\\nlines"]\n', r"'two\nlines'"),
        (b'[selection."two\\nlines"]\n[measurements]\n', "is missing"),
    ],
)
def test_a_file_that_is_no_configuration_is_refused(case, hurstfit_cli, data: bytes, fragment: str) -> None:
    (case.folder / "case.toml").write_bytes(data)
    assert_refused(hurstfit_cli("infer", "case.toml"), "case.toml", fragment)


@pytest.mark.parametrize("name", ["none.toml", "none.csv", "none.h5", ".", "case.txt"])
def test_vet_says_what_it_cannot_look_at(case, hurstfit_cli, name: str) -> None:
    (case.folder / "case.txt").write_text("")
    assert_refused(hurstfit_cli("vet", name), name)


def test_a_path_too_long_for_the_system_is_refused(case, hurstfit_cli) -> None:
    for command in ("vet", "infer", "digest"):
        assert_refused(hurstfit_cli(command, "x" * 300 + ".toml"))


@pytest.mark.parametrize(
    ("arguments", "fragments"),
    [
        (("infer", "case.toml", "--oput", "x.h5"), ("--oput", "--out", "hurstfit infer --help")),
        (("infer",), ("CONFIG", "hurstfit infer --help")),
        (("tabulate", "type-III", "--out", "x.h5"), ("type-III", "type-II", "hurstfit tabulate --help")),
    ],
)
def test_a_bad_option_is_refused(case, hurstfit_cli, arguments: tuple[str, ...], fragments: tuple[str, ...]) -> None:
    assert_refused(hurstfit_cli(*arguments), *fragments)


def test_an_unknown_command_is_refused_with_the_nearest_one(hurstfit_cli) -> None:
    assert_refused(hurstfit_cli("infre", "case.toml"), "'infre'", "did you mean 'infer'?", "vet")


# -- HDF5 files ----------------------------------------------------------------------------------------------------------------


def damaged(kind: str, data: bytes) -> bytes:
    flipped = bytearray(data)
    flipped[len(data) // 2] ^= 0x10
    return {"empty": b"", "text": b"no HDF5 at all\n" * 99, "truncated": data[: len(data) // 2], "flipped": bytes(flipped)}[kind]


@pytest.mark.parametrize("kind", ["empty", "text", "truncated", "flipped"])
def test_a_damaged_fraction_table_is_refused(case, hurstfit_cli, kind: str) -> None:
    (case.folder / "own.h5").write_bytes(damaged(kind, shipped_path("type-II").read_bytes()))
    case.config(walk={"table": "own.h5"})
    for command, path in (("vet", "own.h5"), ("vet", "case.toml"), ("infer", "case.toml")):
        assert_refused(hurstfit_cli(command, path), "own.h5")
    assert sorted(p.name for p in case.folder.iterdir()) == ["bins.csv", "case.toml", "own.h5"]


def test_a_table_of_the_other_noise_is_refused(case, hurstfit_cli) -> None:
    case.config(walk={"table": str(shipped_path("type-I"))})
    assert_refused(hurstfit_cli("infer", "case.toml"), "case.toml, [walk] noise", "'type-II'", "type-I")


@pytest.mark.parametrize("kind", ["empty", "text", "truncated", "flipped"])
def test_a_damaged_run_is_refused(case, hurstfit_cli, small_run: Path, kind: str) -> None:
    (case.folder / "run.h5").write_bytes(damaged(kind, small_run.read_bytes()))
    before = contents_of(case.folder)
    for command in ("digest", "vet"):
        assert_refused(hurstfit_cli(command, "run.h5"), "run.h5")
    assert contents_of(case.folder) == before


def test_a_fraction_table_is_no_run(hurstfit_cli) -> None:
    assert_refused(hurstfit_cli("digest", shipped_path("type-I")), "type-I.h5", "not a run")


# -- output --------------------------------------------------------------------------------------------------------------------


@pytest.fixture
def no_sampling(monkeypatch: pytest.MonkeyPatch) -> None:
    """Fail a test in which sampling begins before the output is known to be writable."""

    def sample(*_: object) -> None:
        raise AssertionError("sampling began")

    monkeypatch.setattr("hurstfit.inference.run_engine", sample)


@pytest.mark.usefixtures("no_sampling")
class TestOutput:
    def test_an_existing_run_file_is_not_touched(self, case, hurstfit_cli) -> None:
        (case.folder / "case.h5").write_bytes(b"precious")
        before = contents_of(case.folder)
        assert_refused(hurstfit_cli("infer", "case.toml"), "case.h5", "exists", "--overwrite")
        assert contents_of(case.folder) == before

    def test_a_dangling_link_counts_as_existing(self, case, hurstfit_cli) -> None:
        (case.folder / "case.h5").symlink_to("elsewhere.h5")
        assert_refused(hurstfit_cli("infer", "case.toml"), "case.h5", "exists", "--overwrite")

    def test_overwriting_spares_files_that_are_no_runs(self, case, hurstfit_cli) -> None:
        before = contents_of(case.folder)
        for name in ("bins.csv", "case.toml"):
            assert_refused(hurstfit_cli("infer", "case.toml", "--out", name, "--overwrite"), name, "not a run file")
        assert contents_of(case.folder) == before

    def test_a_folder_that_is_not_there_is_named(self, case, hurstfit_cli) -> None:
        assert_refused(hurstfit_cli("infer", "case.toml", "--out", "nowhere/x.h5"), "nowhere/x.h5", "no directory nowhere")

    def test_a_file_is_no_folder(self, case, hurstfit_cli) -> None:
        assert_refused(hurstfit_cli("infer", "case.toml", "--out", "bins.csv/x.h5"), "bins.csv/x.h5", "no directory bins.csv")

    def test_a_folder_is_no_file(self, case, hurstfit_cli) -> None:
        assert_refused(hurstfit_cli("infer", "case.toml", "--out", "."), "is a directory")

    @pytest.mark.skipif(not Path("/proc/self").exists(), reason="needs /proc, in which nobody can make a file")
    def test_a_folder_in_which_nobody_can_write_is_refused(self, case, hurstfit_cli) -> None:
        assert_refused(hurstfit_cli("infer", "case.toml", "--out", "/proc/x.h5"), "/proc/x.h5", "/proc is not writable")

    def test_a_folder_in_which_the_user_may_not_write_is_refused(self, case, hurstfit_cli, monkeypatch) -> None:
        def touch(path: Path, **_: object) -> None:
            raise PermissionError(13, "Permission denied", str(path))

        monkeypatch.setattr(Path, "touch", touch)
        assert_refused(hurstfit_cli("infer", "case.toml", "--out", "x.h5"), "x.h5", "not writable", "Permission denied")

    def test_a_name_with_a_zero_byte_is_refused(self, case, hurstfit_cli) -> None:
        case.config(output={"run": "a\0.h5"})
        assert_refused(hurstfit_cli("infer", "case.toml"), r"a\x00.h5")


def test_files_of_an_earlier_digest_are_not_touched(case, hurstfit_cli, small_run: Path) -> None:
    (case.folder / "run.h5").write_bytes(small_run.read_bytes())
    (case.folder / "run-digest").mkdir()
    (case.folder / "run-digest" / "summary.ecsv").write_text("precious")
    before = contents_of(case.folder)
    assert_refused(hurstfit_cli("digest", "run.h5"), "run-digest/summary.ecsv", "exists", "--overwrite")
    assert contents_of(case.folder) == before


def test_an_existing_table_is_not_touched_by_tabulate(case, hurstfit_cli) -> None:
    (case.folder / "own.h5").write_text("precious")
    assert_refused(hurstfit_cli("tabulate", "type-I", "--out", "own.h5"), "own.h5", "exists", "--overwrite")
    assert (case.folder / "own.h5").read_text() == "precious"


def test_a_full_disk_ends_in_a_sentence(case, hurstfit_cli, monkeypatch: pytest.MonkeyPatch) -> None:
    def write(path: Path, _: object) -> None:
        raise OSError(28, "No space left on device", str(path))

    monkeypatch.setattr("hurstfit.inference.write_run", write)
    case.config(engine={"max_steps": 100})
    assert_refused(hurstfit_cli("infer", "case.toml"), "case.h5", "No space left on device")


# -- as a process of its own ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "prepare"),
    [
        (("infer", "case.toml"), lambda case: case.bins(ROW_1, "A,1.5,2.0,10.0,11.0,100,101,true")),
        (("vet", "case.toml"), lambda case: case.config(clock={"z_strat": 12.0})),
        (("digest", "case.toml"), lambda case: None),
    ],
)
def test_no_traceback_reaches_the_user(case, hurstfit_process, arguments: tuple[str, ...], prepare: Callable) -> None:
    prepare(case)
    before = contents_of(case.folder)
    process = hurstfit_process(*arguments)
    out, err = process.communicate(timeout=120)
    assert process.returncode == 2
    assert out == ""
    assert err.count("\n") == 1
    assert err.startswith("hurstfit: ")
    assert contents_of(case.folder) == before
