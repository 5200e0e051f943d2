"""Tables that users bring: fractions measured elsewhere, say on a hydrodynamic simulation, as ECSV.

Columns ``H``, ``steps``, ``fraction``, ``error`` on a complete grid make a :class:`FractionTable` of noise "own", which `infer`
takes in place of a simulated one; what is counted in it, and as what, is its author's business.  Its errors are taken as
independent between rows.  With a column ``model`` (a label) instead of ``H`` they make a :class:`ModelTable`, which
predicts but has no H to infer.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.replicates import Replicates
from hurstfit.fractions.spline import Axis
from hurstfit.fractions.table import OWN, FractionTable

__all__ = ["ModelTable", "is_own_table", "read_own_table"]

NUMBERS = ("steps", "fraction", "error")
#: A cubic spline needs four nodes along each axis.
MIN_NODES = 4


@dataclass(frozen=True)
class ModelTable:
    """Fractions of labelled models over step number.

    Attributes
    ----------
    models : tuple of str
        Labels.
    steps : ndarray, shape (n_steps,)
        Step numbers.
    values, errors : ndarray, shape (n_models, n_steps)
        Fractions and their standard errors.
    """

    models: tuple[str, ...]
    steps: NDArray[np.float64]
    values: NDArray[np.float64]
    errors: NDArray[np.float64]

    def fraction(self, model: str, steps: ArrayLike) -> NDArray[np.float64]:
        """Fraction of a model, by a cubic spline in ln(steps).

        Raises
        ------
        HurstfitError
            For an unknown model, or steps outside the table.
        """
        row, steps = self._found(model, steps)
        axis = Axis(np.log(self.steps))
        return np.clip(axis.dense_basis(np.log(steps)) @ axis.coefficients(self.values[row], 0), 0.0, 1.0)

    def standard_error(self, model: str, steps: ArrayLike) -> NDArray[np.float64]:
        """Give the standard error of :meth:`fraction`, linear in ln(steps) between nodes."""
        row, steps = self._found(model, steps)
        return np.interp(np.log(steps), np.log(self.steps), self.errors[row])

    def _found(self, model: str, steps: ArrayLike) -> tuple[int, NDArray[np.float64]]:
        if model not in self.models:
            raise HurstfitError(
                f"no model {model!r} in the table; it has {', '.join(self.models)}{did_you_mean(model, self.models)}"
            )
        steps = np.asarray(steps, dtype=float)
        bad = ~((steps >= self.steps[0]) & (steps <= self.steps[-1]))
        if bad.any():
            raise HurstfitError(
                f"the table holds step numbers from {self.steps[0]:g} to {self.steps[-1]:g}, not {steps[bad].ravel()[0]:g}"
            )
        return self.models.index(model), steps


def is_own_table(path: Path) -> bool:
    """Tell from its column names whether an ECSV file is meant to be a fraction table."""
    try:
        with path.open(encoding="utf-8") as file:
            names = next((line for line in file if line.strip() and not line.startswith("#")), "").replace(",", " ").split()
    except (OSError, UnicodeDecodeError):
        return False
    return "steps" in names and ("H" in names or "model" in names)


def read_own_table(path: Path) -> FractionTable | ModelTable:
    """Read and check a user's table.

    Parameters
    ----------
    path : Path
        ECSV file.

    Returns
    -------
    FractionTable or ModelTable
        By whether it has a column ``H`` or ``model``.

    Raises
    ------
    HurstfitError
        If it cannot be read, a column is missing, a number is malformed, or the grid has gaps or duplicates.
    """
    from astropy.table import Table

    if not path.is_file():
        raise HurstfitError(f"fraction table {path} does not exist")
    try:
        table = Table.read(path, format="ascii.ecsv")
    except Exception as problem:  # astropy raises many kinds for a malformed file
        reason = str(problem).strip().splitlines()[0] if str(problem).strip() else type(problem).__name__
        raise HurstfitError(f"fraction table {path} is not readable ECSV: {reason}") from problem
    leading = [name for name in ("H", "model") if name in table.colnames]
    if len(leading) != 1:
        raise HurstfitError(
            f"{path}: found {' and '.join(leading) or 'neither'}; a fraction table has one of the columns H and model"
        )
    allowed = (leading[0], *NUMBERS)
    for name in table.colnames:
        if name not in allowed:
            raise HurstfitError(f"{path}: unknown column {name!r}; allowed are {', '.join(allowed)}{did_you_mean(name, allowed)}")
    for name in allowed:
        if name not in table.colnames:
            raise HurstfitError(f"{path}: the column {name!r} is missing; a fraction table has {', '.join(allowed)}")
    steps, fraction, error = (_numbers(path, table, name) for name in NUMBERS)
    _check(path, "steps", steps, steps < 1, "at least 1")
    _check(path, "fraction", fraction, (fraction < 0) | (fraction > 1), "from 0 to 1")
    _check(path, "error", error, (error < 0) | (error > 1), "a standard error from 0 to 1")
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    if leading == ["model"]:
        labels = np.array(["" if label is np.ma.masked else str(label).strip() for label in table["model"]], dtype=str)
        blank = np.flatnonzero(labels == "")
        if blank.size:
            raise HurstfitError(f"{path}, row {blank[0] + 1}: model is blank; allowed is a label")
        models, grid_steps, index = _grid(path, "model", labels, steps, 1)
        return ModelTable(tuple(models.tolist()), grid_steps, fraction[index], error[index])
    H = _numbers(path, table, "H")
    _check(path, "H", H, (H <= 0) | (H >= 1.5), "above 0 and below 1.5")
    h, grid_steps, index = _grid(path, "H", H, steps, MIN_NODES)
    # one definition only: the same for "all walks" and for the first parent sample, which the axes require
    values, errors = (np.repeat(a[index][:, :, None, None, None], 2, axis=2) for a in (fraction, error))
    axes = TableAxes(h, grid_steps, np.zeros(1), np.zeros(1), np.zeros(0))
    made_by = {"command": f"read from {path.name}"}
    return FractionTable(OWN, axes, values, errors, made_by, digest, Replicates.independent(axes))


def _numbers(path: Path, table: object, name: str) -> NDArray[np.float64]:
    column = table[name]  # type: ignore[index]
    if column.unit is not None and str(column.unit):
        raise HurstfitError(f"{path}: the column {name!r} has the unit {column.unit}; allowed are plain numbers")
    masked = np.flatnonzero(np.ma.getmaskarray(np.ma.asarray(column)))
    if masked.size:
        raise HurstfitError(f"{path}, row {masked[0] + 1}: {name} is blank; allowed is a finite number")
    if column.dtype.kind not in "iuf" or column.ndim != 1:
        kind = {"U": "text", "S": "text", "b": "true and false"}.get(
            column.dtype.kind, f"{column.dtype} of {column.ndim} dimensions"
        )
        raise HurstfitError(f"{path}: the column {name!r} holds {kind}; allowed are numbers")
    values = np.asarray(column, dtype=float)
    _check(path, name, values, ~np.isfinite(values), "a finite number")
    return values


def _check(path: Path, name: str, values: NDArray[np.float64], bad: NDArray[np.bool_], allowed: str) -> None:
    rows = np.flatnonzero(bad)
    if rows.size:
        raise HurstfitError(f"{path}, row {rows[0] + 1}: {name} is {values[rows[0]]:g}; allowed is {allowed}")


def _grid(
    path: Path, name: str, first: NDArray, steps: NDArray[np.float64], least: int
) -> tuple[NDArray, NDArray[np.float64], NDArray[np.int64]]:
    """Order rows into a complete grid; returns its two axes and the row of each node."""
    values, i = np.unique(first, return_inverse=True)
    grid_steps, j = np.unique(steps, return_inverse=True)
    for axis, size, need in ((name, values.size, least), ("steps", grid_steps.size, MIN_NODES)):
        if size < need:
            raise HurstfitError(f"{path}: found {size} values of {axis}; a fraction table needs at least {need}")
    index = np.full((values.size, grid_steps.size), -1)
    for row, (a, b) in enumerate(zip(i, j, strict=True)):
        if index[a, b] >= 0:
            raise HurstfitError(
                f"{path}: rows {index[a, b] + 1} and {row + 1} are duplicates ({name} {values[a]}, steps {grid_steps[b]:g})"
            )
        index[a, b] = row
    gaps = np.argwhere(index < 0)
    if gaps.size:
        a, b = gaps[0]
        raise HurstfitError(
            f"{path}: the grid has a gap at {name} {values[a]}, steps {grid_steps[b]:g}; a fraction table has a row for "
            f"every {name} at every step number"
        )
    return values, grid_steps, index
