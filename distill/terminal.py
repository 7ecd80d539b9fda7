"""The one progress bar; floor 0."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator

from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    TextColumn,
    TimeElapsedColumn,
    TimeRemainingColumn,
)

__all__ = ["bar"]


@contextlib.contextmanager
def bar(
    doing: str, total: int, unit: str, *, done: int = 0, shown: bool = True
) -> Iterator[Callable[..., None]]:
    """A bar on standard error with count, rate and time left; yields `advance(steps=1, doing=None)`.

    doing : what goes on, in a word or two; `advance` may change it. done : steps of an earlier run.
    """
    columns = (
        TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TextColumn(unit),
        TextColumn("{task.fields[rate]}"), TimeElapsedColumn(), TextColumn("left"), TimeRemainingColumn(),
    )  # fmt: skip
    console = Console(stderr=True)
    hidden = not (shown and console.is_terminal)  # a log file wants the results, not the bar
    with Progress(*columns, console=console, transient=True, disable=hidden) as progress:
        task = progress.add_task(doing, total=total, completed=done, rate="")

        def advance(steps: int = 1, doing: str | None = None) -> None:
            progress.advance(task, steps)
            speed = progress.tasks[task].speed
            progress.update(task, rate=f"{speed:,.3g}/s" if speed else "", description=doing)

        yield advance
