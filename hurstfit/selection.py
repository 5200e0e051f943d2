"""From the true to the counted quiescent fraction: what selection does to a bin.

A catalogue that finds quiescent galaxies with completeness C_q and star-forming ones with C_s, calls a share u of the quiescent
galaxies star-forming and a share v of the star-forming ones quiescent, labels a catalogued galaxy quiescent with probability

    p = [ f r (1 - u) + (1 - f) v ] / [ f r + (1 - f) ],      r = C_q / C_s,

where f is the true quiescent fraction.  Only the ratio r of the completenesses matters, and it may exceed 1.  For r = 1 this
is the apparent prevalence of Rogan & Gladen (1978, Am. J. Epidemiol. 107, 71) with sensitivity 1 - u and specificity 1 - v.

Many papers quote instead the impurity k of the quiescent sample: the share of those labelled quiescent that are star-forming.
Then

    p = f r (1 - u) / [ (1 - k) (f r + 1 - f) ],

which implies the contamination v = p k (f r + 1 - f) / (1 - f).  Where that exceeds 1 there are not
enough star-forming galaxies to make the sample so impure, and the likelihood is zero.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.prior_entries import parse_prior
from hurstfit.priors import Fixed, Prior

__all__ = ["ALTERNATIVES", "TERMS", "SelectionTerms", "TermKind", "counted_fraction", "parse_selection"]


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
        TermKind("impurity", 0.0, 1.0, "share of galaxies labelled quiescent that are star-forming"),
    )
}
#: Two ways to say the same; a study has one of them.
ALTERNATIVES = ("contamination", "impurity")


@dataclass(frozen=True)
class SelectionTerms:
    """Priors of the selection terms of one study; by default its selection is perfect.

    Where `impurity` is given it stands in the place of `contamination`, which is then not a term of the study.
    """

    completeness_ratio: Prior = field(default_factory=lambda: Fixed(1.0))
    missed_fraction: Prior = field(default_factory=lambda: Fixed(0.0))
    contamination: Prior = field(default_factory=lambda: Fixed(0.0))
    impurity: Prior | None = None
    stated: frozenset[str] = frozenset()

    def __post_init__(self) -> None:
        if self.impurity is not None and self.contamination != Fixed(0.0):
            raise ValueError("selection terms hold either contamination or impurity")

    @property
    def terms(self) -> tuple[str, str, str]:
        """Names of the three terms of the study, the last one contamination or impurity."""
        return ("completeness_ratio", "missed_fraction", "contamination" if self.impurity is None else "impurity")

    def prior(self, term: str) -> Prior:
        """Prior of one term, by name."""
        prior: Prior | None = getattr(self, term)
        if prior is None:
            raise ValueError(f"the study has no {term}")
        return prior


def counted_fraction(
    fraction: ArrayLike,
    completeness_ratio: ArrayLike,
    missed_fraction: ArrayLike,
    contamination: ArrayLike,
    impurity: ArrayLike | None = None,
) -> NDArray[np.float64]:
    """Probability that a catalogued galaxy is labelled quiescent.

    Parameters
    ----------
    fraction : array_like
        True quiescent fraction f, 0 to 1.
    completeness_ratio : array_like
        r > 0.
    missed_fraction, contamination : array_like
        u and v, 0 to 1.
    impurity : array_like, optional
        k, 0 to 1; where it is not 0, v must be.  All are broadcast against each other.

    Returns
    -------
    ndarray
        p, the broadcast shape; nan where an impurity implies a contamination above 1.
    """
    f = np.asarray(fraction, dtype=float)
    found = f * np.asarray(completeness_ratio, dtype=float)
    starforming = 1.0 - f
    missed, contaminating = np.asarray(missed_fraction, dtype=float), np.asarray(contamination, dtype=float)
    labelled = found * (1.0 - missed) + starforming * contaminating
    if impurity is None:
        return np.clip(labelled / (found + starforming), 0.0, 1.0)
    k = np.asarray(impurity, dtype=float)
    pure = np.where(k < 1.0, 1.0 - k, 1.0)
    # an impurity of 1 leaves nothing that is quiescent
    possible = (labelled * k <= starforming * pure) & (k < 1.0)
    return np.where(possible, np.clip(labelled / pure / (found + starforming), 0.0, 1.0), np.nan)


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
        if all(term in parsed[name] for term in ALTERNATIVES):
            raise HurstfitError(f"{where}, [selection.{name}]: found both contamination and impurity, allowed is one of the two")
    if "default" in studies:
        raise HurstfitError(
            f"{table}: a study is called 'default', which in [selection] stands for all studies; call it something else"
        )
    default = parsed.get("default", {})
    result = {}
    for study in studies:
        own = parsed.get(study, {})
        # a study that states one of the two alternatives does not take the other from the default
        replaced = ALTERNATIVES if any(term in own for term in ALTERNATIVES) else ()
        terms = {**{term: prior for term, prior in default.items() if term not in replaced}, **own}
        result[study] = SelectionTerms(**terms, stated=frozenset(terms))
    return result


assert {f.name for f in fields(SelectionTerms)} == {*TERMS, "stated"}
