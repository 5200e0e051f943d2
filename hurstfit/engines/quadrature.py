"""The exact posterior by nested quadrature: no sampling, and the evidence with it.

H is integrated over an adaptive one-dimensional grid, which finds every mode however narrow or far apart they are.  At each H
everything else is integrated by adaptive Gauss-Hermite quadrature about its peak (:mod:`hurstfit.engines.peaks`): step length and
start of the walk, where they are free, and inside them the selection terms of each study
(:mod:`hurstfit.engines.study_integral`).  The nodes along either are doubled until the marginal log-likelihood of H no longer
changes, so that its accuracy is proved and not assumed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from hurstfit.engines.gaussians import gauss_hermite
from hurstfit.engines.grid import NotSettledError, find_nodes, refined
from hurstfit.engines.peaks import Peaks, find_peaks
from hurstfit.engines.study_integral import StudyFactor, study_factors
from hurstfit.posterior import Posterior

__all__ = ["Marginal", "MarginalLikelihood", "NotSettledError", "integrate"]

Array = NDArray[np.float64]

#: Bins up to which the quadrature is worth its time: half a minute for 20 studies of 20 bins with a free step length.
MOST_BINS = 400
#: Changes that are accepted when nodes are doubled: of the marginal log-likelihood, relative over the bulk of the posterior, and
#: of the log-evidence, which is a constant and does not touch H.
TOLERANCE, EVIDENCE_TOLERANCE = 0.01, 0.05
#: Nodes along each selection term, and along step and start, to begin with.
FEWEST = (3, 3)
#: Nodes that are too many: along one parameter, and all those of one study or of the clock together.
MOST, MOST_TOGETHER = 100, 2500
#: Galaxies of a bin that a peak is easily found with.
EASY = 3000.0
#: Newton steps that the search for a peak may take.
MOST_STEPS = 100
#: Log-density below the highest, in which 99.9 % of a normal posterior lie.
BULK = 6.0
#: Central part of the clock's priors that must be possible throughout, in standard deviations: all but 2e-6; and points along it.
CLOCK_REACH, CLOCK_POINTS = 4.75, 39


@dataclass(frozen=True)
class MarginalLikelihood:
    """Likelihood of H with everything else integrated out.

    Attributes
    ----------
    posterior : Posterior
        Whose H, step and start are priors or constants; H must be free.
    """

    posterior: Posterior

    @cached_property
    def factors(self) -> list[StudyFactor]:
        """The studies."""
        return study_factors(self.posterior)

    @cached_property
    def clock_places(self) -> list[int]:
        """Free parameters that describe the clock."""
        names = self.posterior.names
        return [names.index(name) for name in ("step", "z_start") if name in names]

    def fractions(self, h: Array, clock: Array) -> tuple[Array, NDArray[np.bool_]]:
        """Predict true fractions at coordinates of H, (vectors,), and of the clock, (vectors, m)."""
        coordinates = np.zeros((h.size, len(self.posterior.parameters)))
        coordinates[:, 0] = h
        coordinates[:, self.clock_places] = clock
        return self.posterior.true_fractions(self.posterior.physical(coordinates))

    def always_possible(self) -> bool:
        """Whether every bin lies beyond the first step of the walk, over all but the last of the clock's prior."""
        z = np.linspace(-CLOCK_REACH, CLOCK_REACH, CLOCK_POINTS)
        m = len(self.clock_places)
        clock = np.stack(np.meshgrid(*[z] * m), axis=-1).reshape(-1, m) if m else np.zeros((1, 0))
        return bool(self.fractions(np.zeros(clock.shape[0]), clock)[1].all())

    def peaks(self, h: Array, near: Peaks | None = None) -> Peaks:
        """Find the peak of everything else at each coordinate of H, (vectors,), from peaks nearby where they are known."""

        def fractions(chosen: NDArray[np.intp], clock: Array) -> Array:
            vectors, points, m = clock.shape
            return self.fractions(np.repeat(h[chosen], points), clock.reshape(vectors * points, m))[0].reshape(
                vectors, points, -1
            )

        clock, terms = np.zeros((h.size, len(self.clock_places))), [np.zeros((h.size, f.dimension)) for f in self.factors]
        # large counts make a ridge that is thin and bent: it is easier found while the likelihood is still tempered
        temper = 1.0 if near is not None else min(1.0, EASY / float(self.posterior.bins.n_total.max()))
        while True:
            if near is not None:
                clock, terms = near.clock.mode, [study.mode for study in near.studies]
            tempered = [replace(factor, temper=temper) for factor in self.factors] if temper < 1.0 else self.factors
            near = find_peaks(fractions, tempered, clock, terms, MOST_STEPS)
            if temper == 1.0:
                return near
            temper = min(1.0, 8.0 * temper)

    def __call__(self, h: Array, peaks: Peaks, orders: tuple[int, int], *, bent: bool = False) -> Array:
        """Log-likelihood of H, everything else integrated out.

        Parameters
        ----------
        h : ndarray, shape (vectors,)
            H in its sampling coordinate.
        peaks : Peaks
            Of the rest.
        orders : tuple of int
            Nodes along each selection term, and along step and start.
        bent : bool
            Whether the peaks of the selection terms are found anew wherever they are needed, along ridges that are bent.

        Returns
        -------
        ndarray, shape (vectors,)
        """
        z, log_weights = gauss_hermite(orders[1], len(self.clock_places))
        clock = peaks.clock.at(z).reshape(h.size * z.shape[0], z.shape[1])
        vector = np.repeat(np.arange(h.size), z.shape[0])
        fractions, possible = self.fractions(h[vector], clock)
        total = -0.5 * (clock**2).sum(axis=1)
        for factor, start in zip(self.factors, peaks.take(vector).given_clock(clock), strict=True):
            mine = fractions[:, factor.bins]
            gaussian = factor.gaussian(mine, start.mode) if bent and factor.dimension else start
            total = total + factor.log_integral(mine, gaussian, orders[0], bent=bent)
        values = np.where(possible, total, -np.inf).reshape(h.size, -1) + log_weights + 0.5 * (z**2).sum(axis=1)
        return logsumexp(values, axis=1) + peaks.clock.log_scale + self.posterior.counts.log_coefficient


