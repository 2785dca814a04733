"""What each rule and bound costs the aim: waived, loosened by one unit, priced by the relaxation.

The first two are exact: each is the best value of a changed sheet, found by taking up the standing
plan's tree again.  Plans come in whole units, so a rule with room to spare may cost something, and
a rule at its limit nothing.  The price is that of the relaxation, in which every activity is
divisible: what fractions of a unit would gain there.  It may be far from both.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import partial
from typing import Any, Literal, NamedTuple

from intplan.errors import IntplanError
from intplan.planning.budget import LEAST_TIME, Budget
from intplan.planning.prices import Prices, Side, relaxation_prices
from intplan.planning.restart import restarted, support
from intplan.planning.standing import StandingPlan, solve
from intplan.sheet.changes import change_sheet
from intplan.sheet.model import Sheet
from intplan.sheet.numbers import Number, lowest

Progress = Callable[[int, int], None]

SIDES: tuple[Side, Side] = ("least", "most")
FLOOR: dict[Side, Number] = {"least": 0}
# Nodes for a figure by the kept tree: so many, and so many for each that the tree took. One that
# takes more waits until the others are settled, and is then looked at afresh: where loosening took
# the cuts away that made the tree small, the kept tree is of no help.
FIRST_NODES = 100, 2
ALL_NODES = 20_000  # nodes for all these figures where no limit is given: some would never end
NO_OPTIMUM = {
    "within_gap": "this one is within a gap; solve the sheet without one",
    "infeasible": "this sheet has no plan; ask which rules clash",
    "unbounded": "the aim of this sheet has no limit",
    "unfinished": "the search of this one was not finished",
}


class Worth(NamedTuple):
    """What a rule or a bound costs the aim.

    Attributes
    ----------
    name : the rule, or the bound (``loaf most``)
    side : the limit that it has, ``equal`` for one and the same on both sides; where the limits
        are two, the one of which `unit` and `price` speak
    toward : the limit that was moved for `unit`, where there are two the one that gains more
    waived : the exact gain of the aim without the rule or bound; None where the aim then has no
        limit, or a limit of the search came first
    runs_away : without it the aim has no limit
    unit : the exact gain with the limit one unit further out, in the units of the rule as it is
        shown; None where a limit of the search came first
    price : what the relaxation gains per unit of loosening; None where its optimum is out of
        reach
    at_least, at_most : what is known of `waived`; `at_most` is None where nothing is
    unsettled : ``waived``, ``unit``, both or neither: the figures that a limit left open
    """

    name: str
    side: Literal["least", "most", "equal"]
    toward: Side
    waived: Number | None
    runs_away: bool
    unit: Number | None
    price: float | None
    at_least: Number
    at_most: Number | None
    unsettled: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class WorthTable:
    """What the rules and bounds of a standing plan cost.

    Attributes
    ----------
    standing : the plan
    entries : what the proof makes use of, the costliest first
    others : the names of rules and bounds that the proof does not use: they cost nothing
    floors : the names of bounds that keep an activity from falling below 0, and were left out
    ended_by : what left figures open: ``time``, ``nodes``, ``interrupt`` or ``range``; None where
        all are settled
    given_up : figures that took long were left open although no limit was asked for
    """

    standing: StandingPlan
    entries: tuple[Worth, ...]
    others: tuple[str, ...]
    floors: tuple[str, ...]
    ended_by: str | None
    given_up: bool = False

    def __iter__(self) -> Iterator[Worth]:
        return iter(self.entries)


def worth(
    standing: StandingPlan,
    *,
    below_zero: bool = False,
    time_limit: float | None = None,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> WorthTable:
    """Tell what each rule and bound costs the aim of a standing plan.

    Parameters
    ----------
    standing : a plan that is proven optimal; it stays as it is
    below_zero : whether to weigh what keeps an activity from falling below 0 as well: a bound that
        few planners could do without, and few searches get through without
    time_limit, node_limit : seconds and nodes for all searches together; with neither, figures
        that take long are left open after `ALL_NODES` nodes, since a sheet without one of its
        bounds may be one that no search gets through
    progress : called with the number of figures looked at and of those there are
    stop : polled; once it returns true, what is known is returned

    Returns
    -------
    WorthTable

    Raises
    ------
    IntplanError
        If the plan is not proven optimal, or a limit makes no sense.

    Notes
    -----
    A figure is a difference of two values of the value function of the sheet's limits, which is
    no multiple of any multiplier (C. E. Blair, R. G. Jeroslow, The value function of a mixed
    integer program: I, Discrete Mathematics 19:121-138, 1977). Loosening can only gain, and
    waiving gains at least as much as loosening by one unit; both save searches here.
    """
    if standing.outcome != "optimal":
        why = NO_OPTIMUM[standing.outcome]
        raise IntplanError(f"only a plan that is proven optimal tells what its rules cost; {why}")
    budget = Budget(time_limit, node_limit, stop)
    told = support(standing) if standing.sheet.problem().exact_cost else set()
    items, others, floors = [], [], []
    for name, limits in _limits_of(standing.sheet):
        if not limits or name not in told:
            others.append(name)
        elif limits == FLOOR and name.endswith(" least") and not below_zero:
            floors.append(name)
        else:
            items.append(_Item(name, limits))
    weighing = _Weighing(standing, budget, progress)
    weighing.weigh(items)
    prices = relaxation_prices(standing.sheet, stop)
    entries = sorted((item.worth(prices) for item in items), key=_rank)
    ended_by = weighing.ended_by if any(entry.unsettled for entry in entries) else None
    given_up = ended_by == "nodes" and budget.unlimited
    return WorthTable(standing, tuple(entries), tuple(others), tuple(floors), ended_by, given_up)


def _limits_of(sheet: Sheet) -> Iterator[tuple[str, dict[Side, Number]]]:
    """Yield the name and the limits of each rule, then of each bound, in the sheet's order."""
    for rule in sheet.rules:
        both: tuple[tuple[Side, Number | None], ...] = (("least", rule.least), ("most", rule.most))
        yield rule.name, {side: limit for side, limit in both if limit is not None}
    for activity in sheet.activities:
        if activity.least is not None:
            yield f"{activity.name} least", {"least": activity.least}
        if activity.most is not None:
            yield f"{activity.name} most", {"most": activity.most}


