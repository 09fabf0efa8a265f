"""A bar on stderr while something long is at work; only on a terminal, so that logs and pipes stay clean."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager


@contextmanager
def progress(what: str) -> Iterator[Callable[[int, int], None] | None]:
    """Give a function that is told how many parts of how many are done; None where nobody watches."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(what, total=None)
        yield lambda done, parts: bar.update(task, completed=done, total=parts)
