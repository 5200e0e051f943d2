"""Interpolation between the nodes of the tables that ship is better than the simulation that fills them."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[2] / "benchmarks"))

from interpolation_error import differences


@pytest.mark.heavy
@pytest.mark.parametrize("axis", ["h", "steps"])
@pytest.mark.parametrize("noise", ["type-I", "type-II"])
def test_error_between_nodes_is_below_the_error_of_the_table(noise: str, axis: str) -> None:
    # seed and batches are those of benchmarks/interpolation_error.py; noise is taken off the mean square, whose own error over
    # several hundred correlated nodes is at most a third of it, hence the factor
    for definition, difference in differences(noise, axis).items():
        noise_floor = np.sqrt(np.mean(difference.error**2))
        assert difference.rms < difference.shipped + noise_floor / 2, definition.label()
