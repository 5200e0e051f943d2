"""From a file to `Measurements`, or to a sentence that says why not."""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import did_you_mean
from hurstfit.measurements.binary import FITS, VOTABLE, read_fits, read_votable
from hurstfit.measurements.cells import Cells, is_ecsv, refuse, split_table
from hurstfit.measurements.checks import check
from hurstfit.measurements.columns import COLUMNS, ROW, parse
from hurstfit.measurements.forms import read_effective
from hurstfit.measurements.table import Measurements

if TYPE_CHECKING:
    from astropy.table import MaskedColumn

__all__ = ["EXTENSIONS", "from_stored_text", "read_measurements"]

_TEXT = (".ecsv", ".csv")
#: Endings of files that may hold measurements.
EXTENSIONS = (*_TEXT, *FITS, *VOTABLE)
_ALLOWED = "a .ecsv or .csv file, a .fits or .fit file, or a VOTable (.vot, .votable, .xml)"


def read_measurements(path: str | os.PathLike[str]) -> Measurements:
    """Read a table of counted fractions.

    Parameters
    ----------
    path : str or path
        A ``.csv`` or ``.ecsv`` file in UTF-8, a FITS file or a VOTable with one table: one row a bin, with the columns
        ``study``, ``z_lo``, ``z_hi``, ``logm_lo``, ``logm_hi`` (log10 of the stellar mass in solar masses, in ECSV, FITS and
        VOTable possibly with the unit ``dex(solMass)`` or ``dex``; or ``mass_lo``, ``mass_hi`` with a unit of mass),
        ``rising`` (true or false: whether the mean star formation rate still rises there) and, if wanted, ``note``.  What
        was counted is in
        ``n_total``, ``n_quiescent``, ``n_effective``, ``fraction``, ``fraction_err``, ``fraction_lo``, ``fraction_hi``,
        ``interval``,
        ``limit`` and ``confidence``, each row in one of the forms of :mod:`hurstfit.measurements.forms`; metadata of these
        names may give ``interval`` and ``confidence`` to all rows.  In text files blank lines and lines that start with
        ``#`` are passed over, as are all other metadata.

    Returns
    -------
    Measurements
        The bins, in the order of the file.

    Raises
    ------
    HurstfitError
        Where the file cannot be read, or holds anything that cannot be a measurement: one sentence with file, row and
        column.
    """
    name = os.fsdecode(path)
    extension = _check_file(name)
    if extension in FITS:
        cells = read_fits(name)
    elif extension in VOTABLE:
        cells = read_votable(name)
    else:
        text = _read_text(name)
        if extension == ".ecsv" and text.strip() and not is_ecsv(text):
            refuse(name, "the first line is not that of an ECSV file; allowed is '# %ECSV 1.0', or the extension .csv")
        cells = split_table(text, name)
    if cells.n_rows == 0:
        refuse(name, "found a line of column names and no rows; allowed is one row or more")
    return _build(cells, stored=False)


def from_stored_text(text: str, path: str) -> Measurements:
    """Read back what `Measurements.to_ecsv` wrote, with all checks, since a stored text may have been damaged."""
    return _build(split_table(text, path), stored=True)


def _check_file(name: str) -> str:
    """Refuse what is not a file of a known kind; give its extension."""
    path = Path(name)
    extension = path.suffix.lower()
    try:
        if path.is_dir():
            refuse(name, f"found a directory; allowed is {_ALLOWED}")
        if not path.exists():
            refuse(name, f"no such file; allowed is {_ALLOWED} that exists")
        if extension not in EXTENSIONS:
            found = f"unknown extension '{extension}'" if extension else "found no extension"
            others = ", ".join((*FITS, *VOTABLE))
            refuse(name, f"{found}{did_you_mean(extension, EXTENSIONS)}; allowed are .ecsv and .csv, and {others}")
        if not path.is_file():
            refuse(name, f"found something that is not a regular file; allowed is {_ALLOWED}")
    except OSError as error:
        _refuse_system(name, error)
    return extension


def _refuse_system(name: str, error: OSError) -> NoReturn:
    refuse(name, f"the file cannot be read ({error.strerror or 'unknown reason'}); allowed is a readable file")


def _read_text(name: str) -> str:
    try:
        data = Path(name).read_bytes()
    except OSError as error:
        _refuse_system(name, error)
    if b"\0" in data:
        refuse(name, "found binary data (a zero byte); allowed is text in UTF-8")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        refuse(name, f"line {line} is not UTF-8; allowed is text in UTF-8")


def _build(cells: Cells, *, stored: bool) -> Measurements:
    from astropy.table import QTable
    from astropy.units import Dex, dex, solMass

    columns = parse(cells, {**ROW, **COLUMNS} if stored else COLUMNS)
    check(columns)
    arrays, effective = read_effective(columns)
    table = QTable()
    for name in COLUMNS:
        if name in arrays:
            table[name] = Dex(arrays[name], dex(solMass)) if name.startswith("logm") else _column(name, arrays[name])
    rows = columns["row"].astype(np.int64) if stored else np.empty(0, np.int64)
    return Measurements.with_effective(cells.path, table, rows, effective)


def _column(name: str, values: NDArray) -> NDArray | MaskedColumn:
    """Column of a table: blank cells are masked, and counts are whole numbers."""
    from astropy.table import MaskedColumn

    if values.dtype.kind != "f":
        return values
    blank = np.isnan(values)
    if COLUMNS[name].kind == "count":
        values = np.where(blank, 0, values).astype(np.int64)
    return MaskedColumn(values, mask=blank) if blank.any() else values
