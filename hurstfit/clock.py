"""From redshift to step number.

A walk counts its own steps; a survey quotes redshifts.  The two meet through cosmic time: a galaxy seen at redshift z
has walked

    n(z) = (age(z) - age(z_start)) / step

steps since all walks began at z_start, with the cosmic age in Myr and the length of a step in Myr.  A `CosmicClock`
knows age(z) of one cosmological model.  It asks astropy once, on a grid, and interpolates from then on, because a
sampler asks for ages at new values of z_start many thousand times.

A bin of a survey spans a range of redshifts, and the fraction predicted for it is the average over that range, by
default with every comoving volume counting the same.  `CosmicClock.bin_nodes` turns the average into a short weighted
sum.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from scipy.interpolate import CubicSpline

from hurstfit.cosmology import BEGINNING, check_expansion
from hurstfit.errors import HurstfitError

# astropy.cosmology takes a second to import: only functions that need it do.
if TYPE_CHECKING:
    from astropy.cosmology import FLRW

__all__ = ["BinNodes", "CosmicClock", "step_numbers"]

FloatArray = npt.NDArray[np.float64]

# Beyond redshift 30 nothing forms stars in numbers that any survey counts.
Z_MAX = 30.0
# Nodes of the splines per unit of ln(1 + z): relative errors stay below 1e-10 in age and 1e-8 in volume.
NODES_PER_E_FOLD = 160
# Gauss-Legendre nodes in a bin.  For integrands such as age^-0.3 or n^-0.7, five nodes reach 1e-6 over z = 0.1 to 1.5
# but only 6e-5 over z = 0 to 4; eight reach 1e-6 there, far below the error of any table of fractions.
ORDER = 8


@dataclass(frozen=True, eq=False)
class BinNodes:
    """Redshifts and weights that average a smooth function of redshift over each of B bins.

    Attributes
    ----------
    z : ndarray, shape (B, K)
        Redshifts inside the bins.
    weight : ndarray, shape (B, K)
        Weights, which sum to one in each bin.
    """

    z: FloatArray
    weight: FloatArray

    def average(self, values: npt.ArrayLike) -> FloatArray:
        """Average values given at the nodes.

        Parameters
        ----------
        values : array_like, shape (..., B, K)
            Values at the redshifts z.

        Returns
        -------
        ndarray, shape (..., B)
            Weighted mean in each bin.
        """
        return np.einsum("...bk,bk->...b", np.asarray(values, dtype=np.float64), self.weight)


@dataclass(frozen=True, eq=False)
class CosmicClock:
    """Cosmic age, and the volume that redshifts fill, in one cosmological model; made by `CosmicClock.build`.

    Attributes
    ----------
    cosmology : astropy.cosmology.FLRW
        The model.
    z_max : float
        Highest redshift that can be asked for.
    """

    cosmology: FLRW
    z_max: float
    # ln(age / Myr), and dV/dz / z^2, which unlike dV/dz itself is smooth and finite at z = 0; both over ln(1 + z).
    _log_age: CubicSpline
    _volume: CubicSpline

    @classmethod
    def build(cls, cosmology: FLRW, z_max: float = Z_MAX) -> CosmicClock:
        """Tabulate the ages of a model.

        Parameters
        ----------
        cosmology : astropy.cosmology.FLRW
            The model, for instance from `hurstfit.cosmology.cosmology_from`.
        z_max : float
            Highest redshift that will be asked for.

        Returns
        -------
        CosmicClock
            With relative errors below 1e-7 in age.

        Raises
        ------
        HurstfitError
            If the model has no finite age.
        ValueError
            If z_max is not a positive number.
        """
        if not 0.0 < z_max < math.inf:
            raise ValueError(f"z_max is a positive redshift, not {z_max}")
        check_expansion(cosmology, "the cosmology")
        top = math.log1p(z_max)
        x = np.linspace(0.0, top, math.ceil(NODES_PER_E_FOLD * top) + 4)
        z = np.expm1(x)
        volume = np.empty_like(z)
        volume[1:] = cosmology.differential_comoving_volume(z[1:]).to_value("Mpc3 / sr") / z[1:] ** 2
        # Near z = 0 the distance is z c / H0 in every model.
        volume[0] = cosmology.hubble_distance.to_value("Mpc") ** 3
        return cls(cosmology, float(z_max), CubicSpline(x, np.log(_ages(cosmology, x))), CubicSpline(x, volume))

    def age(self, z: npt.ArrayLike) -> FloatArray:
        """Cosmic age in Myr.

        Parameters
        ----------
        z : array_like
            Redshifts between 0 and z_max.

        Returns
        -------
        ndarray
            Ages in Myr, in the shape of z.

        Raises
        ------
        HurstfitError
            If a redshift is outside the range, or not a number.
        """
        return np.exp(self._log_age(np.log1p(self._checked(z))))

    def steps(self, z: npt.ArrayLike, step: npt.ArrayLike, z_start: npt.ArrayLike) -> FloatArray:
        """Count the steps that a walk has made, n = (age(z) - age(z_start)) / step.

        Parameters
        ----------
        z : array_like
            Redshifts of the galaxies.
        step : array_like
            Length of a step in Myr, positive.
        z_start : array_like
            Redshift at which all walks begin.

        Returns
        -------
        ndarray
            Step numbers, real, in the common shape of the three; negative where z lies beyond z_start.

        Raises
        ------
        HurstfitError
            If a redshift is outside 0 to z_max.
        ValueError
            If a step is not positive.
        """
        return (self.age(z) - self.age(z_start)) / _checked_step(step)

    def bin_nodes(
        self,
        z_lo: npt.ArrayLike,
        z_hi: npt.ArrayLike,
        order: int = ORDER,
        density: Callable[[FloatArray], npt.ArrayLike] | None = None,
    ) -> BinNodes:
        """Gauss-Legendre nodes in redshift, weighted by comoving volume or by a redshift distribution of the user's.

        Parameters
        ----------
        z_lo, z_hi : array_like, shape (B,)
            Edges of the bins; equal edges are one redshift.
        order : int
            Number K of nodes in a bin.
        density : callable, optional
            Takes redshifts of shape (B, K) and returns in the same shape the number of galaxies per unit redshift, in
            any unit; replaces dV_c/dz.

        Returns
        -------
        BinNodes
            The average of f over a bin is the sum over k of weight[k] f(z[k]).

        Raises
        ------
        HurstfitError
            If an edge is outside 0 to z_max, or a density is negative or zero over a whole bin.
        ValueError
            If the edges do not match, or are in falling order, or the order is below 1.
        """
        lo, hi = self._checked(z_lo), self._checked(z_hi)
        if lo.ndim != 1 or lo.shape != hi.shape or (lo > hi).any():
            raise ValueError(f"z_lo and z_hi are equally long, with z_lo <= z_hi, not {lo} and {hi}")
        if order < 1:
            raise ValueError(f"a bin needs at least one node, not {order}")
        nodes, gauss = np.polynomial.legendre.leggauss(order)
        centre, half = 0.5 * (hi + lo), 0.5 * (hi - lo)
        z = centre[:, None] + half[:, None] * nodes
        number = self._volume_per_redshift(z) if density is None else np.asarray(density(z), dtype=np.float64)
        # A bin without width needs no weights, and at z = 0 has no volume to take them from.
        number = np.where(half[:, None] > 0.0, number, 1.0)
        weight = gauss * number
        total = weight.sum(axis=1, keepdims=True)
        bad = ~((number >= 0.0).all(axis=1) & (total[:, 0] > 0.0) & np.isfinite(total[:, 0]))
        if bad.any():
            raise HurstfitError(
                f"the number of galaxies per unit redshift between z = {lo[bad][0]:g} and {hi[bad][0]:g} is negative, "
                "zero throughout or not finite, so the bin has no average"
            )
        return BinNodes(z, weight / total)

    def describe(self) -> str:
        """Name the model in a sentence.

        Returns
        -------
        str
            For example ``"Planck18: H0 = 67.66 km/s/Mpc, Om0 = 0.3097, age today 13787 Myr"``.
        """
        model: Any = self.cosmology
        parts = [f"H0 = {model.H0.to_value('km / (Mpc s)'):.4g} km/s/Mpc", f"Om0 = {model.Om0:.4g}"]
        if not model.is_flat:
            parts.append(f"Ode0 = {model.Ode0:.4g}")
        parts += [f"{key} = {getattr(model, key):.4g}" for key in ("w0", "wa") if hasattr(model, key)]
        parts.append(f"age today {float(self.age(0.0)):.0f} Myr")
        return f"{model.name or type(model).__name__}: " + ", ".join(parts)

    def _volume_per_redshift(self, z: FloatArray) -> FloatArray:
        """Differential comoving volume dV_c/dz, Mpc^3/sr."""
        return z**2 * self._volume(np.log1p(z))

    def _checked(self, z: npt.ArrayLike) -> FloatArray:
        redshifts = np.asarray(z, dtype=np.float64)
        # Written so that a redshift that is not a number is refused as well.
        bad = ~((redshifts >= 0.0) & (redshifts <= self.z_max))
        if bad.any():
            raise HurstfitError(f"found redshift {redshifts[bad].flat[0]:g}; cosmic ages run from 0 to {self.z_max:g}")
        return redshifts


def step_numbers(nodes_age: npt.ArrayLike, age_start: npt.ArrayLike, step: npt.ArrayLike) -> FloatArray:
    """Step numbers at the nodes of every bin, for many proposals of when walks begin and how long a step is.

    Parameters
    ----------
    nodes_age : array_like, shape (B, K)
        Cosmic age at the nodes, ``clock.age(nodes.z)``, in Myr.
    age_start : array_like, shape (W,)
        Cosmic age at which the walks begin, ``clock.age(z_start)``, in Myr.
    step : array_like, shape (W,)
        Length of a step in Myr.

    Returns
    -------
    ndarray, shape (W, B, K)
        Step numbers, real; below one where the node has no walk yet.

    Raises
    ------
    ValueError
        If a step is not positive.
    """
    start = np.asarray(age_start, dtype=np.float64)[:, None, None]
    return (np.asarray(nodes_age, dtype=np.float64) - start) / _checked_step(step)[:, None, None]


def _checked_step(step: npt.ArrayLike) -> FloatArray:
    steps = np.asarray(step, dtype=np.float64)
    if not (steps > 0.0).all():
        raise ValueError(f"a step is a positive number of Myr, not {steps}")
    return steps


def _ages(cosmology: FLRW, x: FloatArray) -> FloatArray:
    """Ages in Myr at an even grid of x = ln(1 + z): the integral of dx / H(x) from x to the beginning.

    astropy's own ages stop at an absolute error, 1.5e-8 of a Hubble time, which at high redshift is not small.
    """
    width = x[1] - x[0]
    panels = x[0] + width * np.arange(x.size + math.ceil(BEGINNING / width))
    nodes, gauss = np.polynomial.legendre.leggauss(4)
    z = np.expm1(panels[:, None] + 0.5 * width * (nodes + 1.0))
    parts = 0.5 * width * (gauss / cosmology.efunc(z)).sum(axis=1)
    # Summed from the beginning on, smallest part first.
    return cosmology.hubble_time.to_value("Myr") * np.cumsum(parts[::-1])[::-1][: x.size]
