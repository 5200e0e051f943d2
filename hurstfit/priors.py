"""The few distributions that a user can write down.

A prior is a frozen dataclass that knows its density, its distribution function and, above all, its quantile: the
samplers walk in a space where every free parameter is standard normal, and `Prior.from_normal` brings a point of that
space back.  A distribution function alone loses the upper tail (1 - 1e-17 is 1 in floating point), so everything here
works from the pair of tail probabilities, P(X <= x) and P(X > x), and uses the smaller of the two.

A new distribution is a subclass with a density, the two tails and their inverse; :mod:`hurstfit.prior_entries` turns what a
TOML file says into one of them.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass, field
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betainc, betaincc, betainccinv, betaincinv, betaln, ndtr, ndtri, xlog1py, xlogy

__all__ = [
    "BETA_MAX",
    "BETA_MIN",
    "LEAST_MASS",
    "Beta",
    "Fixed",
    "LogNormal",
    "Prior",
    "TruncatedBeta",
    "TruncatedNormal",
    "Uniform",
    "beta_from_mean_sd",
    "range_text",
]

Array = NDArray[np.float64]

_LOG_SQRT_2PI = 0.5 * math.log(2.0 * math.pi)
# Outside these limits the quantiles of a Beta leave the range of floating point or lose most of their digits.
BETA_MIN, BETA_MAX = 0.05, 1e8
# A normal that keeps less than this of its probability inside its limits is a mistake; its quantiles would be rounding.
LEAST_MASS = 1e-12


class Prior(ABC):
    """What is believed of one number before the counts are seen.

    Attributes
    ----------
    lo, hi : float
        Ends of the support.
    """

    lo: float
    hi: float

    @property
    def mean(self) -> float:
        """Mean of the distribution."""
        return self._moments()[0]

    @property
    def sd(self) -> float:
        """Standard deviation of the distribution."""
        return self._moments()[1]

    @property
    def is_fixed(self) -> bool:
        """Whether the value is known, so that there is nothing to sample."""
        return False

    @abstractmethod
    def describe(self) -> str:
        """Say in plain text what the prior is."""

    @abstractmethod
    def _moments(self) -> tuple[float, float]:
        """Mean and standard deviation."""

    @abstractmethod
    def _log_density(self, x: Array) -> Array:
        """Log density at `x`, which lies in the support."""

    @abstractmethod
    def _tails(self, x: Array) -> tuple[Array, Array]:
        """P(X <= x) and P(X > x), each to full relative precision, at `x` in the support."""

    @abstractmethod
    def _quantile(self, lower: Array, upper: Array) -> Array:
        """Value with probability `lower` below it and `upper` above it; the two sum to one."""

    def log_pdf(self, x: ArrayLike) -> Array:
        """Log of the normalised density.

        Parameters
        ----------
        x : array_like
            Values, any shape.

        Returns
        -------
        ndarray
            Shape of `x`; minus infinity outside the support.  For a fixed value 0 at the value: the log of a
            probability, since there is no density.
        """
        x = np.asarray(x, float)
        inside = (x >= self.lo) & (x <= self.hi)
        return np.where(inside, self._log_density(np.clip(x, self.lo, self.hi)), -np.inf)[()]

    def cdf(self, x: ArrayLike) -> Array:
        """Probability of a value of at most `x`; shape of `x`."""
        return self._tails(np.clip(np.asarray(x, float), self.lo, self.hi))[0][()]

    def ppf(self, u: ArrayLike) -> Array:
        """Quantile: the value with probability `u` below it; shape of `u`, NaN where `u` is not in 0..1."""
        u = np.asarray(u, float)
        u = np.where((u >= 0.0) & (u <= 1.0), u, np.nan)
        return self._quantile(u, 1.0 - u)[()]

    def from_normal(self, t: ArrayLike) -> Array:
        """Map standard normal numbers to values distributed as this prior: ppf(Phi(t)), stable in both tails.

        Parameters
        ----------
        t : array_like
            Standard normal numbers, any shape.

        Returns
        -------
        ndarray
            Shape of `t`, within the support.
        """
        t = np.asarray(t, float)
        return self._quantile(ndtr(t), ndtr(-t))[()]

    def to_normal(self, x: ArrayLike) -> Array:
        """Inverse of `from_normal`; infinite at and beyond the ends of the support, 0 for a fixed value."""
        return _normal_quantile(*self._tails(np.clip(np.asarray(x, float), self.lo, self.hi)))[()]

    def sample(self, rng: np.random.Generator, size: int | tuple[int, ...] | None = None) -> Array:
        """Draw independent values with the generator `rng`; shape `size`."""
        return self.from_normal(rng.standard_normal(size))


@dataclass(frozen=True)
class Fixed(Prior):
    """A value that is known."""

    value: float
    lo: float = field(init=False, repr=False)
    hi: float = field(init=False, repr=False)

    def __post_init__(self) -> None:
        _require(math.isfinite(self.value), "a fixed value must be finite")
        object.__setattr__(self, "lo", self.value)
        object.__setattr__(self, "hi", self.value)

    @property
    def is_fixed(self) -> bool:
        """Always true."""
        return True

    def describe(self) -> str:
        """Such as ``fixed at 0.02``."""
        return f"fixed at {self.value:.6g}"

    def _moments(self) -> tuple[float, float]:
        return self.value, 0.0

    def _log_density(self, x: Array) -> Array:
        return np.zeros_like(x)

    def _tails(self, x: Array) -> tuple[Array, Array]:
        return np.ones_like(x), np.zeros_like(x)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return np.full_like(lower, self.value)

    def cdf(self, x: ArrayLike) -> Array:
        """Step from 0 to 1 at the value."""
        return (np.asarray(x, float) >= self.value).astype(float)[()]

    def to_normal(self, x: ArrayLike) -> Array:
        """Zero: a fixed value has no coordinate of its own."""
        return np.zeros_like(np.asarray(x, float))[()]


@dataclass(frozen=True)
class Uniform(Prior):
    """Equally likely from `lo` to `hi`."""

    lo: float
    hi: float

    def __post_init__(self) -> None:
        _require(self.lo < self.hi and math.isfinite(self.hi - self.lo), "uniform needs finite lo < hi")

    def describe(self) -> str:
        """Such as ``uniform from 0.05 to 1.3``."""
        return f"uniform from {self.lo:.6g} to {self.hi:.6g}"

    def _moments(self) -> tuple[float, float]:
        return 0.5 * self.lo + 0.5 * self.hi, (self.hi - self.lo) / math.sqrt(12.0)

    def _log_density(self, x: Array) -> Array:
        return np.full_like(x, -math.log(self.hi - self.lo))

    def _tails(self, x: Array) -> tuple[Array, Array]:
        width = self.hi - self.lo
        return (x - self.lo) / width, (self.hi - x) / width

    def _quantile(self, lower: Array, upper: Array) -> Array:
        # A weighted mean of the ends has no cancellation on either side.
        return np.clip(self.lo * upper + self.hi * lower, self.lo, self.hi)


@dataclass(frozen=True)
class Beta(Prior):
    """Density proportional to x^(a-1) (1-x)^(b-1) from 0 to 1."""

    a: float
    b: float
    lo: float = field(default=0.0, init=False, repr=False)
    hi: float = field(default=1.0, init=False, repr=False)

    def __post_init__(self) -> None:
        _require(0.0 < self.a < math.inf and 0.0 < self.b < math.inf, "Beta needs finite a > 0 and b > 0")

    def describe(self) -> str:
        """Such as ``Beta(3, 57): mean 0.05, sd 0.028``."""
        return f"Beta({self.a:.6g}, {self.b:.6g}): {_moments_text(self)}"

    def _moments(self) -> tuple[float, float]:
        n = self.a + self.b
        return self.a / n, math.sqrt(self.a / n * (self.b / n) / (n + 1.0))

    def _log_density(self, x: Array) -> Array:
        return xlogy(self.a - 1.0, x) + xlog1py(self.b - 1.0, -x) - betaln(self.a, self.b)

    def _tails(self, x: Array) -> tuple[Array, Array]:
        return betainc(self.a, self.b, x), betaincc(self.a, self.b, x)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        low = lower <= 0.5
        x = np.empty_like(lower)
        betaincinv(self.a, self.b, lower, out=x, where=low)
        betainccinv(self.a, self.b, upper, out=x, where=~low)
        lost = np.isnan(x)
        if lost.any():
            # scipy gives NaN for some probabilities below about 1e-17; that far out the leading term of the tail,
            # p = y^a / (a B(a, b)), is more exact than a sampler can notice.
            ln_b = betaln(self.a, self.b)
            with np.errstate(divide="ignore"):
                from_below = np.exp((np.log(lower * self.a) + ln_b) / self.a)
                from_above = 1.0 - np.exp((np.log(upper * self.b) + ln_b) / self.b)
            x = np.where(lost, np.clip(np.where(low, from_below, from_above), 0.0, 1.0), x)
        return x


@dataclass(frozen=True)
class TruncatedBeta(Prior):
    """Beta(a, b), cut to `lo`..`hi` within 0..1 and renormalised."""

    a: float
    b: float
    lo: float
    hi: float

    def __post_init__(self) -> None:
        _require(0.0 <= self.lo < self.hi <= 1.0, "a truncated Beta needs 0 <= lo < hi <= 1")
        _require(self.mass >= LEAST_MASS, "a truncated Beta needs some probability between its limits")

    @cached_property
    def _whole(self) -> Beta:
        return Beta(self.a, self.b)

    @cached_property
    def _end_tails(self) -> tuple[float, float, float, float]:
        """P below and above the lower limit, P below and above the upper limit, for the Beta that is not cut."""
        below, above = self._whole._tails(np.array([self.lo, self.hi]))
        return float(below[0]), float(above[0]), float(below[1]), float(above[1])

    @property
    def mass(self) -> float:
        """Probability that the Beta that is not cut has between the limits."""
        below_lo, above_lo, below_hi, above_hi = self._end_tails
        return below_hi - below_lo if below_hi <= 0.5 else above_lo - above_hi

    def describe(self) -> str:
        """Such as ``Beta(2, 2), truncated to 0.05..1: mean 0.507, sd 0.22``."""
        return f"Beta({self.a:.6g}, {self.b:.6g}), truncated to {range_text(self.lo, self.hi)}: {_moments_text(self)}"

    def _moments(self) -> tuple[float, float]:
        # x^k times a Beta density is a Beta density again, with a + k in place of a
        n, ends = self.a + self.b, np.array([self.lo, self.hi])
        first = self.a / n * float(np.diff(betainc(self.a + 1, self.b, ends))[0]) / self.mass
        factor = self.a / n * (self.a + 1) / (n + 1)
        second = factor * float(np.diff(betainc(self.a + 2, self.b, ends))[0]) / self.mass
        return first, math.sqrt(max(second - first**2, 0.0))

    def _log_density(self, x: Array) -> Array:
        return self._whole._log_density(x) - math.log(self.mass)

    def _tails(self, x: Array) -> tuple[Array, Array]:
        below_lo, above_lo, below_hi, above_hi = self._end_tails
        below, above = self._whole._tails(x)
        # each difference is taken on the side where its terms are small
        lower = above_lo - above if below_lo > 0.5 else below - below_lo
        upper = below_hi - below if below_hi < 0.5 else above - above_hi
        return np.clip(lower / self.mass, 0.0, 1.0), np.clip(upper / self.mass, 0.0, 1.0)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        below_lo, above_lo, below_hi, above_hi = self._end_tails
        x = self._whole._quantile(below_lo * upper + below_hi * lower, above_lo * upper + above_hi * lower)
        return np.clip(x, self.lo, self.hi)


@dataclass(frozen=True)
class TruncatedNormal(Prior):
    """Normal with mean `centre` and standard deviation `spread`, cut to `lo`..`hi` and renormalised.

    The fields are not called mean and sd because cutting changes both: `mean` and `sd` are those after the cut.
    """

    centre: float
    spread: float
    lo: float
    hi: float

    def __post_init__(self) -> None:
        _require(math.isfinite(self.centre) and 0.0 < self.spread < math.inf, "a normal needs finite mean and sd > 0")
        _require(self.lo < self.hi, "a truncated normal needs lo < hi")
        _require(self._mass_mean_sd[0] >= LEAST_MASS, "a truncated normal needs some probability between its limits")

    @cached_property
    def _ends(self) -> tuple[float, float]:
        """Both limits in units of the spread."""
        return (self.lo - self.centre) / self.spread, (self.hi - self.centre) / self.spread

    @cached_property
    def _end_tails(self) -> tuple[float, float, float, float]:
        """P below and above the lower limit, P below and above the upper limit, for the normal that is not cut."""
        a, b = self._ends
        return float(ndtr(a)), float(ndtr(-a)), float(ndtr(b)), float(ndtr(-b))

    @cached_property
    def _mass_mean_sd(self) -> tuple[float, float, float]:
        """Probability between the limits, mean and standard deviation.

        By Gauss-Legendre quadrature of positive terms: the closed forms subtract nearly equal numbers where the
        limits are close together or far out.  Beyond 12 spreads from the mode the integrand is below 1e-31 of its peak.
        """
        a, b = self._ends
        mode = min(max(a, 0.0), b)
        if abs(mode) > 30.0:
            return 0.0, math.nan, math.nan  # less than 1e-197
        left, right = max(a, mode - 12.0), min(b, mode + 12.0)
        nodes, weights = _gauss_legendre()
        z = 0.5 * (left + right) + 0.5 * (right - left) * nodes
        w = weights * 0.5 * (right - left) * np.exp(-0.5 * z * z - _LOG_SQRT_2PI)
        mass = float(w.sum())
        if mass == 0.0:
            return 0.0, math.nan, math.nan  # the limits are too close together to be told apart
        mean = float((w * z).sum()) / mass
        variance = float((w * (z - mean) ** 2).sum()) / mass
        return mass, self.centre + self.spread * mean, self.spread * math.sqrt(variance)

    def describe(self) -> str:
        """Such as ``normal 0.8 +- 0.1, truncated to 0..1: mean 0.797, sd 0.097``."""
        text = f"normal {self.centre:.6g} +- {self.spread:.6g}"
        if math.isinf(self.lo) and math.isinf(self.hi):
            return text
        return f"{text}, truncated to {range_text(self.lo, self.hi)}: {_moments_text(self)}"

    def _moments(self) -> tuple[float, float]:
        return self._mass_mean_sd[1:]

    def _log_density(self, x: Array) -> Array:
        z = (x - self.centre) / self.spread
        return -0.5 * z * z - (_LOG_SQRT_2PI + math.log(self.spread * self._mass_mean_sd[0]))

    def _tails(self, x: Array) -> tuple[Array, Array]:
        a, b = self._ends
        below_a, above_a, below_b, above_b = self._end_tails
        z = (x - self.centre) / self.spread
        # Each difference is taken on the side where its terms are small.
        lower = above_a - ndtr(-z) if a > 0.0 else ndtr(z) - below_a
        upper = below_b - ndtr(z) if b < 0.0 else ndtr(-z) - above_b
        mass = self._mass_mean_sd[0]
        return np.clip(lower / mass, 0.0, 1.0), np.clip(upper / mass, 0.0, 1.0)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        below_a, above_a, below_b, above_b = self._end_tails
        # Probabilities of the normal that is not cut, as sums of positive terms: no cancellation on either side.
        z = _normal_quantile(below_a * upper + below_b * lower, above_a * upper + above_b * lower)
        return np.clip(self.centre + self.spread * z, self.lo, self.hi)


@dataclass(frozen=True)
class LogNormal(Prior):
    """Positive number whose natural logarithm is normal about ln(median) with standard deviation `sigma`."""

    median: float
    sigma: float
    lo: float = field(default=0.0, init=False, repr=False)
    hi: float = field(default=math.inf, init=False, repr=False)

    def __post_init__(self) -> None:
        _require(0.0 < self.median < math.inf and 0.0 < self.sigma < math.inf, "lognormal needs median, sigma > 0")
        # ndtri never exceeds 38.5 in size, so within this limit no quantile overflows or vanishes.
        _require(abs(math.log(self.median)) + 38.5 * self.sigma < 700.0, "lognormal is too wide to compute with")

    def describe(self) -> str:
        """Such as ``lognormal with median 1, scatter of ln 0.2``."""
        return f"lognormal with median {self.median:.6g}, scatter of ln {self.sigma:.6g}"

    def _moments(self) -> tuple[float, float]:
        mean = self.median * math.exp(0.5 * self.sigma**2)
        return mean, mean * math.sqrt(math.expm1(self.sigma**2))

    def _z(self, x: Array) -> Array:
        with np.errstate(divide="ignore"):
            return np.log(x / self.median) / self.sigma

    def _log_density(self, x: Array) -> Array:
        positive = np.where(x > 0.0, x, 1.0)
        value = -0.5 * self._z(positive) ** 2 - np.log(positive * self.sigma) - _LOG_SQRT_2PI
        return np.where(x > 0.0, value, -np.inf)

    def _tails(self, x: Array) -> tuple[Array, Array]:
        z = self._z(x)
        return ndtr(z), ndtr(-z)

    def _quantile(self, lower: Array, upper: Array) -> Array:
        return self.median * np.exp(self.sigma * _normal_quantile(lower, upper))

    def from_normal(self, t: ArrayLike) -> Array:
        """Median times exp(sigma t); shape of `t`."""
        return self.median * np.exp(self.sigma * np.asarray(t, float))

    def to_normal(self, x: ArrayLike) -> Array:
        """ln(x / median) / sigma; minus infinity at and below zero."""
        return self._z(np.maximum(np.asarray(x, float), 0.0))


def beta_from_mean_sd(mean: float, sd: float) -> Beta:
    """Beta distribution with a given mean and standard deviation.

    Parameters
    ----------
    mean : float
        Between 0 and 1, ends excluded.
    sd : float
        Positive, with sd^2 < mean (1 - mean): no distribution on 0..1 scatters more.

    Returns
    -------
    Beta
        a = mean k and b = (1 - mean) k with k = mean (1 - mean) / sd^2 - 1 (method of moments).

    Raises
    ------
    ValueError
        Where no Beta has these moments.
    """
    _require(0.0 < mean < 1.0 and 0.0 < sd < 1.0 and sd * sd < mean * (1.0 - mean), "no Beta has this mean and sd")
    k = mean * (1.0 - mean) / sd / sd - 1.0
    return Beta(mean * k, (1.0 - mean) * k)


def _normal_quantile(lower: Array, upper: Array) -> Array:
    """Find the standard normal quantile from both tail probabilities, by way of the smaller one."""
    low = lower <= 0.5
    z = ndtri(np.where(low, lower, upper))
    return np.where(low, z, -z)


@lru_cache(maxsize=1)
def _gauss_legendre() -> tuple[Array, Array]:
    """Nodes and weights; 100 of them over 24 spreads integrate a normal density to rounding."""
    nodes, weights = np.polynomial.legendre.leggauss(100)
    return nodes, weights


def _require(condition: bool, message: str) -> None:
    if not condition:
        raise ValueError(message)


def _moments_text(prior: Prior) -> str:
    return f"mean {_digits(prior.mean, 3)}, sd {_digits(prior.sd, 2)}"


def _digits(x: float, digits: int) -> str:
    """Round to some significant digits, but never write a readable whole number with an exponent."""
    return f"{x:.0f}" if 10.0**digits <= abs(x) < 1e7 else f"{x:.{digits}g}"


def range_text(lo: float, hi: float) -> str:
    """Short form for a description: ``0..1``, ``above 0``, ``below 1``."""
    if math.isinf(hi):
        return f"above {lo:.6g}" if math.isfinite(lo) else "any number"
    return f"{lo:.6g}..{hi:.6g}" if math.isfinite(lo) else f"below {hi:.6g}"
