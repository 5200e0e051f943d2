"""The exact posterior by nested quadrature: no sampling, and the evidence with it.

H is integrated over an adaptive one-dimensional grid, which finds every mode however narrow or far apart they are.  At each
H the step length and the start of the walk, where they are free, and inside them the selection terms of each study
(:mod:`hurstfit.engines.study_integral`) are integrated by adaptive Gauss-Hermite quadrature.  The number of nodes is doubled
until the marginal log-likelihood of H is settled, so that its accuracy is proved and not assumed.

Independent draws follow: H from its marginal distribution, everything else from its conditional distribution given H, by a
few steps of an independence Metropolis chain (Tierney 1994, Ann. Stat. 22, 1701) whose proposals are the Gaussians of the
quadrature.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.special import logsumexp

from hurstfit.engines.study_integral import Gaussian, StudyFactor, gauss_hermite, maximise, study_factors
from hurstfit.posterior import Posterior

__all__ = ["Marginal", "MarginalLikelihood", "NotSettledError", "draw_conditionals", "integrate"]

Array = NDArray[np.float64]

#: Error of the marginal log-likelihood, relative over the bulk of the posterior, that is accepted.
TOLERANCE = 0.01
#: Nodes along each selection term, and along step and start, tried in turn; each is compared with the next.
ORDERS = ((4, 4), (7, 7), (13, 13))
#: Range of the sampling coordinate of H (beyond lie 1e-14 of the prior) and points of the first look at it.
REACH, FIRST_LOOK = 7.5, 61
#: Points with a density below that of the highest by more than this, in natural logarithms, do not count.
DEPTH = 30.0
#: Neighbouring points that count differ by less than this in log-density.
CLOSE = 1.5
#: Step of numerical derivatives with respect to the clock, in standard deviations of its prior.
CLOCK_DIFFERENCE = 0.02
#: Steps of the chain that draws everything but H; proposals are so close to the target that few are needed.
CONDITIONAL_STEPS = 16


class NotSettledError(RuntimeError):
    """The quadrature did not reach its accuracy; another engine must be used."""


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

    def given_clock(self, h: Array, clock: Array, order: int, starts: list[Array] | None = None) -> Array:
        """Log-likelihood times prior of the clock, selection terms integrated out.

        Parameters
        ----------
        h : ndarray, shape (vectors,)
            H in its sampling coordinate.
        clock : ndarray, shape (vectors, m)
            Step and start in theirs.
        order : int
            Nodes along each selection term.
        starts : list of ndarray, optional
            Where to look for the modes of each study's selection terms, (vectors, d); replaced by what was found.

        Returns
        -------
        ndarray, shape (vectors,)
        """
        fractions, possible = self.fractions(h, clock)
        total = -0.5 * (clock**2).sum(axis=1) + self.posterior.counts.log_coefficient
        for i, factor in enumerate(self.factors):
            mine = fractions[:, factor.bins]
            gaussian = factor.gaussian(mine, None if starts is None else starts[i])
            if starts is not None:
                starts[i] = gaussian.mode
            total = total + factor.log_integral(mine, gaussian, order)
        return np.where(possible, total, -np.inf)

    def clock_gaussian(self, h: Array, iterations: int = 12) -> Gaussian:
        """Osculating Gaussian of the clock at each H."""
        m = len(self.clock_places)
        near = [np.zeros((h.size, factor.dimension)) for factor in self.factors]

        def function(points: Array) -> Array:
            vectors, count, _ = points.shape
            # the modes at the first point of each vector are where to look from at its other points, and the next time
            starts = [np.repeat(start, count, axis=0) for start in near]
            values = self.given_clock(np.repeat(h, count), points.reshape(-1, m), 1, starts).reshape(vectors, count)
            near[:] = [start[::count] for start in starts]
            return values

        return maximise(function, np.zeros((h.size, m)), iterations=iterations, difference=CLOCK_DIFFERENCE)

    def __call__(self, h: Array, orders: tuple[int, int], clock: Gaussian | None = None) -> Array:
        """Log-likelihood of H, everything else integrated out.

        Parameters
        ----------
        h : ndarray, shape (vectors,)
            H in its sampling coordinate.
        orders : tuple of int
            Nodes along each selection term, and along step and start.
        clock : Gaussian, optional
            From :meth:`clock_gaussian`, if it is known.

        Returns
        -------
        ndarray, shape (vectors,)
        """
        around = self.clock_gaussian(h) if clock is None else clock
        z, log_weights = gauss_hermite(orders[1], len(self.clock_places))
        starts = [np.zeros((h.size, factor.dimension)) for factor in self.factors]
        self.given_clock(h, around.mode, 1, starts)
        points = around.at(z)
        starts = [np.repeat(start, z.shape[0], axis=0) for start in starts]
        values = self.given_clock(np.repeat(h, z.shape[0]), points.reshape(-1, z.shape[1]), orders[0], starts)
        values = values.reshape(h.size, -1) + log_weights + 0.5 * (z**2).sum(axis=1)
        return logsumexp(values, axis=1) + around.log_scale


@dataclass(frozen=True)
class Marginal:
    """The posterior of H in its sampling coordinate, and the evidence.

    Attributes
    ----------
    nodes : ndarray, shape (n,)
        Increasing coordinates.
    log_density : ndarray, shape (n,)
        Normalised log-density there.
    log_evidence, log_evidence_error : float
        Log of the probability of the counts, and its error.
    likelihood_error : float
        Proved error of the marginal log-likelihood, relative over the bulk of the posterior.
    orders : tuple of int
        Nodes along each selection term, and along step and start.
    """

    nodes: Array
    log_density: Array
    log_evidence: float
    log_evidence_error: float
    likelihood_error: float
    orders: tuple[int, int]

    @cached_property
    def _distribution(self) -> tuple[Array, Array]:
        """Points, and the distribution function there."""
        fine, density = _refined(self.nodes, self.log_density)
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
        If H is fixed, or the accuracy is not reached with the largest number of nodes.
    """
    if not posterior.names or posterior.names[0] != "H":
        raise NotSettledError("H is fixed")
    say = report or (lambda words: None)
    likelihood = MarginalLikelihood(posterior)
    say("looking for modes")
    nodes = _find_nodes(lambda h: likelihood(h, (1, 1), likelihood.clock_gaussian(h, iterations=4)) - 0.5 * h**2)
    clock = likelihood.clock_gaussian(nodes)
    finer = likelihood(nodes, ORDERS[0], clock)
    for more in ORDERS[1:]:
        say(f"integrating with {more[0]} nodes")
        rough, finer = finer, likelihood(nodes, more, clock)
        marginal, error, shift = _marginal(nodes, rough, finer, more)
        if error < TOLERANCE and shift < TOLERANCE:
            return marginal
    raise NotSettledError(f"the marginal likelihood of H still changes by {max(error, shift):.2g} with {ORDERS[-1][0]} nodes")


