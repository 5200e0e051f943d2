"""Mistakes that a user can mend.

Every one of them ends as a single sentence on standard error and exit status 2, never as a traceback.  The sentence names the
file, the row or key, what was found and what is allowed.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = ["HurstfitError", "did_you_mean"]


class HurstfitError(ValueError):
    """A mistake in what the user gave; its text is the sentence that the user reads."""


def did_you_mean(word: str, allowed: Iterable[str]) -> str:
    """Say which allowed word is nearest to a misspelt one.

    Parameters
    ----------
    word : str
        What was found.
    allowed : iterable of str
        What is allowed.

    Returns
    -------
    str
        ``" (did you mean 'x'?)"`` with a leading space, or an empty string where nothing is near.
    """
    allowed = list(allowed)
    near = difflib.get_close_matches(word.lower(), {a.lower(): a for a in allowed}, n=1, cutoff=0.6)
    if not near:
        return ""
    original = next(a for a in allowed if a.lower() == near[0])
    return f" (did you mean '{original}'?)"
