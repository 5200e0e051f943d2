"""Reading a table: what is accepted, and every mistake with its sentence."""

import math
import os
import re
import subprocess
import sys
import time

import numpy as np
import pytest
from astropy import units
from astropy.table import QTable, Table

from hurstfit.errors import HurstfitError
from hurstfit.measurements import read_measurements

HEADER = "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,rising"
ROWS = [
    "Larkspur-Deep,0.2,0.5,10.0,10.5,812,201,true",
    "Larkspur-Deep,0.5,0.8,10.0,10.5,640,118,true",
    "Larkspur-Deep,0.5,0.8,10.5,11.0,212,77,false",
    "Tansy Wide,0.5,0.8,10.0,10.5,4410,903,TRUE",
]
GOOD = "\n".join([HEADER, *ROWS]) + "\n"
ECSV_HEADER = """\
# %ECSV 1.0
# ---
# delimiter: ','
# datatype:
# - {name: study, datatype: string}
# - {name: z_lo, datatype: float64}
# - {name: z_hi, datatype: float64}
# - {name: logm_lo, unit: dex(solMass), datatype: float64}
# - {name: logm_hi, unit: dex(solMass), datatype: float64}
# - {name: n_total, datatype: int64}
# - {name: n_quiescent, datatype: int64}
# - {name: rising, datatype: bool}
# schema: astropy-2.0
"""


@pytest.fixture
def write(tmp_path):
    """Write text or bytes into a file of a given name."""

    def _write(content, name="bins.csv"):
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return path

    return _write


def _with_cell(row, column, value):
    """Return the good table with one cell replaced; rows count from 1."""
    lines = [line.split(",") for line in GOOD.splitlines()]
    lines[row][HEADER.split(",").index(column)] = value
    return "\n".join(map(",".join, lines)) + "\n"


