"""Re-planning: what a change of rules does to a standing plan."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from typing import Any

from intplan.planning.answers import amounts_of, with_amounts
from intplan.planning.budget import Budget
from intplan.planning.clash import Clash, find_clash
from intplan.planning.closeness import Closeness, closest, read_percent
from intplan.planning.give import Give, bendable_rules
from intplan.planning.numbers import nearest
from intplan.planning.standing import Progress, StandingPlan, exact_percent
from intplan.sheet import Sheet
from intplan.sheet.changes import Changes, change_sheet
from intplan.sheet.checking import check_rule
from intplan.sheet.numbers import Number, lowest


@dataclass(frozen=True, eq=False)
class Replan:
    """What a change of rules did to a standing plan.

    Attributes
    ----------
    changes : the changes, and the sheet that came of them
    before : the standing plan as it was
    after : the answer for the changed sheet
    effect : ``stands`` (the plan is unchanged; the outcome of `after` says what is proven of it),
        ``moved``, ``impossible``, ``unbounded``, or ``undecided`` where a limit came first
    found : the clash, where it is impossible
    closeness : what staying close came to, where it was asked for
    """

    changes: Changes
    before: StandingPlan
    after: StandingPlan
    effect: str
    found: Clash | None = None
    closeness: Closeness | None = None

    @property
    def exact_cost(self) -> Number | None:
        """How much worse the aim got, negative if it got better; None without both values.

        None as well where it is undecided what the best value is now.
        """
        pair = amounts_of(self.before), amounts_of(self.after)
        if self.effect == "undecided" or None in pair:
            return None
        before, after = self.before.exact_value, self.after.exact_value
        maximize = self.after.sheet.aim.sense == "maximize"
        return lowest(before - after if maximize else after - before)

    @property
    def cost(self) -> int | float | None:
        """The same as an int or the nearest double."""
        return None if self.exact_cost is None else nearest(self.exact_cost)

    @cached_property
    def exact_moves(self) -> dict[str, tuple[Number, Number]]:
        """The activities whose amounts differ, each with the old amount and the new one.

        Empty where there was no plan, or there is none now.
        """
        before, after = amounts_of(self.before), amounts_of(self.after)
        if before is None or after is None:
            return {}
        triples = zip(self.after.sheet.activities, before, after, strict=True)
        return {activity.name: (old, new) for activity, old, new in triples if old != new}

    @cached_property
    def moves(self) -> dict[str, tuple[int | float, int | float]]:
        """The same as ints or the nearest doubles."""
        return {n: (nearest(old), nearest(new)) for n, (old, new) in self.exact_moves.items()}

    @cached_property
    def at_limit(self) -> tuple[str, ...]:
        """The rules that are at or past a limit now and were not before, in sheet order.

        Empty where there was no plan, or there is none now.
        """
        if amounts_of(self.before) is None or amounts_of(self.after) is None:
            return ()
        before = set(_full_rules(self.before))
        return tuple(name for name in _full_rules(self.after) if name not in before)

    @property
    def clash(self) -> tuple[str, ...] | None:
        """The rules and bounds that no plan can meet together; None where none was looked for."""
        return None if self.found is None else self.found.names

    @property
    def needs_whole(self) -> bool | None:
        """Whether fractions could meet the clash; None without a clash, or if it is not known."""
        return None if self.found is None else self.found.needs_whole

    @property
    def give(self) -> Give | None:
        """How far rules would have to bend to free the clash."""
        return None if self.found is None else self.found.give


def replan(
    standing: StandingPlan,
    *,
    add: Mapping[str, Any] | None = None,
    waive: Iterable[str] = (),
    set: Mapping[str, Any] | None = None,
    freeze: Iterable[str] = (),
    stay_close: object = None,
    may_bend: Iterable[str] | None = None,
    time_limit: float | None = None,
    gap: float | Fraction = 0,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Replan:
    """Tell what a change of rules does to a standing plan, which itself stays as it is.

    Parameters
    ----------
    standing : the plan, kept with its tree
    add, waive, set, freeze : the changes, as `intplan.sheet.changes.change_sheet` takes them;
        waiving comes before setting, setting before adding
    stay_close : a percentage, or None: among all plans whose value is within that share of the
        best value, the one nearest to the standing plan is taken
    may_bend : where no plan is left, the rules whose give is looked for; every rule by default
    time_limit, gap, node_limit, progress, stop : as for `intplan.solve`, for all searches together

    Returns
    -------
    Replan

    Raises
    ------
    IntplanError
        A change, a name or a limit makes no sense.

    Notes
    -----
    A plan that meets everything that was added or tightened stays as good as it was proven to be,
    if nothing was loosened: no other plan became better, and none came in. No search is needed.
    """
    percent = None if stay_close is None else read_percent(stay_close)
    budget = Budget(time_limit, node_limit, stop)
    share = exact_percent(gap)
    plan = standing.exact_plan if freeze else None
    changes = change_sheet(standing.sheet, add=add, waive=waive, set=set, freeze=freeze, plan=plan)
    bendable = None
    if may_bend is not None:
        bendable = bendable_rules(changes.sheet, may_bend, changes.waived)
    after = _answer(standing, changes, share, budget, progress)
    closeness = None
    if percent is not None:
        after, closeness = closest(standing, after, percent, budget)
    effect = _effect(standing, after)
    found = None
    if effect == "impossible":
        bendable = bendable_rules(changes.sheet, None) if bendable is None else bendable
        old = amounts_of(standing)
        found = find_clash(
            changes.sheet,
            after,
            bendable,
            budget,
            last=changes.tightened,
            known=() if old is None else (old,),
            progress=progress,
        )
    return Replan(changes, standing, after, effect, found, closeness)


def _answer(
    standing: StandingPlan,
    changes: Changes,
    gap: Fraction,
    budget: Budget,
    progress: Progress | None,
) -> StandingPlan:
    """Return the answer for the changed sheet, by a search only where one is needed."""
    if not changes.loosened:
        amounts = amounts_of(standing)
        if standing.outcome == "infeasible" or (
            amounts is not None and stands(changes, standing.sheet, amounts)
        ):
            return standing.carried(changes)
    from intplan.planning.restart import restarted

    after = budget.run(restarted, standing, changes, gap=gap, progress=progress)
    return _keep(standing, after)


def stands(changes: Changes, before: Sheet, amounts: Sequence[Number]) -> bool:
    """Tell whether a plan meets all that was tightened, without bending more for it.

    Only the tightened rules and bounds are looked at, exactly.

    Parameters
    ----------
    changes : loosen nothing
    before : the sheet whose rules the plan meets
    amounts : one an activity
    """
    sheet = changes.sheet
    for rule in sheet.rules[len(before.rules) :]:
        if check_rule(rule, sheet.rule_value(rule, amounts)).side is not None:
            return False
    for name in changes.tightened:
        i = before.rule_index.get(name)
        if i is not None:
            # No rule was waived, so that each is where it was.
            check = check_rule(sheet.rules[i], sheet.rule_value(sheet.rules[i], amounts))
            # A soft rule that was bent as far before, past a limit that stays, costs no more now.
            if check.side and check_rule(before.rules[i], check.value).spare != check.spare:
                return False
        elif " " in name:
            owner, _, side = name.rpartition(" ")
            j = before.activity_index[owner]
            limit, amount = getattr(sheet.activities[j], side), amounts[j]
            if amount < limit if side == "least" else amount > limit:
                return False
    return True


def _keep(standing: StandingPlan, after: StandingPlan) -> StandingPlan:
    """Keep the old plan where it is as good as the one that the search gave."""
    old = amounts_of(standing)
    if old is None or after.outcome == "unbounded" or old == amounts_of(after):
        return after
    check = after.sheet.check(old)
    if not check.good:
        return after
    if after.outcome == "infeasible":
        raise AssertionError("the old plan fits a sheet that is said to have none")
    if after.exact_value is not None:
        sign = -1 if after.sheet.aim.sense == "maximize" else 1
        if sign * check.value > sign * after.exact_value:
            return after
        if after.outcome == "optimal" and check.value != after.exact_value:
            raise AssertionError("the old plan is better than what is called optimal")
    return with_amounts(after, old, check)


def _effect(before: StandingPlan, after: StandingPlan) -> str:
    """Return the word for what happened."""
    if after.outcome in ("infeasible", "unbounded"):
        return "impossible" if after.outcome == "infeasible" else "unbounded"
    new = amounts_of(after)
    if new is not None and new == amounts_of(before):
        return "stands"
    return "undecided" if after.outcome == "unfinished" else "moved"


def _full_rules(standing: StandingPlan) -> list[str]:
    """Return the rules that have nothing to spare."""
    rules = standing.check.rules if standing.check is not None else ()
    return [rule.name for rule in rules if rule.spare is not None and rule.spare <= 0]
