"""What counts as quiescent, and among whom: the definition of the predicted fraction.

Four choices, none of them a footnote: the parent sample, the criterion, the tracer window and the scatter of measured rates.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Literal

from hurstfit.errors import HurstfitError

__all__ = ["Criterion", "Definition", "parse_criterion"]

_BELOW = re.compile(r"(rate|ssfr)\s*<\s*(\S+)")


@dataclass(frozen=True)
class Criterion:
    """When a walk counts as quiescent.

    Attributes
    ----------
    kind : {'zero', 'rate', 'ssfr'}
        ``zero``: SFR exactly zero.  ``rate``: SFR below `limit` times the mean SFR of the walk so far.  ``ssfr``: specific
        SFR (SFR over surviving stellar mass) times cosmic age below `limit`, which is what observers measure.
    limit : float
        Threshold; 0 for ``zero``.
    """

    kind: Literal["zero", "rate", "ssfr"] = "zero"
    limit: float = 0.0

    def __str__(self) -> str:
        """Write it as users do."""
        return "zero" if self.kind == "zero" else f"{self.kind}<{self.limit:g}"


def parse_criterion(text: object, where: str = "criterion") -> Criterion:
    """Read a criterion as users write it.

    Parameters
    ----------
    text : str
        ``"zero"``; ``"rate<theta"``, say ``"rate<0.2"``; or ``"ssfr<T"``.
    where : str
        How to call the key in a message.

    Returns
    -------
    Criterion

    Raises
    ------
    HurstfitError
        If it is none of them.
    """
    if isinstance(text, str):
        if text.strip() == "zero":
            return Criterion()
        match = _BELOW.fullmatch(text.strip())
        if match:
            try:
                limit = float(match.group(2))
            except ValueError:
                limit = math.nan
            if limit > 0 and math.isfinite(limit):
                return Criterion("rate" if match.group(1) == "rate" else "ssfr", limit)
    raise HurstfitError(
        f"{where}: {text!r} is not a criterion; allowed are 'zero', 'rate<0.2' (SFR below 0.2 of the mean SFR so far) and "
        "'ssfr<0.2' (specific SFR below 0.2 over the cosmic age), with any positive number"
    )


@dataclass(frozen=True)
class Definition:
    """The choices that define the predicted fraction, besides the noise type.

    Attributes
    ----------
    min_mass : float or None
        Parent sample: None counts all walks, 0 those that have formed any mass, mu > 0 those with more than mu times the mean.
    criterion : Criterion
        When a walk counts as quiescent.
    window : float
        Tracer window over which the SFR is averaged.
    window_unit : {'steps', 'Myr'}
        Unit of `window`.
    scatter : float
        Scatter of measured rates in dex.
    returned_fraction : float
        Share R of the formed mass that stars have returned; used by the criterion ``ssfr``.
    """

    min_mass: float | None = None
    criterion: Criterion = Criterion()
    window: float = 1.0
    window_unit: Literal["steps", "Myr"] = "steps"
    scatter: float = 0.0
    returned_fraction: float = 0.0

    @property
    def single_step(self) -> bool:
        """Whether the window is a single step whatever the clock."""
        return self.window_unit == "steps" and self.window <= 1.0

    def label(self) -> str:
        """Name the definition in a few words, for legends and lists."""
        unit = "steps" if self.window_unit == "steps" else "Myr"
        masses = {None: "all walks", 0.0: "any mass"}
        parts = [
            str(self.criterion).replace("<", " < "),
            masses.get(self.min_mass, f"mass > {self.min_mass or 0:g} of the mean"),
            "" if self.single_step else f"window {self.window:g} {unit}",
            f"scatter {self.scatter:g} dex" if self.scatter else "",
        ]
        return ", ".join(filter(None, parts))

    def describe_parent(self) -> str:
        """Say in words who is counted."""
        if self.min_mass is None:
            return "all walks, also those that formed next to nothing"
        if self.min_mass == 0:
            return "walks that have formed any mass"
        return f"walks that have formed more than {self.min_mass:g} of the mean mass"

    def describe_criterion(self) -> str:
        """Say in words what counts as quiescent."""
        unit = "steps" if self.window_unit == "steps" else "Myr"
        rate = "SFR" if self.single_step else f"SFR averaged over the last {self.window:g} {unit}"
        if self.criterion.kind == "zero":
            return f"{rate} exactly zero"
        if self.criterion.kind == "rate":
            words = f"{rate} below {self.criterion.limit:g} of the mean SFR so far"
        else:
            words = (
                f"specific SFR ({rate} over surviving mass, {self.returned_fraction:g} of the formed mass returned) "
                f"below {self.criterion.limit:g} over the cosmic age"
            )
        return f"{words}, measured with a scatter of {self.scatter:g} dex" if self.scatter else words
