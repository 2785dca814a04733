"""One node: re-optimised, tightened, and closed or given the activity to branch on."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any, NamedTuple

import numpy as np

from intplan.relaxation.dictionary import Dictionary, Multipliers, Status
from intplan.relaxation.start import NoDualBasis, cold_start
from intplan.search import branching
from intplan.search.context import Context
from intplan.search.diving import dive, fractional_rows
from intplan.search.evidence import LEAST, MOST, Proof
from intplan.search.exact import ExactAnswer
from intplan.search.incumbent import in_doubles
from intplan.search.node import Branch
from intplan.search.tightening import Bounds, tighten_by_cost
from intplan.sheet.problem import Number, lowest

PIVOTS_A_PLACE = 50  # pivots a variable after which a run is not believed to end
ATTEMPTS = 12  # times a node is solved again after its own tightenings
ROUND_ALWAYS = 64  # nodes at which rounding is tried; later at every eighth


class NoLimit(Exception):
    """Raised when exact arithmetic finds that the aim improves along a direction for ever.

    Attributes
    ----------
    direction : one exact number a column
    """

    def __init__(self, direction: list[Fraction]) -> None:
        super().__init__("the aim has no limit")
        self.direction = direction


class Split(NamedTuple):
    """The activity to branch on at a value that is not whole, and what each side may gain."""

    column: int
    value: float
    down_gain: float
    up_gain: float


class NodeWork:
    """A node being solved.

    Parameters
    ----------
    context : the search
    number, depth : of the node
    inherited, closure : safe bound of its parent, and the record of what proves it
    dictionary : the parent's last dictionary, owned; the root makes its own
    bounds : the node's bounds, owned

    Attributes
    ----------
    bound : the best safe bound so far
    steps : the node's tightenings; see `intplan.search.record`
    """

    def __init__(
        self,
        context: Context,
        number: int,
        inherited: float,
        closure: dict[str, Any] | None,
        dictionary: Dictionary | None,
        bounds: Bounds,
    ) -> None:
        self.context = context
        self.number = number
        self.bound = inherited
        self.dictionary = dictionary
        self.bounds = bounds
        self.steps: list[dict[str, Any]] = []
        self._inherited_closure = closure
        self._proof: Proof | None = None  # of the bound, where it is better than the inherited
        self._exact_closure: dict[str, Any] | None = None  # the same, where rationals proved it
        self._closure_of: tuple[Proof, dict[str, Any]] | None = None

    # ------------------------------------------------------------------ the steps in order

    def enter(self, branch: Branch) -> bool:
        """Apply the branching bound and what the rules make of it; False if that closed it."""
        self.bounds.set(branch.column, branch.side, branch.value, False)
        propagator = self.context.propagator
        if propagator.pays():
            entered = self._spread([branch.column])
            propagator.note(closed=not entered)
            return entered
        self.dictionary.set_bound(
            branch.column,
            self.bounds.least.item(branch.column),
            self.bounds.most.item(branch.column),
        )
        return True

    def develop(self, branch: Branch | None = None) -> Split | None:
        """Solve the node as far as a decision: None once it is closed, else where to branch."""
        context, dictionary = self.context, self.dictionary
        for attempt in range(ATTEMPTS):
            proof = self.relax()
            if not isinstance(proof, Proof):
                return proof
            if branch is not None and not attempt:
                context.costs.record(branch.column, branch.side, branch.fraction,
                                     dictionary.value - branch.parent_cost)  # fmt: skip
            rows = self.fractional_rows()
            if not len(rows):
                if self._take_plan(proof):
                    return None
                if attempt + 1 < ATTEMPTS and self.tighten(proof):
                    continue
                return self._pin(proof)
            if self.try_rounding() and context.best.beats(proof.bound):
                return self.close("beaten", proof)
            last = attempt + 1 == ATTEMPTS
            if not last and self.tighten(proof):
                continue
            if context.time_to_dive() and dive(
                context, dictionary, self.bounds, context.best.plan if context.nodes > 1 else None
            ):
                if context.best.beats(proof.bound):
                    return self.close("beaten", proof)
                if not last and self.tighten(proof):
                    continue
            choice = branching.choose(dictionary, rows, context.best.cutoff, context.costs)
            context.pivots += choice.pivots
            if not last and choice.closed and self._use_trials(choice):
                if self.closed:
                    return None
                continue
            self.keep_open(proof)
            return Split(choice.column, choice.value, choice.down_gain, choice.up_gain)
        raise AssertionError("the last attempt returns")

    @property
    def closed(self) -> bool:
        """Whether the node is known to hold nothing better."""
        return self.context.record.tree.nodes[self.number]["outcome"] in ("beaten", "empty", "plan")

    @property
    def closure(self) -> dict[str, Any] | None:
        """The record of what proves the bound."""
        if self._exact_closure is not None:
            return self._exact_closure
        return self._inherited_closure if self._proof is None else self._closure(self._proof)

    # ------------------------------------------------------------------ relaxation

    def relax(self) -> Proof | Split | None:
        """Re-optimise; return the bound's proof if the node stays open, None if it closed.

        Where doubles do not settle it, a second run on a fresh table follows, then rationals;
        those may name the activity to branch on at once (a `Split`).
        """
        context = self.context
        for fresh in (False, True):
            cutoff = math.inf if fresh else context.best.cutoff
            if fresh:
                self._refactor()
            status = self._reoptimise(cutoff)
            if status is Status.LIMIT:
                continue
            if status is Status.BEATEN:
                proof = self._cost_proof()
                if context.best.beats(proof.bound):
                    return self.close("beaten", proof)
                status = self._reoptimise(math.inf)
                if status is Status.LIMIT:
                    continue
            if status is Status.EMPTY:
                proof = context.prover.prove(
                    0, self.dictionary.row_multipliers(self.dictionary.failing_row),
                    self.bounds.least, self.bounds.most,
                )  # fmt: skip
                if proof.bound > 0:
                    return self.close("empty", proof)
                if fresh and self._settle_empty():
                    return None
                continue
            proof = self._cost_proof()
            if context.best.beats(proof.bound):
                return self.close("beaten", proof)
            if proof.bound == -math.inf:
                continue
            if context.best.ties(proof.bound) and self._settle_tie(proof, "beaten"):
                return None
            if proof.bound > self.bound:
                self.bound, self._proof = proof.bound, proof
            return proof
        return self.solve_exactly()

    def _reoptimise(self, cutoff: float) -> Status:
        """Re-optimise; LIMIT where doubles go on for ever, as they may from a bad basis."""
        dictionary, stop = self.dictionary, self.context.limits.out_of_time
        most = PIVOTS_A_PLACE * len(dictionary.place)
        try:
            status = dictionary.reoptimise(cutoff, most, stop)
            if status is Status.OPTIMAL and dictionary.drifted():
                dictionary.refactor()
                status = dictionary.reoptimise(cutoff, most, stop)
            return status
        except np.linalg.LinAlgError:
            self._start_again()
        try:
            return self.dictionary.reoptimise(cutoff, most, stop)
        except np.linalg.LinAlgError:
            return Status.LIMIT

    def _refactor(self) -> None:
        try:
            self.dictionary.refactor()
        except np.linalg.LinAlgError:
            self._start_again()

    def _start_again(self) -> None:
        """Replace a basis that is singular in doubles by a cold start with the same rows."""
        self._start_with(self.dictionary.held_rows())
        self.context.record.tree.nodes[self.number]["start"] = "cold"

    def _start_with(self, held: np.ndarray) -> None:
        """Make a dictionary from nothing; the slack basis where doubles find no better one."""
        old, bounds = self.dictionary, self.bounds
        try:
            new = cold_start(
                old.rows, old.cost, bounds.least, bounds.most, held,
                self.context.limits.out_of_time,
            )  # fmt: skip
        except (NoDualBasis, np.linalg.LinAlgError):
            new = Dictionary.at_slack_basis(old.rows, old.cost, bounds.least, bounds.most, held)
        new.pivots += old.pivots
        self.dictionary = new

    def _cost_proof(self) -> Proof:
        return self.context.prover.prove(
            1, self.dictionary.cost_multipliers(), self.bounds.least, self.bounds.most
        )

    def fractional_rows(self) -> np.ndarray:
        """Return the dictionary rows of whole activities away from a whole value, (k,)."""
        return fractional_rows(self.dictionary, self.context.problem.whole)

    # ------------------------------------------------------------------ tightening

    def _spread(self, changed: list[int]) -> bool:
        """Propagate changed bounds and hand all of them to the dictionary; False if closed."""
        bounds = self.bounds
        touched, failed = self.context.propagator.run(bounds, changed, self.steps)
        if failed is not None and self._refuted_by_rule(failed):
            return False
        for j in touched:
            if bounds.least[j] > bounds.most[j]:
                self._finish("empty", math.inf, {"column": j, "leans": bool(bounds.leans.any())})
                return False
        self.dictionary.set_bounds({*changed, *touched}, bounds.least, bounds.most)
        return True

    def _refuted_by_rule(self, row: int) -> bool:
        """Close the node if one rule alone cannot be met, proven either way round."""
        for sign in (1.0, -1.0):
            multipliers = Multipliers(np.array([row]), np.array([sign]))
            proof = self.context.prover.prove(
                0, multipliers, self.bounds.least, self.bounds.most
            )
            if proof.bound > 0:
                self.close("empty", proof)
                return True
        return False

    def tighten(self, proof: Proof) -> bool:
        """Tighten by reduced costs; tell whether the node must be solved again."""
        context = self.context
        if context.best.value is None:
            return False
        changes = tighten_by_cost(
            proof, context.best.threshold, self.bounds, context.problem.whole
        )
        if not changes:
            return False
        self.steps.append(
            {"by": "cost", "changes": changes, "closure": self._closure(proof), "leans": True,
             "target": context.best.threshold}
        )  # fmt: skip
        self.dictionary.set_bounds([j for j, _, _ in changes], self.bounds.least, self.bounds.most)
        return self._outside()

    def _outside(self) -> bool:
        rooms = self.dictionary.rooms
        return bool(rooms.size and rooms.min() < -self.dictionary.tolerance)

    def _use_trials(self, choice: branching.Choice) -> bool:
        """Take over which sides are closed; tell whether a bound was tightened (or all closed)."""
        used = []
        for closed in choice.closed:
            closure = self._trial_closure(closed)
            if closure is None:
                continue
            column = closed.column
            change = (
                (column, MOST, float(math.floor(closed.value)))
                if closed.side
                else (column, LEAST, float(math.ceil(closed.value)))
            )
            leans = closure["leans"] or closure["weight"] == 1
            self.steps.append(
                {"by": "trial", "changes": [change], "closure": closure, "leans": leans}
            )
            self.bounds.set(*change, leans)
            used.append(column)
            if self.bounds.least[column] > self.bounds.most[column]:
                self._finish(
                    "empty", math.inf,
                    {"column": column, "leans": bool(self.bounds.leans[:, column].any())},
                )  # fmt: skip
                return True
        if used and self.context.propagator.pays():
            self._spread(used)
        elif used:
            self.dictionary.set_bounds(used, self.bounds.least, self.bounds.most)
        return bool(used)

    def _trial_closure(self, closed: branching.Closed) -> dict[str, Any] | None:
        """Return the record of one closed side, None if it is not proven after all."""
        bounds, prover = self.bounds, self.context.prover
        array = bounds.least if closed.side else bounds.most
        kept = array.item(closed.column)
        value = closed.value
        array[closed.column] = math.ceil(value) if closed.side else math.floor(value)
        proof = prover.prove(closed.weight, closed.multipliers, bounds.least, bounds.most)
        proven = self.context.best.beats(proof.bound) if closed.weight else proof.bound > 0
        closure = None
        if proven:
            closure = self.context.record.closure(proof, bounds)
        array[closed.column] = kept
        return closure

    # ------------------------------------------------------------------ plans

    def try_rounding(self) -> bool:
        """Look for a plan near the point; tell whether a better one was found."""
        context = self.context
        if context.nodes > ROUND_ALWAYS and context.nodes % 8:
            return False
        return context.round_to_plan(self.dictionary.activities(), self.bounds)

    def _take_plan(self, proof: Proof) -> bool:
        """Take the plan at a point with whole values; tell whether it closed the node."""
        context = self.context
        plan = self._plan_here()
        if plan is None:
            return False
        context.best.offer(plan)
        if context.best.beats(proof.bound):
            self.close("plan", proof)
            return True
        return context.best.ties(proof.bound) and self._settle_tie(proof, "plan")

    def _plan_here(self) -> list[Number] | None:
        """Return the exact plan at a point with whole values, None if it is none after all.

        Where the point itself is a hair off, the divisible activities are solved again with the
        whole ones fixed, in doubles and, if need be, in rationals.
        """
        arithmetic, whole = self.context.arithmetic, self.context.problem.whole
        x = self.dictionary.activities()
        plan = arithmetic.guess_plan(x)
        if plan is not None or whole.all():
            return plan
        fixed = self.dictionary.copy()
        values = np.rint(x)
        fixed.set_bounds(whole.nonzero()[0].tolist(), values, values)
        stop = self.context.limits.out_of_time
        try:
            if fixed.reoptimise(stop=stop) is not Status.OPTIMAL:
                return None
            plan = arithmetic.guess_plan(np.where(whole, values, fixed.activities()))
        except np.linalg.LinAlgError:
            plan = None
        return plan if plan is not None else arithmetic.solve_divisible(x, stop)

    def _pin(self, proof: Proof) -> Split | None:
        """Go on from a whole point whose bound is a hair below its plan, or that is none.

        The node is split at a whole activity that is still free, so that the side with the point
        pins it.  Once all are pinned, cuts no longer matter: the relaxation over the divisible
        activities alone is settled in rationals.
        """
        bounds = self.bounds
        free = (self.context.problem.whole & (bounds.least < bounds.most)).nonzero()[0]
        if not len(free):
            return self._settle_pinned()
        x = self.dictionary.activities()
        column = free[np.abs(proof.reduced[free]).argmax()].item()
        value = round(x.item(column))
        up = value < bounds.most[column]
        self.keep_open(proof)
        return Split(column, value + 0.5 if up else value - 0.5, 1.0 - up, float(up))

    def _settle_pinned(self) -> Split | None:
        """Solve the node without its cuts, guess exact multipliers, and else go to rationals."""
        self._start_with(np.arange(self.context.record.rules))
        if self._reoptimise(math.inf) is Status.OPTIMAL:
            self._refactor()
            proof = self._cost_proof()
            if self._take_plan(proof) or self._settle_tie(proof, "beaten"):
                return None
        return self.solve_exactly()

    # ------------------------------------------------------------------ exact arithmetic

    def _settle_tie(self, proof: Proof, outcome: str) -> bool:
        """Close a node whose bound equals the best value, if exact multipliers show it."""
        context = self.context
        if (context.rows.shift[proof.rows] < 0).any():
            return False
        multipliers = context.arithmetic.guess_multipliers(proof.rows, proof.multipliers)
        if multipliers is None:
            multipliers = context.arithmetic.cost_multipliers(self.dictionary)
        if multipliers is None:
            return False
        bound = context.arithmetic.exact_bound(
            1, multipliers, self.bounds.least, self.bounds.most
        )
        if bound is None or not context.best.beats_exactly(bound):
            return False
        closure = context.record.exact_closure(1, multipliers, bound, self.bounds)
        self._finish(outcome, rounded_down(bound), closure)
        return True

    def _settle_empty(self) -> bool:
        """Close a node whose failing row shows in rationals that it holds no plan."""
        context, bounds = self.context, self.bounds
        found = context.arithmetic.row_multipliers(self.dictionary, self.dictionary.failing_row)
        for sign in (1, -1) if found is not None else ():
            multipliers = {i: sign * y for i, y in found.items()}
            proven = context.arithmetic.exact_bound(0, multipliers, bounds.least, bounds.most)
            if proven is not None and proven > 0:
                closure = context.record.exact_closure(0, multipliers, proven, bounds)
                self._finish("empty", math.inf, closure)
                return True
        return False

    def solve_exactly(self) -> Split | None:
        """Settle the node in rationals: closed, or the activity to branch on."""
        context, bounds, dictionary = self.context, self.bounds, self.dictionary
        answer = context.arithmetic.solve_node(
            dictionary.held_rows(), dictionary.basic.tolist(), bounds.least, bounds.most,
            context.limits.out_of_time,
        )  # fmt: skip
        if answer.status == "empty":
            proven = context.arithmetic.exact_bound(
                0, answer.multipliers, bounds.least, bounds.most
            )
            if proven is None or proven <= 0:
                raise AssertionError("an exact contradiction is positive")
            closure = context.record.exact_closure(0, answer.multipliers, proven, bounds)
            return self._finish("empty", math.inf, closure)
        if answer.value is None:
            raise NoLimit(answer.point)
        return self._exact_optimum(answer, answer.value)

    def _exact_optimum(self, answer: ExactAnswer, value: Fraction) -> Split | None:
        context = self.context
        closure = context.record.exact_closure(1, answer.multipliers, value, self.bounds)
        bound = rounded_down(value)
        if context.best.beats_exactly(value):
            return self._finish("beaten", bound, closure)
        whole = context.problem.whole
        for j, x in enumerate(answer.point):
            if whole[j] and x.denominator != 1:
                if bound > self.bound:
                    self.bound, self._exact_closure = bound, closure
                self._finish("split", self.bound, self.closure or closure)
                return Split(j, _inside(x), 0.0, 0.0)
        plan = [lowest(x) for x in answer.point]
        if not context.arithmetic.fits(plan):
            raise AssertionError("an exact optimum of the relaxation meets every rule")
        context.best.offer(plan)
        return self._finish("plan", bound, closure)

    # ------------------------------------------------------------------ closing

    def close(self, outcome: str, proof: Proof) -> None:
        """Record that the node is closed by a proof."""
        bound = proof.bound if proof.weight else math.inf
        self._finish(outcome, bound, self._closure(proof))

    def leave(self) -> None:
        """Record what is known of a node whose work was broken off."""
        waiting = self.context.record.tree.nodes[self.number]["outcome"] == "waiting"
        if waiting and self.closure is not None:
            self._finish("waiting", self.bound, self.closure)

    def keep_open(self, proof: Proof) -> None:
        """Record that the node is split, with the best that is proven of it."""
        self._finish("split", self.bound, self.closure or self._closure(proof))

    def _closure(self, proof: Proof) -> dict[str, Any]:
        """Return the record of a proof, made once."""
        if self._closure_of is None or self._closure_of[0] is not proof:
            self._closure_of = (proof, self.context.record.closure(proof, self.bounds))
        return self._closure_of[1]

    def _finish(self, outcome: str, bound: float, closure: dict[str, Any]) -> None:
        basis = None if self.dictionary is None else self.dictionary.basis()
        self.context.record.close(self.number, outcome, bound, self.steps, closure, basis)


def rounded_down(value: Fraction) -> float:
    """Return a double that is at most an exact value."""
    nearest = in_doubles(value)
    return nearest if Fraction(nearest) <= value else math.nextafter(nearest, -math.inf)


def _inside(value: Fraction) -> float:
    """Return a double strictly between the whole numbers around an exact fractional value."""
    floor = math.floor(value)
    near = float(value)
    return near if floor < near < floor + 1 else floor + 0.5