class TestAccepted:
    def test_columns_come_out_as_arrays_in_the_order_of_the_file(self, write):
        bins = read_measurements(write(GOOD))
        assert isinstance(bins.table, QTable)
        assert bins.n_bins == 4
        assert bins.studies == ("Larkspur-Deep", "Tansy Wide")
        np.testing.assert_array_equal(bins.study, ["Larkspur-Deep"] * 3 + ["Tansy Wide"])
        np.testing.assert_array_equal(bins.z_lo, [0.2, 0.5, 0.5, 0.5])
        np.testing.assert_array_equal(bins.z_hi, [0.5, 0.8, 0.8, 0.8])
        np.testing.assert_array_equal(bins.logm_lo, [10.0, 10.0, 10.5, 10.0])
        np.testing.assert_array_equal(bins.logm_hi, [10.5, 10.5, 11.0, 10.5])
        np.testing.assert_array_equal(bins.n_total, [812, 640, 212, 4410])
        np.testing.assert_array_equal(bins.n_quiescent, [201, 118, 77, 903])
        np.testing.assert_array_equal(bins.rising, [True, True, False, True])
        np.testing.assert_array_equal(bins.rows, [1, 2, 3, 4])
        assert all(a.dtype == np.float64 for a in (bins.z_lo, bins.logm_hi, bins.n_total, bins.n_quiescent))
        assert bins.rising.dtype == bool

    def test_masses_carry_their_unit(self, write):
        table = read_measurements(write(GOOD)).table
        assert table["logm_lo"].unit == units.dex(units.solMass)
        assert table["logm_lo"][0].physical.to_value(units.solMass) == pytest.approx(1e10, rel=1e-12)

    def test_the_path_is_kept_as_given(self, write):
        path = write(GOOD)
        assert read_measurements(path).path == str(path)
        assert read_measurements(str(path)).path == str(path)

    @pytest.mark.parametrize(
        "content",
        [
            GOOD.rstrip("\n"),
            GOOD.replace("\n", "\r\n"),
            GOOD.replace("\n", "\r"),
            "\ufeff" + GOOD,
            "# counted by hand\n\n" + GOOD.replace("\n", "\n\n"),
            GOOD.replace(ROWS[1], ROWS[1] + "\n# Larkspur-Deep,0.8,1.1,10.0,10.5,3,1,true"),
            GOOD.replace(",", " , "),
            GOOD.replace("Tansy Wide", '"Tansy Wide"').replace("812", '"812"'),
            GOOD.replace("812", "812.0").replace("640", "6.4e2"),
            GOOD.replace("true", "True").replace("false", "FALSE"),
        ],
        ids=["no end", "crlf", "cr", "bom", "blank", "comment", "spaces", "quotes", "floats", "case"],
    )
    def test_harmless_variants_give_the_same_bins(self, write, content):
        assert read_measurements(write(content)).to_ecsv() == read_measurements(write(GOOD, "good.csv")).to_ecsv()

    def test_order_of_columns_does_not_matter(self, write):
        lines = [",".join(line.split(",")[::-1]) for line in GOOD.splitlines()]
        assert read_measurements(write("\n".join(lines))).to_ecsv() == read_measurements(write(GOOD, "g.csv")).to_ecsv()

    def test_a_note_is_kept_and_may_be_blank(self, write):
        lines = [HEADER + ",note", ROWS[0] + ',"deep, and ""odd"""', ROWS[1] + ","]
        np.testing.assert_array_equal(read_measurements(write("\n".join(lines))).table["note"], ['deep, and "odd"', ""])

    def test_studies_may_overlap_and_bins_may_touch(self, write):
        # In the good table two studies share a bin, and bins of one study share edges.
        assert read_measurements(write(GOOD)).n_bins == 4

    def test_edges_that_differ_by_rounding_touch(self, write):
        content = f"{HEADER}\nA,0.1,{0.1 + 0.2!r},10,11,5,1,true\nA,0.3,0.5,10,11,5,1,true\n"
        assert "0.30000000000000004" in content
        assert read_measurements(write(content)).n_bins == 2

    @pytest.mark.parametrize("extension", ["ecsv", "csv", "ECSV"])
    def test_ecsv_is_read_as_such(self, write, extension):
        bins = read_measurements(write(ECSV_HEADER + GOOD, f"bins.{extension}"))
        assert bins.to_ecsv() == read_measurements(write(GOOD, "good.csv")).to_ecsv()

    @pytest.mark.parametrize("unit", ["dex(solMass)", "dex", "dex(Msun)", "''", "'1'"])
    def test_masses_may_have_one_of_these_units(self, write, unit):
        content = ECSV_HEADER.replace("dex(solMass)", unit) + GOOD
        assert read_measurements(write(content, "bins.ecsv")).logm_lo[0] == 10.0

    @pytest.mark.parametrize("with_units", [True, False])
    @pytest.mark.parametrize("delimiter", [" ", ","])
    def test_what_astropy_writes_is_read_as_astropy_reads_it(self, tmp_path, with_units, delimiter):
        # Reference: astropy.table's own ECSV writer and reader.
        rng = np.random.default_rng(3)
        table = QTable()
        table["study"] = ["Larkspur-Deep", "Tansy Wide", 'the "third"', "Yarrow"]
        table["z_lo"] = rng.random(4)
        table["z_hi"] = table["z_lo"] + rng.random(4)
        table["logm_lo"] = units.Dex(9 + rng.random(4), units.dex(units.solMass)) if with_units else 9 + rng.random(4)
        table["logm_hi"] = units.Dex(10 + rng.random(4), units.dex(units.solMass)) if with_units else 10 + rng.random(4)
        table["n_total"] = rng.integers(100, 200, 4)
        table["n_quiescent"] = rng.integers(0, 100, 4)
        table["rising"] = rng.random(4) < 0.5
        table["note"] = ["", "a b", "# c", "d,e"]
        table.meta["comments"] = ["passed over"]
        path = tmp_path / "bins.ecsv"
        table.write(path, format="ascii.ecsv", delimiter=delimiter)
        bins, reference = read_measurements(path), Table.read(path, format="ascii.ecsv")
        for name in ("z_lo", "z_hi", "logm_lo", "logm_hi", "n_total", "n_quiescent", "rising", "study"):
            np.testing.assert_array_equal(getattr(bins, name), np.asarray(reference[name]))
        np.testing.assert_array_equal(bins.table["note"], reference["note"])


