"""Branch and cut: the tree of relaxations, each re-optimised from its parent's basis.

The search goes best bound first; from each node it dives, solving one child at once in place and
keeping the other for later.  Nodes are closed by safe bounds only (`intplan.search.evidence`),
plans are taken only when they meet every rule exactly, and what doubles cannot settle is solved
in rationals.

References
----------
A. H. Land, A. G. Doig, An automatic method of solving discrete programming problems,
Econometrica 28:497-520, 1960; R. J. Dakin, A tree-search algorithm for mixed integer programming
problems, The Computer Journal 8:250-255, 1965.
M. Padberg, G. Rinaldi, A branch-and-cut algorithm for the resolution of large-scale symmetric
traveling salesman problems, SIAM Review 33:60-100, 1991.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from time import perf_counter

import numpy as np

from intplan.relaxation.dictionary import Stopped
from intplan.relaxation.rows import RowStore
from intplan.relaxation.start import NoDualBasis
from intplan.search.arithmetic import Arithmetic
from intplan.search.branching import PseudoCosts
from intplan.search.context import Context
from intplan.search.develop import NodeWork, NoLimit, Split
from intplan.search.evidence import LEAST, MOST, Prover
from intplan.search.incumbent import Incumbent
from intplan.search.limits import Limits, Progress
from intplan.search.node import Branch, Node, Shelf, Snapshot
from intplan.search.record import Recorder
from intplan.search.result import SearchResult
from intplan.search.root import RootWork
from intplan.search.rounding import Rounder
from intplan.search.tightening import Propagator
from intplan.sheet.problem import ExactRow, Number, Problem

RANGE = 1e9  # a whole activity without a bound is not branched on past this
EXACT = 2.0**52  # nor any past this, where doubles no longer tell whole numbers apart
DIVE = 40  # levels a dive may go beyond twice the number of activities
SHELF = 96 << 20  # bytes of tables kept for waiting nodes


def branch_and_cut(
    problem: Problem,
    gap: Fraction = Fraction(0),
    time_limit: float | None = None,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> SearchResult:
    """Find the best whole-unit plan and the tree that proves it.

    Parameters
    ----------
    problem : the rules and the aim
    gap : percent of the value's size by which the plan may miss the best
    time_limit : seconds
    node_limit : nodes to solve at most
    progress : called a few times a second at most with the best value and the bound, exact
        numbers in the aim's units (None before there is one)
    stop : polled between nodes and in long computations; true asks for an early end

    Returns
    -------
    SearchResult
    """
    limits = Limits(time_limit, node_limit, stop, progress)
    if not problem.exact_cost:
        return find_plan(problem, limits)
    return Search(problem, gap, limits).run()


def drawn_home(problem: Problem) -> Problem:
    """Return the problem with an aim that draws activities without a bound to the one they have.

    A search for any plan takes it, so that it does not wander off.
    """
    pull = np.isfinite(problem.least) * 1 - np.isfinite(problem.most) * 1
    columns = [int(j) for j in pull.nonzero()[0]]
    return replace(
        problem,
        cost=pull.astype(float),
        exact_cost=tuple((j, int(pull[j])) for j in columns),
        cost_shift=0,
        cost_factor=Fraction(1),
        cost_step=Fraction(1) if problem.whole[columns].all() else None,
    )


def find_plan(problem: Problem, limits: Limits) -> SearchResult:
    """Find any whole-unit plan, whatever the aim: optimal means that one was found."""
    result = Search(drawn_home(problem), Fraction(0), limits, first_plan=True).run()
    return as_any_plan(problem, result)


def as_any_plan(problem: Problem, result: SearchResult) -> SearchResult:
    """Turn the answer of a search with a stand-in aim into one about any plan."""
    result.any_plan = True
    result.bound = None
    if result.plan is not None:
        result.outcome, result.ended_by = "optimal", None
        result.value = problem.aim_from_cost(problem.exact_cost_of(result.plan))
        result.bound = result.value
    return result


class Search:
    """One run of branch and cut; see `branch_and_cut`.

    Parameters
    ----------
    first_plan : stop at the first plan
    """

    def __init__(
        self, problem: Problem, gap: Fraction, limits: Limits, first_plan: bool = False
    ) -> None:
        self.problem = problem
        self.first_plan = first_plan
        self.limits = limits
        rows = RowStore(
            problem.matrix, problem.row_least, problem.row_most,
            np.array([row.shift if _in_doubles(row) else -1 for row in problem.rows], int),
        )  # fmt: skip
        record = Recorder(problem.least, problem.most)
        record.rules = len(problem.rows)
        rules = (problem.matrix, problem.row_least.copy(), problem.row_most.copy())
        self.context = Context(
            problem=problem,
            rows=rows,
            limits=limits,
            best=Incumbent(problem, gap),
            arithmetic=Arithmetic(problem, rows),
            prover=Prover(rows, problem.cost),
            propagator=Propagator(*rules, problem.whole),
            rounder=Rounder(*rules, problem.cost, problem.whole),
            record=record,
            costs=PseudoCosts(len(problem.cost)),
        )
        self.best = self.context.best
        self.tree = record.tree
        self.longest_dive = 2 * len(problem.cost) + DIVE
        self.heap: list[Node] = []
        self.shelf = Shelf(rows, problem.cost, SHELF)
        self.numbered = 0
        self.open_bound = math.inf  # least bound of nodes left open for good
        self.ended_by: str | None = None
        self._current: Node | RootWork | None = None  # what is being solved

    # ------------------------------------------------------------------ the whole run

    def run(self) -> SearchResult:
        """Search until nothing is left or a limit is reached.

        Divisions by zero are meant: a ratio over a zero entry is infinite.
        """
        with np.errstate(divide="ignore", invalid="ignore"):
            return self._run()

    def _run(self) -> SearchResult:
        self.context.record.open(0, None, 0, ())
        self.numbered = 1
        root = self._root()
        self._current = root
        try:
            try:
                open_root = root.prepare()
            except NoDualBasis:
                ray = self._exact_ray(root)
                if ray is not None:
                    return self._unbounded(ray)
                open_root = True
            self._current = None
            if open_root:
                self._explore(self._solve_root(root))
        except NoLimit as found:
            return self._unbounded(_whole_direction(found.direction))
        except Stopped:
            self.ended_by = self.limits.reached(self.context.nodes) or "interrupt"
            root.leave()
        return self._result()

    def _explore(self, node: Node | None) -> None:
        """Solve the waiting nodes, best bound first, diving from each."""
        dive = 0
        while node is not None or self.heap:
            if self.first_plan and self.best.value is not None:
                return
            if node is not None and dive > self.longest_dive:
                heapq.heappush(self.heap, node)
                node = None
            self.ended_by = self.limits.reached(self.context.nodes)
            if self.ended_by:
                if node is not None:
                    heapq.heappush(self.heap, node)
                return
            if node is None:
                node, dive = heapq.heappop(self.heap), 0
            dive += 1
            if self.best.beats(node.bound):
                self._close_unsolved(node)
                node = None
            else:
                self._current = node
                self.limits.report(self._value, self._bound)
                node = self._solve(node)
                self._current = None

    def _root(self) -> RootWork:
        return RootWork(self.context)

    def _develop_root(self, root: RootWork) -> Split | None:
        """Solve the root; None once it is closed, else where to branch."""
        return root.develop_root()

    def _solve_root(self, root: RootWork) -> Node | None:
        started = perf_counter()
        self.context.nodes += 1
        trials = self.context.pivots
        self._current = root
        split = self._develop_root(root)
        self._current = None
        made = root.dictionary.pivots
        self.context.pivots += made
        entry = self.tree.nodes[0]
        entry["pivots"] = self.context.pivots - trials
        entry["seconds"] = perf_counter() - started
        return None if split is None else self._branch(root, 0, split)

    def _solve(self, node: Node) -> Node | None:
        """Solve a node from its parent's basis; return the child to dive into, if any."""
        started = perf_counter()
        context = self.context
        dictionary, bounds = self.shelf.take(node.origin)
        before, total = dictionary.pivots, context.pivots
        work = NodeWork(context, node.number, node.bound, node.closure, dictionary, bounds)
        context.nodes += 1
        split = work.develop(node.branch) if work.enter(node.branch) else None
        context.pivots += work.dictionary.pivots - before
        entry = self.tree.nodes[node.number]
        entry["pivots"] = context.pivots - total
        entry["seconds"] = perf_counter() - started
        return None if split is None else self._branch(work, node.depth, split)

    def _branch(self, work: NodeWork, depth: int, split: Split) -> Node | None:
        """Create both children of a split node; return the one to dive into."""
        column, value = split.column, split.value
        unlimited = not (
            math.isfinite(work.bounds.least[column]) and math.isfinite(work.bounds.most[column])
        )
        if (unlimited and abs(value) > RANGE) or abs(value) > EXACT:
            self.open_bound = min(self.open_bound, work.bound)
            self.tree.nodes[work.number]["outcome"] = "waiting"
            return None
        floor = math.floor(value)
        cost = work.dictionary.value
        branches = [
            Branch(column, MOST, float(floor), value - floor, cost),
            Branch(column, LEAST, float(floor + 1), floor + 1 - value, cost),
        ]
        if work.bounds.most[column] - work.bounds.least[column] == 1:
            down_first = value - floor <= 0.5
        else:
            down_first = (split.down_gain, value - floor) < (split.up_gain, 0.5)
        if not down_first:
            branches.reverse()
        later = Snapshot(work.dictionary.copy(), work.bounds.copy())
        now = Snapshot(work.dictionary, work.bounds)
        children = []
        for branch, origin in zip(branches, (now, later), strict=True):
            child = Node(
                self.numbered, work.number, depth + 1, work.bound, work.closure, branch, origin
            )
            self.numbered += 1
            self.context.record.open(child.number, work.number, depth + 1, branch.added())
            children.append(child)
        self.shelf.put(later)
        self.shelf.put(now, at_once=True)
        heapq.heappush(self.heap, children[1])
        return children[0]

    def _close_unsolved(self, node: Node) -> None:
        """Close a node by the bound it inherited, which its parent's multipliers prove."""
        self.shelf.forget(node.origin)
        self.context.record.close(node.number, "beaten", node.bound, [], node.closure)

    # ------------------------------------------------------------------ aims without a limit

    def _exact_ray(self, root: RootWork) -> list[int] | None:
        """Confirm a direction of improvement in rationals; None (and a start) if there is none."""
        context = self.context
        answer = context.arithmetic.solve_node(
            np.arange(context.rows.count), [], root.bounds.least, root.bounds.most,
            self.limits.out_of_time,
        )  # fmt: skip
        if answer.status == "unbounded":
            return _whole_direction(answer.point)
        root.start_from_basis(answer.basis)
        return None

    def _unbounded(self, ray: list[int]) -> SearchResult:
        """Tell an aim without a limit from a sheet without a plan: look for any plan.

        With rational data the best value is without limit as soon as the relaxation's is and
        one whole-unit plan exists (R. R. Meyer, On the existence of optimal solutions to integer
        and mixed-integer programming problems, Mathematical Programming 7:223-235, 1974).
        """
        if self.best.plan is not None:
            self.ended_by = None
            result = self._result()
        else:
            result = find_plan(self.problem, self.limits)
            result.nodes += self.context.nodes
            result.pivots += self.context.pivots
            result.seconds = self.limits.seconds()
        if result.plan is not None:
            result.outcome, result.ended_by = "unbounded", None
            result.ray, result.bound = ray, None
        return result

    # ------------------------------------------------------------------ answers

    def _value(self) -> Number | None:
        value = self.best.value
        return None if value is None else self.problem.aim_from_cost(value)

    def _bound(self) -> Number | None:
        bound = self._lowest()
        return None if bound is None else self.problem.aim_from_cost(bound)

    def _lowest(self) -> Fraction | None:
        """Return the cost below which no plan lies, None if nothing is known."""
        bounds = [self.open_bound, *(node.bound for node in self.heap[:1])]
        if self._current is not None:
            bounds.append(self._current.bound)
        lowest = min(bounds)
        if lowest == -math.inf:
            return None
        value = self.best.value
        if value is not None and self.best.least_target < value - self.best.step:
            # a gap: whatever costs more than the least target may have been left out
            lowest = min(lowest, self.best.next_cost)
        if lowest == math.inf:
            return value
        bound = self.best.rounded_up(lowest)
        return bound if value is None else min(bound, value)

    def _within_gap(self, value: Number | None, bound: Number | None) -> bool:
        if value is None or bound is None:
            return False
        return abs(Fraction(bound) - value) * 100 <= self.best.gap * abs(value)

    def _result(self) -> SearchResult:
        value, best = self._value(), self.best
        if self.ended_by is None and self.open_bound < math.inf:
            self.ended_by = "range"
        exhausted = self.ended_by is None
        bound = self._bound() if best.value is not None or not exhausted else None
        if value is not None and bound == value:
            outcome, self.ended_by = "optimal", None
        elif self._within_gap(value, bound):
            outcome, self.ended_by = "within_gap", None
        elif exhausted:  # with a plan, its caller knows better: it sought a plan or has a ray
            outcome = "infeasible" if value is None else "within_gap"
        else:
            outcome = "unfinished"
        context = self.context
        # Without evidence of the root what its cuts used was not recorded.
        cuts = [] if self.tree.nodes[0]["evidence"] is None else context.record.cuts
        return SearchResult(
            outcome=outcome, ended_by=self.ended_by, plan=best.plan, value=value, bound=bound,
            ray=None, tree=self.tree, cuts=cuts, nodes=context.nodes,
            pivots=context.pivots, seconds=self.limits.seconds(),
        )  # fmt: skip


def _whole_direction(direction: list[Fraction]) -> list[int]:
    """Return a direction in whole numbers."""
    scale = math.lcm(*(x.denominator for x in direction))
    return [int(x * scale) for x in direction]


def _in_doubles(row: ExactRow) -> bool:
    """Tell whether a rule's integers are exact in doubles."""
    return max(map(abs, row.coefficients), default=0) < 1 << 53
