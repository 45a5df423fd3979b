"""Ctrl-C and SIGTERM: once to finish what is running, twice to stop now."""

from __future__ import annotations

import signal
import threading
from collections.abc import Callable
from types import FrameType
from typing import Any


class Interruption:
    """Note the first wish to stop; turn the second into `KeyboardInterrupt`.

    Parameters
    ----------
    on_first : callable
        Called once, from the signal's handler: it should only set a flag and print a line.

    Notes
    -----
    Use in a ``with`` block: leaving it puts the handlers back. Outside the main thread, where Python
    allows no handlers, it does nothing.
    """

    def __init__(self, on_first: Callable[[], None]) -> None:
        self._on_first = on_first
        self._before: dict[signal.Signals, Any] = {}
        self.was_asked = False

    def __enter__(self) -> Interruption:
        if threading.current_thread() is threading.main_thread():
            for number in (signal.SIGINT, signal.SIGTERM):
                self._before[number] = signal.signal(number, self._handle)
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _handle(self, number: int, frame: FrameType | None) -> None:
        if self.was_asked:
            raise KeyboardInterrupt
        self.was_asked = True
        self._on_first()
