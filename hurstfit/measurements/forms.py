"""Which cells of a row belong together, and which contradict each other.

A row is a measurement in one of these forms, and its other cells are blank:

* ``n_total`` and ``n_quiescent``: counts;
* ``fraction`` and ``n_total``;
* ``fraction`` and ``n_effective``: weighted counts, with ``n_total`` or without;
* ``fraction`` and ``fraction_err``, or ``fraction_lo`` and ``fraction_hi``, at the level ``interval``, with ``n_total`` or
  without;
* ``fraction``, ``limit`` and ``confidence``, with ``n_total`` or without.

Nothing is guessed: a row that fits none, or two, is refused.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from hurstfit.measurements.cells import show
from hurstfit.measurements.columns import COLUMNS, LEVEL, Columns, table_level
from hurstfit.measurements.effective import LARGEST_MISFIT, EffectiveCounts, effective_counts, forms_of

__all__ = ["check_forms", "read_effective"]

#: Narrowest half-width of an interval: below, the effective counts leave the range of whole numbers in floating point.
NARROWEST = 1e-7
_BARS = ("fraction_err", "fraction_lo", "fraction_hi")
_WAYS = "fraction_err, or fraction_lo and fraction_hi, or n_total, or n_effective, or limit and confidence"


def check_forms(columns: Columns) -> None:
    """Refuse the first row that is in no form or in two, or whose numbers contradict each other."""
    for name in ("fraction", *_BARS, "interval", "limit", "confidence", "n_effective"):
        _check_range(columns, name)
    filled = {name: columns.filled(name) for name in COLUMNS if COLUMNS[name].blank and name != "note"}
    _check_counts(columns, filled)
    _check_fractions(columns, filled)
    _check_values(columns)


def _check_range(columns: Columns, name: str) -> None:
    if name not in columns.arrays:
        return
    values, allowed = columns[name], COLUMNS[name].allowed
    if name == "limit":
        columns.refuse_where(~np.isin(np.char.lower(values), ["", "upper", "lower"]), name, allowed)
        return
    bad: NDArray[np.bool_]
    if name in ("interval", "confidence"):
        bad = (values < 0.5) | (values > 0.9999)
    elif name == "n_effective":
        bad = (values <= 0) | (values > 2.0**53)
    else:
        bad = (values < (NARROWEST if name == "fraction_err" else 0.0)) | (values > 1)
    columns.refuse_where(bad, name, allowed)


def _check_counts(columns: Columns, filled: dict[str, NDArray[np.bool_]]) -> None:
    """Rows that count, and rows that are not even that."""
    n, k, fraction = filled["n_total"], filled["n_quiescent"], filled["fraction"]
    others = ("fraction", *_BARS, "interval", "limit", "confidence", "n_effective")
    for name in others:
        columns.refuse_where(k & filled[name], name, "a blank cell beside n_quiescent: counts, or a fraction, but not both")
    instead = "" if "fraction" not in columns.arrays else f" (or a fraction with {_WAYS})"
    columns.refuse_where(~n & (k | ~fraction), "n_total", f"a whole number of 1 or more{instead}")
    columns.refuse_where(n & ~k & ~fraction, "n_quiescent", "a whole number from 0 to n_total (or a fraction in its place)")


def _check_fractions(columns: Columns, filled: dict[str, NDArray[np.bool_]]) -> None:
    """Rows that quote a fraction: which cells may stand beside each other."""
    limit, error = filled["limit"], filled["fraction_err"]
    lo, hi = filled["fraction_lo"], filled["fraction_hi"]
    for name in (*_BARS, "interval", "n_effective"):
        columns.refuse_where(limit & filled[name], name, "a blank cell beside a limit, which has only a confidence")
    if np.isnan(table_level(columns.cells, "confidence")):
        columns.refuse_where(
            limit & ~filled["confidence"], "confidence", f"{LEVEL}: a limit means nothing without its confidence"
        )
    columns.refuse_where(
        filled["confidence"] & ~limit, "confidence", "a blank cell where there is no limit (the level of an error is 'interval')"
    )
    for name, ends in (("fraction_lo", lo), ("fraction_hi", hi)):
        columns.refuse_where(
            error & ends, name, "a blank cell beside fraction_err: a symmetric error or an interval, but not both"
        )
    columns.refuse_where(hi & ~lo, "fraction_lo", f"{COLUMNS['fraction_lo'].allowed}, beside fraction_hi")
    columns.refuse_where(lo & ~hi, "fraction_hi", f"{COLUMNS['fraction_hi'].allowed}, beside fraction_lo")
    for name in _BARS:
        columns.refuse_where(
            filled["n_effective"] & filled[name], name, "a blank cell beside n_effective, which stands for the error"
        )
    columns.refuse_where(filled["interval"] & ~(error | lo), "interval", "a blank cell where there is no error and no interval")
    known = filled["n_total"] | filled["n_effective"] | error | lo | limit
    columns.refuse_where(filled["fraction"] & ~known, "fraction", f"a fraction with {_WAYS}")


def _check_values(columns: Columns) -> None:
    """Numbers of one row that must be in order."""
    if {"fraction_lo", "fraction_hi"} <= set(columns.arrays):
        fraction, lo, hi = (columns[name] for name in ("fraction", "fraction_lo", "fraction_hi"))
        hint = "the ends of the interval, not the lengths of its two halves"
        for name, outside in (("fraction_lo", lo > fraction), ("fraction_hi", hi < fraction)):
            if outside.any():
                cell = show(columns.cell("fraction", int(outside.argmax())))
                words = f"{COLUMNS[name].allowed}, which is {cell} ({hint})"
                columns.refuse_where(outside, name, words)
        columns.refuse_where((lo == fraction) & (fraction > 0), "fraction_lo", "an end below the fraction: no error is zero")
        columns.refuse_where((hi == fraction) & (fraction < 1), "fraction_hi", "an end above the fraction: no error is zero")
        columns.refuse_where(hi - lo < 2 * NARROWEST, "fraction_hi", f"an end at least {2 * NARROWEST:g} above fraction_lo")
    if "limit" in columns.arrays:
        side, limit = np.char.lower(columns["limit"]), columns["fraction"]
        columns.refuse_where((side == "upper") & (limit < NARROWEST), "fraction", f"an upper limit of {NARROWEST:g} or more")
        columns.refuse_where((side == "lower") & (limit > 1 - NARROWEST), "fraction", f"a lower limit below 1 - {NARROWEST:g}")
    if "n_effective" in columns.arrays and "n_total" in columns.arrays:
        more = columns["n_effective"] > columns["n_total"]
        if more.any():
            cell = show(columns.cell("n_total", int(more.argmax())))
            columns.refuse_where(more, "n_effective", f"a number above 0 and at most n_total, which is {cell}: weights only lose")


def _with_table_levels(columns: Columns) -> dict[str, NDArray]:
    """Arrays in which rows that state no level have that of the table's metadata."""
    arrays = dict(columns.arrays)
    form = forms_of(arrays)
    for name, needed in (("interval", ("error", "interval")), ("confidence", ("upper", "lower"))):
        level, rows = table_level(columns.cells, name), np.isin(form, needed)
        if not np.isnan(level) and rows.any():
            own = arrays.get(name, np.full(form.size, np.nan))
            arrays[name] = np.where(rows & np.isnan(own), level, own)
    return arrays


