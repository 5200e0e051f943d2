"""What an ensemble has done so far, in blocks that can be kept and taken up again.

A block is a stretch of the chain with the state that its random numbers were left in, so that a chain taken up again is the chain
that would have been, bit for bit.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Block", "Keeper"]


@dataclass(frozen=True)
class Block:
    """A stretch of an ensemble's chain.

    Attributes
    ----------
    coordinates : ndarray, shape (steps, walkers, parameters)
        Positions.
    log_probability : ndarray, shape (steps, walkers)
        Log of likelihood times prior there.
    accepted : ndarray of int, shape (walkers,)
        How many of the moves that ended a stored step were accepted, in this stretch.
    random_key : ndarray of uint32, shape (624,)
        State of the Mersenne twister at its end.
    random_rest : tuple of (int, int, float)
        Position in the key, whether a normal is left over, and that normal.
    """

    coordinates: NDArray[np.float64]
    log_probability: NDArray[np.float64]
    accepted: NDArray[np.int64]
    random_key: NDArray[np.uint32]
    random_rest: tuple[int, int, float]

    @property
    def random_state(self) -> tuple[Any, ...]:
        """State as numpy's legacy generator, which emcee draws from, takes it."""
        return ("MT19937", self.random_key, *self.random_rest)


class Keeper(Protocol):
    """Where finished blocks go, and come from when a run is taken up again."""

    def finished(self) -> list[Block]:
        """Give the blocks that are there, in order."""

    def keep(self, index: int, block: Block) -> None:
        """Keep a block so that nothing can be lost of it any more."""
