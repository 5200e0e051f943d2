"""Priors as users write them: from a number or a small table in TOML to a distribution, or to the sentence that says why not."""

from __future__ import annotations

import math
import numbers
import reprlib
from collections.abc import Callable
from dataclasses import dataclass
from typing import NoReturn

from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.priors import (
    BETA_MAX,
    BETA_MIN,
    LEAST_MASS,
    Beta,
    Fixed,
    LogNormal,
    Prior,
    TruncatedBeta,
    TruncatedNormal,
    Uniform,
    range_text,
)

__all__ = ["parse_prior"]


def parse_prior(spec: object, *, where: str, lo: float, hi: float, lo_open: bool = False) -> Prior:
    """Turn what a TOML file says about one number into a prior.

    Parameters
    ----------
    spec : object
        A number (a fixed value) or a table of exactly one form: ``{uniform = [a, b]}``, ``{beta = [a, b]}``,
        ``{mean = m, sd = s}``, ``{normal = [mean, sd]}`` with an optional ``between = [a, b]``,
        ``{lognormal = [median, sigma]}`` or ``{validation = [j, m]}`` (j of m objects, under a flat prior).
    where : str
        What an error sentence starts with, such as ``demo.toml, [selection.Larkspur-Deep] contamination``.
    lo, hi : float
        Range that the number can have at all; a prior that reaches beyond is refused.  `mean` and `validation` need
        0..1, `lognormal` needs 0..infinity, and `beta` a range that meets 0..1, to which it is cut.
    lo_open : bool
        Whether a fixed value at `lo` itself is refused.

    Returns
    -------
    Prior
        The prior.

    Raises
    ------
    HurstfitError
        Where `spec` is anything else.
    """
    return _Entry(where, lo, hi, lo_open).parse(spec)


@dataclass(frozen=True)
class _Entry:
    """One entry of a configuration: its name and the range of its number."""

    where: str
    lo: float
    hi: float
    lo_open: bool

    def parse(self, spec: object) -> Prior:
        if not isinstance(spec, dict):
            return self._fixed(self._number(spec, "", or_else=f"; allowed: {self._allowed()}"))
        keys = [str(key) for key in spec]
        known = [*_FORMS, *(extra for form in _FORMS.values() for extra in form.extras)]
        for key in keys:
            if key not in known:
                self._refuse(f"unknown key {_show(key)}{did_you_mean(key, known)}; allowed: {self._allowed()}")
        found = " and ".join(f"'{key}'" for key in keys) if keys else "an empty table"
        heads = [key for key in keys if key in _FORMS]
        if len(heads) != 1:
            self._refuse(f"found {found}; allowed is exactly one of: {self._allowed()}")
        form = _FORMS[heads[0]]
        for key in keys:
            if key != heads[0] and key not in form.extras:
                self._refuse(f"found '{key}' beside '{heads[0]}'; allowed is exactly one of: {self._allowed()}")
        if not form.usable(self.lo, self.hi):
            self._refuse(
                f"'{heads[0]}' does not suit a number that can lie {self._range()} (it needs {form.needs}); "
                f"allowed: {self._allowed()}"
            )
        return form.build(self, {str(key): value for key, value in spec.items()})

    def _fixed(self, value: float) -> Prior:
        if not self.lo <= value <= self.hi or (self.lo_open and value == self.lo):
            self._refuse(f"found {value:.6g}; allowed is a number {self._range()}")
        return Fixed(value)

    def _uniform(self, spec: dict[str, object]) -> Prior:
        a, b = self._limits(spec["uniform"], "uniform")
        if not math.isfinite(b - a):
            self._refuse(f"uniform = [{a:.6g}, {b:.6g}] is too wide to compute with; allowed is a finite width")
        return Uniform(a, b)

    def _beta(self, spec: dict[str, object]) -> Prior:
        a, b = self._pair(spec["beta"], "beta", "[a, b]")
        if min(a, b) < BETA_MIN or max(a, b) > BETA_MAX:
            self._refuse(f"found beta = [{a:.6g}, {b:.6g}]; allowed are two numbers from {BETA_MIN:g} to {BETA_MAX:g}")
        lo, hi = max(self.lo, 0.0), min(self.hi, 1.0)
        if (lo, hi) == (0.0, 1.0):
            return Beta(a, b)
        try:
            return TruncatedBeta(a, b, lo, hi)
        except ValueError:
            self._refuse(
                f"beta = [{a:.6g}, {b:.6g}] has next to no probability in {range_text(lo, hi)}; "
                f"allowed is one that keeps more than {LEAST_MASS:g} of it"
            )

    def _mean_sd(self, spec: dict[str, object]) -> Prior:
        if "sd" not in spec:
            self._refuse("found 'mean' without 'sd'; allowed: {mean = m, sd = s}")
        mean, sd = self._number(spec["mean"], "mean"), self._number(spec["sd"], "sd")
        if not 0.0 < mean < 1.0:
            self._refuse(f"found mean = {mean:.6g}; allowed is a number between 0 and 1, ends excluded")
        largest = math.sqrt(mean * (1.0 - mean))
        if not 0.0 < sd < largest:
            self._refuse(f"found sd = {sd:.6g}; with mean = {mean:.6g} allowed is a number above 0 and below {largest:.4g}")
        k = mean * (1.0 - mean) / sd / sd - 1.0
        a, b = mean * k, (1.0 - mean) * k
        if min(a, b) < BETA_MIN or max(a, b) > BETA_MAX:
            self._refuse(
                f"mean = {mean:.6g} with sd = {sd:.6g} matches Beta({a:.4g}, {b:.4g}); allowed are parameters from "
                f"{BETA_MIN:g} to {BETA_MAX:g} (for a smaller sd, fix the value)"
            )
        return Beta(a, b)

    def _normal(self, spec: dict[str, object]) -> Prior:
        centre, spread = self._pair(spec["normal"], "normal", "[mean, sd]")
        if not spread > 0.0:
            self._refuse(f"found the sd {spread:.6g} in normal = [mean, sd]; allowed is a number above 0")
        a, b = self._limits(spec["between"], "between") if "between" in spec else (self.lo, self.hi)
        try:
            return TruncatedNormal(centre, spread, a, b)
        except ValueError:
            self._refuse(
                f"normal = [{centre:.6g}, {spread:.6g}] has next to no probability in {range_text(a, b)}; "
                f"allowed is one that keeps more than {LEAST_MASS:g} of it"
            )

    def _lognormal(self, spec: dict[str, object]) -> Prior:
        median, sigma = self._pair(spec["lognormal"], "lognormal", "[median, sigma]")
        if not (median > 0.0 and sigma > 0.0):
            self._refuse(f"found lognormal = [{median:.6g}, {sigma:.6g}]; allowed are a median and a sigma above 0")
        try:
            return LogNormal(median, sigma)
        except ValueError:
            self._refuse(
                f"lognormal = [{median:.6g}, {sigma:.6g}] is too wide to compute with; "
                f"allowed is |ln(median)| + 38.5 sigma below 700"
            )

    def _validation(self, spec: dict[str, object]) -> Prior:
        j, m = self._pair(spec["validation"], "validation", "[j, m]")
        if not (j.is_integer() and m.is_integer() and 0 <= j <= m and 0 < m <= BETA_MAX / 2):
            self._refuse(
                f"found validation = [{j:.10g}, {m:.10g}]; allowed are two whole numbers, j of m objects, "
                f"with 0 <= j <= m and m from 1 to {BETA_MAX / 2:g}"
            )
        return Beta(j + 1.0, m - j + 1.0)

    def _limits(self, value: object, key: str) -> tuple[float, float]:
        a, b = self._pair(value, key, "[a, b]")
        if not a < b:
            self._refuse(f"found {key} = [{a:.6g}, {b:.6g}]; allowed is a pair in rising order")
        if not (self.lo <= a and b <= self.hi):
            self._refuse(f"found {key} = [{a:.6g}, {b:.6g}]; allowed are limits {self._range()}")
        return a, b

    def _pair(self, value: object, key: str, shape: str) -> tuple[float, float]:
        if not isinstance(value, list | tuple) or len(value) != 2:
            self._refuse(f"found {key} = {_show(value)}; allowed is a list of two numbers, {key} = {shape}")
        return self._number(value[0], key), self._number(value[1], key)

    def _number(self, value: object, key: str, or_else: str = "; allowed is a finite number") -> float:
        # bool is a Real to Python; a user who writes true did not mean 1.
        if isinstance(value, numbers.Real) and not isinstance(value, bool):
            try:
                number = float(value)
            except OverflowError:
                number = math.inf
            if math.isfinite(number):
                return number
        inside = f" in '{key}'" if key else ""
        self._refuse(f"found {_show(value)}{inside}{or_else}")

    def _range(self) -> str:
        return _range_words(self.lo, self.hi, self.lo_open)

    def _allowed(self) -> str:
        forms = (form.example for form in _FORMS.values() if form.usable(self.lo, self.hi))
        return ", ".join([f"a number {self._range()}", *forms])

    def _refuse(self, what: str) -> NoReturn:
        # `from None`: where a ValueError led here, it says no more than the sentence.
        raise HurstfitError(f"{self.where}: {what}") from None


