"""Warm against cold: what each node of a search costs from its parent's basis and from nothing."""

from __future__ import annotations

from dataclasses import dataclass


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
    """

    nodes: tuple[NodeComparison, ...]
    warm_pivots: int
    cold_pivots: int
    warm_seconds: float
    cold_seconds: float
    agree: bool

    @classmethod
    def of(cls, nodes: tuple[NodeComparison, ...]) -> Comparison:
        """Sum the nodes up."""
        return cls(
            nodes=nodes,
            warm_pivots=sum(node.warm_pivots for node in nodes),
            cold_pivots=sum(node.cold_pivots for node in nodes),
            warm_seconds=sum(node.warm_seconds for node in nodes),
            cold_seconds=sum(node.cold_seconds for node in nodes),
            agree=all(node.agree for node in nodes),
        )
