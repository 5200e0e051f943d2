"""The configuration: what a user writes in TOML, checked key by key.

Keys are checked here for their name and shape; what they mean together with the data is checked in :mod:`hurstfit.problem`.
"""

from __future__ import annotations

import json
import reprlib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from hurstfit.errors import HurstfitError, did_you_mean

__all__ = ["FEWEST_WALKERS", "Config", "LoadedConfig", "load_config", "to_toml"]

#: Fewer walkers than this make no ensemble, however few parameters there are.
FEWEST_WALKERS = 8

_Name = Annotated[str, Field(min_length=1)]


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


class MeasurementsTable(_Table):
    """[measurements]: the table of counts."""

    table: _Name
    keep_not_rising: bool = False


class WalkTable(_Table):
    """[walk]: the construction of the noise, and a fraction table other than the one that ships; `own` is one of the user's."""

    noise: Literal["type-I", "type-II", "own"]
    table: _Name | None = None


class GalaxiesTable(_Table):
    """[galaxies]: who is counted, and what counts as quiescent."""

    min_mass: Literal["all"] | Annotated[float, Field(ge=0)] = "all"
    criterion: str = "zero"
    window: Annotated[float, Field(gt=0)] = 1.0
    window_unit: Literal["steps", "Myr"] = "steps"
    scatter: Annotated[float, Field(ge=0, le=1)] = 0.0
    returned_fraction: Annotated[float, Field(ge=0, lt=1)] | None = None


class ClockTable(_Table):
    """[clock]: from redshift to step number; `step` and `z_start` are a number or a prior."""

    cosmology: str | dict[str, Any] = "Planck18"
    step: Any
    z_start: Any


class CountsTable(_Table):
    """[counts]: the distribution of a count; what beta-binomial needs is `rho`, or `field_scatter` with `fields`."""

    model: Literal["binomial", "beta-binomial"] = "binomial"
    rho: Any = None
    field_scatter: Any = None
    fields: Any = None


class ExponentTable(_Table):
    """[exponent]: the prior of H, by default uniform over the fraction table, and the value x of P(H > x)."""

    prior: Any = None
    above: float = 0.9


class EngineTable(_Table):
    """[engine]: how the posterior is sampled, and when to stop."""

    kind: Literal["auto", "quadrature", "joint"] = "auto"
    seed: Annotated[int, Field(ge=0, lt=2**63)] = 1
    walkers: Annotated[int, Field(ge=FEWEST_WALKERS, le=10_000)] | None = None
    max_steps: Annotated[int, Field(ge=100, le=100_000_000)] = 100_000
    target_ess: Annotated[float, Field(ge=100)] = 2000.0
    max_rhat: Annotated[float, Field(gt=1.0, le=1.1)] = 1.01


class OutputTable(_Table):
    """[output]: the run file, relative to the directory that the command runs in."""

    run: _Name | None = None


class Config(_Table):
    """A whole configuration."""

    measurements: MeasurementsTable
    walk: WalkTable
    galaxies: GalaxiesTable = GalaxiesTable()
    clock: ClockTable
    selection: dict[str, dict[str, Any]] = Field(default_factory=dict)
    counts: CountsTable = CountsTable()
    exponent: ExponentTable = ExponentTable()
    engine: EngineTable = EngineTable()
    output: OutputTable = OutputTable()


@dataclass(frozen=True)
class LoadedConfig:
    """A configuration with where it came from.

    Attributes
    ----------
    config : Config
        The checked contents.
    name : str
        How to call it in messages: the file, or "configuration" for a mapping.
    folder : Path
        Directory that the paths inside are relative to.
    text : str
        The contents as text, to be kept with a run.
    """

    config: Config
    name: str
    folder: Path
    text: str


def load_config(source: str | Path | Mapping[str, Any]) -> LoadedConfig:
    """Read and check a configuration.

    Parameters
    ----------
    source : str, Path or mapping
        A TOML file, or its contents as nested mappings (paths inside are then relative to the current directory).

    Returns
    -------
    LoadedConfig

    Raises
    ------
    HurstfitError
        If it cannot be read, or a key is unknown, missing or malformed.
    """
    if isinstance(source, Mapping):
        # read back from its own text: what is fitted is exactly what the run keeps, numpy's numbers and paths included
        name, folder, text = "configuration", Path(), to_toml(source)
    else:
        path = Path(source)
        name, folder = str(path), path.parent
        text = _read_text(path)
    try:
        contents = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise HurstfitError(f"{name} is not valid TOML: {error}") from error
    try:
        return LoadedConfig(Config.model_validate(contents), name, folder, text)
    except ValidationError as error:
        raise HurstfitError(_sentence(name, error)) from error