def _marginal(nodes: Array, rough: Array, finer: Array, orders: tuple[int, int]) -> tuple[Marginal, float, float]:
    """Normalise; compare with fewer nodes over the bulk (all but 0.1 %), in shape and in evidence."""
    log_density = finer - 0.5 * nodes**2 - 0.5 * np.log(2 * np.pi)
    top = log_density.max()
    fine, density = _refined(nodes, log_density - top)
    mass = float(np.trapezoid(density, fine))
    coarse, coarse_density = _refined(nodes[::2], (log_density - top)[::2])
    interpolation = abs(float(np.trapezoid(coarse_density, coarse)) / mass - 1.0) if nodes.size > 8 else 1.0
    bulk = log_density - top > -6.0
    difference = np.where(np.isfinite(rough) & np.isfinite(finer), finer - rough, 0.0)
    shift = float(np.abs(np.average(difference, weights=np.exp(log_density - top))))
    error = float(np.ptp(difference[bulk])) / 2
    log_evidence = float(np.log(mass) + top)
    # halving the grid of a spline of fourth order overstates the error of the whole grid sixteenfold
    evidence_error = float(np.hypot(shift, interpolation / 16))
    marginal = Marginal(nodes, log_density - log_evidence, log_evidence, max(evidence_error, 1e-6), error, orders)
    return marginal, error, shift


def _refined(nodes: Array, log_density: Array, pieces: int = 24) -> tuple[Array, Array]:
    """Density on a finer grid, from a cubic spline through its logarithm."""
    keep = np.isfinite(log_density)
    spline = CubicSpline(nodes[keep], log_density[keep])
    share = np.arange(pieces) / pieces
    fine = np.append((nodes[keep][:-1, None] + np.diff(nodes[keep])[:, None] * share).ravel(), nodes[keep][-1])
    return fine, np.exp(spline(fine))


def _find_nodes(function: Callable[[Array], Array]) -> Array:
    """Lay nodes so that neighbours that count are close in log-density, near every mode however narrow."""
    h = np.linspace(-REACH, REACH, FIRST_LOOK)
    g = function(h)
    for _ in range(60):
        filled = np.where(np.isfinite(g), g, -1e300)
        padded = np.concatenate([[-np.inf], filled, [-np.inf]])
        peak = (filled >= padded[:-2]) & (filled >= padded[2:])
        gap = np.abs(np.diff(filled))
        # the neighbourhood of every peak is resolved whatever its height: a narrow mode may hide between two points
        beside = (peak[:-1] | peak[1:]) & (np.maximum(filled[:-1], filled[1:]) > -1e299)
        counts = np.maximum(filled[:-1], filled[1:]) > filled.max() - DEPTH
        split = (gap > CLOSE) & (beside | counts) & (np.diff(h) > 1e-9)
        if not split.any():
            break
        middle = (h[:-1][split] + h[1:][split]) / 2
        h, g = np.concatenate([h, middle]), np.concatenate([g, function(middle)])
        order = np.argsort(h)
        h, g = h[order], g[order]
    near = g > g.max() - DEPTH
    near = near | np.append(near[1:], False) | np.insert(near[:-1], 0, False)
    return h[near & np.isfinite(g)]


