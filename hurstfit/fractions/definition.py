"""What counts as quiescent, and among whom: the definition of the predicted fraction."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from hurstfit.errors import HurstfitError

__all__ = ["Definition", "parse_criterion"]

_RATE = re.compile(r"rate\s*<\s*(\S+)")


def parse_criterion(text: str, where: str = "criterion") -> float | None:
    """Read a criterion as users write it.

    Parameters
    ----------
    text : str
        ``"zero"`` or ``"rate<theta"``, say ``"rate<0.2"``: SFR below theta times the mean SFR so far.
    where : str
        How to call the key in a message.

    Returns
    -------
    float or None
        theta, or None for ``"zero"``.

    Raises
    ------
    HurstfitError
        If it is neither.
    """
    if isinstance(text, str):
        if text.strip() == "zero":
            return None
        match = _RATE.fullmatch(text.strip())
        if match:
            try:
                theta = float(match.group(1))
            except ValueError:
                theta = math.nan
            if theta > 0 and math.isfinite(theta):
                return theta
    raise HurstfitError(f"{where}: {text!r} is not a criterion: write 'zero', or 'rate<0.2' with a positive threshold")


@dataclass(frozen=True)
class Definition:
    """The choices that define the predicted fraction, besides the noise type.

    Attributes
    ----------
    min_mass : float or None
        Parent sample: None counts all walks, 0 those that have formed any mass, mu > 0 those with more than mu times the mean.
    threshold : float or None
        Criterion: None for an SFR of exactly zero, theta for ``SFR < theta x mean SFR so far``.
    window : float
        Tracer window in steps, over which the SFR is averaged.
    """

    min_mass: float | None = None
    threshold: float | None = None
    window: float = 1.0

    @property
    def criterion(self) -> str:
        """The criterion as users write it."""
        return "zero" if self.threshold is None else f"rate<{self.threshold:g}"

    def describe_parent(self) -> str:
        """Say in words who is counted."""
        if self.min_mass is None:
            return "all walks, also those that never formed stars"
        if self.min_mass == 0:
            return "walks that have formed any mass"
        return f"walks that have formed more than {self.min_mass:g} of the mean mass"

    def describe_criterion(self) -> str:
        """Say in words what counts as quiescent."""
        rate = "SFR" if self.window == 1 else f"SFR averaged over the last {self.window:g} steps"
        if self.threshold is None:
            return f"{rate} exactly zero"
        return f"{rate} below {self.threshold:g} of the mean SFR so far"