# The file, and the parts that the sentence must contain, in order.
MISTAKES = {
    # the whole file
    "empty": ("", ["the file is empty", "column names"]),
    "only blanks": (" \n\n\t\n", ["the file is empty"]),
    "only a comment": ("# nothing\n", ["the file is empty"]),
    "header only": (HEADER + "\n", ["no rows", "one row or more"]),
    "zero bytes": (GOOD.encode() + b"\0\1\2", ["binary data", "UTF-8"]),
    "utf-16": (GOOD.encode("utf-16"), ["binary data", "UTF-8"]),
    "latin-1": (GOOD.replace("Tansy", "Tänsy").encode("latin-1"), ["line 5 is not UTF-8", "allowed"]),
    "semicolons": (GOOD.replace(",", ";"), ["column names is 'study;z_lo", "separated by commas"]),
    "tabs": (GOOD.replace(",", "\t"), ["column names is ", "separated by commas"]),
    "open quote": (GOOD.replace("Tansy Wide", '"Tansy Wide'), ["row 4", "cannot be split", "quotes in pairs"]),
    "stray quote": (GOOD.replace("Tansy Wide", '"Tansy" Wide'), ["row 4", "cannot be split", "quotes in pairs"]),
    "quote in the names": (GOOD.replace("study", '"st"udy'), ["line of column names", "cannot be split"]),
    "endless cell": (GOOD.replace("Tansy Wide", "x" * 200_000), ["row 4", "cannot be split", "field limit"]),
    # columns
    "missing column": (
        "\n".join(line.rpartition(",")[0] for line in GOOD.splitlines()),
        ["'rising' is missing", "study, z_lo,.*rising are needed"],
    ),
    "misspelt column": (
        GOOD.replace("n_quiescent", "n_quiesent"),
        [r"unknown column 'n_quiesent' \(did you mean 'n_quiescent'\?\)", "allowed are study, z_lo"],
    ),
    "column in capitals": (GOOD.replace("study", "Study"), [r"unknown column 'Study' \(did you mean 'study'\?\)"]),
    "further column": (
        "\n".join(line + end for line, end in zip(GOOD.splitlines(), [",area", *[",2.0"] * 4], strict=True)),
        ["unknown column 'area'; allowed are"],
    ),
    "column of row numbers": (
        "\n".join(f"{i or 'row'},{line}" for i, line in enumerate(GOOD.splitlines())),
        ["unknown column 'row'.*; allowed are study"],
    ),
    "doubled column": (GOOD.replace("z_hi", "z_lo"), ["column 'z_lo' appears twice", "each column once"]),
    "blank column name": (GOOD.replace("z_hi", ""), ["name of column 3 is blank", "a name for every column"]),
    "short row": (GOOD.replace(",118,true", ",118"), ["row 2: found 7 cells; allowed are 8"]),
    "one cell": (GOOD + "etc\n", ["row 5: found 1 cell; allowed are 8"]),
    "long row": (GOOD.replace(",118,true", ",118,true,1"), ["row 2: found 9 cells; allowed are 8"]),
    "decimal commas": (
        GOOD.replace("0.2,0.5", "0,2,0,5"),
        ["row 1: found 10 cells; allowed are 8", "decimal comma", "write 0.5"],
    ),
    "row counted without blanks": (GOOD.replace("\n", "\n\n# c\n").replace("4410", "x"), ["row 4, column 'n_total'"]),
    # numbers
    "quoted decimal comma": (
        GOOD.replace("0.2,0.5", '"0,2",0.5'),
        ["row 1, column 'z_lo': found '0,2' with a decimal comma where a decimal point is needed; allowed is a redshift"],
    ),
    "text in a number": (_with_cell(3, "n_total", "many"), ["row 3, column 'n_total': found 'many'; allowed is a whole"]),
    "not available": (_with_cell(2, "z_hi", "N/A"), ["row 2, column 'z_hi': found 'N/A'; allowed is a redshift"]),
    "underscore": (_with_cell(4, "n_total", "4_410"), ["row 4, column 'n_total': found '4_410'; allowed is a whole"]),
    "other digits": (_with_cell(4, "n_total", "٤٤"), ["row 4, column 'n_total': found '٤٤'; allowed is a whole"]),
    "blank number": (_with_cell(2, "n_total", ""), ["row 2, column 'n_total': the cell is blank; allowed is a whole"]),
    "quoted blank": (_with_cell(2, "z_lo", '" "'), ["row 2, column 'z_lo': the cell is blank; allowed is a redshift"]),
    "nan": (_with_cell(2, "n_quiescent", "nan"), ["row 2, column 'n_quiescent': found 'nan'; allowed is a finite number"]),
    "infinity": (_with_cell(1, "logm_hi", "inf"), ["row 1, column 'logm_hi': found 'inf'; allowed is a finite number"]),
    "overflow": (_with_cell(1, "n_total", "1e999"), ["row 1, column 'n_total': found '1e999'; allowed is a finite"]),
    # counts
    "more than all": (
        _with_cell(2, "n_quiescent", "641"),
        ["row 2, column 'n_quiescent': found '641'; allowed is a whole number from 0 to n_total, which is '640'"],
    ),
    "negative count": (_with_cell(2, "n_quiescent", "-1"), ["row 2, column 'n_quiescent': found '-1'", "of 0 or more"]),
    "negative total": (_with_cell(2, "n_total", "-5"), ["row 2, column 'n_total': found '-5'", "of 1 or more"]),
    "no galaxies": (_with_cell(3, "n_total", "0"), ["row 3, column 'n_total': found '0'", "of 1 or more"]),
    "broken count": (_with_cell(3, "n_quiescent", "7.5"), ["row 3, column 'n_quiescent': found '7.5'", "a whole number"]),
    "broken total": (_with_cell(3, "n_total", "212.01"), ["row 3, column 'n_total': found '212.01'", "a whole number"]),
    "count too large": (_with_cell(3, "n_total", "1e300"), ["row 3, column 'n_total': found '1e300'", r"at most 2\^53"]),
    # ranges
    "negative redshift": (_with_cell(1, "z_lo", "-0.1"), ["row 1, column 'z_lo': found '-0.1'", "redshift of 0 or more"]),
    "reversed redshifts": (_with_cell(2, "z_hi", "0.4"), ["row 2, column 'z_hi': found '0.4'", "above z_lo, which is '0.5'"]),
    "no redshift range": (_with_cell(2, "z_hi", "0.5"), ["row 2, column 'z_hi': found '0.5'", "above z_lo, which is '0.5'"]),
    "reversed masses": (
        _with_cell(3, "logm_hi", "10.2"),
        ["row 3, column 'logm_hi': found '10.2'", "above logm_lo, which is '10.5'"],
    ),
    "no mass range": (_with_cell(3, "logm_hi", "10.5"), ["row 3, column 'logm_hi': found '10.5'", "above logm_lo"]),
    "mass without logarithm": (
        _with_cell(3, "logm_hi", "3e10"),
        ["row 3, column 'logm_hi': found '3e10'", "log10 of the stellar mass", "from 0 to 20"],
    ),
    # flags
    **{
        f"flag {value!r}": (
            _with_cell(2, "rising", value),
            [f"row 2, column 'rising': (found '{value}'|the cell is blank); allowed is true or false"],
        )
        for value in ("yes", "1", "0", "2", "t", "1.0", "nan", "")
    },
    # studies
    "blank study": (_with_cell(2, "study", ""), ["row 2, column 'study': the cell is blank; allowed is a name"]),
    "study of spaces": (_with_cell(2, "study", "  "), ["row 2, column 'study': the cell is blank; allowed is a name"]),
    **{
        f"study with {sign}": (
            _with_cell(4, "study", f"Tansy{sign}Wide"),
            [f"row 4, column 'study': found 'Tansy{re.escape(sign)}Wide'", r"without \[ \] and /"],
        )
        for sign in "[]/"
    },
    "study with a control character": (
        _with_cell(4, "study", "Tansy\x1bWide"),
        [r"row 4, column 'study': found 'Tansy\\x1bWide'", "printable"],
    ),
    "study over two lines": (
        _with_cell(4, "study", '"Tansy\nWide"'),
        [r"row 4, column 'study': found 'Tansy\\nWide'", "printable"],
    ),
    "study with a tab": (_with_cell(4, "study", "Tansy\tWide"), [r"found 'Tansy\\tWide'", "printable"]),
    "study like a comment": (_with_cell(4, "study", '"#4"'), ["row 4, column 'study': found '#4'", "not start with #"]),
    "endless study": (_with_cell(4, "study", "x" * 101), ["row 4, column 'study': found 'xxx", "at most 100"]),
    "endless note": (f"{HEADER},note\n{ROWS[0]},{'x' * 501}", ["row 1, column 'note': found 'xxx", "at most 500"]),
    "note over two lines": (f'{HEADER},note\n{ROWS[0]},"a\nb"', [r"row 1, column 'note': found 'a\\nb'", "printable"]),
    # bins
    "same bin twice": (
        GOOD + ROWS[1].replace("640,118", "80,3") + "\n",
        [
            r"rows 2 \(z 0.5-0.8, logm 10.0-10.5\) and 5 \(z 0.5-0.8, logm 10.0-10.5\)",
            "'Larkspur-Deep' are the same bin",
            "the same galaxies twice",
        ],
    ),
    "overlapping bins": (
        GOOD + "Larkspur-Deep,0.7,1.0,10.9,11.4,80,3,true\n",
        [r"rows 3 \(z 0.5-0.8, logm 10.5-11.0\) and 5 \(z 0.7-1.0, logm 10.9-11.4\)", "'Larkspur-Deep' overlap"],
    ),
    "a bin inside another": (
        GOOD + "Tansy Wide,0.6,0.7,10.1,10.2,80,3,true\n",
        [r"rows 4 \(.*\) and 5 \(.*\) of the study 'Tansy Wide' overlap", "do not overlap"],
    ),
}


