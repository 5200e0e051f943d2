"""The likelihood of one study with its selection terms integrated out.

Given the true fractions, the bins of different studies know nothing of each other's selection, so that the integral over all
selection terms is a product of small ones, one a study.  Each is done by adaptive Gauss-Hermite quadrature (Naylor & Smith
1982, Appl. Stat. 31, 214; Liu & Pierce 1994, Biometrika 81, 624): nodes are laid about the mode of likelihood times prior,
in units of its curvature there. Everything is vectorised over vectors of true fractions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from hurstfit.counts import BinomialCounts
from hurstfit.engines.gaussians import Gaussian, gauss_hermite, maximise
from hurstfit.posterior import Posterior
from hurstfit.quantiles import Quantiles
from hurstfit.selection import counted_fraction

__all__ = ["StudyFactor", "study_factors"]

Array = NDArray[np.float64]

#: Numbers (vectors x nodes x bins) that are worked on at one time: as many as stay in a processor's cache.
CHUNK = 100_000


@dataclass(frozen=True)
class StudyFactor:
    """One study: its counts, and its selection terms of which some are free.

    Attributes
    ----------
    bins : ndarray of int, shape (b,)
        Its bins among those of the posterior.
    counts : BinomialCounts
        Their counts.
    places : ndarray of int, shape (d,)
        Its free selection terms among the free parameters of the posterior.
    quantiles : Quantiles
        Priors of these.
    terms : tuple
        For each of completeness ratio, missed fraction and contamination or impurity: its place among the d free ones, or its
        fixed value.
    impure : bool
        Whether the last of these is an impurity.
    temper : float
        Power of the likelihood: 1, or less while a peak is looked for.
    """

    bins: NDArray[np.intp]
    counts: BinomialCounts
    places: NDArray[np.intp]
    quantiles: Quantiles
    terms: tuple[int | float, ...]
    impure: bool = False
    temper: float = 1.0

    @property
    def dimension(self) -> int:
        """Number of free selection terms."""
        return self.places.size

    def log_kernel(self, fraction: Array, t: Array) -> Array:
        """Log of likelihood times prior, without their constants.

        Parameters
        ----------
        fraction : ndarray, shape (vectors, b) or (vectors, points, b)
            True fractions.
        t : ndarray, shape (vectors, points, d)
            Selection terms in sampling coordinates.

        Returns
        -------
        ndarray, shape (vectors, points)
        """
        free = self.quantiles(t)
        r, u, v = (free[..., x, None] if isinstance(x, int) else x for x in self.terms)
        labels = (0.0, v) if self.impure else (v,)
        p = counted_fraction(fraction if fraction.ndim == 3 else fraction[:, None, :], r, u, *labels)
        return self.temper * self.counts.log_kernel(p) - 0.5 * (t**2).sum(axis=-1)

    def gaussian(self, fraction: Array, start: Array) -> Gaussian:
        """Osculating Gaussian of the selection terms for each vector of true fractions.

        Parameters
        ----------
        fraction : ndarray, shape (vectors, b)
            True fractions.
        start : ndarray, shape (vectors, d)
            Where to look for the mode.

        Returns
        -------
        Gaussian
        """
        return maximise(lambda chosen, t: self.log_kernel(fraction[chosen], t), start)

    def log_integral(self, fraction: Array, gaussian: Gaussian, order: int, *, bent: bool = False) -> Array:
        """Log of the integral over the selection terms of likelihood (without constants) times prior.

        Parameters
        ----------
        fraction : ndarray, shape (vectors, b)
            True fractions.
        gaussian : Gaussian
            Near that of the terms, for the same vectors; it decides how many nodes are needed, not what comes out.
        order : int
            Nodes along each term.
        bent : bool
            Whether nodes follow a ridge that is bent: see :meth:`along_ridge`.  Slower, and needed where counts are so large that
            they tie the terms to a thin sheet.

        Returns
        -------
        ndarray, shape (vectors,)
        """
        result = np.empty(fraction.shape[0])
        size = max(1, CHUNK // (order**self.dimension * self.bins.size))
        z, log_weights = gauss_hermite(order, self.dimension)
        log_weights = log_weights + 0.5 * (z**2).sum(axis=1)
        for i in range(0, fraction.shape[0], size):
            here, around = fraction[i : i + size], gaussian.take(np.arange(i, min(i + size, fraction.shape[0])))
            if bent and self.dimension > 1:
                points, log_volume = self.along_ridge(here, around, np.broadcast_to(z, (here.shape[0], *z.shape)))
            else:
                points, log_volume = around.at(z), around.log_scale[:, None]
            result[i : i + size] = logsumexp(self.log_kernel(here, points) + log_weights + log_volume, axis=1)
        return result

    def along_ridge(self, fraction: Array, gaussian: Gaussian, z: Array) -> tuple[Array, Array]:
        """Move standard normal nodes to a ridge that need not be straight.

        The first term is moved by the Gaussian of all terms.  Given the first, the others have a Gaussian of their own, which is
        found anew and moves the second; and so on (nested adaptive quadrature).  Each map is triangular, so that its volume
        is a product.

        Parameters
        ----------
        fraction : ndarray, shape (vectors, b)
            True fractions.
        gaussian : Gaussian
            Of the terms, for the same vectors.
        z : ndarray, shape (vectors, nodes, d)
            Standard normal nodes.

        Returns
        -------
        points : ndarray, shape (vectors, nodes, d)
        log_volume : ndarray, shape (vectors, nodes)
            Log of the volume of the map at each node.
        """
        vectors, nodes, d = z.shape
        # nodes that agree in the leading terms share what follows
        points, log_volume = np.empty((vectors * nodes, d)), np.zeros(vectors * nodes)
        flat, rows = z.reshape(-1, d), np.repeat(np.arange(vectors), nodes)
        around, owner = gaussian, rows
        for j in range(d):
            # lower triangular: the first of the remaining terms is moved by its own spread alone
            scale = around.spread[owner, 0, 0]
            points[:, j] = around.mode[owner, 0] + scale * flat[:, j]
            log_volume += np.log(scale)
            if j == d - 1:
                break
            # what the others do when this one is held
            follow = around.spread[:, 1:, 0] / around.spread[:, :1, 0]
            first, owner_next = _runs(np.column_stack([rows, flat[:, : j + 1]]))
            held, whose = points[first, : j + 1], owner[first]
            start = around.mode[whose, 1:] + follow[whose] * (held[:, j] - around.mode[whose, 0])[:, None]
            given = fraction[rows[first]]

            def conditional(chosen: NDArray[np.intp], rest: Array, held: Array = held, given: Array = given) -> Array:
                fixed = np.broadcast_to(held[chosen, None, :], (*rest.shape[:2], held.shape[1]))
                return self.log_kernel(given[chosen], np.concatenate([fixed, rest], axis=2))

            around, owner = maximise(conditional, start), owner_next
        return points.reshape(z.shape), log_volume.reshape(vectors, nodes)


def _runs(keys: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Find runs of equal rows: where each begins, and to which one every row belongs."""
    new = np.append(True, np.any(keys[1:] != keys[:-1], axis=1))
    return np.flatnonzero(new), np.cumsum(new) - 1


def study_factors(posterior: Posterior) -> list[StudyFactor]:
    """Split a posterior into its studies."""
    place = {name: i for i, name in enumerate(posterior.names)}
    factors = []
    for study in posterior.bins.studies:
        mine = np.flatnonzero(posterior.bins.study == study)
        selection = posterior.selection[study]
        priors = {term: selection.prior(term) for term in selection.terms}
        free = [term for term in selection.terms if not priors[term].is_fixed]
        factors.append(
            StudyFactor(
                bins=mine,
                counts=posterior.counts.select(mine),
                places=np.array([place[f"{term}[{study}]"] for term in free], dtype=np.intp),
                quantiles=Quantiles(tuple(priors[term] for term in free)),
                terms=tuple(free.index(term) if term in free else float(priors[term].mean) for term in selection.terms),
                impure=selection.impurity is not None,
            )
        )
    return factors
