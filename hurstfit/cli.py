"""The command line.

Commands only parse, call the library and print.  Heavy imports happen inside the commands, so that ``--help`` answers at once.
"""

from __future__ import annotations

import errno
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click

from hurstfit.errors import HurstfitError, did_you_mean

__all__ = ["main"]


def _complain(sentence: str) -> None:
    """Print one line on standard error, whatever characters file names and keys hold."""
    line = "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in sentence)
    click.echo(f"hurstfit: {line}", err=True)


def _show_version(ctx: click.Context, _: click.Parameter, wanted: bool) -> None:
    if wanted:
        from hurstfit.versions import versions

        found = versions()
        click.echo(f"hurstfit {found.pop('hurstfit')} ({', '.join(f'{name} {version}' for name, version in found.items())})")
        ctx.exit()


class _Commands(click.Group):
    """A group whose commands end a user's mistake in one sentence and exit status 2."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command."""
        try:
            return super().invoke(ctx)
        except HurstfitError as error:
            _complain(str(error))
            ctx.exit(2)
        except click.exceptions.NoArgsIsHelpError:
            raise
        except click.UsageError as error:
            command = error.ctx.command_path if error.ctx else ctx.command_path
            _complain(f"{error.format_message()} (see {command} --help)")
            ctx.exit(2)
        except KeyboardInterrupt:
            _complain("interrupted; nothing was written")
            ctx.exit(130)
        except MemoryError as error:
            _complain(f"out of memory ({error}); ask for fewer walkers, steps or bins")
            ctx.exit(2)
        except OSError as error:
            # a full disk, say; whoever stops reading our output is click's business
            if error.errno == errno.EPIPE:
                raise
            _complain(f"{error.filename or 'a file'}: {error.strerror or error}")
            ctx.exit(2)

    def resolve_command(self, ctx: click.Context, args: list[str]) -> tuple[str | None, click.Command | None, list[str]]:
        """Find a command, or say which one is nearest."""
        if args and self.get_command(ctx, args[0]) is None and not args[0].startswith("-"):
            commands = self.list_commands(ctx)
            hint = did_you_mean(args[0], commands)
            raise HurstfitError(f"unknown command {args[0]!r}{hint}; allowed are {', '.join(commands)}")
        return super().resolve_command(ctx, args)


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_show_version, help="Show versions and exit."
)
def main() -> None:
    """Measure the correlation (Hurst) exponent H of star formation histories from quiescent fractions.

    Counts of quiescent galaxies in bins of redshift and stellar mass are compared with the share of non-negative
    fractional random walks that rest at zero, selection effects included.
    """


@main.command()
@click.argument("path", metavar="FILE", type=click.Path(path_type=Path))
def vet(path: Path) -> None:
    """Check FILE without sampling and say what it means.

    FILE is a configuration (.toml), a measurement table (.ecsv, .csv), a fraction table or a run (.h5).
    """
    from hurstfit.digest.vetting import vet_lines

    _say(vet_lines(path))


@main.command()
@click.argument("config", type=click.Path(path_type=Path))
@click.option(
    "--out", type=click.Path(path_type=Path), help="Run file to write. [default: [output] run, or CONFIG's name with .h5]"
)
@click.option("--overwrite", is_flag=True, help="Replace the run file if it exists.")
@click.option("--cross-check", is_flag=True, help="Run the other engine too and compare; exit status 1 if they disagree.")
def infer(config: Path, out: Path | None, overwrite: bool, cross_check: bool) -> None:
    """Compute the posterior of H for CONFIG and write a run file.

    An interrupted run goes on where it stopped when the same command is given again.
    """
    from hurstfit.digest.words import answer_lines, caution_lines, choice_lines, run_cautions, run_lines
    from hurstfit.inference import infer_problem
    from hurstfit.problem import load_problem
    from hurstfit.runs.parts import parts_folder

    problem = load_problem(config)
    path = out or Path(problem.loaded.config.output.run or f"{config.stem}.h5")
    with _bar("sampling", problem.loaded.config.engine.max_steps, "moves") as bar:
        try:
            run = infer_problem(problem, path, overwrite=overwrite, progress=_shown_on(bar))
        except KeyboardInterrupt:
            if not parts_folder(path).exists():
                raise
            _complain(f"interrupted; what was done is in {parts_folder(path)}: give the same command again to go on")
            sys.exit(130)
    lines = ["", *answer_lines(run), "", "How", *run_lines(run), "", "What was fitted", *choice_lines(problem), ""]
    lines += caution_lines(run_cautions(run))
    _say([*lines, "", f"written: {path}   (next: hurstfit digest {path})"])
    if cross_check and not _cross_check(run):
        sys.exit(1)


