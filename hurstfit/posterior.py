"""The posterior: one vectorised function over many parameter vectors.

This is the only likelihood in the program; every engine and every study calls it.  Parameters are sampled in coordinates in which
the prior is standard normal (each parameter is its prior's quantile at the normal's probability), so that the log-prior is
``-|t|^2 / 2`` plus a constant whatever the priors are, supports never have to be checked, and a start of order one is always
sane.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from hurstfit.counts import BetaBinomialCounts, BinomialCounts
from hurstfit.dispersion import Dispersion
from hurstfit.measurements import Measurements
from hurstfit.prediction import BinPrediction
from hurstfit.priors import Prior
from hurstfit.quantiles import Quantiles
from hurstfit.selection import TERMS, SelectionTerms, counted_fraction

__all__ = ["Parameter", "Posterior"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Parameter:
    """A quantity with a prior: its name, unit and meaning."""

    name: str
    prior: Prior
    unit: str
    description: str


@dataclass(frozen=True)
class Posterior:
    """Likelihood times priors for one set of bins.

    Attributes
    ----------
    bins : Measurements
        The bins that are fitted.
    prediction : BinPrediction
        True fractions from H and the clock.
    exponent, step, z_start : Parameter
        H, step length (Myr), redshift at which walks start; a fixed prior makes any of them a constant.
    selection : dict of str to SelectionTerms
        Selection terms of each study.
    dispersion : Dispersion
        Scatter of the counts beyond the binomial; its correlation may be a parameter, ``rho``.
    """

    bins: Measurements
    prediction: BinPrediction
    exponent: Parameter
    step: Parameter
    z_start: Parameter
    selection: dict[str, SelectionTerms]
    dispersion: Dispersion = field(default_factory=Dispersion)

    @cached_property
    def counts(self) -> BinomialCounts:
        """The counts of the bins, effective ones where a row is no count; at the mean of its prior where rho is free."""
        effective, rho = self.bins.effective, self.dispersion.of(self.bins)
        if not rho.any():
            return BinomialCounts(effective.m, effective.x)
        return BetaBinomialCounts(effective.m, effective.x, rho)

    def counts_at(self, physical: Array) -> BinomialCounts:
        """Give the counts of the bins under each vector of parameters, (vectors, parameters)."""
        if "rho" not in self.names:
            return self.counts
        effective, rho = self.bins.effective, physical[:, self.names.index("rho"), None]
        return BetaBinomialCounts(effective.m, effective.x, np.where(effective.counted, rho, 0.0))

    @cached_property
    def quantities(self) -> tuple[Parameter, ...]:
        """All quantities that enter, fixed ones too: H, step, z_start, rho if free, then the terms of each study with bins."""
        terms = [
            Parameter(f"{term}[{study}]", self.selection[study].prior(term), "", f"{TERMS[term].description}, {study}")
            for study in self.bins.studies
            for term in self.selection[study].terms
        ]
        shared = [self.exponent, self.step, self.z_start]
        if isinstance(self.dispersion.rho, Prior):
            shared.append(Parameter("rho", self.dispersion.rho, "", "intra-class correlation of the counts of a bin"))
        return (*shared, *terms)

    @cached_property
    def parameters(self) -> tuple[Parameter, ...]:
        """The quantities that are free."""
        return tuple(q for q in self.quantities if not q.prior.is_fixed)

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the free parameters."""
        return tuple(p.name for p in self.parameters)

    @property
    def shared_names(self) -> tuple[str, ...]:
        """Names of the free parameters that all studies share: those of H, step, z_start and rho that are free."""
        return tuple(name for name in self.names if "[" not in name)

    @cached_property
    def _columns(self) -> tuple[tuple[NDArray[np.intp], ...], NDArray[np.bool_]]:
        """For each of three selection terms, the quantity that belongs to each bin; and where the last is an impurity."""
        place = {q.name: i for i, q in enumerate(self.quantities)}
        of_study = {study: [place[f"{term}[{study}]"] for term in self.selection[study].terms] for study in self.bins.studies}
        columns = np.array([of_study[study] for study in self.bins.study.tolist()], dtype=np.intp).reshape(-1, 3)
        impure = np.array([self.selection[study].impurity is not None for study in self.bins.study.tolist()], bool)
        return tuple(columns.T), impure

    @cached_property
    def _layout(self) -> tuple[NDArray[np.intp], Array]:
        """Which quantities are free, and the values of all (nan where free)."""
        free = np.array([i for i, q in enumerate(self.quantities) if not q.prior.is_fixed], dtype=np.intp)
        values = np.array([q.prior.mean if q.prior.is_fixed else np.nan for q in self.quantities])
        return free, values

    @cached_property
    def _quantiles(self) -> Quantiles:
        return Quantiles(tuple(p.prior for p in self.parameters))

    # -- coordinates -----------------------------------------------------------------------------------------------------------

    def physical(self, coordinates: Array) -> Array:
        """Turn sampling coordinates into parameters, both of shape (..., parameters)."""
        return self._quantiles(coordinates)

    def coordinates(self, physical: Array) -> Array:
        """Turn parameters into sampling coordinates, both of shape (..., parameters)."""
        columns = [p.prior.to_normal(physical[..., i]) for i, p in enumerate(self.parameters)]
        return np.stack(columns, axis=-1) if columns else np.zeros(physical.shape)

    def complete(self, physical: Array) -> Array:
        """Values of all quantities, shape (vectors, quantities), from those of the free parameters, (vectors, parameters)."""
        free, values = self._layout
        full = np.tile(values, (physical.shape[0], 1))
        full[:, free] = physical
        return full

    # -- predictions -----------------------------------------------------------------------------------------------------------

    def true_fractions(self, physical: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Predict the true quiescent fraction, (vectors, bins), and whether the vector is possible at all, (vectors,)."""
        full = self.complete(physical)
        return self.prediction(full[:, 0], full[:, 1], full[:, 2])

    def counted_fractions(self, physical: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Probability that a catalogued galaxy of each bin is labelled quiescent; shapes as :meth:`true_fractions`."""
        fraction, possible = self.true_fractions(physical)
        return self.selected(fraction, physical), possible

    def selected(self, fraction: Array, physical: Array) -> Array:
        """Apply selection to given true fractions, (vectors, bins); nan where an impurity is impossible."""
        full = self.complete(physical)
        columns, impure = self._columns
        r, u, v = (full[:, column] for column in columns)
        if not impure.any():
            return counted_fraction(fraction, r, u, v)
        return counted_fraction(fraction, r, u, np.where(impure, 0.0, v), np.where(impure, v, 0.0))

    # -- densities -------------------------------------------------------------------------------------------------------------

    def log_likelihood(self, physical: Array) -> Array:
        """Log-probability of the counts.

        Parameters
        ----------
        physical : ndarray, shape (vectors, parameters)
            Free parameters in their own units.

        Returns
        -------
        ndarray, shape (vectors,)
            -inf where a vector is impossible.
        """
        p, possible = self.counted_fractions(physical)
        return np.where(possible, self.counts_at(physical).log_likelihood(p), -np.inf)

    def log_prior(self, coordinates: Array) -> Array:
        """Log-density of the prior in sampling coordinates, normalised; shape (vectors,)."""
        return -0.5 * (coordinates**2).sum(axis=-1) - 0.5 * coordinates.shape[-1] * np.log(2 * np.pi)

    def log_probability(self, coordinates: Array) -> Array:
        """Log of likelihood times prior in sampling coordinates.

        Parameters
        ----------
        coordinates : ndarray, shape (vectors, parameters)

        Returns
        -------
        ndarray, shape (vectors,)
            -inf where a vector is impossible.
        """
        return self.log_prior(coordinates) + self.log_likelihood(self.physical(coordinates))
