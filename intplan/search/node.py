"""Nodes that wait to be solved, and the basis they start from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.rows import RowStore
from intplan.search.evidence import LEAST
from intplan.search.result import Added
from intplan.search.tightening import Bounds


class Snapshot:
    """The last dictionary and bounds of a split node, for a child that still waits.

    Attributes
    ----------
    dictionary : None once it was shed; then `basis` holds its basic and non-basic variables
    """

    __slots__ = ("basis", "bounds", "dictionary")

    def __init__(self, dictionary: Dictionary, bounds: Bounds) -> None:
        self.dictionary: Dictionary | None = dictionary
        self.bounds = bounds
        self.basis: tuple[np.ndarray, np.ndarray] | None = None

    def shed(self) -> None:
        """Keep nothing of the dictionary but its basis."""
        if self.dictionary is not None:
            self.basis = (
                self.dictionary.basic.astype(np.int32), self.dictionary.nonbasic.astype(np.int32)
            )  # fmt: skip
            self.dictionary = None


@dataclass(slots=True)
class Branch:
    """The row that a branching adds: ``x[column] <= value`` or ``>= value``.

    `fraction` is how far the relaxation's point moves to meet it, `parent_cost` its cost there.
    """

    column: int
    side: int
    value: float
    fraction: float
    parent_cost: float

    def added(self) -> tuple[Added, ...]:
        """Return the row as the tree shows it."""
        return (Added("least" if self.side == LEAST else "most", self.column, self.value),)


@dataclass(slots=True)
class Node:
    """A node of the search tree until it is solved.

    Attributes
    ----------
    bound : safe bound inherited from the parent
    closure : the record of what proves it
    origin : basis and bounds of the parent, owned
    """

    number: int
    parent: int
    depth: int
    bound: float
    closure: dict[str, Any]
    branch: Branch
    origin: Snapshot

    def __lt__(self, other: Node) -> bool:
        """Order by bound, then by number: the heap's best node is the one to solve next."""
        return (self.bound, self.number) < (other.bound, other.number)


class Shelf:
    """Keeps the dictionaries of waiting snapshots within a limit of memory.

    A snapshot that does not fit keeps its basis only, from which the dictionary is computed again
    by one dense solve when its turn comes.

    Parameters
    ----------
    rows, cost : what the dictionaries are of
    limit : bytes of tables to keep
    """

    def __init__(self, rows: RowStore, cost: np.ndarray, limit: int) -> None:
        self.rows = rows
        self.cost = cost
        self.limit = limit
        self.held = 0

    def put(self, snapshot: Snapshot, at_once: bool = False) -> None:
        """Account for a snapshot, shedding its dictionary if the shelf is full.

        One that is wanted `at_once` is kept all the same.
        """
        assert snapshot.dictionary is not None
        size = snapshot.dictionary.table.nbytes
        if self.held + size > self.limit and not at_once:
            snapshot.shed()
        else:
            self.held += size

    def take(self, snapshot: Snapshot) -> tuple[Dictionary, Bounds]:
        """Return the snapshot's dictionary and bounds, for its child to own."""
        self.forget(snapshot)
        dictionary, bounds = snapshot.dictionary, snapshot.bounds
        if dictionary is None:
            assert snapshot.basis is not None
            basic, nonbasic = (part.astype(int) for part in snapshot.basis)
            dictionary = Dictionary.at_basis(
                self.rows, self.cost, bounds.least, bounds.most, (basic, nonbasic)
            )
        return dictionary, bounds

    def forget(self, snapshot: Snapshot) -> None:
        """Account for a snapshot that leaves."""
        if snapshot.dictionary is not None:
            self.held -= snapshot.dictionary.table.nbytes
