"""What a row must be to count as a measurement.

`COLUMNS` says which columns there are and what a cell of each may hold.  `parse` turns strings into arrays by that
list; the functions in `CHECKS` then look at whole columns, each for one kind of mistake, and refuse the first row that
has it.  A further form of a row means further columns in the list and further functions beside these.
"""

from __future__ import annotations

import re
from bisect import bisect_left
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import did_you_mean
from hurstfit.measurements.cells import Cells, refuse, show

__all__ = ["CHECKS", "COLUMNS", "ROW", "Column", "Columns", "check", "parse"]

# Above this, neighbouring whole numbers are no longer told apart in floating point.
_MAX_COUNT = 2**53
# Edges that agree to this many decimals are the same edge: 0.1 + 0.2 does not overlap a bin that starts at 0.3.
_EDGE_DECIMALS = 9


@dataclass(frozen=True)
class Column:
    """What a column holds: ``text``, ``number``, ``count`` or ``flag``."""

    kind: str
    allowed: str
    required: bool = True
    units: tuple[str, ...] = ()
    longest: int = 0


_LOGM = Column("number", "log10 of the stellar mass in solar masses, from 0 to 20", units=("dex(solMass)", "dex"))

COLUMNS = {
    "study": Column("text", "a name of at most 100 printable characters", longest=100),
    "z_lo": Column("number", "a redshift of 0 or more"),
    "z_hi": Column("number", "a redshift above z_lo"),
    "logm_lo": _LOGM,
    "logm_hi": _LOGM,
    "n_total": Column("count", "a whole number of 1 or more"),
    "n_quiescent": Column("count", "a whole number from 0 to n_total"),
    "rising": Column("flag", "true or false"),
    "note": Column("text", "a text of at most 500 printable characters", required=False, longest=500),
}
# Column that a stored table has on top: the row of the file that each row came from.
ROW = {"row": Column("count", "a whole number of 1 or more")}


@dataclass(frozen=True)
class Columns:
    """Columns as arrays, together with the cells that they came from, which the sentences quote.

    Attributes
    ----------
    cells : Cells
        What the file says.
    arrays : dict of str to ndarray
        float64 for numbers and counts, bool for flags, str for texts.
    """

    cells: Cells
    arrays: dict[str, NDArray]

    def __getitem__(self, name: str) -> NDArray:
        return self.arrays[name]

    def refuse_where(self, bad: NDArray[np.bool_], name: str, allowed: str) -> None:
        """Refuse the first row where `bad` holds, quoting its cell."""
        if bad.any():
            i = int(bad.argmax())
            cell = show(self.cells.columns[name][i])
            refuse(self.cells.path, f"found {cell}; allowed is {allowed}", row=i + 1, column=name)

    def study_codes(self) -> NDArray[np.int64]:
        """Whole number for every row, equal where the study is."""
        code: dict[str, int] = {}
        return np.array([code.setdefault(name, len(code)) for name in self.cells.columns["study"]], np.int64)


def parse(cells: Cells, columns: dict[str, Column]) -> Columns:
    """Turn strings into arrays.

    Parameters
    ----------
    cells : Cells
        What the file says.
    columns : dict of str to Column
        The columns that are allowed.

    Returns
    -------
    Columns
        Arrays in the order of `columns`.

    Raises
    ------
    HurstfitError
        Where a column is unknown or missing, a unit is wrong, or a cell is blank or not of its kind.
    """
    names = [name for name in columns if not name.startswith("row")]
    for name in cells.columns:
        if name not in columns:
            near = did_you_mean(name, names)
            refuse(cells.path, f"unknown column {show(name)}{near}; allowed are {', '.join(names)}")
    for name, column in columns.items():
        if column.required and name not in cells.columns:
            required = ", ".join(other for other in names if columns[other].required)
            refuse(cells.path, f"the column '{name}' is missing; the columns {required} are needed")
        _check_unit(cells, name, column)
    read = {"text": _texts, "number": _numbers, "count": _numbers, "flag": _flags}
    present = {name: column for name, column in columns.items() if name in cells.columns}
    return Columns(cells, {name: read[column.kind](cells, name, column) for name, column in present.items()})


