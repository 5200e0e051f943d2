"""Measurements as an object: labels, selection, storage."""

import dataclasses

import numpy as np
import pytest
from astropy import units
from astropy.table import QTable, Table

from hurstfit.errors import HurstfitError
from hurstfit.measurements import Measurements


def _table():
    table = QTable()
    table["study"] = ["Larkspur-Deep", "Larkspur-Deep", "Tansy Wide"]
    table["z_lo"] = [0.2, 0.5, 0.1 + 0.2]
    table["z_hi"] = [0.5, 0.8, 1 / 3]
    table["logm_lo"] = units.Dex([10.0, 10.5, 10.1], units.dex(units.solMass))
    table["logm_hi"] = units.Dex([10.5, 11.0, 10.7], units.dex(units.solMass))
    table["n_total"] = [812, 640, 2**53]
    table["n_quiescent"] = [201, 0, 2**53]
    table["rising"] = [True, False, True]
    return table


@pytest.fixture
def bins():
    return Measurements("bins.csv", _table())


def test_a_row_is_named_by_number_study_and_redshift(bins):
    assert bins.row_label(1) == "row 2 (Larkspur-Deep, z 0.5-0.8)"
    assert bins.row_label(2) == "row 3 (Tansy Wide, z 0.3-0.333333)"


def test_selected_bins_keep_their_row_numbers(bins):
    chosen = bins.select(bins.rising)
    assert chosen.n_bins == 2
    np.testing.assert_array_equal(chosen.rows, [1, 3])
    assert chosen.row_label(1).startswith("row 3 (Tansy Wide")
    assert chosen.studies == ("Larkspur-Deep", "Tansy Wide")
    assert chosen.select(chosen.study == "Tansy Wide").row_label(0).startswith("row 3 ")
    assert chosen.path == "bins.csv"
    assert bins.n_bins == 3


def test_no_bins_can_be_selected(bins):
    none = bins.select(np.zeros(3, bool))
    assert none.n_bins == 0
    assert none.studies == ()
    assert none.rows.shape == (0,)


@pytest.mark.parametrize("mask", [[0, 1, 1], [True, False], True, [[True, True, True]]])
def test_a_selection_needs_one_flag_a_bin(bins, mask):
    with pytest.raises(ValueError, match="3 flags"):
        bins.select(mask)


@pytest.mark.parametrize("mask", [[True, True, True], [False, True, True], [False, False, False]])
@pytest.mark.parametrize("note", [None, ["", "a, b", '"c" # d']])
def test_storage_loses_nothing(mask, note):
    table = _table()
    if note is not None:
        table["note"] = note
    before = Measurements("bins.csv", table).select(np.array(mask))
    after = Measurements.from_ecsv_text(before.to_ecsv(), "bins.csv")
    assert after.path == "bins.csv"
    assert after.table.colnames == before.table.colnames
    np.testing.assert_array_equal(after.rows, before.rows)
    for name in ("study", "z_lo", "z_hi", "logm_lo", "logm_hi", "n_total", "n_quiescent", "rising"):
        np.testing.assert_array_equal(getattr(after, name), getattr(before, name))
    if note is not None:
        np.testing.assert_array_equal(after.table["note"], before.table["note"])
    assert after.table["logm_lo"].unit == units.dex(units.solMass)
    assert after.to_ecsv() == before.to_ecsv()


def test_stored_text_is_read_by_astropy(bins):
    # Reference: the ECSV reader of astropy.table.
    table = Table.read(bins.to_ecsv(), format="ascii.ecsv")
    assert table.colnames[0] == "row"
    np.testing.assert_array_equal(table["z_lo"], bins.z_lo)
    np.testing.assert_array_equal(table["n_total"], bins.n_total)


@pytest.mark.parametrize(
    ("damage", "sentence"),
    [
        (lambda text: text.replace("640", "-640"), r"bins\.csv: row 2, column 'n_total': found '-640'"),
        (lambda text: text.replace("\n1 ", "\n0 "), r"row 1, column 'row': found '0'; allowed is a whole number of 1"),
        (lambda text: text.replace("\n1 ", "\n1.5 "), r"row 1, column 'row': found '1\.5'"),
        (lambda text: text.replace("\n1 ", "\nnan "), r"row 1, column 'row': found 'nan'"),
        (lambda text: text.replace("row", "raw"), "unknown column 'raw'"),
        (lambda text: text[:80], "ECSV header|is empty|is missing"),
        (lambda text: "", "is empty"),
    ],
)
def test_damaged_stored_text_is_refused(bins, damage, sentence):
    with pytest.raises(HurstfitError, match=sentence):
        Measurements.from_ecsv_text(damage(bins.to_ecsv()), "bins.csv")


def test_accessors_need_no_units():
    table = _table()
    table.replace_column("logm_lo", [10.0, 10.5, 10.1])
    np.testing.assert_array_equal(Measurements("x", table).logm_lo, [10.0, 10.5, 10.1])


def test_what_an_accessor_gives_can_be_changed_without_changing_the_table(bins):
    bins.n_total[0] = 1.0
    assert bins.n_total[0] == 812.0


def test_measurements_cannot_be_changed(bins):
    with pytest.raises(dataclasses.FrozenInstanceError):
        bins.path = "other.csv"


def test_an_incomplete_table_is_refused_at_construction():
    table = _table()
    table.remove_columns(["z_hi", "rising"])
    with pytest.raises(ValueError, match="lacks z_hi, rising"):
        Measurements("x", table)


def test_row_numbers_must_fit_the_table():
    with pytest.raises(ValueError, match="3, not shape"):
        Measurements("x", _table(), np.array([1, 2]))
