"""Warm against cold: what each node of a search costs from its parent's basis and from nothing."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING

from intplan.errors import IntplanError
from intplan.planning.naming import ROOT_NAME, added_text, column_names

if TYPE_CHECKING:
    from intplan.planning.standing import StandingPlan


@dataclass(frozen=True, slots=True)
class NodeComparison:
    """One node, solved to the end twice with the same rows.

    Attributes
    ----------
    node : its number in the tree, 0 for the root
    depth : branchings above it
    warm_pivots, cold_pivots : dual simplex pivots from the parent's basis, and from nothing
    warm_seconds, cold_seconds : the same in time
    warm_bound, cold_bound : the relaxation's bound in units of the aim, None if it is empty
    agree : both gave the same bound, or both found it empty
    name : what the node adds to its parent, in the planner's names; "the whole sheet" for the root
    """

    node: int
    depth: int
    warm_pivots: int
    cold_pivots: int
    warm_seconds: float
    cold_seconds: float
    warm_bound: float | None
    cold_bound: float | None
    agree: bool
    name: str = ""


@dataclass(frozen=True, slots=True)
class Comparison:
    """Every node of one tree, warm and cold, and the totals.

    Attributes
    ----------
    nodes : one entry a node, in the order of their numbers; the root, which has no parent to be
        warm from, is not among them
    warm_pivots, cold_pivots, warm_seconds, cold_seconds : totals over `nodes`
    agree : both agreed at every node
    complete : no node was left out
    """

    nodes: tuple[NodeComparison, ...]
    warm_pivots: int
    cold_pivots: int
    warm_seconds: float
    cold_seconds: float
    agree: bool
    complete: bool = True

    @classmethod
    def of(cls, nodes: tuple[NodeComparison, ...], complete: bool = True) -> Comparison:
        """Sum the nodes up."""
        return cls(
            nodes=nodes,
            warm_pivots=sum(node.warm_pivots for node in nodes),
            cold_pivots=sum(node.cold_pivots for node in nodes),
            warm_seconds=sum(node.warm_seconds for node in nodes),
            cold_seconds=sum(node.cold_seconds for node in nodes),
            agree=all(node.agree for node in nodes),
            complete=complete,
        )


def compare(standing: StandingPlan, stop: Callable[[], bool] | None = None) -> Comparison:
    """Solve the nodes of a standing plan's tree again, warm and cold.

    Parameters
    ----------
    standing : its tree is taken
    stop : polled between nodes; true asks for an early end

    Raises
    ------
    IntplanError
        If the aim has no limit: such a sheet has no bounds to compare.
    """
    from intplan.search.engine import drawn_home
    from intplan.search.replay import replay

    if standing.outcome == "unbounded":
        raise IntplanError("the aim has no limit, so there are no bounds to compare", None)
    problem, result = standing.proven_sheet.problem(), standing.result
    names = column_names(standing.proven_sheet)

    def in_aim_units(cost: float | None) -> float | None:
        if cost is None or result.any_plan:
            return None
        return float(problem.aim_from_cost(Fraction(cost)))

    solved = drawn_home(problem) if result.any_plan else problem
    nodes = []
    for entry in replay(solved, result.tree, result.cuts):
        if stop is not None and stop():
            break
        node = result.tree.nodes[entry.node]
        added = (added_text(a, names, result.cuts) for a in node["added"])
        nodes.append(
            NodeComparison(
                node=entry.node,
                depth=node["depth"],
                warm_pivots=entry.warm_pivots,
                cold_pivots=entry.cold_pivots,
                warm_seconds=entry.warm_seconds,
                cold_seconds=entry.cold_seconds,
                warm_bound=in_aim_units(entry.warm_cost),
                cold_bound=in_aim_units(entry.cold_cost),
                agree=entry.agree,
                name=", ".join(added) or ROOT_NAME,
            )
        )
    compared = tuple(sorted(nodes, key=lambda n: n.node))
    return Comparison.of(compared, complete=len(nodes) >= len(result.tree) - 1)
