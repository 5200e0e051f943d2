"""Time to a posterior of H as good as 4,000 independent draws: 8 studies x 5 bins, 26 parameters, and 50 studies x 20 bins.

    python benchmarks/engines.py [--numpyro PYTHON] [--moves MOVES] [--joint ESS] [--large]

Every engine is a process of its own, and its time runs from before the process starts to when its draws are written.  A sampler
that gives fewer than 4,000 effective draws is scaled up by its measured draws per second, with the time that it takes before the
first draw counted once; the plain script, which cannot run to the end, is extrapolated from its time per move.  All sample the
same posterior, in coordinates in which the prior is standard normal: the opponents are in engines_emcee.py and
engines_numpyro.py, the latter in an interpreter that has numpyro (--numpyro) and that reads the same posterior from a file.

Every posterior of H is compared with that of a long reference run of the vectorised ensemble: median and 68 % width, in
combined Monte Carlo standard errors.  Quote ratios, from one run.
"""

from __future__ import annotations

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from hurstfit.engines.convergence import ess_bulk, mcse_quantile

HERE = Path(__file__).parent
#: Independent draws of H that a posterior must be worth.
WANTED = 4000
#: Moves of the vectorised opponent.
VECTORISED = 8_000
HEADER = "study,z_lo,z_hi,logm_lo,logm_hi,n_total,n_quiescent,rising"


def invent(folder: Path, studies: int, bins: int, seed: int = 11) -> Path:
    """Write an invented problem: counts drawn from the model at H = 0.83 and a step of 20 Myr."""
    from hurstfit.config import to_toml
    from hurstfit.problem import load_problem

    rng = np.random.default_rng(seed)
    edges = np.linspace(0.5, 4.0, bins + 1)
    totals = rng.integers(100, 2000, (studies, bins))
    config = {
        "measurements": {"table": "bins.csv"},
        "walk": {"noise": "type-II"},
        "galaxies": {"min_mass": "all", "criterion": "zero"},
        "clock": {"cosmology": "Planck18", "step": {"normal": [20.0, 2.0]}, "z_start": 12.0},
        "selection": {
            "default": {
                "completeness_ratio": {"lognormal": [0.95, 0.05]},
                "missed_fraction": {"mean": 0.06, "sd": 0.02},
                "contamination": {"validation": [8, 400]},
            }
        },
        "exponent": {"prior": {"uniform": [0.05, 1.3]}},
        "engine": {"seed": 5},
    }
    path = folder / f"{studies}x{bins}.toml"
    path.write_text(to_toml(config), encoding="utf-8")

    def write(counts: np.ndarray) -> None:
        rows = [
            f"S{s:02d},{edges[b]:.4f},{edges[b + 1]:.4f},10.0,11.0,{totals[s, b]},{int(counts[s * bins + b])},true"
            for s in range(studies)
            for b in range(bins)
        ]
        (folder / "bins.csv").write_text("\n".join([HEADER, *rows]) + "\n", encoding="utf-8")

    write(np.zeros(studies * bins))
    posterior = load_problem(path).posterior
    truth = posterior.physical(0.7 * rng.standard_normal((1, len(posterior.parameters))))
    truth[0, :2] = 0.83, 20.0
    write(posterior.counts.simulate(posterior.counted_fractions(truth)[0], rng)[0])
    return path


def tabulate(config: Path, file: Path) -> None:
    """Write the posterior as plain numbers, for an opponent that must not import hurstfit: see engines_numpyro.py."""
    from hurstfit.priors import Beta
    from hurstfit.problem import load_problem

    posterior = load_problem(config).posterior
    t = np.linspace(-8, 8, 257)
    h, step = (posterior.parameters[i].prior.from_normal(t) for i in (0, 1))
    grid = posterior.prediction(np.repeat(h, t.size), np.tile(step, t.size), np.full(t.size**2, posterior.z_start.prior.mean))[0]
    studies = list(posterior.bins.studies)
    logits = []
    for term in ("missed_fraction", "contamination"):
        prior = posterior.selection[studies[0]].prior(term)
        assert isinstance(prior, Beta)
        value = prior.from_normal(t)
        logits.append(np.log(value) - np.log1p(-value))
    ratio = posterior.selection[studies[0]].completeness_ratio
    np.savez(
        file,
        t=t,
        h=h,
        fractions=grid.reshape(t.size, t.size, -1),
        logits=np.array(logits),
        log_ratio=np.log(ratio.from_normal(np.array([0.0, 1.0]))),
        study=np.array([studies.index(s) for s in posterior.bins.study]),
        n=posterior.bins.n_total,
        k=posterior.bins.n_quiescent,
    )


def process(command: list[str]) -> tuple[float, float]:
    """Run a process: wall time in seconds, and peak memory in MiB."""
    begun = time.perf_counter()
    # works from a checkout that is not installed, too
    environment = {**os.environ, "PYTHONPATH": str(HERE.parent)}
    started = subprocess.Popen(command, env=environment, stdout=subprocess.DEVNULL)
    # not subprocess.run: only this call tells the memory of one child
    _, status, usage = os.wait4(started.pid, 0)
    if status:
        raise RuntimeError(f"{' '.join(command)} failed")
    cpu = usage.ru_utime + usage.ru_stime
    wall = time.perf_counter() - begun
    print(f"    {Path(command[1]).name} {command[-1].rpartition('/')[2]}: {wall:.2f} s, {cpu:.2f} s of CPU", flush=True)
    return wall, usage.ru_maxrss / 1024


