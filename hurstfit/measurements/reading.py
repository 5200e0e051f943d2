"""From a file to `Measurements`, or to a sentence that says why not."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np

from hurstfit.errors import did_you_mean
from hurstfit.measurements.cells import Cells, is_ecsv, refuse, split_table
from hurstfit.measurements.checks import COLUMNS, ROW, check, parse
from hurstfit.measurements.table import Measurements

__all__ = ["from_stored_text", "read_measurements"]

_EXTENSIONS = (".ecsv", ".csv")


def read_measurements(path: str | os.PathLike[str]) -> Measurements:
    """Read a table of counted fractions.

    Parameters
    ----------
    path : str or path
        A ``.csv`` or ``.ecsv`` file in UTF-8, one row a bin, with the columns ``study``, ``z_lo``, ``z_hi``,
        ``logm_lo``, ``logm_hi`` (log10 of the stellar mass in solar masses), ``n_total``, ``n_quiescent``, ``rising``
        (true or false: whether the mean star formation rate still rises there) and, if wanted, ``note``.  An ECSV file
        may give the masses the unit ``dex(solMass)`` or ``dex``.  Blank lines and lines that start with ``#`` are passed
        over, as is the free metadata of an ECSV header.

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
    text = _read_text(name)
    if name.lower().endswith(".ecsv") and text.strip() and not is_ecsv(text):
        refuse(name, "the first line is not that of an ECSV file; allowed is '# %ECSV 1.0', or the extension .csv")
    cells = split_table(text, name)
    if cells.n_rows == 0:
        refuse(name, "found a line of column names and no rows; allowed is one row or more")
    return _build(cells, stored=False)


def from_stored_text(text: str, path: str) -> Measurements:
    """Read back what `Measurements.to_ecsv` wrote, with all checks, since a stored text may have been damaged."""
    return _build(split_table(text, path), stored=True)


def _read_text(name: str) -> str:
    path = Path(name)
    try:
        if path.is_dir():
            refuse(name, "found a directory; allowed is a .ecsv or .csv file")
        if not path.exists():
            refuse(name, "no such file; allowed is a .ecsv or .csv file that exists")
        extension = path.suffix.lower()
        if extension not in _EXTENSIONS:
            found = f"unknown extension '{extension}'" if extension else "found no extension"
            refuse(name, f"{found}{did_you_mean(extension, _EXTENSIONS)}; allowed are .ecsv and .csv")
        if not path.is_file():
            refuse(name, "found something that is not a regular file; allowed is a .ecsv or .csv file")
        data = path.read_bytes()
    except OSError as error:
        refuse(name, f"the file cannot be read ({error.strerror or 'unknown reason'}); allowed is a readable file")
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
    table = QTable()
    for name in COLUMNS:
        if name not in columns.arrays:
            continue
        values = columns[name]
        if COLUMNS[name].kind == "count":
            values = values.astype(np.int64)
        table[name] = Dex(values, dex(solMass)) if name.startswith("logm") else values
    if not stored:
        return Measurements(cells.path, table)
    return Measurements(cells.path, table, columns["row"].astype(np.int64))
