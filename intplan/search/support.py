"""What a finished tree rests on: the rules and the written bounds that its evidence uses."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from functools import cached_property
from typing import Any

import numpy as np

from intplan.search.carry import Kept
from intplan.search.evidence import LEAST, MOST
from intplan.search.result import Cut

OWN = -1  # stands for a bound as the sheet has it
ROUNDING = 1e-9  # share of a closure's multipliers below which a reduced cost may be an error


@dataclass
class _Fact:
    """A tightened bound, a branching, a cut or a closure, and what it was derived from.

    Attributes
    ----------
    rows : numbers of rules and cuts
    bounds : numbers ``2 * column + side`` of the sheet's own bounds
    facts : numbers of other facts
    """

    rows: Iterable[int] = ()
    bounds: Iterable[int] = ()
    facts: Iterable[int] = ()


def used_by_tree(kept: Kept) -> tuple[set[int], set[tuple[int, int]]]:
    """Return the rules and bounds that the closures of a tree rest on.

    Parameters
    ----------
    kept : the search; bounds that closures use by no more than a rounding error count as well

    Returns
    -------
    rules, bounds
        Numbers of rules, and pairs (column, side) of finite bounds.
    """
    walk = _Walk(kept)
    walk.through()
    return walk.collected()


@dataclass
class _Sources:
    """The bounds of a node, and the fact that each is known by.

    Attributes
    ----------
    facts : (2, columns) numbers of facts, `OWN` for the sheet's own bounds
    values : (2, columns)
    """

    facts: np.ndarray
    values: np.ndarray

    def copy(self) -> _Sources:
        """Return an independent copy."""
        return _Sources(self.facts.copy(), self.values.copy())

    def tightens(self, column: int, side: int, value: float) -> bool:
        """Tell whether a bound is tighter than the present one."""
        present = self.values[side, column]
        return bool(value < present if side else value > present)

    def set(self, column: int, side: int, value: float, fact: int) -> None:
        """Take over a bound."""
        self.facts[side, column], self.values[side, column] = fact, value


@dataclass
class _Walk:
    """One walk through a tree, from the root down.

    Attributes
    ----------
    facts : all that was derived, each from earlier ones
    closures : numbers of the facts that close nodes
    cuts : the fact of each cut
    """

    kept: Kept
    facts: list[_Fact] = field(default_factory=list)
    closures: list[int] = field(default_factory=list)
    cuts: list[int] = field(default_factory=list)

    def __post_init__(self) -> None:
        problem = self.kept.problem
        self.rules = len(problem.rows)
        self.matrix = self.kept.store().matrix
        self.finite = np.array([np.isfinite(problem.least), np.isfinite(problem.most)])

    @cached_property
    def touched(self) -> list[np.ndarray]:
        """The columns of each row."""
        return [line.nonzero()[0] for line in self.matrix]

    def through(self) -> None:
        """Note every fact of the tree."""
        tree = self.kept.result.tree
        problem = self.kept.problem
        own = np.full((2, len(problem.cost)), OWN)
        sources = _Sources(own, np.array([problem.least, problem.most]))
        waiting = [(0, sources)]
        while waiting:
            number, sources = waiting.pop()
            node = tree.nodes[number]
            for added in node["added"]:
                if added.kind != "cut":
                    side = LEAST if added.kind == "least" else MOST
                    if sources.tightens(added.index, side, added.value):
                        sources.set(added.index, side, added.value, self._note(_Fact()))
            evidence = node["evidence"] or {"steps": (), "closure": None}
            if number == 0:
                self._note_cuts(sources, evidence["steps"])
            else:
                self._note_steps(evidence["steps"], sources)
            if evidence["closure"] is not None and node["outcome"] != "split":
                self.closures.append(self._note(self._closure(evidence["closure"], sources)))
            waiting += [(child, sources.copy()) for child in tree.successors(number)]

    def _note(self, fact: _Fact) -> int:
        self.facts.append(fact)
        return len(self.facts) - 1

    def _note_cuts(self, sources: _Sources, steps: Sequence[dict[str, Any]]) -> None:
        """Note the root's steps and, with the bounds before the first that uses a cut, the cuts."""
        kinds = [step["by"] in ("whole", "rule") for step in steps]
        first = kinds.index(False) if False in kinds else len(kinds)
        self._note_steps(steps[:first], sources)
        for cut in self.kept.result.cuts:
            self.cuts.append(self._note(self._cut(cut, sources)))
        self._note_steps(steps[first:], sources)

    def _note_steps(self, steps: Iterable[dict[str, Any]], sources: _Sources) -> None:
        for step in steps:
            if "row" in step and step["by"] == "whole":
                continue
            for column, side, value in step["changes"]:
                if not sources.tightens(column, side, value):
                    continue
                if step["by"] == "whole":
                    fact = self._premises([], [2 * column + side], sources)
                elif step["by"] == "rule":
                    fact = self._rule_step(step, column, sources)
                else:
                    fact = self._closure(step["closure"], sources, (column, side))
                sources.set(column, side, value, self._note(fact))

    def _premises(
        self, rows: Iterable[int], bounds: Iterable[int], sources: _Sources
    ) -> _Fact:
        """Return what rests on rows and on bounds as they are now."""
        own, facts = [], []
        for number in bounds:
            column, side = divmod(int(number), 2)
            source = int(sources.facts[side, column])
            if source != OWN:
                facts.append(source)
            elif self.finite[side, column]:
                own.append(int(number))
        return _Fact([int(i) for i in rows], own, facts)

    def _rule_step(self, step: dict[str, Any], column: int, sources: _Sources) -> _Fact:
        row = step["row"]
        columns = self.touched[row]
        columns = columns[columns != column]
        rising = (self.matrix[row, columns] > 0) == bool(step["limit"])
        own_side = self.matrix[row, column] > 0
        opposite = 2 * column + int(own_side != bool(step["limit"]))
        bounds = [*(2 * columns + ~rising).tolist(), opposite]
        return self._premises([row], bounds, sources)

    def _closure(
        self,
        closure: dict[str, Any],
        sources: _Sources,
        moved: tuple[int, int] | None = None,
    ) -> _Fact:
        """Return what a closure rests on; `moved` is a bound that it takes to be passed."""
        if "column" in closure:
            column = closure["column"]
            return self._premises([], [2 * column, 2 * column + 1], sources)
        if "row" in closure:
            return _Fact([closure["row"]])
        rows = np.asarray(closure["rows"], int)
        values = closure["multipliers"]
        if closure["exact"]:
            values = np.array([float(Fraction(y)) for y in values])
        parts = values @ self.matrix[rows] if len(rows) else np.zeros(self.matrix.shape[1])
        reduced = (self.kept.problem.cost if closure["weight"] else 0.0) - parts
        error = ROUNDING * (1.0 + float(np.abs(values).sum()))
        least, most = reduced > error, reduced < -error
        unclear = (np.abs(reduced) <= error) & self._filled(rows, closure["weight"])
        least, most = least | unclear, most | unclear
        numbers = np.concatenate((2 * least.nonzero()[0], 2 * most.nonzero()[0] + 1)).tolist()
        if moved is not None:
            column, side = moved
            numbers = [n for n in numbers if n != 2 * column + 1 - side]
        return self._premises(rows, numbers, sources)

    def _filled(self, rows: np.ndarray, weight: int) -> np.ndarray:
        """Tell which columns stand in some of the rows, or in the aim where it counts."""
        filled = (self.matrix[rows] != 0).any(axis=0)
        return filled | (self.kept.problem.cost != 0) if weight else filled

    def _cut(self, cut: Cut, sources: _Sources) -> _Fact:
        evidence = cut.evidence
        if cut.kind == "cover":
            row = evidence["row"]
            items = self.touched[row]
            numbers = np.concatenate((2 * items, 2 * items + 1))
            return self._premises([row], numbers, sources)
        rows = np.asarray(evidence["rows"], int)
        numbers = np.asarray(evidence["bounds"], int)
        columns = (self.matrix[rows] != 0).any(axis=0).nonzero()[0]
        numbers = np.union1d(numbers, np.concatenate((2 * columns, 2 * columns + 1)))
        return self._premises(rows, numbers, sources)

    def collected(self) -> tuple[set[int], set[tuple[int, int]]]:
        """Return what the closures rest on in the end."""
        rules: set[int] = set()
        bounds: set[tuple[int, int]] = set()
        seen = set(self.closures)
        waiting = list(seen)
        while waiting:
            fact = self.facts[waiting.pop()]
            bounds.update((number >> 1, number & 1) for number in fact.bounds)
            for row in fact.rows:
                if row < self.rules:
                    rules.add(row)
            cuts = {self.cuts[row - self.rules] for row in fact.rows if row >= self.rules}
            further = cuts.union(fact.facts)
            waiting += further - seen
            seen |= further
        return rules, bounds
