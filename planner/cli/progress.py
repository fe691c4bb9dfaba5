"""Progress bars: drawn on the terminal's error stream, silent where nobody looks."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

Tick = Callable[[int, int], None]


@contextmanager
def bar(title: str, quiet: bool = False) -> Iterator[Tick]:
    """Give a `tick(done, total)` that draws a bar with this title; nothing is drawn into a pipe or a file."""
    with bars(title, quiet=quiet) as (tick,):
        yield tick


@contextmanager
def bars(*titles: str, quiet: bool = False) -> Iterator[tuple[Tick, ...]]:
    """Give one `tick(done, total)` a title, all drawn together.

    The first is there from the start; each other appears with its first tick, and goes when it is done.
    """
    if quiet or not sys.stderr.isatty():
        yield tuple(_silent for _ in titles)
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as progress:

        def of(title: str, first: bool) -> Tick:
            task = progress.add_task(title, total=None, visible=first)

            def tick(done: int, total: int) -> None:
                progress.update(task, completed=done, total=total, visible=first or done < total)

            return tick

        yield tuple(of(title, index == 0) for index, title in enumerate(titles))


def _silent(done: int, total: int) -> None:
    """Draw nothing."""
