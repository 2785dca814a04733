"""The standing plan: a solved sheet kept with the search tree that proved it."""

from __future__ import annotations

import math
import numbers
import os
from collections.abc import Callable, Collection
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING, Any, NamedTuple

from intplan.errors import IntplanError
from intplan.planning.naming import named_tree
from intplan.planning.numbers import nearest
from intplan.sheet import Sheet
from intplan.sheet.numbers import Number

if TYPE_CHECKING:
    import networkx as nx

    from intplan.planning.replan import Replan
    from intplan.planning.worth import WorthTable
    from intplan.search import SearchResult
    from intplan.search.carry import Kept
    from intplan.sheet.changes import Changes
    from intplan.sheet.checking import CheckResult

Progress = Callable[[Number | None, Number | None], None]


class SearchNumbers(NamedTuple):
    """What the search took: nodes, dual simplex pivots, cuts and seconds."""

    nodes: int
    pivots: int
    cuts: int
    seconds: float


@dataclass(frozen=True, eq=False)
class StandingPlan:
    """A solved sheet: the plan, what is proven of it, and the tree that proves it.

    Attributes
    ----------
    sheet : the sheet that was solved
    result : what the search gave, in its own numbering
    """

    sheet: Sheet
    result: SearchResult

    def __repr__(self) -> str:
        title = f"{self.sheet.title!r}, " if self.sheet.title else ""
        return f"<StandingPlan {title}{self.outcome}, value {self.value}, bound {self.bound}>"

    @property
    def outcome(self) -> str:
        """``optimal``, ``within_gap``, ``infeasible``, ``unbounded`` or ``unfinished``."""
        return self.answer.outcome

    @property
    def ended_by(self) -> str | None:
        """What ended an unfinished search: ``time``, ``nodes``, ``interrupt``, or ``range``.

        ``range`` means that a whole activity would have to be branched on beyond the magnitude
        at which the search gives up.
        """
        return self.answer.ended_by

    @property
    def exact_value(self) -> Number | None:
        """The aim of the plan, bend prices included, as an int or a Fraction; None without one."""
        return self.answer.value

    @property
    def exact_bound(self) -> Number | None:
        """What no plan can pass, as an int or a Fraction; None where nothing finite is proven."""
        return self.answer.bound

    @property
    def value(self) -> int | float | None:
        """The aim of the plan: an int, or the nearest double."""
        return None if self.exact_value is None else nearest(self.exact_value)

    @property
    def bound(self) -> int | float | None:
        """What no plan can pass: an int, or the nearest double."""
        return None if self.exact_bound is None else nearest(self.exact_bound)

    @cached_property
    def exact_plan(self) -> dict[str, Number] | None:
        """The amount of each activity by name, as an int or a Fraction; None without a plan."""
        return _by_name(self.sheet, self.answer.plan)

    @cached_property
    def plan(self) -> dict[str, int | float] | None:
        """The amount of each activity by name: whole amounts as ints, others as doubles."""
        if self.exact_plan is None:
            return None
        return {name: nearest(amount) for name, amount in self.exact_plan.items()}

    @cached_property
    def bends(self) -> dict[str, Number]:
        """How far each soft rule that bends does so, by name, in the units it is written in."""
        if self.answer.plan is None:
            return {}
        used: dict[str, Number] = {}
        for bend in self.sheet.problem().bends:
            if amount := self.answer.plan[bend.column]:
                name = self.sheet.rules[bend.rule].name
                used[name] = used.get(name, 0) + amount
        return used

    @cached_property
    def ray(self) -> dict[str, Number] | None:
        """If the aim has no limit: the activities that run away, and in what proportion."""
        steps = _by_name(self.sheet, self.answer.ray)
        return steps and {name: step for name, step in steps.items() if step}

    @cached_property
    def check(self) -> CheckResult | None:
        """The plan held against the sheet, exactly; None without a plan."""
        if self.answer.plan is None:
            return None
        return self.sheet.check(self.answer.plan[: len(self.sheet.activities)])

    @property
    def search(self) -> SearchNumbers:
        """What the search took."""
        result = self.answer
        return SearchNumbers(result.nodes, result.pivots, len(result.cuts), result.seconds)

    @cached_property
    def tree(self) -> nx.DiGraph:
        """The search tree: node 0 is the root, edges lead from a node to its branches.

        Each node has `bound` (in units of the aim, None where nothing finite is known), `depth`,
        `outcome` (``split``, ``beaten``, ``empty``, ``plan`` or ``waiting``), `added` (texts: the
        rows it adds to its parent), `pivots`, `seconds`, `start` (``warm`` or ``cold``) and
        `evidence` (what closed it, in the search's own numbering).
        """
        return named_tree(self.proven_sheet, self.result)

    @property
    def answer(self) -> SearchResult:
        """What is known of the plan; the tree and the cuts in it may be those of another sheet."""
        return self.result

    @cached_property
    def proven_sheet(self) -> Sheet:
        """The sheet that the tree speaks of.

        It lacks the soft rules that came after the tree was made and that the plan meets without
        bending: they take plans away or make them dearer, so no plan became better.
        """
        return sheet_without(self.sheet, self.result.tree.graph.get("without", ()))

    @cached_property
    def kept(self) -> Kept:
        """The search as one that a changed sheet can take up."""
        from intplan.search.carry import Kept

        return Kept(self.proven_sheet.problem(), self.result)

    def replan(self, **changes: Any) -> Replan:
        """Tell what a change of rules does to this plan, which itself stays as it is.

        Parameters
        ----------
        changes : `add`, `waive`, `set`, `freeze`, `stay_close`, `may_bend` and limits, as of
            `intplan.planning.replan.replan`

        Raises
        ------
        IntplanError
            A change, a name or a limit makes no sense.
        """
        from intplan.planning.replan import replan

        return replan(self, **changes)

    def worth(self, **options: Any) -> WorthTable:
        """Tell what each rule and bound costs the aim.

        Parameters
        ----------
        options : as of `intplan.planning.worth.worth`

        Raises
        ------
        IntplanError
            The plan is not proven best, or a limit makes no sense.
        """
        from intplan.planning.worth import worth

        return worth(self, **options)

    def carried(self, changes: Changes) -> StandingPlan:
        """Return this answer as that of a changed sheet, in which it stands.

        Parameters
        ----------
        changes : of this sheet; they loosen nothing, and the plan meets what they added and
            tightened, without bending further for it
        """
        from intplan.planning.carried import CarriedPlan

        return CarriedPlan(self, changes)

    def save(self, path: str | os.PathLike[str]) -> None:
        """Write the standing plan to a JSON file, whole or not at all.

        Parameters
        ----------
        path : the file to write; `intplan.load_standing` reads it

        Raises
        ------
        IntplanError
            If the file cannot be written.
        """
        from intplan.planning.store import save_standing

        save_standing(self, path)


