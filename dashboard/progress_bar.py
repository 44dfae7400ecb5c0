"""A progress bar on stderr, for a person who waits; nothing where stderr is no terminal."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import TypeVar

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

T = TypeVar("T")

STEP = 500  # items between two updates, so that the bar costs nothing beside the work


def counted(items: Iterable[T], total: int, what: str) -> Iterator[T]:
    """The same items, with a bar that says how far they have come."""
    console = Console(stderr=True)
    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeRemainingColumn(),
        console=console,
        transient=True,
        disable=not console.is_terminal,
    )
    with bar:
        task = bar.add_task(what, total=total)
        for number, item in enumerate(items, 1):
            yield item
            if number % STEP == 0:
                bar.update(task, completed=number)
