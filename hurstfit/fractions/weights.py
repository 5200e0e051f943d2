"""A definition as weights on the nodes of a table.

Interpolation and convolution are linear in the tabulated fractions, so that a parent sample is a vector of weights over the
table's parent samples, and a criterion, scatter included, a matrix of weights over its criteria.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.definition import Definition
from hurstfit.fractions.spline import cardinal_weights

__all__ = ["LARGEST_THRESHOLD", "criterion_weights", "parent_weights"]

#: Points, and half-width in standard deviations, of the convolution with scatter.
SCATTER_POINTS, SCATTER_REACH = 241, 6.0
#: Share of the scatter that may fall beyond the largest threshold of the table, where the fraction is taken as constant.
BEYOND = 0.02
#: Largest threshold that may be asked for.  Larger ones serve the convolution with scatter; over windows about as long as
#: the walk they jump where the rate of a walk that never changed crosses them, which splines do not follow.
LARGEST_THRESHOLD = 1.0


def parent_weights(axes: TableAxes, definition: Definition, noise: str) -> NDArray[np.float64]:
    """Weights of a parent sample, shape (n_masses + 1,).

    Raises
    ------
    HurstfitError
        If the table does not hold the parent sample.
    """
    weights = np.zeros(axes.masses.size + 1)
    nodes, mu = axes.masses[1:], definition.min_mass
    if mu is None:
        weights[0] = 1.0
    elif mu == 0:
        weights[1] = 1.0
    elif nodes.size and nodes[0] <= mu <= nodes[-1]:
        weights[2:] = _on_axis(np.log(nodes), np.log([mu]))[0]
    else:
        held = f", and of more than {nodes[0]:g} to {nodes[-1]:g} of the mean mass" if nodes.size else ""
        raise HurstfitError(f"the {noise} table holds the parent samples of all walks, of any mass (0){held}; not {mu:g}")
    return weights


def criterion_weights(axes: TableAxes, definition: Definition, noise: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Weights of a criterion, scatter included.

    A walk at zero stays quiescent under any scatter; a rate q is measured below theta with the probability that a normal of width
    `scatter` in log10 brings it there, so that the fraction is the distribution function of q convolved in log10 theta.

    Parameters
    ----------
    axes : TableAxes
        Nodes of the table.
    definition : Definition
        What counts as quiescent.
    noise : str
        Name of the table in a message.

    Returns
    -------
    thresholds : ndarray, shape (m,)
        Values of theta that the weights are for: one, or for the criterion ``ssfr``, whose theta varies, all nodes
        that scatter leaves.
    weights : ndarray, shape (m, n_thresholds + 1)

    Raises
    ------
    HurstfitError
        If the table does not hold the criterion.
    """
    kind, nodes = definition.criterion.kind, axes.thresholds
    if kind == "zero":
        if definition.scatter:
            raise HurstfitError(
                "scatter has no effect on the criterion zero: leave it out, or choose a criterion with a threshold"
            )
        return np.ones(1), np.eye(1, nodes.size + 1)
    if nodes.size < 4:
        raise HurstfitError(
            f"the {noise} table holds too few thresholds for the criterion {definition.criterion}: {nodes.size}, not 4"
        )
    if kind == "rate":
        theta = np.array([definition.criterion.limit])
        if not nodes[0] <= theta[0] <= min(nodes[-1], LARGEST_THRESHOLD):
            raise HurstfitError(
                f"the {noise} table holds the criterion zero and thresholds from {nodes[0]:g} to "
                f"{min(nodes[-1], LARGEST_THRESHOLD):g}, not {theta[0]:g}"
            )
    else:
        theta = nodes if not definition.scatter else nodes[nodes <= nodes[-1] / 10 ** (2.1 * definition.scatter)]
        if theta.size < 4:
            raise HurstfitError(
                f"the {noise} table holds too few thresholds for the criterion {definition.criterion} with a scatter of "
                f"{definition.scatter:g} dex: {theta.size}, not 4"
            )
    if not definition.scatter:
        return theta, np.concatenate([np.zeros((theta.size, 1)), _on_axis(np.log(nodes), np.log(theta))], axis=1)
    z = np.linspace(-SCATTER_REACH, SCATTER_REACH, SCATTER_POINTS)
    density = np.exp(-0.5 * z**2)
    density /= density.sum()
    shifted = theta[:, None] * 10 ** (definition.scatter * z)
    lost = np.where(shifted > nodes[-1], density, 0.0).sum(axis=1).max()
    if lost > BEYOND:
        raise HurstfitError(
            f"a scatter of {definition.scatter:g} dex about {definition.criterion} reaches beyond the largest threshold of the "
            f"{noise} table, {nodes[-1]:g}: {lost:.0%} of it, at most {BEYOND:.0%} is allowed"
        )
    return theta, np.einsum("tz,tzc->tc", np.broadcast_to(density, shifted.shape), _distribution(nodes, shifted))


def _distribution(nodes: NDArray[np.float64], theta: NDArray[np.float64]) -> NDArray[np.float64]:
    """Weights of the fraction below any theta: linear between zero and the first node, constant beyond the last one."""
    inside = np.clip(theta, nodes[0], nodes[-1])
    share = np.minimum(theta / nodes[0], 1.0)[..., None]
    return np.concatenate([1.0 - share, share * cardinal_weights(np.log(nodes), np.log(inside))], axis=-1)


def _on_axis(nodes: NDArray[np.float64], x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Cardinal weights at each x, exactly one node where x lies on it; shape (x.size, nodes.size)."""
    weights = cardinal_weights(nodes, x)
    on = np.isclose(nodes[None, :], x[:, None], rtol=0, atol=1e-12)
    return np.where(on.any(axis=1, keepdims=True), on, weights)
