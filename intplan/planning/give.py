"""How far rules must bend before a plan exists: each alone, and the least of all together."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from itertools import count
from typing import TYPE_CHECKING, Any, NamedTuple

from intplan.errors import IntplanError, excerpt, unknown
from intplan.planning.budget import Budget
from intplan.planning.directions import any_plan, widest
from intplan.planning.standing import Progress, StandingPlan, solve
from intplan.sheet import Activity, Aim, Rule, Sheet
from intplan.sheet.changes import read_names
from intplan.sheet.checking import check_rule
from intplan.sheet.numbers import Number, lowest

if TYPE_CHECKING:
    from intplan.sheet.problem import Problem


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


def bendable_rules(
    sheet: Sheet, may_bend: Iterable[str] | None, waived: Sequence[str] = ()
) -> tuple[str, ...]:
    """Return the rules that may bend, in sheet order; every rule where `may_bend` is None.

    Parameters
    ----------
    sheet : its rules are the ones there are
    may_bend : the names of those that may bend
    waived : what a change has taken out of the sheet

    Raises
    ------
    IntplanError
        A name is no text, or none of a rule.
    """
    if may_bend is None:
        return tuple(rule.name for rule in sheet.rules)
    wanted = set(read_names(may_bend, "may_bend"))
    for name in sorted(wanted - sheet.rule_index.keys()):
        if name in waived:
            raise IntplanError(f"{excerpt(name)} is waived, so that it cannot bend", "may_bend")
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
    *,
    proof: StandingPlan | None = None,
    known: Sequence[Sequence[Number]] = (),
) -> Give:
    """Find the least give that leaves a plan, and what each clashing rule would have to give.

    Parameters
    ----------
    sheet : has no plan
    clashing : a clash of it; no rule outside of it can free the plan alone
    may_bend : the rules that may bend, from `bendable_rules`
    budget : the limits, shared with what came before
    progress : told of the search under the bent limits
    proof : shows that the sheet has no plan, for the same activities; its tree is taken up
    known : plans in whole units, of the activities, that meet most of the sheet

    Notes
    -----
    The rules that may bend become soft without limit at their weights, and the prices are the
    only aim: the elastic form of a problem (J. W. Chinneck, Feasibility and Infeasibility in
    Optimization: Algorithms and Computational Methods, Springer, 2008). What a soft rule may bend
    anyway costs nothing here. No rule alone gives less than what all of them do together.
    """
    work = _Bending(sheet, proof, known, budget)
    weighted = {r.name: _weight(r) for r in sheet.rules if r.name in may_bend}
    blamed = tuple(name for name in clashing if name in weighted)
    least = plan = None
    proven = not blamed
    if blamed and budget.ended_by() is None:
        with budget.halved(), budget.ending():
            least, proven = work.least(may_bend, blamed)
        if proven and least is not None:
            work.floor = _total(sheet, least)
    if least is not None:
        with budget.halved(), budget.ending():
            plan = budget.run(solve, bent(sheet, least), progress=progress)
    alone: dict[str, Bending | None] = {}
    with budget.ending():
        for name in blamed:
            if budget.ended_by() is not None:
                proven = False
                break
            found = work.least((name,), (name,), budget.fair_nodes)
            if found.proven:
                alone[name] = found.bendings[0] if found.bendings else None
            proven = proven and found.proven
    return Give(
        alone=alone,
        least=least,
        total=None if least is None else _total(sheet, least),
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


def _weight(rule: Rule) -> Number:
    return 1 if rule.give is None else rule.give


class _Found(NamedTuple):
    """The least bendings that are known, None if none are, and whether that is proven."""

    bendings: tuple[Bending, ...] | None
    proven: bool


class _Bending:
    """Finds the least bendings.

    Parameters
    ----------
    sheet, proof, known, budget : as for `find_give`

    Attributes
    ----------
    floor : no bendings that leave a plan have a weighted sum below it
    """

    def __init__(
        self,
        sheet: Sheet,
        proof: StandingPlan | None,
        known: Sequence[Sequence[Number]],
        budget: Budget,
    ) -> None:
        self.sheet = sheet
        self.wide = tuple(map(widest, sheet.rules))
        self.proof = proof
        self.budget = budget
        self.floor: Number = 0
        bounds = replace(sheet, aim=Aim(), rules=())
        self.known = [
            (amounts, _bendings(sheet, self.wide, amounts))
            for amounts in known
            if bounds.check(amounts).good
        ]

    @cached_property
    def branched(self) -> StandingPlan | None:
        """The proof if it has branches: the basis and cuts of a root are no help to find a plan."""
        proof = self.proof
        return None if proof is None or len(proof.result.tree) == 1 else proof

    def least(
        self, bending: Sequence[str], blamed: Sequence[str], most_nodes: int | None = None
    ) -> _Found:
        """Find the least bendings of these rules that leave a plan.

        First comes the question whether the others leave one at all. The search for the least
        could not tell: without a limit to the bends it would go on for ever.
        """
        amounts, settled = self.some_plan(bending, most_nodes)
        if amounts is None:
            return _Found(None, settled)
        first = _bendings(self.sheet, self.wide, amounts)
        total = _total(self.sheet, first)
        if total <= self.floor:
            return _Found(first, True)
        if self.budget.ended_by() is not None:
            return _Found(first, False)
        elastic = _elastic(self.sheet, bending, blamed, total)
        freed = self.budget.run(
            _solve_elastic, elastic, self.proof, amounts, most_nodes=most_nodes
        )
        if freed.answer.plan is None:
            return _Found(first, False)
        found = _bendings(self.sheet, self.wide, freed.answer.plan)
        least = min((first, found), key=lambda bendings: _total(self.sheet, bendings))
        return _Found(least, _total(self.sheet, least) == freed.exact_bound)

    def some_plan(
        self, bending: Sequence[str], most_nodes: int | None
    ) -> tuple[Sequence[Number] | None, bool]:
        """Return a plan that meets all other rules, and whether it is settled if there is one."""
        may = set(bending)
        known = [
            (_total(self.sheet, bendings), amounts)
            for amounts, bendings in self.known
            if may.issuperset(bending.name for bending in bendings)
        ]
        if known:
            return min(known, key=lambda pair: pair[0])[1], True
        others = tuple(rule for rule in self.wide if rule.name not in may)
        asked = replace(self.sheet, aim=Aim(), rules=others)
        some = any_plan(asked, self.budget, self.branched, most_nodes)
        return some.amounts, some.amounts is not None or some.search.outcome == "infeasible"


def _bendings(
    sheet: Sheet, wide: Sequence[Rule], amounts: Sequence[Number]
) -> tuple[Bending, ...]:
    """Return how far each rule must bend for a plan."""
    checks = ((rule.name, check_rule(rule, sheet.rule_value(rule, amounts))) for rule in wide)
    return tuple(Bending(n, check.side, -check.spare) for n, check in checks if check.side)


def _total(sheet: Sheet, bendings: Iterable[Bending]) -> Number:
    """Return the weighted sum of bendings."""
    rules, index = sheet.rules, sheet.rule_index
    return lowest(sum(b.amount * _weight(rules[index[b.name]]) for b in bendings))


def _solve_elastic(
    sheet: Sheet, proof: StandingPlan | None, amounts: Sequence[Number], **limits: Any
) -> StandingPlan:
    """Solve an elastic sheet.

    The bends that are whole by themselves once the activities are, at the least that these need,
    go into the search as divisible, so that it branches on activities alone. That the aim comes
    in steps still holds for the plans that matter.

    Parameters
    ----------
    sheet : from `_elastic`
    proof : as for `find_give`
    amounts : of the activities: a plan that meets the rules that cannot bend
    """
    from intplan.planning.restart import freed

    return freed(proof, sheet, _relaxed(sheet), _bent_plan(sheet, amounts), **limits)


def _relaxed(sheet: Sheet) -> Problem:
    """Return the problem of an elastic sheet with divisible bends."""
    problem = sheet.problem()
    whole = problem.whole.copy()
    whole[[column for column, _ in sheet.aim.terms]] = False
    return replace(problem, whole=whole)


def _bent_plan(sheet: Sheet, amounts: Sequence[Number]) -> list[Number]:
    """Return the amounts with the bends that they need in an elastic sheet."""
    plan = [*amounts, *[0] * (len(sheet.activities) - len(amounts))]
    for rule in sheet.rules:
        value = sheet.rule_value(rule, plan)
        bends = [(column, size) for column, size in rule.terms if column >= len(amounts)]
        if len(bends) == len(rule.terms):  # that some rule must bend
            continue
        for column, size in bends:
            limit = rule.least if size > 0 else rule.most
            plan[column] = lowest(max(Fraction(limit - value) / size, Fraction(0)))
    return plan


def _elastic(
    sheet: Sheet, bending: Sequence[str], blamed: Sequence[str], enough: Number
) -> Sheet:
    """Return a sheet in which these rules bend, with no aim but the prices.

    Its activities are those of the sheet, then the bends. A rule in whole activities misses its
    limits in whole steps, and so it bends. Where all do, bounds of the aim can be rounded, and no
    bend costs more than what is known to be enough for all. One of the blamed rules must bend;
    where all of these take steps, that is a rule, from which the search learns much.
    """
    unused = _unused_names(sheet)
    activities, rules = list(sheet.activities), list(map(widest, sheet.rules))
    places = [sheet.rule_index[name] for name in bending]
    steps = {i: _step(sheet, rules[i]) for i in places}
    stepped = None not in steps.values()
    prices: list[tuple[int, Number]] = []
    must: list[tuple[int, Number]] = []
    for i in places:
        size = steps[i] or 1
        price = lowest(size * _weight(sheet.rules[i]))
        most = math.floor(Fraction(enough) / price) if stepped else None
        for limit, sign in ((rules[i].least, 1), (rules[i].most, -1)):
            if limit is None:
                continue
            column = len(activities)
            activities.append(Activity(next(unused), most=most, whole=steps[i] is not None))
            rules[i] = replace(rules[i], terms=(*rules[i].terms, (column, sign * size)), text="")
            prices.append((column, price))
            if rules[i].name in blamed:
                must.append((column, 1))
    if must and all(activities[column].whole for column, _ in must):
        rules.append(Rule(next(unused), tuple(must), 1, None))
    return replace(
        sheet,
        aim=Aim("minimize", tuple(prices)),
        activities=tuple(activities),
        rules=tuple(rules),
    )


def _step(sheet: Sheet, rule: Rule) -> Number | None:
    """Return the step in which a rule can miss its limits; None with divisible activities in it."""
    if not all(sheet.activities[j].whole for j, _ in rule.terms):
        return None
    limits = [limit for limit in (rule.least, rule.most) if limit is not None]
    sizes = [*(c for _, c in rule.terms), *limits]
    below = math.lcm(*(size.denominator for size in sizes))
    return lowest(Fraction(math.gcd(*(int(size * below) for size in sizes)), below))


def _unused_names(sheet: Sheet) -> Iterator[str]:
    """Yield names that neither the activities nor the rules of a sheet have."""
    for number in count():
        name = f"bend[{number}]"
        if name not in sheet.activity_index and name not in sheet.rule_index:
            yield name
