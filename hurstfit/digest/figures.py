"""Figures of a run.

Colours are those of Okabe & Ito (2008), told apart by colour-blind readers; every study also has a marker and a fill of
its own, so that grey print keeps them apart.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from hurstfit.runs.run import Run

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["corner_figure", "fraction_figure"]

#: Okabe & Ito's colours, dark enough for lines on white paper.
COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
MARKERS = ("o", "s", "^", "D", "v", "P", "X")
#: Parameters of interest, in order; selection terms are left to the summary table.
OF_INTEREST = ("H", "step", "z_start")
LABELS = {"H": "$H$", "step": "step [Myr]", "z_start": "$z_\\mathrm{start}$"}
#: Draws that a band is computed from.
BAND_DRAWS = 400
#: Draws shown in a corner plot.
CORNER_DRAWS = 20_000


def corner_figure(run: Run, names: tuple[str, ...] | None = None) -> Figure:
    """Joint and marginal posteriors of the parameters of interest.

    Parameters
    ----------
    run : Run
        What to draw.
    names : tuple of str, optional
        Free parameters to draw; by default H, step length and start, and the selection terms where there are at most four more.

    Returns
    -------
    matplotlib.figure.Figure
    """
    import corner
    from matplotlib.figure import Figure

    if names is None:
        names = tuple(name for name in OF_INTEREST if name in run.names)
        rest = tuple(name for name in run.names if name not in names)
        names = names + rest if len(rest) <= 4 or not names else names
    draws = run.thinned(CORNER_DRAWS)[:, [run.names.index(name) for name in names]]
    size = 2.1 * max(len(names), 2)
    figure = Figure(figsize=(size, size))
    labels = [LABELS.get(name, name.replace("_", " ").replace("[", "\n[")) for name in names]
    corner.corner(
        draws,
        labels=labels,
        fig=figure,
        color=COLOURS[0],
        levels=(0.68, 0.95),
        plot_datapoints=False,
        plot_density=False,
        fill_contours=True,
        quantiles=(0.16, 0.5, 0.84),
        hist_kwargs={"density": True},
        bins=40,
        smooth=1.0,
        max_n_ticks=4,
        label_kwargs={"fontsize": 11},
        labelpad=0.06,
    )
    figure.text(0.98, 0.98, "dashed: 16, 50 and 84 %\ncontours: 68 and 95 %", ha="right", va="top", fontsize=9, color="0.3")
    if "H" in names:
        _draw_prior(run, figure.axes[names.index("H") * (len(names) + 1)])
    _mark_unconverged(run, figure)
    return figure


def _draw_prior(run: Run, axes: Axes) -> None:
    """Draw the prior of H over its marginal posterior."""
    lo, hi = axes.get_xlim()
    x = np.linspace(lo, hi, 400)
    axes.plot(x, np.exp(run.problem.posterior.exponent.prior.log_pdf(x)), color="0.45", linestyle="--", label="prior")
    axes.legend(frameon=False, fontsize=8, loc="best", handlelength=1.4)


def fraction_figure(run: Run) -> Figure:
    """Draw counted fractions against redshift, one panel a study, with what the posterior predicts for them.

    Points are the counts with their 68 % binomial interval (Jeffreys), or with the interval that the row quotes; a limit is a
    point with a line over all that it allows.  Around each point stands the posterior of the
    probability that a catalogued galaxy of that bin is labelled quiescent (dark 68 %, light 95 %), selection included; the
    grey band is the true fraction of the walk at each redshift, without selection.

    Returns
    -------
    matplotlib.figure.Figure
    """
    from matplotlib.figure import Figure

    posterior = run.problem.posterior
    bins = posterior.bins
    draws = run.thinned(BAND_DRAWS)
    counted, _ = posterior.counted_fractions(draws)
    lo95, lo68, hi68, hi95 = np.quantile(counted, (0.025, 0.16, 0.84, 0.975), axis=0)
    z = np.linspace(max(bins.z_lo.min(), 1e-3), bins.z_hi.max(), 80)
    band = np.quantile(_true_fraction(run, draws, z), (0.025, 0.16, 0.5, 0.84, 0.975), axis=0)
    columns = min(len(bins.studies), 3)
    rows = -(-len(bins.studies) // columns)
    figure = Figure(figsize=(3.2 * columns + 0.6, 3.0 * rows + 0.7), layout="constrained")
    panels = figure.subplots(rows, columns, sharex=True, sharey=True, squeeze=False).ravel()
    out = run.problem.measurements.select(~run.problem.used)
    share = bins.effective.fraction
    ends = np.array(bins.effective.drawn_interval())
    for k, (study, axes) in enumerate(zip(bins.studies, panels, strict=False)):
        colour, marker = COLOURS[k % len(COLOURS)], MARKERS[k % len(MARKERS)]
        axes.fill_between(z, band[0], band[4], color="0.88", linewidth=0, label="true fraction, 95 %")
        axes.fill_between(z, band[1], band[3], color="0.72", linewidth=0, label="true fraction, 68 %")
        axes.plot(z, band[2], color="0.35", linewidth=1)
        mine = np.flatnonzero(bins.study == study)
        offsets = _side_by_side(bins.z_lo[mine], bins.z_hi[mine])
        for i, (left, width) in zip(mine, offsets, strict=True):
            axes.bar(left, hi95[i] - lo95[i], width, lo95[i], align="edge", color=colour, alpha=0.25, linewidth=0)
            axes.bar(left, hi68[i] - lo68[i], width, lo68[i], align="edge", color=colour, alpha=0.5, linewidth=0)
        centre = np.array([left + width / 2 for left, width in offsets])
        axes.errorbar(
            centre,
            share[mine],
            yerr=np.abs(ends[:, mine] - share[mine]),
            fmt=marker,
            color="black",
            markerfacecolor="white" if k % 2 else "black",
            markersize=4,
            elinewidth=1,
            clip_on=False,
            zorder=4,
            label="counted",
        )
        others = out.study == study
        if others.any():
            middle = (out.z_lo[others] + out.z_hi[others]) / 2
            axes.plot(middle, out.effective.fraction[others], marker, color="0.55", markerfacecolor="none", markersize=5)
        axes.set_title(study, fontsize=10)
    for axes in panels[len(bins.studies) :]:
        axes.set_visible(False)
    top = max(hi95.max(), ends[1].max(), band[4].max(), out.effective.fraction.max(initial=0.0))
    panels[0].set_ylim(0, min(1.0, 1.15 * top))
    for axes in panels[::columns]:
        axes.set_ylabel("quiescent fraction")
    for axes in panels[max(0, len(bins.studies) - columns) : len(bins.studies)]:
        axes.set_xlabel("redshift $z$")
        axes.tick_params(labelbottom=True)
    handles = _legend_handles(bool(out.n_bins))
    figure.legend(handles=handles, loc="outside lower center", ncols=2, frameon=False, fontsize=8)
    _mark_unconverged(run, figure)
    return figure


def _legend_handles(some_left_out: bool) -> list[object]:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    left_out = Line2D([], [], color="0.55", marker="o", markerfacecolor="none", linestyle="none", label="not fitted")
    return [
        Line2D([], [], color="black", marker="o", linestyle="none", markersize=4, label="counted, 68 % or quoted interval"),
        *([left_out] if some_left_out else []),
        (Patch(color="0.72", label="true fraction of the walk, 68 % (light: 95 %)")),
        (Patch(color=COLOURS[0], alpha=0.5, label="predicted counted fraction, selection included, 68 % (light: 95 %)")),
    ]


def _side_by_side(z_lo: NDArray[np.float64], z_hi: NDArray[np.float64]) -> list[tuple[float, float]]:
    """Left edge and width of each bin's box; bins of equal redshift range (mass bins) stand beside each other."""
    places: list[tuple[float, float, tuple[float, float]]] = []
    for lo, hi in zip(z_lo, z_hi, strict=True):
        same = np.flatnonzero((z_lo == lo) & (z_hi == hi))
        order = len([p for p in places if p[2] == (lo, hi)])
        width = (hi - lo) / same.size
        places.append((lo + order * width, width, (lo, hi)))
    return [(left + 0.08 * width, 0.84 * width) for left, width, _ in places]


def _true_fraction(run: Run, draws: NDArray[np.float64], z: NDArray[np.float64]) -> NDArray[np.float64]:
    """Compute the true fraction of the walk at single redshifts, shape (draws, z)."""
    posterior = run.problem.posterior
    full = posterior.complete(draws)
    return posterior.prediction.at_redshifts(full[:, 0], full[:, 1], full[:, 2], z)


def _mark_unconverged(run: Run, figure: Figure) -> None:
    if not run.converged:
        figure.text(0.5, 0.5, "NOT CONVERGED", color="#B00000", alpha=0.35, fontsize=34, ha="center", va="center", rotation=25)
