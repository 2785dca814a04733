"""The search tree in the planner's names.

The search numbers its columns, cuts and nodes; here they become sentences such as
``loaf[mon] <= 3`` and ``cut 4: 2*a + 3*b <= 7``, and bounds become units of the aim.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import networkx as nx

from intplan.planning.numbers import nearest
from intplan.sheet import Sheet

if TYPE_CHECKING:
    from intplan.search import Added, Cut, SearchResult

ROOT_NAME = "the whole sheet"
TERMS_SHOWN = 12  # terms of a cut that are written out


def column_names(sheet: Sheet) -> list[str]:
    """Name the columns of a sheet's problem: the activities, then the bends of soft rules."""
    names = [activity.name for activity in sheet.activities]
    for bend in sheet.problem().bends:
        names.append(f"bend of {sheet.rules[bend.rule].name} at its {bend.side}")
    return names


def number_text(value: float) -> str:
    """Write a double by its shortest decimal, whole numbers without a point."""
    return str(int(value)) if value == int(value) and abs(value) < 1e15 else repr(float(value))


def added_text(added: Added, names: Sequence[str], cuts: Sequence[Cut]) -> str:
    """Write one row that a node adds to its parent.

    Parameters
    ----------
    added : a branching bound or a cut
    names : (columns,) as from `column_names`
    cuts : the cuts of the search, by number
    """
    if added.kind == "cut":
        return f"cut {added.index}: {cut_text(cuts[added.index], names)}"
    relation = ">=" if added.kind == "least" else "<="
    return f"{names[added.index]} {relation} {number_text(added.value)}"


def cut_text(cut: Cut, names: Sequence[str]) -> str:
    """Write a cut as algebra with six digits a number; the middle of a long one is left out.

    A cut whose factors are all negative is written with both sides' signs turned.
    """
    turn = -1.0 if all(factor < 0 for factor in cut.coefficients) else 1.0
    terms = [
        _term(turn * float(factor), names[column])
        for column, factor in zip(cut.columns, cut.coefficients, strict=True)
    ]
    if len(terms) > TERMS_SHOWN:
        left_out = len(terms) - TERMS_SHOWN + 1
        terms[TERMS_SHOWN - 2 : -1] = [f"+ ({left_out} more)"]
    text = " ".join(terms) or "0"
    text = "-" + text[2:] if text.startswith("- ") else text.removeprefix("+ ")
    least, most = sorted((turn * cut.least, turn * cut.most))
    if least == most:
        return f"{text} = {_digits(least)}"
    if math.isfinite(least) and math.isfinite(most):
        return f"{_digits(least)} <= {text} <= {_digits(most)}"
    return f"{text} <= {_digits(most)}" if math.isfinite(most) else f"{text} >= {_digits(least)}"


def _term(factor: float, name: str) -> str:
    sign = "-" if factor < 0 else "+"
    size = _digits(abs(factor))
    return f"{sign} {name}" if size == "1" else f"{sign} {size}*{name}"


def _digits(value: float) -> str:
    return f"{value:.6g}"


def named_tree(sheet: Sheet, result: SearchResult) -> nx.DiGraph:
    """Return the search tree with readable attributes.

    Parameters
    ----------
    sheet : what was solved
    result : what the search gave

    Returns
    -------
    networkx.DiGraph
        The same nodes and edges. Each node has `bound` (a number in units of the aim, None where
        nothing finite is known or the tree looks for any plan), `depth`, `outcome`, `added` (a
        list of texts), `pivots`, `seconds`, `start` and `evidence`.
    """
    problem = sheet.problem()
    names = column_names(sheet)
    tree = nx.DiGraph()
    for node, raw_attributes in result.tree.nodes(data=True):
        attributes: dict[str, Any] = {
            key: raw_attributes[key]
            for key in ("depth", "outcome", "pivots", "seconds", "start", "evidence")
        }
        bound = raw_attributes["bound"]
        told = bool(problem.exact_cost) and not result.any_plan
        finite = told and bound is not None and math.isfinite(bound)
        attributes["bound"] = nearest(problem.aim_from_cost(Fraction(bound))) if finite else None
        attributes["added"] = [
            added_text(a, names, result.cuts) for a in raw_attributes["added"]
        ]
        tree.add_node(node, **attributes)
    tree.add_edges_from(result.tree.edges())
    return tree


def node_name(attributes: dict[str, Any]) -> str:
    """Name a node of a named tree by the bounds it adds to its parent; cuts are counted."""
    bounds = [text for text in attributes["added"] if not text.startswith("cut ")]
    cuts = len(attributes["added"]) - len(bounds)
    name = "; ".join(bounds) or ROOT_NAME
    return f"{name}, with {cuts} {'cut' if cuts == 1 else 'cuts'}" if cuts else name
