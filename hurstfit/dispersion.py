"""How much more than counting scatters: the intra-class correlation of the galaxies of one bin.

Galaxies of one field are alike, so that counts scatter by more than the binomial.  The correlation rho is given as a number,
or follows
from a field-to-field scatter sigma_f of the fraction, rho_1 = sigma_f^2 / (p (1 - p)) in one field, and rho = rho_1 / K for
a bin that sums K equal and independent fields.  p is the row's own fraction, x / m, kept 1 / (m + 2) away from 0 and 1, so
that rho is a constant of the row.

Only counts get it.  An error bar that is wider than counting, or that comes without an N, is taken to hold the scatter
already, and a limit likewise; they must not get it twice.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.measurements import Measurements
from hurstfit.prior_entries import parse_prior
from hurstfit.priors import Prior

__all__ = ["Dispersion", "parse_dispersion"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Dispersion:
    """Scatter beyond counting.

    Attributes
    ----------
    rho : float or Prior
        Intra-class correlation of the counts of every bin, 0 for the binomial, or the prior of one that is to be found; not
        used where `field_scatter` is given.
    field_scatter, fields : dict of str to float
        Field-to-field standard deviation of the fraction, and number of fields that a bin sums, by study.
    """

    rho: float | Prior = 0.0
    field_scatter: Mapping[str, float] = field(default_factory=dict)
    fields: Mapping[str, float] = field(default_factory=dict)

    def of(self, bins: Measurements) -> Array:
        """Correlation of every bin.

        Parameters
        ----------
        bins : Measurements
            Bins, of the studies that were there when this was read.

        Returns
        -------
        ndarray, shape (n_bins,)
            0 for rows that are no counts; the mean of its prior where rho is to be found; from a field scatter that is too
            large for the row's fraction, 1 or more.
        """
        effective = bins.effective
        if not self.field_scatter:
            rho = np.full(bins.n_bins, self.rho.mean if isinstance(self.rho, Prior) else self.rho)
        else:
            m = effective.m
            p = np.clip(effective.x / np.where(m > 0, m, 1.0), 1 / (m + 2), 1 - 1 / (m + 2))
            sigma = np.array([self.field_scatter[study] for study in bins.study.tolist()], float)
            number = np.array([self.fields[study] for study in bins.study.tolist()], float)
            rho = sigma**2 / (p * (1 - p)) / number
        return np.where(effective.counted, rho, 0.0)

    def describe(self) -> str:
        """Say in words what counts are taken to be."""
        if self.field_scatter:
            each = [
                f"{sigma:g} over {self.fields[study]:g} field{'s' * (self.fields[study] != 1)} ({study})"
                for study, sigma in self.field_scatter.items()
            ]
            return f"beta-binomial, correlation from the field-to-field scatter of the fraction: {', '.join(each)}"
        if isinstance(self.rho, Prior):
            return f"beta-binomial with an intra-class correlation rho that is free, prior: {self.rho.describe()}"
        return f"beta-binomial with intra-class correlation {self.rho:g}" if self.rho else "binomial"


def parse_dispersion(
    model: str, rho: object, field_scatter: object, fields: object, bins: Measurements, *, where: str
) -> Dispersion:
    """Read the table [counts].

    Parameters
    ----------
    model : str
        "binomial" or "beta-binomial".
    rho : number, prior or None
        Correlation.
    field_scatter, fields : number, mapping of study (or "default") to number, or None
        Field-to-field scatter, and number of fields, 1 unless given.
    bins : Measurements
        Rows that are fitted.
    where : str
        How to call the table in a message.

    Raises
    ------
    HurstfitError
        For keys that do not belong together, a number out of range, an unknown study, or a scatter too large for a row.
    """
    given = {"rho": rho, "field_scatter": field_scatter, "fields": fields}
    if model == "binomial":
        for key, value in given.items():
            if value is not None:
                raise HurstfitError(f'{where} {key}: found {value!r} with model = "binomial"; it needs model = "beta-binomial"')
        return Dispersion()
    if (rho is None) == (field_scatter is None):
        found = "neither" if rho is None else "both"
        raise HurstfitError(f'{where}: found {found} of rho and field_scatter; model = "beta-binomial" needs one of the two')
    if rho is not None:
        if fields is not None:
            raise HurstfitError(f"{where} fields: found {fields!r} beside rho; the number of fields goes with field_scatter")
        prior = parse_prior(rho, where=f"{where} rho", lo=0.0, hi=1.0)
        if not prior.is_fixed:
            return Dispersion(prior)
        return Dispersion(_number(prior.mean, f"{where} rho", "a number from 0 to below 1", lambda v: 0 <= v < 1))
    scatter = _by_study(
        field_scatter, bins.studies, f"{where} field_scatter", "a standard deviation above 0 and below 0.5", lambda v: 0 < v < 0.5
    )
    number = _by_study(
        1 if fields is None else fields, bins.studies, f"{where} fields", "a number of fields of 1 or more", lambda v: v >= 1
    )
    result = Dispersion(0.0, scatter, number)
    correlation = result.of(bins)
    if np.any(correlation >= 1):
        i = int(np.argmax(correlation))
        raise HurstfitError(
            f"{bins.path}, {bins.row_label(i)}: the field_scatter {scatter[bins.study[i]]:g} ({where}) is more than fields can "
            f"scatter about a fraction of {bins.effective.fraction[i]:.3g}; allowed is less than sqrt(p (1 - p) K) with K fields"
        )
    return result


def _number(value: object, where: str, allowed: str, holds: Callable[[float], bool]) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not holds(value):
        raise HurstfitError(f"{where}: found {value!r}, allowed is {allowed}")
    return float(value)


def _by_study(
    value: object, studies: tuple[str, ...], where: str, allowed: str, holds: Callable[[float], bool]
) -> dict[str, float]:
    """Give one number for all studies, or one for each, or a default."""
    if not isinstance(value, Mapping):
        return dict.fromkeys(studies, _number(value, where, f"{allowed}, or a table of one for each study", holds))
    for key in value:
        if key != "default" and key not in studies:
            hint = did_you_mean(str(key), [*studies, "default"])
            raise HurstfitError(f"{where}: no fitted row is of a study {key!r}{hint}; the studies are {', '.join(studies)}")
    result = {}
    for study in studies:
        if study not in value and "default" not in value:
            raise HurstfitError(f"{where}: nothing for the study {study!r}; allowed is a number for every study, or a default")
        result[study] = _number(value.get(study, value.get("default")), f"{where} {study}", allowed, holds)
    return result
