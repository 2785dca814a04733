"""Amounts put into the answer of a search, with their bends and their exact value."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from intplan.planning.standing import StandingPlan, least_bends
from intplan.sheet.numbers import Number

if TYPE_CHECKING:
    from intplan.sheet.checking import CheckResult


def amounts_of(standing: StandingPlan) -> list[Number] | None:
    """Return the amounts of the activities in order; None without a plan that means anything.

    Where the aim has no limit, the plan that shows that some plan exists is nothing to keep to.
    """
    if standing.answer.plan is None or standing.outcome == "unbounded":
        return None
    return standing.answer.plan[: len(standing.sheet.activities)]


def with_amounts(
    standing: StandingPlan, amounts: Sequence[Number], check: CheckResult, **changed: Any
) -> StandingPlan:
    """Return the answer with another plan.

    Parameters
    ----------
    standing : the answer of a search of its sheet
    amounts : one an activity
    check : of these amounts, which must be good
    changed : further fields of the result
    """
    plan = [*amounts, *least_bends(standing.sheet, check)]
    result = replace(standing.result, plan=plan, value=check.value, **changed)
    return StandingPlan(standing.sheet, result)