def _check_unit(cells: Cells, name: str, column: Column) -> None:
    found = cells.units.get(name)
    if found is None or found == "" or found in column.units:
        return
    from astropy import units

    allowed = [units.dimensionless_unscaled, *(units.Unit(text) for text in column.units)]
    try:
        unit = units.Unit(found, parse_strict="raise")
    except Exception:
        # The unit parser raises more than its documentation says, such as OverflowError for 10**999999.
        unit = None
    # Compared by type too: dex equals a dimensionless number to astropy only in name.
    if unit is None or not any(type(unit) is type(other) and unit == other for other in allowed):
        words = " or ".join([*column.units, "none"]) if column.units else "none, since it is a plain column"
        refuse(cells.path, f"found the unit {show(found)}; allowed is {words}", column=name)


def _refuse_first(cells: Cells, name: str, column: Column, is_bad: Callable[[str], bool]) -> None:
    """Refuse the first cell that `is_bad`; called only where one is known to be."""
    for i, cell in enumerate(cells.columns[name]):
        if is_bad(cell):
            if not cell:
                found = "the cell is blank"
            elif re.fullmatch(r"[+-]?\d+,\d*", cell):
                found = f"found {show(cell)} with a decimal comma where a decimal point is needed"
            else:
                found = f"found {show(cell)}"
            refuse(cells.path, f"{found}; allowed is {column.allowed}", row=i + 1, column=name)


def _is_number(cell: str) -> bool:
    # Python reads 1_000 and digits of any script as numbers; in a table they are slips.
    if "_" in cell or not cell.isascii():
        return False
    try:
        float(cell)
    except ValueError:
        return False
    return True


def _numbers(cells: Cells, name: str, column: Column) -> NDArray:
    texts = cells.columns[name]
    joined = "".join(texts)
    try:
        if "_" in joined or not joined.isascii():
            raise ValueError
        return np.array([float(text) for text in texts], float)
    except ValueError:
        _refuse_first(cells, name, column, lambda cell: not _is_number(cell))
        raise


def _flags(cells: Cells, name: str, column: Column) -> NDArray:
    lower = [text.lower() for text in cells.columns[name]]
    if not set(lower) <= {"true", "false"}:
        _refuse_first(cells, name, column, lambda cell: cell.lower() not in ("true", "false"))
    return np.array([text == "true" for text in lower], bool)


def _texts(cells: Cells, name: str, column: Column) -> NDArray:
    texts = cells.columns[name]
    distinct = set(texts)
    if column.required and "" in distinct:
        _refuse_first(cells, name, column, lambda cell: not cell)
    if not all(text.isprintable() and len(text) <= column.longest for text in distinct):
        _refuse_first(cells, name, column, lambda cell: not cell.isprintable() or len(cell) > column.longest)
    return np.array(texts, str)


def check(columns: Columns) -> None:
    """Run all checks; raise HurstfitError at the first mistake."""
    for one in CHECKS:
        one(columns)


def _finite(columns: Columns) -> None:
    for name, values in columns.arrays.items():
        if values.dtype.kind == "f":
            columns.refuse_where(~np.isfinite(values), name, "a finite number")


def _study_names(columns: Columns) -> None:
    # A study is named in keys of a configuration, such as [selection.Larkspur-Deep], and in paths within a run file.
    if re.search(r"[\[\]/]", "".join(set(columns.cells.columns["study"]))):
        bad = np.array([re.search(r"[\[\]/]", name) is not None for name in columns.cells.columns["study"]])
        columns.refuse_where(bad, "study", "a name without [ ] and /")
    columns.refuse_where(np.char.startswith(columns["study"], "#"), "study", "a name that does not start with #")


def _ranges(columns: Columns) -> None:
    columns.refuse_where(columns["z_lo"] < 0.0, "z_lo", "a redshift of 0 or more")
    for name in ("logm_lo", "logm_hi"):
        # A mass of 3e10 written without its logarithm is the slip that this catches.
        columns.refuse_where((columns[name] < 0.0) | (columns[name] > 20.0), name, COLUMNS[name].allowed)
    for stem in ("z", "logm"):
        lo, hi = f"{stem}_lo", f"{stem}_hi"
        reversed_ = columns[lo] >= columns[hi]
        if reversed_.any():
            cell = columns.cells.columns[lo][int(reversed_.argmax())]
            columns.refuse_where(reversed_, hi, f"a number above {lo}, which is {show(cell)}")


