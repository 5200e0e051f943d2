"""The bins of an inference: what was counted, where, and by whom."""

from __future__ import annotations

import io
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hurstfit.measurements.columns import COLUMNS
from hurstfit.measurements.effective import EffectiveCounts, effective_counts

if TYPE_CHECKING:
    from astropy.table import QTable

__all__ = ["Measurements"]


@dataclass(frozen=True, eq=False)
class Measurements:
    """A table of counted fractions, one row a bin.

    Attributes
    ----------
    path : str
        File that it came from, as the user named it.
    table : astropy.table.QTable
        Columns ``study``, ``z_lo``, ``z_hi``, ``logm_lo``, ``logm_hi`` (dex of solar masses), ``rising``, possibly ``note``,
        and those of ``n_total``, ``n_quiescent``, ``n_effective``, ``fraction``, ``fraction_err``, ``fraction_lo``,
        ``fraction_hi``, ``interval``, ``limit`` and ``confidence`` that the file has; cells that a row does not use are masked.
    rows : ndarray of int, shape (n_bins,)
        Row of the file, counted from 1, that each bin came from; 1, 2, ... unless told otherwise.

    Raises
    ------
    ValueError
        Where the table lacks a column or `rows` does not fit it.
    """

    path: str
    table: QTable = field(repr=False)
    rows: NDArray[np.int64] = field(default_factory=lambda: np.empty(0, np.int64), repr=False)

    def __post_init__(self) -> None:
        missing = [name for name, column in COLUMNS.items() if column.required and name not in self.table.colnames]
        if missing:
            raise ValueError(f"the table of Measurements lacks {', '.join(missing)}")
        rows = np.asarray(self.rows, np.int64)
        if rows.size == 0:
            rows = np.arange(1, len(self.table) + 1)
        if rows.shape != (len(self.table),):
            raise ValueError(f"Measurements needs one row number a bin: {len(self.table)}, not shape {rows.shape}")
        object.__setattr__(self, "rows", rows)

    @classmethod
    def with_effective(cls, path: str, table: QTable, rows: NDArray[np.int64], effective: EffectiveCounts) -> Measurements:
        """Make measurements whose effective counts are known already."""
        made = cls(path, table, rows)
        made.__dict__["effective"] = effective
        return made

    @cached_property
    def effective(self) -> EffectiveCounts:
        """What each row says about its fraction, as effective counts, whatever form it has."""
        columns: dict[str, NDArray] = {"z_lo": self.z_lo}
        for name, column in COLUMNS.items():
            if column.blank and name != "note" and name in self.table.colnames:
                columns[name] = np.asarray(self.table[name], str) if column.kind == "text" else self._numbers(name)
        return effective_counts(columns)

    @property
    def n_bins(self) -> int:
        """Number of bins."""
        return len(self.table)

    @property
    def studies(self) -> tuple[str, ...]:
        """Names of the studies, in order of appearance."""
        return tuple(dict.fromkeys(self.study.tolist()))

    @property
    def study(self) -> NDArray[np.str_]:
        """Study of every bin, shape (n_bins,)."""
        return np.asarray(self.table["study"], str)

    @property
    def z_lo(self) -> NDArray[np.float64]:
        """Lower redshift of every bin, shape (n_bins,)."""
        return self._numbers("z_lo")

    @property
    def z_hi(self) -> NDArray[np.float64]:
        """Upper redshift of every bin, shape (n_bins,)."""
        return self._numbers("z_hi")

    @property
    def logm_lo(self) -> NDArray[np.float64]:
        """Lower log10 stellar mass of every bin, solar masses, shape (n_bins,)."""
        return self._numbers("logm_lo")

    @property
    def logm_hi(self) -> NDArray[np.float64]:
        """Upper log10 stellar mass of every bin, solar masses, shape (n_bins,)."""
        return self._numbers("logm_hi")

    @property
    def n_total(self) -> NDArray[np.float64]:
        """Galaxies counted in every bin, shape (n_bins,); nan for rows that do not say."""
        return self._numbers("n_total")

    @property
    def n_quiescent(self) -> NDArray[np.float64]:
        """Galaxies labelled quiescent in every bin, shape (n_bins,); nan for rows that are no counts."""
        return self._numbers("n_quiescent")

    @property
    def rising(self) -> NDArray[np.bool_]:
        """Whether the mean star formation rate still rises in every bin, shape (n_bins,)."""
        return np.asarray(self.table["rising"], bool)

    def _numbers(self, name: str) -> NDArray[np.float64]:
        if name not in self.table.colnames:
            return np.full(self.n_bins, np.nan)
        column = self.table[name]
        column = getattr(column, "value", column)
        return np.array(np.ma.filled(np.ma.asanyarray(column).astype(float), np.nan))

    def row_label(self, i: int | np.integer) -> str:
        """Name a bin for the user, such as ``row 3 (Larkspur-Deep, z 0.5-0.8)``; `i` counts from 0 in this table."""
        z_lo, z_hi = float(self.table["z_lo"][i]), float(self.table["z_hi"][i])
        return f"row {self.rows[i]} ({self.table['study'][i]}, z {z_lo:.6g}-{z_hi:.6g})"

    def select(self, mask: ArrayLike) -> Measurements:
        """Keep some of the bins, which keep the row numbers of their file.

        Parameters
        ----------
        mask : array_like of bool, shape (n_bins,)
            Which bins to keep.

        Returns
        -------
        Measurements
            The bins where `mask` holds; possibly none.

        Raises
        ------
        ValueError
            Where `mask` is not a flag for every bin.
        """
        mask = np.asarray(mask)
        if mask.dtype != bool or mask.shape != (self.n_bins,):
            raise ValueError(f"select needs {self.n_bins} flags, not {mask.dtype} of shape {mask.shape}")
        return Measurements.with_effective(self.path, self.table[mask], self.rows[mask], self.effective.select(mask))

    def to_ecsv(self) -> str:
        """Write the bins as ECSV text, without loss, with the row numbers as a first column ``row``."""
        from astropy.table import QTable

        stored = QTable()
        stored["row"] = self.rows
        for name in COLUMNS:
            if name in self.table.colnames:
                stored[name] = self.table[name]
        text = io.StringIO()
        stored.write(text, format="ascii.ecsv")
        return text.getvalue()

    @classmethod
    def from_ecsv_text(cls, text: str, path: str) -> Measurements:
        """Read back what `to_ecsv` wrote.

        Parameters
        ----------
        text : str
            Text of a stored table.
        path : str
            File that the bins came from in the first place.

        Returns
        -------
        Measurements
            The same bins and row numbers.

        Raises
        ------
        HurstfitError
            Where the text is not a table of measurements.
        """
        from hurstfit.measurements.reading import from_stored_text  # reading builds on this module

        return from_stored_text(text, path)
