"""Which engine: the exact one where it applies, the ensemble otherwise, and why."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from hurstfit.engines.blocks import Keeper
from hurstfit.engines.chain import Chain
from hurstfit.engines.conditionals import draw_conditionals
from hurstfit.engines.convergence import assess
from hurstfit.engines.joint import JointSettings, sample_joint
from hurstfit.engines.quadrature import NotSettledError, integrate
from hurstfit.errors import HurstfitError
from hurstfit.posterior import Posterior

__all__ = ["KINDS", "run_engine"]

#: Engines that a configuration may name; "auto" is the quadrature where it applies and settles, otherwise the joint ensemble.
KINDS = ("auto", "quadrature", "joint")
#: Independent draws of the quadrature: at least so many, and so many for each effective draw that is asked for.
DRAWS, DRAWS_PER_TARGET = 4000, 2
#: Columns that independent draws are laid out in, so that they can be assessed like chains.
COLUMNS = 4


def run_engine(
    posterior: Posterior,
    kind: str,
    settings: JointSettings,
    progress: Callable[[int, str], None] | None = None,
    keeper: Keeper | None = None,
) -> Chain:
    """Sample a posterior.

    Parameters
    ----------
    posterior : Posterior
        What to sample.
    kind : {'auto', 'quadrature', 'joint'}
        Engine.
    settings : JointSettings
        Seed, targets and limits.
    progress : callable, optional
        Called with the number of moves since the last call, and how far things are, in words.
    keeper : Keeper, optional
        Where the ensemble keeps finished blocks.

    Returns
    -------
    Chain

    Raises
    ------
    HurstfitError
        If the quadrature was asked for by name and does not apply or settle.
    """
    if kind == "joint":
        return sample_joint(posterior, settings, progress, keeper)
    try:
        return _by_quadrature(posterior, settings, progress)
    except NotSettledError as reason:
        if kind == "quadrature":
            raise HurstfitError(f'the quadrature engine cannot be used: {reason}; set kind = "joint" in [engine]') from reason
        chain = sample_joint(posterior, settings, progress, keeper)
        return replace(chain, chosen=f"the quadrature cannot be used: {reason}")


def _by_quadrature(posterior: Posterior, settings: JointSettings, progress: Callable[[int, str], None] | None) -> Chain:
    if "rho" in posterior.shared_names:
        raise NotSettledError("the correlation rho of the counts is free, which it does not integrate over")
    report = (lambda words: progress(0, words)) if progress is not None else None
    marginal = integrate(posterior, report)
    if report is not None:
        report("drawing")
    size = max(DRAWS, int(DRAWS_PER_TARGET * settings.target_ess))
    size += -size % COLUMNS
    rng = np.random.default_rng(np.random.SeedSequence(settings.seed).spawn(3)[2])
    coordinates, acceptance = draw_conditionals(posterior, marginal, size, rng)
    if acceptance < 0.1:
        raise NotSettledError(
            f"its Gaussians fit the conditional distributions badly (only {acceptance:.0%} of proposals accepted)"
        )
    shaped = coordinates.reshape(size // COLUMNS, COLUMNS, -1)
    physical = posterior.physical(shaped)
    accuracy = max(marginal.likelihood_error, 1e-4)
    settled = f"the marginal likelihood of H is exact to {accuracy:.1g} with {marginal.orders[0]} nodes a term"
    return Chain(
        coordinates=shaped,
        log_probability=posterior.log_probability(coordinates).reshape(shaped.shape[:2]),
        accepted=np.full(COLUMNS, size // COLUMNS),
        warmup=0,
        thin=1,
        convergence=tuple(assess(physical[..., i]) for i in range(physical.shape[-1])),
        converged=True,
        stopped=settled,
        engine="quadrature",
        chosen="H is integrated exactly, everything else is drawn given H",
        log_evidence=marginal.log_evidence,
        log_evidence_error=marginal.log_evidence_error,
    )
