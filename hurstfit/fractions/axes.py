"""The axes of a fraction table: which H, steps, parent samples, windows and thresholds it holds."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["DEFAULT_STEPS", "TableAxes", "default_axes"]

#: Step numbers of the default table: every one up to 8, then four an octave up to 64, then two to three an octave.
DEFAULT_STEPS = (
    *range(1, 9), 10, 12, 14, 16, 20, 24, 28, 32, 40, 48, 64, 80, 96, 128, 160, 192, 256, 320, 384, 512, 640, 768, 1024, 1280,
    1536, 1792, 2048,
)  # fmt: skip
DEFAULT_MASSES = (0.0, 0.01, 0.02, 0.05, 0.1, 0.2, 0.3, 0.5)
DEFAULT_WINDOWS = (1, 2, 4, 8, 16, 32, 64, 128)
DEFAULT_THRESHOLDS = (0.01, 0.02, 0.04, 0.07, 0.1, 0.15, 0.2, 0.3, 0.4, 0.55, 0.75, 1.0, 1.5, 2.0, 3.0)


@dataclass(frozen=True)
class TableAxes:
    """The grid of a fraction table.

    Attributes
    ----------
    h : ndarray, shape (n_h,)
        Correlation exponents, increasing.
    steps : ndarray of int, shape (n_steps,)
        Step numbers, increasing.
    masses : ndarray, shape (n_masses,)
        Parent samples ``A_t > mu x mean A_t``: the values of mu, increasing, the first one 0.  The table holds one parent sample
        more, all walks, before them.
    windows : ndarray of int, shape (n_windows,)
        Tracer windows in steps, increasing, the first one 1.
    thresholds : ndarray, shape (n_thresholds,)
        Values of theta of the criterion ``rate < theta``, increasing.  The table holds the criterion ``zero`` before them.
    """

    h: NDArray[np.float64]
    steps: NDArray[np.int64]
    masses: NDArray[np.float64]
    windows: NDArray[np.int64]
    thresholds: NDArray[np.float64]

    def __post_init__(self) -> None:
        """Refuse axes that are not increasing or do not start where they must."""
        for name in ("h", "steps", "masses", "windows", "thresholds"):
            values = getattr(self, name)
            if values.ndim != 1 or values.size == 0 or np.any(np.diff(values) <= 0):
                raise ValueError(f"axis {name!r} must hold increasing numbers, not {values!r}")
        if self.steps[0] < 1 or self.windows[0] != 1 or self.masses[0] != 0 or self.thresholds[0] <= 0:
            raise ValueError("steps start at 1 or above, windows at 1, masses at 0, and thresholds above 0")

    @property
    def shape(self) -> tuple[int, int, int, int, int]:
        """Shape of the table: H, steps, parent samples (all walks first), windows, criteria (zero first)."""
        return (self.h.size, self.steps.size, self.masses.size + 1, self.windows.size, self.thresholds.size + 1)


def default_axes(noise: str) -> TableAxes:
    """Give the axes of the table that ships for a noise type.

    Parameters
    ----------
    noise : {'type-I', 'type-II'}
        Construction of the noise.  Type I is tabulated from H = 0.05 to its limit 1, type II from 0.05 to 1.3.
    """
    if noise == "type-I":
        h = np.concatenate([np.arange(1, 16) * 0.05, np.arange(31, 40) * 0.025, [0.9875, 1.0]])
    else:
        h = np.arange(1, 27) * 0.05
    return TableAxes(
        h=np.round(h, 6),
        steps=np.array(DEFAULT_STEPS, dtype=np.int64),
        masses=np.array(DEFAULT_MASSES),
        windows=np.array(DEFAULT_WINDOWS, dtype=np.int64),
        thresholds=np.array(DEFAULT_THRESHOLDS),
    )