def solve(
    sheet: Sheet,
    *,
    time_limit: float | None = None,
    gap: float | Fraction = 0,
    node_limit: int | None = None,
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
) -> StandingPlan:
    """Find the best plan in whole units, with a proof that nothing beats it.

    Parameters
    ----------
    sheet : the problem
    time_limit : seconds after which the search ends with what it has
    gap : percent; a plan whose value is proven to lie within this share of itself from the bound
        is good enough (``outcome`` is then ``within_gap``)
    node_limit : nodes after which the search ends with what it has
    progress : called now and then with the best value so far and the bound, each exact or None
    stop : polled; once it returns true, the search ends with what it has

    Returns
    -------
    StandingPlan

    Raises
    ------
    IntplanError
        If a limit or the gap makes no sense.
    TypeError
        If `sheet` is no sheet.

    Notes
    -----
    Branch and cut (A. H. Land, A. G. Doig, An automatic method of solving discrete programming
    problems, Econometrica 28:497-520, 1960; M. Padberg, G. Rinaldi, A branch-and-cut algorithm
    for the resolution of large-scale symmetric traveling salesman problems, SIAM Review
    33:60-100, 1991). The plan is checked against the sheet in exact arithmetic before it is
    given out.

    Examples
    --------
    >>> from intplan import Sheet, solve
    >>> sheet = Sheet.parse('''
    ... [aim]
    ... maximize = "5*chair + 9*table"
    ... [activities]
    ... chair = {}
    ... table = {}
    ... [rules]
    ... wood = "3*chair + 7*table <= 29"
    ... ''')
    >>> standing = solve(sheet)
    >>> standing.outcome, standing.value, standing.plan
    ('optimal', 45, {'chair': 9, 'table': 0})
    """
    if not isinstance(sheet, Sheet):
        raise TypeError(f"expected a Sheet, such as Sheet.read gives, not {type(sheet).__name__}")
    limits = read_limits(time_limit, gap, node_limit)
    from intplan.search import branch_and_cut

    result = branch_and_cut(
        sheet.problem(),
        gap=limits.gap,
        time_limit=limits.seconds,
        node_limit=limits.nodes,
        progress=progress,
        stop=stop,
    )
    return StandingPlan(sheet, confirmed(sheet, result))