def _rank(entry: Worth) -> tuple[bool, Number, Number, float]:
    """Return a key that puts what matters most first."""
    return not entry.runs_away, -entry.at_least, -(entry.unit or 0), -(entry.price or 0)


class _Gain(NamedTuple):
    """What is known of the gain of the aim by a change that only loosens."""

    at_least: Number
    at_most: Number | None
    runs_away: bool = False
    ended_by: str | None = None

    @property
    def settled(self) -> bool:
        """Whether the gain is known, or known to be without limit."""
        return self.runs_away or self.at_least == self.at_most

    def narrowed(self, later: _Gain) -> _Gain:
        """Return what is known after another search for the same gain."""
        ends = [gain.at_most for gain in (self, later) if gain.at_most is not None]
        return later._replace(
            at_least=max(self.at_least, later.at_least), at_most=min(ends, default=None)
        )


UNKNOWN = _Gain(0, None)


@dataclass
class _Item:
    """A rule or bound on its way to a `Worth`: its limits, and the gain by each change."""

    name: str
    limits: dict[Side, Number]
    gains: dict[str, _Gain] = field(default_factory=dict)  # by "waived", "least", "most"

    @property
    def tasks(self) -> tuple[str, ...]:
        return ("waived", *self.limits)

    def change(self, task: str) -> dict[str, Any]:
        """Return what to change for a figure, as `change_sheet` takes it."""
        if task == "waived":
            return {"waive": [self.name]}
        least, most = (self.moved(side) if side == task else None for side in SIDES)
        return {"set": {self.name: (least, most)}}

    def moved(self, side: Side) -> Number:
        return self.limits[side] + (1 if side == "most" else -1)

    def gain(self, task: str) -> _Gain:
        return self.gains.get(task, UNKNOWN)

    def needless(self, task: str) -> bool:
        """Settle a unit's gain, where it can be, by what the other changes gain."""
        if task == "waived":
            return False
        whole = self.gain("waived")
        if whole.at_most is None:
            return False
        # What a unit gains is no more than what waiving does; of two sides the better one counts.
        best = max(self.gain(side).at_least for side in self.limits)
        return best >= whole.at_most

    def unit(self, prices: Prices) -> tuple[Side, _Gain]:
        """Return the side whose move gains most, and what it gains."""
        sides = sorted(self.limits, key=lambda side: prices.get((self.name, side), 0), reverse=True)
        side = max(sides, key=lambda side: self.gain(side).at_least)
        if self.needless(side):
            gain = self.gain(side).at_least
            return side, _Gain(gain, gain)
        gains = [self.gain(side) for side in sides]
        if all(gain.settled for gain in gains):
            return side, self.gain(side)
        return side, _Gain(self.gain(side).at_least, None)

    def worth(self, prices: Prices | None) -> Worth:
        """Return what is known of the rule or bound."""
        toward, unit = self.unit(prices or {})
        waived = self.gain("waived")
        waived = waived._replace(at_least=max(waived.at_least, unit.at_least))
        one = len(self.limits) == 2 and len(set(self.limits.values())) == 1
        price = None
        if prices is not None:
            sides = self.limits if one else (toward,)
            price = max(prices.get((self.name, side), 0.0) for side in sides)
        known = {"waived": waived.settled, "unit": unit.settled}
        return Worth(
            name=self.name,
            side="equal" if one else toward,
            toward=toward,
            waived=waived.at_least if waived.settled and not waived.runs_away else None,
            runs_away=waived.runs_away,
            unit=unit.at_least if unit.settled else None,
            price=price,
            at_least=waived.at_least,
            at_most=waived.at_most,
            unsettled=tuple(figure for figure, settled in known.items() if not settled),
        )


