"""Staying close: of all plans that are good enough, the one that moves least from the old plan.

Of several that move as little the one with the best value is taken, by a second search.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import count

from intplan.errors import IntplanError
from intplan.planning.answers import amounts_of, with_amounts
from intplan.planning.budget import LAST_NODES, Budget
from intplan.planning.standing import StandingPlan, solve
from intplan.sheet import Activity, Aim, Rule, Sheet
from intplan.sheet.model import bends_of
from intplan.sheet.numbers import Number, NumberError, exact, lowest

ENDED = {"time": "the time limit", "nodes": "the node limit", "interrupt": "an interrupt"}


@dataclass(frozen=True)
class Closeness:
    """What staying close came to.

    Attributes
    ----------
    asked : the percentage of the best value by which the plan may miss it
    done : the plan is proven to be the nearest among those; of several the one with the best
        value, unless a limit came before that was known
    reason : why not, in words; empty where it is done
    distance : the sum of what the activities of the plan differ from the old plan, in their units;
        None where one of the plans is missing
    distance_before : the same for the best plan that was found first
    value : the aim of the plan
    """

    asked: Number
    done: bool
    reason: str
    distance: Number | None
    distance_before: Number | None
    value: Number | None


def read_percent(asked: object) -> Number:
    """Return how far from the best value a plan may be, in percent.

    Raises
    ------
    IntplanError
        It is no percentage from 0 to 100.
    """
    if not isinstance(asked, bool):
        try:
            percent = exact(asked)
        except NumberError:
            percent = -1
        if 0 <= percent <= 100:
            return percent
    raise IntplanError("staying close takes a percentage from 0 to 100, such as 1", "stay_close")


def closest(
    before: StandingPlan, after: StandingPlan, percent: Number, budget: Budget
) -> tuple[StandingPlan, Closeness]:
    """Put the nearest plan that is good enough in the place of the best one.

    Parameters
    ----------
    before : has the plan to stay close to
    after : the answer for the changed sheet, of the same activities
    percent : from `read_percent`
    budget : the limits, shared with what came before

    Returns
    -------
    answer, closeness : the answer as it was where nothing nearer is known
    """
    old, best = amounts_of(before), amounts_of(after)
    value = None if best is None else after.exact_value
    if old is None or best is None:
        reason = "there is no plan to stay close to" if old is None else "there is no new plan"
        return after, Closeness(percent, False, reason, None, None, value)
    first = distance(old, best)
    if after.outcome != "optimal" or value is None:
        reason = "it is not proven which value is the best"
        return after, Closeness(percent, False, reason, first, first, value)
    allowed = _allowed(after.sheet, value, percent)
    check = after.sheet.check(old)
    if check.good and _within(after.sheet, check.value, allowed):
        answer = after if not first else _moved(after, old)
        return answer, Closeness(percent, True, "", 0, first, answer.exact_value)
    from intplan.planning import restart

    extended = _extended(after.sheet, old, allowed, first)
    found = budget.run(restart.extended, after, extended, most_nodes=budget.last_nodes)
    nearest = amounts_of(found)
    reason = "" if found.outcome == "optimal" else _why(found.ended_by, budget)
    way = first if nearest is None else distance(old, nearest[: len(old)])
    if nearest is None or way >= first:
        return after, Closeness(percent, not reason, reason, first, first, value)
    answer = _moved(after, nearest[: len(old)])
    if not reason and answer.exact_value != value and budget.ended_by() is None:
        best_near = _best_within(after.sheet, extended, way)
        found = budget.run(solve, best_near, most_nodes=budget.last_nodes)
        nearest = amounts_of(found)
        if nearest is not None:
            answer = max(answer, _moved(after, nearest[: len(old)]), key=_goodness)
    if not _within(after.sheet, answer.exact_value, allowed):
        raise AssertionError("the nearest plan is worse than it may be")
    return answer, Closeness(percent, not reason, reason, way, first, answer.exact_value)


def distance(old: Sequence[Number], new: Sequence[Number]) -> Number:
    """Return the sum of the differences of two plans, each in the units of its activity."""
    return lowest(sum(abs(a - b) for a, b in zip(old, new, strict=True)))


def _goodness(answer: StandingPlan) -> Number:
    """Return a number that is the larger the better the value is."""
    value = answer.exact_value
    return value if answer.sheet.aim.sense == "maximize" else -value


def _why(ended_by: str | None, budget: Budget) -> str:
    """Say in words why the nearest plan is not known."""
    if ended_by == "nodes" and budget.last_nodes is not None:
        return f"it was given up after {LAST_NODES:,} nodes"
    return f"{ENDED.get(ended_by, 'the range of the search')} came first"


def _allowed(sheet: Sheet, best: Number, percent: Number) -> Number:
    """Return the worst value of the aim that is good enough."""
    room = abs(best) * Fraction(percent) / 100
    return lowest(best - room if sheet.aim.sense == "maximize" else best + room)


def _within(sheet: Sheet, value: Number | None, allowed: Number) -> bool:
    if value is None:
        return False
    return value >= allowed if sheet.aim.sense == "maximize" else value <= allowed


def _moved(answer: StandingPlan, amounts: Sequence[Number]) -> StandingPlan:
    """Return the proven answer with another good plan, called optimal only if it is."""
    check = answer.sheet.check(amounts)
    if not check.good:
        raise AssertionError(f"the nearest plan breaks {check.broken[0].name}")
    best = answer.exact_value == check.value
    return with_amounts(answer, amounts, check, outcome="optimal" if best else "within_gap")


def _extended(sheet: Sheet, old: Sequence[Number], allowed: Number, known: Number) -> Sheet:
    """Return a sheet whose best plan is the nearest to `old` among those that are good enough.

    Its activities are those of the sheet, then the bends of soft rules, then how far each
    activity goes above and below its old amount: no further than `known`, at which distance there
    is such a plan. Its rules are those of the sheet, then one that holds the aim with the prices
    of bends, then a balance for each activity.
    """
    unused = _unused_names(sheet)
    activities, rules = list(sheet.activities), list(sheet.rules)
    aim, worse = list(sheet.aim.terms), -1 if sheet.aim.sense == "maximize" else 1
    for bend in bends_of(sheet):
        rule = sheet.rules[bend.rule]
        activities.append(Activity(next(unused), most=rule.give_most, whole=False))
        terms = (*rules[bend.rule].terms, (bend.column, 1 if bend.side == "least" else -1))
        rules[bend.rule] = replace(rule, terms=terms, give=None, give_most=None, text="")
        aim.append((bend.column, worse * rule.give))
    if aim:
        limit = lowest(allowed - sheet.aim.constant)
        least, most = (limit, None) if worse < 0 else (None, limit)
        rules.append(Rule(next(unused), tuple(aim), least, most))
    ways = []
    for j, (activity, amount) in enumerate(zip(sheet.activities, old, strict=True)):
        up, down = len(activities), len(activities) + 1
        whole = activity.whole
        above = below = math.floor(known) if whole else None
        if activity.most is not None:
            above = max(lowest(activity.most - amount), 0)
        if activity.least is not None:
            below = max(lowest(amount - activity.least), 0)
        activities.append(Activity(next(unused), most=above, whole=whole))
        activities.append(Activity(next(unused), most=below, whole=whole))
        rules.append(Rule(next(unused), ((j, 1), (up, -1), (down, 1)), amount, amount))
        ways += [(up, 1), (down, 1)]
    return replace(
        sheet, aim=Aim("minimize", tuple(ways)), activities=tuple(activities), rules=tuple(rules)
    )


def _best_within(sheet: Sheet, extended: Sheet, way: Number) -> Sheet:
    """Return the extended sheet whose best plan is the best one no further than `way`."""
    near = Rule(next(_unused_names(extended)), extended.aim.terms, None, way)
    aim = Aim(sheet.aim.sense or "minimize", extended.rules[len(sheet.rules)].terms)
    return replace(extended, aim=aim, rules=(*extended.rules, near))


def _unused_names(sheet: Sheet) -> Iterator[str]:
    """Yield names that neither the activities nor the rules of a sheet have."""
    for number in count():
        name = f"way[{number}]"
        if name not in sheet.activity_index and name not in sheet.rule_index:
            yield name
