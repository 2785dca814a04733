"""What the planner wrote: exact numbers, algebra, reading and checking.

`Problem`, which needs NumPy, is loaded when it is first asked for.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from intplan.sheet.model import Activity, Aim, Rule, Sheet

if TYPE_CHECKING:
    from intplan.sheet.problem import Problem

__all__ = ["Activity", "Aim", "Problem", "Rule", "Sheet"]


def __getattr__(name: str) -> Any:
    if name == "Problem":
        from intplan.sheet.problem import Problem

        return Problem
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
