"""The root: limits rounded, bounds derived from the rules, the first basis, the cuts."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.start import NoDualBasis, cold_start
from intplan.search.context import Context
from intplan.search.develop import NodeWork, Split
from intplan.search.tightening import Bounds
from intplan.sheet.problem import ExactRow


class RootWork(NodeWork):
    """The root being solved; closes at once where the sheet contradicts itself."""

    def __init__(self, context: Context) -> None:
        problem = context.problem
        columns = len(problem.cost)
        bounds = Bounds(
            problem.least.copy(), problem.most.copy(), np.zeros((2, columns), bool)
        )
        steps: list[dict[str, Any]] = []
        super().__init__(context, 0, -math.inf, None, bounds, steps)

    def prepare(self) -> bool:
        """Tighten what the sheet states; False if that already shows that no plan exists.

        Raises
        ------
        NoDualBasis
            Where the aim improves for ever along a direction, as far as doubles can tell.
        """
        self.context.prover.set_box(self.bounds.least, self.bounds.most)
        if not (self._round_bounds() and self._round_rules() and self._derive_bounds()):
            return False
        self.context.prover.set_box(self.bounds.least, self.bounds.most)
        self.start_from_nothing()
        return True

    def start_from_nothing(self) -> None:
        """Make the first dictionary."""
        context = self.context
        self.dictionary = cold_start(
            context.rows, context.problem.cost, self.bounds.least, self.bounds.most
        )

    def start_from_basis(self, basis: list[int]) -> None:
        """Make the first dictionary at a basis that exact arithmetic found dual feasible."""
        context = self.context
        self.dictionary = Dictionary.at_slack_basis(
            context.rows, context.problem.cost, self.bounds.least, self.bounds.most
        )
        inside = set(basis)
        variables = range(len(context.problem.cost) + context.rows.count)
        self.dictionary.adopt_basis(
            np.array(basis, int), np.array([v for v in variables if v not in inside], int)
        )

    def develop_root(self) -> Split | None:
        return self.develop()

    # ------------------------------------------------------------------ tightening

    def _round_bounds(self) -> bool:
        """Round the bounds of whole activities inward."""
        problem, bounds = self.context.problem, self.bounds
        for j in problem.whole.nonzero()[0].tolist():
            low, high = problem.exact_least[j], problem.exact_most[j]
            for side, limit, inward in ((0, low, math.ceil), (1, high, math.floor)):
                if limit is not None and limit.denominator != 1:
                    value = float(inward(limit))
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
        touched, failed = self.context.propagator.run(self.bounds, [], self.steps, first=True)
        if failed is not None and self._refuted_by_rule(failed):
            return False
        for j in touched:
            if self.bounds.least[j] > self.bounds.most[j]:
                self._finish("empty", math.inf, {"column": j, "leans": False})
                return False
        return True
