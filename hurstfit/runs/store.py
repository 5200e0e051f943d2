"""The HDF5 file of a run: the one place that knows its format.

Sealed (:mod:`hurstfit.sealing`); opens with plain h5py.  Root attributes: ``format_version``, and the fields of
:class:`RunRecord` that are single numbers or words.  Groups and data sets:

* ``config``, ``measurements`` (ECSV): the inputs as text; ``used``: which rows of the measurements were fitted;
* ``versions``: one attribute for each package;
* ``draws``: one data set for each free parameter, in the unit of its attribute ``unit``, shape (steps, walkers), warm-up left
  out; the attribute ``description`` says what it is;
* ``log_likelihood``: shape (steps, walkers);
* ``chain``: the whole ensemble in sampling coordinates, laid out so that emcee's own HDF backend reads it
  (``emcee.backends.HDFBackend(path, name="chain", read_only=True)``).

Every data set carries the SHA-256 of its contents in the attribute ``sha256``, and the root that of all attributes together in
``attributes_sha256``.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import HurstfitError
from hurstfit.sealing import kind_of, open_sealed, sealed_file

__all__ = ["FORMAT_VERSION", "RunRecord", "is_run_file", "read_run", "write_run"]

KIND = "run file"
FORMAT_VERSION = 1


@dataclass(frozen=True)
class RunRecord:
    """Everything that a run file holds.

    Attributes
    ----------
    config_name, config_folder, config : str
        The configuration's name, its directory, and its text.
    measurements_name, measurements : str
        The measurement table's name, and the table as ECSV text.
    used : ndarray of bool, shape (rows,)
        Which rows were fitted.
    table_noise, table_source, table_sha256 : str
        Noise type, file (or "shipped") and digest of the fraction table.
    engine, engine_chosen : str
        Engine that sampled, and why this one.
    log_evidence, log_evidence_error : float
        Log of the probability of the counts and its error; nan where the engine does not know.
    seed : int
        Seed of the run.
    created : str
        When the run ended, ISO 8601, UTC.
    wall_seconds : float
        Wall time of the sampling.
    converged : bool
        Whether the stopping rule was met.
    stopped : str
        Why sampling stopped.
    thin, warmup : int
        Ensemble moves a stored step, and stored steps left out at the start.
    versions : dict of str to str
        Versions of Python and packages.
    names, units, descriptions : tuple of str
        Free parameters, in the order of the chain, with their units and meanings.
    draws : ndarray, shape (steps, walkers, parameters)
        Draws in the parameters' own units, warm-up left out.
    log_likelihood : ndarray, shape (steps, walkers)
        Log-likelihood of the draws.
    coordinates : ndarray, shape (all steps, walkers, parameters)
        Chain in sampling coordinates, warm-up included.
    log_probability : ndarray, shape (all steps, walkers)
        Log of likelihood times prior in sampling coordinates.
    accepted : ndarray of int, shape (walkers,)
        How many of the moves that ended a stored step were accepted.
    """

    config_name: str
    config_folder: str
    config: str
    measurements_name: str
    measurements: str
    used: NDArray[np.bool_]
    table_noise: str
    table_source: str
    table_sha256: str
    engine: str
    engine_chosen: str
    log_evidence: float
    log_evidence_error: float
    seed: int
    created: str
    wall_seconds: float
    converged: bool
    stopped: str
    thin: int
    warmup: int
    versions: dict[str, str]
    names: tuple[str, ...]
    units: tuple[str, ...]
    descriptions: tuple[str, ...]
    draws: NDArray[np.float64]
    log_likelihood: NDArray[np.float64]
    coordinates: NDArray[np.float64]
    log_probability: NDArray[np.float64]
    accepted: NDArray[np.int64]


_ATTRIBUTES = tuple(f.name for f in fields(RunRecord) if f.type in ("str", "int", "float", "bool")
                    and f.name not in ("config", "measurements"))  # fmt: skip


def write_run(path: Path, record: RunRecord) -> None:
    """Write a run; the file appears only when it is complete.

    Parameters
    ----------
    path : Path
        File to write; the caller has made sure that it may be.
    record : RunRecord
        What to write.
    """
    steps, walkers, dimension = record.coordinates.shape
    with sealed_file(path, KIND) as file:
        file.attrs["format_version"] = FORMAT_VERSION
        for name in _ATTRIBUTES:
            file.attrs[name] = getattr(record, name)
        file.attrs["attributes_sha256"] = _sha256_of_attributes(vars(record))
        for name in ("config", "measurements"):
            _put(file, name, np.void(getattr(record, name).encode()))
        _put(file, "used", record.used)
        file.create_group("versions").attrs.update(record.versions)
        draws = file.create_group("draws")
        draws.attrs["names"] = list(record.names)
        for i, name in enumerate(record.names):
            # a name may not hold a slash: measurement tables refuse studies with one
            _put(draws, name, record.draws[..., i])
            draws[name].attrs.update(unit=record.units[i], description=record.descriptions[i])
        _put(file, "log_likelihood", record.log_likelihood)
        chain = file.create_group("chain")
        chain.attrs.update(version=record.versions["emcee"], nwalkers=walkers, ndim=dimension, has_blobs=False, iteration=steps)
        _put(chain, "accepted", record.accepted)
        _put(chain, "chain", record.coordinates)
        _put(chain, "log_prob", record.log_probability)


def read_run(path: Path) -> RunRecord:
    """Read and verify a run.

    Raises
    ------
    HurstfitError
        If the file is missing, is not a run, is of a newer version, is damaged, or does not match a checksum.
    """
    try:
        with open_sealed(path, KIND) as file:
            version = int(file.attrs["format_version"])
            if version > FORMAT_VERSION:
                raise HurstfitError(
                    f"{path} has run format {version}, newer than this hurstfit reads ({FORMAT_VERSION}); update hurstfit"
                )
            contents: dict[str, Any] = {name: _plain(file.attrs[name]) for name in _ATTRIBUTES}
            for name in ("config", "measurements"):
                contents[name] = bytes(_get(path, file, name)).decode()
            names = tuple(str(name) for name in file["draws"].attrs["names"])
            contents["names"] = names
            for field, key in (("units", "unit"), ("descriptions", "description")):
                contents[field] = tuple(str(file["draws"][name].attrs[key]) for name in names)
            contents["draws"] = np.stack([_get(path, file["draws"], name) for name in names], axis=-1)
            contents["used"] = _get(path, file, "used")
            contents["log_likelihood"] = _get(path, file, "log_likelihood")
            contents["versions"] = {key: str(value) for key, value in file["versions"].attrs.items()}
            for field, name in (("accepted", "accepted"), ("coordinates", "chain"), ("log_probability", "log_prob")):
                contents[field] = _get(path, file["chain"], name)
            if _sha256_of_attributes(contents) != file.attrs["attributes_sha256"]:
                raise HurstfitError(f"run file {path} is damaged: its attributes do not match their checksum")
    except HurstfitError:
        raise
    except Exception as error:
        # from a damaged file HDF5 raises whatever it likes
        raise HurstfitError(f"run file {path} cannot be read: it is truncated, damaged or not HDF5") from error
    return RunRecord(**contents)


def is_run_file(path: Path) -> bool:
    """Tell whether a file says that it is a run."""
    return kind_of(path) == KIND


def _put(group: h5py.Group, name: str, data: Any) -> None:
    dataset = group.create_dataset(name, data=data)
    dataset.attrs["sha256"] = _sha256(dataset[()])


def _get(path: Path, group: h5py.Group, name: str) -> Any:
    data = group[name][()]
    if _sha256(data) != group[name].attrs["sha256"]:
        raise HurstfitError(f"run file {path} is damaged: the data set {group[name].name} does not match its checksum")
    return data


def _sha256(data: Any) -> str:
    return hashlib.sha256(np.ascontiguousarray(data).tobytes()).hexdigest()


def _sha256_of_attributes(contents: dict[str, Any]) -> str:
    names = (*_ATTRIBUTES, "versions", "names", "units", "descriptions")
    return hashlib.sha256(json.dumps([contents[name] for name in names], sort_keys=True).encode()).hexdigest()


def _plain(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value
