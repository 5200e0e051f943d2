"""One inference: from a configuration to a run."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from hurstfit.engines.chain import Chain
from hurstfit.engines.choice import run_engine
from hurstfit.engines.crosscheck import Comparison, compare_draws
from hurstfit.engines.joint import JointSettings
from hurstfit.errors import HurstfitError
from hurstfit.files import require_writable
from hurstfit.problem import Problem, load_problem
from hurstfit.runs.parts import fingerprint_of, opened_parts
from hurstfit.runs.run import Run
from hurstfit.runs.store import RunRecord, is_run_file, write_run
from hurstfit.versions import versions

__all__ = ["cross_check", "infer", "infer_problem"]


def infer(
    source: str | Path | Mapping[str, Any],
    *,
    out: str | Path | None = None,
    overwrite: bool = False,
    progress: Callable[[int, str], None] | None = None,
) -> Run:
    """Infer H from counted quiescent fractions.

    Parameters
    ----------
    source : str, Path or mapping
        Configuration: a TOML file, or its contents as nested mappings.
    out : str or Path, optional
        Run file to write; by default what [output] run says, and no file where it says nothing.
    overwrite : bool, optional
        Whether an existing run file may be replaced.
    progress : callable, optional
        Called with the number of moves since the last call, and how far convergence is, in words.

    Returns
    -------
    Run

    Raises
    ------
    HurstfitError
        If anything in the configuration or its data is malformed, or the run file cannot or must not be written.
    """
    problem = load_problem(source)
    named = out if out is not None else problem.loaded.config.output.run
    return infer_problem(problem, Path(named) if named is not None else None, overwrite=overwrite, progress=progress)


def infer_problem(
    problem: Problem, path: Path | None, *, overwrite: bool = False, progress: Callable[[int, str], None] | None = None
) -> Run:
    """Sample a problem, write its run file where `path` is given, and return the run; parameters as in :func:`infer`."""
    if path is not None:
        require_writable(path, overwrite=overwrite, what="run file")
        if path.is_file() and path.stat().st_size and not is_run_file(path):
            raise HurstfitError(f"{path} is not a run file, so that it is not replaced by one; name another file")
    engine = problem.loaded.config.engine
    settings = JointSettings(engine.seed, engine.walkers, engine.max_steps, engine.target_ess, engine.max_rhat)
    begun = time.perf_counter()
    if path is None:
        chain = run_engine(problem.posterior, engine.kind, settings, progress)
        return Run(_record(problem, settings, chain, time.perf_counter() - begun))
    with opened_parts(path, _fingerprint(problem)) as parts:
        chain = run_engine(problem.posterior, engine.kind, settings, progress, parts)
        run = Run(_record(problem, settings, chain, time.perf_counter() - begun), path)
        write_run(path, run.record)
        parts.remove()
    return run


def _fingerprint(problem: Problem) -> str:
    """Fingerprint of everything that determines the chain of a problem."""
    loaded = problem.loaded
    engine = loaded.config.engine.model_dump(exclude={"max_steps", "target_ess", "max_rhat"})
    config = loaded.config.model_dump(exclude={"engine", "output"})
    return fingerprint_of(
        {
            "config": config,
            "engine": engine,
            "measurements": problem.measurements.to_ecsv(),
            "table": problem.table.digest,
            **versions(),
        }
    )


def cross_check(run: Run, progress: Callable[[int, str], None] | None = None) -> tuple[str, list[Comparison]]:
    """Run the other engine on the problem of a run and compare their draws.

    Parameters
    ----------
    run : Run
        A run of either engine.
    progress : callable, optional
        As in :func:`infer`.

    Returns
    -------
    str
        The other engine, and whether it converged.
    list of Comparison
        Parameter by parameter.

    Raises
    ------
    HurstfitError
        If the other engine does not apply.
    """
    posterior, engine = run.problem.posterior, run.problem.loaded.config.engine
    # another seed: draws that share random numbers would agree for that reason alone
    settings = JointSettings(engine.seed + 1, engine.walkers, engine.max_steps, engine.target_ess, engine.max_rhat)
    chain = run_engine(posterior, "quadrature" if run.record.engine == "joint" else "joint", settings, progress)
    other = posterior.physical(chain.coordinates[chain.warmup :])
    state = chain.engine if chain.converged else f"{chain.engine}, NOT CONVERGED"
    return state, compare_draws(run.names, run.record.draws, other)


def _record(problem: Problem, settings: JointSettings, chain: Chain, seconds: float) -> RunRecord:
    loaded, posterior = problem.loaded, problem.posterior
    kept = chain.coordinates[chain.warmup :]
    named_table = loaded.config.walk.table
    return RunRecord(
        config_name=loaded.name,
        config_folder=str(loaded.folder.resolve()),
        config=loaded.text,
        measurements_name=problem.measurements.path,
        measurements=problem.measurements.to_ecsv(),
        used=problem.used,
        table_noise=problem.table.noise,
        table_source=str((loaded.folder / named_table).resolve()) if named_table else "shipped",
        table_sha256=problem.table.digest,
        engine=chain.engine,
        engine_chosen=chain.chosen,
        log_evidence=chain.log_evidence,
        log_evidence_error=chain.log_evidence_error,
        seed=settings.seed,
        created=datetime.now(UTC).isoformat(timespec="seconds"),
        wall_seconds=seconds,
        converged=chain.converged,
        stopped=chain.stopped,
        thin=chain.thin,
        warmup=chain.warmup,
        versions=versions(),
        names=posterior.names,
        units=tuple(p.unit for p in posterior.parameters),
        descriptions=tuple(p.description for p in posterior.parameters),
        draws=posterior.physical(kept),
        log_likelihood=chain.log_probability[chain.warmup :] - posterior.log_prior(kept),
        coordinates=chain.coordinates,
        log_probability=chain.log_probability,
        accepted=chain.accepted,
    )
