"""Where the posterior peaks once H is given: step and start of the walk, and the selection terms of every study, together.

Given the clock, studies know nothing of each other's terms, so that the matrix of second derivatives is an arrow: one small block
a study, and a border that belongs to the clock.  A Newton step costs as much as the studies one by one, and the Gaussian of the
clock with the terms integrated out follows from the same blocks (their Schur complement).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hurstfit.engines.gaussians import CLOSE_ENOUGH, FURTHEST_STEP, Gaussian, derivatives, inverse_root, stencil, uphill
from hurstfit.engines.study_integral import StudyFactor

__all__ = ["Peaks", "find_peaks"]

Array = NDArray[np.float64]
#: From chosen vectors and clocks in their coordinates, (chosen, points, m), to true fractions, (chosen, points, bins).
Fractions = Callable[[NDArray[np.intp], Array], Array]


@dataclass(frozen=True)
class Peaks:
    """The Gaussian that osculates the posterior of everything but H, for many values of H.

    Attributes
    ----------
    log_height : ndarray, shape (vectors,)
        Log of likelihood times prior where the last step began, without their constants.
    clock : Gaussian
        Of step and start, selection terms integrated out.
    studies : tuple of Gaussian
        Of each study's selection terms, with the clock at its mode.
    slopes : tuple of ndarray, shape (vectors, d, m)
        Change of their modes with the clock.
    found : ndarray of bool, shape (vectors,)
        Whether the search arrived.
    """

    log_height: Array
    clock: Gaussian
    studies: tuple[Gaussian, ...]
    slopes: tuple[Array, ...]
    found: NDArray[np.bool_]

    @property
    def log_laplace(self) -> Array:
        """Laplace's approximation to the log of the integral over everything but H."""
        return self.log_height + self.clock.log_scale + sum(study.log_scale for study in self.studies)

    def take(self, index: NDArray[np.intp]) -> Peaks:
        """Peaks of chosen vectors."""
        return Peaks(
            self.log_height[index],
            self.clock.take(index),
            tuple(study.take(index) for study in self.studies),
            tuple(slope[index] for slope in self.slopes),
            self.found[index],
        )

    def joined(self, other: Peaks) -> Peaks:
        """Peaks of these vectors and then of others."""
        return self._combined(other, lambda mine, its: np.concatenate([mine, its]))

    def replaced(self, index: NDArray[np.intp], other: Peaks) -> Peaks:
        """Peaks of these vectors, but of chosen ones those of another."""

        def put(mine: NDArray[Any], its: NDArray[Any]) -> NDArray[Any]:
            result = mine.copy()
            result[index] = its
            return result

        return self._combined(other, put)

    def _combined(self, other: Peaks, combine: Callable[[Any, Any], Any]) -> Peaks:
        def gaussian(mine: Gaussian, its: Gaussian) -> Gaussian:
            return Gaussian(combine(mine.mode, its.mode), combine(mine.spread, its.spread))

        return Peaks(
            combine(self.log_height, other.log_height),
            gaussian(self.clock, other.clock),
            tuple(gaussian(mine, its) for mine, its in zip(self.studies, other.studies, strict=True)),
            tuple(combine(mine, its) for mine, its in zip(self.slopes, other.slopes, strict=True)),
            combine(self.found, other.found),
        )

    def given_clock(self, clock: Array) -> list[Gaussian]:
        """Gaussians of the selection terms at other clocks, (vectors, m)."""
        moved = clock - self.clock.mode
        return [
            Gaussian(study.mode + np.einsum("vdm,vm->vd", slope, moved), study.spread)
            for study, slope in zip(self.studies, self.slopes, strict=True)
        ]


def find_peaks(fractions: Fractions, factors: list[StudyFactor], clock: Array, terms: list[Array], iterations: int) -> Peaks:
    """Find the peak of everything but H by a damped Newton method, for many values of H at once.

    Parameters
    ----------
    fractions : callable
        True fractions of chosen vectors at given clocks.
    factors : list of StudyFactor
        The studies.
    clock : ndarray, shape (vectors, m)
        Where to start.
    terms : list of ndarray, shapes (vectors, d)
        Where to start with each study's selection terms.
    iterations : int
        At most so many steps.

    Returns
    -------
    Peaks
    """
    peaks, active = _newton(fractions, factors, np.arange(clock.shape[0]), clock, terms)
    for _ in range(iterations - 1):
        if not active.size:
            break
        again = peaks.take(active)
        found, still = _newton(fractions, factors, active, again.clock.mode, [study.mode for study in again.studies])
        peaks = peaks.replaced(active, found)
        active = active[still]
    return peaks


