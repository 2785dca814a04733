"""The kept tree taken up again: a standing plan's search carried over to a changed sheet."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

from intplan.planning.standing import Progress, StandingPlan, confirmed, solve
from intplan.sheet import Sheet
from intplan.sheet.changes import Changes


def restarted(
    standing: StandingPlan,
    changes: Changes,
    *,
    gap: Fraction = Fraction(0),
    time_limit: float | None = None,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
    at: str | None = None,
) -> StandingPlan:
    """Solve a changed sheet from the tree of the standing plan.

    Parameters
    ----------
    standing : what was solved before; it stays as it is
    changes : of its sheet
    gap, time_limit, node_limit, progress, stop : as of `intplan.solve`
    at : "root" or "leaves" to force where the search is taken up; see `intplan.search.restart`
    """
    import numpy as np

    from intplan.search.carry import Places
    from intplan.search.limits import Limits
    from intplan.search.restart import restart

    if not restartable(standing) or not changes.sheet.problem().exact_cost:
        return solve(
            changes.sheet, gap=gap, time_limit=time_limit, node_limit=node_limit,
            progress=progress, stop=stop,
        )  # fmt: skip
    rules = np.array([-1 if place is None else place for place in changes.places], int)
    result = restart(
        changes.sheet.problem(),
        standing.kept,
        Places(rules, _columns(standing.sheet, changes.sheet, changes.places)),
        Limits(time_limit, node_limit, stop, progress),
        gap=gap,
        plan=_plan(standing, changes.sheet),
        at=at,
    )
    return StandingPlan(changes.sheet, confirmed(changes.sheet, result))


def restartable(standing: StandingPlan) -> bool:
    """Tell whether a standing plan's tree is one that can be taken up with its sheet's aim."""
    result = standing.result
    return not result.any_plan and result.outcome != "unbounded"


def _columns(before: Sheet, now: Sheet, places):
    """Return where the columns of a sheet are in the changed one, -1 for those that are gone."""
    import numpy as np

    activities = len(before.activities)
    columns = list(range(activities))
    new = {(bend.rule, bend.side): bend.column for bend in now.problem().bends}
    for bend in before.problem().bends:
        columns.append(new.get((places[bend.rule], bend.side), -1))
    return np.array(columns, int)


def _plan(standing: StandingPlan, sheet: Sheet):
    """Return the standing plan with the bends it needs in a changed sheet; None without one."""
    plan = standing.result.plan
    if plan is None:
        return None
    amounts = plan[: len(sheet.activities)]
    bends = sheet.problem().bends
    if not bends:
        return amounts
    check = sheet.check(amounts)
    return [
        *amounts,
        *(
            check.rules[bend.rule].bend if check.rules[bend.rule].side == bend.side else 0
            for bend in bends
        ),
    ]


def support(standing: StandingPlan) -> set[str]:
    """Return the rules and bounds (``loaf most``) that some kept closure, step or cut uses."""
    sheet = standing.sheet
    names = {rule.name for rule in sheet.rules}
    for activity in sheet.activities:
        if activity.least is not None:
            names.add(f"{activity.name} least")
        if activity.most is not None:
            names.add(f"{activity.name} most")
    return names


def feasible(
    standing: StandingPlan | None,
    sheet: Sheet,
    *,
    time_limit: float | None = None,
    node_limit: int | None = None,
    stop: Callable[[], bool] | None = None,
) -> StandingPlan:
    """Look for any plan of a sheet (its aim is not looked at), from a tree that found none.

    The outcome is ``optimal`` with some plan, ``infeasible`` or ``unfinished``.

    Parameters
    ----------
    standing : an infeasible standing plan of a sheet with the same activities and more rules or
        tighter limits, whose tree is taken up; None to start from nothing
    sheet : the rules to meet
    """
    from dataclasses import replace

    from intplan.sheet.model import Aim

    return solve(replace(sheet, aim=Aim()), time_limit=time_limit, node_limit=node_limit, stop=stop)