@pytest.mark.parametrize("mistake", MISTAKES)
def test_a_mistake_in_a_table_is_told_in_one_sentence(write, mistake):
    content, parts = MISTAKES[mistake]
    path = write(content)
    with pytest.raises(HurstfitError) as caught:
        read_measurements(path)
    sentence = str(caught.value)
    assert sentence.startswith(f"{path}: ")
    assert re.search(".*".join(parts), sentence), sentence
    assert "\n" not in sentence
    assert len(sentence) < len(str(path)) + 350


ECSV_MISTAKES = {
    "no signature": (GOOD, ["not that of an ECSV file", "# %ECSV 1.0"]),
    "no names": (ECSV_HEADER, ["the file is empty"]),
    "header only": (ECSV_HEADER + HEADER, ["no rows"]),
    "signature only": ("# %ECSV 1.0\n" + GOOD, ["ECSV header cannot be read", "no list 'datatype'"]),
    "broken YAML": (ECSV_HEADER.replace("- {name: z_lo", "- {{name: z_lo") + GOOD, ["ECSV header cannot be read"]),
    "YAML of no use": ("# %ECSV 1.0\n# ---\n# - 5\n" + GOOD, ["ECSV header cannot be read", "no list 'datatype'"]),
    "nameless column": (ECSV_HEADER.replace("{name: z_lo, ", "{") + GOOD, ["no list 'datatype' of columns with names"]),
    "foreign object": ("# %ECSV 1.0\n# ---\n# a: !!python/object:os.system {}\n" + GOOD, ["ECSV header cannot be read"]),
    "delimiter": (ECSV_HEADER.replace("','", "';'") + GOOD, ["delimiter ';'", "a space and a comma"]),
    "other names": (
        ECSV_HEADER + GOOD.replace("z_lo", "z_low"),
        ["header declares the columns 'study, z_lo", "line of names has 'study, z_low"],
    ),
    "doubled declaration": (ECSV_HEADER.replace("name: z_hi", "name: z_lo") + GOOD, ["'z_lo' appears twice"]),
    "arrays": (
        ECSV_HEADER.replace("z_lo, datatype: float64", "z_lo, datatype: string, subtype: 'float64[2]'") + GOOD,
        ["column 'z_lo': holds arrays", r"float64\[2\]", "one value a row"],
    ),
    "mass in kg": (
        ECSV_HEADER.replace("dex(solMass)", "kg") + GOOD,
        ["column 'logm_lo': found the unit 'kg'; allowed is dex.solMass. or dex or none"],
    ),
    "mass not in dex": (ECSV_HEADER.replace("dex(solMass)", "solMass") + GOOD, ["'logm_lo': found the unit 'solMass'"]),
    "dex of kg": (ECSV_HEADER.replace("dex(solMass)", "dex(kg)") + GOOD, ["found the unit 'dex\\(kg\\)'"]),
    "magnitudes": (ECSV_HEADER.replace("dex(solMass)", "mag(solMass)") + GOOD, ["found the unit 'mag\\(solMass\\)'"]),
    "unknown unit": (ECSV_HEADER.replace("dex(solMass)", "sunmass") + GOOD, ["found the unit 'sunmass'"]),
    "percent": (ECSV_HEADER.replace("{name: z_lo,", "{name: z_lo, unit: '%',") + GOOD, ["'z_lo': found the unit '%'"]),
    "redshift with a unit": (
        ECSV_HEADER.replace("{name: z_lo,", "{name: z_lo, unit: km / s,") + GOOD,
        ["column 'z_lo': found the unit 'km / s'; allowed is none"],
    ),
    "masked value": (ECSV_HEADER + GOOD.replace("640", ""), ["row 2, column 'n_total': the cell is blank"]),
    "text in a number": (ECSV_HEADER + GOOD.replace("640", "many"), ["row 2, column 'n_total': found 'many'"]),
    "ragged": (ECSV_HEADER + GOOD.replace(",640", ""), ["row 2: found 7 cells; allowed are 8"]),
    "flag as a number": (ECSV_HEADER + GOOD.replace("false", "0"), ["row 3, column 'rising': found '0'"]),
}