@dataclass(frozen=True)
class _Guide:
    """Gaussians of everything but H at the nodes of its marginal, and how their modes follow H and the clock.

    Attributes
    ----------
    clock : Gaussian
        Of step and start, at each node.
    clock_slope : ndarray, shape (nodes, m)
        Change of its mode with H.
    studies : list of Gaussian
        Of each study's selection terms, at each node and the mode of the clock there.
    slopes : list of ndarray, shape (nodes, d, 1 + m)
        Change of their modes with H and with the clock.
    """

    clock: Gaussian
    clock_slope: Array
    studies: list[Gaussian]
    slopes: list[Array]

    @classmethod
    def of(cls, likelihood: MarginalLikelihood, nodes: Array) -> _Guide:
        clock = likelihood.clock_gaussian(nodes)
        m = clock.mode.shape[1]
        slope = np.gradient(clock.mode, nodes, axis=0) if nodes.size > 1 else np.zeros_like(clock.mode)
        fractions, _ = likelihood.fractions(nodes, clock.mode)
        studies = [factor.gaussian(fractions[:, factor.bins]) for factor in likelihood.factors]
        slopes = [np.zeros((nodes.size, factor.dimension, 1 + m)) for factor in likelihood.factors]
        for j in range(1 + m):
            modes = []
            for sign in (1.0, -1.0):
                h = nodes + sign * CLOCK_DIFFERENCE * (j == 0)
                moved = clock.mode + sign * CLOCK_DIFFERENCE * np.eye(1 + m)[j, 1:]
                shifted, _ = likelihood.fractions(h, moved)
                pairs = zip(likelihood.factors, studies, strict=True)
                modes.append([factor.gaussian(shifted[:, factor.bins], near.mode).mode for factor, near in pairs])
            for array, up, down in zip(slopes, *modes, strict=True):
                array[:, :, j] = (up - down) / (2 * CLOCK_DIFFERENCE)
        return cls(clock, slope, studies, slopes)


def draw_conditionals(posterior: Posterior, marginal: Marginal, size: int, rng: np.random.Generator) -> tuple[Array, float]:
    """Draw independent parameter vectors from the posterior.

    Parameters
    ----------
    posterior : Posterior
        What was integrated.
    marginal : Marginal
        Its posterior of H.
    size : int
        Number of draws.
    rng : numpy.random.Generator
        Source of random numbers.

    Returns
    -------
    coordinates : ndarray, shape (size, parameters)
        Draws in sampling coordinates.
    acceptance : float
        Share of proposals that the chains accepted; near 1 where the Gaussians of the quadrature fit.
    """
    likelihood = MarginalLikelihood(posterior)
    # one draw from each of `size` equal slices of probability: quantiles of H are then almost exact
    h = marginal.quantile((rng.permutation(size) + rng.random(size)) / size)
    guide = _Guide.of(likelihood, marginal.nodes)
    nearest = np.abs(marginal.nodes[None, :] - h[:, None]).argmin(axis=1)
    offset = h - marginal.nodes[nearest]
    slope = guide.clock_slope[nearest]
    clock = Gaussian(guide.clock.mode[nearest] + offset[:, None] * slope, guide.clock.spread[nearest])
    studies = [
        (factor, gaussian.take(nearest), slopes[nearest])
        for factor, gaussian, slopes in zip(likelihood.factors, guide.studies, guide.slopes, strict=True)
    ]
    state = np.zeros((size, len(posterior.parameters)))
    log_weight = np.full(size, -np.inf)
    accepted = 0.0
    for step in range(CONDITIONAL_STEPS):
        proposal = np.zeros_like(state)
        proposal[:, 0] = h
        moved = clock.at(rng.standard_normal((size, 1, clock.mode.shape[1])))[:, 0]
        proposal[:, likelihood.clock_places] = moved
        log_proposal = clock.log_density(moved)
        change = np.concatenate([offset[:, None], moved - guide.clock.mode[nearest]], axis=1)
        for factor, gaussian, slopes in studies:
            here = Gaussian(gaussian.mode + np.einsum("vdm,vm->vd", slopes, change), gaussian.spread)
            drawn = here.at(rng.standard_normal((size, 1, factor.dimension)))[:, 0]
            proposal[:, factor.places] = drawn
            log_proposal = log_proposal + here.log_density(drawn)
        fresh = posterior.log_probability(proposal) - log_proposal
        take = (np.log(rng.random(size)) < fresh - log_weight) | ~np.isfinite(log_weight)
        state, log_weight = np.where(take[:, None], proposal, state), np.where(take, fresh, log_weight)
        accepted += float(take.mean()) if step else 0.0
    return state, accepted / (CONDITIONAL_STEPS - 1)
