"""What each row says about its fraction: effective counts, whatever form the row has.

Every row enters the likelihood as a pair (x, m), 0 <= x <= m, in the kernel x log p + (m - x) log(1 - p).  A count is its
own pair; a fraction with its N, or with an effective N, has m = N and x = f N; an error bar becomes the pair whose Beta
distribution has the quoted interval (:mod:`hurstfit.measurements.beta_pair`); a limit is none, or all, of m.

Where an error bar comes with an N, the two are compared.  Errors that agree with the binomial of N say nothing more than N
does, and the pair is (f N, N).  Larger ones hold more than counting, such as the scatter between fields, and the pair is
that of the interval. Smaller ones cannot be.  "Agree" allows for rounding, of half a unit in the last digit that the row
quotes (not fewer than two decimals), and
for the recipes in use: the normal approximation, Wilson's (1927), Jeffreys' and the flat prior's (Brown, Cai & DasGupta
2001, Stat. Sci. 16, 101).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv, ndtri

from hurstfit.measurements.beta_pair import beta_interval, beta_pairs, limit_pairs

__all__ = ["DEFAULT_LEVEL", "FORMS", "LARGEST_MISFIT", "NOTABLE_MISFIT", "EffectiveCounts", "effective_counts", "forms_of"]

Array = NDArray[np.float64]

#: Probability inside an error bar unless the table says otherwise.
DEFAULT_LEVEL = 0.68
#: Misfit of a pair to its interval, in half-widths of the interval, from which a row is refused, and from which it is
#: remarked on.
LARGEST_MISFIT, NOTABLE_MISFIT = 0.5, 0.1
#: Forms of a row, and how they are called.
FORMS = {
    "counts": "counts",
    "share": "fraction and N",
    "weighted": "fraction and effective N",
    "error": "fraction and error",
    "interval": "fraction and interval",
    "upper": "upper limit",
    "lower": "lower limit",
}
#: Errors this much larger than binomial ones (relatively) still count as binomial.
SLACK = 0.02


@dataclass(frozen=True)
class EffectiveCounts:
    """Effective counts of many rows, and what they were made from.

    Attributes
    ----------
    form : ndarray of str, shape (bins,)
        Key of `FORMS`.
    fraction : ndarray, shape (bins,)
        Quoted fraction, n_quiescent / n_total, or limit.
    x, m : ndarray, shape (bins,)
        Effective number of quiescent galaxies and of all galaxies, 0 <= x <= m, not always whole.
    counted : ndarray of bool, shape (bins,)
        Whether the pair tells how many galaxies were counted and nothing else, so that scatter between fields is still to be
        added.
    level : ndarray, shape (bins,)
        Probability inside the quoted interval, or confidence of the limit; nan where there is none.
    stated : ndarray of bool, shape (bins,)
        Whether the row states its level.
    lo, hi : ndarray, shape (bins,)
        Quoted interval; nan where there is none.
    beta_lo, beta_hi : ndarray, shape (bins,)
        Interval of Beta(x + 1, m - x + 1) at the same level.
    misfit : ndarray, shape (bins,)
        Larger distance between the ends of the two intervals, in half-widths of the quoted one; 0 where none is quoted.
    too_small : ndarray of bool, shape (bins,)
        Whether the row claims to know more than the N that it states allows.
    """

    form: NDArray[np.str_]
    fraction: Array
    x: Array
    m: Array
    counted: NDArray[np.bool_]
    level: Array
    stated: NDArray[np.bool_]
    lo: Array
    hi: Array
    beta_lo: Array
    beta_hi: Array
    misfit: Array
    too_small: NDArray[np.bool_]

    @property
    def is_limit(self) -> NDArray[np.bool_]:
        """Whether each row is an upper or a lower limit."""
        return (self.form == "upper") | (self.form == "lower")

    @property
    def is_bar(self) -> NDArray[np.bool_]:
        """Whether each row quotes an error or an interval."""
        return (self.form == "error") | (self.form == "interval")

    def select(self, mask: NDArray[np.bool_]) -> EffectiveCounts:
        """Keep some of the rows."""
        return EffectiveCounts(*(getattr(self, f.name)[mask] for f in fields(self)))

    def drawn_interval(self, level: float = 0.6827) -> tuple[Array, Array]:
        """Give an interval to draw: the quoted one; Jeffreys' for counts; from 0, or up to 1, for limits.

        Returns
        -------
        lo, hi : ndarray, shape (bins,)
        """
        below, above = (1 - level) / 2, (1 + level) / 2
        lo = np.where(self.x > 0, betaincinv(self.x + 0.5, self.m - self.x + 0.5, below), 0.0)
        hi = np.where(self.x < self.m, betaincinv(self.x + 0.5, self.m - self.x + 0.5, above), 1.0)
        lo, hi = np.where(self.is_bar, self.lo, lo), np.where(self.is_bar, self.hi, hi)
        lo = np.where(self.is_limit, np.where(self.form == "upper", 0.0, self.fraction), lo)
        hi = np.where(self.is_limit, np.where(self.form == "upper", self.fraction, 1.0), hi)
        return np.clip(lo, 0.0, 1.0), np.clip(hi, 0.0, 1.0)


def forms_of(columns: Mapping[str, NDArray]) -> NDArray[np.str_]:
    """Tell the form of every row from the cells that it fills; which cells may stand together is checked elsewhere.

    Parameters
    ----------
    columns : mapping of str to ndarray, shape (rows,)
        Columns by name; blank cells are nan, or empty texts.

    Returns
    -------
    ndarray of str, shape (rows,)
        Keys of `FORMS`.
    """
    size = len(columns["z_lo"])

    def filled(name: str) -> NDArray[np.bool_]:
        return ~np.isnan(columns[name]) if name in columns else np.zeros(size, bool)

    limit = np.char.lower(columns["limit"]) if "limit" in columns else np.full(size, "")
    conditions = {
        "upper": limit == "upper",
        "lower": limit == "lower",
        "error": filled("fraction_err"),
        "interval": filled("fraction_lo") & filled("fraction_hi"),
        "weighted": filled("n_effective"),
        "share": filled("fraction"),
    }
    return np.select(list(conditions.values()), list(conditions), "counts")


def effective_counts(columns: Mapping[str, NDArray]) -> EffectiveCounts:
    """Turn every row into effective counts.

    Parameters
    ----------
    columns : mapping of str to ndarray, shape (rows,)
        Columns of a measurement table by name; blank cells are nan, or empty texts.

    Returns
    -------
    EffectiveCounts
        Rows that ought to be refused are told by `too_small`, `misfit` or a negative `m`.
    """
    size = len(columns["z_lo"])
    form = forms_of(columns)
    blank = np.full(size, np.nan)

    def column(name: str) -> Array:
        return np.asarray(columns.get(name, blank), float)

    n, k, n_effective = column("n_total"), column("n_quiescent"), column("n_effective")
    fraction = np.where(form == "counts", k / np.where(n > 0, n, np.nan), column("fraction"))
    m = np.where(form == "weighted", n_effective, n)
    # k itself, since k / n * n may miss it by rounding
    x = np.where(form == "counts", k, np.clip(fraction * m, 0.0, m))
    counted, too_small = np.ones(size, bool), np.zeros(size, bool)
    limit, bar = np.isin(form, ["upper", "lower"]), np.isin(form, ["error", "interval"])
    stated = np.where(limit, ~np.isnan(column("confidence")), bar & ~np.isnan(column("interval")))
    level = np.where(bar & ~stated, DEFAULT_LEVEL, np.where(limit, column("confidence"), column("interval")))
    error = column("fraction_err")
    lo = np.where(form == "error", fraction - error, column("fraction_lo"))
    hi = np.where(form == "error", fraction + error, column("fraction_hi"))
    unit = np.full(size, np.nan)
    if bar.any() or limit.any():
        quoted = [column(name) for name in ("fraction", "fraction_err", "fraction_lo", "fraction_hi")]
        unit = 0.5 * 10.0 ** -_decimals(quoted)
    if bar.any():
        i = np.flatnonzero(bar)
        pairs = beta_pairs(lo[i], hi[i], level[i])
        smallest, largest = _binomial_half_widths(fraction[i], n[i], level[i], unit[i], form[i] == "error")
        half, known = (hi - lo)[i] / 2, ~np.isnan(n[i])
        too_small[i] = known & (half + unit[i] < smallest * (1 - 1e-9))
        # the interval decides where it is wider than counting makes it, and where nothing else is known
        wider = ~known | ((half - unit[i] > largest * (1 + SLACK)) & (pairs.m < n[i]))
        counted[i] = ~wider
        x[i], m[i] = np.where(wider, pairs.x, x[i]), np.where(wider, pairs.m, m[i])
    if limit.any():
        i = np.flatnonzero(limit)
        upper = form[i] == "upper"
        x[i], m[i] = limit_pairs(fraction[i], level[i], upper)
        # not even the count of none in N excludes as much as this
        loosened = np.clip(np.where(upper, fraction[i] + unit[i], fraction[i] - unit[i]), 1e-300, 1.0)
        too_small[i] = limit_pairs(loosened, level[i], upper)[1] > n[i] * (1 + 1e-9)
        counted[i] = False
    beta_lo, beta_hi, misfit = blank.copy(), blank.copy(), np.zeros(size)
    i = np.flatnonzero(bar)
    beta_lo[i], beta_hi[i] = beta_interval(x[i], m[i], level[i])
    misfit[i] = np.maximum(np.abs(beta_lo - lo), np.abs(beta_hi - hi))[i] / ((hi - lo)[i] / 2)
    return EffectiveCounts(form, fraction, x, m, counted, level, stated, lo, hi, beta_lo, beta_hi, misfit, too_small)


def _decimals(quoted: list[Array]) -> Array:
    """Most decimals that any number of a row is written with: at least 2, since tables drop trailing zeros, at most 12."""
    result = np.full(quoted[0].shape, 2.0)
    for values in quoted:
        values = np.nan_to_num(values)
        for digits in range(2, 12):
            result = np.where(np.round(values, digits) != values, np.maximum(result, digits + 1), result)
    return result


def _binomial_half_widths(
    fraction: Array, n: Array, level: Array, unit: Array, symmetric: NDArray[np.bool_]
) -> tuple[Array, Array]:
    """Smallest and largest half-width of an interval for a fraction of n galaxies, over recipes and rounding.

    A symmetric error is read as the normal approximation, whose half-width is then the smallest; an interval may come from
    any recipe.
    """
    n = np.where(np.isnan(n), 1.0, n)
    z = ndtri((1 + level) / 2)
    normal, others = [], []
    for f in (np.clip(fraction - unit, 0, 1), fraction, np.clip(fraction + unit, 0, 1)):
        normal.append(z * np.sqrt(f * (1 - f) / n))
        others.append(z * np.sqrt(f * (1 - f) / n + (z / (2 * n)) ** 2) / (1 + z**2 / n))
        for prior in (0.5, 1.0):
            a, b = f * n + prior, (1 - f) * n + prior
            others.append((betaincinv(a, b, (1 + level) / 2) - betaincinv(a, b, (1 - level) / 2)) / 2)
    smallest = np.where(symmetric, np.min(normal, axis=0), np.min([*normal, *others], axis=0))
    return smallest, np.max([*normal, *others], axis=0)