@dataclass(frozen=True)
class _Form:
    """One way of writing a prior as a table."""

    example: str
    build: Callable[[_Entry, dict[str, object]], Prior]
    extras: tuple[str, ...] = ()
    needs: str = ""
    usable: Callable[[float, float], bool] = lambda lo, hi: True


def _is_unit(lo: float, hi: float) -> bool:
    return lo == 0.0 and hi == 1.0


# By the key that tells the form.
_FORMS = {
    "uniform": _Form("{uniform = [a, b]}", _Entry._uniform),
    "beta": _Form(
        "{beta = [a, b]}",
        _Entry._beta,
        needs="a range that meets 0 to 1",
        usable=lambda lo, hi: lo < 1.0 and hi > 0.0,
    ),
    "mean": _Form("{mean = m, sd = s}", _Entry._mean_sd, ("sd",), "the range 0 to 1", _is_unit),
    "normal": _Form("{normal = [mean, sd]} (may add between = [a, b])", _Entry._normal, ("between",)),
    "lognormal": _Form(
        "{lognormal = [median, sigma]}",
        _Entry._lognormal,
        needs="a range from 0 without upper end",
        usable=lambda lo, hi: lo == 0.0 and hi == math.inf,
    ),
    "validation": _Form("{validation = [j, m]}", _Entry._validation, (), "the range 0 to 1", _is_unit),
}


def _range_words(lo: float, hi: float, lo_open: bool) -> str:
    """Long form for a sentence: ``from 0 to 1``, ``above 0``, ``of 0 or more``."""
    if math.isinf(lo) and math.isinf(hi):
        return "of any size"
    if math.isinf(lo):
        return f"of {hi:.6g} or less"
    if math.isinf(hi):
        return f"above {lo:.6g}" if lo_open else f"of {lo:.6g} or more"
    return f"above {lo:.6g} and up to {hi:.6g}" if lo_open else f"from {lo:.6g} to {hi:.6g}"


def _show(value: object) -> str:
    """Say what was found, on one line, briefly, and as the file writes it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a table"
    try:
        return reprlib.repr(value).replace("\n", " ")
    except ValueError:  # Python refuses to write out a whole number of thousands of digits
        return "a number beyond all measure"
