"""The root: limits rounded, bounds derived from the rules, the first basis, the cuts."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import numpy as np

from intplan.relaxation.dictionary import Dictionary, Multipliers
from intplan.relaxation.start import cold_start
from intplan.search.context import Context
from intplan.search.cuts.separation import Separator
from intplan.search.develop import NodeWork, Split
from intplan.search.evidence import Proof
from intplan.search.result import Added
from intplan.search.tightening import Bounds
from intplan.sheet.problem import ExactRow, Number, Problem

CUT_ROUNDS = 12
STALL = 0.02  # a round that adds less than this share of the gain so far is a stalled one
PATIENCE = 2  # stalled rounds in a row that end the cutting
LARGE = 2.0**53  # whole numbers beyond this may be rounded as doubles
SLACK_CUT = 1e-6  # room at which a cut no longer binds


class RootWork(NodeWork):
    """The root being solved; closes at once where the sheet contradicts itself.

    Attributes
    ----------
    free : the bounds that hold for every plan, not only for better ones than the best so far: cuts
        are measured from them at first, so that they do not lean on the cut-off
    rounds : rounds of cuts at most
    """

    rounds = CUT_ROUNDS

    def __init__(self, context: Context) -> None:
        problem = context.problem
        columns = len(problem.cost)
        bounds = Bounds(*_outward(problem), np.zeros((2, columns), bool))
        super().__init__(context, 0, -math.inf, None, None, bounds)

    def prepare(self) -> bool:
        """Tighten what the sheet states; False if that already shows that no plan exists.

        Raises
        ------
        NoDualBasis
            Where the aim improves for ever along a direction, as far as doubles can tell.
        """
        self.context.prover.set_box(self.bounds.least, self.bounds.most)
        if not (self.round_limits() and self._derive_bounds()):
            return False
        self.context.prover.set_box(self.bounds.least, self.bounds.most)
        self.free = self.bounds.copy()
        try:
            self.start_from_nothing()
        except np.linalg.LinAlgError:
            self._start_from_slacks()
        return True

    def start_from_nothing(self) -> None:
        """Make the first dictionary."""
        context = self.context
        self.dictionary = cold_start(
            context.rows, context.problem.cost, self.bounds.least, self.bounds.most,
            stop=context.limits.out_of_time,
        )  # fmt: skip

    def _start_from_slacks(self) -> None:
        """Make the first dictionary where the better basis is singular in doubles.

        It need not be dual feasible; what it leads to is believed only with a proof.
        """
        context = self.context
        self.dictionary = Dictionary.at_slack_basis(
            context.rows, context.problem.cost, self.bounds.least, self.bounds.most
        )

    def start_from_basis(self, basis: list[int]) -> None:
        """Make the first dictionary at a basis that exact arithmetic found dual feasible."""
        context = self.context
        inside = set(basis)
        variables = range(len(context.problem.cost) + context.rows.count)
        outside = np.array([v for v in variables if v not in inside], int)
        self.dictionary = Dictionary.at_basis(
            context.rows, context.problem.cost, self.bounds.least, self.bounds.most,
            (np.array(basis, int), outside),
        )  # fmt: skip

    def develop_root(self) -> Split | None:
        """Solve the root with rounds of cuts; None once it is closed, else where to branch."""
        opened = self._open_relaxation()
        if not isinstance(opened, Proof):
            return opened
        split = self.cut(opened)
        return split if split is not None or self.closed else self.develop()

    def _open_relaxation(self) -> Proof | Split | None:
        """Solve the relaxation and tighten by a first plan, where rounding finds one."""
        proof = self.relax()
        if not isinstance(proof, Proof):
            return proof
        if self.try_rounding() and len(self.context.prover.open):
            self._bound_by_cost()
        self.context.prover.set_box(self.bounds.least, self.bounds.most)
        return proof

    def _bound_by_cost(self) -> None:
        """Bound activities by what a better plan may cost at all: no multipliers, own bounds."""
        nothing = Multipliers(np.arange(0), np.zeros(0))
        proof = self.context.prover.prove(1, nothing, self.bounds.least, self.bounds.most)
        self.tighten(proof)

    # ------------------------------------------------------------------ cuts

    def cut(self, proof: Proof) -> Split | None:
        """Add cuts while they lift the bound; a split if that had to be settled in rationals.

        Bounds are tightened by reduced costs only once cuts stall: at a bound that leans on the
        cut-off, the relaxation's point is no corner of the plans, and few cuts take it away.

        Parameters
        ----------
        proof : of the relaxation's bound
        """
        split = self._cut_in_rounds(proof)
        self.note_held_cuts()
        return split

    def note_held_cuts(self) -> None:
        """Record the cuts that the root's relaxation holds."""
        rules = self.context.record.rules
        self.context.record.tree.nodes[0]["added"] = tuple(
            Added("cut", int(i) - rules, float(self.context.rows.least[i]))
            for i in self.dictionary.held_rows()
            if i >= rules
        )

    def _cut_in_rounds(self, proof: Proof | Split | None) -> Split | None:
        separator = Separator(self.context, self.free)
        started, stalled, tightened = self.dictionary.value, 0, False
        for _ in range(self.rounds):
            rows = self.fractional_rows()
            if not len(rows) or self.context.limits.out_of_time():
                return None
            before = self.dictionary.value
            numbers = separator.separate(self.dictionary, rows)
            if len(numbers):
                self.dictionary.add_rows(numbers)
                proof = self.relax()
                if not isinstance(proof, Proof):
                    return proof
                self._drop_slack_cuts()
                self.try_rounding()
                if self.context.best.beats(proof.bound):
                    return self.close("beaten", proof)
                if tightened:
                    self.tighten(proof)
            gain = self.dictionary.value - before
            total = self.dictionary.value - started
            stalled = stalled + 1 if gain < STALL * max(total, 1e-9) else 0
            if stalled < PATIENCE and len(numbers):
                continue
            if tightened or not self.tighten(proof):
                return None
            proof = self.relax()
            if not isinstance(proof, Proof):
                return proof
            separator.bounds, stalled, tightened = self.bounds, 0, True
        return None

    def _drop_slack_cuts(self) -> None:
        """Let cuts that do not bind leave the dictionary."""
        dictionary = self.dictionary
        first = dictionary.columns + self.context.record.rules
        places = ((dictionary.basic >= first) & (dictionary.rooms[:, 0] > SLACK_CUT)).nonzero()[0]
        if len(places):
            dictionary.drop_rows(places)

    # ------------------------------------------------------------------ tightening

    def round_limits(self) -> bool:
        """Round bounds and limits to what whole activities can reach; False if that closes it."""
        return self._round_bounds() and self._round_rules()

    def _round_bounds(self) -> bool:
        """Round the bounds of whole activities inward."""
        problem, bounds = self.context.problem, self.bounds
        for j in problem.whole.nonzero()[0].tolist():
            low, high = problem.exact_least[j], problem.exact_most[j]
            for side, limit, inward in ((0, low, math.ceil), (1, high, math.floor)):
                if limit is not None and limit.denominator != 1:
                    value = _outward_double(inward(limit), side)
                    if (value < limit) if side else (value > limit):
                        bounds.set(j, side, value, False)
                        self.steps.append(
                            {"by": "whole", "changes": [(j, side, value)], "leans": False}
                        )
            if bounds.least[j] > bounds.most[j]:
                self._finish("empty", math.inf, {"column": j, "leans": False})
                return False
        return True

    def _round_rules(self) -> bool:
        """Round the limits of rules over whole activities to what their value can reach.

        The coefficients are coprime integers, so the value is whole: a limit between two whole
        numbers moves inward, and an equality with one is refused (parity).
        """
        context = self.context
        whole = context.problem.whole
        for number, row in enumerate(context.problem.rows):
            if not row.columns or not whole[list(row.columns)].all():
                low, high = row.least, row.most
                if not row.columns and ((low or 0) > 0 or (high or 0) < 0):
                    self._finish("empty", math.inf, {"row": number, "leans": False})
                    return False
                continue
            low = None if row.least is None else math.ceil(row.least)
            high = None if row.most is None else math.floor(row.most)
            if (low, high) != (row.least, row.most):
                self.steps.append(
                    {"by": "whole", "row": number, "changes": [(number, 0, low), (number, 1, high)],
                     "leans": False}
                )  # fmt: skip
                self._set_limits(number, row, low, high)
            if low is not None and high is not None and low > high:
                self._finish("empty", math.inf, {"row": number, "leans": False})
                return False
        return True

    def _set_limits(self, number: int, row: ExactRow, low: int | None, high: int | None) -> None:
        unit = Fraction(1, 1 << row.shift)
        context = self.context
        exact = tuple(None if v is None else v * unit for v in (low, high))
        context.arithmetic.limits[number] = exact
        if exact[0] is not None:
            context.rows.least[number] = context.propagator.row_least[number] = float(exact[0])
        if exact[1] is not None:
            context.rows.most[number] = context.propagator.row_most[number] = float(exact[1])

    def _derive_bounds(self) -> bool:
        """Propagate every rule, divisible activities included."""
        return self._propagate(first=True)

    def _propagate(self, **how: Any) -> bool:
        """Propagate rules as `Propagator.run` is told to; False if that closes the root."""
        touched, failed = self.context.propagator.run(self.bounds, [], self.steps, **how)
        if failed is not None and self._refuted_by_rule(failed):
            return False
        for j in touched:
            if self.bounds.least[j] > self.bounds.most[j]:
                self._finish("empty", math.inf, {"column": j, "leans": False})
                return False
        return True


def _outward(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """Return the bounds in doubles, those of large whole numbers moved outward where rounded."""
    least, most = problem.least.copy(), problem.most.copy()
    for side, (bounds, written) in enumerate(
        ((least, problem.exact_least), (most, problem.exact_most))
    ):
        large = problem.whole & np.isfinite(bounds) & (np.abs(bounds) > LARGE)
        for j in large.nonzero()[0].tolist():
            bounds[j] = _outward_double(written[j], side)
    return least, most


def _outward_double(value: Number, side: int) -> float:
    """Return the nearest double that is no tighter than a bound of a side."""
    nearest = float(value)
    if side:
        return nearest if nearest >= value else math.nextafter(nearest, math.inf)
    return nearest if nearest <= value else math.nextafter(nearest, -math.inf)
