"""The fraction table: the share of quiescent walks over H and step number, with its error.

A table is filled by independent batches of walks (:mod:`hurstfit.fractions.simulate`).  Its values are the batch means, its
standard errors come from the scatter of the batches, and everything between nodes is interpolated by cubic splines in H, the
logarithm of the step number, of theta, of mu and of the window.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.exact import exact_zero_fraction
from hurstfit.fractions.spline import Surface, cardinal_weights

__all__ = ["FractionTable", "with_exact_values"]


@dataclass(frozen=True)
class FractionTable:
    """Quiescent fractions of walks on a grid, and how to read between its nodes.

    Attributes
    ----------
    noise : str
        ``"type-I"`` or ``"type-II"``.
    axes : TableAxes
        The grid.
    values : ndarray, shape axes.shape
        Quiescent fraction at each node.
    errors : ndarray, shape axes.shape
        Standard error at each node; 0 where the value is exact.
    made_by : mapping of str to str
        The settings, seed and versions that made the table.
    digest : str
        SHA-256 of the stored numbers, as a hexadecimal string.
    """

    noise: str
    axes: TableAxes
    values: NDArray[np.float64]
    errors: NDArray[np.float64]
    made_by: Mapping[str, str] = field(default_factory=dict)
    digest: str = ""

    def __post_init__(self) -> None:
        """Refuse arrays that do not fit the axes."""
        for name in ("values", "errors"):
            if getattr(self, name).shape != self.axes.shape:
                raise ValueError(f"{name} have shape {getattr(self, name).shape}, the axes {self.axes.shape}")

    # -- reading ---------------------------------------------------------------------------------------------------------------

    def fraction(
        self,
        H: ArrayLike,
        steps: ArrayLike,
        criterion: str = "zero",
        window: float = 1.0,
        min_mass: float | None = None,
    ) -> NDArray[np.float64]:
        """Quiescent fraction of walks.

        Parameters
        ----------
        H, steps : array_like
            Correlation exponents and step numbers (real numbers), broadcast against each other.
        criterion : str
            ``"zero"`` or ``"rate<theta"``, say ``"rate<0.2"``.
        window : float
            Tracer window in steps; below 1 it is 1, longer than the walk it is the walk.
        min_mass : float or None
            Parent sample: None for all walks, 0 for those that formed any mass, mu for those above mu times the mean.

        Returns
        -------
        ndarray
            The broadcast shape.

        Raises
        ------
        HurstfitError
            If a value is outside the table.
        """
        definition = Definition(min_mass, parse_criterion(criterion), window)
        H, steps = np.asarray(H, dtype=float), np.asarray(steps, dtype=float)
        self.require(H, steps)
        return np.clip(self.surface(definition)(H, steps), 0.0, 1.0)

    def standard_error(
        self,
        H: ArrayLike,
        steps: ArrayLike,
        criterion: str = "zero",
        window: float = 1.0,
        min_mass: float | None = None,
    ) -> NDArray[np.float64]:
        """Give the simulation error (one standard deviation) of :meth:`fraction`, same parameters.

        Errors at the nodes are interpolated linearly, which does not take credit for the averaging that interpolation does.
        """
        definition = Definition(min_mass, parse_criterion(criterion), window)
        H, steps = np.broadcast_arrays(np.asarray(H, dtype=float), np.asarray(steps, dtype=float))
        self.require(H, steps)
        errors = self._collapse(self.errors, definition)
        i, s = _cell(self.axes.h, H)
        j, t = _cell(np.log(self.axes.steps), np.log(steps))
        lower = (1 - t) * errors[i, j] + t * errors[i, j + 1]
        upper = (1 - t) * errors[i + 1, j] + t * errors[i + 1, j + 1]
        return (1 - s) * lower + s * upper

    def require(self, H: ArrayLike, steps: ArrayLike) -> None:
        """Refuse H or step numbers that the table does not hold.

        Raises
        ------
        HurstfitError
            Naming the first value outside, and the range of the table.
        """
        for name, x, axis in (("H", H, self.axes.h), ("step number", steps, self.axes.steps)):
            x = np.asarray(x, dtype=float)
            bad = ~((x >= axis[0]) & (x <= axis[-1]))
            if np.any(bad):
                raise HurstfitError(
                    f"the {self.noise} table holds {name} from {axis[0]:g} to {axis[-1]:g}, not {x[bad].ravel()[0]:g}"
                )

    def surface(self, definition: Definition) -> Surface:
        """Fractions of one definition as a smooth surface over H and step number."""
        if definition not in self._surfaces:
            values = self._collapse(self.values, definition)
            self._surfaces[definition] = Surface(self.axes.h, self.axes.steps.astype(float), values)
        return self._surfaces[definition]

    @cached_property
    def _surfaces(self) -> dict[Definition, Surface]:
        """Surfaces that were asked for before; building one costs more than reading it."""
        return {}

    # -- definitions as weights ------------------------------------------------------------------------------------------------

    def _collapse(self, grid: NDArray[np.float64], definition: Definition) -> NDArray[np.float64]:
        """Contract the last three axes of `grid` with the weights of a definition."""
        parent = self._parent_weights(definition.min_mass)
        window = self._window_weights(definition.window)
        criterion = self._criterion_weights(definition.threshold)
        # nodes with no weight are not touched: most definitions sit on nodes, and the table is large
        p, w, c = (np.flatnonzero(x) for x in (parent, window, criterion))
        picked = grid[..., p[:, None, None], w[None, :, None], c[None, None, :]]
        return np.einsum("...pwc,p,w,c->...", picked, parent[p], window[w], criterion[c])

    def _parent_weights(self, min_mass: float | None) -> NDArray[np.float64]:
        weights = np.zeros(self.axes.masses.size + 1)
        if min_mass is None:
            weights[0] = 1.0
        elif min_mass == 0:
            weights[1] = 1.0
        else:
            nodes = self.axes.masses[1:]
            if not nodes.size or not nodes[0] <= min_mass <= nodes[-1]:
                held = f" and from {nodes[0]:g} to {nodes[-1]:g} of the mean mass" if nodes.size else ""
                raise HurstfitError(
                    f"the {self.noise} table holds the parent samples of all walks, of any mass (0){held}, not {min_mass:g}"
                )
            weights[2:] = _on_axis(np.log(nodes), np.log(min_mass))
        return weights

    def _window_weights(self, window: float) -> NDArray[np.float64]:
        nodes = self.axes.windows
        if not 0 < window <= nodes[-1]:
            raise HurstfitError(f"the {self.noise} table holds tracer windows up to {nodes[-1]} steps, not {window:g}")
        return _on_axis(np.log(nodes), np.log(max(window, 1.0)))

    def _criterion_weights(self, threshold: float | None) -> NDArray[np.float64]:
        weights = np.zeros(self.axes.thresholds.size + 1)
        if threshold is None:
            weights[0] = 1.0
        else:
            nodes = self.axes.thresholds
            if not nodes[0] <= threshold <= nodes[-1]:
                raise HurstfitError(
                    f"the {self.noise} table holds the criterion zero and thresholds from {nodes[0]:g} to {nodes[-1]:g}, "
                    f"not {threshold:g}"
                )
            weights[1:] = _on_axis(np.log(nodes), np.log(threshold))
        return weights


def with_exact_values(noise: str, axes: TableAxes, values: NDArray, errors: NDArray) -> None:
    """Put the exact zero fractions of all walks into a table's arrays, in place, with error 0."""
    for i, H in enumerate(axes.h):
        for j, n in enumerate(axes.steps):
            exact = exact_zero_fraction(noise, float(H), int(n))
            if exact is not None:
                values[i, j, 0, 0, 0], errors[i, j, 0, 0, 0] = exact, 0.0


def _on_axis(nodes: NDArray[np.float64], x: float) -> NDArray[np.float64]:
    """Cardinal weights, exactly one node where x lies on it."""
    at = np.flatnonzero(np.isclose(nodes, x, rtol=0, atol=1e-12))
    return np.eye(nodes.size)[at[0]] if at.size else cardinal_weights(nodes, x)


def _cell(axis: NDArray[np.float64], x: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    i = np.clip(np.searchsorted(axis, x, side="right") - 1, 0, axis.size - 2)
    return i, (x - axis[i]) / (axis[i + 1] - axis[i])
