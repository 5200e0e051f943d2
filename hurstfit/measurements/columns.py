"""The columns that a table may have, and from their strings to arrays.

`COLUMNS` says what a cell of each may hold; `parse` turns strings into arrays by that list.  Blank cells of columns that not
every form of a row uses become nan, or stay empty texts.  Masses in a unit of mass become log10 of solar masses here.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import did_you_mean
from hurstfit.measurements.cells import Cells, refuse, show

__all__ = ["COLUMNS", "MAX_COUNT", "ROW", "Column", "Columns", "parse", "table_level"]

# Above this, neighbouring whole numbers are no longer told apart in floating point.
MAX_COUNT = 2**53


@dataclass(frozen=True)
class Column:
    """What a column holds: ``text``, ``number``, ``count`` or ``flag``; whether the table needs it, and every cell of it."""

    kind: str
    allowed: str
    required: bool = True
    units: tuple[str, ...] = ()
    longest: int = 0
    blank: bool = False


def _optional(kind: str, allowed: str) -> Column:
    return Column(kind, allowed, required=False, longest=100, blank=True)


_LOGM = Column("number", "log10 of the stellar mass in solar masses, from 0 to 20", units=("dex(solMass)", "dex"))
_MASS = Column("number", "a stellar mass from 1 to 10^20 solar masses", required=False)
LEVEL = "a probability from 0.5 to 0.9999, such as 0.68 (not a percentage)"

COLUMNS = {
    "study": Column("text", "a name of at most 100 printable characters", longest=100),
    "z_lo": Column("number", "a redshift of 0 or more"),
    "z_hi": Column("number", "a redshift above z_lo"),
    "logm_lo": _LOGM,
    "logm_hi": _LOGM,
    "mass_lo": _MASS,
    "mass_hi": _MASS,
    "n_total": _optional("count", "a whole number of 1 or more"),
    "n_quiescent": _optional("count", "a whole number from 0 to n_total"),
    "n_effective": _optional("number", "a number above 0"),
    "fraction": _optional("number", "a fraction from 0 to 1"),
    "fraction_err": _optional("number", "an error above 0 (from 1e-7) and at most 1"),
    "fraction_lo": _optional("number", "the lower end of the interval, from 0 to the fraction"),
    "fraction_hi": _optional("number", "the upper end of the interval, from the fraction to 1"),
    "interval": _optional("number", LEVEL),
    "limit": _optional("text", "upper or lower, or a blank cell"),
    "confidence": _optional("number", LEVEL),
    "rising": Column("flag", "true or false"),
    "note": Column("text", "a text of at most 500 printable characters", required=False, longest=500, blank=True),
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
    written : dict of str to str
        Name in the file of those columns that were computed from another one.
    """

    cells: Cells
    arrays: dict[str, NDArray]
    written: dict[str, str] = field(default_factory=dict)

    def __getitem__(self, name: str) -> NDArray:
        return self.arrays[name]

    def written_as(self, name: str) -> str:
        """Name of a column in the file."""
        return self.written.get(name, name)

    def cell(self, name: str, i: int) -> str:
        """Cell of a column as the file has it; blank where the file has no such column."""
        column = self.cells.columns.get(self.written_as(name))
        return column[i] if column is not None else ""

    def blank(self, name: str) -> NDArray[np.bool_]:
        """Whether each cell of a column is blank."""
        return np.array([cell == "" for cell in self.cells.columns[self.written_as(name)]], bool)

    def filled(self, name: str) -> NDArray[np.bool_]:
        """Whether each row has something in a column, which the file may lack."""
        if name not in self.arrays:
            return np.zeros(self.cells.n_rows, bool)
        values = self.arrays[name]
        return values != "" if values.dtype.kind == "U" else ~np.isnan(values)

    def refuse_where(self, bad: NDArray[np.bool_], name: str, allowed: str) -> None:
        """Refuse the first row where `bad` holds, quoting its cell."""
        if bad.any():
            i = int(bad.argmax())
            if cell := self.cell(name, i):
                found = f"found {show(cell)}"
            else:
                found = "the cell is blank" if self.written_as(name) in self.cells.columns else "the column is missing"
            refuse(self.cells.path, f"{found}; allowed is {allowed}", row=i + 1, column=self.written_as(name))

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
    masses = "mass_lo" in cells.columns or "mass_hi" in cells.columns
    if masses:
        columns = _with_masses(cells, columns)
    for name, column in columns.items():
        if column.required and name not in cells.columns:
            required = ", ".join(other for other in names if columns[other].required)
            refuse(cells.path, f"the column '{name}' is missing; the columns {required} are needed")
        _check_unit(cells, name, column)
    read = {"text": _texts, "number": _numbers, "count": _numbers, "flag": _flags}
    present = {name: column for name, column in columns.items() if name in cells.columns}
    arrays = {name: read[column.kind](cells, name, column) for name, column in present.items()}
    if not masses:
        return Columns(cells, arrays)
    for end in ("lo", "hi"):
        mass = arrays.pop(f"mass_{end}") * _solar_masses(cells, f"mass_{end}")
        # what is not a positive mass is refused later, with its row
        arrays[f"logm_{end}"] = np.log10(mass, where=mass > 0, out=np.full(mass.shape, -1.0))
    return Columns(cells, arrays, {"logm_lo": "mass_lo", "logm_hi": "mass_hi"})


