"""From the text of a file to named columns of strings.

CSV and ECSV differ only in what stands above the names: ECSV has a header in YAML, each line behind a ``#``, which
gives the delimiter and the units (Astropy Proposal for Enhancement 6).  Both are split here, by the csv module of the
standard library, so that a mistake in either can be told with its row; a reader made for good files pads what is
missing and renames what is doubled.

Rows are counted from 1 below the line of names.  Blank lines and lines that start with ``#`` are not rows.
"""

from __future__ import annotations

import csv
import re
import warnings
from dataclasses import dataclass, field
from typing import NoReturn

from hurstfit.errors import HurstfitError

__all__ = ["Cells", "is_ecsv", "refuse", "show", "split_table"]

_SIGNATURE = re.compile(r"#\s*%ECSV\s+\d")


@dataclass(frozen=True)
class Cells:
    """A table of strings.

    Attributes
    ----------
    path : str
        Where it came from, for the sentences.
    columns : dict of str to list of str
        Cells without surrounding spaces, all columns equally long.
    units : dict of str to str
        Units of those columns that state one.
    meta : dict of str to object
        What the file says of the table as a whole, by name in lower case.
    """

    path: str
    columns: dict[str, list[str]]
    units: dict[str, str]
    meta: dict[str, object] = field(default_factory=dict)

    @property
    def n_rows(self) -> int:
        """Number of rows."""
        return len(next(iter(self.columns.values())))


def refuse(path: str, what: str, *, row: int | None = None, column: str | None = None) -> NoReturn:
    """Raise the sentence that names the file and, where known, the row (from 1) and the column."""
    place = [f"row {row}"] if row is not None else []
    place += [f"column '{column}'"] if column is not None else []
    # `from None`: the sentence says all that the cause did.
    raise HurstfitError(": ".join([path, *([", ".join(place)] if place else []), what])) from None


def show(cell: object) -> str:
    """Quote what was found, on one line and briefly."""
    text = repr(str(cell))
    return text if len(text) <= 50 else f"{text[:44]}...{text[-1]}"


def is_ecsv(text: str) -> bool:
    """Tell whether a text starts as an ECSV file does."""
    return _SIGNATURE.match(text.lstrip()) is not None


def split_table(text: str, path: str) -> Cells:
    """Split the text of a CSV or ECSV file into columns of strings.

    Parameters
    ----------
    text : str
        The whole file; taken as ECSV where it starts with ``# %ECSV``.
    path : str
        Name for the sentences.

    Returns
    -------
    Cells
        The columns, in the order of the file; possibly without rows.

    Raises
    ------
    HurstfitError
        Where the text is empty, the header cannot be read, a name is doubled or blank, or a row is ragged.
    """
    lines = [line.strip(" \t") for line in text.replace("\r\n", "\n").replace("\r", "\n").split("\n")]
    first = next((i for i, line in enumerate(lines) if line and not line.startswith("#")), None)
    delimiter, declared = ",", None
    meta: dict[str, object] = {}
    if is_ecsv(text):
        delimiter, declared, meta = _ecsv_header([line for line in lines[:first] if line.startswith("#")], path)
    if first is None:
        refuse(path, "the file is empty; allowed is a table with a line of column names and one row a bin")
    # Line ends are kept, so that a quoted cell that runs over several lines shows as such instead of growing together.
    body = [line + "\n" for line in lines[first:] if not line.startswith("#")]
    names, *rows = _split_lines(body, delimiter, path)
    _check_names(names, path)
    if declared is not None and list(declared) != names:
        refuse(path, f"the ECSV header declares the columns {_list(declared)} but the line of names has {_list(names)}")
    if set(map(len, rows)) - {len(names)}:
        _refuse_ragged(names, rows, delimiter, path)
    columns = dict(zip(names, map(list, zip(*rows, strict=True)) if rows else ([] for _ in names), strict=True))
    units = {name: unit for name, unit in (declared or {}).items() if unit is not None}
    return Cells(path, columns, units, meta)


def _split_lines(lines: list[str], delimiter: str, path: str) -> list[list[str]]:
    """Split lines at the delimiter; the first line gives the names."""
    rows: list[list[str]] = []
    try:
        for row in csv.reader(lines, delimiter=delimiter, skipinitialspace=True, strict=True):
            if row:
                rows.append([cell.strip() for cell in row])
    except csv.Error as error:
        what = f"cannot be split into cells ({error}); allowed are quotes in pairs, around whole cells"
        if rows:
            refuse(path, what, row=len(rows))
        refuse(path, f"the line of column names {what}")
    return rows


def _check_names(names: list[str], path: str) -> None:
    if len(names) == 1 and re.search(r"[;\t]", names[0]):
        refuse(path, f"the line of column names is {show(names[0])}; allowed are names and cells separated by commas")
    for i, name in enumerate(names):
        if not name:
            refuse(path, f"the name of column {i + 1} is blank; allowed is a name for every column")
        if name in names[:i]:
            refuse(path, f"the column {show(name)} appears twice; allowed is each column once")


def _refuse_ragged(names: list[str], rows: list[list[str]], delimiter: str, path: str) -> NoReturn:
    i, row = next((i, row) for i, row in enumerate(rows) if len(row) != len(names))
    hint = ""
    if len(row) > len(names) and delimiter == ",":
        hint = " (a decimal comma splits a number in two: write 0.5, not 0,5)"
    cells = f"{len(row)} cell" if len(row) == 1 else f"{len(row)} cells"
    refuse(path, f"found {cells}; allowed are {len(names)}, one for each column{hint}", row=i + 1)


def _ecsv_header(lines: list[str], path: str) -> tuple[str, dict[str, str | None], dict[str, object]]:
    """Read delimiter, names with units, and free metadata from the header of an ECSV file."""
    from astropy.io.misc import yaml

    problem = "the ECSV header cannot be read ({}); allowed is the header that astropy writes"
    # The first line is the signature; every other one is YAML behind "# ".
    text = "\n".join(line[2:] if line.startswith("# ") else line[1:] for line in lines[1:])
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # units in the free metadata, which astropy may not know, do not matter here
            header = yaml.load(text)
    except Exception as error:
        # The parser and the constructors of astropy's own types raise whatever they like.
        refuse(path, problem.format(show(str(error).partition("\n")[0])))
    entries = header.get("datatype") if isinstance(header, dict) else None
    if not isinstance(entries, list) or not all(isinstance(entry, dict) and "name" in entry for entry in entries):
        refuse(path, problem.format("it has no list 'datatype' of columns with names"))
    delimiter = header.get("delimiter", " ")
    if delimiter not in (" ", ","):
        refuse(path, f"the ECSV header gives the delimiter {show(delimiter)}; allowed are a space and a comma")
    declared: dict[str, str | None] = {}
    for entry in entries:
        name, unit = str(entry["name"]), entry.get("unit")
        if "subtype" in entry:
            refuse(
                path,
                f"holds arrays or objects (subtype {show(entry['subtype'])}); allowed is one value a row",
                column=name,
            )
        if name in declared:
            refuse(path, f"the column {show(name)} appears twice; allowed is each column once")
        declared[name] = None if unit is None else str(unit)
    try:
        # a mapping, or, where the header keeps their order (!!omap), pairs
        meta = {str(key).lower(): value for key, value in dict(header.get("meta") or {}).items()}
    except (TypeError, ValueError):
        refuse(path, problem.format("its 'meta' are no names with values"))
    return delimiter, declared, meta


def _list(names: object) -> str:
    text = ", ".join(map(str, names)) if isinstance(names, list | dict) else str(names)
    return show(text)
