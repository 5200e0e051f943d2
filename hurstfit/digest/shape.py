"""What the shape of the posterior of H warns of: an end of its prior, a prior that says it all, two modes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from hurstfit.priors import Prior

__all__ = ["shape_cautions"]

#: Bins in which the shape of a posterior is looked at, and how much its draws may be correlated when noise is judged.
SHAPE_BINS, EFFECTIVE_LOSS = 40, 4.0
#: Density at the end of the prior, in units of the highest, above which the prior cuts the posterior off.
CUT_OFF = 0.3
#: Width of the posterior in units of the prior's above which the data hardly constrain H.
UNCONSTRAINED = 0.85


def shape_cautions(draws: NDArray[np.float64], prior: Prior) -> list[str]:
    """Say where the posterior of H is cut off by its prior, is no narrower than its prior, or has two modes.

    Parameters
    ----------
    draws : ndarray, shape (draws,)
        Posterior draws of H.
    prior : Prior
        Prior of H.

    Returns
    -------
    list of str
        A sentence each; empty where the posterior is of one piece within its prior.
    """
    cautions = []
    inside = np.quantile(draws, (0.001, 0.999))
    counts, edges = np.histogram(draws, bins=SHAPE_BINS, range=tuple(inside))
    smooth = np.convolve(counts, np.ones(3) / 3, mode="same")
    ends = prior.ppf(np.array([0.0, 1.0]))
    width = float(np.diff(np.quantile(draws, (0.16, 0.84)))[0])
    if width > UNCONSTRAINED * float(np.diff(prior.ppf(np.array([0.16, 0.84])))[0]):
        return ["the data hardly constrain H: its posterior is about as wide as its prior, and says what the prior says"]
    for end, density in ((ends[0], counts[:2].mean()), (ends[1], counts[-2:].mean())):
        reaches = abs((inside[0] if end == ends[0] else inside[1]) - end) < edges[1] - edges[0]
        if reaches and density > CUT_OFF * smooth.max():
            cautions.append(
                f"the posterior of H is cut off by the end of its prior at {end:g}: its median and intervals depend on "
                "where the prior ends"
            )
    # two modes: a valley between two peaks that counting noise does not explain
    peaks = [int(np.argmax(smooth))]
    for side in (slice(0, peaks[0]), slice(peaks[0] + 1, None)):
        part = smooth[side]
        if part.size:
            other = int(np.argmax(_beyond_valley(smooth, peaks[0], side)))
            valley = smooth[min(other, peaks[0]) : max(other, peaks[0]) + 1].min()
            height = smooth[other]
            noise = np.sqrt(max(height, 1.0) / 3 * EFFECTIVE_LOSS)
            if height > 0.05 * smooth[peaks[0]] and valley < 0.6 * height and height - valley > 5 * noise:
                cautions.append(
                    f"the posterior of H has two modes, near {edges[peaks[0]]:.3g} and {edges[other]:.3g}: one median and one "
                    "interval do not describe it; look at the figure"
                )
    return cautions


def _beyond_valley(smooth: NDArray[np.float64], peak: int, side: slice) -> NDArray[np.float64]:
    """Heights on one side of a peak above the lowest point that lies between, so that its maximum is a second mode."""
    rise = np.full(smooth.size, -np.inf)
    indices = range(*side.indices(smooth.size))
    ordered = indices if side.start else reversed(indices)
    lowest = smooth[peak]
    for i in ordered:
        lowest = min(lowest, smooth[i])
        rise[i] = smooth[i] - lowest
    return rise
