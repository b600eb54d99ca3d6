"""The commands. Each imports the library only when it runs, so that help answers at once."""

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from .exits import EXIT_CODES, ExitCode
from .story import Story

if TYPE_CHECKING:
    from trackfit.study import Study

_STUDY = click.argument("study_file", metavar="STUDY", type=click.Path(path_type=Path))
_QUIET = click.option("-q", "--quiet", is_flag=True, help="Say nothing but errors on stderr.")
_OVERWRITE = click.option("--overwrite", is_flag=True, help="Replace results that are there.")


@click.group(
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 88},
    epilog=EXIT_CODES,
)
@click.version_option(package_name="trackfit", message="%(prog)s %(version)s")
def app() -> None:
    """Turn fixes of tagged animals at sea into hourly positions with credible ellipses.

    A STUDY is a TOML file that names the fixes, the layers and what is asked of them. Start with
    "trackfit demo", which makes one.
    """


def _command(function: Callable[..., Any]) -> click.Command:
    return app.command(epilog=EXIT_CODES)(function)


@_command
@_STUDY
@_QUIET
def check(study_file: Path, quiet: bool) -> None:
    """Read all that STUDY names and say what is there.

    Fits nothing and writes nothing. Prints the tags, the fixes used and set aside with the
    reasons, the time span, the layers, the plane and its distortion, and the number of states of
    each tag.
    """
    import trackfit

    from .words import description

    prepared = trackfit.prepare(trackfit.read_study(study_file))
    _tell(Story(quiet=quiet), prepared.notes, prepared.warnings)
    click.echo("\n".join(description(prepared)))


@_command
@_STUDY
@_QUIET
@_OVERWRITE
def fit(study_file: Path, quiet: bool, overwrite: bool) -> ExitCode:
    """Estimate the parameters of every tag, and judge the fit.

    Prints the table of parameters and what to think of each fit, and writes both with the record
    (parameters.csv, verdicts.csv, results.json) to the output folder.
    """
    import trackfit

    return _fit_and_write(trackfit.read_study(study_file), quiet, overwrite, fill=False)


@_command
@_STUDY
@_QUIET
@_OVERWRITE
def compare(study_file: Path, quiet: bool, overwrite: bool) -> ExitCode:
    """Fit both motions to every tag, and say which does better.

    Fits the study's own model and the other motion; with "terms = true" in the study's [compare]
    table also the model without each term. Prints the scores and a sentence for each, and writes
    them (comparison.csv) with all that "trackfit fit" writes to the output folder.
    """
    import trackfit

    study = trackfit.read_study(study_file)
    return _fit_and_write(study, quiet, overwrite, fill=False, compare=True)


@_command
@_STUDY
@_QUIET
@_OVERWRITE
def run(study_file: Path, quiet: bool, overwrite: bool) -> ExitCode:
    """Do all that STUDY asks: fit, fill, write.

    Fits every tag, fills the tracks, and writes tables, maps and figures to the output folder.
    Prints the table of parameters, what to think of each fit, and the folder of the results.
    """
    import trackfit

    return _fit_and_write(trackfit.read_study(study_file), quiet, overwrite, fill=True)


@_command
@click.argument("folder", default="trackfit-demo", type=click.Path(path_type=Path))
@_QUIET
@_OVERWRITE
def demo(folder: Path, quiet: bool, overwrite: bool) -> ExitCode:
    """Copy an invented study into FOLDER and run it.

    FOLDER is trackfit-demo if none is named. The copy is yours to change: its study file is the
    shortest way to one of your own.
    """
    import trackfit

    from .demo import copy_demo

    study_file = copy_demo(folder, overwrite=overwrite)
    Story(quiet=quiet).tell(f"The demonstration is in {folder}; its study is {study_file}.")
    ended = _fit_and_write(trackfit.read_study(study_file), quiet, overwrite, fill=True)
    click.echo(
        f"Next: read {study_file}, change it, and run: trackfit run {study_file} --overwrite"
    )
    return ended


def _fit_and_write(
    study: "Study", quiet: bool, overwrite: bool, *, fill: bool, compare: bool = False
) -> ExitCode:
    import trackfit
    from trackfit.study_trials import Compare

    from .words import convergence, findings, parameter_table, step_check_table

    story = Story(quiet=quiet)
    replace = _may_replace(study.output_folder, overwrite)
    prepared = trackfit.prepare(study)
    _tell(story, prepared.notes, prepared.warnings)
    with story.progress() as progress:
        fits = trackfit.fit_tags(prepared, progress=progress)
        judged = trackfit.judge_fits(
            prepared,
            fits,
            compare=study.compare or (Compare() if compare else None),
            progress=progress,
        )
        filled = trackfit.fill_tracks(prepared, fits, progress) if fill else []
    _tell(story, (), [warning for track in filled for warning in track.warnings])
    with story.progress() as progress:
        folder = trackfit.write_results(
            study.output_folder,
            prepared,
            fits,
            filled,
            judged=judged,
            overwrite=replace,
            progress=progress,
        )
    click.echo("\n".join([*parameter_table(fits), *step_check_table(fits)]))
    click.echo("\n".join(findings(judged)))
    click.echo(f"\n{convergence(fits)}\nResults: {folder}")
    return _ended(fits)


def _may_replace(folder: Path, overwrite: bool) -> bool:
    """Refuse a folder that may not be replaced now, not after an hour of fitting."""
    from trackfit.faults import ResultsError
    from trackfit.results import refuse_unless_replaceable

    refuse_unless_replaceable(folder, overwrite=True)
    if not overwrite and folder.exists() and any(folder.iterdir()):
        raise ResultsError(
            f"{folder}: holds results already; add --overwrite to replace them, or name another "
            "output.folder in the study"
        )
    return overwrite or folder.exists()


def _tell(story: Story, notes: Sequence[str], warnings: Sequence[str]) -> None:
    for note in notes:
        story.tell(f"Note: {note}")
    for warning in warnings:
        story.tell(f"Warning: {warning}")


def _ended(fits: Sequence[Any]) -> ExitCode:
    """Say which fits failed; this is no story but a fault, so --quiet does not silence it."""
    failed = [fit for fit in fits if not fit.status.ok]
    for fit in failed:
        click.echo(f"{fit.tag}: {fit.status.sentence}", err=True)
    return ExitCode.NOT_CONVERGED if failed else ExitCode.DONE
