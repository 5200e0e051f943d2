"""Tables that users bring: read as written, refused in one sentence, and used by every command."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

from hurstfit.errors import HurstfitError
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.own import ModelTable, read_own_table
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable

H = (0.3, 0.5, 0.7, 0.8, 0.9, 1.0, 1.2)
STEPS = (50, 100, 200, 400, 800)
ERROR = 0.004


def fraction_of(h: float, n: float) -> float:
    """Give an invented fraction, cubic in H and in ln n, so that splines through its nodes are exact."""
    x = np.log(n / 200)
    return 0.05 + 0.12 * h**3 - 0.02 * x * h + 0.002 * x**3


def rows() -> list[tuple[float, float, float, float]]:
    return [(h, float(n), fraction_of(h, n), ERROR) for h in H for n in STEPS]


def write(path: Path, body: list[tuple], names: tuple[str, ...] = ("H", "steps", "fraction", "error")) -> Path:
    Table(rows=body, names=names).write(path, overwrite=True)
    return path


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "own.ecsv"


def own(path: Path) -> FractionTable:
    table = read_own_table(path)
    assert isinstance(table, FractionTable)
    return table


# -- reading -------------------------------------------------------------------------------------------------------------------


def test_a_table_is_read_in_any_order_of_rows(path: Path) -> None:
    body = rows()
    np.random.default_rng(971).shuffle(body)
    table = own(write(path, body))
    assert table.noise == "own"
    np.testing.assert_array_equal(table.axes.h, H)
    np.testing.assert_array_equal(table.axes.steps, STEPS)
    expected = np.array([[fraction_of(h, n) for n in STEPS] for h in H])
    np.testing.assert_allclose(table.fraction(np.array(H)[:, None], np.array(STEPS)), expected, rtol=0, atol=1e-13)
    assert len(table.digest) == 64


def test_between_nodes_it_is_a_cubic_spline_in_h_and_the_logarithm_of_steps(path: Path) -> None:
    table = own(write(path, rows()))
    for h, n in ((0.44, 63.0), (0.86, 333.3), (1.19, 799.0)):
        assert float(table.fraction(h, n)) == pytest.approx(fraction_of(h, n), abs=1e-12)
        assert float(table.standard_error(h, n)) == pytest.approx(ERROR, rel=1e-12)


def test_its_errors_are_independent_between_rows(path: Path) -> None:
    table = own(write(path, rows()))
    d = table.deviations(Definition())(np.array(H)[:, None], np.array(STEPS)).reshape(len(H) * len(STEPS), -1)
    covariance = d.T @ d
    # quarters of a standard error: 4 sqrt(34) = 23.3 is kept as 23, so that the variance is off by 2 * 0.32 / 23.3
    np.testing.assert_allclose(np.diag(covariance), ERROR**2, rtol=0.03)
    np.testing.assert_allclose(covariance - np.diag(np.diag(covariance)), 0.0, atol=1e-9 * ERROR**2)


def test_a_table_too_large_for_that_keeps_no_replicates(path: Path) -> None:
    body = [(round(0.1 + 0.02 * i, 3), 10.0 + j, 0.1, ERROR) for i in range(40) for j in range(40)]
    assert own(write(path, body)).replicates is None


def test_it_is_loaded_by_path_like_any_other(path: Path) -> None:
    write(path, rows())
    assert load_table(path).digest == load_table(str(path)).digest == own(path).digest


def test_its_definition_is_built_in(path: Path) -> None:
    table = own(write(path, rows()))
    for choice in ({"min_mass": 0.1}, {"criterion": "rate<0.2"}, {"window": 5.0}):
        with pytest.raises(HurstfitError, match="a table of your own has its parent sample, criterion and window built in"):
            table.fraction(0.8, 200, **choice)
    with pytest.raises(HurstfitError, match="built in"):
        table.surface(Definition(None, parse_criterion("rate<0.2"), scatter=0.2))


@pytest.mark.parametrize(
    ("h", "n", "sentence"),
    [
        (0.2, 100, "the own table holds H from 0.3 to 1.2, not 0.2"),
        (0.5, 40, "step number from 50 to 800, not 40"),
        (0.5, 801, "not 801"),
    ],
)
def test_it_is_not_read_outside(path: Path, h: float, n: float, sentence: str) -> None:
    with pytest.raises(HurstfitError, match=sentence):
        own(write(path, rows())).fraction(h, n)


# -- labelled models -----------------------------------------------------------------------------------------------------------

MODELS = ("model", "steps", "fraction", "error")


def model_rows() -> list[tuple[str, float, float, float]]:
    return [(m, float(n), fraction_of(h, n), ERROR) for m, h in (("Quiet wind", 0.5), ("Strong wind", 0.9)) for n in STEPS]


def models(path: Path) -> ModelTable:
    table = read_own_table(write(path, model_rows(), MODELS))
    assert isinstance(table, ModelTable)
    return table


def test_labelled_models_predict_over_steps(path: Path) -> None:
    table = models(path)
    assert table.models == ("Quiet wind", "Strong wind")
    assert float(table.fraction("Strong wind", 333.3)) == pytest.approx(fraction_of(0.9, 333.3), abs=1e-12)
    assert float(table.standard_error("Strong wind", 333.3)) == pytest.approx(ERROR, rel=1e-12)
    np.testing.assert_allclose(table.fraction("Quiet wind", [50, 800]), [fraction_of(0.5, n) for n in (50, 800)], atol=1e-13)


def test_labelled_models_hold_no_h_to_infer(path: Path) -> None:
    models(path)
    with pytest.raises(HurstfitError, match=r"holds labelled models \(Quiet wind, Strong wind\), not H"):
        load_table(path)


def test_an_unknown_model_is_refused_with_the_nearest_one(path: Path) -> None:
    with pytest.raises(HurstfitError, match=r"no model 'Strong wnd' .*did you mean 'Strong wind'"):
        models(path).fraction("Strong wnd", 100)
    with pytest.raises(HurstfitError, match="step numbers from 50 to 800, not 1000"):
        models(path).fraction("Strong wind", [100, 1000])


# -- what is refused -----------------------------------------------------------------------------------------------------------


def changed(row: int, column: int, value: object) -> list[tuple]:
    body = [list(r) for r in rows()]
    body[row][column] = value
    return [tuple(r) for r in body]


BAD_BODIES = {
    "gap": (rows()[:7] + rows()[8:], "the grid has a gap at H 0.5, steps 200; a fraction table has a row for every H"),
    "duplicate": ([*rows(), rows()[3]], "rows 4 and 36 are duplicates (H 0.3, steps 400)"),
    "fraction above one": (changed(4, 2, 1.02), "row 5: fraction is 1.02; allowed is from 0 to 1"),
    "negative fraction": (changed(0, 2, -0.1), "row 1: fraction is -0.1; allowed is from 0 to 1"),
    "negative error": (changed(2, 3, -0.004), "row 3: error is -0.004; allowed is a standard error from 0 to 1"),
    "nan": (changed(9, 2, float("nan")), "row 10: fraction is nan; allowed is a finite number"),
    "infinite error": (changed(9, 3, float("inf")), "row 10: error is inf; allowed is a finite number"),
    "no step": (changed(5, 1, 0.5), "row 6: steps is 0.5; allowed is at least 1"),
    "H of a type-II walk that does not exist": (changed(34, 0, 1.5), "row 35: H is 1.5; allowed is above 0 and below 1.5"),
    "H of zero": (changed(0, 0, 0.0), "row 1: H is 0; allowed is above 0"),
    "too few H": ([r for r in rows() if r[0] < 0.75], "found 3 values of H; a fraction table needs at least 4"),
    "too few steps": ([r for r in rows() if r[1] < 300], "found 3 values of steps; a fraction table needs at least 4"),
}


@pytest.mark.parametrize("mistake", BAD_BODIES)
def test_a_bad_row_is_refused_in_one_sentence(path: Path, mistake: str) -> None:
    body, sentence = BAD_BODIES[mistake]
    with pytest.raises(HurstfitError) as caught:
        read_own_table(write(path, body))
    assert sentence in str(caught.value)
    assert str(caught.value).startswith(str(path))
    assert "\n" not in str(caught.value)


def test_bad_columns_are_refused_in_one_sentence(path: Path) -> None:
    def refused(table: Table, sentence: str) -> None:
        table.write(path, overwrite=True)
        with pytest.raises(HurstfitError) as caught:
            read_own_table(path)
        assert sentence in str(caught.value)
        assert "\n" not in str(caught.value)

    good = Table(rows=rows(), names=("H", "steps", "fraction", "error"))
    without = good.copy()
    without.remove_column("error")
    refused(without, "the column 'error' is missing; a fraction table has H, steps, fraction, error")
    misspelt = good.copy()
    misspelt.rename_column("fraction", "fracton")
    refused(misspelt, "unknown column 'fracton'; allowed are H, steps, fraction, error (did you mean 'fraction'?)")
    neither = good.copy()
    neither.remove_column("H")
    refused(neither, "found neither; a fraction table has one of the columns H and model")
    both = good.copy()
    both["model"] = "A"
    refused(both, "found H and model")
    text = good.copy()
    text["fraction"] = [f"{x}" for x in good["fraction"]]
    refused(text, "the column 'fraction' holds text; allowed are numbers")
    flags = good.copy()
    flags.replace_column("error", np.ones(len(good), dtype=bool))
    refused(flags, "the column 'error' holds true and false; allowed are numbers")
    blank = Table(good, masked=True)
    blank["error"].mask[6] = True
    refused(blank, "row 7: error is blank; allowed is a finite number")
    percent = good.copy()
    percent["fraction"].unit = "percent"
    refused(percent, "the column 'fraction' has the unit %; allowed are plain numbers")
    refused(good[:0], "found 0 values of H; a fraction table needs at least 4")
    label = Table(rows=model_rows(), names=MODELS, masked=True)
    label["model"].mask[3] = True
    refused(label, "row 4: model is blank; allowed is a label")
    refused(Table(rows=[*model_rows(), model_rows()[1]], names=MODELS), "are duplicates (model Quiet wind, steps 100)")
    refused(Table(rows=model_rows()[:-1], names=MODELS), "the grid has a gap at model Strong wind, steps 800")


@pytest.mark.parametrize("data", [b"", b"H,steps\n1,2\n", b"\x00\xff\xfe" * 30, b"# %ECSV 1.0\n# ---\n# datatype:\n"])
def test_a_file_that_is_no_ecsv_is_refused(path: Path, data: bytes) -> None:
    path.write_bytes(data)
    with pytest.raises(HurstfitError, match="is not readable ECSV") as caught:
        read_own_table(path)
    assert "\n" not in str(caught.value)


def test_a_missing_file_is_refused(path: Path) -> None:
    for read in (read_own_table, load_table):
        with pytest.raises(HurstfitError, match=r"own\.ecsv does not exist"):
            read(path)


# -- through the command line --------------------------------------------------------------------------------------------------

OWN = {"noise": "own", "table": "own.ecsv"}
PRIOR = {"prior": {"uniform": [0.3, 1.2]}}


def one_line(text: str) -> str:
    return " ".join(text.split())


def test_h_is_inferred_from_a_table_of_the_users_own(case, hurstfit_cli) -> None:
    write(case.folder / "own.ecsv", rows())
    case.config(walk=OWN, exponent=PRIOR, engine={"kind": "auto"})
    vetted = hurstfit_cli("vet", "case.toml")
    assert vetted.exit_code == 0, vetted.output
    text = one_line(vetted.output)
    assert "a fraction table of your own" in text
    assert "parent sample as the table defines it" in text
    assert "own.ecsv: H 0.3 to 1.2, steps 50 to 800, standard error up to 0.004" in text
    assert "must be what the measurements count; its errors are taken as independent between rows" in text
    assert "all walks" not in text
    result = hurstfit_cli("infer", "case.toml")
    assert result.exit_code == 0, result.output
    assert "moves H by" in one_line(result.output)
    for arguments in (("vet", "case.h5"), ("digest", "case.h5")):
        again = hurstfit_cli(*arguments)
        assert again.exit_code == 0, again.output
        assert "NOT CONVERGED" not in again.output


def test_h_from_a_copy_of_the_tabulated_walks_is_h_from_the_walks(case) -> None:
    from hurstfit.inference import infer

    table = load_table("type-II")
    grid = [(h, float(n), float(table.fraction(h, n)), 2e-4) for h in table.axes.h[5:] for n in (64, 96, 160, 256, 384, 512)]
    write(case.folder / "own.ecsv", grid)
    engine, prior = {"kind": "quadrature"}, {"prior": {"uniform": [0.3, 1.3]}}
    walks = infer(case.contents(engine=engine, exponent=prior))
    copy = infer(case.contents(walk=OWN, engine=engine, exponent=prior))
    a, b = walks.draws("H"), copy.draws("H")
    # the same posterior but for the coarser grid in steps; both sets of draws are independent
    assert abs(a.mean() - b.mean()) < 4 * np.hypot(a.std() / a.size**0.5, b.std() / b.size**0.5) + 0.02 * a.std()


def test_vet_describes_it(case, hurstfit_cli) -> None:
    write(case.folder / "own.ecsv", rows())
    text = one_line(hurstfit_cli("vet", "own.ecsv").output)
    assert "own.ecsv is in order" in text
    assert "H 0.3 to 1.2, 7 nodes" in text
    assert "steps 50 to 800, 5 nodes" in text
    assert "standard error at most 0.004" in text
    write(case.folder / "models.ecsv", model_rows(), MODELS)
    text = one_line(hurstfit_cli("vet", "models.ecsv").output)
    assert "models Quiet wind, Strong wind" in text
    assert "steps 50 to 800, 5 nodes" in text
    write(case.folder / "own.ecsv", BAD_BODIES["gap"][0])
    refused = hurstfit_cli("vet", "own.ecsv")
    assert refused.exit_code == 2
    assert "the grid has a gap" in refused.stderr


def refused_by(hurstfit_cli, path: str, *fragments: str) -> None:
    for command in ("vet", "infer"):
        result = hurstfit_cli(command, path)
        assert result.exit_code == 2, result.output
        assert result.stderr.count("\n") == 1
        assert result.stderr.startswith("hurstfit: ")
        for fragment in fragments:
            assert fragment in result.stderr


@pytest.mark.parametrize("mistake", BAD_BODIES)
def test_a_bad_table_ends_infer_with_its_sentence(case, hurstfit_cli, mistake: str) -> None:
    body, sentence = BAD_BODIES[mistake]
    write(case.folder / "own.ecsv", body)
    case.config(walk=OWN, exponent=PRIOR)
    refused_by(hurstfit_cli, "case.toml", "own.ecsv", sentence)


@pytest.mark.parametrize(
    ("changes", "fragments"),
    [
        ({"walk": {"noise": "own"}}, ("[walk] table is missing", "'own' needs the file")),
        ({"walk": {"noise": "type-I", "table": "own.ecsv"}}, ("[walk] noise: found 'type-I'", "holds own")),
        ({"walk": OWN, "galaxies": {"min_mass": 0.1}}, ("[galaxies]", "built in", "leave min_mass")),
        ({"walk": OWN, "galaxies": {"criterion": "rate<0.2"}}, ("[galaxies]", "built in")),
        ({"walk": OWN, "clock": {"step": 5.0}}, ("bins.csv, row 1", "own table holds up to 800")),
        ({"walk": OWN, "clock": {"step": 80.0}}, ("bins.csv, row", "own table starts at 50")),
        ({"walk": OWN, "exponent": {"prior": {"uniform": [0.05, 1.2]}}}, ("[exponent] prior", "from 0.3 to 1.2")),
        ({"walk": {"noise": "own", "table": "none.ecsv"}}, ("none.ecsv does not exist",)),
        ({"walk": {"noise": "own", "table": "models.ecsv"}}, ("models.ecsv holds labelled models", "no H to infer")),
    ],
)
def test_what_does_not_fit_a_table_of_the_users_own_is_refused(case, hurstfit_cli, changes, fragments) -> None:
    write(case.folder / "own.ecsv", rows())
    write(case.folder / "models.ecsv", model_rows(), MODELS)
    case.config(**{"exponent": PRIOR, **changes})
    refused_by(hurstfit_cli, "case.toml", *fragments)


def test_a_run_notices_that_its_table_has_changed(case, hurstfit_cli) -> None:
    write(case.folder / "own.ecsv", rows())
    case.config(walk=OWN, exponent=PRIOR, engine={"kind": "auto"})
    assert hurstfit_cli("infer", "case.toml").exit_code == 0
    write(case.folder / "own.ecsv", changed(4, 2, 0.5))
    result = hurstfit_cli("vet", "case.h5")
    assert result.exit_code == 2
    assert "has changed since" in result.stderr
