"""Gaussian increments with correlation (Hurst) exponent H, generated exactly.

Two constructions are in use and they are not the same walk (Marinucci & Robinson 1999, J. Stat. Plan. Inference 80, 111):

* **type I**, stationary fractional Gaussian noise (Mandelbrot & Van Ness 1968, SIAM Review 10, 422), 0 < H <= 1;
* **type II**, fractionally integrated noise that is switched on at the first step (Granger & Joyeux 1980; Hosking 1981,
  Biometrika 68, 165), 0 < H < 3/2.

Both are a fixed filter applied to white noise in Fourier space: a spectrum of white noise, which does not know H, times the
transfer function of a :class:`NoiseType`, which does.  One spectrum therefore serves every H, and walks at neighbouring H share
their random numbers.  The real and the imaginary part of the inverse transform are two independent realisations.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "NOISE_TYPES",
    "NoiseType",
    "TypeI",
    "TypeII",
    "draw_noise",
    "fractional_gaussian_autocovariance",
    "fractional_integration_weights",
    "noise_type",
]


def fractional_gaussian_autocovariance(H: float, lags: ArrayLike) -> NDArray[np.float64]:
    """Autocovariance of fractional Gaussian noise of unit variance.

    ``g(k) = (|k+1|^{2H} - 2 |k|^{2H} + |k-1|^{2H}) / 2`` (Mandelbrot & Van Ness 1968).

    Parameters
    ----------
    H : float
        Correlation exponent, 0 < H <= 1.
    lags : array_like of int
        Lags k in steps, any shape.

    Returns
    -------
    ndarray
        g(k), the shape of `lags`.
    """
    k = np.abs(np.asarray(lags, dtype=float))
    return 0.5 * ((k + 1) ** (2 * H) - 2 * k ** (2 * H) + np.abs(k - 1) ** (2 * H))


def fractional_integration_weights(H: float, n: int) -> NDArray[np.float64]:
    """Moving-average weights of fractionally integrated noise.

    ``psi_j = Gamma(j+d) / (Gamma(d) Gamma(j+1))`` with d = H - 1/2 (Hosking 1981), from the recursion
    ``psi_j = psi_{j-1} (j - 1 + d) / j``.

    Parameters
    ----------
    H : float
        Correlation exponent, 0 < H < 3/2.
    n : int
        Number of weights.

    Returns
    -------
    ndarray, shape (n,)
        psi_0 ... psi_{n-1}; psi_0 = 1, psi_1 = d.
    """
    j = np.arange(1, n, dtype=float)
    return np.concatenate([[1.0], np.cumprod((j - 1.5 + H) / j)])


@dataclass(frozen=True)
class NoiseType(ABC):
    """How increments of a given H are made from white noise.

    Attributes
    ----------
    name : str
        The word used in configurations and tables.
    h_max : float
        Largest H that the construction admits.
    h_max_included : bool
        Whether `h_max` itself is admitted.
    windows : int
        How many stretches of n steps of one transform of length 2n are realisations of the noise.
    """

    name: str
    h_max: float
    h_max_included: bool
    windows: int

    def check(self, H: float) -> None:
        """Refuse an H for which the construction does not exist.

        Raises
        ------
        ValueError
            If H is outside the range of the construction.
        """
        if not (0 < H < self.h_max or (self.h_max_included and self.h_max == H)):
            bracket = "]" if self.h_max_included else ")"
            raise ValueError(f"{self.name} noise exists for H in (0, {self.h_max:g}{bracket}, not H = {H!r}")

    @abstractmethod
    def coordinate(self, H: ArrayLike) -> NDArray[np.float64]:
        """Give an increasing function of H in which quiescent fractions are smooth up to the limit of the construction."""

    @abstractmethod
    def white_spectrum(self, n: int, columns: int, rng: np.random.Generator) -> NDArray[np.complex64]:
        """Spectrum of complex white noise, shape (2n, columns), single precision; it does not depend on H."""

    @abstractmethod
    def transfer(self, H: float, n: int) -> NDArray[np.complex128]:
        """Transfer function, shape (2n,): increments are the inverse transform of spectrum times transfer."""


@dataclass(frozen=True)
class TypeI(NoiseType):
    """Fractional Gaussian noise by circulant embedding (Davies & Harte 1987; Dietrich & Newsam 1997).

    The embedding of length 2n has the exact autocovariance at every lag up to n, so that both halves of its period are
    realisations of n steps; within one period the halves are correlated with each other.
    """

    name: str = "type-I"
    h_max: float = 1.0
    h_max_included: bool = True
    windows: int = 2

    def coordinate(self, H: ArrayLike) -> NDArray[np.float64]:
        """Give -sqrt(1 - H): near H = 1 increments differ from each other by a spread of that order, and fractions follow it."""
        return -np.sqrt(np.maximum(1.0 - np.asarray(H, dtype=float), 0.0))

    def white_spectrum(self, n: int, columns: int, rng: np.random.Generator) -> NDArray[np.complex64]:
        """Independent standard normal real and imaginary parts at every frequency."""
        parts = rng.standard_normal((2 * n, 2 * columns), dtype=np.float32)
        return parts.view(np.complex64)

    def transfer(self, H: float, n: int) -> NDArray[np.complex128]:
        """Square root of the circulant's eigenvalues, scaled for an inverse transform that divides by its length."""
        self.check(H)
        lags = np.arange(2 * n)
        row = fractional_gaussian_autocovariance(H, np.minimum(lags, 2 * n - lags))
        eigenvalues = scipy.fft.fft(row).real
        # the eigenvalues are non-negative in theory (Craigmile 2003 for H < 1/2); rounding may leave -1e-12
        if eigenvalues.min() < -1e-9 * eigenvalues.max():
            raise ValueError(f"circulant embedding of length {2 * n} fails at H = {H!r}")
        return (np.sqrt(np.maximum(eigenvalues, 0.0)) * np.sqrt(2 * n)).astype(np.complex128)


