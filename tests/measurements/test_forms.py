"""Forms of a row: what each is read as, and every contradiction with its sentence."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from hurstfit.errors import HurstfitError
from hurstfit.measurements import Measurements, read_measurements
from hurstfit.measurements.wording import explain_row, summarise

NAMES = (
    "n_total", "n_quiescent", "n_effective", "fraction", "fraction_err", "fraction_lo", "fraction_hi",
    "interval", "limit", "confidence",
)  # fmt: skip
HEADER = f"study,z_lo,z_hi,logm_lo,logm_hi,{','.join(NAMES)},rising"


def text_of(*rows: dict[str, object]) -> str:
    lines = [
        f"Larkspur,{0.1 * i:.1f},{0.1 * (i + 1):.1f},10,10.5,{','.join(str(row.get(name, '')) for name in NAMES)},true"
        for i, row in enumerate(rows)
    ]
    return "\n".join([HEADER, *lines])


@pytest.fixture
def read(tmp_path):
    """Read rows, each given by the cells that it fills."""

    def _read(*rows: dict[str, object]) -> Measurements:
        path = tmp_path / "bins.csv"
        path.write_text(text_of(*rows))
        return read_measurements(path)

    return _read


MIXED = (
    {"n_total": 812, "n_quiescent": 101},
    {"n_total": 100, "fraction": 0.13},
    {"fraction": 0.13, "fraction_err": 0.03},
    {"n_total": 100, "fraction": 0.13, "fraction_err": 0.034},
    {"n_total": 100, "fraction": 0.13, "fraction_err": 0.06},
    {"fraction": 0.13, "fraction_lo": 0.1, "fraction_hi": 0.18, "interval": 0.9},
    {"fraction": 0.15, "limit": "upper", "confidence": 0.95},
    {"fraction": 0.12, "limit": "lower", "confidence": 0.95, "n_total": 50},
    {"fraction": 0.12, "n_effective": 31.7, "n_total": 50},
)


def test_one_table_may_mix_all_forms(read) -> None:
    e = read(*MIXED).effective
    forms = ["counts", "share", "error", "error", "error", "interval", "upper", "lower", "weighted"]
    assert e.form.tolist() == forms
    assert e.counted.tolist() == [True, True, False, True, False, False, False, False, True]
    assert (e.x[:2].tolist(), e.m[:2].tolist()) == ([101, 13], [812, 100])
    assert (e.x[3], e.m[3]) == (13, 100)
    assert (e.x[8], e.m[8]) == (pytest.approx(0.12 * 31.7), 31.7)
    for i, lo, hi, level in ((2, 0.10, 0.16, 0.68), (4, 0.07, 0.19, 0.68), (5, 0.10, 0.18, 0.9)):
        beta = stats.beta(e.x[i] + 1, e.m[i] - e.x[i] + 1)
        assert beta.ppf([(1 - level) / 2, (1 + level) / 2]) == pytest.approx([lo, hi], abs=1e-9)
    assert stats.beta.ppf(0.95, 1, e.m[6] + 1) == pytest.approx(0.15, rel=1e-9)
    assert stats.beta.ppf(0.05, e.m[7] + 1, 1) == pytest.approx(0.12, rel=1e-9)


def test_the_order_of_rows_does_not_matter(read) -> None:
    forward, backward = read(*MIXED).effective, read(*MIXED[::-1]).effective
    for name in ("form", "x", "m", "counted"):
        np.testing.assert_array_equal(getattr(forward, name), getattr(backward, name)[::-1])


def test_mixed_tables_survive_storage_and_selection(read) -> None:
    bins = read(*MIXED)
    after = Measurements.from_ecsv_text(bins.to_ecsv(), bins.path)
    assert after.to_ecsv() == bins.to_ecsv()
    chosen = bins.select(bins.effective.form != "error")
    for name in ("form", "x", "m", "counted", "level", "misfit"):
        np.testing.assert_array_equal(getattr(after.effective, name), getattr(bins.effective, name))
        # computed anew from the table, without what reading knew
        np.testing.assert_array_equal(getattr(Measurements("x", chosen.table).effective, name), getattr(chosen.effective, name))
    assert np.isnan(bins.n_quiescent[1:]).all()
    assert bins.table["n_quiescent"].mask.tolist() == [False] + [True] * 8


def test_the_level_of_an_error_is_honoured(read) -> None:
    e = read(
        *({"fraction": 0.3, "fraction_err": 0.1, **level} for level in ({}, {"interval": 0.68}, {"interval": 0.95}))
    ).effective
    assert e.m[0] == e.m[1]
    assert e.stated.tolist() == [False, True, True]
    for i, tail in ((0, 0.16), (2, 0.025)):
        assert stats.beta.ppf([tail, 1 - tail], e.x[i] + 1, e.m[i] - e.x[i] + 1) == pytest.approx([0.2, 0.4], abs=1e-9)


@pytest.mark.parametrize("n", [5, 20, 400, 12_345])
@pytest.mark.parametrize("f", [0.02, 0.13, 0.5, 0.97])
@pytest.mark.parametrize("digits", [2, 3, 6])
def test_rounded_binomial_errors_are_recognised(read, n: int, f: float, digits: int) -> None:
    error = round(float(np.sqrt(f * (1 - f) / n)), digits)
    if error > 0:
        e = read({"n_total": n, "fraction": f, "fraction_err": error}).effective
        assert (e.counted[0], e.m[0]) == (True, n)
        assert e.x[0] == pytest.approx(f * n)


@pytest.mark.parametrize("n", [10, 100, 5000])
@pytest.mark.parametrize("interval", ["flat", "jeffreys", "wilson"])
def test_intervals_by_any_common_recipe_are_recognised_as_binomial(read, n: int, interval: str) -> None:
    # Reference: astropy.stats.binom_conf_interval.
    from astropy.stats import binom_conf_interval

    for k in range(0, n + 1, n // 10):
        lo, hi = np.round(binom_conf_interval(k, n, 0.68, interval=interval), 4)
        row = {"n_total": n, "fraction": k / n, "fraction_lo": min(lo, k / n), "fraction_hi": max(hi, k / n)}
        if (row["fraction_lo"] == k / n and k) or (row["fraction_hi"] == k / n and k < n):
            continue  # the flat prior's interval may end at, or beyond, the fraction of a count near none or all
        e = read(row).effective
        assert (e.counted[0], e.m[0]) == (True, n), k
        assert e.x[0] == pytest.approx(k)


BAD = {
    "counts and a fraction": ({"n_total": 9, "n_quiescent": 3, "fraction": 0.3}, "'fraction'", "beside n_quiescent"),
    "counts and an error": ({"n_total": 9, "n_quiescent": 3, "fraction_err": 0.1}, "'fraction_err'", "beside n_quiescent"),
    "counts and a limit": ({"n_total": 9, "n_quiescent": 3, "limit": "upper"}, "'limit'", "beside n_quiescent"),
    "counts and weights": ({"n_total": 9, "n_quiescent": 3, "n_effective": 5}, "'n_effective'", "beside n_quiescent"),
    "quiescent without total": ({"n_quiescent": 3}, "'n_total'", "blank", "whole number of 1 or more"),
    "total alone": ({"n_total": 9}, "'n_quiescent'", "blank", "from 0 to n_total"),
    "nothing": ({}, "'n_total'", "blank", "whole number of 1 or more"),
    "an error without a fraction": ({"fraction_err": 0.1}, "'n_total'", "blank", "or a fraction"),
    "fraction alone": ({"fraction": 0.3}, "'fraction'", "'0.3'", "a fraction with fraction_err"),
    "percentage": ({"fraction": 30, "n_total": 9}, "'fraction'", "'30'", "from 0 to 1"),
    "negative fraction": ({"fraction": -0.1, "n_total": 9}, "'fraction'", "'-0.1'", "from 0 to 1"),
    "fraction that is nan": ({"fraction": "nan", "n_total": 9}, "'fraction'", "'nan'", "finite"),
    "fraction that is text": ({"fraction": "high", "n_total": 9}, "'fraction'", "'high'", "from 0 to 1"),
    "decimal comma": ({"fraction": '"0,3"', "n_total": 9}, "'fraction'", "'0,3'", "decimal comma"),
    "zero error": ({"fraction": 0.3, "fraction_err": 0}, "'fraction_err'", "'0'", "above 0"),
    "negative error": ({"fraction": 0.3, "fraction_err": -0.1}, "'fraction_err'", "'-0.1'", "above 0"),
    "error of percents": ({"fraction": 0.3, "fraction_err": 5}, "'fraction_err'", "'5'", "at most 1"),
    "error and interval": (
        {"fraction": 0.3, "fraction_err": 0.1, "fraction_lo": 0.2, "fraction_hi": 0.4}, "'fraction_lo'", "beside fraction_err",
    ),
    "half an interval": ({"fraction": 0.3, "fraction_lo": 0.2}, "'fraction_hi'", "blank", "beside fraction_lo"),
    "other half": ({"fraction": 0.3, "fraction_hi": 0.4}, "'fraction_lo'", "blank", "beside fraction_hi"),
    "interval below the value": ({"fraction": 0.3, "fraction_lo": 0.1, "fraction_hi": 0.2}, "'fraction_hi'", "'0.2'", "the ends"),
    "interval above the value": ({"fraction": 0.3, "fraction_lo": 0.4, "fraction_hi": 0.5}, "'fraction_lo'", "'0.4'", "'0.3'"),
    "lengths for ends": ({"fraction": 0.3, "fraction_lo": 0.03, "fraction_hi": 0.04}, "'fraction_hi'", "not the lengths"),
    "interval of no width": ({"fraction": 0.3, "fraction_lo": 0.3, "fraction_hi": 0.3}, "'fraction_lo'", "no error is zero"),
    "no error upwards": ({"fraction": 0.3, "fraction_lo": 0.2, "fraction_hi": 0.3}, "'fraction_hi'", "no error is zero"),
    "interval beyond 1": ({"fraction": 0.9, "fraction_lo": 0.8, "fraction_hi": 1.1}, "'fraction_hi'", "'1.1'", "to 1"),
    "level as a percentage": ({"fraction": 0.3, "fraction_err": 0.1, "interval": 68}, "'interval'", "'68'", "not a percentage"),
    "level of 1": ({"fraction": 0.3, "fraction_err": 0.1, "interval": 1}, "'interval'", "'1'", "0.9999"),
    "level without an error": ({"fraction": 0.3, "n_total": 9, "interval": 0.68}, "'interval'", "no error"),
    "limit without confidence": ({"fraction": 0.1, "limit": "upper"}, "'confidence'", "blank", "means nothing without"),
    "confidence without limit": ({"fraction": 0.1, "n_total": 9, "confidence": 0.9}, "'confidence'", "there is no limit"),
    "limit and error": ({"fraction": 0.1, "limit": "upper", "confidence": 0.9, "interval": 0.9}, "'interval'", "beside a limit"),
    "limit of no side": ({"fraction": 0.1, "limit": "uper", "confidence": 0.9}, "'limit'", "'uper'", "upper or lower"),
    "weak upper limit": ({"fraction": 0.95, "limit": "upper", "confidence": 0.9}, "'fraction'", "at most its confidence, 0.9"),
    "weak lower limit": ({"fraction": 0.05, "limit": "lower", "confidence": 0.9}, "'fraction'", "at least 1 - confidence, 0.1"),
    "upper limit of zero": ({"fraction": 0, "limit": "upper", "confidence": 0.9}, "'fraction'", "'0'"),
    "lower limit of one": ({"fraction": 1, "limit": "lower", "confidence": 0.9}, "'fraction'", "'1'"),
    "limit too tight for N": (
        {"fraction": 0.01, "limit": "upper", "confidence": 0.95, "n_total": 20}, "'fraction'", "20 galaxies", "tighter",
    ),
    "weights and an error": ({"fraction": 0.1, "n_effective": 9, "fraction_err": 0.1}, "'fraction_err'", "beside n_effective"),
    "no weight": ({"fraction": 0.1, "n_effective": 0}, "'n_effective'", "'0'", "above 0"),
    "weights that gain": ({"fraction": 0.1, "n_effective": 60, "n_total": 50}, "'n_effective'", "'60'", "at most n_total"),
    "errors below the binomial": (
        {"fraction": 0.3, "fraction_err": 0.03, "n_total": 100}, "'fraction_err'", "'0.03'", "n_total = 100", "0.0458",
    ),
    "interval below the binomial": (
        {"fraction": 0.3, "fraction_lo": 0.28, "fraction_hi": 0.32, "n_total": 100}, "'fraction_lo'", "n_total = 100", "0.0458",
    ),
    "errors below the binomial at 95 %": (
        {"fraction": 0.3, "fraction_err": 0.0458, "n_total": 100, "interval": 0.95}, "'fraction_err'", "0.0898 at 95 %",
    ),
    "no count has such errors": ({"fraction": 0.0, "fraction_err": 0.05}, "'fraction_err'", "half its half-width"),
}  # fmt: skip


@pytest.mark.parametrize("mistake", BAD)
def test_a_contradiction_is_told_in_one_sentence(read, mistake: str) -> None:
    row, *parts = BAD[mistake]
    with pytest.raises(HurstfitError) as caught:
        read(MIXED[0], row)
    sentence = str(caught.value)
    assert re.search(r"bins\.csv: row 2, column " + ".*".join(map(re.escape, parts)), sentence), sentence
    assert "\n" not in sentence
    assert len(sentence) < 420


def test_a_table_without_any_fraction_is_refused(tmp_path) -> None:
    path = tmp_path / "bins.csv"
    path.write_text("study,z_lo,z_hi,logm_lo,logm_hi,rising\nA,0,1,10,11,true")
    with pytest.raises(HurstfitError, match=r"row 1, column 'n_total': the column is missing; allowed is a whole number"):
        read_measurements(path)


def test_every_row_is_explained_with_its_assumptions(read) -> None:
    bins = read(*MIXED)
    told = [explain_row(bins, i) for i in range(bins.n_bins)]
    expected = [
        "counts: 101 of 812", "counts as 13 of 100; assumed binomial", r"68 % \(assumed.*counts as 14.9 of 120.6.*the quoted one",
        "agrees with the binomial.*13 of 100.*N decides", "larger than the binomial.*decides.*2.81 of 27.3",
        r"90 % \(stated\)", "< 0.15 at 95 % confidence.*none of 17.4", "> 0.12 of 50 galaxies at 95 %.*all of 0.413",
        r"worth 31.7 galaxies \(n_total 50\), counts as 3.8 of 31.7",
    ]  # fmt: skip
    for text, pattern in zip(told, expected, strict=True):
        assert re.search(pattern, text), text
    assert summarise(bins).startswith("101 of 812 galaxies quiescent, 1 row as fraction and N,")


def test_an_interval_that_is_reproduced_badly_says_so(read) -> None:
    text = explain_row(read({"fraction": 0.01, "fraction_err": 0.015}), 0)
    assert re.search(r"quoted ends -0.005 and 0.025 are missed by up to 48.9% of the half-width", text), text


def read_or_sentence(path: Path) -> Measurements | str:
    try:
        return read_measurements(path)
    except HurstfitError as error:
        return str(error)


cells = st.sampled_from(
    ["", "", "0", "1", "0.3", "0.05", "0.95", "12", "100", "-1", "nan", "upper", "lower", "1e-9", "0,5", "1e300"]
)
numbers = st.floats(0, 1.2).map(lambda v: f"{v:.3g}") | st.integers(0, 300).map(str)


@settings(deadline=None, max_examples=400)
@given(st.lists(st.dictionaries(st.sampled_from(NAMES), cells | numbers, max_size=5), min_size=1, max_size=3))
def test_any_mixture_of_cells_gives_effective_counts_or_a_sentence(tmp_path_factory, rows) -> None:
    path = tmp_path_factory.getbasetemp() / "any.csv"
    path.write_text(text_of(*rows).replace("0,5", '"0,5"'))
    bins = read_or_sentence(path)
    if isinstance(bins, str):
        assert len(bins.splitlines()) == 1
        assert "any.csv" in bins
        return
    e = bins.effective
    assert np.isfinite(e.x).all()
    assert ((e.x >= 0) & (e.x <= e.m)).all()
    for i, row in enumerate(rows):
        # nothing that the row says was passed over
        filled = {name for name, cell in row.items() if cell}
        used = {
            "counts": {"n_total", "n_quiescent"}, "share": {"n_total", "fraction"},
            "weighted": {"n_total", "n_effective", "fraction"},
            "error": {"n_total", "fraction", "fraction_err", "interval"},
            "interval": {"n_total", "fraction", "fraction_lo", "fraction_hi", "interval"},
            "upper": {"n_total", "fraction", "limit", "confidence"}, "lower": {"n_total", "fraction", "limit", "confidence"},
        }  # fmt: skip
        assert filled <= used[e.form[i]]
        assert explain_row(bins, i)


def test_a_hundred_thousand_mixed_rows_are_read_in_seconds(tmp_path) -> None:
    import time

    rng = np.random.default_rng(3)
    lines = [
        f"S,{i},{i + 1},10,11,,,{0.3 + 0.001 * a:.3f},{0.01 * b:.2f},true"
        for i, (a, b) in enumerate(rng.integers(1, 20, (100_000, 2)))
    ]
    path = tmp_path / "bins.csv"
    path.write_text("\n".join(["study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,fraction,fraction_err,rising", *lines]))
    start = time.process_time()
    assert read_measurements(path).n_bins == 100_000
    assert time.process_time() - start < 20.0  # about 2 s
