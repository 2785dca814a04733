"""The sheet in exact numbers: activities, rules and an aim, and the problem they make."""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, Literal

from intplan.errors import SheetError, excerpt
from intplan.sheet.algebra import Terms, write_rule, write_sum
from intplan.sheet.numbers import Number, NumberError, check_spread, lowest, show

if TYPE_CHECKING:
    from intplan.sheet.checking import CheckResult
    from intplan.sheet.problem import Bend, Problem

MOST_CELLS = 25_000_000

Sense = Literal["maximize", "minimize"]


@dataclass(frozen=True, slots=True)
class Activity:
    """A quantity to decide.

    Attributes
    ----------
    name : unique in its sheet
    least, most : exact bounds, None where there is none
    whole : in whole units only
    unit : free text for reports
    """

    name: str
    least: Number | None = 0
    most: Number | None = None
    whole: bool = True
    unit: str = ""


@dataclass(frozen=True, slots=True)
class Rule:
    """A linear condition, every activity on the left and every number on the right.

    Attributes
    ----------
    name : unique among the rules of its sheet
    terms : (activity index, coefficient) pairs, merged, without zeros, sorted by index
    least, most : limits of the sum of the terms, None where there is none
    note : free text for reports
    give : what a unit of bending costs the aim, in the units of the rule as it is written; None for
        a rule that does not bend
    give_most : how far the rule may bend, None for no limit
    text : the algebra as it was written, empty where there was none
    """

    name: str
    terms: Terms
    least: Number | None
    most: Number | None
    note: str = ""
    give: Number | None = None
    give_most: Number | None = None
    text: str = ""


@dataclass(frozen=True, slots=True)
class Aim:
    """What is maximised or minimised; with sense None any plan that meets the rules is an answer.

    Attributes
    ----------
    sense : ``"maximize"``, ``"minimize"`` or None
    terms : (activity index, coefficient) pairs, merged, without zeros, sorted by index
    constant : added to the sum of the terms
    """

    sense: Sense | None = None
    terms: Terms = ()
    constant: Number = 0


