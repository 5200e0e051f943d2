"""Time one evaluation of the posterior against the straightforward way: scipy.stats, one parameter vector at a time.

    python benchmarks/posterior_speed.py [CONFIG]

The opponent looks every fraction up in the same table and uses scipy.stats for the counts and for the quantiles of the priors.
Both must give the same numbers; the time is that of one vector, as the median of several repetitions.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from scipy import stats

from hurstfit.posterior import Posterior
from hurstfit.priors import Beta
from hurstfit.problem import Problem, load_problem

VECTORS, REPETITIONS = 24, 30


def one_at_a_time(problem: Problem, coordinates: np.ndarray) -> np.ndarray:
    """Evaluate the same posterior with scipy.stats and a Python loop over vectors and bins."""
    posterior = problem.posterior
    ages, weights = posterior.prediction._nodes
    bins, surface = posterior.bins, posterior.prediction.surface
    found = []
    for t in coordinates:
        values = {q.name: q.prior.mean for q in posterior.quantities if q.prior.is_fixed}
        for parameter, coordinate in zip(posterior.parameters, t, strict=True):
            prior = parameter.prior
            if isinstance(prior, Beta):
                values[parameter.name] = stats.beta.ppf(stats.norm.cdf(coordinate), prior.a, prior.b)
            else:
                values[parameter.name] = float(prior.from_normal(coordinate))
        total = stats.norm.logpdf(t).sum()
        start = float(problem.clock.age(values["z_start"]))
        for i, study in enumerate(bins.study):
            steps = (ages[i] - start) / values["step"]
            f = float(weights[i] @ np.clip(surface(values["H"], steps), 0.0, 1.0))
            r, u, v = (values[f"{term}[{study}]"] for term in ("completeness_ratio", "missed_fraction", "contamination"))
            p = (f * r * (1 - u) + (1 - f) * v) / (f * r + 1 - f)
            total += stats.binom.logpmf(bins.n_quiescent[i], bins.n_total[i], p)
        found.append(total)
    return np.array(found)


def seconds(call: Callable[[], object], repetitions: int) -> float:
    """Median time of a call."""
    call()
    times = []
    for _ in range(repetitions):
        begun = time.perf_counter()
        call()
        times.append(time.perf_counter() - begun)
    return float(np.median(times))


def parts(posterior: Posterior, t: np.ndarray) -> dict[str, float]:
    """Time of the parts of one evaluation, in seconds."""
    x = posterior.physical(t)
    full = posterior.complete(x)
    p, _ = posterior.counted_fractions(x)
    return {
        "parameters from coordinates": seconds(lambda: posterior.physical(t), REPETITIONS),
        "true fractions": seconds(lambda: posterior.prediction(full[:, 0], full[:, 1], full[:, 2]), REPETITIONS),
        "counts": seconds(lambda: posterior.counts.log_likelihood(p), REPETITIONS),
    }


def main(path: str) -> None:
    """Print the comparison."""
    problem = load_problem(path)
    posterior = problem.posterior
    t = 0.5 * np.random.default_rng(1).standard_normal((VECTORS, len(posterior.parameters)))
    difference = np.abs(posterior.log_probability(t) - one_at_a_time(problem, t)).max()
    ours = seconds(lambda: posterior.log_probability(t), REPETITIONS)
    theirs = seconds(lambda: one_at_a_time(problem, t), 3)
    print(f"{path}: {posterior.bins.n_bins} bins, {len(posterior.parameters)} parameters, {VECTORS} vectors")
    print(f"largest difference in log-probability: {difference:.1e}")
    print(f"hurstfit          {1e6 * ours / VECTORS:10.1f} us a vector")
    print(f"one at a time     {1e6 * theirs / VECTORS:10.1f} us a vector   ({theirs / ours:.0f} times as long)")
    for name, took in parts(posterior, t).items():
        print(f"  {name:28s} {1e6 * took / VECTORS:6.1f} us a vector")


if __name__ == "__main__":
    main(sys.argv[1] if len(sys.argv) > 1 else str(Path(__file__).parents[1] / "configs" / "demo.toml"))
