"""Joint sampling of every parameter with an affine-invariant ensemble.

The reference engine that anyone can understand: emcee (Foreman-Mackey et al. 2013, PASP 125, 306) over all parameters at once, in
coordinates in which the prior is standard normal.  Up to five parameters walkers stretch (Goodman & Weare 2010); above, they move
along differences of other walkers (differential evolution, ter Braak & Vrugt 2008), which loses less with dimension.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hurstfit.engines.blocks import Block, Keeper
from hurstfit.engines.chain import Chain
from hurstfit.engines.convergence import Convergence, assess
from hurstfit.engines.interrupts import interrupts_when_asked
from hurstfit.errors import HurstfitError
from hurstfit.posterior import Posterior

__all__ = ["INTERRUPTED", "JointSettings", "ensemble_moves", "sample_joint"]

#: Why a chain stopped that the user broke off.
INTERRUPTED = "the user interrupted"

#: Share of the chain, from its start, that is left out as warm-up.
WARMUP_SHARE = 0.25
#: Steps before convergence is first looked at.
FIRST_LOOK = 500
#: How much longer the chain is at each further look.
LOOK_AGAIN = 1.3
#: Stored steps of a block: what an interrupted run loses at most.
BLOCK_STEPS = 250
#: Stored steps below which an interrupted chain is not worth keeping.
FEWEST_STEPS = 8


@dataclass(frozen=True)
class JointSettings:
    """How to sample and when to stop.

    Attributes
    ----------
    seed : int
        Seed of all random numbers.
    walkers : int or None
        Size of the ensemble; by default four times the number of parameters, at least 32.
    max_steps : int
        Steps of every walker after which sampling stops in any case.
    target_ess : float
        Bulk and tail effective sample size that every parameter must reach.
    max_rhat : float
        Rank-normalised split R-hat that no parameter may exceed.
    """

    seed: int = 1
    walkers: int | None = None
    max_steps: int = 100_000
    target_ess: float = 2000.0
    max_rhat: float = 1.01

    def ensemble(self, dimension: int) -> int:
        """Give the number of walkers for a number of parameters."""
        return self.walkers if self.walkers is not None else max(32, 4 * dimension)


def sample_joint(
    posterior: Posterior,
    settings: JointSettings,
    progress: Callable[[int, str], None] | None = None,
    keeper: Keeper | None = None,
) -> Chain:
    """Sample all parameters until the stopping rule holds or the step limit is reached.

    Parameters
    ----------
    posterior : Posterior
        What to sample.
    settings : JointSettings
        Seed, ensemble and stopping rule.
    progress : callable, optional
        Called with the number of moves since the last call, and how far convergence is, in words.
    keeper : Keeper, optional
        Where finished blocks are kept; those that are there already are taken up, and the chain is the one that would have been.

    Returns
    -------
    Chain
        Marked as not converged where the step limit was reached, or the user interrupted and nothing is kept.

    Raises
    ------
    HurstfitError
        If hardly any draw from the prior is possible at all.
    KeyboardInterrupt
        If the user interrupts, and finished blocks are kept or there is nothing to return.
    """
    import emcee

    dimension = len(posterior.parameters)
    walkers = settings.ensemble(dimension)
    if walkers % 2 or walkers < 2 * dimension:
        raise ValueError(f"walkers must be an even number of at least {2 * dimension} for {dimension} parameters, not {walkers}")
    streams = np.random.SeedSequence(settings.seed).spawn(2)
    sampler = emcee.EnsembleSampler(
        walkers, dimension, posterior.log_probability, vectorize=True, moves=ensemble_moves(dimension)
    )
    thin = max(1, dimension // 3)
    blocks = keeper.finished() if keeper is not None else []
    if blocks:
        last = blocks[-1]
        state = emcee.State(last.coordinates[-1], log_prob=last.log_probability[-1], random_state=last.random_state)
    else:
        # emcee draws from a legacy RandomState: seeded here from the run's own seed, so that nothing global enters
        twister = np.random.RandomState(np.random.MT19937(streams[1])).get_state()
        start = _starting_points(posterior, walkers, np.random.default_rng(streams[0]))
        state = emcee.State(start, random_state=twister)
    steps, step_limit = sum(block.coordinates.shape[0] for block in blocks), max(settings.max_steps // thin, 1)
    if progress is not None and steps:
        progress(steps * thin, "taken up again")
    found: tuple[Convergence, ...] = ()
    words, look_at, stopped, converged = "warming up", FIRST_LOOK // thin, "", False
    while look_at < steps:
        look_at = int(look_at * LOOK_AGAIN)
    try:
        with interrupts_when_asked() as ask:
            while not stopped:
                # the same looks at the same steps, whether or not the chain was ever interrupted
                if steps >= min(look_at, step_limit):
                    found = _assess(np.concatenate([block.coordinates for block in blocks]), posterior)
                    converged, words = _met(found, settings), _how_far(found)
                    look_at = int(look_at * LOOK_AGAIN)
                if converged:
                    stopped = "the stopping rule was met"
                elif steps >= step_limit:
                    stopped = f"the step limit of {settings.max_steps} was reached"
                else:
                    size = min(BLOCK_STEPS, look_at - steps, step_limit - steps)
                    for state in sampler.sample(state, iterations=max(size, 1), thin_by=thin):  # noqa: B007, B020
                        if progress is not None:
                            progress(thin, words)
                        ask()
                    blocks.append(_block(sampler))
                    steps += blocks[-1].coordinates.shape[0]
                    if keeper is not None:
                        keeper.keep(len(blocks) - 1, blocks[-1])
    except KeyboardInterrupt:
        if sampler.iteration:
            # between two moves nothing is half done: what there is of this block is a block too
            blocks.append(_block(sampler))
            if keeper is not None:
                keeper.keep(len(blocks) - 1, blocks[-1])
        if keeper is not None or sum(block.coordinates.shape[0] for block in blocks) < FEWEST_STEPS:
            raise
        stopped, converged = INTERRUPTED, False
        found = _assess(np.concatenate([block.coordinates for block in blocks]), posterior)
    coordinates = np.concatenate([block.coordinates for block in blocks])
    return Chain(
        coordinates,
        np.concatenate([block.log_probability for block in blocks]),
        np.sum([block.accepted for block in blocks], axis=0),
        _warmup(coordinates.shape[0]),
        thin,
        found,
        converged,
        stopped,
    )


def _block(sampler: Any) -> Block:
    """Take what a sampler has done since it was last asked, and let it forget it."""
    _, key, position, has_normal, normal = sampler.random_state
    block = Block(
        sampler.get_chain(),
        sampler.get_log_prob(),
        sampler.backend.accepted.astype(np.int64),
        np.array(key, dtype=np.uint32),
        (int(position), int(has_normal), float(normal)),
    )
    sampler.reset()
    return block


def ensemble_moves(dimension: int) -> list[tuple[object, float]]:
    """Choose emcee's moves, with their weights, for a number of parameters.

    emcee's snooker move is left out on purpose: in emcee 3.1.6 it does not leave the target as it is (a standard normal in 12
    dimensions comes out with a variance of 0.85 when a fifth of the moves are of this kind).
    """
    import emcee

    if dimension <= 5:
        return [(emcee.moves.StretchMove(), 0.5), (emcee.moves.DEMove(), 0.5)]
    return [(emcee.moves.DEMove(), 0.8), (emcee.moves.StretchMove(), 0.2)]


def _starting_points(posterior: Posterior, walkers: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Choose walkers among draws from the prior, by a likelihood tempered until enough of them count.

    Starting from the prior finds every mode that has prior mass; tempering keeps walkers off its empty parts.
    """
    tried = rng.standard_normal((max(4096, 32 * walkers), len(posterior.parameters)))
    log_likelihood = posterior.log_likelihood(posterior.physical(tried))
    possible = np.isfinite(log_likelihood)
    if possible.sum() < walkers:
        raise HurstfitError(
            "the prior and the data contradict each other: "
            f"{possible.sum()} of {tried.shape[0]} draws from the prior are possible at all; widen the priors"
        )
    tried, log_likelihood = tried[possible], log_likelihood[possible] - log_likelihood[possible].max()
    temper = 1.0
    while True:
        weights = np.exp(temper * log_likelihood)
        if weights.sum() ** 2 / (weights**2).sum() >= min(2 * walkers, 0.5 * weights.size) or temper < 1e-12:
            break
        temper /= 2
    if np.count_nonzero(weights) < walkers:
        weights = np.ones_like(weights)
    chosen = rng.choice(weights.size, size=walkers, replace=False, p=weights / weights.sum())
    return tried[chosen]


def _warmup(steps: int) -> int:
    return int(WARMUP_SHARE * steps)


def _assess(chain: NDArray[np.float64], posterior: Posterior) -> tuple[Convergence, ...]:
    """Convergence of every parameter in its own units, without the warm-up."""
    used = posterior.physical(chain[_warmup(chain.shape[0]) :])
    return tuple(assess(used[..., i]) for i in range(used.shape[-1]))


def _met(found: tuple[Convergence, ...], settings: JointSettings) -> bool:
    return all(
        c.rhat < settings.max_rhat and min(c.ess_bulk, c.ess_tail) > settings.target_ess for c in found
    )  # a comparison with nan is false: what cannot be judged has not converged


def _how_far(found: tuple[Convergence, ...]) -> str:
    rhat = np.max([c.rhat for c in found])
    ess = np.min([min(c.ess_bulk, c.ess_tail) for c in found])
    return f"largest R-hat {rhat:.3f}, smallest ESS {ess:.0f}"
