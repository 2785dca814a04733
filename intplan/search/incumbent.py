"""The best plan so far and what a node must show to be closed by it."""

from __future__ import annotations

import math
from fractions import Fraction

from intplan.errors import IntplanError
from intplan.sheet.problem import Number, Problem


class Incumbent:
    """The best plan so far, in the engine's cost.

    Attributes
    ----------
    plan, value : the plan and its exact cost; None before the first
    target : a plan worth finding costs at most this (exact); a node whose bound passes it is
        beaten.  With an aim of whole activities only, one step of the aim below `value`.
    threshold : a double that is at least `target`
    least_target : the least target so far; no node was closed, nor any part of one cut away, but
        for costs above it
    cutoff : where the dual simplex method stops; so far past the target that the safe bound
        passes it as well
    """

    def __init__(self, problem: Problem, gap: Fraction) -> None:
        self.problem = problem
        self.gap = gap
        self.step = problem.cost_step or Fraction(0)
        self.plan: list[Number] | None = None
        self.value: Fraction | None = None
        self.target: Fraction | None = None
        self.least_target: Fraction | None = None
        self.threshold = math.inf
        self.cutoff = math.inf

    def offer(self, plan: list[Number]) -> bool:
        """Take a checked plan if it is better; tell whether it was."""
        value = self.problem.exact_cost_of(plan)
        if self.value is not None and value >= self.value:
            return False
        self.plan, self.value = plan, value
        allowance = Fraction(0)
        if self.gap:
            aim = abs(Fraction(self.problem.aim_from_cost(value)))
            allowance = aim * self.gap / 100 * abs(self.problem.cost_factor)
        self.target = value - max(self.step, allowance)
        if self.least_target is None or self.target < self.least_target:
            self.least_target = self.target
        size = 1.0 + abs(in_doubles(value))
        self.threshold = math.nextafter(float(self.target), math.inf)
        margin = max(1e-11 * size, 1e-6 * float(self.step))
        self.cutoff = self.threshold + margin
        return True

    @property
    def ceiling(self) -> float:
        """The cost, in doubles, below which a plan is worth checking exactly."""
        if self.value is None:
            return math.inf
        value = float(self.value)
        return value - max(0.5 * float(self.step), 1e-12 * (1.0 + abs(value)))

    def beats(self, bound: float) -> bool:
        """Tell whether a safe bound closes a node."""
        return bound > self.threshold

    def ties(self, bound: float) -> bool:
        """Tell whether a bound is so near the best value that only exact arithmetic can tell."""
        if self.value is None or self.step:
            return False
        value = float(self.value)
        return bound > self.threshold - 1e-9 * (1.0 + abs(value))

    def beats_exactly(self, bound: Fraction) -> bool:
        """Tell whether an exact bound closes a node: nothing in it improves on the plan."""
        if self.target is None:
            return False
        return bound > self.target or (not self.step and bound >= self.target)

    @property
    def next_cost(self) -> Fraction:
        """The least cost above every target so far: all below it was searched."""
        assert self.least_target is not None
        if not self.step:
            return self.least_target
        return (math.floor(self.least_target / self.step) + 1) * self.step

    def rounded_up(self, bound: float | Fraction) -> Fraction:
        """Return a bound in the engine's cost, lifted to the next cost a plan can have."""
        exact = Fraction(bound)
        return math.ceil(exact / self.step) * self.step if self.step else exact


def in_doubles(cost: Fraction) -> float:
    """Return the double nearest to a cost.

    Raises
    ------
    IntplanError
        There is none.
    """
    try:
        return float(cost)
    except OverflowError:
        raise IntplanError(
            "what a plan comes to here passes 1.8e308, the largest number the search can take;"
            " larger units make it smaller"
        ) from None
