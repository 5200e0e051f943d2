"""What a row was read as, what that implies, and what was assumed: in words."""

from __future__ import annotations

import numpy as np

from hurstfit.measurements.effective import FORMS, NOTABLE_MISFIT
from hurstfit.measurements.table import Measurements

__all__ = ["explain_row", "measurement_cautions", "summarise"]


def number(value: float) -> str:
    """Write an effective number of galaxies: whole if it is, else with as many digits as matter."""
    if value == round(value):
        return f"{value:,.0f}"
    return f"{value:,.1f}" if value >= 10 else f"{value:.3g}"


def percent(level: float) -> str:
    """Write a probability as a percentage."""
    return f"{100 * level:.6g} %"


def explain_row(measurements: Measurements, i: int) -> str:
    """Explain one row.

    Parameters
    ----------
    measurements : Measurements
        Rows.
    i : int
        Row, counted from 0 in this table.

    Returns
    -------
    str
        One paragraph: form, effective counts, assumptions, and how well a quoted interval is reproduced.
    """
    e, n = measurements.effective, measurements.n_total[i]
    form, x, m = str(e.form[i]), number(e.x[i]), number(e.m[i])
    if form == "counts":
        return f"counts: {x} of {m} galaxies labelled quiescent ({e.fraction[i]:.3f})"
    head = f"{FORMS[form]}: "
    of_n = "" if np.isnan(n) else f" of {n:,.0f} galaxies"
    if form == "share":
        return f"{head}{e.fraction[i]:g}{of_n}, counts as {x} of {m}; assumed binomial, the fraction exact"
    if form == "weighted":
        return (
            f"{head}{e.fraction[i]:g}, worth {m} galaxies{f' (n_total {n:,.0f})' if of_n else ''}, counts as {x} of {m}; "
            "assumed binomial in the effective number"
        )
    level = percent(e.level[i])
    if e.is_limit[i]:
        sign, what = ("<", "none") if form == "upper" else (">", "all")
        return (
            f"{head}{sign} {e.fraction[i]:g}{of_n} at {level} confidence (stated), counts as {what} of {m}, whose Beta "
            "distribution has this limit under a flat prior"
        )
    stated = "stated" if e.stated[i] else "assumed, since no interval is stated"
    if form == "error":
        quoted = f"{e.fraction[i]:g} +- {(e.hi[i] - e.lo[i]) / 2:.6g}"
    else:
        quoted = f"{e.fraction[i]:g}, {e.lo[i]:.6g} to {e.hi[i]:.6g}"
    if e.counted[i]:
        how = f"the error agrees with the binomial one of N, so that it counts as {x} of {m}"
    elif of_n:
        how = f"the error is larger than the binomial one of N and decides, counts as {x} of {m}; assumed to hold all scatter"
    else:
        how = f"counts as {x} of {m}, assumed to hold all scatter"
    text = f"{head}{quoted}{of_n}, central {level} ({stated}); {how}; Beta interval {e.beta_lo[i]:.4g} to {e.beta_hi[i]:.4g}"
    misfit = e.misfit[i]
    if misfit < 1e-6:
        return text + ", the quoted one"
    quality = f"the quoted ends {e.lo[i]:.4g} and {e.hi[i]:.4g} are missed by up to {misfit:.1%} of the half-width"
    return f"{text} ({quality}{', which does not matter, since N decides' if e.counted[i] else ''})"


def summarise(measurements: Measurements) -> str:
    """Say how many galaxies were counted, and how many rows are no counts, such as ``1,208 of 9,110 galaxies quiescent``."""
    counts = measurements.effective.form == "counts"
    parts = []
    if counts.any():
        quiescent, total = (int(np.nansum(v[counts])) for v in (measurements.n_quiescent, measurements.n_total))
        parts.append(f"{quiescent:,} of {total:,} galaxies quiescent")
    for form, words in FORMS.items():
        rows = int((measurements.effective.form == form).sum())
        if rows and form != "counts":
            parts.append(f"{rows} row{'s' * (rows > 1)} as {words}")
    return ", ".join(parts) or "no rows"


def measurement_cautions(measurements: Measurements) -> list[str]:
    """Say what a reader must know of how rows were read: intervals that no effective counts reproduce."""
    e = measurements.effective
    # where N decides, the interval is not used
    poor = np.flatnonzero((e.misfit > NOTABLE_MISFIT) & ~e.counted)
    if not poor.size:
        return []
    worst = int(poor[np.argmax(e.misfit[poor])])
    rows = "1 quoted interval is" if poor.size == 1 else f"{poor.size} quoted intervals are"
    return [
        f"{rows} not reproduced to {NOTABLE_MISFIT:.0%} of the half-width by any effective counts; worst is "
        f"{measurements.row_label(worst)}: {e.lo[worst]:.4g} to {e.hi[worst]:.4g} became {e.beta_lo[worst]:.4g} to "
        f"{e.beta_hi[worst]:.4g}"
    ]