def _read_text(path: Path) -> str:
    if path.is_dir():
        raise HurstfitError(f"configuration {path} is a directory; name a TOML file")
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError as error:
        raise HurstfitError(f"configuration {path} does not exist") from error
    except UnicodeDecodeError as error:
        raise HurstfitError(f"configuration {path} is not a text file (UTF-8 is needed)") from error
    except OSError as error:
        raise HurstfitError(f"configuration {path} cannot be read: {error.strerror}") from error


def to_toml(contents: Mapping[str, Any]) -> str:
    """Write nested mappings of strings, numbers, booleans and lists as TOML.

    Raises
    ------
    HurstfitError
        If a value has no TOML form.
    """

    def value(x: Any) -> str:
        if hasattr(x, "tolist"):
            x = x.tolist()
        if isinstance(x, bool):
            return "true" if x else "false"
        if isinstance(x, int | float):
            return repr(x)
        if isinstance(x, str | Path):
            # JSON's escapes are TOML's, except that TOML wants the delete character escaped too
            return json.dumps(str(x), ensure_ascii=False).replace("\x7f", "\\u007f")
        if isinstance(x, list | tuple):
            return f"[{', '.join(map(value, x))}]"
        if isinstance(x, Mapping):
            return "{ " + ", ".join(f"{value(str(k))} = {value(v)}" for k, v in x.items() if v is not None) + " }"
        raise HurstfitError(f"configuration: {x!r} of type {type(x).__name__} has no TOML form")

    # what stands outside all tables has to come before them
    lines = [f"{value(str(k))} = {value(v)}" for k, v in contents.items() if not isinstance(v, Mapping) and v is not None]
    for table, body in contents.items():
        if isinstance(body, Mapping):
            lines += ["", f"[{value(str(table))}]", *(f"{value(str(k))} = {value(v)}" for k, v in body.items() if v is not None)]
    return "\n".join(lines).lstrip() + "\n"


_SIMPLE = {
    "string_type": "text in quotes",
    "string_too_short": "text that is not empty",
    "bool_type": "true or false",
    "int_type": "a whole number",
    "float_type": "a number",
    "finite_number": "a finite number",
    "dict_type": "a table",
    "model_type": "a table",
}


def _sentence(name: str, error: ValidationError) -> str:
    """Turn the gravest validation error into one sentence."""
    # an unknown key first: it is often why another one is missing
    errors = sorted(error.errors(), key=lambda e: e["type"] != "extra_forbidden")
    first = errors[0]
    # beyond a table and its key, the place only says which member of a union was tried
    place = [str(part) for part in first["loc"][:2]]
    table, key = place[0], ".".join(place[1:])
    where = f"{name}, [{table}]" + (f" {key}" if key else "")
    if first["type"] == "extra_forbidden":
        model = Config.model_fields.get(table) if key else None
        allowed = list(model.annotation.model_fields if model else Config.model_fields)  # type: ignore[union-attr]
        inside, what = (f", [{table}]", "key") if key else ("", "table")
        hint = did_you_mean(place[-1], allowed)
        return f"{name}{inside}: unknown {what} {place[-1]!r}{hint}; allowed are {', '.join(allowed)}"
    if first["type"] == "missing":
        return f"{where} is missing" if key else f"{name}: the table [{table}] is missing"
    alternatives = [e for e in errors if e["loc"][:2] == first["loc"][:2]]
    admitted = " or ".join(dict.fromkeys(_allowed(e) for e in alternatives))
    words = [word for e in alternatives if e["type"] == "literal_error" for word in str(e["ctx"]["expected"]).split("'")[1::2]]
    hint = did_you_mean(first["input"], words) if isinstance(first["input"], str) else ""
    return f"{where}: found {_show(first['input'])}, allowed is {admitted}{hint}"


def _show(value: object) -> str:
    """Say what was found, briefly and as the file writes it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    return "a table" if isinstance(value, dict) else reprlib.repr(value)


def _allowed(error: Any) -> str:
    kind, context = error["type"], error.get("ctx", {})
    if kind == "literal_error":
        return str(context["expected"])
    if kind in _SIMPLE:
        return _SIMPLE[kind]
    bounds = {
        "less_than": ("lt", "below"),
        "greater_than_equal": ("ge", "of at least"),
        "greater_than": ("gt", "above"),
        "less_than_equal": ("le", "of at most"),
    }
    if kind in bounds:
        key, words = bounds[kind]
        return f"a number {words} {context[key]:g}"
    return str(error["msg"]).lower()
