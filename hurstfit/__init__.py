"""Measure the correlation (Hurst) exponent H of star formation histories from counted quiescent fractions.

Names are loaded when they are first used, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from hurstfit.errors import HurstfitError
    from hurstfit.fractions.store import load_table
    from hurstfit.fractions.table import FractionTable
    from hurstfit.inference import infer
    from hurstfit.measurements import Measurements, read_measurements
    from hurstfit.runs.run import Run, open_run

__version__ = "0.1.0"

__all__ = [
    "FractionTable",
    "HurstfitError",
    "Measurements",
    "Run",
    "infer",
    "load_table",
    "open_run",
    "read_measurements",
]

_HOME = {
    "FractionTable": "hurstfit.fractions.table",
    "HurstfitError": "hurstfit.errors",
    "Measurements": "hurstfit.measurements",
    "Run": "hurstfit.runs.run",
    "infer": "hurstfit.inference",
    "load_table": "hurstfit.fractions.store",
    "open_run": "hurstfit.runs.run",
    "read_measurements": "hurstfit.measurements",
}


def __getattr__(name: str) -> Any:
    """Load a public name on first use."""
    if name not in _HOME:
        raise AttributeError(f"module 'hurstfit' has no attribute {name!r}")
    value = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names."""
    return sorted(__all__)