def _newton(
    fractions: Fractions, factors: list[StudyFactor], vectors: NDArray[np.intp], clock: Array, terms: list[Array]
) -> tuple[Peaks, NDArray[np.intp]]:
    """Take one step: peaks as they look from where it begins, moved; and which of them are not there yet."""
    m = clock.shape[1]
    around = fractions(vectors, clock[:, None, :] + stencil(m))
    gradient, curvature = -clock, np.broadcast_to(np.eye(m), (vectors.size, m, m))
    log_height, decrement = -0.5 * (clock**2).sum(axis=1), np.zeros(vectors.size)
    roots, pulls, slopes = [], [], []
    for factor, t in zip(factors, terms, strict=True):
        value, slope, matrix = _expand(factor, around[..., factor.bins], t, m)
        root = inverse_root(matrix[:, m:, m:])
        inverse = root @ np.swapaxes(root, 1, 2)
        response = -inverse @ matrix[:, m:, :m]
        pull = np.einsum("vij,vj->vi", inverse, slope[:, m:])
        log_height = log_height + value
        gradient = gradient + slope[:, :m] + np.einsum("vdm,vd->vm", response, slope[:, m:])
        curvature = curvature + matrix[:, :m, :m] + matrix[:, :m, m:] @ response
        decrement = decrement + np.einsum("vi,vi->v", pull, slope[:, m:])
        roots.append(root)
        pulls.append(pull)
        slopes.append(response)
    clock_root = inverse_root(curvature)
    scaled = np.einsum("vij,vi->vj", clock_root, gradient)
    clock_step = np.einsum("vij,vj->vi", clock_root, scaled)
    steps = [pull + np.einsum("vdm,vm->vd", slope, clock_step) for pull, slope in zip(pulls, slopes, strict=True)]
    near = (scaled**2).sum(axis=1) + decrement < CLOSE_ENOUGH**2
    share = np.ones((vectors.size, 1))
    if not near.all():
        largest = np.max([np.abs(step).max(axis=1, initial=1e-300) for step in (clock_step, *steps)], axis=0)
        whole = np.minimum(1.0, FURTHEST_STEP / largest)[:, None]

        def along(part: Array) -> Array:
            moved = clock + part * whole * clock_step
            here = fractions(vectors, moved[:, None, :])[:, 0]
            height = -0.5 * (moved**2).sum(axis=1)
            for factor, t, step in zip(factors, terms, steps, strict=True):
                height = height + factor.log_kernel(here[:, factor.bins], (t + part * whole * step)[:, None, :])[:, 0]
            return height

        share = whole * uphill(along, log_height, near)
    studies = tuple(Gaussian(t + share * step, root) for t, step, root in zip(terms, steps, roots, strict=True))
    peaks = Peaks(log_height, Gaussian(clock + share * clock_step, clock_root), studies, tuple(slopes), near)
    return peaks, np.flatnonzero(~near & (share[:, 0] > 0))


def _expand(factor: StudyFactor, fractions: Array, terms: Array, m: int) -> tuple[Array, Array, Array]:
    """Expand one study to second order in clock and terms.

    Parameters
    ----------
    factor : StudyFactor
        The study.
    fractions : ndarray, shape (vectors, points, b)
        True fractions on the stencil of the clock.
    terms : ndarray, shape (vectors, d)
        Its selection terms.
    m : int
        Free parameters of the clock.

    Returns
    -------
    value, gradient, curvature : ndarray, shapes (vectors,), (vectors, m + d), (vectors, m + d, m + d)
    """
    points, clocks = _joint_stencil(m, factor.dimension)
    values = factor.log_kernel(fractions[:, clocks], terms[:, None, :] + points[:, m:])
    return values[:, 0], *derivatives(values, m + factor.dimension)


@lru_cache(maxsize=32)
def _joint_stencil(m: int, d: int) -> tuple[Array, NDArray[np.intp]]:
    """Stencil of clock and terms together, and which point of the clock's own stencil each of its points is at."""
    points, clocks = stencil(m + d), stencil(m)
    return points, (points[:, None, :m] == clocks[None]).all(axis=2).argmax(axis=1)
