"""What a fraction table says: a figure for a slide, and which H a fraction implies under each definition."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from hurstfit.clock import Z_MAX, CosmicClock
from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.fractions.definition import Definition, parse_criterion
from hurstfit.fractions.implied import implied_exponents
from hurstfit.fractions.own import ModelTable
from hurstfit.fractions.table import OWN, FractionTable
from hurstfit.fractions.weights import LARGEST_THRESHOLD
from hurstfit.prediction import BinPrediction

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["definitions_of", "implied_lines", "model_lines", "parse_definition", "table_figure"]

#: Definitions that are shown unless others are asked for, the plain prediction first.
DEFAULT_DEFINITIONS = (
    "",
    "min_mass=0.1",
    "min_mass=0.1, criterion=rate<0.2",
    "min_mass=0.1, criterion=rate<0.2, window=10",
    "min_mass=0.1, criterion=rate<0.2, window=10, scatter=0.25",
)
KEYS = ("min_mass", "criterion", "window", "window_unit", "scatter", "returned_fraction")
#: Colour, line style: told apart in grey by the style.
STYLES = (
    ("#000000", "-"), ("#0072B2", "--"), ("#D55E00", "-."), ("#009E73", ":"),
    ("#CC79A7", (0, (5, 1, 1, 1, 1, 1))), ("#E69F00", (0, (1, 2))),
)  # fmt: skip


def parse_definition(text: str) -> Definition:
    """Read a definition as ``"min_mass=0.1, criterion=rate<0.2, window=10"``; an empty text is the plain prediction.

    Raises
    ------
    HurstfitError
        For an unknown key or a malformed value.
    """
    found: dict[str, str] = {}
    for item in filter(None, (part.strip() for part in text.split(","))):
        key, _, value = (part.strip() for part in item.partition("="))
        if key not in KEYS or not value:
            raise HurstfitError(
                f"definition {text!r}: found {item!r}; allowed are key=value with the keys {', '.join(KEYS)}"
                f"{did_you_mean(key, KEYS)}"
            )
        if key in found:
            raise HurstfitError(f"definition {text!r}: {key} appears twice; allowed is once")
        found[key] = value
    numbers = {}
    for key in ("min_mass", "window", "scatter", "returned_fraction"):
        if key in found and not (key == "min_mass" and found[key] == "all"):
            try:
                numbers[key] = float(found[key])
            except ValueError:
                numbers[key] = np.nan
            if not 0 <= numbers[key] < np.inf or (key == "window" and numbers[key] == 0):
                raise HurstfitError(f"definition {text!r}: {key} is {found[key]!r}; allowed is a number that is not negative")
    if numbers.get("returned_fraction", 0.0) >= 1:
        raise HurstfitError(
            f"definition {text!r}: returned_fraction is {found['returned_fraction']!r}; allowed is a number below 1"
        )
    unit = found.get("window_unit", "steps")
    if unit not in ("steps", "Myr"):
        raise HurstfitError(f"definition {text!r}: window_unit is {unit!r}; allowed are steps and Myr")
    criterion = parse_criterion(found.get("criterion", "zero"), f"definition {text!r}, criterion")
    if (criterion.kind == "ssfr") != ("returned_fraction" in found):
        raise HurstfitError(
            f"definition {text!r}: criterion is {criterion} and returned_fraction {found.get('returned_fraction', 'left out')}; "
            "the criterion 'ssfr<...' needs one (say 0.4), and no other criterion takes one"
        )
    return Definition(
        numbers.get("min_mass"),
        criterion,
        numbers.get("window", 1.0),
        "Myr" if unit == "Myr" else "steps",
        numbers.get("scatter", 0.0),
        numbers.get("returned_fraction", 0.0),
    )


def definitions_of(table: FractionTable, texts: Sequence[str]) -> list[Definition]:
    """Definitions to show: those asked for, or a default choice; a user's own table has only one."""
    if table.noise == OWN:
        if texts:
            raise HurstfitError("a table of your own has its definition built in; leave --definition out")
        return [Definition()]
    return [parse_definition(text) for text in texts or DEFAULT_DEFINITIONS]


def implied_lines(
    table: FractionTable,
    definitions: Sequence[Definition],
    clock: CosmicClock,
    fraction: float,
    z: float,
    step: float,
    z_start: float,
) -> list[str]:
    """Say which H gives a fraction at a redshift under each definition.

    Parameters
    ----------
    table : FractionTable
        Table to read.
    definitions : sequence of Definition
        What the fraction may count.
    clock : CosmicClock
        Cosmic ages.
    fraction, z, step, z_start : float
        True quiescent fraction, redshift, step length in Myr, redshift at which walks start.
    """
    _check_question(fraction, z, step, z_start)
    lines = []
    steps = _steps(clock, z, step, z_start)
    table.require(table.axes.h[0], steps)
    for definition in definitions:
        surface = table.surface(definition)
        prediction = BinPrediction(surface, definition, clock, np.array([z]), np.array([z]))
        walk = prediction.walks(clock.age(np.array([z])), np.array([step]), np.array([z_start]))
        window, threshold = (float(np.broadcast_to(x, (1, 1))[0, 0]) for x in walk[1:])
        held = np.minimum(np.exp(surface.threshold.nodes[[0, -1]]), LARGEST_THRESHOLD)
        if definition.criterion.kind == "ssfr" and not held[0] <= threshold <= held[1]:
            raise HurstfitError(
                f"{definition.criterion} is {threshold:.3g} of the mean SFR so far at redshift {z:g}, but the {table.noise} "
                f"table holds thresholds from {held[0]:.3g} to {held[1]:.3g}"
            )
        found = implied_exponents(table, definition, fraction, steps, window, threshold)
        if found.size:
            answer = " or ".join(f"{h:.3f}" for h in found)
        else:
            h = np.linspace(table.axes.h[0], table.axes.h[-1], 400)
            reach = np.clip(surface(h, steps, window, threshold), 0, 1)
            answer = f"none: the table goes from {reach.min():.3f} to {reach.max():.3f}"
        lines.append(f"  H = {answer}".ljust(24) if found.size else f"  no H ({answer[6:]})".ljust(24))
        lines[-1] += f"  {_words(table, definition)}"
    walk_words = f"{steps:.0f} steps of {step:g} Myr since redshift {z_start:g}"
    return [
        f"A true quiescent fraction of {fraction:g} at redshift {z:g} ({walk_words}) implies for {_noise_words(table)}:",
        *lines,
    ]


