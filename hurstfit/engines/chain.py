"""What an engine gives back, whichever it is."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hurstfit.engines.convergence import Convergence

__all__ = ["Chain"]


@dataclass(frozen=True)
class Chain:
    """Draws from a posterior, and how they came about.

    Attributes
    ----------
    coordinates : ndarray, shape (steps, walkers, parameters)
        Draws in sampling coordinates, warm-up included.
    log_probability : ndarray, shape (steps, walkers)
        Log of likelihood times prior at each.
    accepted : ndarray of int, shape (walkers,)
        How many of the moves that ended a stored step were accepted.
    warmup : int
        Leading steps that are not used.
    thin : int
        Ensemble moves for each stored step; 1 for independent draws.
    convergence : tuple of Convergence
        Of every parameter, over the steps that are used.
    converged : bool
        Whether the stopping rule was met.
    stopped : str
        Why sampling stopped, in words.
    engine : str
        Which engine it was.
    chosen : str
        Why this engine, in words.
    log_evidence, log_evidence_error : float
        Log of the probability of the counts and its error; nan where the engine does not know.
    """

    coordinates: NDArray[np.float64]
    log_probability: NDArray[np.float64]
    accepted: NDArray[np.int64]
    warmup: int
    thin: int
    convergence: tuple[Convergence, ...]
    converged: bool
    stopped: str
    engine: str = "joint"
    chosen: str = "as configured"
    log_evidence: float = math.nan
    log_evidence_error: float = math.nan
