"""The planner's questions: the standing plan, kept with the tree that proved it."""

from intplan.planning.compare import Comparison, NodeComparison
from intplan.planning.standing import SearchNumbers, StandingPlan, solve
from intplan.planning.store import load_standing

__all__ = [
    "Comparison",
    "NodeComparison",
    "SearchNumbers",
    "StandingPlan",
    "load_standing",
    "solve",
]
