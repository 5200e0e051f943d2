"""Independent draws of every parameter, once the posterior of H is known exactly.

H comes from its marginal distribution, everything else from its conditional distribution given H, by a few steps of an
independence Metropolis chain (Tierney 1994, Ann. Stat. 22, 1701) whose proposals are the Gaussians of the quadrature.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator

from hurstfit.engines.gaussians import Gaussian
from hurstfit.engines.peaks import Peaks
from hurstfit.engines.quadrature import Marginal, MarginalLikelihood
from hurstfit.posterior import Posterior

__all__ = ["draw_conditionals"]

Array = NDArray[np.float64]

#: Proposals that a chain must have accepted on average before its state counts as a draw, and steps it may take.
ACCEPTED, LEAST_STEPS, MOST_STEPS = 20.0, 8, 200
#: Share of proposals of each block of parameters that are wider, and by how much: without them the chain would hardly ever reach
#: tails that are heavier than those of a Gaussian, and draws of parameters on a curved ridge would come out too narrow.
WIDER_SHARE, WIDER = 0.4, 2.2


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
    peaks = _between(marginal.nodes, marginal.peaks, h)
    state = np.zeros((size, len(posterior.parameters)))
    log_weight = np.full(size, -np.inf)
    accepted, step, last = 0.0, 0, LEAST_STEPS
    while step < last:
        proposal, log_proposal = _propose(likelihood, marginal.bent, h, peaks, rng)
        fresh = posterior.log_probability(proposal) - log_proposal
        # a state that is not possible gives way to whatever comes
        stands = np.isfinite(log_weight)
        gain = np.subtract(fresh, log_weight, out=np.full(size, np.inf), where=stands)
        take = np.log(rng.random(size)) < gain
        state, log_weight = np.where(take[:, None], proposal, state), np.where(take, fresh, log_weight)
        accepted += float(take.mean()) if step else 0.0
        step += 1
        if step == LEAST_STEPS:
            last = min(MOST_STEPS, max(step, math.ceil(ACCEPTED / max(accepted / (step - 1), 1e-3)) + 1))
    return state, accepted / (step - 1)


def _propose(likelihood: MarginalLikelihood, bent: bool, h: Array, peaks: Peaks, rng: np.random.Generator) -> tuple[Array, Array]:
    """Draw everything but H from the Gaussians about the peaks; and the log-density of these draws."""
    size, posterior = h.size, likelihood.posterior
    proposal = np.zeros((size, len(posterior.parameters)))
    proposal[:, 0] = h
    m = len(likelihood.clock_places)
    blocks = [_block(size, d, rng) for d in (m, *(factor.dimension for factor in likelihood.factors))]
    z = np.concatenate([block for block, _ in blocks], axis=1)
    clock = peaks.clock.at(z[:, None, :m])[:, 0]
    proposal[:, likelihood.clock_places] = clock
    log_proposal = sum((log_density for _, log_density in blocks), -peaks.clock.log_scale)
    fractions = likelihood.fractions(h, clock)[0] if bent else None
    done = m
    for factor, gaussian in zip(likelihood.factors, peaks.given_clock(clock), strict=True):
        mine = z[:, None, done : done + factor.dimension]
        done += factor.dimension
        if fractions is not None and factor.dimension:
            given = fractions[:, factor.bins]
            drawn, log_volume = factor.along_ridge(given, factor.gaussian(given, gaussian.mode), mine)
            log_proposal = log_proposal - log_volume[:, 0]
        else:
            drawn = gaussian.at(mine)
            log_proposal = log_proposal - gaussian.log_scale
        proposal[:, factor.places] = drawn[:, 0]
    return proposal, log_proposal


def _block(size: int, dimension: int, rng: np.random.Generator) -> tuple[Array, Array]:
    """Draw deviates of one block, some of them wider; and their log-density, without the factors of 2 pi."""
    wider = rng.random(size) < WIDER_SHARE
    z = rng.standard_normal((size, dimension)) * np.where(wider, WIDER, 1.0)[:, None]
    return z, _log_density(z)


def _log_density(z: Array) -> Array:
    square = (z**2).sum(axis=1)
    narrow = np.log1p(-WIDER_SHARE) - 0.5 * square
    wide = np.log(WIDER_SHARE) - 0.5 * square / WIDER**2 - z.shape[1] * np.log(WIDER)
    return np.logaddexp(narrow, wide)


def _between(nodes: Array, peaks: Peaks, h: Array) -> Peaks:
    """Peaks at other values of H: modes interpolated, everything else that of the nearest node."""
    nearest = np.abs(nodes[None, :] - h[:, None]).argmin(axis=1)
    here = peaks.take(nearest)

    def moved(gaussian: Gaussian, near: Gaussian) -> Gaussian:
        return Gaussian(PchipInterpolator(nodes, gaussian.mode, axis=0)(h), near.spread) if gaussian.mode.size else near

    studies = tuple(moved(all_of, near) for all_of, near in zip(peaks.studies, here.studies, strict=True))
    return Peaks(here.log_height, moved(peaks.clock, here.clock), studies, here.slopes, here.found)