def _check_effective(columns: Columns, effective: EffectiveCounts) -> None:
    """Refuse the first row that claims more than its N allows, or that no effective counts describe."""
    form = effective.form
    for key, name in (("error", "fraction_err"), ("interval", "fraction_lo"), ("upper", "fraction"), ("lower", "fraction")):
        bad = (form == key) & effective.too_small
        if bad.any():
            i = int(bad.argmax())
            n, f = columns["n_total"][i], effective.fraction[i]
            if key in ("upper", "lower"):
                allowed = f"a limit that {n:.0f} galaxies (n_total) can set: it is tighter than none of them would make it"
            else:
                level, sd, half = effective.level[i], np.sqrt(f * (1 - f) / n), (effective.hi - effective.lo)[i] / 2
                allowed = (
                    f"an error that n_total = {n:.0f} galaxies can have: counting alone makes a standard deviation of {sd:.3g}, "
                    f"and a half-width of {ndtri((1 + level) / 2) * sd:.3g} at {100 * level:g} %, not {half:.3g}"
                )
            columns.refuse_where(bad, name, allowed)
    for key in ("upper", "lower"):
        weak = (form == key) & (effective.m < 0)
        if weak.any():
            c = effective.level[int(weak.argmax())]
            needed = f"at most its confidence, {c:g}" if key == "upper" else f"at least 1 - confidence, {1 - c:.6g}"
            columns.refuse_where(weak, "fraction", f"{needed}: a weaker {key} limit excludes less than a flat prior does")
    for key, name in (("error", "fraction_err"), ("interval", "fraction_lo")):
        bad = (form == key) & ~effective.counted & (effective.misfit > LARGEST_MISFIT)
        if bad.any():
            i = int(bad.argmax())
            allowed = (
                f"an interval that some count could have: {effective.lo[i]:.4g} to {effective.hi[i]:.4g} is missed by the "
                f"closest, {effective.beta_lo[i]:.4g} to {effective.beta_hi[i]:.4g}, by more than half its half-width; "
                "give counts, or an upper or lower limit"
            )
            columns.refuse_where(bad, name, allowed)


def read_effective(columns: Columns) -> tuple[dict[str, NDArray], EffectiveCounts]:
    """Arrays with all levels filled in, and the effective counts of every row, checked."""
    arrays = _with_table_levels(columns)
    effective = effective_counts(arrays)
    _check_effective(columns, effective)
    return arrays, effective
