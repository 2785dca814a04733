"""The planner's questions: the standing plan, and what a change of rules does to it.

What re-planning needs is loaded when it is first used; a mere solve does not wait for it.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from intplan.planning.compare import Comparison, NodeComparison
from intplan.planning.standing import SearchNumbers, StandingPlan, solve
from intplan.planning.store import load_standing

if TYPE_CHECKING:
    from intplan.planning.clash import Clash, Verdict
    from intplan.planning.closeness import Closeness
    from intplan.planning.give import Bending, Give
    from intplan.planning.replan import Replan
    from intplan.planning.worth import Worth, WorthTable

__all__ = [
    "Bending",
    "Clash",
    "Closeness",
    "Comparison",
    "Give",
    "NodeComparison",
    "Replan",
    "SearchNumbers",
    "StandingPlan",
    "Verdict",
    "Worth",
    "WorthTable",
    "load_standing",
    "solve",
]

_HOMES = {
    "Bending": "give",
    "Clash": "clash",
    "Closeness": "closeness",
    "Give": "give",
    "Replan": "replan",
    "Verdict": "clash",
    "Worth": "worth",
    "WorthTable": "worth",
}


def __getattr__(name: str) -> Any:
    """Load a class of re-planning from its module on first use."""
    home = _HOMES.get(name)
    if home is None:
        raise AttributeError(f"module 'intplan.planning' has no attribute {name!r}")
    value = getattr(import_module(f"intplan.planning.{home}"), name)
    globals()[name] = value
    return value
