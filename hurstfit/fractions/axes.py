"""The axes of a fraction table: which H, steps, parent samples, windows and thresholds it holds.

Tracer windows have no axis of their own length.  A window of w steps means something else for a walk of 10 steps than for one of
1000, and nothing new for a walk shorter than w; so the table holds, at each step number n, windows from w = 1 to w = n, on
the scale
``s = ln w / ln n`` from 0 to 1.  On it fractions are smooth, and "longer than the walk" is simply s = 1.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["DEFAULT_STEPS", "TableAxes", "default_axes", "window_scale"]

#: Step numbers of the default table: every one up to 8, then four an octave up to 32, then two to three an octave.
DEFAULT_STEPS = (
    *range(1, 9), 10, 12, 14, 16, 20, 24, 28, 32, 40, 48, 64, 80, 96, 128, 160, 192, 256, 320, 384, 512, 640, 768, 1024, 1280,
    1536, 1792, 2048,
)  # fmt: skip
DEFAULT_MASSES = (0.0, 0.01, 0.02, 0.05, 0.1, 0.2, 0.3, 0.5)
DEFAULT_SCALES = tuple(k / 8 for k in range(9))
DEFAULT_THRESHOLDS = (0.01, 0.02, 0.04, 0.07, 0.1, 0.15, 0.2, 0.3, 0.4, 0.55, 0.75, 1.0, 1.5, 2.0, 3.0)
#: H of the default type-I table: about evenly spaced in sqrt(1 - H), see :meth:`hurstfit.walks.noise.TypeI.coordinate`.
TYPE_I_H = (
    0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.58, 0.65, 0.7, 0.75, 0.8, 0.84, 0.88, 0.91, 0.9375, 0.96, 0.9775, 0.99, 0.9975, 1.0,
)  # fmt: skip


def window_scale(window: ArrayLike, steps: ArrayLike) -> NDArray[np.float64]:
    """Place a window on the scale of the walk's length.

    Parameters
    ----------
    window, steps : array_like
        Window and walk in steps, real numbers, broadcast against each other.

    Returns
    -------
    ndarray
        ``ln w / ln n``, kept within 0 (w <= 1) and 1 (w >= n).
    """
    w, n = np.maximum(window, 1.0), np.maximum(steps, 1.0)
    return np.clip(np.log(w) / np.maximum(np.log(n), 1e-9), 0.0, 1.0)


@dataclass(frozen=True)
class TableAxes:
    """The grid of a fraction table.

    Attributes
    ----------
    h : ndarray, shape (n_h,)
        Correlation exponents, increasing.
    steps : ndarray, shape (n_steps,)
        Step numbers, increasing; whole numbers where walks are counted.
    masses : ndarray, shape (n_masses,)
        Parent samples ``A_t > mu x mean A_t``: the values of mu, increasing, the first one 0.  The table holds one parent sample
        more, all walks, before them.
    scales : ndarray, shape (n_scales,)
        Tracer windows ``s = ln w / ln n``, increasing from 0 (one step); the last one is 1 (the whole walk) unless it is the
        only one.
    thresholds : ndarray, shape (n_thresholds,)
        Values of theta of the criterion ``rate < theta``, increasing.  The table holds the criterion ``zero`` before them.
    """

    h: NDArray[np.float64]
    steps: NDArray[Any]
    masses: NDArray[np.float64]
    scales: NDArray[np.float64]
    thresholds: NDArray[np.float64]

    def __post_init__(self) -> None:
        """Refuse axes that are not increasing or do not start where they must."""
        for name in ("h", "steps", "masses", "scales", "thresholds"):
            values = getattr(self, name)
            if values.ndim != 1 or np.any(np.diff(values) <= 0) or (values.size == 0 and name != "thresholds"):
                raise ValueError(f"axis {name!r} must hold increasing numbers, not {values!r}")
        if self.steps[0] < 1 or self.masses[0] != 0 or np.any(self.thresholds <= 0):
            raise ValueError("steps start at 1 or above, masses at 0, and thresholds above 0")
        if self.scales[0] != 0 or (self.scales.size > 1 and self.scales[-1] != 1):
            raise ValueError("window scales run from 0 to 1")

    @property
    def shape(self) -> tuple[int, int, int, int, int]:
        """Shape of the table: H, steps, parent samples (all walks first), window scales, criteria (zero first)."""
        return (self.h.size, self.steps.size, self.masses.size + 1, self.scales.size, self.thresholds.size + 1)

    def windows(self, n: int) -> NDArray[np.int64]:
        """Give the whole-step windows that are counted at step n: those nearest to each scale, increasing."""
        return np.unique(np.maximum(np.round(float(n) ** self.scales), 1).astype(np.int64))


def default_axes(noise: str) -> TableAxes:
    """Give the axes of the table that ships for a noise type.

    Parameters
    ----------
    noise : {'type-I', 'type-II'}
        Construction of the noise.  Type I is tabulated from H = 0.05 to its limit 1, type II from 0.05 to 1.3.
    """
    return TableAxes(
        h=np.array(TYPE_I_H) if noise == "type-I" else np.round(np.arange(1, 27) * 0.05, 6),
        steps=np.array(DEFAULT_STEPS, dtype=np.int64),
        masses=np.array(DEFAULT_MASSES),
        scales=np.array(DEFAULT_SCALES),
        thresholds=np.array(DEFAULT_THRESHOLDS),
    )