@dataclass(frozen=True, repr=False)
class Sheet:
    """A planning problem as the planner wrote it, in exact numbers; it never changes.

    Attributes
    ----------
    title, measure : free text for reports; the measure is what the aim counts
    aim : the `Aim`
    activities, rules : in the order in which they were written
    warnings : what is odd about the sheet though it can be solved, one sentence each

    Raises
    ------
    SheetError
        There is no activity, or two activities or two rules share a name.
    """

    title: str
    measure: str
    aim: Aim
    activities: tuple[Activity, ...]
    rules: tuple[Rule, ...]
    warnings: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.activities:
            raise SheetError("an empty sheet: it has no activities")
        repeated = _repeated(self.activities) or _repeated(self.rules)
        if repeated:
            raise SheetError(f"the name {excerpt(repeated)} is declared twice")

    def __repr__(self) -> str:
        title = f"{self.title!r}, " if self.title else ""
        return f"<Sheet {title}{len(self.activities)} activities, {len(self.rules)} rules>"

    @classmethod
    def read(cls, path: str | os.PathLike[str]) -> Sheet:
        """Read a sheet from a TOML file.

        Raises
        ------
        SheetError
            The file cannot be read or is no sheet; `where` names the file and the place in it.
        """
        from intplan.sheet.reading import read_sheet

        return read_sheet(path)

    @classmethod
    def parse(cls, text: str, where: str = "sheet") -> Sheet:
        """Read a sheet from TOML text; `where` names it in errors.

        Raises
        ------
        SheetError
            The text is no sheet.
        """
        from intplan.sheet.reading import parse_sheet

        return parse_sheet(text, where)

    @classmethod
    def from_arrays(
        cls,
        aim: Any,
        rows: Any,
        row_least: Any = None,
        row_most: Any = None,
        least: Any = 0,
        most: Any = None,
        whole: Any = True,
        maximize: bool = False,
        names: Sequence[str] | None = None,
        *,
        rule_names: Sequence[str] | None = None,
        title: str = "",
        measure: str = "",
    ) -> Sheet:
        """Make a sheet from arrays; every float counts as its shortest decimal.

        Parameters
        ----------
        aim : (activities,) coefficients, or None for no aim
        rows : (rules, activities) coefficients: an array, whatever `numpy.asarray` takes, or a
            sparse matrix or array of SciPy
        row_least, row_most : (rules,) limits or one for all; infinite or None where there is none
        least, most : (activities,) bounds or one for all; infinite or None where there is none
        whole : (activities,) flags or one for all
        maximize : whether the aim is maximised
        names : names of the activities, ``x[0]``, ``x[1]``, ... by default
        rule_names : names of the rules, ``r[0]``, ``r[1]``, ... by default
        title, measure : free text for reports

        Raises
        ------
        SheetError
            A nan, an infinity where none is allowed, a wrong shape or name, contradicting bounds,
            or a size beyond `MOST_CELLS`.
        """
        from intplan.sheet.arrays import sheet_from_arrays

        return sheet_from_arrays(
            aim,
            rows,
            row_least=row_least,
            row_most=row_most,
            least=least,
            most=most,
            whole=whole,
            maximize=maximize,
            names=names,
            rule_names=rule_names,
            title=title,
            measure=measure,
        )

    @classmethod
    def from_record(cls, record: object, where: str = "sheet") -> Sheet:
        """Read back what `to_record` made.

        Raises
        ------
        SheetError
            The record is damaged or foreign.
        """
        from intplan.sheet.records import sheet_from_record

        return sheet_from_record(record, where)

    def to_record(self) -> dict[str, Any]:
        """Return the sheet as plain dicts, lists and texts for JSON, exact numbers as text."""
        from intplan.sheet.records import record_of

        return record_of(self)

    @cached_property
    def activity_index(self) -> dict[str, int]:
        """The position of each activity by name."""
        return {activity.name: j for j, activity in enumerate(self.activities)}

    @cached_property
    def rule_index(self) -> dict[str, int]:
        """The position of each rule by name."""
        return {rule.name: i for i, rule in enumerate(self.rules)}

    def rule_value(self, rule: Rule, amounts: Sequence[Number]) -> Number:
        """Return the exact value of a rule's left side at the amounts, one an activity."""
        return lowest(sum(c * amounts[j] for j, c in rule.terms))

    def aim_value(self, amounts: Sequence[Number]) -> Number:
        """Return the exact value of the aim, without the prices of any bends."""
        return lowest(sum((c * amounts[j] for j, c in self.aim.terms), self.aim.constant))

    def check(self, amounts: Sequence[Number]) -> CheckResult:
        """Hold exact amounts, one an activity, against every rule, bound and whole unit.

        Raises
        ------
        SheetError
            The number of amounts is not that of the activities.
        """
        from intplan.sheet.checking import check_plan

        return check_plan(self, amounts)

    def rule_from_text(
        self,
        name: str,
        text: str,
        note: str = "",
        give: Number | None = None,
        give_most: Number | None = None,
        where: str | None = None,
    ) -> Rule:
        """Read one more rule in the names of this sheet; the sheet stays as it is.

        Raises
        ------
        SheetError
            The name is no name, or the algebra is malformed, non-linear or false of itself.
        """
        from intplan.sheet.reading import rule_of_text

        return rule_of_text(name, text, self.activity_index, note, give, give_most, where)

    def with_rules(
        self, activities: tuple[Activity, ...], rules: tuple[Rule, ...], warnings: tuple[str, ...]
    ) -> Sheet:
        """Return this sheet with other bounds and rules, quickly.

        Parameters
        ----------
        activities : of the same names in the same order
        rules : of names that differ; the caller makes sure of that, so that it need not be checked
            again for every rule of a large sheet
        warnings : of the new sheet
        """
        new = object.__new__(Sheet)
        new.__dict__.update(
            title=self.title,
            measure=self.measure,
            aim=self.aim,
            activities=activities,
            rules=rules,
            warnings=warnings,
            activity_index=self.activity_index,
            _names=self._names,
            _origin=self,
        )
        return new

    def show_rule(self, rule: Rule) -> str:
        """Return a rule as algebra, every activity on the left and every number on the right."""
        return write_rule(rule.terms, rule.least, rule.most, self._names)

    def show_aim(self) -> str:
        """Return the sum that is maximised or minimised, as algebra."""
        return write_sum(self.aim.terms, self._names, self.aim.constant)

    @cached_property
    def _names(self) -> tuple[str, ...]:
        return tuple(activity.name for activity in self.activities)

    def problem(self) -> Problem:
        """Return the sheet as the engine takes it: the activities, then a column a bend.

        Raises
        ------
        SheetError
            The table would pass `MOST_CELLS`, or its numbers cannot be scaled into doubles.
        """
        return self._problem

    @cached_property
    def _problem(self) -> Problem:
        from intplan.sheet.problem import Problem

        origin = self.__dict__.pop("_origin", None)
        changed = None if origin is None else self._changed_problem(origin)
        if changed is not None:
            return changed
        bends = bends_of(self)
        check_size(len(self.rules), len(self.activities) + len(bends))
        terms = [rule.terms for rule in self.rules]
        aim_terms = self.aim.terms
        maximize = self.aim.sense == "maximize"
        for bend in bends:
            rule = self.rules[bend.rule]
            terms[bend.rule] += ((bend.column, 1 if bend.side == "least" else -1),)
            if rule.give is not None:
                aim_terms += ((bend.column, -rule.give if maximize else rule.give),)
        _check_soft(self, aim_terms)
        spans = [self.rules[bend.rule].give_most for bend in bends]
        limits = ((rule.least, rule.most) for rule in self.rules)
        try:
            return Problem.build(
                aim_terms=aim_terms,
                aim_constant=self.aim.constant,
                maximize=maximize,
                rules=[(t, *pair) for t, pair in zip(terms, limits, strict=True)],
                least=[a.least for a in self.activities] + [0] * len(bends),
                most=[a.most for a in self.activities] + spans,
                whole=[a.whole for a in self.activities] + [False] * len(bends),
                bends=bends,
            )
        except OverflowError:
            raise SheetError("the numbers of this sheet lie too far apart for doubles") from None

    def _changed_problem(self, origin: Sheet) -> Problem | None:
        """Return the problem made from that of the sheet that this one was changed from.

        None where the soft rules are others, and the columns with them.
        """
        rules: list[Any] = []
        soft: list[str] = []
        for rule in self.rules:
            i = origin.rule_index.get(rule.name)
            old = None if i is None else origin.rules[i]
            if rule.give is not None:
                soft.append(rule.name)
            if rule is old:
                rules.append(i)
            elif _same_but_limits(rule, old):
                rules.append((i, rule.least, rule.most))
            elif rule.give is None:
                rules.append((rule.terms, rule.least, rule.most))
            else:
                return None
        if soft != [rule.name for rule in origin.rules if rule.give is not None]:
            return None
        check_size(len(rules), len(self.activities) + len(origin.problem().bends))
        pairs = zip(self.activities, origin.activities, strict=True)
        bounds = {j: (a.least, a.most) for j, (a, old) in enumerate(pairs) if a is not old}
        try:
            return origin.problem().changed(rules, bounds, bends_of(self))
        except OverflowError:
            raise SheetError("the numbers of this sheet lie too far apart for doubles") from None


