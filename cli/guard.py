"""The one place where errors are caught and turned into a sentence and an exit code."""

import os
import tempfile
import traceback
from collections.abc import Sequence

import click

from trackfit.faults import TrackfitError

from .app import app
from .exits import ExitCode
from .interrupts import forget_interrupt, no_interrupt_lost

TRACEBACK_VARIABLE = "TRACKFIT_TRACEBACK"
INTERRUPTED = "Interrupted. Results are put in place at the very end, so this run left none."


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code.

    Parameters
    ----------
    arguments
        Words of the command line; those of the process when None.
    """
    try:
        with no_interrupt_lost():
            return int(app.main(args=arguments, prog_name="trackfit", standalone_mode=False) or 0)
    except click.ClickException as wrong:
        wrong.show()
        return ExitCode.USAGE
    except (KeyboardInterrupt, click.Abort):
        forget_interrupt()
        return _say(INTERRUPTED, ExitCode.INTERRUPTED)
    except TrackfitError as fault:
        return _say(str(fault), ExitCode.WRONG)
    except Exception as fault:
        return _say(_own_fault(fault), ExitCode.WRONG)


def _say(sentence: str, code: ExitCode) -> ExitCode:
    click.echo(sentence, err=True)
    return code


def _own_fault(fault: Exception) -> str:
    """Return the sentence for an error that trackfit should not have made."""
    story = "".join(traceback.format_exception(fault))
    if os.environ.get(TRACEBACK_VARIABLE) == "1":
        return story.rstrip()
    with tempfile.NamedTemporaryFile(
        "w", prefix="trackfit-", suffix=".txt", encoding="utf-8", delete=False
    ) as file:
        file.write(story)
    return (
        f"trackfit made a mistake of its own ({type(fault).__name__}); please report it together "
        f"with the file {file.name}, which says where."
    )
