"""What the program says about a problem and about a run, as plain lines of text."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable

import numpy as np

from hurstfit.coverage import TAILS
from hurstfit.digest.shape import shape_cautions
from hurstfit.engines.convergence import mcse_quantile
from hurstfit.engines.joint import INTERRUPTED
from hurstfit.fractions.table import OWN
from hurstfit.measurements.effective import FORMS
from hurstfit.measurements.wording import number, summarise
from hurstfit.posterior import Parameter
from hurstfit.problem import Problem
from hurstfit.runs.run import QUANTILES, Run
from hurstfit.table_error import NEGLIGIBLE_SHARE

__all__ = [
    "answer_lines",
    "bin_lines",
    "caution_lines",
    "choice_lines",
    "decimals",
    "parameter_lines",
    "run_cautions",
    "run_lines",
]

WIDTH = 110
NOISE_WORDS = {
    "type-I": "type I, stationary fractional Gaussian noise",
    "type-II": "type II, fractionally integrated noise switched on at the first step",
    OWN: "none: a fraction table of your own",
}
#: Correlation of H with the step length from which the two count as degenerate.
DEGENERATE = 0.5


def decimals(mcse: float) -> int:
    """Digits behind the point that a Monte Carlo standard error allows: the last one is good to two units."""
    if not mcse > 0:
        return 3
    return int(np.clip(math.floor(-math.log10(mcse / 2)), 0, 5))


def labelled(label: str, text: str, indent: int = 17) -> list[str]:
    """One labelled statement, wrapped with a hanging indent."""
    head = f"  {label} ".ljust(indent)
    return textwrap.wrap(text, WIDTH, initial_indent=head, subsequent_indent=" " * indent, break_long_words=False) or [head]


def choice_lines(problem: Problem) -> list[str]:
    """State the choices that define the predicted fraction, and the data that they meet."""
    bins, table, posterior = problem.posterior.bins, problem.table, problem.posterior
    lo, hi = problem.step_numbers
    rows = problem.measurements.n_bins
    lines = labelled(
        "measurements",
        f"{problem.measurements.path}: {bins.n_bins} of {rows} bins are fitted, {len(bins.studies)} studies, {summarise(bins)}",
    )
    for text in problem.left_out():
        lines += labelled("left out", text)
    lines += labelled("counts", _dispersion(problem))
    lines += labelled("noise", NOISE_WORDS[table.noise])
    own = "as the table defines it"
    lines += labelled("parent sample", own if table.noise == OWN else problem.definition.describe_parent())
    lines += labelled("criterion", own if table.noise == OWN else problem.definition.describe_criterion())
    lines += labelled("cosmology", problem.clock.describe())
    lines += labelled("walk starts", f"at {_value_or_prior(posterior.z_start, 'redshift {}')}")
    lines += labelled("step", _value_or_prior(posterior.step, "{} Myr"))
    lines += labelled("step number", f"{lo:.0f} to {hi:.0f} over the bins and the prior of the clock")
    source = problem.loaded.config.walk.table or "the one that ships"
    lines += labelled(
        "fraction table",
        f"{source}: H {table.axes.h[0]:g} to {table.axes.h[-1]:g}, steps {table.axes.steps[0]:g} to {table.axes.steps[-1]:g}, "
        f"standard error up to {_table_error(problem):.1g} for these bins",
    )
    return lines


def _dispersion(problem: Problem) -> str:
    """Say how counts scatter, and which rows it is not added to."""
    dispersion, counted = problem.posterior.dispersion, problem.posterior.bins.effective.counted
    words = dispersion.describe()
    if words == "binomial" or counted.all():
        return words
    return f"{words}; not added to {int((~counted).sum())} of {counted.size} bins, whose errors are taken to hold it"


def _value_or_prior(parameter: Parameter, form: str) -> str:
    """Say what a quantity is: ``redshift 12 (fixed)``, or ``a free redshift, prior: uniform from 9 to 16``."""
    if parameter.prior.is_fixed:
        return f"{form.format(f'{parameter.prior.mean:g}')} (fixed)"
    word = "a free redshift" if not parameter.unit else f"free, in {parameter.unit}"
    return f"{word}, prior: {parameter.prior.describe()}"


def _table_error(problem: Problem) -> float:
    d, axes, posterior = problem.definition, problem.table.axes, problem.posterior
    lo, hi = problem.step_numbers
    steps = np.clip(np.geomspace(max(lo, 1.0), hi, 20), axes.steps[0], axes.steps[-1])
    # a window in Myr and a threshold on the specific rate follow the clock: here, a typical one
    window = d.window / float(posterior.step.prior.mean) if d.window_unit == "Myr" else d.window
    thresholds = np.ones(1)
    if d.criterion.kind == "ssfr":
        thresholds = np.geomspace(*posterior.prediction.threshold_range(posterior.z_start.prior.ppf(TAILS)), 5)
    return float(problem.table.error_of(d, axes.h[:, None, None], steps[:, None], window, thresholds).max())


def parameter_lines(problem: Problem) -> list[str]:
    """Free parameters with their priors, then what is fixed."""
    free = problem.posterior.parameters
    fixed = [q for q in problem.posterior.quantities if q.prior.is_fixed]
    width = max(len(q.name) for q in problem.posterior.quantities) + 4
    lines = [f"Free parameters ({len(free)})"]
    for q in free:
        unit = f" {q.unit}" if q.unit else ""
        lines += labelled(q.name, f"{q.prior.describe()}{unit}", width)
    if fixed:
        lines.append("Fixed")
        for q in fixed:
            lines += labelled(q.name, f"{q.prior.mean:g} {q.unit}".rstrip(), width)
    return lines


def bin_lines(problem: Problem) -> list[str]:
    """One line for each bin that is fitted."""
    bins = problem.posterior.bins
    step, z_start = problem.posterior.step.prior, problem.posterior.z_start.prior
    centre = np.array([step.mean]), np.array([z_start.mean])
    lowest, highest = problem.posterior.prediction.step_range(*centre)
    width = max(5, *(len(s) for s in bins.study))
    effective = bins.effective
    lines = [f"  row  {'study'.ljust(width)}  redshift     log mass       galaxies  quiescent  fraction  step number  read as"]
    for i in range(bins.n_bins):
        steps = f"{lowest[i]:.0f}-{highest[i]:.0f}".ljust(11)
        lines.append(
            f"  {bins.rows[i]:3d}  {bins.study[i].ljust(width)}  {bins.z_lo[i]:4.2f}-{bins.z_hi[i]:4.2f}  "
            f"{bins.logm_lo[i]:5.2f}-{bins.logm_hi[i]:5.2f}  {number(effective.m[i]):>10}  {number(effective.x[i]):>9}  "
            f"{effective.fraction[i]:8.3f}  {steps}  {FORMS[str(effective.form[i])]}"
        )
    if (effective.form != "counts").any():
        lines.append("  (of bins that are no counts, galaxies and quiescent are the effective numbers that enter)")
    return lines


def caution_lines(cautions: Iterable[str]) -> list[str]:
    """Cautions as a bulleted list, or nothing."""
    lines: list[str] = []
    for caution in cautions:
        lines += textwrap.wrap(caution, WIDTH, initial_indent="  - ", subsequent_indent="    ")
    return ["Cautions", *lines] if lines else []


def run_cautions(run: Run) -> list[str]:
    """Everything that a reader of this run could be misled by, the gravest first."""
    cautions = []
    if not run.converged:
        interrupted = run.record.stopped == INTERRUPTED
        remedy = "run again and let it finish" if interrupted else "raise max_steps in [engine] and run again"
        cautions.append(
            f"NOT CONVERGED ({run.record.stopped}): medians and intervals may be wrong by more than they say; {remedy}"
        )
    if "H" in run.names:
        draws, prior = run.draws("H"), run.problem.posterior.exponent.prior
        cautions += shape_cautions(draws, prior)
        for clock in ("step", "z_start"):
            if clock in run.names:
                correlation = float(np.corrcoef(draws, run.draws(clock))[0, 1])
                if abs(correlation) > DEGENERATE:
                    cautions.append(
                        f"H and {clock} are degenerate (correlation {correlation:+.2f}): H rests on the prior of {clock}"
                    )
    effect = run.table_effect
    if effect is not None and (effect.moves > NEGLIGIBLE_SHARE or not effect.reliable):
        own = run.problem.table.noise == OWN
        remedy = f"make a more precise table{'' if own else ' (hurstfit tabulate, with --merge)'}"
        moves = f"moves H by {effect.moves:.1%} of its standard deviation, more than {NEGLIGIBLE_SHARE:.0%}"
        if not effect.reliable:
            moves = "is wider than the posterior of H, whose width is therefore far too small"
        cautions.append(f"the fraction table's own error {moves}: {remedy} for counts as large as these")
    return [*cautions, *run.problem.cautions]


def answer_lines(run: Run) -> list[str]:
    """Give the answer: H with its intervals, and how probable it is that H exceeds the configured value."""
    lines = []
    if not run.converged:
        lines.append(f"*** NOT CONVERGED: {run.record.stopped} ***")
    if "H" not in run.names:
        return [*lines, f"H is fixed at {run.problem.posterior.exponent.prior.mean:g} in this run"]
    digits = decimals(mcse_quantile(run.chains("H"), 0.5))
    lo95, lo68, median, hi68, hi95 = (f"{q:.{digits}f}" for q in np.quantile(run.draws("H"), QUANTILES))
    x = run.problem.loaded.config.exponent.above
    prior, posterior = run.probability_above(x)
    return [
        *lines,
        f"H = {median}   (68 %: {lo68} to {hi68};  95 %: {lo95} to {hi95})",
        f"P(H > {x:g}) {_probability(posterior, run.convergence['H'].ess_bulk)}   (under the prior {prior:.3f})",
    ]


def _probability(p: float, ess: float) -> str:
    # with so many effective draws, a share closer to 0 or 1 than one draw cannot be told from 0 or 1
    smallest = 1.0 / max(ess, 1.0) if math.isfinite(ess) else 1.0
    if p < smallest:
        return f"is below {smallest:.1g}"
    if p > 1 - smallest:
        return f"is above {1 - smallest:.5g}"
    return f"= {p:.3f}"


def run_lines(run: Run) -> list[str]:
    """How the run went: engine, draws, convergence."""
    record, found = run.record, run.convergence
    steps, walkers, _ = record.draws.shape
    if record.engine == "joint":
        draws = (
            f"{walkers} walkers, {steps * walkers:,} draws kept (warm-up of {record.warmup} steps left out, every "
            f"{_ordinal(record.thin)} move kept)"
        )
    else:
        draws = f"{steps * walkers:,} independent draws"
    lines = labelled(
        "engine", f"{record.engine} ({record.engine_chosen}), seed {record.seed}: {draws}, {record.wall_seconds:.1f} s"
    )
    worst = max(found, key=lambda name: -math.inf if math.isnan(found[name].rhat) else found[name].rhat)
    state = "converged" if run.converged else "NOT CONVERGED"
    lines += labelled("convergence", f"{state}, {record.stopped}")
    for name in dict.fromkeys(("H" if "H" in found else worst, worst)):
        c = found[name]
        lines += labelled(
            "", f"{name}: R-hat {c.rhat:.4f}, effective sample size {c.ess_bulk:,.0f} (bulk), {c.ess_tail:,.0f} (tail)"
            + (" - the largest R-hat" if name == worst else ""),
        )  # fmt: skip
    if math.isfinite(record.log_evidence):
        digits = decimals(record.log_evidence_error)
        lines += labelled(
            "evidence",
            f"ln p(counts) = {record.log_evidence:.{digits}f} +- {record.log_evidence_error:.1g}; it depends on every prior",
        )
    effect = run.table_effect
    if effect is not None:
        lines += labelled(
            "table's error",
            f"moves H by {effect.moves:.1%} of its standard deviation, and widens it by {max(effect.widens - 1, 0):.1%}",
        )
    return lines


def _ordinal(n: int) -> str:
    return {1: "1st", 2: "2nd", 3: "3rd"}.get(n, f"{n}th")