class _Weighing:
    """Finds the gain by each change, within what the limits leave."""

    def __init__(
        self, standing: StandingPlan, budget: Budget, progress: Progress | None
    ) -> None:
        self.standing = standing
        self.budget = budget
        self.progress = progress
        self.sign = 1 if standing.sheet.aim.sense == "maximize" else -1
        self.ended_by: str | None = None

    def weigh(self, items: list[_Item]) -> None:
        """Fill in the gains: the easy ones first, then those that took more than a few nodes."""
        tasks = [(item, "waived") for item in items]
        tasks += [(item, side) for item in items for side in item.limits]
        few, times = FIRST_NODES
        self.round(tasks, few + times * self.standing.search.nodes)
        hard = [task for task in tasks if task[0].gain(task[1]).ended_by in ("nodes", "time")]
        with self.budget.ending(ALL_NODES):
            self.round(hard, None, afresh=True)

    def round(
        self, tasks: list[tuple[_Item, str]], most_nodes: int | None, afresh: bool = False
    ) -> None:
        """Look once at each figure, within so many nodes and a fair share of what is left."""
        for done, (item, task) in enumerate(tasks):
            if self.progress is not None:
                self.progress(done, len(tasks))
            if item.needless(task):
                continue
            ended_by = self.budget.ended_by()
            if ended_by is not None:
                self.ended_by = ended_by
                return
            changes = change_sheet(self.standing.sheet, **item.change(task))
            warm = partial(restarted, self.standing, changes)
            search = partial(solve, changes.sheet) if afresh else warm
            nodes = self.budget.fair_nodes if most_nodes is None else most_nodes
            gain = self.gain(search, nodes, len(tasks) - done)
            self.ended_by = gain.ended_by or self.ended_by
            item.gains[task] = item.gain(task).narrowed(gain)

    def gain(
        self, search: Callable[..., StandingPlan], most_nodes: int | None, left: int
    ) -> _Gain:
        """Return the gain that a search finds, given one of `left` shares of the time."""

        def shared(*, time_limit: float | None, **limits: Any) -> StandingPlan:
            share = None if time_limit is None else max(time_limit / left, LEAST_TIME)
            return search(time_limit=share, **limits)

        after = self.budget.run(shared, most_nodes=most_nodes)
        if after.outcome == "unbounded":
            return _Gain(0, None, runs_away=True)
        if after.outcome not in ("optimal", "unfinished"):
            raise AssertionError(f"loosening made a sheet {after.outcome}")
        at_least = 0 if after.exact_value is None else max(0, self.better(after.exact_value))
        at_most = None if after.exact_bound is None else self.better(after.exact_bound)
        return _Gain(at_least, at_most, ended_by=after.ended_by)

    def better(self, value: Number) -> Number:
        """Return by how much a value of the aim is better than the standing plan's."""
        return lowest(self.sign * (value - self.standing.exact_value))
