"""The search of a changed problem, taken up from the tree of the problem before the change.

The root is re-optimised from the basis it ended with, with the cuts that still hold.  If that does
not settle it, the nodes of the earlier tree wait in its place: each with the bound that its
multipliers prove now, so that those closed before stay closed without being solved wherever that
bound is no better than the best plan.  The others are opened best bound first, each from its own
basis, which the dual simplex method repairs.

Reference: A. M. Geoffrion, R. Nauss, Parametric and postoptimality analysis in integer linear
programming, Management Science 23:453-466, 1977.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from time import perf_counter
from typing import Any

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.start import NoDualBasis, cold_start
from intplan.search.carry import Carrier, Kept, Places
from intplan.search.context import Context
from intplan.search.develop import NodeWork, Split, rounded_down
from intplan.search.diving import dive
from intplan.search.engine import Search, as_any_plan, drawn_home
from intplan.search.evidence import LEAST, MOST, Proof
from intplan.search.limits import Limits
from intplan.search.nearby import look_nearby
from intplan.search.node import Node
from intplan.search.result import SearchResult
from intplan.search.root import RootWork
from intplan.search.tightening import Bounds, tighten_by_cost
from intplan.sheet.problem import Number, Problem


def restart(
    problem: Problem,
    kept: Kept,
    places: Places,
    limits: Limits,
    gap: Fraction = Fraction(0),
    plan: Sequence[Number] | None = None,
    at: str | None = None,
) -> SearchResult:
    """Find the best whole-unit plan of a changed problem from the tree of the earlier one.

    Parameters
    ----------
    problem : the rules and the aim as they are now
    kept, places : the earlier search, and where its rules and columns are in `problem`
    limits, gap : as in `intplan.search.branch_and_cut`
    plan : the earlier plan in the columns of `problem`; the first in hand if it still fits
    at : "root" to branch anew from the root's basis, "leaves" to take up the earlier tree; by
        default the leaves where they are likely to pay, until they turn out not to, then the root,
        and nothing where that turns out not to pay either
    """
    size = len(kept.result.tree)
    leaves = leaves_pay(kept) if at is None else at == "leaves"
    search: Search = Restart(problem, gap, limits, False, kept, places, plan, leaves)
    ways = []
    if at is None:
        ways.append((size * OUTGROWN + MANY, lambda best: _afresh(problem, gap, limits, best)))
    if at is None and leaves:
        ways.append(
            (size * PATIENCE + FEW,
             lambda best: Restart(problem, gap, limits, False, kept, places, best, False))
        )  # fmt: skip
    while ways and isinstance(search, Restart):
        most, other = ways.pop()
        search.most_nodes = search.context.nodes + most
        try:
            return search.run()
        except _Outgrown:
            spent, search = search, other(search.best.plan or plan)
            context = search.context
            context.nodes, context.pivots = spent.context.nodes, spent.context.pivots
            if isinstance(search, Restart):
                search.reopened = spent.reopened
    return search.run()


def _afresh(
    problem: Problem, gap: Fraction, limits: Limits, plan: Sequence[Number] | None
) -> Search:
    """Return a search from nothing but a plan."""
    search = Search(problem, gap, limits)
    if plan is not None and search.context.arithmetic.fits(plan):
        search.best.offer(list(plan))
    return search


class _Outgrown(Exception):
    """Raised where the earlier tree takes more nodes than a tree made anew is likely to."""


def leaves_pay(kept: Kept) -> bool:
    """Tell whether to take up the leaves of an earlier tree instead of branching anew.

    What the leaves save is the choice of the branchings: the trials that it took.  Where the
    earlier search chose by what it had learnt, and most of its nodes took few pivots, a tree made
    anew for the changed problem is smaller and no dearer.
    """
    result = kept.result
    if result.tree.out_degree(0) != 2:
        return False
    pivots = [pivots for _, pivots in result.tree.nodes(data="pivots") if pivots]
    return sum(pivots) >= TRIED * len(pivots) or not pivots


def restart_for_any_plan(
    problem: Problem, kept: Kept, places: Places, limits: Limits
) -> SearchResult:
    """Find any whole-unit plan of a changed problem from a tree that found none.

    Parameters are those of `restart`; whatever the aims are, optimal means that a plan was found.
    """
    stand_in, leaves = drawn_home(problem), len(kept.result.tree) > 1
    search = Restart(stand_in, Fraction(0), limits, True, kept, places, None, leaves)
    return as_any_plan(problem, search.run())


TRIED = 24  # pivots a node of the earlier tree from which its leaves are worth taking up
PATIENCE = 1.5  # nodes next to the earlier tree's after which its leaves are given up
FEW = 30  # nodes that the leaves are granted in any case
OUTGROWN = 4  # nodes next to the earlier tree's after which its root is given up as well
MANY = 400  # nodes that the root is granted in any case
NEW_ROUNDS = 1  # rounds of new cuts at a root that has those of the earlier one


@dataclass(slots=True)
class KeptNode:
    """A node of the earlier tree that waits in the present one.

    Attributes
    ----------
    number, depth : of the node in the present tree
    earlier : its number in the earlier tree
    bound : what is proven of it now
    bounds, steps : its bounds, and what tightened them since its parent
    proof : of the bound, None where the bound is inherited
    inherited : the record of what proves its parent's bound
    basis : of the earlier node, or of its parent where it had none
    """

    number: int
    depth: int
    earlier: int
    bound: float
    bounds: Bounds
    steps: list[dict[str, Any]]
    proof: Proof | None
    inherited: dict[str, Any] | None
    basis: np.ndarray | None

    def __lt__(self, other: Node | KeptNode) -> bool:
        """Order as `Node` does."""
        return (self.bound, self.number) < (other.bound, other.number)


class KeptRoot(RootWork):
    """The root of a changed problem, from the basis and the cuts of the earlier root."""

    rounds = NEW_ROUNDS

    def __init__(self, context: Context, carrier: Carrier, plan: Sequence[Number] | None) -> None:
        super().__init__(context)
        self.carrier = carrier
        self.plan = plan

    def _derive_bounds(self) -> bool:
        """Derive bounds from the rules: where nothing was loosened, from those that changed."""
        carrier = self.carrier
        if not carrier.plain:
            return super()._derive_bounds() and self._take_over()
        return self._take_over() and self._propagate(rows=carrier.rows_to_look_at())

    def _take_over(self) -> bool:
        """Take over the cuts and the tightened bounds of the earlier root."""
        self.cuts = self.carrier.carry_cuts(self.bounds)
        evidence = self.carrier.kept.result.tree.nodes[0]["evidence"] or {"steps": ()}
        self.steps += self.carrier.carry_steps(evidence["steps"], self.bounds)
        return not closed_by_crossing(self.context, self.number, self.bounds, self.steps)

    def start_from_nothing(self) -> None:
        """Make the first dictionary: that of the earlier root's basis."""
        context, carrier = self.context, self.carrier
        if self.plan is not None and context.arithmetic.fits(self.plan):
            context.best.offer(list(self.plan))
        held = np.concatenate((np.arange(context.record.rules), self.cuts))
        basis = carrier.kept.result.tree.nodes[0]["basis"]
        self.dictionary = opened(context, carrier, basis, self.bounds, held)

    def open_relaxation(self) -> Proof | Split | None:
        """Solve the relaxation and look for a plan near the earlier one."""
        proof = self._open_relaxation()
        if not isinstance(proof, Proof) or not len(self.fractional_rows()):
            return proof
        context = self.context
        if self.branched:
            self._look_nearby()
        if context.best.value is None and context.time_to_dive():
            dive(context, self.dictionary, self.bounds, self.plan)
        return self.close("beaten", proof) if context.best.beats(proof.bound) else proof

    def cut(self, proof: Proof) -> Split | None:
        """Add cuts as at any root, and look near the earlier plan if that is still to be done."""
        split = super().cut(proof)
        if split is None and not self.closed and not self.branched:
            self._look_nearby()
        return split

    @property
    def branched(self) -> bool:
        """Whether the earlier tree has more than its root: else cuts are likely to settle it."""
        return len(self.carrier.kept.result.tree) > 1

    def _look_nearby(self) -> None:
        if self.plan is not None:
            look_nearby(self.context, self.dictionary, self.bounds, self.plan)