def _counts(columns: Columns) -> None:
    for name, least in (("n_total", 1), ("n_quiescent", 0)):
        n = columns[name]
        bad = (n < least) | (n != np.floor(n)) | (n > _MAX_COUNT)
        columns.refuse_where(bad, name, f"a whole number of {least} or more (and at most 2^53)")
    more = columns["n_quiescent"] > columns["n_total"]
    if more.any():
        cell = columns.cells.columns["n_total"][int(more.argmax())]
        columns.refuse_where(more, "n_quiescent", f"a whole number from 0 to n_total, which is {show(cell)}")


def _row_numbers(columns: Columns) -> None:
    if "row" in columns.arrays:
        rows = columns["row"]
        columns.refuse_where((rows < 1) | (rows != np.floor(rows)) | (rows > _MAX_COUNT), "row", ROW["row"].allowed)


def _duplicates(columns: Columns) -> None:
    keys = [columns.study_codes(), *(columns[name] for name in ("z_lo", "z_hi", "logm_lo", "logm_hi"))]
    order = np.lexsort(keys[::-1])
    same = np.logical_and.reduce([key[order][1:] == key[order][:-1] for key in keys])
    if same.any():
        # lexsort is stable, so equal rows stay in the order of the file.
        first = int(same.argmax())
        _refuse_pair(columns, int(order[first]), int(order[first + 1]), "are the same bin")


def _overlaps(columns: Columns) -> None:
    edges = (np.round(columns[name], _EDGE_DECIMALS) for name in ("z_lo", "z_hi", "logm_lo", "logm_hi"))
    pair = first_overlap(columns.study_codes(), *edges)
    if pair is not None:
        i, j = pair
        _refuse_pair(columns, i, j, "overlap in redshift and in stellar mass")


def _refuse_pair(columns: Columns, i: int, j: int, what: str) -> None:
    i, j = sorted((i, j))
    cells = columns.cells.columns

    def bin_text(k: int) -> str:
        return f"z {cells['z_lo'][k]}-{cells['z_hi'][k]}, logm {cells['logm_lo'][k]}-{cells['logm_hi'][k]}"

    refuse(
        columns.cells.path,
        f"rows {i + 1} ({bin_text(i)}) and {j + 1} ({bin_text(j)}) of the study {show(cells['study'][i])} {what}, "
        f"which would count the same galaxies twice; allowed are bins of one study that do not overlap",
    )


def first_overlap(group: NDArray, x_lo: NDArray, x_hi: NDArray, y_lo: NDArray, y_hi: NDArray) -> tuple[int, int] | None:
    """Find two rectangles of the same group that share an area.

    A sweep along x: the rectangles under the sweep line are kept in order of y, and as long as none overlap, a new one
    can only overlap its neighbours there, so that n rectangles take n log n steps.

    Parameters
    ----------
    group : ndarray of int, shape (n,)
        Group of each rectangle.
    x_lo, x_hi, y_lo, y_hi : ndarray, shape (n,)
        Edges.  Rectangles without area are passed over.

    Returns
    -------
    tuple of int, or None
        Indices of one such pair.
    """
    solid = np.flatnonzero((x_lo < x_hi) & (y_lo < y_hi))
    n = solid.size
    index = np.concatenate([solid, solid])
    starts = np.repeat([True, False], n)
    x = np.concatenate([x_lo[solid], x_hi[solid]])
    # At one x the ends come first, in falling order of y, and the starts in rising order: a list is quick at its tail.
    y = np.where(starts, y_lo[index], -y_lo[index])
    order = np.lexsort([y, starts, x, group[index]])
    low, high = y_lo.tolist(), y_hi.tolist()
    bottoms: list[float] = []
    under: list[int] = []
    for i, start in zip(index[order].tolist(), starts[order].tolist(), strict=True):
        k = bisect_left(bottoms, low[i])
        if not start:
            del bottoms[k], under[k]
            continue
        if k < len(under) and bottoms[k] < high[i]:
            return i, under[k]
        if k > 0 and high[under[k - 1]] > low[i]:
            return i, under[k - 1]
        bottoms.insert(k, low[i])
        under.insert(k, i)
    return None


CHECKS: tuple[Callable[[Columns], None], ...] = (_finite, _study_names, _ranges, _counts, _row_numbers, _duplicates, _overlaps)