@pytest.mark.parametrize("mistake", ECSV_MISTAKES)
def test_a_mistake_in_an_ecsv_file_is_told_in_one_sentence(write, mistake):
    content, parts = ECSV_MISTAKES[mistake]
    path = write(content, "bins.ecsv")
    with pytest.raises(HurstfitError) as caught:
        read_measurements(path)
    sentence = str(caught.value)
    assert sentence.startswith(f"{path}: ")
    assert re.search(".*".join(parts), sentence), sentence
    assert "\n" not in sentence


class TestFiles:
    def test_a_missing_file_is_named(self, tmp_path):
        with pytest.raises(HurstfitError, match=r"absent\.csv: no such file"):
            read_measurements(tmp_path / "absent.csv")

    def test_a_directory_is_refused(self, tmp_path):
        with pytest.raises(HurstfitError, match=r"found a directory; allowed is a \.ecsv or \.csv file"):
            read_measurements(tmp_path)

    @pytest.mark.parametrize(
        ("name", "found"),
        [
            ("bins.txt", r"unknown extension '\.txt'; allowed"),
            ("bins.cvs", r"unknown extension '\.cvs' \(did you mean '\.csv'\?\); allowed"),
            ("bins", "found no extension; allowed"),
        ],
    )
    def test_an_unknown_extension_is_refused(self, write, name, found):
        with pytest.raises(HurstfitError, match=found + r" are \.ecsv and \.csv"):
            read_measurements(write(GOOD, name))

    @pytest.mark.parametrize("name", ["a\0b.csv", "x" * 5000 + ".csv"], ids=["zero byte", "too long"])
    def test_an_impossible_name_is_refused(self, name):
        with pytest.raises(HurstfitError, match=r"no such file|cannot be read"):
            read_measurements(name)

    def test_an_unreadable_file_is_refused(self, write, monkeypatch):
        # The tests may run as a user who can read everything, so the refusal of the system is put in its place.
        path = write(GOOD)

        def denied(self):
            raise PermissionError(13, "Permission denied")

        monkeypatch.setattr("pathlib.Path.read_bytes", denied)
        with pytest.raises(HurstfitError, match=r"cannot be read \(Permission denied\); allowed is a readable file"):
            read_measurements(path)

    @pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs named pipes")
    def test_a_pipe_is_refused_without_waiting_for_it(self, tmp_path):
        path = tmp_path / "pipe.csv"
        os.mkfifo(path)
        with pytest.raises(HurstfitError, match="not a regular file"):
            read_measurements(path)


