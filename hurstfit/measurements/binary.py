"""FITS and VOTable files, read through astropy, as the same named columns of strings as any text file.

Numbers become the shortest text that stands for them, so that the checks, and the sentences that quote a cell, are those of
the text formats.  What is null in the file becomes a blank cell.
"""

from __future__ import annotations

import io
import re
import warnings
from pathlib import Path
from typing import Any, NoReturn

import numpy as np

from hurstfit.measurements.cells import Cells, refuse, show

__all__ = ["FITS", "VOTABLE", "read_fits", "read_votable"]

FITS = (".fits", ".fit")
VOTABLE = (".vot", ".votable", ".xml")


def read_fits(path: str) -> Cells:
    """Read the one table of a FITS file.

    Parameters
    ----------
    path : str
        File.

    Returns
    -------
    Cells
        Columns as strings; header keywords as metadata.

    Raises
    ------
    HurstfitError
        Where the file cannot be read or does not hold exactly one table.
    """
    from astropy.io import fits
    from astropy.table import Table

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # units and keywords that do not follow the standard, which are judged below
        try:
            with fits.open(path, memmap=False) as hdus:
                tables = [i for i, hdu in enumerate(hdus) if isinstance(hdu, fits.BinTableHDU | fits.TableHDU)]
                if len(tables) == 1:
                    names = [str(name) for name in hdus[tables[0]].columns.names]
                    table = Table.read(hdus[tables[0]]) if len(set(names)) == len(names) else None
        except Exception as error:
            _refuse_unreadable(path, "FITS", error)
    if len(tables) != 1:
        refuse(path, f"found {len(tables)} tables; allowed is a FITS file with one")
    if table is None:
        twice = next(name for name in names if names.count(name) > 1)
        refuse(path, f"the column {show(twice)} appears twice; allowed is each column once")
    return _cells(path, table, {str(key).lower(): value for key, value in table.meta.items()})


def read_votable(path: str) -> Cells:
    """Read the one table of a VOTable file.

    Parameters
    ----------
    path : str
        File.

    Returns
    -------
    Cells
        Columns as strings; parameters of the table and of its resource as metadata.

    Raises
    ------
    HurstfitError
        Where the file cannot be read, does not hold exactly one table, or refers to data elsewhere.
    """
    from astropy.io.votable import parse

    try:
        data = Path(path).read_bytes()
    except OSError as error:
        _refuse_unreadable(path, "VOTable", error)
    # the reader would fetch such data over the network
    if re.search(rb"<(\w+:)?STREAM\b[^>]*\bhref", data, re.IGNORECASE):
        refuse(path, "the data are elsewhere (STREAM with href); allowed is a VOTable that holds its own data")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            file = parse(io.BytesIO(data), verify="ignore")
            tables = list(file.iter_tables())
            if len(tables) == 1:
                parameters = [*tables[0].params, *(p for resource in file.resources for p in resource.params)]
                names = [field.name for field in tables[0].fields]
                table = tables[0].to_table(use_names_over_ids=True) if len(set(names)) == len(names) else None
                meta = {str(p.name).lower(): p.value for p in reversed(parameters)}
        except Exception as error:
            _refuse_unreadable(path, "VOTable", error)
    if len(tables) != 1:
        refuse(path, f"found {len(tables)} tables; allowed is a VOTable file with one")
    if table is None:
        twice = next(name for name in names if names.count(name) > 1)
        refuse(path, f"the column {show(twice)} appears twice; allowed is each column once")
    return _cells(path, table, meta)


def _refuse_unreadable(path: str, kind: str, error: Exception) -> NoReturn:
    reason = (str(error).strip() or type(error).__name__).partition("\n")[0]
    refuse(path, f"cannot be read as {kind} ({show(reason)}); allowed is a complete {kind} file")


def _cells(path: str, table: Any, meta: dict[str, object]) -> Cells:
    columns, units = {}, {}
    for name in table.colnames:
        column = table[name]
        if column.ndim != 1:
            refuse(path, "holds arrays; allowed is one value a row", column=name)
        columns[name] = _strings(path, name, column)
        if column.unit is not None:
            units[name] = str(column.unit)
    if not columns:
        refuse(path, "found a table without columns; allowed is one row a bin")
    return Cells(path, columns, units, meta)


def _strings(path: str, name: str, column: Any) -> list[str]:
    """Texts of a column; blank where a value is null, or a floating-point number is the NaN that stands for null."""
    null = np.array(np.ma.getmaskarray(np.ma.asanyarray(column)), bool)
    values = np.ma.getdata(column)
    if values.dtype.kind == "f":
        null |= np.isnan(values)
    elif values.dtype.kind == "S":
        try:
            values = np.char.decode(values, "utf-8")
        except UnicodeDecodeError:
            refuse(path, "holds text that is not UTF-8; allowed is text in UTF-8", column=name)
    elif values.dtype.kind not in "biuUO":
        refuse(path, f"holds values of type {values.dtype}; allowed are numbers, flags and texts", column=name)
    # str of a single-precision number is its own shortest text, not that of the double next to it
    return ["" if blank else str(value).strip() for blank, value in zip(null.tolist(), values, strict=True)]