def _cross_check(run: Any) -> bool:
    """Compare a run with the other engine, print the comparison, and tell whether they agree."""
    from hurstfit.engines.crosscheck import LIMIT
    from hurstfit.inference import cross_check

    with _bar("cross-check", run.problem.loaded.config.engine.max_steps, "moves") as bar:
        other, comparisons = cross_check(run, _shown_on(bar))
    width = max(len(name) for name in run.names)
    _say(
        ["", f"Cross-check: {run.record.engine}, then {other}; in brackets, differences in combined Monte Carlo standard errors"]
    )
    _say(comparison.line(width) for comparison in comparisons)
    apart = [comparison.name for comparison in comparisons if not comparison.agrees]
    _say([f"ENGINES DISAGREE by more than {LIMIT:g} standard errors on {', '.join(apart)}" if apart else "the engines agree"])
    return not apart


@main.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--into", type=click.Path(path_type=Path), help="Folder to write into. [default: RUN's name with -digest]")
@click.option("--overwrite", is_flag=True, help="Replace files of an earlier digest in the folder.")
def digest(run: Path, into: Path | None, overwrite: bool) -> None:
    """Write summary table and figures of RUN into a folder."""
    from hurstfit.digest.folder import write_digest
    from hurstfit.digest.words import answer_lines, caution_lines, run_cautions, run_lines
    from hurstfit.runs.run import open_run

    opened = open_run(run)
    written = write_digest(opened, into or Path(f"{run.stem}-digest"), overwrite=overwrite)
    _say([*answer_lines(opened), "", "How", *run_lines(opened), "", *caution_lines(run_cautions(opened)), ""])
    _say(f"written: {path}" for path in written)


@main.command()
@click.argument("table")
@click.option("--fraction", type=float, help="True quiescent fraction: say which H gives it.")
@click.option("--redshift", type=float, default=0.5, show_default=True, help="Redshift at which the fraction holds.")
@click.option("--step", type=float, default=20.0, show_default=True, help="Time step of the walk in Myr.")
@click.option("--z-start", type=float, default=12.0, show_default=True, help="Redshift at which walks start.")
@click.option("--cosmology", default="Planck18", show_default=True, help="Named cosmological model.")
@click.option(
    "--definition",
    multiple=True,
    help='What counts, say "min_mass=0.1, criterion=rate<0.2, window=10"; repeat it. [default: five common ones]',
)
@click.option("--figure", type=click.Path(path_type=Path), help="Draw fraction against H and steps into this PNG or PDF file.")
@click.option("--overwrite", is_flag=True, help="Replace the figure if it exists.")
def consult(
    table: str,
    fraction: float | None,
    redshift: float,
    step: float,
    z_start: float,
    cosmology: str,
    definition: tuple[str, ...],
    figure: Path | None,
    overwrite: bool,
) -> None:
    """Ask TABLE which H a fraction implies under each definition, and draw it.

    TABLE is type-I or type-II for the tables that ship, or a file.  A table of labelled models is compared with the fraction.
    """
    from hurstfit.clock import CosmicClock
    from hurstfit.cosmology import cosmology_from
    from hurstfit.digest.tables import definitions_of, implied_lines, model_lines, table_figure
    from hurstfit.files import require_writable, written_aside
    from hurstfit.fractions.own import ModelTable, read_own_table
    from hurstfit.fractions.store import load_table

    if fraction is None and figure is None:
        raise HurstfitError("consult: nothing was asked; give --fraction, --figure or both")
    kinds = {".png": "png", ".pdf": "pdf"}
    if figure is not None:
        if figure.suffix.lower() not in kinds:
            raise HurstfitError(f"--figure is {figure}; allowed are files that end in .png or .pdf")
        require_writable(figure, overwrite=overwrite, what="figure")
    clock = CosmicClock.build(cosmology_from(cosmology, where="--cosmology"))
    models = read_own_table(Path(table)) if Path(table).suffix.lower() == ".ecsv" else None
    if isinstance(models, ModelTable):
        if fraction is None or figure is not None or definition:
            raise HurstfitError(
                f"{table} holds labelled models, not H; ask it with --fraction, without --figure and --definition"
            )
        _say(model_lines(models, clock, fraction, redshift, step, z_start))
        return
    loaded = load_table(table)
    definitions = definitions_of(loaded, definition)
    if fraction is not None:
        _say(implied_lines(loaded, definitions, clock, fraction, redshift, step, z_start))
    if figure is not None:
        drawn = table_figure(loaded, definitions, fraction)
        with written_aside(figure) as aside:
            drawn.savefig(aside, format=kinds[figure.suffix.lower()], dpi=200)
        _say([f"written: {figure}"])


@main.command()
@click.argument("noise", type=click.Choice(["type-I", "type-II"]))
@click.option("--out", required=True, type=click.Path(path_type=Path), help="Fraction table to write.")
@click.option("--batches", default=16, show_default=True, help="Independent batches; standard errors come from their scatter.")
@click.option("--walks", default=131072, show_default=True, help="Walks of one batch, a multiple of 8192.")
@click.option("--seed", default=1, show_default=True, help="Seed of the random numbers.")
@click.option("--workers", default=1, show_default=True, type=click.IntRange(1), help="Processes; does not change the result.")
@click.option(
    "--merge",
    multiple=True,
    type=click.Path(path_type=Path),
    help="Merge this table with others instead of simulating; repeat it.",
)
@click.option("--overwrite", is_flag=True, help="Replace the table if it exists.")
def tabulate(
    noise: str, out: Path, batches: int, walks: int, seed: int, workers: int, merge: tuple[Path, ...], overwrite: bool
) -> None:
    """Simulate walks of NOISE and tabulate their quiescent fractions.

    An interrupted build goes on where it stopped when the same command is given again.  Tables of different seeds can be
    merged into a more precise one.
    """
    from hurstfit.files import require_writable
    from hurstfit.fractions.store import KIND, read_table, write_table
    from hurstfit.sealing import kind_of

    require_writable(out, overwrite=overwrite, what="fraction table")
    if out.is_file() and out.stat().st_size and kind_of(out) != KIND:
        raise HurstfitError(f"{out} is not a fraction table, so that it is not replaced by one; name another file")
    if merge:
        from hurstfit.fractions.merging import merge_tables

        table = merge_tables([read_table(path) for path in merge], [str(path) for path in merge])
        if table.noise != noise:
            raise HurstfitError(f"{merge[0]} holds {table.noise}, not {noise}")
        write_table(out, table)
    else:
        table = _build(noise, out, batches, walks, seed, workers)
    zero = table.errors[:, :, 0, 0, 0].max()
    _say([f"written: {out}", f"largest standard error: {zero:.2g} (zero, all walks), {table.errors.max():.2g} (any definition)"])


def _build(noise: str, out: Path, batches: int, walks: int, seed: int, workers: int) -> Any:
    """Simulate a table, write it, and remove the batches that it was made from."""
    from concurrent.futures import ProcessPoolExecutor
    from multiprocessing import active_children

    from hurstfit.fractions.axes import default_axes
    from hurstfit.fractions.building import Build, remove_batches, run_build
    from hurstfit.fractions.store import write_table

    build = Build(noise, default_axes(noise), batches, walks, seed)
    folder = out.with_name(f"{out.name}.batches")
    with (
        _bar(f"{noise} table", batches, "batches") as bar,
        ProcessPoolExecutor(workers, initializer=_ignore_interrupts) as executor,
    ):
        try:
            table = run_build(build, folder, executor, bar.update, keep=2 * workers)
        except KeyboardInterrupt:
            executor.shutdown(wait=False, cancel_futures=True)
            # a batch takes up to half a minute, and who pressed Ctrl-C does not wait for it
            for process in active_children():
                process.terminate()
            _complain(f"interrupted; finished batches are in {folder}: give the same command again to go on")
            sys.exit(130)
    write_table(out, table)
    remove_batches(folder)
    return table


def _ignore_interrupts() -> None:
    """Leave Ctrl-C to the parent process, which stops its workers itself."""
    import signal

    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _say(lines: Any) -> None:
    for line in lines:
        click.echo(line)


def _shown_on(bar: Any) -> Callable[[int, str], None]:
    """Show moves and words on a progress bar."""

    def progress(moves: int, words: str) -> None:
        bar.set_postfix_str(words, refresh=not moves)
        bar.update(moves)

    return progress


@contextmanager
def _bar(description: str, total: int, unit: str) -> Iterator[Any]:
    from tqdm import tqdm

    # disable=None: silent where standard error is not a terminal
    with tqdm(total=total, desc=description, unit=f" {unit}", disable=None, dynamic_ncols=True, leave=False) as bar:
        yield bar
