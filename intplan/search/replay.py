"""The nodes of a finished tree solved again, each to the end: warm and cold.

Warm starts from the basis with which the parent ended, cold from nothing; both hold the same
rows and the same bounds: those the node had when the search first solved it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from time import perf_counter
from typing import Any

import networkx as nx
import numpy as np

from intplan.relaxation.dictionary import Dictionary, Status
from intplan.relaxation.rows import RowStore
from intplan.relaxation.start import cold_start
from intplan.search.evidence import LEAST
from intplan.search.result import Cut
from intplan.sheet.problem import Problem

SAME = 1e-7  # bounds this near, next to their size, are the same


@dataclass(frozen=True, slots=True)
class Replayed:
    """One node, solved twice.

    Attributes
    ----------
    node : its number
    warm_pivots, cold_pivots, warm_seconds, cold_seconds : what each way cost
    warm_cost, cold_cost : least cost of the relaxation, None if it is empty
    """

    node: int
    warm_pivots: int
    cold_pivots: int
    warm_seconds: float
    cold_seconds: float
    warm_cost: float | None
    cold_cost: float | None

    @property
    def agree(self) -> bool:
        """Whether both ways gave the same bound, or both found the node empty."""
        if self.warm_cost is None or self.cold_cost is None:
            return self.warm_cost is self.cold_cost
        return abs(self.warm_cost - self.cold_cost) <= SAME * (1.0 + abs(self.cold_cost))


@dataclass(slots=True)
class _Parent:
    """A solved node whose children are still to come."""

    dictionary: Dictionary
    least: np.ndarray
    most: np.ndarray


def replay(problem: Problem, tree: nx.DiGraph, cuts: Sequence[Cut]) -> Iterator[Replayed]:
    """Yield every node but the root, parents before their children.

    Parameters
    ----------
    problem, tree, cuts : of one `SearchResult`
    """
    replayed = _Replay(problem, tree, cuts)
    root = replayed.root()
    if root is None:
        return
    waiting = [(child, root) for child in sorted(tree.successors(0), reverse=True)]
    while waiting:
        node, parent = waiting.pop()
        result, solved = replayed.solve(node, parent)
        yield result
        waiting += [(child, solved) for child in sorted(tree.successors(node), reverse=True)]


class _Replay:
    def __init__(self, problem: Problem, tree: nx.DiGraph, cuts: Sequence[Cut]) -> None:
        self.problem = problem
        self.tree = tree
        self.rows = RowStore(problem.matrix, problem.row_least, problem.row_most)
        if cuts:
            matrix = np.zeros((len(cuts), len(problem.cost)))
            for line, cut in zip(matrix, cuts, strict=True):
                line[list(cut.columns)] = cut.coefficients
            self.rows.append(
                matrix,
                np.array([c.least for c in cuts]),
                np.array([c.most for c in cuts]),
                np.full(len(cuts), -1),
            )

    def root(self) -> _Parent | None:
        """Solve the root with the rows it ended with; None if nothing is below it."""
        entry = self.tree.nodes[0]
        if not self.tree.out_degree(0):
            return None
        least, most = self.problem.least.copy(), self.problem.most.copy()
        for step in entry["evidence"]["steps"]:
            if "row" in step and step["by"] == "whole":
                self._round_rule(step)
            else:
                _apply(step, least, most)
        rules = len(self.problem.rows)
        active = [*range(rules), *(rules + a.index for a in entry["added"] if a.kind == "cut")]
        dictionary = cold_start(
            self.rows, self.problem.cost, least, most, np.array(active, int)
        )
        dictionary.reoptimise()
        return _Parent(dictionary, least, most)

    def _round_rule(self, step: dict[str, Any]) -> None:
        number = step["row"]
        unit = Fraction(1, 1 << self.problem.rows[number].shift)
        for _, side, limit in step["changes"]:
            if limit is not None:
                limits = self.rows.least if side == LEAST else self.rows.most
                limits[number] = float(limit * unit)

    def solve(self, node: int, parent: _Parent) -> tuple[Replayed, _Parent]:
        """Solve one node both ways; return the comparison and the node as a parent."""
        least, most = parent.least.copy(), parent.most.copy()
        entry = self.tree.nodes[node]
        changed = set()
        for added in entry["added"]:
            if added.kind != "cut":
                (least if added.kind == "least" else most)[added.index] = added.value
                changed.add(added.index)
        steps = (entry["evidence"] or {"steps": ()})["steps"]
        first = [step["by"] == "rule" for step in steps]
        entering = first.index(False) if False in first else len(first)
        for step in steps[:entering]:
            changed |= _apply(step, least, most)
        started = perf_counter()
        warm = parent.dictionary.copy()
        before = warm.pivots
        warm.set_bounds(changed, least, most)
        warm_status = warm.reoptimise()
        warmed = perf_counter()
        cold = cold_start(self.rows, self.problem.cost, least, most, parent.dictionary.held_rows())
        cold_status = cold.reoptimise()
        ended = perf_counter()
        result = Replayed(
            node, warm.pivots - before, cold.pivots, warmed - started, ended - warmed,
            warm.value if warm_status is Status.OPTIMAL else None,
            cold.value if cold_status is Status.OPTIMAL else None,
        )  # fmt: skip
        later = set()
        for step in steps[entering:]:
            later |= _apply(step, least, most)
        if later:  # what the search made of the node once it was solved: not the children's cost
            warm.set_bounds(later, least, most)
            warm.reoptimise()
        return result, _Parent(warm, least, most)


def _apply(step: dict[str, Any], least: np.ndarray, most: np.ndarray) -> set[int]:
    """Apply the changes of one recorded step to a node's bounds; return the activities."""
    changed = set()
    for column, side, value in step["changes"]:
        (least if side == LEAST else most)[column] = value
        changed.add(int(column))
    return changed
