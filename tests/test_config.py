"""Configuration: what is read, what is filled in, and what a mapping becomes."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hurstfit.config import Config, load_config, to_toml
from hurstfit.errors import HurstfitError


def minimal(**changes: object) -> dict:
    tables = {"measurements": {"table": "bins.csv"}, "walk": {"noise": "type-I"}, "clock": {"step": 20, "z_start": 12}}
    return {**tables, **changes}


def test_what_is_left_out_is_filled_in() -> None:
    config = load_config(minimal()).config
    assert config.galaxies.min_mass == "all"
    assert config.galaxies.criterion == "zero"
    assert config.clock.cosmology == "Planck18"
    assert config.exponent.prior is None
    assert config.engine.max_rhat == 1.01
    assert config.output.run is None


def test_whole_numbers_do_for_numbers() -> None:
    config = load_config(minimal(galaxies={"min_mass": 0, "window": 10}, engine={"target_ess": 500})).config
    assert (config.galaxies.min_mass, config.galaxies.window, config.engine.target_ess) == (0.0, 10.0, 500.0)


def test_a_file_keeps_its_text_comments_included(tmp_path: Path) -> None:
    path = tmp_path / "one.toml"
    path.write_text("# why\n" + to_toml(minimal()))
    loaded = load_config(path)
    assert loaded.text.startswith("# why\n")
    assert loaded.folder == tmp_path
    assert loaded.name == str(path)
    assert loaded.config == load_config(minimal()).config


def test_a_mapping_may_hold_paths_tuples_and_numbers_of_numpy() -> None:
    loaded = load_config(
        minimal(
            measurements={"table": Path("a") / "bins.csv"},
            clock={"step": {"normal": (np.float32(20), np.int64(2))}, "z_start": np.array(12.0)},
            engine={"seed": np.uint8(3), "walkers": None},
        )
    )
    assert loaded.config.measurements.table == "a/bins.csv"
    assert loaded.config.clock.step == {"normal": [20.0, 2]}
    assert loaded.config.engine.seed == 3
    assert Config.model_validate(tomllib.loads(loaded.text)) == loaded.config


def test_a_mapping_is_not_changed_and_may_be() -> None:
    source = minimal(engine={"seed": 1})
    loaded = load_config(source)
    source["engine"]["seed"] = 2
    assert loaded.config.engine.seed == 1


@pytest.mark.parametrize("value", [object(), {1, 2}, 1j])
def test_what_has_no_toml_form_is_refused(value: object) -> None:
    with pytest.raises(HurstfitError, match="has no TOML form"):
        load_config(minimal(output={"run": value}))


def test_an_unknown_key_is_reported_before_a_missing_one() -> None:
    with pytest.raises(HurstfitError, match=r"unknown table 'clok' \(did you mean 'clock'\?\)"):
        load_config({"measurements": {"table": "x.csv"}, "walk": {"noise": "type-I"}, "clok": {}})


scalars = st.one_of(
    st.booleans(), st.integers(-(2**62), 2**62), st.floats(allow_nan=False), st.text(st.characters(exclude_categories=["Cs"]))
)
bodies = st.dictionaries(st.text(st.characters(exclude_categories=["Cs"])), st.one_of(scalars, st.lists(scalars)))


@given(st.dictionaries(st.text(st.characters(exclude_categories=["Cs"])), st.one_of(scalars, bodies)))
def test_toml_is_written_so_that_it_is_read_back(contents: dict) -> None:
    assert tomllib.loads(to_toml(contents)) == contents