def sheet_without(sheet: Sheet, names: Collection[str]) -> Sheet:
    """Return a sheet without some of its rules."""
    if not names:
        return sheet
    rules = tuple(rule for rule in sheet.rules if rule.name not in names)
    return sheet.with_rules(sheet.activities, rules, sheet.warnings)


def confirmed(sheet: Sheet, result: SearchResult) -> SearchResult:
    """Hold what a search found against the sheet, exactly.

    Parameters
    ----------
    sheet : what was solved
    result : what the search gave

    Returns
    -------
    SearchResult
        The same; where a soft rule was bent further than its plan needs, with the least bends.

    Raises
    ------
    AssertionError
        If the plan breaks the sheet, or its value passes the bound: a fault of the search.
    """
    if result.plan is None:
        return result
    activities = len(sheet.activities)
    check = sheet.check(result.plan[:activities])
    if not check.good:
        raise AssertionError(f"the search gave a plan that breaks {check.broken[0].name}")
    sign = -1 if sheet.aim.sense == "maximize" else 1
    if sign * check.value > sign * result.value:
        raise AssertionError("the search gave a value that its plan does not have")
    if result.bound is not None and sign * check.value < sign * result.bound:
        raise AssertionError("the search gave a plan that passes its bound")
    if check.value == result.value:
        return result
    plan = [*result.plan[:activities], *least_bends(sheet, check)]
    return replace(result, plan=plan, value=check.value)


class SearchLimits(NamedTuple):
    """The limits of a search: seconds or None, a gap in percent, nodes or None."""

    seconds: float | None
    gap: Fraction
    nodes: int | None


def read_limits(time_limit: object, gap: object, node_limit: object) -> SearchLimits:
    """Check the limits of a search, as `solve` takes them.

    Raises
    ------
    IntplanError
        If one makes no sense.
    """
    seconds = None
    if time_limit is not None:
        if not isinstance(time_limit, numbers.Real) or isinstance(time_limit, bool):
            raise IntplanError("a time limit is a number of seconds", where="time_limit")
        seconds = float(time_limit)
        if not seconds > 0:
            raise IntplanError("a time limit is more than 0 seconds", where="time_limit")
    if node_limit is not None and (
        not isinstance(node_limit, numbers.Integral)
        or isinstance(node_limit, bool)
        or node_limit < 1
    ):
        raise IntplanError("a node limit is a whole number from 1", where="node_limit")
    return SearchLimits(
        None if seconds == math.inf else seconds,
        exact_percent(gap),
        None if node_limit is None else int(node_limit),
    )


def exact_percent(gap: object) -> Fraction:
    """Return a gap in percent as it is written: a double by its shortest decimal.

    Raises
    ------
    IntplanError
        If it is no percentage from 0 to 100.
    """
    if isinstance(gap, numbers.Real) and not isinstance(gap, bool):
        if isinstance(gap, numbers.Rational):
            percent = Fraction(gap.numerator, gap.denominator)
        elif math.isfinite(gap):
            percent = Fraction(repr(float(gap)))
        else:
            percent = Fraction(-1)
        if 0 <= percent <= 100:
            return percent
    raise IntplanError("a gap is a percentage from 0 to 100, such as 0.5", where="gap")


def least_bends(sheet: Sheet, check: CheckResult) -> list[Number]:
    """Return how far each bend column must go for a plan, in the order of the columns."""
    return [
        check.rules[bend.rule].bend if check.rules[bend.rule].side == bend.side else 0
        for bend in sheet.problem().bends
    ]


def _by_name(sheet: Sheet, amounts: list[Number] | None) -> dict[str, Number] | None:
    if amounts is None:
        return None
    pairs = zip(sheet.activities, amounts, strict=False)
    return {activity.name: amount for activity, amount in pairs}