@dataclass(frozen=True)
class Marginal:
    """The posterior of H in its sampling coordinate, and the evidence.

    Attributes
    ----------
    nodes : ndarray, shape (n,)
        Increasing coordinates.
    log_density : ndarray, shape (n,)
        Normalised log-density there.
    peaks : Peaks
        Of everything else at each node.
    log_evidence, log_evidence_error : float
        Log of the probability of the counts, and its error.
    likelihood_error : float
        Proved error of the marginal log-likelihood, relative over the bulk of the posterior.
    orders : tuple of int
        Nodes along each selection term, and along step and start.
    bent : bool
        Whether ridges had to be followed.
    """

    nodes: Array
    log_density: Array
    peaks: Peaks
    log_evidence: float
    log_evidence_error: float
    likelihood_error: float
    orders: tuple[int, int]
    bent: bool

    @cached_property
    def _distribution(self) -> tuple[Array, Array]:
        """Points, and the distribution function there."""
        fine, density = refined(self.nodes, self.log_density)
        cumulative = np.concatenate([[0.0], np.cumsum((density[1:] + density[:-1]) / 2 * np.diff(fine))])
        return fine, cumulative / cumulative[-1]

    def quantile(self, probability: Array) -> Array:
        """Coordinates of H at given probabilities."""
        fine, cumulative = self._distribution
        return np.interp(probability, cumulative, fine)


def integrate(posterior: Posterior, report: Callable[[str], None] | None = None) -> Marginal:
    """Compute the posterior of H and the evidence.

    Parameters
    ----------
    posterior : Posterior
        Its first free parameter must be H.
    report : callable, optional
        Called with what is being done, in words.

    Returns
    -------
    Marginal

    Raises
    ------
    NotSettledError
        If H is fixed, if a bin lies before the first step of the walk in part of the clock's prior, or if the accuracy is not
        reached with the largest number of nodes.
    """
    if not posterior.names or posterior.names[0] != "H":
        raise NotSettledError("H is fixed")
    if posterior.bins.n_bins > MOST_BINS:
        raise NotSettledError(f"{posterior.bins.n_bins} bins are more than the {MOST_BINS} that it is made for")
    say = report or (lambda words: None)
    likelihood = MarginalLikelihood(posterior)
    if not likelihood.always_possible():
        raise NotSettledError("a bin lies before the first step of the walk in part of the prior of step and z_start")
    say("looking for modes")
    nodes, peaks = find_nodes(likelihood.peaks)
    worst = ""
    for bent in (False, True):
        settled = _settle(likelihood, nodes, peaks, bent, say)
        if isinstance(settled, Marginal):
            if not settled.log_evidence_error < 2 * EVIDENCE_TOLERANCE:
                raise NotSettledError("the density between the points along H is not known well enough")
            return settled
        worst = settled
    raise NotSettledError(worst)


