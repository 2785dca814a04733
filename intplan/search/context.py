"""What every part of one search shares."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from intplan.relaxation.rows import RowStore
from intplan.search.arithmetic import Arithmetic
from intplan.search.branching import PseudoCosts
from intplan.search.evidence import Prover
from intplan.search.incumbent import Incumbent
from intplan.search.limits import Limits
from intplan.search.record import Recorder
from intplan.search.rounding import Rounder
from intplan.search.tightening import Bounds, Propagator
from intplan.sheet.problem import Problem

DIVE_AFTER = 12  # nodes between the root's dive and the next one


@dataclass
class Context:
    """The parts of one search, and its counts."""

    problem: Problem
    rows: RowStore
    limits: Limits
    best: Incumbent
    arithmetic: Arithmetic
    prover: Prover
    propagator: Propagator
    rounder: Rounder
    record: Recorder
    costs: PseudoCosts
    nodes: int = 0
    pivots: int = 0
    next_dive: int = 1

    def round_to_plan(self, x: np.ndarray, bounds: Bounds) -> bool:
        """Look for a plan near a point of the relaxation; tell whether a better one was found."""
        point = self.rounder.round(x, bounds, self.best.ceiling)
        if point is None:
            return False
        plan = self.arithmetic.guess_plan(point)
        return plan is not None and self.best.offer(plan)

    def time_to_dive(self) -> bool:
        """Tell whether to dive for a plan at this node: at the root, then ever more rarely."""
        if self.nodes < self.next_dive:
            return False
        self.next_dive = 3 * self.nodes + DIVE_AFTER
        return True
