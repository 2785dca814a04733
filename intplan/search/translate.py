"""A finished tree in the numbers of a changed problem that allows no more than the earlier one.

Everything that was proven still holds where rules and bounds were only added or tightened and the
answer stays the same; rows have other numbers, and limits are rounded anew.
"""

from __future__ import annotations

from typing import Any

import networkx as nx
import numpy as np

from intplan.search.carry import Carrier, Kept, Places
from intplan.search.engine import Search
from intplan.search.limits import Limits
from intplan.search.result import Cut
from intplan.search.root import RootWork
from intplan.sheet.problem import Problem


def translated(problem: Problem, kept: Kept, places: Places) -> tuple[nx.DiGraph, list[Cut]]:
    """Return the tree and the cuts of an earlier search in the numbers of a changed problem.

    Parameters
    ----------
    problem : allows nothing that the earlier one did not allow, with the same columns and aim
    kept, places : the earlier search, and where its rules are in `problem`
    """
    search = Search(problem, 0, Limits(None, None, None, None))
    context, record = search.context, search.context.record
    root = RootWork(context)
    record.open(0, None, 0, ())
    if not root.round_limits():
        return record.tree, record.cuts
    carrier = Carrier(kept, places, context)
    carrier.carry_all_cuts()
    for number, entry in kept.result.tree.nodes(data=True):
        attributes = dict(entry)
        attributes["evidence"] = _evidence(carrier, entry["evidence"], root.steps, number == 0)
        attributes["basis"] = _basis(carrier, entry["basis"])
        record.tree.add_node(number, **attributes)
    record.tree.add_edges_from(kept.result.tree.edges())
    record.tree.graph.update(kept.result.tree.graph)
    return record.tree, record.cuts


def _evidence(
    carrier: Carrier, evidence: dict[str, Any] | None, rounding: list[dict[str, Any]], root: bool
) -> dict[str, Any] | None:
    """Return a node's evidence by present numbers; at the root with the limits rounded anew."""
    if evidence is None:
        return None
    steps = [carrier.renumbered_step(s) for s in evidence["steps"] if s["by"] != "whole"]
    closure = evidence["closure"]
    return {
        "steps": [*rounding, *steps] if root else steps,
        "closure": None if closure is None else carrier.renumbered(closure),
    }


def _basis(carrier: Carrier, basis: np.ndarray | None) -> np.ndarray | None:
    return None if basis is None else carrier.renumbered_basis(basis)
