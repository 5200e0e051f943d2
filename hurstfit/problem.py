"""A configuration brought together with its data: everything that an engine, a study or a digest needs.

Whatever can be checked without sampling is checked here, so that `vet` and `infer` refuse the same things with the same words.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hurstfit.clock import Z_MAX, CosmicClock
from hurstfit.config import FEWEST_WALKERS, LoadedConfig, load_config
from hurstfit.cosmology import cosmology_from
from hurstfit.coverage import TAILS, check_impurities, check_steps, check_thresholds
from hurstfit.dispersion import parse_dispersion
from hurstfit.errors import HurstfitError
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import OWN, FractionTable
from hurstfit.measurements import Measurements, read_measurements
from hurstfit.measurements.wording import measurement_cautions
from hurstfit.posterior import Parameter, Posterior
from hurstfit.prediction import BinPrediction
from hurstfit.prior_entries import parse_prior
from hurstfit.priors import Prior, Uniform
from hurstfit.selection import SelectionTerms, parse_selection

__all__ = ["Problem", "build_problem", "load_problem"]


@dataclass(frozen=True)
class Problem:
    """What is to be fitted.

    Attributes
    ----------
    loaded : LoadedConfig
        The configuration and where it came from.
    measurements : Measurements
        All rows of the measurement table.
    used : ndarray of bool, shape (rows,)
        Which rows are fitted.
    table : FractionTable
        The fraction table in use.
    definition : Definition
        Parent sample, criterion and window.
    clock : CosmicClock
        Cosmic ages.
    posterior : Posterior
        Likelihood and priors of the rows that are fitted.
    step_numbers : tuple of float
        Smallest and largest step number over the bins and over the prior of the clock.
    cautions : tuple of str
        What a reader of the result must know beforehand.
    """

    loaded: LoadedConfig
    measurements: Measurements
    used: NDArray[np.bool_]
    table: FractionTable
    definition: Definition
    clock: CosmicClock
    posterior: Posterior
    step_numbers: tuple[float, float]
    cautions: tuple[str, ...]

    def left_out(self) -> list[str]:
        """Say which rows are not fitted, and why."""
        return [
            f"{self.measurements.row_label(i)}: the mean SFR does not rise there (rising = false)"
            for i in np.flatnonzero(~self.used)
        ]


def load_problem(source: str | Path | Mapping[str, Any]) -> Problem:
    """Read a configuration and everything that it names.

    Parameters
    ----------
    source : str, Path or mapping
        See :func:`hurstfit.config.load_config`.

    Raises
    ------
    HurstfitError
        If anything is malformed, or does not fit together.
    """
    loaded = load_config(source)
    return build_problem(loaded, read_measurements(loaded.folder / loaded.config.measurements.table))


def build_problem(loaded: LoadedConfig, measurements: Measurements, table: FractionTable | None = None) -> Problem:
    """Bring a configuration and its measurements together.

    Parameters
    ----------
    loaded : LoadedConfig
        Configuration.
    measurements : Measurements
        All rows of the measurement table.
    table : FractionTable, optional
        Fraction table to use instead of the one that the configuration names.

    Returns
    -------
    Problem
    """
    config, name = loaded.config, loaded.name
    used = measurements.rising | config.measurements.keep_not_rising
    if not used.any():
        raise HurstfitError(
            f"{measurements.path}: every row has rising = false, so that no bin is left to fit; "
            "set keep_not_rising = true in [measurements] to fit them all the same"
        )
    bins = measurements.select(used)
    if config.walk.noise == OWN and not config.walk.table:
        raise HurstfitError(f"{name}, [walk] table is missing; noise = 'own' needs the file of your own fraction table (ECSV)")
    if table is None:
        table = load_table(loaded.folder / config.walk.table if config.walk.table else config.walk.noise)
    if table.noise != config.walk.noise:
        raise HurstfitError(f"{name}, [walk] noise: found {config.walk.noise!r}, but the fraction table holds {table.noise}")
    definition = _definition(loaded)
    try:
        surface = table.surface(definition)
    except HurstfitError as error:
        raise HurstfitError(f"{name}, [galaxies]: {error}") from error
    clock = CosmicClock.build(cosmology_from(config.clock.cosmology, where=f"{name}, [clock] cosmology"))
    exponent = Parameter("H", _exponent_prior(loaded, table), "", "correlation (Hurst) exponent")
    step_prior = parse_prior(config.clock.step, where=f"{name}, [clock] step", lo=0.0, hi=math.inf, lo_open=True)
    step = Parameter("step", step_prior, "Myr", "time step of the walk")
    start_prior = parse_prior(config.clock.z_start, where=f"{name}, [clock] z_start", lo=0.0, hi=Z_MAX)
    z_start = Parameter("z_start", start_prior, "", "redshift at which walks start")
    selection = parse_selection(config.selection, measurements.studies, where=name, table=measurements.path)
    fixed = (float(step_prior.mean), float(start_prior.mean)) if step_prior.is_fixed and start_prior.is_fixed else None
    latest = float(start_prior.ppf(TAILS[0]))
    prediction = BinPrediction(surface, definition, clock, bins.z_lo, bins.z_hi, fixed, latest)
    numbers, cautions = check_steps(name, bins, prediction, table, step_prior, start_prior)
    check_thresholds(name, prediction, table, start_prior)
    cautions = [*_cautions(measurements, used, definition, selection, table), *cautions]
    counts = config.counts
    dispersion = parse_dispersion(counts.model, counts.rho, counts.field_scatter, counts.fields, bins, where=f"{name}, [counts]")
    posterior = Posterior(bins, prediction, exponent, step, z_start, selection, dispersion)
    check_impurities(name, posterior)
    _check_ensemble(loaded, len(posterior.parameters))
    return Problem(loaded, measurements, used, table, definition, clock, posterior, numbers, tuple(cautions))


def _definition(loaded: LoadedConfig) -> Definition:
    """Read who is counted and what counts as quiescent."""
    galaxies, where = loaded.config.galaxies, f"{loaded.name}, [galaxies]"
    criterion = parse_criterion(galaxies.criterion, f"{where} criterion")
    if (criterion.kind == "ssfr") != (galaxies.returned_fraction is not None):
        found = f"criterion {criterion} " + ("without" if galaxies.returned_fraction is None else "with")
        raise HurstfitError(
            f"{where} returned_fraction: found {found} a returned fraction; the criterion 'ssfr<...' needs one (the share of "
            "the formed mass that stars have returned, say 0.4), and no other criterion takes one"
        )
    return Definition(
        min_mass=None if galaxies.min_mass == "all" else float(galaxies.min_mass),
        criterion=criterion,
        window=galaxies.window,
        window_unit=galaxies.window_unit,
        scatter=galaxies.scatter,
        returned_fraction=galaxies.returned_fraction or 0.0,
    )


def _check_ensemble(loaded: LoadedConfig, dimension: int) -> None:
    """Refuse a problem without free parameters, and an ensemble that cannot move in all of them."""
    if not dimension:
        raise HurstfitError(f"{loaded.name}: every parameter is fixed, so that there is nothing to infer; give H a prior")
    walkers, fewest = loaded.config.engine.walkers, max(FEWEST_WALKERS, 2 * dimension)
    if walkers is not None and (walkers % 2 or walkers < fewest):
        raise HurstfitError(
            f"{loaded.name}, [engine] walkers: found {walkers}, allowed is an even number of at least {fewest} "
            f"for {dimension} free parameters"
        )


def _exponent_prior(loaded: LoadedConfig, table: FractionTable) -> Prior:
    lo, hi = float(table.axes.h[0]), float(table.axes.h[-1])
    if loaded.config.exponent.prior is None:
        return Uniform(lo, hi)
    where = f"{loaded.name}, [exponent] prior ({table.noise} table, H from {lo:g} to {hi:g})"
    return parse_prior(loaded.config.exponent.prior, where=where, lo=lo, hi=hi)


def _cautions(
    measurements: Measurements,
    used: NDArray[np.bool_],
    definition: Definition,
    selection: dict[str, SelectionTerms],
    table: FractionTable,
) -> list[str]:
    cautions = []
    if table.noise == OWN:
        cautions.append(
            "the fraction table is your own: who is counted in it, and what counts as quiescent, must be what the measurements "
            "count; "
            + ("its errors are taken as independent between rows" if table.replicates else "its errors are not carried to H")
        )
    elif definition.min_mass is None:
        cautions.append(
            "all walks are counted, also those that formed next to nothing; a catalogue selected by stellar mass holds none of "
            "these, and its predicted fraction is lower: compare with min_mass = 0.1 in [galaxies]"
        )
    outside = int((used & ~measurements.rising).sum())
    if outside:
        cautions.append(
            f"{outside} bins outside the rising regime are fitted because keep_not_rising = true: H may be biased there"
        )
    for study in measurements.select(used).studies:
        silent = [term.replace("_", " ") for term in selection[study].terms if term not in selection[study].stated]
        if silent:
            cautions.append(f"study {study}: no {', '.join(silent)} is stated; assumed perfect")
    return [*cautions, *measurement_cautions(measurements.select(used))]
