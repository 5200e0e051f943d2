"""Statements of common practice about random-walk star formation histories.  They have no source that could be named."""

from __future__ import annotations

import functools
import math

import numpy as np
import pytest

from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.simulate import BATCH_WALKS, simulate_batch
from hurstfit.fractions.store import load_table
from hurstfit.fractions.table import FractionTable
from hurstfit.walks import NOISE_TYPES


@functools.cache
def shipped_table(noise: str) -> FractionTable:
    """Load a table that ships, once."""
    return load_table(noise)


@pytest.mark.parametrize("noise", NOISE_TYPES)
@pytest.mark.parametrize("n", [550, 600, 650])
def test_an_uncorrelated_walk_leaves_fewer_than_one_in_twenty_at_zero(noise: str, n: int) -> None:
    # Common practice, no source: fewer than 5 % at H = 1/2 and about 600 steps.  Among all walks.
    assert 0.02 < float(shipped_table(noise).fraction(0.5, n)) < 0.05


def test_an_exponent_of_0_92_leaves_about_one_in_six_at_zero() -> None:
    # Common practice, no source: effective H about 0.92 goes with about 16 % of all walks at zero at about 600 steps (type II).
    # "About" is taken as one per cent either way.
    assert abs(float(shipped_table("type-II").fraction(0.92, 600)) - 0.16) < 0.01


def test_the_same_without_a_table() -> None:
    axes = TableAxes(np.array([0.5, 0.92]), np.array([600]), np.array([0.0]), np.array([0.0]), np.array([0.2]))
    rng = np.random.default_rng(801)
    batches = np.array([simulate_batch("type-II", axes, BATCH_WALKS, rng).fraction[:, 0, 0, 0, 0] for _ in range(16)])
    mean, se = batches.mean(axis=0), batches.std(axis=0, ddof=1) / math.sqrt(16)
    # Five standard errors: chance alone does this once in several thousand with sixteen batches.
    assert mean[0] + 5 * se[0] < 0.05
    assert abs(mean[1] - 0.16) < 0.01 + 5 * se[1]
