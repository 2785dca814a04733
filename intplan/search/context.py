"""What every part of one search shares."""

from __future__ import annotations

from dataclasses import dataclass

from intplan.relaxation.rows import RowStore
from intplan.search.arithmetic import Arithmetic
from intplan.search.branching import PseudoCosts
from intplan.search.evidence import Prover
from intplan.search.incumbent import Incumbent
from intplan.search.limits import Limits
from intplan.search.record import Recorder
from intplan.search.rounding import Rounder
from intplan.search.tightening import Propagator
from intplan.sheet.problem import Problem


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
