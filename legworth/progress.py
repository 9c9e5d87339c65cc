"""Progress with time left, on a terminal only."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import Progress

__all__ = ["progress_bar"]


@contextmanager
def progress_bar(label: str) -> Iterator[Callable[[int, int], None]]:
    """Show a bar on standard error while it is a terminal; give the function that moves it."""
    console = Console(stderr=True)
    with Progress(console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task(label, total=None)

        def move(done: int, total: int) -> None:
            progress.update(task, completed=done, total=total)

        yield move