def hurstfit_run(config: Path, kind: str, folder: Path, **engine: float) -> tuple[np.ndarray, float, float, float]:
    """Run hurstfit's own command: draws of H (steps, chains), wall time, time before the first draw, peak memory."""
    from hurstfit.runs.run import open_run

    settings = f'kind = "{kind}"\n' + "".join(f"{key} = {value}\n" for key, value in engine.items())
    own = folder / f"{config.stem}-{kind}.toml"
    own.write_text(config.read_text(encoding="utf-8").replace('["engine"]\n', f'["engine"]\n{settings}'), encoding="utf-8")
    out = folder / f"{config.stem}-{kind}.h5"
    wall, memory = process([sys.executable, "-m", "hurstfit", "infer", str(own), "--out", str(out), "--overwrite"])
    run = open_run(out)
    return run.record.draws[..., run.names.index("H")], wall, 0.0, memory


def script_run(command: list[str], out: Path) -> tuple[np.ndarray, float, float, float]:
    """Run an opponent's script, which writes draws of H and the time that it took before its first one."""
    wall, memory = process([*command, str(out)])
    with np.load(out) as found:
        return found["H"], wall, float(found["before"]), memory


def report(name: str, found: tuple[np.ndarray, float, float, float], reference: np.ndarray) -> float:
    """Print one line; and give the time to as many independent draws as are wanted."""
    draws, wall, before, memory = found
    ess = ess_bulk(draws)
    scale = max(1.0, WANTED / ess)
    needed = before + (wall - before) * scale
    z = []
    for p in (0.16, 0.5, 0.84):
        error = np.hypot(mcse_quantile(draws, p), mcse_quantile(reference, p))
        z.append((np.quantile(draws, p) - np.quantile(reference, p)) / error)
    print(
        f"{name:28s} {wall:8.2f} s for ESS {ess:7.0f}  -> {needed:9.2f} s for {WANTED}   H {np.median(draws):.4f}  "
        f"z at 16, 50, 84 %: {z[0]:+.1f} {z[1]:+.1f} {z[2]:+.1f}   {memory:5.0f} MiB",
        flush=True,
    )
    return needed


def plain(emcee: list[str], folder: Path, moves: int = 40) -> float:
    """Extrapolate the plain script, which takes the same moves as the vectorised one, from its time per move; in seconds."""
    process([*emcee, "plain", str(moves), str(folder / "plain.npz")])
    with np.load(folder / "plain.npz") as found, np.load(folder / "vectorised.npz") as same:
        per_draw = VECTORISED / ess_bulk(same["H"])
        rate = 1 / (per_draw * float(found["seconds_per_move"]))
        needed = float(found["before"]) + WANTED / rate
    print(f"{'emcee, plain':28s} {rate:.1f} independent draws of H a second -> {needed:9.2f} s for {WANTED}, extrapolated")
    return needed


def main() -> None:
    """Run everything and print times and ratios."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--numpyro", help="Python interpreter that has numpyro; without it this opponent is left out")
    parser.add_argument("--moves", type=int, default=60_000, help="moves of the reference")
    parser.add_argument("--joint", type=float, default=2000.0, help="effective draws that the joint engine runs to")
    parser.add_argument("--large", action="store_true", help="time 50 studies x 20 bins too")
    arguments = parser.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="engines-"))
    config = invent(folder, 8, 5)
    emcee = [sys.executable, str(HERE / "engines_emcee.py"), str(config)]
    reference = script_run([*emcee, "differences", str(arguments.moves)], folder / "reference.npz")
    print(f"reference: ESS {ess_bulk(reference[0]):.0f}, H {np.median(reference[0]):.4f}")
    needed = {"default": report("hurstfit infer (default)", hurstfit_run(config, "auto", folder), reference[0])}
    needed["joint"] = report(
        "hurstfit infer (joint)", hurstfit_run(config, "joint", folder, target_ess=arguments.joint), reference[0]
    )
    needed["vectorised emcee"] = report(
        "emcee, vectorised", script_run([*emcee, "vectorised", str(VECTORISED)], folder / "vectorised.npz"), reference[0]
    )
    needed["plain emcee"] = plain(emcee, folder)
    if arguments.numpyro:
        tabulate(config, folder / "posterior.npz")
        command = [arguments.numpyro, str(HERE / "engines_numpyro.py"), str(folder / "posterior.npz")]
        needed["NUTS"] = report("numpyro, NUTS", script_run(command, folder / "n.npz"), reference[0])
    print("times as long as the default:", json.dumps({k: round(v / needed["default"], 1) for k, v in needed.items()}))
    if arguments.large:
        large = invent(folder, 50, 20)
        _, wall, _, memory = hurstfit_run(large, "auto", folder)
        print(f"50 studies x 20 bins, step free: {wall:.1f} s, peak {memory:.0f} MiB")


if __name__ == "__main__":
    main()
