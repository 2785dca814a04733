"""How far rules must bend before a plan exists: each alone, and the least of all together."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import count
from typing import NamedTuple

from intplan.errors import IntplanError, excerpt, unknown
from intplan.planning.budget import Budget
from intplan.planning.standing import Progress, StandingPlan, solve
from intplan.sheet import Activity, Aim, Rule, Sheet
from intplan.sheet.checking import check_rule
from intplan.sheet.numbers import Number, lowest


class Bending(NamedTuple):
    """How far one rule passes one of its limits.

    Attributes
    ----------
    name : the rule
    side : ``"least"`` or ``"most"``, the limit that is passed
    amount : by how much, in the units in which the rule is written; of a soft rule beyond what it
        may bend anyway
    """

    name: str
    side: str
    amount: Number


@dataclass(frozen=True)
class Give:
    """What would free a clash.

    Attributes
    ----------
    alone : each rule of the clash that may bend, by itself: how far it must; None where it frees
        nothing by itself. A rule for which a limit came first is not there
    least : the bendings of the least weighted sum that leave a plan, in sheet order; None where
        bending these rules frees nothing, or none is known
    total : the sum of amount times weight over `least`; None without it
    weighted : the weight of each rule that may bend: the price of its give, else 1
    plan : the answer for the limits so bent, with the aim; None without `least`
    may_bend : the rules that were allowed to bend, in sheet order
    proven : `alone` is complete and `least` is the least; of `plan` its own outcome tells
    """

    alone: dict[str, Bending | None]
    least: tuple[Bending, ...] | None
    total: Number | None
    weighted: dict[str, Number]
    plan: StandingPlan | None
    may_bend: tuple[str, ...]
    proven: bool


def bendable_rules(sheet: Sheet, may_bend: Iterable[str] | None) -> tuple[str, ...]:
    """Return the rules that may bend, in sheet order; every rule where `may_bend` is None.

    Raises
    ------
    IntplanError
        A name is none of a rule.
    """
    if may_bend is None:
        return tuple(rule.name for rule in sheet.rules)
    wanted = {may_bend} if isinstance(may_bend, str) else set(may_bend)
    for name in sorted(wanted - sheet.rule_index.keys()):
        activity, _, side = name.rpartition(" ")
        if side in ("least", "most") and activity in sheet.activity_index:
            raise IntplanError(f"{excerpt(name)} is a bound, and only rules may bend", "may_bend")
        raise IntplanError(unknown("rule", name, sheet.rule_index), "may_bend")
    return tuple(rule.name for rule in sheet.rules if rule.name in wanted)


def find_give(
    sheet: Sheet,
    clashing: Sequence[str],
    may_bend: tuple[str, ...],
    budget: Budget,
    progress: Progress | None = None,
) -> Give:
    """Find the least give that leaves a plan, and what each clashing rule would have to give.

    Parameters
    ----------
    sheet : has no plan
    clashing : a clash of it; no rule outside of it can free the plan alone
    may_bend : the rules that may bend, from `bendable_rules`
    budget : the limits, shared with what came before
    progress : told of the search under the bent limits

    Notes
    -----
    The rules that may bend become soft without limit at their weights, and the prices are the
    only aim: the elastic form of a problem (J. W. Chinneck, Feasibility and Infeasibility in
    Optimization: Algorithms and Computational Methods, Springer, 2008). What a soft rule may bend
    anyway costs nothing here.
    """
    weighted = {r.name: _weight(r) for r in sheet.rules if r.name in may_bend}
    blamed = tuple(name for name in clashing if name in weighted)
    least = plan = None
    proven = not blamed
    if blamed and budget.ended_by() is None:
        with budget.halved():
            least, proven = _least_bendings(sheet, may_bend, blamed, budget)
    if least is not None:
        with budget.halved():
            plan = budget.run(solve, bent(sheet, least), progress=progress)
    alone: dict[str, Bending | None] = {}
    for name in blamed:
        if budget.ended_by() is not None:
            proven = False
            break
        bendings, settled = _least_bendings(sheet, (name,), (name,), budget)
        if settled:
            alone[name] = bendings[0] if bendings else None
        proven = proven and settled
    return Give(
        alone=alone,
        least=least,
        total=None if least is None else lowest(sum(b.amount * weighted[b.name] for b in least)),
        weighted=weighted,
        plan=plan,
        may_bend=may_bend,
        proven=proven,
    )


def bent(sheet: Sheet, bendings: Iterable[Bending]) -> Sheet:
    """Return the sheet with its limits moved by the bendings.

    A soft rule keeps its limits and its price, and may bend further.
    """
    rules = list(sheet.rules)
    for name, side, amount in bendings:
        i = sheet.rule_index[name]
        rule = rules[i]
        if rule.give is not None:
            if rule.give_most is not None:
                rules[i] = replace(rule, give_most=lowest(rule.give_most + amount))
        elif side == "most" and rule.most is not None:
            rules[i] = replace(rule, most=lowest(rule.most + amount), text="")
        elif rule.least is not None:
            rules[i] = replace(rule, least=lowest(rule.least - amount), text="")
    return replace(sheet, rules=tuple(rules))


def widest(rule: Rule) -> Rule:
    """Return a soft rule as a firm one at the limits to which it may bend; others as they are."""
    if rule.give is None:
        return rule
    least = most = None
    if rule.give_most is not None:
        least = None if rule.least is None else lowest(rule.least - rule.give_most)
        most = None if rule.most is None else lowest(rule.most + rule.give_most)
    return replace(rule, least=least, most=most, give=None, give_most=None, text="")


def _weight(rule: Rule) -> Number:
    return 1 if rule.give is None else rule.give


def _least_bendings(
    sheet: Sheet, bending: Sequence[str], blamed: Sequence[str], budget: Budget
) -> tuple[tuple[Bending, ...] | None, bool]:
    """Return the least bendings of these rules that leave a plan (None: there are none).

    The second entry tells whether that is proven.
    """
    freed = budget.run(_solve_elastic, _elastic(sheet, bending, blamed))
    settled = freed.outcome in ("optimal", "infeasible")
    if freed.result.plan is None:
        return None, settled
    found = []
    for rule in map(widest, sheet.rules):
        check = check_rule(rule, sheet.rule_value(rule, freed.result.plan))
        if check.side is not None:
            found.append(Bending(rule.name, check.side, -check.spare))
    return tuple(found), settled


def _solve_elastic(sheet: Sheet, **limits: object) -> StandingPlan:
    """Solve an elastic sheet."""
    return solve(sheet, **limits)  # type: ignore[arg-type]


def _elastic(sheet: Sheet, bending: Sequence[str], blamed: Sequence[str]) -> Sheet:
    """Return a sheet in which these rules bend without limit, with no aim but the prices.

    Its activities are those of the sheet, then the bends. A rule that only takes whole steps has
    bends in whole steps, so that bounds of the aim can be rounded. One of the blamed rules must
    bend; where all of these take steps, that is a rule, from which the search learns much.
    """
    unused = _unused_names(sheet)
    activities, rules = list(sheet.activities), list(map(widest, sheet.rules))
    prices: list[tuple[int, Number]] = []
    steps: list[tuple[int, Number]] = []
    for name in bending:
        i = sheet.rule_index[name]
        step = _step(sheet, rules[i])
        for limit, sign in ((rules[i].least, 1), (rules[i].most, -1)):
            if limit is None:
                continue
            column, size = len(activities), step or 1
            activities.append(Activity(next(unused), whole=step is not None))
            rules[i] = replace(rules[i], terms=(*rules[i].terms, (column, sign * size)), text="")
            prices.append((column, lowest(size * _weight(sheet.rules[i]))))
            if name in blamed:
                steps.append((column, 1))
    if steps and all(activities[column].whole for column, _ in steps):
        rules.append(Rule(next(unused), tuple(steps), 1, None))
    return replace(
        sheet,
        aim=Aim("minimize", tuple(prices)),
        activities=tuple(activities),
        rules=tuple(rules),
    )


def _step(sheet: Sheet, rule: Rule) -> Number | None:
    """Return the step of a rule in whole activities whose limits are whole steps, else None."""
    if not rule.terms or not all(sheet.activities[j].whole for j, _ in rule.terms):
        return None
    below = math.lcm(*(c.denominator for _, c in rule.terms))
    step = Fraction(math.gcd(*(int(c * below) for _, c in rule.terms)), below)
    limits = (limit for limit in (rule.least, rule.most) if limit is not None)
    if any((limit / step).denominator != 1 for limit in limits):
        return None
    return lowest(step)


def _unused_names(sheet: Sheet) -> Iterator[str]:
    """Yield names that neither the activities nor the rules of a sheet have."""
    for number in count():
        name = f"bend[{number}]"
        if name not in sheet.activity_index and name not in sheet.rule_index:
            yield name
