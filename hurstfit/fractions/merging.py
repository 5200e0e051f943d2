"""Merging tables of different seeds into one more precise table."""

from __future__ import annotations

from collections.abc import Sequence
from functools import reduce

import numpy as np

from hurstfit.errors import HurstfitError
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.table import FractionTable, with_exact_values
from hurstfit.versions import versions

__all__ = ["merge_tables"]


def merge_tables(tables: Sequence[FractionTable], names: Sequence[str]) -> FractionTable:
    """Average tables, each weighted by its number of walks.

    Parameters
    ----------
    tables : sequence of FractionTable
        Two tables or more, of one noise type, equal axes and different seeds.
    names : sequence of str
        How to call them in a message.

    Returns
    -------
    FractionTable

    Raises
    ------
    HurstfitError
        If they cannot be merged.
    """
    if len(tables) < 2:
        raise HurstfitError("merging takes two tables or more")
    first = tables[0]
    seen: dict[str, str] = {}
    for table, name in zip(tables, names, strict=True):
        if table.noise != first.noise:
            raise HurstfitError(
                f"{name} holds {table.noise} and {names[0]} {first.noise}; only tables of one noise type can be merged"
            )
        if not _same(table.axes, first.axes):
            raise HurstfitError(f"{name} and {names[0]} have different nodes; only tables on the same nodes can be merged")
        if table.replicates is None or "walks" not in table.made_by:
            raise HurstfitError(f"{name} does not say from how many walks it is made; only tables made by tabulate can be merged")
        for seed in table.made_by["seed"].split(", "):
            if seed in seen:
                raise HurstfitError(
                    f"{name} and {seen[seed]} share the seed {seed}, hence their walks; merge tables of different seeds"
                )
            seen[seed] = name
    return reduce(_pair, tables)


def _same(a: TableAxes, b: TableAxes) -> bool:
    return all(np.array_equal(getattr(a, name), getattr(b, name)) for name in a.__dict__)


def _pair(a: FractionTable, b: FractionTable) -> FractionTable:
    assert a.replicates is not None
    assert b.replicates is not None
    walks = np.array([float(table.made_by["walks"]) for table in (a, b)])
    shares = walks / walks.sum()
    values = shares[0] * a.values + shares[1] * b.values
    errors = np.hypot(shares[0] * a.errors, shares[1] * b.errors)
    replicates = a.replicates.merged(b.replicates, (shares[0], shares[1]), (a.errors, b.errors, errors))
    with_exact_values(a.noise, a.axes, values, errors)
    made_by = {
        "command": f"{a.made_by['command']}; {b.made_by['command']}; merged",
        "noise": a.noise,
        "seed": f"{a.made_by['seed']}, {b.made_by['seed']}",
        "walks": f"{walks.sum():.0f}",
        "largest_step": a.made_by["largest_step"],
        **versions(),
    }
    return FractionTable(a.noise, a.axes, values, errors, made_by, replicates=replicates)
