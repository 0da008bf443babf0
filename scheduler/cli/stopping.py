"""Waiting that a signal ends: a command that runs for hours stops between two rounds."""

from __future__ import annotations

import signal
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from threading import Event
from types import FrameType

_SIGNALS = (signal.SIGINT, signal.SIGTERM)


@contextmanager
def stop_on_signals() -> Iterator[Callable[[float], bool]]:
    """A function that waits so many seconds and says whether to stop.

    The first interrupt or request to end stops the wait; the round under way is finished.
    """
    asked = Event()

    def ask(_signal: int, _frame: FrameType | None) -> None:
        asked.set()

    before = {number: signal.signal(number, ask) for number in _SIGNALS}
    try:
        yield asked.wait
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
