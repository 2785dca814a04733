"""One limit of time and nodes shared by the several searches that a question takes."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from time import perf_counter
from typing import Any

from intplan.planning.standing import StandingPlan, read_limits

LEAST_TIME = 1e-3  # seconds given to a search that is started all the same
LAST_NODES = 20_000  # nodes of one search beside the answer where no limit is given
ENDING_NODES = 10_000  # the same for many searches together


class Budget:
    """What is left of the limits of one question.

    Parameters
    ----------
    time_limit : seconds from now for all searches together, or None
    node_limit : nodes for all searches together, or None
    stop : polled; true asks for an early end

    Raises
    ------
    IntplanError
        If a limit makes no sense.
    """

    def __init__(
        self,
        time_limit: float | None = None,
        node_limit: int | None = None,
        stop: Callable[[], bool] | None = None,
    ) -> None:
        limits = read_limits(time_limit, 0, node_limit)
        self.deadline = None if limits.seconds is None else perf_counter() + limits.seconds
        self.nodes = limits.nodes
        self.stop = stop
        self.unlimited = self.deadline is None and self.nodes is None
        self.capped = False

    def ended_by(self) -> str | None:
        """Return ``interrupt``, ``time`` or ``nodes`` once that limit is reached."""
        if self.stop is not None and self.stop():
            return "interrupt"
        if self.deadline is not None and perf_counter() >= self.deadline:
            return "time"
        if self.nodes is not None and self.nodes < 1:
            return "nodes"
        return None

    @property
    def last_nodes(self) -> int | None:
        """The nodes after which a search is given up; None where a limit is given for all."""
        return LAST_NODES if self.unlimited else None

    @contextmanager
    def ending(self, nodes: int = ENDING_NODES) -> Iterator[None]:
        """Set an end to all searches within where no limit is given: some would go on for ever."""
        self.capped = self.unlimited
        if self.capped:
            self.nodes = nodes
        try:
            yield
        finally:
            if self.capped:
                self.nodes, self.capped = None, False

    @property
    def fair_nodes(self) -> int | None:
        """Half of the nodes until that end, so that one search leaves some to others; or None."""
        return max(self.nodes // 2, 1) if self.capped and self.nodes is not None else None

    @contextmanager
    def halved(self) -> Iterator[None]:
        """Hold back half of the time that is left, for what comes afterwards."""
        deadline = self.deadline
        if deadline is not None:
            self.deadline = (perf_counter() + deadline) / 2
        try:
            yield
        finally:
            self.deadline = deadline

    def run(
        self,
        search: Callable[..., StandingPlan],
        *what: Any,
        most_nodes: int | None = None,
        **more: Any,
    ) -> StandingPlan:
        """Run one search within what is left, and book what it took.

        Parameters
        ----------
        search : takes `what`, `more` and the keywords ``time_limit``, ``node_limit``, ``stop``
        most_nodes : a node limit of this search alone
        """
        seconds = None
        if self.deadline is not None:
            seconds = max(self.deadline - perf_counter(), LEAST_TIME)
        nodes = most_nodes
        if self.nodes is not None:
            nodes = max(self.nodes, 1) if nodes is None else max(min(self.nodes, nodes), 1)
        found = search(*what, time_limit=seconds, node_limit=nodes, stop=self.stop, **more)
        if self.nodes is not None:
            self.nodes -= found.search.nodes
        return found
