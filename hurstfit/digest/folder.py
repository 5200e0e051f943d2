"""The folder of a digest: which files there are, and that none is overwritten unasked."""

from __future__ import annotations

from pathlib import Path

from hurstfit.digest.figures import corner_figure, fraction_figure
from hurstfit.digest.words import run_cautions
from hurstfit.errors import HurstfitError
from hurstfit.files import require_writable_folder, written_aside
from hurstfit.runs.run import Run

__all__ = ["write_digest"]


def write_digest(run: Run, folder: Path, *, overwrite: bool = False) -> list[Path]:
    """Write the summary table and the figures of a run.

    Parameters
    ----------
    run : Run
        What to digest.
    folder : Path
        Where to write; made if missing.
    overwrite : bool, optional
        Whether files of an earlier digest may be replaced.

    Returns
    -------
    list of Path
        Files written.

    Raises
    ------
    HurstfitError
        If the folder cannot be written, or holds one of the files already.
    """
    figures = {"parameters": corner_figure, "fractions": fraction_figure}
    names = ["summary.ecsv", *(f"{name}.{kind}" for name in figures for kind in ("pdf", "png"))]
    _require_folder(folder, names, overwrite)
    summary = run.summary()
    summary.meta["cautions"] = run_cautions(run)
    summary.meta["versions"] = dict(run.record.versions)
    with written_aside(folder / names[0]) as aside:
        summary.write(aside, format="ascii.ecsv")
    for name, draw in figures.items():
        figure = draw(run)
        for kind in ("pdf", "png"):
            # no date inside: the same run gives the same file
            metadata = {"CreationDate": None} if kind == "pdf" else {}
            with written_aside(folder / f"{name}.{kind}") as aside:
                figure.savefig(aside, format=kind, dpi=200, metadata=metadata, bbox_inches="tight")
    return [folder / name for name in names]


def _require_folder(folder: Path, names: list[str], overwrite: bool) -> None:
    if folder.exists() and not folder.is_dir():
        raise HurstfitError(f"{folder} is a file; name a folder for the digest")
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise HurstfitError(f"folder {folder} cannot be made: {error.strerror}") from error
    require_writable_folder(folder, "digest")
    there = [name for name in names if (folder / name).exists()]
    if there and not overwrite:
        raise HurstfitError(
            f"{folder / there[0]} exists and is not overwritten; name another folder with --into or give --overwrite"
        )
