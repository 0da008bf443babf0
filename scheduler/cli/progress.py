"""A progress bar on stderr for what takes over a second; silent when not a terminal."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

_PATIENCE = 1.0


@contextmanager
def progress_bar(label: str, *, quiet: bool) -> Iterator[Callable[[int, int], None]]:
    """Gives a function of (done, all) that draws the bar once a second has passed."""
    from rich.console import Console  # noqa: PLC0415
    from rich.progress import Progress  # noqa: PLC0415

    console = Console(stderr=True)
    if quiet or not console.is_terminal:
        yield lambda _done, _all: None
        return
    started = time.monotonic()
    bar = Progress(console=console, transient=True)
    task = bar.add_task(label)

    def show(done: int, total: int) -> None:
        if time.monotonic() - started > _PATIENCE:
            bar.start()
            bar.update(task, completed=done, total=total)

    try:
        yield show
    finally:
        bar.stop()
