"""Which rules and bounds no plan can meet together: a set of which none can be left out."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterable, Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

from intplan.errors import IntplanError
from intplan.planning.budget import Budget
from intplan.planning.directions import any_plan
from intplan.planning.give import Give, bendable_rules, find_give
from intplan.planning.standing import Progress, StandingPlan, least_bends
from intplan.sheet import Activity, Aim, Sheet
from intplan.sheet.checking import check_rule
from intplan.sheet.numbers import Number

SIDES = ("least", "most")
FIRST_NODES = 100  # nodes of a first test; one that takes more waits until the others are done
ENDED = {
    "time": "the time limit came first",
    "nodes": "the node limit came first",
    "interrupt": "it was interrupted",
    "range": "the search would have to go beyond its range",
}


@dataclass(frozen=True)
class Clash:
    """Rules and bounds that no plan can meet together.

    Attributes
    ----------
    sheet : the sheet in which it was found
    names : the rules in sheet order, then the bounds (``loaf least``) in that of the activities;
        a soft rule counts at the limits to which it may bend
    needs_whole : whether the same could be met in fractions; None if a limit came first
    smallest : whether no member can be left out: there is a witness for each
    witnesses : for a member, exact amounts in whole units that meet all the others
    give : how far rules would have to bend for a plan to exist
    ended_by : what left it open whether a member can be left out: ``time``, ``nodes``,
        ``interrupt`` or ``range``; None where it is the smallest
    given_up : tests that took long were left open although no limit was asked for
    """

    sheet: Sheet
    names: tuple[str, ...]
    needs_whole: bool | None
    smallest: bool
    witnesses: dict[str, dict[str, Number]]
    give: Give | None
    ended_by: str | None = None
    given_up: bool = False


class Verdict(NamedTuple):
    """Whether a sheet has a plan, and why not.

    Attributes
    ----------
    outcome : ``"feasible"``, ``"infeasible"``, or ``"undecided"`` where a limit came first
    standing : the answer that shows it: any plan, or the tree that refutes all of them
    clash : where there is no plan
    """

    outcome: str
    standing: StandingPlan
    clash: Clash | None


class UndecidedError(IntplanError):
    """A limit ended a question before anything was known."""

    exit_status = 3


def clash(
    subject: Sheet | StandingPlan,
    *,
    may_bend: Iterable[str] | None = None,
    time_limit: float | None = None,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Clash | None:
    """Tell which rules and bounds of a sheet clash, and how far rules must bend to free it.

    Parameters
    ----------
    subject : the sheet, or a standing plan of it
    may_bend : the rules whose give is looked for; every rule by default
    time_limit, node_limit, progress, stop : as for `intplan.solve`, for all searches together

    Returns
    -------
    Clash or None
        None: there is a plan.

    Raises
    ------
    IntplanError
        A name or a limit makes no sense; with exit status 3 where a limit came before it was
        known whether there is a plan.

    Examples
    --------
    >>> from intplan import Sheet
    >>> sheet = Sheet.parse('''
    ... [activities]
    ... loaf = {}
    ... bun = {}
    ... [rules]
    ... oven = "2*loaf + bun <= 10"
    ... school = "loaf >= 4"
    ... inn = "bun >= 5"
    ... ''')
    >>> found = clash(sheet)
    >>> found.names, found.needs_whole, found.give.total
    (('oven', 'school', 'inn'), False, 2)
    """
    verdict = settle(
        subject,
        may_bend=may_bend,
        time_limit=time_limit,
        node_limit=node_limit,
        progress=progress,
        stop=stop,
    )
    if verdict.outcome == "undecided":
        why = ENDED.get(verdict.standing.ended_by, "a limit came first")
        raise UndecidedError(f"undecided whether there is a plan: {why}")
    return verdict.clash


def settle(
    subject: Sheet | StandingPlan,
    *,
    may_bend: Iterable[str] | None = None,
    time_limit: float | None = None,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> Verdict:
    """Do the work of `clash`, and say of an undecided sheet that it is undecided.

    Parameters are those of `clash`.

    Raises
    ------
    IntplanError
        A name or a limit makes no sense.
    """
    budget = Budget(time_limit, node_limit, stop)
    sheet = subject.sheet if isinstance(subject, StandingPlan) else subject
    if not isinstance(sheet, Sheet):
        raise TypeError(f"expected a Sheet or a StandingPlan, not {type(sheet).__name__}")
    bendable = bendable_rules(sheet, may_bend)
    if isinstance(subject, StandingPlan) and (
        subject.exact_plan is not None or subject.outcome == "infeasible"
    ):
        standing = subject
    else:
        standing = _any_plan_of(sheet, budget)
    if standing.exact_plan is not None:
        return Verdict("feasible", standing, None)
    if standing.outcome != "infeasible":
        return Verdict("undecided", standing, None)
    found = find_clash(sheet, standing, bendable, budget, progress=progress)
    return Verdict("infeasible", standing, found)


def _any_plan_of(sheet: Sheet, budget: Budget) -> StandingPlan:
    """Return the answer that shows some plan of a sheet, or that it has none."""
    found = any_plan(sheet, budget)
    if found.amounts is None or found.search.sheet is sheet:
        return found.search
    check = sheet.check(found.amounts)
    if not check.good:
        raise AssertionError(f"the plan of the bounded form breaks {check.broken[0].name}")
    bends = least_bends(sheet, check)
    result = replace(
        found.search.result, plan=[*found.amounts, *bends], value=check.value, bound=check.value
    )
    return StandingPlan(sheet, result)


def find_clash(
    sheet: Sheet,
    standing: StandingPlan,
    may_bend: tuple[str, ...],
    budget: Budget,
    *,
    last: Sequence[str] = (),
    known: Sequence[Sequence[Number]] = (),
    progress: Progress | None = None,
) -> Clash:
    """Find a clash of a sheet that is proven to have no plan, and what would free it.

    Parameters
    ----------
    sheet : has no plan
    standing : proves that, for the sheet with its aim or without, or for its bounded form
    may_bend : from `bendable_rules`
    budget : the limits, shared with what came before
    last : rules and bounds that are tried last, so that they rather stay in the clash
    known : plans in whole units, of the activities, that meet most of the sheet
    progress : told of the search for the best plan of the give

    Notes
    -----
    Deletion filtering (J. W. Chinneck, E. W. Dravnieks, Locating minimal infeasible constraint
    sets in linear programs, ORSA J. Computing 3:157-168, 1991; O. Guieu, J. W. Chinneck,
    Analyzing infeasible mixed-integer and integer linear programs, INFORMS J. Computing 11:63-77,
    1999). It starts from the rules and bounds that the evidence uses, and every test that finds
    no plan cuts the set down to the evidence of that test.
    """
    work = _Filter(sheet, standing, budget, last, known)
    with budget.halved(), budget.ending():
        complete = work.run()
    needs_whole, names = _needs_whole(sheet, work.members, budget), work.names
    give = find_give(
        sheet, names, may_bend, budget, progress,
        proof=work.refuted, known=(*known, *work.witnesses.values()),
    )  # fmt: skip
    if not complete and not budget.unlimited:
        work.run()
        if not needs_whole and work.names != names:  # what fits a set fits any part of it
            needs_whole = _needs_whole(sheet, work.members, budget)
    alone = {name: bending for name, bending in give.alone.items() if name in work.members}
    ended_by = None if work.smallest else work.ended_by
    return Clash(
        sheet=sheet,
        names=work.names,
        needs_whole=needs_whole,
        smallest=work.smallest,
        witnesses={name: work.witness(name) for name in work.names if name in work.witnesses},
        give=replace(give, alone=alone),
        ended_by=ended_by,
        given_up=ended_by == "nodes" and budget.unlimited,
    )


def member_names(sheet: Sheet) -> list[str]:
    """Return all that can be a member of a clash: the rules, then the bounds."""
    names = [rule.name for rule in sheet.rules]
    for activity in sheet.activities:
        names += [f"{activity.name} {s}" for s in SIDES if getattr(activity, s) is not None]
    return names


def restricted(sheet: Sheet, members: Collection[str]) -> Sheet:
    """Return the sheet with these rules and bounds alone, and no aim."""
    activities = tuple(_restricted_bounds(activity, members) for activity in sheet.activities)
    rules = tuple(rule for rule in sheet.rules if rule.name in members)
    return replace(sheet, aim=Aim(), activities=activities, rules=rules)


def _restricted_bounds(activity: Activity, members: Collection[str]) -> Activity:
    least, most = (
        getattr(activity, side) if f"{activity.name} {side}" in members else None for side in SIDES
    )
    if (least, most) == (activity.least, activity.most):
        return activity
    return replace(activity, least=least, most=most)


def broken_members(sheet: Sheet, members: Collection[str], amounts: Sequence[Number]) -> set[str]:
    """Return the members that a plan breaks, soft rules only where they cannot bend so far."""
    broken = set()
    for rule in sheet.rules:
        if rule.name in members:
            check = check_rule(rule, sheet.rule_value(rule, amounts))
            if check.side is not None and check.spare is not None and -check.spare > check.bend:
                broken.add(rule.name)
    for activity, amount in zip(sheet.activities, amounts, strict=True):
        if activity.least is not None and amount < activity.least:
            broken.add(f"{activity.name} least")
        if activity.most is not None and amount > activity.most:
            broken.add(f"{activity.name} most")
    return broken & set(members)


class _Test(NamedTuple):
    """Whether some members can be met together.

    `amounts` do so; without them, `support` names those that cannot, None if it is not settled.
    """

    amounts: Sequence[Number] | None = None
    support: set[str] | None = None


class _Filter:
    """Deletion filtering.

    Parameters
    ----------
    sheet, standing, budget, last, known : as for `find_clash`

    Attributes
    ----------
    members : no plan meets them all
    witnesses : for a member, amounts that meet all others
    ended_by : what left the last test open
    """

    def __init__(
        self,
        sheet: Sheet,
        standing: StandingPlan,
        budget: Budget,
        last: Sequence[str],
        known: Sequence[Sequence[Number]],
    ) -> None:
        from intplan.planning.restart import support

        self.sheet = sheet
        self.budget = budget
        same = standing.sheet.activities == sheet.activities  # unlike those of a bounded form
        self.refuted = self.proof = standing if same else None
        self.witnesses: dict[str, Sequence[Number]] = {}
        self.ended_by: str | None = None
        endless = {r.name for r in self.sheet.rules if r.give is not None and r.give_most is None}
        names = [name for name in member_names(self.sheet) if name not in endless]
        late = set(last)
        self.order = [n for n in names if n not in late] + [n for n in names if n in late]
        self.members = set(names) & support(standing)
        self.known = [(a, broken_members(self.sheet, self.members, a)) for a in known]

    @property
    def names(self) -> tuple[str, ...]:
        """The members in the order of the sheet."""
        return tuple(name for name in member_names(self.sheet) if name in self.members)

    @property
    def smallest(self) -> bool:
        """Whether every member has a witness."""
        return len(self.witnesses) == len(self.members)

    def witness(self, name: str) -> dict[str, Number]:
        """Return the amounts that meet all members but this one, by activity."""
        pairs = zip(self.sheet.activities, self.witnesses[name], strict=True)
        return {activity.name: amount for activity, amount in pairs}

    def run(self) -> bool:
        """Leave out one member after the other; false where a limit came first.

        A test that takes long is left for later: it is easier once the set is smaller.
        """
        hard = False
        while not self.smallest:
            before = len(self.members)
            for name in self.order:
                if name not in self.members or name in self.witnesses:
                    continue
                if self._ended():
                    return False
                self._try_without(name, self.budget.fair_nodes if hard else FIRST_NODES)
            if self._ended():
                return self.smallest
            if len(self.members) == before:
                if hard:
                    return True
                hard = True
        return True

    def _ended(self) -> bool:
        """Tell whether a limit is reached, and note which."""
        ended_by = self.budget.ended_by()
        self.ended_by = ended_by or self.ended_by
        return ended_by is not None

    def _try_without(self, name: str, most_nodes: int | None) -> None:
        """Drop a member if no plan meets the others, else keep the plan that does."""
        others = self.members - {name}
        for amounts, broken in self.known:
            if not broken & others:
                self.witnesses[name] = amounts
                return
        test = self._test(others, most_nodes)
        if test.amounts is not None:
            self.witnesses[name] = test.amounts
        elif test.support is not None:
            self.members = others & test.support

    def _test(self, members: Collection[str], most_nodes: int | None) -> _Test:
        """Look for a plan that meets the members."""
        from intplan.planning.restart import support

        sheet = restricted(self.sheet, members)
        found = any_plan(sheet, self.budget, self.proof, most_nodes)
        if found.amounts is not None:
            return _Test(amounts=found.amounts)
        if found.search.outcome != "infeasible":
            self.ended_by = found.search.ended_by
            return _Test()
        if found.search.sheet is sheet:
            self.proof = found.search
        return _Test(support=support(found.search))


def _needs_whole(sheet: Sheet, members: Collection[str], budget: Budget) -> bool | None:
    """Tell whether the members could be met in fractions; None if no search could settle it."""
    from intplan.planning.restart import feasible

    clashing = restricted(sheet, members)
    divisible = tuple(replace(activity, whole=False) for activity in clashing.activities)
    test = budget.run(feasible, None, replace(clashing, activities=divisible))
    if test.result.plan is not None:
        return True
    return False if test.outcome == "infeasible" else None
