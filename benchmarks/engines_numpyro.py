"""Opponent of the engines: the No-U-Turn Sampler of numpyro, compiled, with the posterior from a file of plain numbers.

    python benchmarks/engines_numpyro.py POSTERIOR.npz OUT

True fractions are read from a fine grid over H and step length in their normal coordinates (linear in the step, cubic in H would
not change the posterior), quantiles of the Beta priors from a fine table of their logits.  One chain, 1,000 warm-up steps and
4,000 draws, double precision; compilation counts as time before the first draw.
"""

from __future__ import annotations

import sys
import time

import jax
import jax.numpy as jnp
import numpy as np
from numpyro.infer import MCMC, NUTS


def main(posterior: str, out: str) -> None:
    """Sample, and write draws of H."""
    begun = time.perf_counter()
    jax.config.update("jax_enable_x64", True)
    with np.load(posterior) as data:
        t, h, grid, logits, log_ratio = (jnp.array(data[k]) for k in ("t", "h", "fractions", "logits", "log_ratio"))
        study, n, k = (jnp.array(data[key]) for key in ("study", "n", "k"))
    studies = int(study.max()) + 1
    width = t[1] - t[0]

    def cell(x: jax.Array) -> tuple[jax.Array, jax.Array]:
        place = jnp.clip((x - t[0]) / width, 0.0, t.size - 1.001)
        first = jnp.floor(place).astype(int)
        return first, place - first

    def potential(z: jax.Array) -> jax.Array:
        (i, a), (j, b) = cell(z[0]), cell(z[1])
        f = (1 - a) * ((1 - b) * grid[i, j] + b * grid[i, j + 1]) + a * ((1 - b) * grid[i + 1, j] + b * grid[i + 1, j + 1])
        terms = z[2:].reshape(studies, 3)
        r = jnp.exp(log_ratio[0] + (log_ratio[1] - log_ratio[0]) * terms[:, 0])[study]
        u, v = (jax.nn.sigmoid(jnp.interp(terms[:, 1 + q], t, logits[q]))[study] for q in (0, 1))
        p = (f * r * (1 - u) + (1 - f) * v) / (f * r + 1 - f)
        return 0.5 * jnp.sum(z**2) - jnp.sum(k * jnp.log(p) + (n - k) * jnp.log1p(-p))

    start = jnp.zeros(2 + 3 * studies).at[0].set(jnp.interp(0.83, h, t))
    sampler = MCMC(NUTS(potential_fn=potential), num_warmup=1000, num_samples=4000, progress_bar=False)
    sampler.warmup(jax.random.PRNGKey(1), init_params=start)
    before = time.perf_counter() - begun
    sampler.run(sampler.post_warmup_state.rng_key)
    H = np.interp(np.asarray(sampler.get_samples()[:, 0]), np.asarray(t), np.asarray(h))
    # chains are columns; one chain is read as four quarters, which only makes its effective size harder to overstate
    np.savez(out, H=H.reshape(4, -1).T, before=before)


if __name__ == "__main__":
    main(sys.argv[1], sys.argv[2])
