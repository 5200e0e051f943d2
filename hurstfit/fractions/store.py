"""The HDF5 file of a fraction table: the one place that knows its format.

Sealed, see :mod:`hurstfit.sealing`.  Root attributes: ``format_version``, ``noise``, ``sha256``.  Group ``made_by``: one string
attribute for each setting and version.  Data sets: ``h``, ``steps``, ``masses``, ``scales``, ``thresholds`` (the axes),
``values`` and ``errors`` with the axes (H, steps, parent sample: all walks and then each of ``masses``, window scale, criterion:
zero and then each of ``thresholds``); ``replicates`` (see :mod:`hurstfit.fractions.replicates`).  Values and errors are
stored to six decimals; exactly known values are put back to full precision on reading.
"""

from __future__ import annotations

import hashlib
import json
from importlib import resources
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from hurstfit.errors import HurstfitError, did_you_mean
from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.own import ModelTable, read_own_table
from hurstfit.fractions.replicates import Replicates
from hurstfit.fractions.table import FractionTable, with_exact_values
from hurstfit.sealing import open_sealed, sealed_file
from hurstfit.walks.noise import NOISE_TYPES

__all__ = ["FORMAT_VERSION", "load_table", "read_table", "shipped_path", "write_table"]

KIND = "fraction table"
FORMAT_VERSION = 1
AXES = ("h", "steps", "masses", "scales", "thresholds")
ARRAYS = ("values", "errors", "replicates")


def write_table(path: Path, table: FractionTable) -> None:
    """Write a table; the file appears only when it is complete.

    Parameters
    ----------
    path : Path
        File to write; the caller has made sure that it may be.
    table : FractionTable
        What to write.
    """
    # an error that is not exactly zero stays above zero
    errors = np.where(table.errors > 0, np.maximum(table.errors, 1e-6), 0.0)
    values, errors = (np.round(a, 6).astype(np.float32) for a in (table.values, errors))
    with sealed_file(path, KIND) as file:
        file.attrs["format_version"] = FORMAT_VERSION
        file.attrs["noise"] = table.noise
        made_by = file.create_group("made_by")
        for key, value in sorted(table.made_by.items()):
            made_by.attrs[key] = value
        for name in AXES:
            file[name] = getattr(table.axes, name)
        for name, array in (("values", values), ("errors", errors)):
            # to six decimals, bit-packed: a tenth of the size, far below any simulation error
            file.create_dataset(name, data=array, chunks=(1, *array.shape[1:]), scaleoffset=6, shuffle=True, compression="gzip")
        if table.replicates is not None:
            units = table.replicates.units
            chunks = (1, 1, *units.shape[2:])
            file.create_dataset("replicates", data=units, chunks=chunks, shuffle=True, compression="gzip", compression_opts=9)
        stored = [file[name][...] for name in ARRAYS if name in file]
        file.attrs["sha256"] = _checksum(table.noise, table.axes, stored, table.made_by)


def read_table(path: Path) -> FractionTable:
    """Read and verify a table.

    Raises
    ------
    HurstfitError
        If the file is missing, is not a fraction table, is of a newer version, or does not match its checksum.
    """
    try:
        with open_sealed(path, KIND) as file:
            version = int(file.attrs["format_version"])
            if version > FORMAT_VERSION:
                raise HurstfitError(
                    f"{path} has table format {version}, newer than this hurstfit reads ({FORMAT_VERSION}); update hurstfit"
                )
            noise = str(file.attrs["noise"])
            made_by = {key: str(value) for key, value in file["made_by"].attrs.items()}
            axes = TableAxes(**{name: file[name][...] for name in AXES})
            stored = [file[name][...] for name in ARRAYS if name in file]
            recorded = str(file.attrs["sha256"])
        found = _checksum(noise, axes, stored, made_by)
    except HurstfitError:
        raise
    except Exception as error:  # a damaged file can make h5py raise almost anything
        raise HurstfitError(f"fraction table {path} cannot be read: it is truncated, damaged or not HDF5") from error
    if found != recorded:
        raise HurstfitError(f"fraction table {path} is damaged: its contents do not match its checksum")
    values, errors = (a.astype(float) for a in stored[:2])
    with_exact_values(noise, axes, values, errors)
    replicates = Replicates(axes, stored[2]) if len(stored) > 2 else None
    return FractionTable(noise, axes, values, errors, made_by, recorded, replicates)


def shipped_path(noise: str) -> Path:
    """Path of the table that ships for a noise type."""
    return Path(str(resources.files("hurstfit"))) / "fractions" / "shipped" / f"{noise}.h5"


def load_table(name: str | Path) -> FractionTable:
    """Load a table that ships with the package, or one from a file.

    Parameters
    ----------
    name : str or Path
        ``"type-I"`` or ``"type-II"`` for the table that ships, otherwise a file: HDF5, or ECSV for a table of your own.

    Returns
    -------
    FractionTable

    Raises
    ------
    HurstfitError
        If there is no such table or it cannot be read.
    """
    if str(name) in NOISE_TYPES:
        return read_table(shipped_path(str(name)))
    if Path(name).suffix.lower() == ".ecsv":
        own = read_own_table(Path(name))
        if isinstance(own, ModelTable):
            raise HurstfitError(
                f"{name} holds labelled models ({', '.join(own.models)}), not H, so that there is no H to infer from it"
            )
        return own
    if not Path(name).exists():
        hint = did_you_mean(str(name), NOISE_TYPES)
        raise HurstfitError(f"no fraction table {str(name)!r}: give {' or '.join(NOISE_TYPES)}, or a file{hint}")
    return read_table(Path(name))


def _checksum(noise: str, axes: TableAxes, stored: list[NDArray], made_by: object) -> str:
    digest = hashlib.sha256(noise.encode())
    digest.update(json.dumps(made_by, sort_keys=True).encode())
    for name in AXES:
        digest.update(np.ascontiguousarray(getattr(axes, name), dtype="<f8").tobytes())
    for array in stored:
        digest.update(np.ascontiguousarray(array, dtype="<f4" if array.dtype.kind == "f" else "i1").tobytes())
    return digest.hexdigest()