def _with_masses(cells: Cells, columns: dict[str, Column]) -> dict[str, Column]:
    """Columns to look for where the file has masses instead of their logarithms."""
    for name in ("logm_lo", "logm_hi"):
        if name in cells.columns:
            refuse(cells.path, f"stands beside '{name.replace('logm', 'mass')}'; allowed is one of the two", column=name)
    for name in ("mass_lo", "mass_hi"):
        if name not in cells.columns:
            refuse(cells.path, f"the column '{name}' is missing; mass_lo and mass_hi go together")
    return {name: column for name, column in columns.items() if not name.startswith("logm")}


def _solar_masses(cells: Cells, name: str) -> float:
    """Solar masses in the unit of a column of masses."""
    from astropy import units

    found = cells.units.get(name, "")
    try:
        unit = units.Unit(found, parse_strict="raise")
        factor = float(unit.to(units.solMass)) if isinstance(unit, units.UnitBase) else np.nan
    except Exception:
        # The unit parser raises more than its documentation says, such as OverflowError for 10**999999.
        factor = np.nan
    if not 0 < factor < np.inf:
        words = f"found the unit {show(found)}" if found else "found no unit"
        refuse(cells.path, f"{words}; allowed is a unit of mass, such as solMass (or logm columns instead)", column=name)
    return factor


def table_level(cells: Cells, name: str) -> float:
    """Give the level of all rows that state none, from the metadata: ``interval`` or ``confidence``; nan where they do not."""
    value = cells.meta.get(name)
    if value is None:
        return np.nan
    try:
        level = float(value) if isinstance(value, int | float | str | np.number) and not isinstance(value, bool) else np.nan
    except ValueError:
        level = np.nan
    if not 0.5 <= level <= 0.9999:
        refuse(cells.path, f"the metadata give '{name}' as {show(value)}; allowed is {LEVEL}")
    return level


def _check_unit(cells: Cells, name: str, column: Column) -> None:
    found = cells.units.get(name)
    if found is None or found == "" or found in column.units or name.startswith("mass"):
        return  # masses are converted, and their units judged, when they are read
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
        if is_bad(cell) and not (column.blank and not cell):
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
        if column.blank:
            return np.array([float(text) if text else np.nan for text in texts], float)
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
    if not column.blank and "" in distinct:
        _refuse_first(cells, name, column, lambda cell: not cell)
    if not all(text.isprintable() and len(text) <= column.longest for text in distinct):
        _refuse_first(cells, name, column, lambda cell: not cell.isprintable() or len(cell) > column.longest)
    return np.array(texts, str)