def _settle(likelihood: MarginalLikelihood, nodes: Array, peaks: Peaks, bent: bool, say: Callable[[str], None]) -> Marginal | str:
    """Double nodes along the selection terms, or along the clock, until neither matters; or say how far that is."""
    known: dict[tuple[int, int], Array] = {}

    def at(terms: int, clock: int) -> Array:
        if (terms, clock) not in known:
            say(f"integrating with {terms} nodes a selection term, {clock} for the clock")
            known[terms, clock] = likelihood(nodes, peaks, (terms, clock), bent=bent)
        return known[terms, clock]

    free = max(factor.dimension for factor in likelihood.factors), len(likelihood.clock_places)
    orders = list(FEWEST)
    while True:
        base = at(*orders)
        finer_terms = at(2 * orders[0], orders[1]) if free[0] else base
        finer_clock = at(orders[0], 2 * orders[1]) if free[1] else base
        # what either doubling changes is small, so that together they change the sum of both
        value = finer_terms + finer_clock - base
        changes = [_change(nodes, value, finer - base) for finer in (finer_terms, finer_clock)]
        settled = [shape < TOLERANCE and shift < EVIDENCE_TOLERANCE for shape, shift in changes]
        if all(settled):
            return _marginal(nodes, value, peaks, changes, (2 * orders[0], 2 * orders[1]), bent)
        raised = [order if enough else 2 * order for order, enough in zip(orders, settled, strict=True)]
        if any(2 * n > MOST or (2 * n) ** d > MOST_TOGETHER for n, d, old in zip(raised, free, orders, strict=True) if n > old):
            largest = max(max(change) for change in changes)
            return f"the marginal likelihood of H still changes by {largest:.2g} with {2 * max(orders)} nodes a parameter"
        orders = raised


def _change(nodes: Array, log_likelihood: Array, difference: Array) -> tuple[float, float]:
    """Change in shape over the bulk, and in the evidence; infinite where one is finite and the other not."""
    log_density = log_likelihood - 0.5 * nodes**2
    below = log_density - log_density.max()
    bulk = below > -BULK
    if not np.isfinite(difference[bulk]).all():
        return np.inf, np.inf
    shift = float(np.abs(np.average(difference[bulk], weights=np.exp(below[bulk]) * np.gradient(nodes)[bulk])))
    return float(np.ptp(difference[bulk])) / 2, shift


def _marginal(
    nodes: Array, log_likelihood: Array, peaks: Peaks, changes: list[tuple[float, float]], orders: tuple[int, int], bent: bool
) -> Marginal:
    """Normalise, and estimate the error of the evidence."""
    log_density = log_likelihood - 0.5 * nodes**2 - 0.5 * np.log(2 * np.pi)
    top = log_density.max()
    keep = np.isfinite(log_density)
    if not keep.all():
        nodes, log_density, peaks = nodes[keep], log_density[keep], peaks.take(np.flatnonzero(keep))
    fine, density = refined(nodes, log_density - top)
    mass = float(np.trapezoid(density, fine))
    coarse, coarse_density = refined(nodes[::2], (log_density - top)[::2])
    # halving the grid of a spline of fourth order overstates the error of the whole grid sixteenfold
    interpolation = abs(float(np.trapezoid(coarse_density, coarse)) / mass - 1.0) / 16
    evidence = float(np.log(mass) + top)
    error = float(np.sqrt(sum(shift**2 for _, shift in changes) + interpolation**2))
    shape = float(np.sqrt(sum(shape**2 for shape, _ in changes)))
    return Marginal(nodes, log_density - evidence, peaks, evidence, max(error, 1e-6), shape, orders, bent)
