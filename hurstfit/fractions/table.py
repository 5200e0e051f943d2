"""The fraction table: the share of quiescent walks over H and step number, with its error.

A table is filled by independent batches of walks (:mod:`hurstfit.fractions.simulate`).  Its values are the batch means, its
standard errors come from the scatter of the batches, and everything between nodes is interpolated by cubic splines in H, the
logarithm of the step number, of theta, of mu and of the window.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes, window_scale
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.exact import exact_zero_fraction
from hurstfit.fractions.replicates import Replicates
from hurstfit.fractions.spline import Surface
from hurstfit.fractions.weights import criterion_weights, parent_weights
from hurstfit.walks.noise import NOISE_TYPES

__all__ = ["OWN", "FractionTable", "with_exact_values"]

#: Noise type of a table that a user brings.
OWN = "own"


@dataclass(frozen=True)
class FractionTable:
    """Quiescent fractions of walks on a grid, and how to read between its nodes.

    Attributes
    ----------
    noise : str
        ``"type-I"``, ``"type-II"``, or ``"own"`` for a table that a user brings.
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
    replicates : Replicates or None
        How the errors hang together, see :mod:`hurstfit.fractions.replicates`.
    """

    noise: str
    axes: TableAxes
    values: NDArray[np.float64]
    errors: NDArray[np.float64]
    made_by: Mapping[str, str] = field(default_factory=dict)
    digest: str = ""
    replicates: Replicates | None = None

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
            Tracer window in steps, above 0; below 1 it is 1, longer than the walk it is the walk.
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
        definition = _walk_definition(criterion, window, min_mass)
        self.require(H, steps)
        return np.clip(self.surface(definition)(H, steps, window), 0.0, 1.0)

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
        definition = _walk_definition(criterion, window, min_mass)
        self.require(H, steps)
        return self.error_of(definition, H, steps, window)

    def error_of(
        self, definition: Definition, H: ArrayLike, steps: ArrayLike, window: ArrayLike = 1.0, threshold: ArrayLike = 1.0
    ) -> NDArray[np.float64]:
        """Give the simulation error of any definition within the table.

        Parameters
        ----------
        definition : Definition
            What the fraction counts.
        H, steps, window, threshold : array_like
            As for :meth:`surface`, broadcast against each other.
        """
        H, steps, window, threshold = np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in (H, steps, window, threshold)))
        thresholds, collapsed = self._collapse(self.errors, definition)
        errors = np.abs(collapsed)
        axes = (self._coordinate(self.axes.h), np.log(self.axes.steps), self._scales(definition), np.log(thresholds))
        points = (self._coordinate(H), np.log(steps), window_scale(window, steps), np.log(threshold))
        corners = [_cell(axis, point) for axis, point in zip(axes, points, strict=True)]
        total = np.zeros(H.shape)
        for corner in product((0, 1), repeat=4):
            index = tuple(np.minimum(first + c, axis.size - 1) for (first, _), c, axis in zip(corners, corner, axes, strict=True))
            weight = np.prod([share if c else 1 - share for (_, share), c in zip(corners, corner, strict=True)], axis=0)
            total += weight * errors[index]
        return total

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
            thresholds, values = self._collapse(self.values, definition)
            self._surfaces[definition] = Surface.through(
                self.axes.h, self.axes.steps, self._scales(definition), thresholds, values, self._coordinate
            )
        return self._surfaces[definition]

    def deviations(self, definition: Definition) -> Surface:
        """Deviations of the table's replicates from the table, for one definition, as surfaces.

        Returns
        -------
        Surface
            With one leading axis, over replicates: the sum over it of products of deviations is the covariance of the
            fractions at any two points.

        Raises
        ------
        HurstfitError
            If the table keeps no replicates.
        """
        if self.replicates is None:
            raise HurstfitError(f"the {self.noise} table keeps no replicates, so that its error cannot be carried along")
        parent = parent_weights(self.axes, definition, self.noise)
        thresholds, criterion = criterion_weights(self.axes, definition, self.noise)
        scales = self._scales(definition)
        values = self.replicates.deviations(self.errors, parent, scales.size, criterion)
        return Surface.through(self.axes.h, self.axes.steps, scales, thresholds, values, self._coordinate)

    @cached_property
    def _surfaces(self) -> dict[Definition, Surface]:
        """Surfaces that were asked for before; building one costs more than reading it."""
        return {}

    # -- definitions as weights ------------------------------------------------------------------------------------------------

    def _coordinate(self, H: ArrayLike) -> NDArray[np.float64]:
        return np.asarray(H, dtype=float) if self.noise == OWN else NOISE_TYPES[self.noise].coordinate(H)

    def _scales(self, definition: Definition) -> NDArray[np.float64]:
        """Window scales that a definition needs: the first alone where its window is a single step."""
        return self.axes.scales[:1] if definition.single_step else self.axes.scales

    def _collapse(self, grid: NDArray[np.float64], definition: Definition) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Contract parent samples and criteria of `grid` with the weights of a definition.

        Returns thresholds, (m,), and the contracted grid, (H, steps, scales, m).
        """
        if self.noise == OWN and definition != Definition():
            raise HurstfitError(
                "a table of your own has its parent sample, criterion and window built in: "
                "leave min_mass, criterion, window and scatter out"
            )
        parent = parent_weights(self.axes, definition, self.noise)
        thresholds, criterion = criterion_weights(self.axes, definition, self.noise)
        # nodes with no weight are not touched: most definitions sit on nodes, and the table is large
        p, c = np.flatnonzero(parent), np.flatnonzero(criterion.any(axis=0))
        picked = grid[:, :, p, : self._scales(definition).size][..., c]
        return thresholds, np.einsum("hnpsc,p,mc->hnsm", picked, parent[p], criterion[:, c])


def with_exact_values(noise: str, axes: TableAxes, values: NDArray, errors: NDArray) -> None:
    """Put the exact zero fractions of all walks into a table's arrays, in place, with error 0."""
    for i, H in enumerate(axes.h):
        for j, n in enumerate(axes.steps):
            exact = exact_zero_fraction(noise, float(H), int(n))
            if exact is not None:
                values[i, j, 0, 0, 0], errors[i, j, 0, 0, 0] = exact, 0.0


def _walk_definition(criterion: str, window: float, min_mass: float | None) -> Definition:
    """Put a definition together from what scripts give; the criterion must need no clock."""
    if not window > 0:
        raise HurstfitError(f"window: a tracer window must be longer than zero steps, not {window!r}")
    parsed = parse_criterion(criterion)
    if parsed.kind == "ssfr":
        raise HurstfitError(f"criterion: {criterion!r} depends on the clock; give the table 'zero' or 'rate<theta'")
    return Definition(min_mass, parsed, float(window))


def _cell(axis: NDArray[np.float64], x: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Index of the node below each point, and how far the point is on the way to the next."""
    if axis.size == 1:
        return np.zeros(x.shape, dtype=np.int64), np.zeros(x.shape)
    i = np.clip(np.searchsorted(axis, x, side="right") - 1, 0, axis.size - 2)
    return i, (x - axis[i]) / (axis[i + 1] - axis[i])
