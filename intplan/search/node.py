"""Nodes that wait to be solved, and the basis they start from."""

from __future__ import annotations

from dataclasses import dataclass

from intplan.relaxation.dictionary import Dictionary
from intplan.search.evidence import LEAST
from intplan.search.result import Added
from intplan.search.tightening import Bounds


class Snapshot:
    """The last dictionary and bounds of a split node, for the children that still wait."""

    __slots__ = ("bounds", "dictionary")

    def __init__(self, dictionary: Dictionary, bounds: Bounds) -> None:
        self.dictionary = dictionary
        self.bounds = bounds


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
    origin : basis and bounds of the parent; the child that is solved at once owns them
    """

    number: int
    parent: int
    depth: int
    bound: float
    branch: Branch
    origin: Snapshot

    def __lt__(self, other: Node) -> bool:
        """Order by bound, then by number: the heap's best node is the one to solve next."""
        return (self.bound, self.number) < (other.bound, other.number)


class Shelf:
    """Keeps the tables of waiting snapshots within a limit of memory.

    A snapshot that does not fit gives up its table and keeps its basis, from which the table is
    computed again by one dense solve when its turn comes.

    Parameters
    ----------
    limit : bytes of tables to keep
    """

    def __init__(self, limit: int) -> None:
        self.limit = limit
        self.held = 0

    def put(self, snapshot: Snapshot) -> None:
        """Account for a snapshot, shedding its table if the shelf is full."""
        size = snapshot.dictionary.table.nbytes
        if self.held + size > self.limit:
            snapshot.dictionary.shed()
        else:
            self.held += size

    def take(self, snapshot: Snapshot) -> tuple[Dictionary, Bounds]:
        """Return the snapshot's dictionary and bounds for the last child to use them.

        Raises
        ------
        numpy.linalg.LinAlgError
            If the table was shed and the basis is singular in doubles.
        """
        dictionary = snapshot.dictionary
        if dictionary.table is None:
            dictionary.refactor()
        else:
            self.held -= dictionary.table.nbytes
        return dictionary, snapshot.bounds

    def forget(self, snapshot: Snapshot) -> None:
        """Account for a snapshot that nobody will use."""
        if snapshot.dictionary.table is not None:
            self.held -= snapshot.dictionary.table.nbytes
