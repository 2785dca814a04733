"""When a search must stop, and who is told how it goes."""

from __future__ import annotations

from collections.abc import Callable
from time import perf_counter

from intplan.sheet.problem import Number

REPORT_EVERY = 0.3  # seconds between calls of `progress`

Progress = Callable[[Number | None, Number | None], None]


class Limits:
    """Time, nodes and interrupts.

    Parameters
    ----------
    time_limit : seconds from now, or None
    node_limit : nodes to solve at most, or None
    stop : polled; true once the user wants an end
    progress : told the best value and the bound now and then
    """

    def __init__(
        self,
        time_limit: float | None,
        node_limit: int | None,
        stop: Callable[[], bool] | None,
        progress: Progress | None,
    ) -> None:
        self.start = perf_counter()
        self.deadline = None if time_limit is None else self.start + time_limit
        self.node_limit = node_limit
        self.stop = stop
        self.progress = progress
        self._reported = self.start

    def seconds(self) -> float:
        """Return the time spent so far."""
        return perf_counter() - self.start

    def reached(self, nodes: int) -> str | None:
        """Return "time", "nodes" or "interrupt" once that limit is reached."""
        if self.stop is not None and self.stop():
            return "interrupt"
        if self.deadline is not None and perf_counter() >= self.deadline:
            return "time"
        if self.node_limit is not None and nodes >= self.node_limit:
            return "nodes"
        return None

    def out_of_time(self) -> bool:
        """Tell whether to leave a long computation: no time left, or an interrupt."""
        return self.reached(-1) is not None

    def report(
        self, value: Callable[[], Number | None], bound: Callable[[], Number | None]
    ) -> None:
        """Tell `progress` where the search stands, if it is time to."""
        if self.progress is None:
            return
        now = perf_counter()
        if now - self._reported >= REPORT_EVERY:
            self._reported = now
            self.progress(value(), bound())
