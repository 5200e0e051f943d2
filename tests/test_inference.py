"""An inference: from a configuration to a run, with or without a file."""

from __future__ import annotations

import numpy as np
import pytest

from hurstfit.errors import HurstfitError
from hurstfit.inference import infer
from hurstfit.runs.run import open_run

SHORT = {"max_steps": 150}


def test_without_an_output_nothing_is_written(case) -> None:
    before = sorted(case.folder.iterdir())
    run = infer(case.config(engine=SHORT))
    assert run.path is None
    assert sorted(case.folder.iterdir()) == before


def test_the_output_is_the_argument_or_what_the_configuration_says(case) -> None:
    assert infer(case.config(engine=SHORT, output={"run": "a.h5"})).path == case.folder.joinpath("a.h5").relative_to(case.folder)
    infer(case.config(engine=SHORT, output={"run": "a.h5"}), out="b.h5")
    assert {"a.h5", "b.h5"} <= {p.name for p in case.folder.iterdir()}


def test_the_file_holds_the_run_that_was_returned(case) -> None:
    run = infer(case.config(engine=SHORT), out="a.h5")
    assert np.array_equal(open_run("a.h5").draws("H"), run.draws("H"))


def test_an_existing_run_is_replaced_only_on_demand(case) -> None:
    infer(case.config(engine=SHORT), out="a.h5")
    with pytest.raises(HurstfitError, match="exists"):
        infer(case.config(engine={**SHORT, "seed": 8}), out="a.h5")
    infer(case.config(engine={**SHORT, "seed": 8}), out="a.h5", overwrite=True)
    assert open_run("a.h5").record.seed == 8


def test_the_record_says_what_made_it(case) -> None:
    record = infer(case.config(engine=SHORT)).record
    assert record.config == (case.folder / "case.toml").read_text()
    assert record.config_folder == str(case.folder.resolve())
    assert record.measurements_name == str(case.folder / "bins.csv")
    assert record.used.tolist() == [True] * 5 + [False]
    assert (record.table_noise, record.table_source) == ("type-II", "shipped")
    assert len(record.table_sha256) == 64
    assert record.wall_seconds > 0
    assert record.created.endswith("+00:00")
    assert (record.converged, record.stopped) == (False, "the step limit of 150 was reached")


def test_the_same_configuration_gives_the_same_run(case) -> None:
    first, again = (infer(case.config(engine=SHORT)) for _ in range(2))
    other = infer(case.config(engine={**SHORT, "seed": 8}))
    assert np.array_equal(first.record.coordinates, again.record.coordinates)
    assert np.array_equal(first.record.draws, again.record.draws)
    assert not np.array_equal(first.record.draws, other.record.draws)


def test_a_mapping_does_as_well_as_a_file(case) -> None:
    from_file = infer(case.config(engine=SHORT))
    from_mapping = infer(case.contents(engine=SHORT))
    assert np.array_equal(from_file.record.draws, from_mapping.record.draws)
    assert from_mapping.record.config_name == "configuration"
    assert from_mapping.problem.posterior.names == ("H",)
