"""How fast a fraction table is built, against plain NumPy and against the inverse transforms alone.

    python benchmarks/table_speed.py

The opponent is the straightforward vectorised way: fresh normals for each H, circulant embedding (type I) or a padded convolution
(type II) with scipy.fft, cumsum, minimum.accumulate, and a look at which walks are at zero at the table's step numbers.  It
returns one walk of n steps for each real transform of length 2n, in double precision.

The figure of merit is variance x CPU time of the zero fraction among all walks, at one H and step number, from the scatter of
independent repetitions of equal cost; the ratio printed is the geometric mean over H and step numbers, with the range.  The
floor is the time that the same inverse transforms take alone, in the same batches.  All times are process times (user +
system) of one process.
"""

from __future__ import annotations

import cProfile
import pstats
import time

import numpy as np
import scipy.fft

from hurstfit.fractions.axes import TableAxes, default_axes
from hurstfit.fractions.simulate import BLOCK_WALKS, COLUMNS, simulate_batch
from hurstfit.walks.noise import NOISE_TYPES, fractional_gaussian_autocovariance, fractional_integration_weights

SEED = 5
REPETITIONS = 48
OPPONENT_WALKS = 512
STEPS = np.array([40, 160, 640, 2048])


def opponent(noise: str, axes: TableAxes, walks: int, rng: np.random.Generator) -> np.ndarray:
    """Zero fractions, (H, steps), the straightforward way."""
    n = int(axes.steps[-1])
    shares = np.empty((axes.h.size, axes.steps.size))
    for i, H in enumerate(axes.h):
        if noise == "type-I":
            lags = np.arange(n + 1)
            row = fractional_gaussian_autocovariance(H, lags)
            eigenvalues = np.maximum(scipy.fft.rfft(np.concatenate([row, row[-2:0:-1]])).real, 0)
            spectrum = rng.standard_normal((walks, n + 1)) + 1j * rng.standard_normal((walks, n + 1))
            spectrum[:, [0, -1]] = spectrum[:, [0, -1]].real * np.sqrt(2)
            x = scipy.fft.irfft(spectrum * np.sqrt(eigenvalues * n), axis=1)[:, :n]
        else:
            weights = scipy.fft.rfft(fractional_integration_weights(H, n), n=2 * n)
            x = scipy.fft.irfft(scipy.fft.rfft(rng.standard_normal((walks, n)), n=2 * n, axis=1) * weights, axis=1)[:, :n]
        total = np.cumsum(x, axis=1)
        rate = total - np.minimum(np.minimum.accumulate(total, axis=1), 0.0)
        shares[i] = (rate[:, axes.steps - 1] == 0).mean(axis=0)
    return shares


def floor(noise: str, axes: TableAxes, walks: int) -> float:
    """CPU seconds of the inverse transforms alone."""
    kind = NOISE_TYPES[noise]
    n = int(axes.steps[-1])
    spectrum = kind.white_spectrum(n, COLUMNS, np.random.default_rng(SEED))
    work = np.empty_like(spectrum)
    transforms = axes.h.size * walks // (4 * kind.windows * COLUMNS)
    begun = time.process_time()
    for _ in range(transforms):
        scipy.fft.ifft(work, axis=0, overwrite_x=True)
    return time.process_time() - begun


def repeat(simulate: object, rng: np.random.Generator) -> tuple[np.ndarray, float]:
    """Variance of the result over repetitions, and CPU seconds of one."""
    simulate(rng)  # type: ignore[operator]  # warm up, compile
    begun = time.process_time()
    results = np.stack([simulate(rng) for _ in range(REPETITIONS)])  # type: ignore[operator]
    return results.var(axis=0, ddof=1), (time.process_time() - begun) / REPETITIONS


def breakdown(noise: str, axes: TableAxes) -> str:
    """Say where the CPU time of one batch goes, from a profile (which itself takes some of it)."""
    profile = cProfile.Profile()
    profile.enable()
    simulate_batch(noise, axes, BLOCK_WALKS, np.random.default_rng(SEED))
    profile.disable()
    rows = pstats.Stats(profile).stats.items()  # type: ignore[attr-defined]
    total = sum(row[2] for _, row in rows)
    names = {
        "c2c": "transforms",
        "tally": "sorting walks by mass and rate",
        "walk": "walking",
        "shape_spectrum": "shaping spectra",
        "white_spectrum": "random numbers",
    }
    parts = {words: sum(row[2] for key, row in rows if name in key[2]) / total for name, words in names.items()}
    return ", ".join(f"{words} {share:.0%}" for words, share in parts.items())


def main() -> None:
    """Run everything for both noise types and print it."""
    for noise in NOISE_TYPES:
        full = default_axes(noise)
        h = full.h[(full.h >= 0.2) & (full.h < 1.0)]
        zero = TableAxes(h, STEPS, np.zeros(1), np.zeros(1), np.zeros(0))
        rng = np.random.default_rng(SEED)

        def ours(g: np.random.Generator, axes: TableAxes = zero, noise: str = noise) -> np.ndarray:
            return simulate_batch(noise, axes, BLOCK_WALKS, g).fraction[:, :, 0, 0, 0]

        def theirs(g: np.random.Generator, axes: TableAxes = zero, noise: str = noise) -> np.ndarray:
            return opponent(noise, axes, OPPONENT_WALKS, g)

        variance, seconds = repeat(ours, rng)
        other_variance, other_seconds = repeat(theirs, rng)
        gain = (other_variance * other_seconds) / (variance * seconds)
        alone = floor(noise, zero, BLOCK_WALKS)
        walk_steps = BLOCK_WALKS * zero.h.size * int(STEPS[-1])
        mean_gain = np.exp(np.log(gain).mean())
        by_steps = ", ".join(f"{n}: {g:.1f}" for n, g in zip(STEPS, np.exp(np.log(gain).mean(axis=0)), strict=True))
        rate = walk_steps / seconds
        other_rate = OPPONENT_WALKS / BLOCK_WALKS * walk_steps / other_seconds
        print(f"{noise}, criterion zero, all walks, {zero.h.size} H, steps {STEPS.tolist()}:")
        print(f"  walk-steps per second and core: {rate:.3g} (opponent {other_rate:.3g})")
        print(f"  variance x CPU time, opponent / ours: {mean_gain:.1f} (geometric mean; {gain.min():.1f} to {gain.max():.1f})")
        print(f"    by steps: {by_steps}")
        print(f"  CPU time / inverse transforms alone: {seconds / alone:.2f}")
        begun = time.process_time()
        simulate_batch(noise, full, BLOCK_WALKS, rng)
        seconds = time.process_time() - begun
        alone = floor(noise, full, BLOCK_WALKS)
        print(f"  all definitions of the default table at once: {seconds / alone:.2f} times the inverse transforms alone")
        print(f"    of which: {breakdown(noise, full)}")


if __name__ == "__main__":
    main()