def _same_but_limits(rule: Rule, old: Rule | None) -> bool:
    """Tell whether two rules differ in their limits alone, with the same bends if soft."""
    if old is None or rule.terms is not old.terms or rule.give != old.give:
        return False
    sides = [(r.least is None, r.most is None, r.give_most) for r in (rule, old)]
    return rule.give is None or sides[0] == sides[1]


def _check_soft(sheet: Sheet, aim_terms: Terms) -> None:
    """Make sure that bends and their prices scale into doubles beside the rest."""
    place = "[aim] with the prices of bends"
    try:
        check_spread([c for _, c in aim_terms], [])
        for rule in sheet.rules:
            if rule.give is not None:
                place = rule.name
                check_spread([1, *(c for _, c in rule.terms)], [])
    except NumberError as problem:
        raise SheetError(str(problem), place) from None


def _repeated(items: Sequence[Activity] | Sequence[Rule]) -> str | None:
    """Return the first name that comes a second time, None if there is none."""
    seen = set()
    for item in items:
        if item.name in seen:
            return item.name
        seen.add(item.name)
    return None


def bends_of(sheet: Sheet) -> tuple[Bend, ...]:
    """Return a bend for each limit of each soft rule, in columns after the activities."""
    from intplan.sheet.problem import Bend

    bends: list[Bend] = []
    for i, rule in enumerate(sheet.rules):
        if rule.give is None:
            continue
        for side, limit in (("most", rule.most), ("least", rule.least)):
            if limit is not None:
                bends.append(Bend(i, side, len(sheet.activities) + len(bends)))
    return tuple(bends)


def check_size(rules: int, activities: int, where: str | None = None) -> None:
    """Make sure that the engine's table fits in memory, before any of it is allocated.

    Raises
    ------
    SheetError
        It would hold more than `MOST_CELLS` numbers.
    """
    cells = (rules + 1) * activities
    if cells > MOST_CELLS:
        raise SheetError(
            f"{rules:,} rules by {activities:,} activities make a table of {cells:,} numbers"
            f" ({cells * 8 / 1e6:,.0f} MB); the limit is {MOST_CELLS:,}"
            f" ({MOST_CELLS * 8 / 1e6:,.0f} MB)",
            where,
        )


def check_bounds(activity: Activity, where: str) -> None:
    """Make sure that some amount lies within an activity's bounds.

    Raises
    ------
    SheetError
        `least` is above `most`, or no whole number lies between them.
    """
    least, most = activity.least, activity.most
    if least is None or most is None:
        return
    if least > most:
        raise SheetError(f"least = {show(least)} is above most = {show(most)}", where)
    if activity.whole and math.ceil(least) > math.floor(most):
        raise SheetError(
            f"no whole number lies between least = {show(least)} and most = {show(most)};"
            " widen them, or say whole = false",
            where,
        )
