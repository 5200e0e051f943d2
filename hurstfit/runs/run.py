"""A run in Python: draws by name, their summary, and the problem that they answer."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from hurstfit.config import LoadedConfig, load_config
from hurstfit.engines.convergence import Convergence, assess
from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.fractions.store import load_table
from hurstfit.measurements import Measurements
from hurstfit.problem import Problem, build_problem
from hurstfit.runs.store import RunRecord, read_run
from hurstfit.table_error import TableEffect, table_effect

if TYPE_CHECKING:
    from astropy.table import QTable

__all__ = ["Run", "open_run"]

#: Quantiles of the equal-tailed 68 and 95 % intervals and the median.
QUANTILES = (0.025, 0.16, 0.5, 0.84, 0.975)


@dataclass(frozen=True)
class Run:
    """A finished run.

    Attributes
    ----------
    record : RunRecord
        What the run file holds.
    path : Path or None
        The run file, where there is one.
    """

    record: RunRecord
    path: Path | None = None

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the free parameters."""
        return self.record.names

    @property
    def converged(self) -> bool:
        """Whether the stopping rule was met."""
        return self.record.converged

    def draws(self, name: str) -> NDArray[np.float64]:
        """Posterior draws of one parameter.

        Parameters
        ----------
        name : str
            Name of a free parameter, say ``"H"``.

        Returns
        -------
        ndarray, shape (draws,)

        Raises
        ------
        HurstfitError
            If the run has no such free parameter.
        """
        return self.chains(name).ravel()

    def chains(self, name: str) -> NDArray[np.float64]:
        """Draws of one parameter by walker, shape (steps, walkers)."""
        if name not in self.names:
            raise HurstfitError(
                f"the run has no free parameter {name!r}; it has {', '.join(self.names)}{did_you_mean(name, self.names)}"
            )
        return self.record.draws[..., self.names.index(name)]

    @cached_property
    def convergence(self) -> dict[str, Convergence]:
        """Convergence of every parameter."""
        return {name: assess(self.chains(name)) for name in self.names}

    @cached_property
    def problem(self) -> Problem:
        """The problem that was fitted, rebuilt from what the run file holds and verified against it.

        Raises
        ------
        HurstfitError
            If the fraction table is not the one that the run used.
        """
        record = self.record
        # the run's own text is what was fitted, whatever has become of the file that it came from
        loaded = load_config_text(record)
        measurements = Measurements.from_ecsv_text(record.measurements, record.measurements_name)
        source = record.table_noise if record.table_source == "shipped" else record.table_source
        table = load_table(source)
        if table.digest != record.table_sha256:
            raise HurstfitError(
                f"run {self.path or ''}: its fraction table ({record.table_source}, {record.table_noise}) has changed since; "
                f"the run used the one of digest {record.table_sha256[:12]}, found {table.digest[:12]}"
            )
        return build_problem(loaded, measurements, table)

    @cached_property
    def table_effect(self) -> TableEffect | None:
        """What the fraction table's own error does to H; None where H is fixed or the table keeps no replicates."""
        problem = self.problem
        if "H" not in self.names or problem.table.replicates is None:
            return None
        rng = np.random.default_rng([self.record.seed, 1])
        return table_effect(problem.posterior, problem.table.deviations(problem.definition), self.thinned(2000), rng)

    def summary(self) -> QTable:
        """Medians, intervals and convergence of every free parameter.

        Returns
        -------
        astropy.table.QTable
            Columns name, median, lo68, hi68, lo95, hi95 (equal-tailed), ess_bulk, ess_tail, rhat, unit, description; whether the
            run converged is in the metadata.
        """
        from astropy.table import QTable

        rows = []
        for name, unit, description in zip(self.names, self.record.units, self.record.descriptions, strict=True):
            lo95, lo68, median, hi68, hi95 = (float(q) for q in np.quantile(self.draws(name), QUANTILES))
            c = self.convergence[name]
            numbers = (median, lo68, hi68, lo95, hi95, c.ess_bulk, c.ess_tail, c.rhat)
            rows.append((name, *numbers, unit, description))
        columns = ["name", "median", "lo68", "hi68", "lo95", "hi95", "ess_bulk", "ess_tail", "rhat", "unit", "description"]
        table = QTable(rows=rows, names=columns)
        table.meta["converged"] = self.converged
        table.meta["stopped"] = self.record.stopped
        return table

    def probability_above(self, x: float) -> tuple[float, float]:
        """Prior and posterior probability that H exceeds x.

        Raises
        ------
        HurstfitError
            If H is fixed in this run.
        """
        prior = 1.0 - float(self.problem.posterior.exponent.prior.cdf(x))
        return prior, float(np.mean(self.draws("H") > x))

    def thinned(self, size: int) -> NDArray[np.float64]:
        """At most `size` draws of all parameters, evenly spaced along the chain, shape (draws, parameters)."""
        flat = self.record.draws.reshape(-1, len(self.names))
        return flat[np.linspace(0, flat.shape[0] - 1, min(size, flat.shape[0])).astype(int)]


def open_run(path: str | Path) -> Run:
    """Open a run file.

    Parameters
    ----------
    path : str or Path
        Run file.

    Returns
    -------
    Run

    Raises
    ------
    HurstfitError
        If it cannot be read or does not match its checksums.
    """
    return Run(read_run(Path(path)), Path(path))


def load_config_text(record: RunRecord) -> LoadedConfig:
    """Parse the configuration that a run file holds."""
    import tomllib

    loaded = load_config(tomllib.loads(record.config))
    return replace(loaded, name=record.config_name, folder=Path(record.config_folder), text=record.config)
