"""From the true to the counted quiescent fraction: what selection does to a bin.

A catalogue that finds quiescent galaxies with completeness C_q and star-forming ones with C_s, calls a share u of the quiescent
galaxies star-forming and a share v of the star-forming ones quiescent, labels a catalogued galaxy quiescent with probability

    p = [ f r (1 - u) + (1 - f) v ] / [ f r + (1 - f) ],      r = C_q / C_s,

where f is the true quiescent fraction.  Only the ratio r of the completenesses matters, and it may exceed 1.  For r = 1 this
is the apparent prevalence of Rogan & Gladen (1978, Am. J. Epidemiol. 107, 71) with sensitivity 1 - u and specificity 1 - v.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.priors import Fixed, Prior, parse_prior

__all__ = ["TERMS", "SelectionTerms", "TermKind", "counted_fraction", "parse_selection"]


@dataclass(frozen=True)
class TermKind:
    """A kind of selection term: its name, its range and what it means."""

    name: str
    lo: float
    hi: float
    description: str


TERMS: dict[str, TermKind] = {
    kind.name: kind
    for kind in (
        TermKind("completeness_ratio", 0.0, math.inf, "completeness of quiescent over that of star-forming galaxies"),
        TermKind("missed_fraction", 0.0, 1.0, "share of quiescent galaxies labelled star-forming"),
        TermKind("contamination", 0.0, 1.0, "share of star-forming galaxies labelled quiescent"),
    )
}


@dataclass(frozen=True)
class SelectionTerms:
    """Priors of the selection terms of one study; by default its selection is perfect."""

    completeness_ratio: Prior = field(default_factory=lambda: Fixed(1.0))
    missed_fraction: Prior = field(default_factory=lambda: Fixed(0.0))
    contamination: Prior = field(default_factory=lambda: Fixed(0.0))
    stated: frozenset[str] = frozenset()

    def prior(self, term: str) -> Prior:
        """Prior of one term, by name."""
        prior: Prior = getattr(self, term)
        return prior


def counted_fraction(
    fraction: ArrayLike, completeness_ratio: ArrayLike, missed_fraction: ArrayLike, contamination: ArrayLike
) -> NDArray[np.float64]:
    """Probability that a catalogued galaxy is labelled quiescent.

    Parameters
    ----------
    fraction : array_like
        True quiescent fraction f, 0 to 1.
    completeness_ratio : array_like
        r > 0.
    missed_fraction, contamination : array_like
        u and v, 0 to 1.  All four are broadcast against each other.

    Returns
    -------
    ndarray
        p, the broadcast shape.
    """
    f = np.asarray(fraction, dtype=float)
    found = f * np.asarray(completeness_ratio, dtype=float)
    starforming = 1.0 - f
    missed, contaminating = np.asarray(missed_fraction, dtype=float), np.asarray(contamination, dtype=float)
    labelled = found * (1.0 - missed) + starforming * contaminating
    return np.clip(labelled / (found + starforming), 0.0, 1.0)


def parse_selection(
    tables: Mapping[str, object], studies: tuple[str, ...], *, where: str, table: str
) -> dict[str, SelectionTerms]:
    """Read the selection terms of every study from a configuration.

    Parameters
    ----------
    tables : mapping
        One table of terms for each study named, and one named ``default`` for terms that a study does not state itself.
    studies : tuple of str
        Studies of the measurement table.
    where : str
        How to call the configuration in a message.
    table : str
        How to call the measurement table in a message.

    Returns
    -------
    dict
        Selection terms by study, in the order of `studies`.

    Raises
    ------
    HurstfitError
        For an unknown study or term, or a prior that the term does not admit.
    """
    parsed: dict[str, dict[str, Prior]] = {}
    for name, terms in tables.items():
        if name != "default" and name not in studies:
            hint = did_you_mean(name, [*studies, "default"])
            raise HurstfitError(
                f"{where}, [selection.{name}]: {table} has no study of this name{hint}; it has {', '.join(studies)}"
            )
        if not isinstance(terms, Mapping):
            raise HurstfitError(f"{where}, [selection] {name}: found {terms!r}, allowed is a table of terms for one study")
        parsed[name] = {}
        for term, spec in terms.items():
            if term not in TERMS:
                raise HurstfitError(
                    f"{where}, [selection.{name}]: unknown key {term!r}{did_you_mean(term, TERMS)}; "
                    f"allowed are {', '.join(TERMS)}"
                )
            kind = TERMS[term]
            parsed[name][term] = parse_prior(
                spec, where=f"{where}, [selection.{name}] {term}", lo=kind.lo, hi=kind.hi, lo_open=math.isinf(kind.hi)
            )
    default = parsed.get("default", {})
    result = {}
    for study in studies:
        terms = {**default, **parsed.get(study, {})}
        result[study] = SelectionTerms(**terms, stated=frozenset(terms))
    return result


assert {f.name for f in fields(SelectionTerms)} == {*TERMS, "stated"}