@dataclass(frozen=True)
class TypeII(NoiseType):
    """Fractionally integrated noise switched on at t = 1, as a zero-padded (hence exact) convolution."""

    name: str = "type-II"
    h_max: float = 1.5
    h_max_included: bool = False
    windows: int = 1

    def coordinate(self, H: ArrayLike) -> NDArray[np.float64]:
        """Give H itself: H = 1 is an interior point."""
        return np.asarray(H, dtype=float)

    def white_spectrum(self, n: int, columns: int, rng: np.random.Generator) -> NDArray[np.complex64]:
        """Transform of n complex normals followed by n zeros."""
        parts = rng.standard_normal((n, 2 * columns), dtype=np.float32)
        return scipy.fft.fft(parts.view(np.complex64), n=2 * n, axis=0)

    def transfer(self, H: float, n: int) -> NDArray[np.complex128]:
        """Transform of the weights psi_0 ... psi_{n-1} followed by n zeros."""
        self.check(H)
        return scipy.fft.fft(fractional_integration_weights(H, n), n=2 * n)


NOISE_TYPES: dict[str, NoiseType] = {noise.name: noise for noise in (TypeI(), TypeII())}


def noise_type(name: str) -> NoiseType:
    """Look a noise type up by its name.

    Raises
    ------
    ValueError
        If there is no such noise type.
    """
    if name not in NOISE_TYPES:
        raise ValueError(f"noise type {name!r} is not one of {', '.join(NOISE_TYPES)}")
    return NOISE_TYPES[name]


def draw_noise(noise: str, H: float, n: int, size: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Draw correlated Gaussian increments.

    Parameters
    ----------
    noise : {'type-I', 'type-II'}
        Construction.
    H : float
        Correlation exponent, within the construction's range.
    n : int
        Number of steps.
    size : int
        Number of independent realisations.
    rng : numpy.random.Generator
        Source of random numbers.

    Returns
    -------
    ndarray, shape (size, n)
        Increments X_1 ... X_n.  Type I has unit variance at every step; type II has unit innovations.  Single precision inside
        (relative rounding of about 1e-6 of the largest increment).

    Raises
    ------
    ValueError
        If H is outside the range of the construction, or `n` or `size` is not positive.
    """
    if n < 1 or size < 1:
        raise ValueError(f"n and size must be positive, not {n} and {size}")
    kind = noise_type(noise)
    columns = (size + 1) // 2
    spectrum = kind.white_spectrum(n, columns, rng)
    x = scipy.fft.ifft(spectrum * kind.transfer(H, n).astype(np.complex64)[:, None], axis=0)[:n]
    # one half of each period only: realisations returned here are independent
    return np.concatenate([x.real, x.imag], axis=1).T[:size].astype(float)
