"""What a row must be to count as a measurement.

`COLUMNS` says which columns there are and what a cell of each may hold.  `parse` turns strings into arrays by that
list; the functions in `CHECKS` then look at whole columns, each for one kind of mistake, and refuse the first row that
has it.  Which cells of a row belong together is a matter of its form (:mod:`hurstfit.measurements.forms`).
"""

from __future__ import annotations

import re
from bisect import bisect_left
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from hurstfit.measurements.cells import refuse, show
from hurstfit.measurements.columns import COLUMNS, MAX_COUNT, ROW, Columns
from hurstfit.measurements.forms import check_forms

__all__ = ["CHECKS", "check"]

# Edges that agree to this many decimals are the same edge: 0.1 + 0.2 does not overlap a bin that starts at 0.3.
_EDGE_DECIMALS = 9


def check(columns: Columns) -> None:
    """Run all checks; raise HurstfitError at the first mistake."""
    for one in CHECKS:
        one(columns)


def _finite(columns: Columns) -> None:
    for name, values in columns.arrays.items():
        if values.dtype.kind == "f" and not np.isfinite(values).all():
            columns.refuse_where(~np.isfinite(values) & ~columns.blank(name), name, "a finite number")


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
        allowed = COLUMNS[columns.written_as(name)].allowed
        columns.refuse_where(~((columns[name] >= 0.0) & (columns[name] <= 20.0)), name, allowed)
    for stem in ("z", "logm"):
        lo, hi = f"{stem}_lo", f"{stem}_hi"
        reversed_ = columns[lo] >= columns[hi]
        if reversed_.any():
            cell = columns.cell(lo, int(reversed_.argmax()))
            columns.refuse_where(reversed_, hi, f"a number above {columns.written_as(lo)}, which is {show(cell)}")


def _counts(columns: Columns) -> None:
    for name, least in (("n_total", 1), ("n_quiescent", 0)):
        if name not in columns.arrays:
            continue
        n = columns[name]
        bad = ((n < least) | (n != np.floor(n)) | (n > MAX_COUNT)) & ~np.isnan(n)
        columns.refuse_where(bad, name, f"a whole number of {least} or more (and at most 2^53)")
    if "n_total" not in columns.arrays or "n_quiescent" not in columns.arrays:
        return
    more = columns["n_quiescent"] > columns["n_total"]
    if more.any():
        cell = columns.cell("n_total", int(more.argmax()))
        columns.refuse_where(more, "n_quiescent", f"a whole number from 0 to n_total, which is {show(cell)}")


def _row_numbers(columns: Columns) -> None:
    if "row" in columns.arrays:
        rows = columns["row"]
        columns.refuse_where((rows < 1) | (rows != np.floor(rows)) | (rows > MAX_COUNT), "row", ROW["row"].allowed)


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
        mass = columns.written_as("logm_lo").removesuffix("_lo")
        return f"z {cells['z_lo'][k]}-{cells['z_hi'][k]}, {mass} {columns.cell('logm_lo', k)}-{columns.cell('logm_hi', k)}"

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


CHECKS: tuple[Callable[[Columns], None], ...] = (
    _finite, _study_names, _ranges, _counts, check_forms, _row_numbers, _duplicates, _overlaps,
)  # fmt: skip