def test_importing_the_package_does_not_import_astropys_tables():
    code = "import sys, hurstfit.measurements; print('astropy.table' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


def _grid(studies, n_z, n_m):
    """Write a table that tiles redshift and mass, in an order that is not sorted."""
    z, m = np.linspace(0, 6, n_z + 1).tolist(), np.linspace(8, 12, n_m + 1).tolist()
    rows = [
        f"S{s},{z[i]},{z[i + 1]},{m[j]},{m[j + 1]},100,{j % 100},true"
        for s in range(studies)
        for i in range(n_z)
        for j in range(n_m)
    ]
    return [rows[k] for k in np.random.default_rng(5).permutation(len(rows))]


@pytest.mark.parametrize("shape", [(1, 300, 300), (900, 10, 10), (1, 90_000, 1), (1, 1, 90_000)], ids=str)
def test_ninety_thousand_rows_are_read_in_seconds(write, shape):
    path = write("\n".join([HEADER, *_grid(*shape)]))
    start = time.process_time()
    bins = read_measurements(path)
    # About 0.7 s; a comparison of all pairs would take an hour.
    assert time.process_time() - start < 20.0
    assert bins.n_bins == math.prod(shape)


def test_one_overlap_among_many_rows_is_found(write):
    rows = _grid(20, 10, 10)
    rows.insert(777, "S7,2.0,2.1,9.0,9.3,5,1,true")
    with pytest.raises(HurstfitError, match=r"rows \d+ .*778|rows 778 .*'S7'") as caught:
        read_measurements(write("\n".join([HEADER, *rows])))
    assert "of the study 'S7' overlap" in str(caught.value)