class Restart(Search):
    """One search that takes up an earlier tree; see `restart`."""

    def __init__(
        self,
        problem: Problem,
        gap: Fraction,
        limits: Limits,
        first_plan: bool,
        kept: Kept,
        places: Places,
        plan: Sequence[Number] | None,
        leaves: bool,
    ) -> None:
        super().__init__(problem, gap, limits, first_plan)
        self.earlier = kept.result.tree
        self.carrier = Carrier(kept, places, self.context)
        self.plan = plan
        self.leaves = leaves
        self.most_nodes = math.inf  # beyond which the leaves are given up
        self.reopened = 0
        self.held = np.arange(0)  # the rows that nodes hold

    def _result(self) -> SearchResult:
        self._record_waiting()
        result = super()._result()
        result.reopened = self.reopened
        return result

    def _record_waiting(self) -> None:
        """Record what is proven of earlier nodes that a limit left waiting: the bound rests on it.

        The node that was being solved then is among them.
        """
        for node in (*self.heap, self._current):
            if isinstance(node, KeptNode) and self.tree.nodes[node.number]["outcome"] == "waiting":
                self._record(node, "waiting")

    # ------------------------------------------------------------------ the root

    def _root(self) -> RootWork:
        return KeptRoot(self.context, self.carrier, self.plan)

    def _develop_root(self, root: RootWork) -> Split | None:
        """Solve the root; None if it closed, or if the earlier tree waits below it."""
        assert isinstance(root, KeptRoot)
        proof = root.open_relaxation()
        if not isinstance(proof, Proof):
            return proof
        if not self.leaves or self.earlier.out_degree(0) != 2:
            split = root.cut(proof)
            return split if split is not None or root.closed else root.develop()
        if root.tighten(proof):
            proof = root.relax()
            if not isinstance(proof, Proof):
                return proof
        root.keep_open(proof)
        root.note_held_cuts()
        self.held = root.dictionary.held_rows()
        self._take_up_children(0, 0, root.bounds, root.bound, root.closure, 0, None)
        return None

    # ------------------------------------------------------------------ the earlier tree

    def _solve(self, node: Node | KeptNode) -> Node | None:
        if self.context.nodes > self.most_nodes:
            raise _Outgrown
        if not isinstance(node, KeptNode):
            return super()._solve(node)
        if self.earlier.out_degree(node.earlier) == 2:
            self._expand(node)
            return None
        return self._reopen(node)

    def _close_unsolved(self, node: Node | KeptNode) -> None:
        if isinstance(node, KeptNode):
            self._record(node, "beaten")
        else:
            super()._close_unsolved(node)

    def _take_up_children(
        self,
        earlier: int,
        number: int,
        bounds: Bounds,
        bound: float,
        closure: dict[str, Any] | None,
        depth: int,
        basis: np.ndarray | None,
    ) -> None:
        """Let the children of an earlier node wait, as children of a present one.

        Parameters
        ----------
        earlier, number, depth : of the node, in the earlier and in the present tree
        bounds, bound, closure : what the node ended with
        basis : of the earlier node
        """
        basis = self.earlier.nodes[earlier]["basis"] if basis is None else basis
        for child in sorted(self.earlier.successors(earlier)):
            entry = self.earlier.nodes[child]
            self.context.record.open(self.numbered, number, depth + 1, entry["added"])
            node = KeptNode(
                self.numbered, depth + 1, child, bound, bounds.copy(), [], None, closure,
                basis if entry["basis"] is None else entry["basis"],
            )  # fmt: skip
            self.numbered += 1
            if self._weigh(node):
                heapq.heappush(self.heap, node)

    def _weigh(self, node: KeptNode) -> bool:
        """Take over a node's bounds and its closure; False if that closes it."""
        entry, bounds, carrier = self.earlier.nodes[node.earlier], node.bounds, self.carrier
        (added,) = entry["added"]
        side = LEAST if added.kind == "least" else MOST
        present = bounds.most.item(added.index) if side else bounds.least.item(added.index)
        if added.value < present if side else added.value > present:
            bounds.set(added.index, side, added.value, False)
        evidence = entry["evidence"] or {"steps": (), "closure": None}
        node.steps = carrier.carry_steps(evidence["steps"], bounds)
        if closed_by_crossing(self.context, node.number, bounds, node.steps):
            return False
        weighed = carrier.weigh(evidence["closure"])
        if weighed is None:
            return True
        proof = carrier.prove(weighed, bounds)
        if not weighed.weight:
            if proof.bound <= 0:
                return True
            closure = self.context.record.closure(proof, bounds)
            self.context.record.close(node.number, "empty", math.inf, node.steps, closure)
            return False
        if proof.bound > node.bound:
            node.bound, node.proof = proof.bound, proof
        return not self._tied(node, evidence["closure"])

    def _tied(self, node: KeptNode, closure: dict[str, Any]) -> bool:
        """Close a node whose exact multipliers still show that nothing in it is better."""
        multipliers = self.carrier.weigh_exactly(closure)
        if multipliers is None or self.best.beats(node.bound) or not self.best.ties(node.bound):
            return False
        bounds, context = node.bounds, self.context
        bound = context.arithmetic.exact_bound(1, multipliers, bounds.least, bounds.most)
        if bound is None or not self.best.beats_exactly(bound):
            return False
        record = context.record.exact_closure(1, multipliers, bound, bounds)
        context.record.close(node.number, "beaten", rounded_down(bound), node.steps, record)
        return True

    def _closure(self, node: KeptNode) -> dict[str, Any] | None:
        if node.proof is None:
            return node.inherited
        return self.context.record.closure(node.proof, node.bounds)

    def _record(self, node: KeptNode, outcome: str) -> dict[str, Any] | None:
        """Record how a node ended that was not solved again; return its closure."""
        closure = self._closure(node)
        self.context.record.close(
            node.number, outcome, node.bound, node.steps, closure, self._present_basis(node)
        )
        return closure

    def _present_basis(self, node: KeptNode) -> np.ndarray | None:
        return None if node.basis is None else self.carrier.renumbered_basis(node.basis)

    def _expand(self, node: KeptNode) -> None:
        """Put the children of an earlier split node in its place."""
        best, bounds = self.best, node.bounds
        closure = self._closure(node)
        if node.proof is not None and best.value is not None:
            changes = tighten_by_cost(node.proof, best.threshold, bounds, self.problem.whole)
            if changes:
                node.steps.append(
                    {"by": "cost", "changes": changes, "closure": closure, "leans": True,
                     "target": best.threshold}
                )  # fmt: skip
        basis = self._present_basis(node)
        self.context.record.close(node.number, "split", node.bound, node.steps, closure, basis)
        self._take_up_children(
            node.earlier, node.number, bounds, node.bound, closure, node.depth, node.basis
        )

    def _reopen(self, node: KeptNode) -> Node | None:
        """Solve an earlier node again from its own basis; return the child to dive into."""
        started = perf_counter()
        context = self.context
        context.nodes += 1
        self.reopened += 1
        dictionary = self._opened(node)
        total = context.pivots
        work = NodeWork(
            context, node.number, node.bound, self._closure(node), dictionary, node.bounds
        )
        work.steps = node.steps
        split = work.develop()
        context.pivots += work.dictionary.pivots
        entry = self.tree.nodes[node.number]
        entry["pivots"] = context.pivots - total
        entry["seconds"] = perf_counter() - started
        return None if split is None else self._branch(work, node.depth, split)

    def _opened(self, node: KeptNode) -> Dictionary:
        """Return a node's first dictionary: the slack basis where doubles find no better one."""
        context, bounds = self.context, node.bounds
        try:
            return opened(context, self.carrier, node.basis, bounds, self.held)
        except (NoDualBasis, np.linalg.LinAlgError):
            return Dictionary.at_slack_basis(
                context.rows, context.problem.cost, bounds.least, bounds.most, self.held
            )


def closed_by_crossing(
    context: Context, number: int, bounds: Bounds, steps: list[dict[str, Any]]
) -> bool:
    """Close a node in which an activity has no value left; tell whether that is so."""
    crossed = (bounds.least > bounds.most).nonzero()[0]
    if not len(crossed):
        return False
    column = crossed.item(0)
    closure = {"column": column, "leans": bool(bounds.leans[:, column].any())}
    context.record.close(number, "empty", math.inf, steps, closure)
    return True


def opened(
    context: Context,
    carrier: Carrier,
    basis: np.ndarray | None,
    bounds: Bounds,
    held: np.ndarray,
) -> Dictionary:
    """Return the dictionary of an earlier basis, or one made from nothing where that is no use.

    Parameters
    ----------
    basis : of the earlier search, None where none was kept
    bounds : of the node
    held : numbers of the rows to hold
    """
    rows, cost = context.rows, context.problem.cost
    found = carrier.basis(basis, bounds, held)
    if found is not None:
        dictionary = Dictionary.at_basis(rows, cost, bounds.least, bounds.most, found)
        if not dictionary.dual_infeasible():
            return dictionary
    return cold_start(rows, cost, bounds.least, bounds.most, held, context.limits.out_of_time)
