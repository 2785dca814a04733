"""The evidence in a standing plan file: held to the shapes that a search gives it.

A tree that is taken up again is read by its evidence.  What it says is not proven here; that rows,
activities and numbers are what they have to be is.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import networkx as nx
import numpy as np

from intplan.planning.encoding import EncodingError, decode_number

if TYPE_CHECKING:
    from intplan.search import Cut


@dataclass(frozen=True)
class Shapes:
    """What the numbers in a file's evidence may be.

    Attributes
    ----------
    whole : of the columns, whether each is whole
    rules, cuts : how many there are
    """

    whole: Sequence[bool]
    rules: int
    cuts: int

    # ------------------------------------------------------------------ the tree

    def check_node(self, node: int, attributes: dict[str, Any]) -> None:
        """Check the evidence of a node.

        Raises
        ------
        EncodingError
            If it is none that a search gives; so for all methods here.
        """
        evidence = attributes["evidence"]
        if evidence is None:
            return
        try:
            _require(isinstance(evidence, dict) and type(evidence["steps"]) is list)
            for step in evidence["steps"]:
                self._check_step(step)
            if evidence["closure"] is not None:
                self._check_closure(evidence["closure"])
        except (KeyError, TypeError, ValueError, OverflowError, _Misshapen) as problem:
            raise EncodingError(f"node {node} has no such evidence") from problem

    def check_branchings(self, tree: nx.DiGraph) -> None:
        """Check that the branches of each node leave out no whole amount of an activity."""
        for node, attributes in tree.nodes(data=True):
            children = list(tree.successors(node))
            rows = [added for child in children for added in tree.nodes[child]["added"]]
            rows.sort(key=lambda added: added.kind, reverse=True)
            good = not rows and not children
            if len(children) == len(rows) == 2:
                below, above = rows
                good = (below.kind, above.kind) == ("most", "least")
                good = good and below.index == above.index and bool(self.whole[below.index])
                good = good and all(_is_finite(row.value) for row in rows)
                good = good and above.value == below.value + 1 == math.floor(above.value)
            if not good:
                raise EncodingError(f"node {node} has no such branches")
            cuts = [added.index for added in attributes["added"] if added.kind == "cut"]
            if len(set(cuts)) < len(cuts) or (node == 0) != (len(cuts) == len(attributes["added"])):
                raise EncodingError(f"node {node} adds a row that it cannot add")

    def _check_step(self, step: dict[str, Any]) -> None:
        _require(isinstance(step, dict) and type(step["leans"]) is bool)
        by, changes = step["by"], step["changes"]
        _require(type(by) is str and by in ("whole", "rule", "cost", "trial"))
        _require(isinstance(changes, list | tuple) and len(changes) > 0)
        rounded = by == "whole" and "row" in step
        for column, side, value in changes:
            _require(_is_number_to(column, self.rules if rounded else len(self.whole)))
            _require(_is_number_to(side, 2))
            if rounded:
                _require(value is None or type(value) is int)
            else:
                _require(_is_finite(value))
        if rounded:
            _require(step["row"] == changes[0][0] == changes[-1][0] and len(changes) == 2)
            _require(type(step["row"]) is int)
        if by == "rule":
            _require(_is_number_to(step["row"], self.rules) and _is_number_to(step["limit"], 2))
        if by in ("cost", "trial"):
            self._check_closure(step["closure"])
            _require("rows" in step["closure"])

    def _check_closure(self, closure: dict[str, Any]) -> None:
        _require(isinstance(closure, dict) and type(closure["leans"]) is bool)
        if "column" in closure:
            return _require(_is_number_to(closure["column"], len(self.whole)))
        if "row" in closure:
            return _require(_is_number_to(closure["row"], self.rules))
        _require(_is_number_to(closure["weight"], 2) and type(closure["exact"]) is bool)
        _check_numbers(closure["rows"], self.rules + self.cuts)
        _check_numbers(closure["bounds"], 2 * len(self.whole))
        if closure["exact"]:
            decode_number(closure["bound"])
        else:
            _require(type(closure["bound"]) is float)
        _check_multipliers(closure["multipliers"], closure["rows"], closure["exact"])
        return None

    # ------------------------------------------------------------------ cuts

    def check_cut(self, number: int, cut: Cut) -> None:
        """Check a cut's row and its evidence."""
        kinds: dict[str, Callable[[int, dict[str, Any]], None]] = {
            "gomory": self._check_gomory,
            "cover": self._check_cover,
        }
        try:
            _require(cut.kind in kinds and type(cut.leans) is bool)
            _require(all(map(math.isfinite, cut.coefficients)))
            _require(len(set(cut.columns)) == len(cut.columns))
            _require(math.isfinite(cut.least) and cut.most == math.inf)
            evidence = cut.evidence
            _require(isinstance(evidence, dict))
            for numbers, values in (("bounds", "values"), ("box", "box_values")):
                _check_numbers(evidence[numbers], 2 * len(self.whole))
                _check_doubles(evidence[values], len(evidence[numbers]))
            kinds[cut.kind](number, evidence)
        except (KeyError, TypeError, ValueError, OverflowError, _Misshapen) as problem:
            raise EncodingError(f"cut {number} has no such evidence") from problem

    def _check_gomory(self, number: int, evidence: dict[str, Any]) -> None:
        rows, sides = evidence["rows"], evidence["row_sides"]
        _check_numbers(rows, self.rules + number)
        exact = isinstance(evidence["multipliers"], list)
        _check_multipliers(evidence["multipliers"], rows, exact)
        _require(isinstance(sides, np.ndarray) and sides.shape == rows.shape)
        _require(bool(np.isin(sides, (-1, 0, 1)).all()))
        decode_number(evidence["plus"])
        limits = evidence.get("row_limits")
        if limits is not None:
            _require(type(limits) is list and len(limits) == len(rows))
            for limit in limits:
                decode_number(limit)

    def _check_cover(self, number: int, evidence: dict[str, Any]) -> None:
        _require(_is_number_to(evidence["row"], self.rules))
        _require(_is_number_to(evidence["limit"], 2))
        for key in ("cover", "flipped"):
            _require(all(_is_number_to(column, len(self.whole)) for column in evidence[key]))
        for column, coefficient in evidence["lifted"]:
            _require(_is_number_to(column, len(self.whole)) and type(coefficient) is int)


class _Misshapen(Exception):
    """Something has not the shape it should have."""


def _require(condition: bool) -> None:
    if not condition:
        raise _Misshapen


def _is_number_to(value: Any, end: int) -> bool:
    return type(value) is int and 0 <= value < end


def _is_finite(value: Any) -> bool:
    return type(value) is float and math.isfinite(value)


def _check_numbers(value: Any, end: int) -> None:
    """Check an array of numbers of rows, or of bounds."""
    _require(isinstance(value, np.ndarray) and value.ndim == 1 and value.dtype.kind in "iu")
    _require(not len(value) or bool(value.min() >= 0 and value.max() < end))


def _check_doubles(value: Any, length: int) -> None:
    """Check an array of finite doubles."""
    _require(isinstance(value, np.ndarray) and value.shape == (length,))
    _require(value.dtype.kind == "f" and bool(np.isfinite(value).all()))


def _check_multipliers(value: Any, rows: np.ndarray, exact: bool) -> None:
    """Check the multipliers of rows: doubles, or rationals as text."""
    if not exact:
        return _check_doubles(value, len(rows))
    _require(type(value) is list and len(value) == len(rows))
    for text in value:
        decode_number(text)
    return None