def model_lines(table: ModelTable, clock: CosmicClock, fraction: float, z: float, step: float, z_start: float) -> list[str]:
    """Compare the fractions of labelled models with one at a redshift; parameters as for :func:`implied_lines`."""
    _check_question(fraction, z, step, z_start)
    steps = _steps(clock, z, step, z_start)
    width = max(len(model) for model in table.models)
    lines = [
        f"A true quiescent fraction of {fraction:g} at redshift {z:g} ({steps:.0f} steps of {step:g} Myr since redshift "
        f"{z_start:g}) compares with the models:"
    ]
    for model in table.models:
        value, error = float(table.fraction(model, steps)), float(table.standard_error(model, steps))
        lines.append(f"  {model.ljust(width)}  {value:.4f} +- {error:.1g}, {value - fraction:+.4f} from the fraction given")
    return lines


def _check_question(fraction: float, z: float, step: float, z_start: float) -> None:
    """Refuse what has no answer, in the words of the command's options."""
    if not 0 < fraction < 1:
        raise HurstfitError(f"--fraction is {fraction:g}; allowed is a number between 0 and 1")
    if not 0 < step < np.inf:
        raise HurstfitError(f"--step is {step:g}; allowed is a length in Myr above 0")
    if not 0 < z_start <= Z_MAX:
        raise HurstfitError(f"--z-start is {z_start:g}; allowed is a redshift above 0 and up to {Z_MAX:g}")
    if not 0 <= z < z_start:
        raise HurstfitError(f"--redshift is {z:g}; allowed is 0 or more, and below the start of the walk at {z_start:g}")


def _steps(clock: CosmicClock, z: float, step: float, z_start: float) -> float:
    return float((clock.age(np.array([z])) - clock.age(np.array([z_start])))[0] / step)


def _noise_words(table: FractionTable) -> str:
    return "a table of your own" if table.noise == OWN else f"{table.noise} noise"


def _words(table: FractionTable, definition: Definition) -> str:
    """Name a definition, or leave it to the author of a user's own table."""
    if table.noise == OWN:
        return "as the table defines it"
    return definition.label()


def table_figure(table: FractionTable, definitions: Sequence[Definition], fraction: float | None = None) -> Figure:
    """Draw the fraction against H at one step number, and against steps at one H, for chosen definitions.

    Parameters
    ----------
    table : FractionTable
        Table to draw.
    definitions : sequence of Definition
        At most six; their criteria and windows must need no clock.
    fraction : float, optional
        A level to draw across.

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib.figure import Figure

    for definition in definitions:
        if definition.criterion.kind == "ssfr" or definition.window_unit == "Myr":
            raise HurstfitError(
                f"a definition that follows the clock ({definition.describe_criterion()}) has no fraction by step number alone"
            )
    if len(definitions) > len(STYLES):
        raise HurstfitError(f"a figure shows at most {len(STYLES)} definitions, not {len(definitions)}")
    lowest, highest = table.axes.steps[0], table.axes.steps[-1]
    at_steps = min(600.0, float(highest))
    at_h = float(np.clip(0.8, table.axes.h[0], table.axes.h[-1]))
    figure = Figure(figsize=(10, 5.6), layout="constrained")
    left, right = figure.subplots(1, 2, sharey=True)
    h = np.linspace(table.axes.h[0], table.axes.h[-1], 400)
    steps = np.geomspace(max(lowest, min(4, highest / 2)), highest, 300)
    for definition, (colour, style) in zip(definitions, STYLES, strict=False):
        surface = table.surface(definition)
        look = {"color": colour, "linestyle": style, "linewidth": 2}
        left.plot(h, np.clip(surface(h, at_steps, definition.window), 0, 1), label=_words(table, definition), **look)
        right.plot(steps, np.clip(surface(at_h, steps, definition.window), 0, 1), **look)
    right.set_xscale("log")
    left.set_xlabel("correlation (Hurst) exponent $H$")
    right.set_xlabel("step number $n$")
    left.set_ylabel("quiescent fraction")
    left.set_title(f"{_noise_words(table)}, $n = {at_steps:g}$", fontsize=12)
    right.set_title(f"{_noise_words(table)}, $H = {at_h:g}$", fontsize=12)
    for axes in (left, right):
        axes.set_ylim(bottom=0)
        axes.margins(x=0)
        axes.grid(color="0.9", linewidth=0.8)
        if fraction is not None:
            axes.axhline(fraction, color="0.5", linewidth=1)
    figure.legend(loc="outside lower center", ncols=1, frameon=False, fontsize=10, handlelength=3.5)
    return figure
