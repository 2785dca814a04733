"""The kept tree taken up again: a standing plan's search carried over to a changed sheet."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import TYPE_CHECKING

from intplan.planning.standing import Progress, StandingPlan, confirmed, solve
from intplan.sheet import Sheet
from intplan.sheet.changes import SIDES, Changes
from intplan.sheet.checking import check_rule
from intplan.sheet.numbers import Number

if TYPE_CHECKING:
    from intplan.search.carry import Places
    from intplan.sheet.problem import Problem


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
    from intplan.search.limits import Limits
    from intplan.search.restart import restart

    if not restartable(standing) or not changes.sheet.problem().exact_cost:
        return solve(
            changes.sheet, gap=gap, time_limit=time_limit, node_limit=node_limit,
            progress=progress, stop=stop,
        )  # fmt: skip
    result = restart(
        changes.sheet.problem(),
        standing.kept,
        _places(standing, changes),
        Limits(time_limit, node_limit, stop, progress),
        gap=gap,
        plan=_plan(standing, changes.sheet),
        at=at,
    )
    return StandingPlan(changes.sheet, confirmed(changes.sheet, result))


def extended(
    standing: StandingPlan,
    sheet: Sheet,
    *,
    time_limit: float | None = None,
    node_limit: int | None = None,
    stop: Callable[[], bool] | None = None,
) -> StandingPlan:
    """Solve a sheet that asks for another aim within what a standing plan's sheet allows.

    What was closed by its bound is closed by the rule that holds the earlier aim now; ties and
    near-ties that this rule lets through are opened again.

    Parameters
    ----------
    standing : what was solved before
    sheet : its columns are those of the problem of `standing.sheet`, bends as activities, and then
        others; its rules are those, then one that holds that sheet's aim, and then others
    """
    import numpy as np

    from intplan.search.carry import Places
    from intplan.search.limits import Limits
    from intplan.search.restart import restart

    problem = standing.sheet.problem()
    if not restartable(standing) or standing.proven_sheet is not standing.sheet:
        return solve(sheet, time_limit=time_limit, node_limit=node_limit, stop=stop)
    rules, columns = len(problem.rows), len(problem.cost)
    aim_rule = rules if problem.exact_cost else None
    places = Places(np.arange(rules), np.arange(columns), aim_rule, same_aim=False)
    limits = Limits(time_limit, node_limit, stop, None)
    result = restart(sheet.problem(), standing.kept, places, limits, at="leaves")
    return StandingPlan(sheet, confirmed(sheet, result))


def freed(
    standing: StandingPlan | None,
    sheet: Sheet,
    problem: Problem,
    plan: Sequence[Number],
    *,
    time_limit: float | None = None,
    node_limit: int | None = None,
    stop: Callable[[], bool] | None = None,
) -> StandingPlan:
    """Solve a sheet in which rules may bend at a price, from a tree that shows that they must.

    What showed that a node of that tree is empty bounds what bending costs there.

    Parameters
    ----------
    standing : infeasible, of a sheet with the same activities; None to start from nothing
    sheet : has the rules of that sheet by their names and, after the activities, others that let
        some of the rules bend; its aim is what these cost
    problem : of `sheet`, or one that allows more
    plan : the first in hand if it fits `problem`
    """
    from intplan.search.engine import Search
    from intplan.search.limits import Limits
    from intplan.search.restart import restart

    limits = Limits(time_limit, node_limit, stop, None)
    if standing is None:
        search = Search(problem, Fraction(0), limits)
        if search.context.arithmetic.fits(plan):
            search.best.offer(list(plan))
        result = search.run()
    else:
        places = _places_of_bending(standing.proven_sheet, sheet)
        result = restart(problem, standing.kept, places, limits, plan=plan, at="leaves")
    return StandingPlan(sheet, confirmed(sheet, result))


def _places_of_bending(before: Sheet, now: Sheet) -> Places:
    """Return where rules and columns are in a sheet that has other bends."""
    import numpy as np

    from intplan.search.carry import Places

    columns = np.full(len(before.problem().cost), -1)
    columns[: len(before.activities)] = np.arange(len(before.activities))
    rules = np.array([now.rule_index[rule.name] for rule in before.rules], int)
    return Places(rules, columns, same_aim=False)


def restartable(standing: StandingPlan) -> bool:
    """Tell whether a standing plan's tree is one that can be taken up with its sheet's aim."""
    result = standing.answer
    return not result.any_plan and result.outcome != "unbounded"


def _places(standing: StandingPlan, changes: Changes) -> Places:
    """Return where the rules and columns of a standing plan's tree are in a changed sheet."""
    before, index = standing.proven_sheet, standing.sheet.rule_index
    found = [changes.places[index[rule.name]] for rule in before.rules]
    return _numbered(before, changes.sheet, found)


def _numbered(before: Sheet, now: Sheet, found: list[int | None]) -> Places:
    """Return places in numbers, those of the bends with their rules."""
    import numpy as np

    from intplan.search.carry import Places

    columns = list(range(len(before.activities)))
    bends = {(bend.rule, bend.side): bend.column for bend in now.problem().bends}
    for bend in before.problem().bends:
        place = found[bend.rule]
        columns.append(-1 if place is None else bends.get((place, bend.side), -1))
    rules = [-1 if place is None else place for place in found]
    return Places(np.array(rules, int), np.array(columns, int))


def _plan(standing: StandingPlan, sheet: Sheet) -> list[Number] | None:
    """Return the standing plan with the bends it needs in a changed sheet; None without one."""
    if standing.answer.plan is None:
        return None
    amounts = standing.answer.plan[: len(sheet.activities)]
    bends: list[Number] = []
    for bend in sheet.problem().bends:
        rule = sheet.rules[bend.rule]
        check = check_rule(rule, sheet.rule_value(rule, amounts))
        bends.append(check.bend if check.side == bend.side else 0)
    return [*amounts, *bends]


def support(standing: StandingPlan) -> set[str]:
    """Return the rules and bounds (``loaf most``) that the kept tree rests on.

    What closures use by no more than a rounding error counts as well, so that all else is known to
    be of no account.
    """
    from intplan.search.support import used_by_tree

    sheet = standing.proven_sheet
    rules, bounds = used_by_tree(standing.kept)
    names = {sheet.rules[i].name for i in rules}
    activities = len(sheet.activities)
    bends = sheet.problem().bends
    for column, side in bounds:
        if column < activities:
            names.add(f"{sheet.activities[column].name} {SIDES[side]}")
        else:
            names.add(sheet.rules[bends[column - activities].rule].name)
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
    standing : an infeasible standing plan of a sheet with the same activities, whose tree is taken
        up; None to start from nothing
    sheet : the rules to meet
    """
    from intplan.search.engine import find_plan
    from intplan.search.limits import Limits
    from intplan.search.restart import restart_for_any_plan

    limits = Limits(time_limit, node_limit, stop, None)
    if standing is None or standing.outcome != "infeasible":
        result = find_plan(sheet.problem(), limits)
    else:
        places = _places_by_name(standing.proven_sheet, sheet)
        result = restart_for_any_plan(sheet.problem(), standing.kept, places, limits)
    result.bound = None  # soft rules may be bent further than the plan needs
    return StandingPlan(sheet, confirmed(sheet, result))


def _places_by_name(before: Sheet, now: Sheet) -> Places:
    """Return where the rules and columns of a sheet are in one that shares rules with it."""
    found: list[int | None] = []
    for rule in before.rules:
        place = now.rule_index.get(rule.name)
        same = place is not None and now.rules[place].terms == rule.terms
        found.append(place if same else None)
    return _numbered(before, now, found)
