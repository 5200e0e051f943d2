"""Formats: the same table as CSV, ECSV, FITS and VOTable, units of mass, metadata, and damaged files."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.table import MaskedColumn, QTable, Table
from hypothesis import given, settings
from hypothesis import strategies as st

from hurstfit.errors import HurstfitError
from hurstfit.measurements import Measurements, read_measurements


def masked(values: list[float | None], dtype: type = float) -> MaskedColumn:
    return MaskedColumn([0 if v is None else v for v in values], mask=[v is None for v in values], dtype=dtype)


def table() -> Table:
    made = Table()
    made["study"] = ["Larkspur-Deep", "Larkspur-Deep", "Tansy Wide", "Tänsy Wide"]
    made["z_lo"], made["z_hi"] = [0.2, 0.5, 0.1, 0.5], [0.5, 0.8, 0.5, 0.9]
    made["logm_lo"], made["logm_hi"] = [10.0, 10.0, 10.5, 10.5], [10.5, 10.5, 11.0, 11.0]
    made["n_total"] = masked([812, 100, None, None], int)
    made["n_quiescent"] = masked([101, None, None, None], int)
    made["fraction"] = masked([None, 0.13, 0.13, 0.2])
    made["fraction_err"] = masked([None, None, 0.03, None])
    made["limit"] = ["", "", "", "upper"]
    made["confidence"] = masked([None, None, None, 0.95])
    made["rising"] = [True, True, False, True]
    return made


def write(made: Table, path: Path) -> Path:
    formats = {".csv": "ascii.csv", ".ecsv": "ascii.ecsv", ".fits": "fits", ".vot": "votable", ".xml": "votable"}
    if path.suffix in (".fits", ".vot", ".xml"):
        made = made.copy()
        if path.suffix == ".fits":  # FITS texts are ASCII
            made["study"] = [name.replace("ä", "a") for name in made["study"]]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # dex(solMass) is no unit of these formats' standards, but written and read all the same
        made.write(path, format=formats[path.suffix], overwrite=True)
    return path


@pytest.mark.parametrize("extension", [".ecsv", ".fits", ".vot", ".xml"])
def test_all_formats_hold_the_same_bins(tmp_path, extension: str) -> None:
    reference = read_measurements(write(table(), tmp_path / "bins.csv"))
    bins = read_measurements(write(table(), tmp_path / f"bins{extension}"))
    for name in ("z_lo", "z_hi", "logm_lo", "logm_hi", "n_total", "n_quiescent", "rising"):
        np.testing.assert_array_equal(getattr(bins, name), getattr(reference, name))
    for name in ("form", "x", "m", "counted"):
        np.testing.assert_array_equal(getattr(bins.effective, name), getattr(reference.effective, name))
    assert bins.study[:3].tolist() == reference.study[:3].tolist()
    if extension != ".fits":
        assert bins.study[3] == "Tänsy Wide"


def test_single_precision_means_the_digits_that_it_shows(tmp_path) -> None:
    made = table()
    for name in ("z_lo", "z_hi", "logm_lo", "logm_hi", "fraction", "fraction_err"):
        made[name] = made[name].astype("f4")
    reference = read_measurements(write(table(), tmp_path / "bins.csv"))
    bins = read_measurements(write(made, tmp_path / "bins.fits"))
    np.testing.assert_array_equal(bins.z_lo, reference.z_lo)
    np.testing.assert_array_equal(bins.effective.m, reference.effective.m)


@pytest.mark.parametrize("extension", [".ecsv", ".fits", ".vot"])
@pytest.mark.parametrize(("unit", "factor"), [("solMass", 1.0), ("1e10 solMass", 1e-10), ("kg", 1.988409870698051e30)])
def test_masses_with_a_unit_become_logarithms(tmp_path, extension: str, unit: str, factor: float) -> None:
    # The solar mass in kg: IAU 2015 nominal GM over CODATA 2018 G, as in astropy.constants.
    made = table()
    for end in ("lo", "hi"):
        made[f"mass_{end}"] = 10.0 ** made[f"logm_{end}"] * factor * u.Unit(unit)
        made.remove_column(f"logm_{end}")
    bins = read_measurements(write(made, tmp_path / f"bins{extension}"))
    assert bins.logm_lo == pytest.approx([10.0, 10.0, 10.5, 10.5], abs=1e-12)
    assert bins.table["logm_hi"].unit == u.dex(u.solMass)


@pytest.mark.parametrize("extension", [".ecsv", ".fits", ".vot"])
def test_logarithms_of_mass_keep_their_unit(tmp_path, extension: str) -> None:
    made = QTable(table())
    made["logm_lo"] = u.Dex(made["logm_lo"], u.dex(u.solMass))
    assert read_measurements(write(made, tmp_path / f"bins{extension}")).logm_lo.tolist() == [10.0, 10.0, 10.5, 10.5]


@pytest.mark.parametrize(
    ("name", "unit", "sentence"),
    [
        ("mass_lo", "m", "column 'mass_lo': found the unit 'm'; allowed is a unit of mass"),
        ("mass_lo", "", "column 'mass_lo': found no unit; allowed is a unit of mass, such as solMass"),
        ("mass_hi", "dex(solMass)", r"column 'mass_hi': found the unit 'dex\(solMass\)'; allowed is a unit of mass"),
        ("mass_hi", "mag", "found the unit 'mag'"),
        ("z_lo", "km / s", "column 'z_lo': found the unit 'km / s'"),
        ("fraction", "kg", "column 'fraction': found the unit 'kg'"),
    ],
)
def test_a_unit_that_does_not_suit_is_refused(tmp_path, name: str, unit: str, sentence: str) -> None:
    made = table()
    for end in ("lo", "hi"):
        made[f"mass_{end}"] = 10.0 ** made[f"logm_{end}"] * u.solMass
        made.remove_column(f"logm_{end}")
    made[name].unit = unit or None
    with pytest.raises(HurstfitError, match=sentence):
        read_measurements(write(made, tmp_path / "bins.ecsv"))


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"mass_hi": None}, "the column 'mass_hi' is missing; mass_lo and mass_hi go together"),
        ({"logm_lo": [10.0] * 4}, "column 'logm_lo': stands beside 'mass_lo'; allowed is one of the two"),
        (
            {"mass_lo": [-1e10] * 4},
            r"row 1, column 'mass_lo': found '-10000000000.0'; allowed is a stellar mass from 1 to 10\^20",
        ),
        ({"mass_lo": [0.0] * 4}, "row 1, column 'mass_lo': found '0.0'"),
        ({"mass_lo": [1e12] * 4}, "row 1, column 'mass_hi'.*above mass_lo, which is"),
        ({"z_lo": [0.1] * 4}, r"rows 1 \(z 0.1-0.5, mass .*overlap"),
    ],
)
def test_masses_that_do_not_suit_are_refused_by_the_name_that_the_file_has(tmp_path, change, sentence: str) -> None:
    made = table()
    for end in ("lo", "hi"):
        made[f"mass_{end}"] = 10.0 ** made[f"logm_{end}"] * u.solMass
        made.remove_column(f"logm_{end}")
    for name, values in change.items():
        if values is None:
            made.remove_column(name)
        else:
            made[name] = values * u.solMass if name.startswith("mass") else values
    with pytest.raises(HurstfitError, match=sentence):
        read_measurements(write(made, tmp_path / "bins.ecsv"))


@pytest.mark.parametrize("extension", [".ecsv", ".fits"])
@pytest.mark.parametrize("key", ["interval", "INTERVAL"])
def test_metadata_give_the_level_of_rows_that_state_none(tmp_path, extension: str, key: str) -> None:
    made = table()
    made.meta = {key: 0.95, "REFERENC": "Larkspur et al."}
    bins = read_measurements(write(made, tmp_path / f"bins{extension}"))
    assert bins.effective.level[2:].tolist() == [0.95, 0.95]
    assert bins.effective.stated.tolist() == [False, False, True, True]
    # the level stays with the rows where they are stored
    assert bins.from_ecsv_text(bins.to_ecsv(), "x").effective.level[2] == 0.95


def test_a_parameter_of_a_votable_gives_the_confidence_of_its_limits(tmp_path) -> None:
    made = table()
    made["confidence"].mask = True
    path = write(made, tmp_path / "bins.vot")
    with pytest.raises(HurstfitError, match="row 4, column 'confidence': the cell is blank"):
        read_measurements(path)
    text = path.read_text()
    parameter = '<PARAM name="confidence" datatype="double" value="0.9"/>'
    path.write_text(text.replace("<FIELD", f"{parameter}<FIELD", 1))
    assert read_measurements(path).effective.level[3] == 0.9


@pytest.mark.parametrize("value", [68, "most", True, [0.68]])
def test_metadata_that_are_no_level_are_refused(tmp_path, value) -> None:
    made = table()
    made.meta = {"interval": value}
    with pytest.raises(HurstfitError, match=r"the metadata give 'interval' as .*; allowed is a probability from 0.5 to 0.9999"):
        read_measurements(write(made, tmp_path / "bins.ecsv"))


def test_null_flags_and_numbers_are_blank_cells(tmp_path) -> None:
    made = table()
    made["rising"] = MaskedColumn([True, True, True, True], mask=[False, True, False, False])
    with pytest.raises(HurstfitError, match="row 2, column 'rising': the cell is blank; allowed is true or false"):
        read_measurements(write(made, tmp_path / "bins.vot"))
    made = table()
    made["z_hi"][2] = np.nan
    with pytest.raises(HurstfitError, match="row 3, column 'z_hi': the cell is blank"):
        read_measurements(write(made, tmp_path / "bins.fits"))


def test_arrays_in_a_cell_are_refused(tmp_path) -> None:
    made = table()
    made["z_lo"] = np.zeros((4, 2))
    for extension in ("fits", "vot"):
        with pytest.raises(HurstfitError, match="column 'z_lo': holds arrays; allowed is one value a row"):
            read_measurements(write(made, tmp_path / f"bins.{extension}"))


def test_files_of_several_tables_or_none_are_refused(tmp_path) -> None:
    hdu = fits.table_to_hdu(Table({"z_lo": [1.0]}))
    fits.HDUList([fits.PrimaryHDU(), hdu, hdu.copy()]).writeto(tmp_path / "two.fits")
    fits.PrimaryHDU(np.zeros((3, 3))).writeto(tmp_path / "image.fits")
    for name, number in (("two.fits", 2), ("image.fits", 0)):
        with pytest.raises(HurstfitError, match=f"{name}: found {number} tables; allowed is a FITS file with one"):
            read_measurements(tmp_path / name)


def test_a_votable_that_points_elsewhere_is_not_followed(tmp_path) -> None:
    path = write(table(), tmp_path / "bins.vot")
    text = path.read_text()
    start, end = text.index("<TABLEDATA>"), text.index("</TABLEDATA>") + len("</TABLEDATA>")
    path.write_text(text[:start] + '<BINARY><STREAM href="http://192.0.2.1/bins" encoding="base64"/></BINARY>' + text[end:])
    with pytest.raises(HurstfitError, match="the data are elsewhere"):
        read_measurements(path)


@pytest.fixture(scope="module")
def originals(tmp_path_factory) -> dict[str, bytes]:
    """Give the bytes of a good table in each binary format."""
    folder = tmp_path_factory.mktemp("originals")
    return {ext: write(table(), folder / f"bins{ext}").read_bytes() for ext in (".fits", ".vot")}


@settings(deadline=None, max_examples=120)
@given(
    st.sampled_from([".fits", ".vot"]),
    st.lists(st.tuples(st.floats(0, 1), st.integers(0, 60), st.binary(max_size=8)), max_size=3),
    st.none() | st.floats(0, 1),
)
def test_a_damaged_file_gives_measurements_or_a_sentence(originals, tmp_path_factory, extension, changes, cut) -> None:
    data = originals[extension]
    for at, length, piece in changes:
        start = int(at * len(data))
        data = data[:start] + piece + data[start + length :]
    if cut is not None:
        data = data[: int(cut * len(data))]
    path = tmp_path_factory.getbasetemp() / f"damaged{extension}"
    path.write_bytes(data)
    try:
        result: object = read_measurements(path)
    except HurstfitError as error:
        result = str(error)
    if isinstance(result, Measurements):
        assert (result.effective.x <= result.effective.m).all()
    else:
        assert len(str(result).splitlines()) == 1
        assert f"damaged{extension}" in str(result)
