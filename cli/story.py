"""What a command tells while it works: notes and progress, all on stderr."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import click

ProgressCallback = Callable[[str, float, str], None]
"""Called with a tag, the share done (0 to 1) and a few words."""


class Story:
    """The teller: silent when asked, bars on a terminal, one line a tag elsewhere."""

    def __init__(self, *, quiet: bool) -> None:
        self.quiet = quiet

    def tell(self, sentence: str) -> None:
        """Say a sentence unless silence was asked for."""
        if not self.quiet:
            click.echo(sentence, err=True)

    @contextmanager
    def progress(self) -> Iterator[ProgressCallback]:
        """Yield the callback that shows how far each tag is."""
        if self.quiet:
            yield lambda tag, done, message: None
        elif sys.stderr.isatty():
            with _bars() as show:
                yield show
        else:
            yield self._line_when_done

    def _line_when_done(self, tag: str, done: float, message: str) -> None:
        if done >= 1:
            self.tell(f"{tag}: {message}")


@contextmanager
def _bars() -> Iterator[ProgressCallback]:
    """One bar a tag."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskID, TextColumn, TimeElapsedColumn

    # Tags and messages are data: brackets in them are no markup.
    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        TimeElapsedColumn(),
        TextColumn("{task.fields[message]}", markup=False),
    )
    with Progress(*columns, console=Console(stderr=True)) as progress:
        tasks: dict[str, TaskID] = {}

        def show(tag: str, done: float, message: str) -> None:
            if tag not in tasks:
                tasks[tag] = progress.add_task(tag, total=1.0, message=message)
            progress.update(tasks[tag], completed=done, message=message)

        yield show
