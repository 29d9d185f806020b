"""A progress bar for work that a person waits for; silent where nobody watches."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

Step = Callable[..., None]


class Silent:
    """Progress that nobody sees: the default of every library function."""

    @contextmanager
    def task(self, label: str, total: int | None = None) -> Iterator[Step]:
        """Announce `total` steps of work called `label`; yields a callable that ticks them off."""
        yield _no_step


class Bar:
    """Progress on the terminal (stderr), shown only when stderr is one."""

    @contextmanager
    def task(self, label: str, total: int | None = None) -> Iterator[Step]:
        """Show a bar of `total` steps (a moving one when unknown) while the block runs."""
        if not sys.stderr.isatty():
            yield _no_step
            return
        from rich.console import Console
        from rich.progress import (
            BarColumn,
            Progress,
            TaskProgressColumn,
            TextColumn,
            TimeElapsedColumn,
        )

        columns = (
            TextColumn("{task.description}"),
            BarColumn(),
            TaskProgressColumn(),
            TimeElapsedColumn(),
        )
        with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
            task = bar.add_task(label, total=total)

            def step(advance: float = 1, *, label: str | None = None) -> None:
                bar.update(task, advance=advance, description=label)

            yield step


def _no_step(advance: float = 1, *, label: str | None = None) -> None:
    """Take no notice."""


SILENT = Silent()
