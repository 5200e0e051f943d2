"""How far interpolation in the fraction tables is from the walks, between their nodes.

    python benchmarks/interpolation_error.py

Walks are simulated on the default nodes, and again with the same random numbers on nodes halfway between them in H and in
ln(steps). The difference between the interpolated and the directly counted fraction of each batch is then mostly free of the
noise that both share; its mean over batches is the interpolation error, its scatter the error of that.  What is printed for
each definition: the root mean square of the interpolation error with its noise taken off, the largest difference with its
own standard error, and, to compare with, the median standard error of the table that ships.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from hurstfit.fractions.axes import TableAxes, default_axes
from hurstfit.fractions.building import Build
from hurstfit.fractions.definition import Criterion, Definition
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable

SEED = 77
BATCHES = 12
WALKS = 16384
DEFINITIONS = [
    Definition(mass, criterion, window)
    for criterion in (Criterion(), Criterion("rate", 0.1), Criterion("rate", 0.2), Criterion("rate", 0.5))
    for mass in (None, 0.1, 0.5)
    for window in (1.0, 10.0, 100.0)
]


@dataclass(frozen=True)
class Difference:
    """Interpolated less counted fractions of one definition.

    Attributes
    ----------
    mean, error : ndarray
        Mean over batches at each off-grid node, and its standard error.
    shipped : float
        Median standard error of the table that ships, of this definition.
    """

    mean: np.ndarray
    error: np.ndarray
    shipped: float

    @property
    def rms(self) -> float:
        """Root mean square of the interpolation error, noise taken off (0 where it is all noise)."""
        return float(np.sqrt(max(np.mean(self.mean**2 - self.error**2), 0.0)))


def between(noise: str, axis: str) -> tuple[TableAxes, TableAxes]:
    """Default nodes, and nodes halfway between them along one axis."""
    nodes = default_axes(noise)
    if axis == "h":
        # halfway in the coordinate of the spline
        x = np.sqrt(1 - nodes.h) if noise == "type-I" else nodes.h
        middle = (x[1:] + x[:-1]) / 2
        return nodes, replace(nodes, h=1 - middle**2 if noise == "type-I" else middle)
    steps = nodes.steps
    middle = np.round(np.sqrt(steps[1:] * steps[:-1].astype(float))).astype(np.int64)
    # walks must be of equal length to share their random numbers
    middle = np.array([*(m for m, lo, hi in zip(middle, steps, steps[1:], strict=False) if lo < m < hi), steps[-1]])
    return nodes, replace(nodes, steps=middle)


def differences(noise: str, axis: str) -> dict[Definition, Difference]:
    """Measure the interpolation error of every definition halfway between nodes of one axis."""
    nodes, off = between(noise, axis)
    shipped = load_table(noise)
    found: dict[Definition, list[np.ndarray]] = {definition: [] for definition in DEFINITIONS}
    for k in range(BATCHES):
        tables = []
        for axes in (nodes, off):
            share = Build(noise, axes, 8, WALKS, SEED).simulate(k).fraction.astype(float)
            tables.append(FractionTable(noise, axes, share, np.zeros(share.shape)))
        for definition, list_ in found.items():
            at = off.h[:, None], off.steps[None, :], definition.window
            list_.append(tables[0].surface(definition)(*at) - tables[1].surface(definition)(*at))
    result = {}
    for definition, list_ in found.items():
        stack = np.stack(list_)
        d = definition
        at_nodes = shipped.standard_error(nodes.h[:, None], nodes.steps[None, :], str(d.criterion), d.window, d.min_mass)
        error = stack.std(axis=0, ddof=1) / np.sqrt(BATCHES)
        result[definition] = Difference(stack.mean(axis=0), error, float(np.median(at_nodes[at_nodes > 0])))
    return result


def main() -> None:
    """Measure and print."""
    for noise in ("type-I", "type-II"):
        for axis in ("h", "steps"):
            print(f"{noise}, halfway between nodes in {axis}: rms error, largest +- its error, median table error")
            for definition, d in differences(noise, axis).items():
                i = np.unravel_index(np.argmax(np.abs(d.mean)), d.mean.shape)
                print(f"  {definition.label():50s} {d.rms:.5f}   {d.mean[i]:+.5f} +- {d.error[i]:.5f}   {d.shipped:.5f}")


if __name__ == "__main__":
    main()
