"""What `vet` says: everything about a file that can be known without sampling."""

from __future__ import annotations

import textwrap
from pathlib import Path

import h5py
import numpy as np

from hurstfit.digest.words import (
    WIDTH,
    answer_lines,
    bin_lines,
    caution_lines,
    choice_lines,
    labelled,
    parameter_lines,
    run_cautions,
    run_lines,
)
from hurstfit.errors import HurstfitError
from hurstfit.fractions.own import ModelTable, is_own_table, read_own_table
from hurstfit.fractions.store import read_table
from hurstfit.measurements import Measurements, read_measurements
from hurstfit.measurements.reading import EXTENSIONS
from hurstfit.measurements.wording import explain_row, measurement_cautions, summarise
from hurstfit.problem import load_problem
from hurstfit.runs.run import open_run
from hurstfit.runs.store import is_run_file

__all__ = ["vet_lines"]

#: Rows of a table that are explained one by one.
MOST_ROWS = 5000


def vet_lines(path: Path) -> list[str]:
    """Check a file by its kind and describe it.

    Parameters
    ----------
    path : Path
        Configuration, measurement table, fraction table or run, told apart by their endings.

    Returns
    -------
    list of str

    Raises
    ------
    HurstfitError
        With the first thing that is wrong.
    """
    if path.is_dir():
        raise HurstfitError(f"{path} is a directory; name a file")
    if not path.exists():
        raise HurstfitError(f"{path} does not exist")
    kind = path.suffix.lower()
    if kind == ".toml":
        return _configuration(path)
    if kind == ".ecsv" and is_own_table(path):
        return _own_fractions(path)
    if kind in EXTENSIONS:
        return _measurements(read_measurements(path))
    if kind in (".h5", ".hdf5"):
        if not h5py.is_hdf5(path):
            raise HurstfitError(
                f"{path} cannot be read: it is empty, truncated, damaged or not HDF5; allowed is a fraction table or a run"
            )
        return _run(path) if is_run_file(path) else _fractions(path)
    raise HurstfitError(
        f"{path}: the ending {kind or '(none)'} says nothing about what it is; allowed are .toml (configuration), "
        ".ecsv and .csv (measurements), .fits, .fit, .vot, .votable and .xml (measurements), .h5 (fraction table or run)"
    )


def _configuration(path: Path) -> list[str]:
    problem = load_problem(path)
    lines = [f"{path} is in order.", "", "What will be fitted", *choice_lines(problem), ""]
    lines += [*parameter_lines(problem), "", "Bins (step number at the means of the priors of step and z_start)"]
    lines += bin_lines(problem)
    bins = problem.posterior.bins
    if (bins.effective.form != "counts").any():
        lines += ["", "How bins that are no counts were read", *_row_lines(bins.select(bins.effective.form != "counts"))]
    return [*lines, "", *caution_lines(problem.cautions)]


def _measurements(measurements: Measurements) -> list[str]:
    lines = [f"{measurements.path} is in order.", ""]
    for study in measurements.studies:
        mine = measurements.select(measurements.study == study)
        lines += labelled(
            "study",
            f"{study}: {mine.n_bins} bins, redshift {mine.z_lo.min():g} to {mine.z_hi.max():g}, "
            f"log mass {mine.logm_lo.min():g} to {mine.logm_hi.max():g}, "
            f"{summarise(mine)}",
        )
    falling = np.flatnonzero(~measurements.rising)
    lines += labelled("bins", f"{measurements.n_bins} in all, {measurements.n_bins - falling.size} in the rising regime")
    for i in falling:
        lines += labelled("left out", f"{measurements.row_label(i)}: the mean SFR does not rise there (rising = false)")
    lines += ["", "How each row was read", *_row_lines(measurements)]
    cautions = caution_lines(measurement_cautions(measurements))
    return [*lines, "", *cautions] if cautions else lines


def _row_lines(measurements: Measurements) -> list[str]:
    """Explain each row, or the first ones of a table that nobody would read to the end."""
    lines: list[str] = []
    for i in range(min(measurements.n_bins, MOST_ROWS)):
        text = f"{measurements.row_label(i)}: {explain_row(measurements, i)}"
        lines += textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="      ", break_long_words=False)
    if measurements.n_bins > MOST_ROWS:
        lines.append(f"  and {measurements.n_bins - MOST_ROWS:,} more rows, which are in order too")
    return lines


def _fractions(path: Path) -> list[str]:
    table = read_table(path)
    axes = table.axes
    lines = [f"{path} is in order (checksum verified).", ""]
    lines += labelled("noise", table.noise)
    lines += labelled("H", f"{axes.h[0]:g} to {axes.h[-1]:g}, {axes.h.size} nodes")
    lines += labelled("steps", f"{axes.steps[0]} to {axes.steps[-1]}, {axes.steps.size} nodes")
    lines += labelled(
        "parent samples", f"all walks, and formed mass above {', '.join(f'{m:g}' for m in axes.masses)} of the mean"
    )
    lines += labelled("windows", "from one step to the whole walk" if axes.scales.size > 1 else "one step")
    lines += labelled("criteria", f"zero, and rate below {', '.join(f'{t:g}' for t in axes.thresholds)} of the mean so far")
    lines += labelled(
        "standard error",
        f"at most {table.errors[:, :, 0, 0, 0].max():.2g} (zero, all walks), {table.errors.max():.2g} (any definition)",
    )
    for key, value in table.made_by.items():
        lines += labelled(key.replace("_", " "), value)
    return lines


def _own_fractions(path: Path) -> list[str]:
    table = read_own_table(path)
    lines = [f"{path} is in order: a fraction table of your own.", ""]
    if isinstance(table, ModelTable):
        steps, error = table.steps, table.errors.max()
        lines += labelled("models", f"{', '.join(table.models)} (there is no H to infer from them)")
    else:
        h, steps, error = table.axes.h, table.axes.steps, table.errors.max()
        lines += labelled("H", f"{h[0]:g} to {h[-1]:g}, {h.size} nodes")
    lines += labelled("steps", f"{steps[0]:g} to {steps[-1]:g}, {steps.size} nodes")
    return lines + labelled("standard error", f"at most {error:.2g}")


def _run(path: Path) -> list[str]:
    run = open_run(path)
    lines = [f"{path} is in order (checksums verified).", "", *answer_lines(run), "", "How", *run_lines(run)]
    lines += ["", "What was fitted", *choice_lines(run.problem), "", *parameter_lines(run.problem), ""]
    return [*lines, *caution_lines(run_cautions(run))]
