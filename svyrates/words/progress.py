"""A sign of life on the terminal while something takes more than a moment."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

__all__ = ["progress_bar"]


@contextmanager
def progress_bar(what: str, total: int, *, worth: bool) -> Iterator[Callable[[int], None]]:
    """Show a bar that the yielded function moves on; nothing if not worth it or not a terminal.

    Parameters
    ----------
    what : text beside the bar
    total : steps in all
    worth : whether the job is long enough to be watched
    """
    if not worth or not sys.stderr.isatty():
        yield lambda _: None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(what, total=total)
        yield lambda steps: bar.advance(task, steps)
