"""Interrupts: the first asks a search for what it has so far, a second ends the program at once."""

from __future__ import annotations

import os
import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

SIGNALS = (signal.SIGINT, signal.SIGTERM)
ENDED_AT_ONCE = 130


class Interrupts:
    """Handles SIGINT and SIGTERM while it is entered.

    Inside `softened`, the first interrupt only makes `stop` true, so that the best plan is still
    kept and told. Any other raises KeyboardInterrupt, which unwinds what is under way and leaves
    no half-written file; should that be stuck, a third ends the process without ceremony.

    Attributes
    ----------
    count : interrupts so far
    """

    def __init__(self) -> None:
        self.count = 0
        self._soft = False
        self._before: dict[signal.Signals, Any] = {}

    def __enter__(self) -> Interrupts:
        """Take the signals over, where Python allows it (in the main thread)."""
        if threading.current_thread() is threading.main_thread():
            self._before = {number: signal.signal(number, self._handle) for number in SIGNALS}
        return self

    def __exit__(self, *_: object) -> None:
        """Give the signals back."""
        for number, handler in self._before.items():
            signal.signal(number, handler)

    @contextmanager
    def softened(self) -> Iterator[Callable[[], bool]]:
        """Let the first interrupt end a search softly; gives the function that it polls."""
        self._soft = True
        try:
            yield self.stop
        finally:
            self._soft = False

    def stop(self) -> bool:
        """Tell whether an end was asked for."""
        return self.count > 0

    def _handle(self, number: int, frame: FrameType | None) -> None:
        self.count += 1
        if self.count > 2:
            os._exit(ENDED_AT_ONCE)
        if self.count == 2 or not self._soft:
            raise KeyboardInterrupt
