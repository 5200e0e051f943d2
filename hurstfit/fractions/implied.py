"""Which H a fraction implies: the table read backwards."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from hurstfit.fractions.definition import Definition
from hurstfit.fractions.table import FractionTable

__all__ = ["implied_exponents"]

#: Points at which crossings are looked for; between two of them a fraction is taken to cross a level at most once.
POINTS = 801


def implied_exponents(
    table: FractionTable, definition: Definition, fraction: float, steps: float, window: float, threshold: float
) -> NDArray[np.float64]:
    """Find every H at which walks have a given quiescent fraction.

    Parameters
    ----------
    table : FractionTable
        Table to read.
    definition : Definition
        What the fraction counts.
    fraction : float
        Quiescent fraction.
    steps, window, threshold : float
        Step number, tracer window in steps, and theta at which to read it
        (:meth:`hurstfit.prediction.BinPrediction.walks` gives them for a redshift and a clock).

    Returns
    -------
    ndarray
        Increasing; empty where no H of the table has this fraction, more than one where it is not monotone.
    """
    surface = table.surface(definition)

    def excess(h: float) -> float:
        return float(surface(h, steps, window, threshold)) - fraction

    h = np.linspace(table.axes.h[0], table.axes.h[-1], POINTS)
    above = np.asarray(surface(h, steps, window, threshold)) > fraction
    return np.array([brentq(excess, h[i], h[i + 1]) for i in np.flatnonzero(above[1:] != above[:-1])])
