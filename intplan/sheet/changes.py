"""Changes of a sheet: rules added, waived and set, activities frozen, and what that means."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from itertools import count
from typing import Any, NamedTuple

from intplan.errors import SheetError, excerpt, nearest, unknown
from intplan.sheet.algebra import parse_rule, tokens, write_rule
from intplan.sheet.model import Activity, Rule, Sheet, check_bounds
from intplan.sheet.names import name_problem, normal
from intplan.sheet.numbers import Number, NumberError, check_spread, exact, fraction_text, show
from intplan.sheet.reading import check_give, parse_toml, read_rule

Limits = tuple[Number | None, Number | None]
Named = Mapping[str, Any] | Iterable[tuple[str, Any]]

SIDES = ("least", "most")
LONGEST_RULE = 72  # characters of a rule in a message; a longer one is told by its limits alone


@dataclass(frozen=True)
class Changes:
    """Changes of a sheet, and the sheet that comes of them.

    Attributes
    ----------
    before : the sheet as it was
    sheet : waived rules taken out, added ones last, all others in their old order
    places : where each rule of `before` is in `sheet`; None for a waived one
    added : names of added rules, those that replace a waived one of the same name too
    waived : the rules and bounds (``loaf most``) taken out
    changed : the rules and bounds whose limits are others now
    tightened : the names of rules and bounds that allow less than before, added rules among them
    loosened : the names of those that allow more than before, waived ones among them
    notes : what is odd about the changes though they can be made, one sentence each
    """

    before: Sheet
    sheet: Sheet
    places: tuple[int | None, ...]
    added: tuple[str, ...] = ()
    waived: tuple[str, ...] = ()
    changed: tuple[str, ...] = ()
    tightened: tuple[str, ...] = ()
    loosened: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


def change_sheet(
    sheet: Sheet,
    *,
    add: Named | None = None,
    waive: Iterable[str] = (),
    set: Named | None = None,
    freeze: Iterable[str] = (),
    plan: Mapping[str, Number] | None = None,
) -> Changes:
    """Change the rules and bounds of a sheet; the sheet itself stays as it is.

    Waiving comes before setting, and setting before adding.

    Parameters
    ----------
    sheet : the sheet to change
    add : new rules by name: algebra, a table ``{"rule": algebra, "give": 15, ...}`` as in a sheet,
        or a `Rule` in the indices of the sheet
    waive : rules and bounds (``loaf most``) to take out
    set : new limits by the name of a rule (as it is shown, activities left and numbers right), an
        activity or a bound: text such as ``<= 14`` or ``6 <= mixer <= 9``, or a pair (least, most)
        with None for what stays; of a bound also a number
    freeze : activities that keep the amount they have in `plan`
    plan : exact amounts by activity

    Returns
    -------
    Changes

    Raises
    ------
    SheetError
        An unknown name, a name that is there already, malformed algebra, a side that a rule does
        not have, limits that contradict each other, or the same thing changed twice.
    """
    work = _Work(sheet)
    for name in read_names(waive, "waive"):
        work.waive(name)
    for name, value in _pairs(set, "set"):
        work.set(name, value)
    for name in read_names(freeze, "freeze"):
        work.freeze(name, plan)
    for name, value in _pairs(add, "add"):
        work.add(name, value)
    return work.done()


def read_names(names: Iterable[str], what: str) -> list[str]:
    """Return names in normal form, with one space between their words.

    Parameters
    ----------
    names : of rules, activities or bounds; a text alone is one name
    what : the argument that they are given for

    Raises
    ------
    SheetError
        One is no text, or empty.
    """
    listed = [names] if isinstance(names, str) else list(names or ())
    for name in listed:
        if not isinstance(name, str):
            raise SheetError("a name is text", what)
        if not name.strip():
            raise SheetError("an empty name", what)
    return [normal(" ".join(name.split())) for name in listed]


def read_addition(text: str) -> tuple[str, Any]:
    """Read a rule to be added from one text.

    Parameters
    ----------
    text : a name, a colon, and algebra or a table as in a sheet, such as
        ``flour: loaf + roll_tray <= 600`` or ``flour: {rule = "loaf <= 600", give = 15}``

    Returns
    -------
    name, value : for the `add` of `change_sheet`

    Raises
    ------
    SheetError
        The text is not of that form.
    """
    name, colon, value = text.partition(":")
    shown = f"add {excerpt(text.strip())}"
    if not colon or not value.strip():
        raise SheetError("write a name, a colon and a rule: flour: loaf + bun <= 600", shown)
    plain = normal(name.strip())
    problem = name_problem(plain)
    if problem:
        raise SheetError(f"{excerpt(plain)}: {problem}" if plain else problem, shown)
    if value.lstrip()[0] not in "{\"'":
        return plain, value.strip()
    try:
        # The key takes the place of the name, so that columns of errors are those of the text.
        table = parse_toml("k".ljust(len(name)) + "=" + value, "text")
    except SheetError as problem:
        raise SheetError(problem.message, f"add {plain}") from None
    if len(table) != 1:
        raise SheetError("more than one rule in a text; add them one by one", f"add {plain}")
    return plain, table["k"]


def read_setting(text: str) -> tuple[str, Limits]:
    """Read new limits and whose they are from one text.

    Parameters
    ----------
    text : such as ``oven <= 14``, ``6 <= mixer <= 9``, ``loaf = 40`` or ``loaf most = 800``

    Returns
    -------
    name, limits : for the `set` of `change_sheet`; limits are a pair (least, most), None for what
        stays

    Raises
    ------
    SheetError
        The text is not of that form.
    """
    found = _spoken(text)
    if found is None:
        raise SheetError(
            "new limits are those of one rule, activity or bound, such as oven <= 14,"
            " 6 <= mixer <= 9 or loaf most = 800",
            f"set {excerpt(text.strip())}",
        )
    return found.name, _limits(found, f"set {found.name}")


class _Spoken(NamedTuple):
    """A text of new limits: whose they are, and the text with one plain name for that."""

    name: str
    plain: str
    text: str


def _spoken(text: str) -> _Spoken | None:
    """Find the one name in a text of limits, a bound's second word blanked; None if not one.

    A second word that is nearly one of a bound is taken as written: no bound is called so, and the
    error about that has the right name.
    """
    text = normal(text)
    names = [token for token in tokens(text) if token.kind == "name"]
    if len(names) == 2 and nearest(names[1].text, SIDES):
        first, side = names
        if text[first.place + len(first.text) : side.place].isspace():
            end = side.place + len(side.text)
            text = text[: side.place] + " " * len(side.text) + text[end:]
            return _Spoken(f"{first.text} {side.text}", first.text, text)
    return _Spoken(names[0].text, names[0].text, text) if len(names) == 1 else None


def _limits(spoken: _Spoken, where: str) -> Limits:
    rule = parse_rule(spoken.text, {spoken.plain: 0}, where)
    least, most = rule.least, rule.most
    if rule.terms == ((0, 1),):
        return least, most
    if rule.terms == ((0, -1),):  # as from 14 >= oven
        return None if most is None else -most, None if least is None else -least
    name = spoken.name
    raise SheetError(f"write the new limits as {name} <= 14 or 2 <= {name} <= 5", where)


def _pairs(named: Named | None, what: str) -> list[tuple[str, Any]]:
    """Return what is given by name as pairs."""
    pairs = list(named.items() if isinstance(named, Mapping) else named or ())
    paired = all(isinstance(pair, (tuple, list)) and len(pair) == 2 for pair in pairs)
    if isinstance(named, str) or not paired:
        raise SheetError('give names with what is meant of them, such as {"oven": "<= 14"}', what)
    names = read_names([name for name, _ in pairs], what)
    return [(name, value) for name, (_, value) in zip(names, pairs, strict=True)]


class _Work:
    """One change of a sheet in the making."""

    def __init__(self, sheet: Sheet) -> None:
        self.sheet = sheet
        self.rules: dict[int, Rule | None] = {}  # by old index; None for a waived one
        self.activities: dict[int, Activity] = {}
        self.bounds_set: list[tuple[str, tuple[str, ...]]] = []  # by one setting or freezing each
        self.new: dict[str, Rule] = {}
        self.touched: dict[str, str] = {}  # "oven most" to what was done to it
        self.waived: list[str] = []
        self.changed: list[str] = []
        self.tightened: list[str] = []
        self.loosened: list[str] = []
        self.notes: list[str] = []

    def waive(self, name: str) -> None:
        """Take out a rule or a bound."""
        where = _place("waive", name)
        i = self.sheet.rule_index.get(name)
        if i is not None:
            self.touch(("rule", name), SIDES, "waived", where)
            self.rules[i] = None
        else:
            j, side = self.bound(name, where)
            old = self.activity(j)
            self.touch(("activity", old.name), (side,), "waived", where)
            if getattr(old, side) is None:
                raise SheetError(f"{old.name} has no {side}", where)
            if side == "least" and old.least >= 0:
                self.notes.append(
                    f"without its least, {old.name} may go below 0; to keep it from that,"
                    f' set "{old.name} >= 0" instead'
                )
            self.activities[j] = replace(old, **{side: None})
        self.waived.append(name)
        self.loosened.append(name)

    def bound(self, name: str, where: str, others: Iterable[str] = ()) -> tuple[int, str]:
        """Return the activity and the side that a name such as ``loaf most`` speaks of.

        `others` are the names, beside those of rules and bounds, that the user might have meant.
        """
        owner, _, side = name.rpartition(" ")
        j = self.sheet.activity_index.get(owner)
        if side in SIDES and j is not None:
            return j, side
        if side in SIDES and owner in self.sheet.rule_index:
            raise SheetError(f"{owner} is a rule, not an activity; write {owner} alone", where)
        if name in self.sheet.activity_index:
            raise SheetError(
                f"{name} is an activity; its bounds are {name} least and {name} most", where
            )
        names = self.sheet.activity_index
        known = [*self.sheet.rule_index, *(f"{a} {side}" for side in SIDES for a in names)]
        kind = "rule, activity or bound" if others else "rule or bound"
        raise SheetError(unknown(kind, name, [*known, *others]), where)

    def activity(self, j: int) -> Activity:
        return self.activities.get(j, self.sheet.activities[j])

    def touch(self, what: tuple[str, str], sides: Iterable[str], how: str, where: str) -> None:
        """Note what is done to the sides of a rule or activity, unless something was before."""
        keys = {side: f"{what[0]} {what[1]} {side}" for side in sides}
        earlier = {side: self.touched[key] for side, key in keys.items() if key in self.touched}
        if earlier:
            side, before = next(iter(earlier.items()))
            whole = len(earlier) == len(SIDES) and len(set(earlier.values())) == 1
            whole = whole or (what[0], before) == ("rule", "waived")
            told = f"{how} twice" if before == how else f"both {before} and {how}"
            whose = what[1] if whole else f"the {side} of {what[1]}"
            raise SheetError(f"{whose} is {told}; say it once", where)
        self.touched |= dict.fromkeys(keys.values(), how)

    def set(self, name: str, value: Any) -> None:
        """Give a rule, an activity or a bound new limits."""
        where = _place("set", name)
        i = self.sheet.rule_index.get(name)
        if i is not None:
            self.set_rule(i, *_read_limits(name, name, value, where), where)
            return
        j, sides = self.sheet.activity_index.get(name), SIDES
        if j is None:
            j, side = self.bound(name, where, self.sheet.activity_index)
            sides = (side,)
        owner = self.sheet.activities[j].name
        least, most = _read_limits(name, owner, value, where)
        if len(sides) == 1:
            least, most = _one_side(name, sides[0], least, most, where)
        self.set_activity(j, least, most, "set", where)

    def set_rule(self, i: int, least: Number | None, most: Number | None, where: str) -> None:
        old = self.sheet.rules[i]
        sides = {s: v for s, v in zip(SIDES, (least, most), strict=True) if v is not None}
        self.touch(("rule", old.name), sides, "set", where)
        for side, limit in sides.items():
            if getattr(old, side) is None:
                says = self.shown(old)
                other = replace(old, name=_beside(old.name, side), least=None, most=None)
                hint = f"{other.name}: {self.shown(replace(other, **{side: limit}))}"
                raise SheetError(
                    f"{old.name} has no {side}; it says {says}; for that side add a rule of another"
                    f" name, such as {hint}",
                    where,
                )
        if sides:
            self.rules[i] = replace(self.rules.get(i) or old, **sides, text="")

    def shown(self, rule: Rule) -> str:
        """Write a rule for a message; where it is long, dots for all but its limits."""
        whole = self.sheet.show_rule(rule)
        if len(whole) <= LONGEST_RULE:
            return whole
        return write_rule(((0, 1),), rule.least, rule.most, ("...",))

    def set_activity(
        self, j: int, least: Number | None, most: Number | None, how: str, where: str
    ) -> None:
        old = self.activity(j)
        sides = {s: v for s, v in zip(SIDES, (least, most), strict=True) if v is not None}
        self.touch(("activity", old.name), sides, how, where)
        self.activities[j] = replace(old, **sides)
        self.bounds_set.append((old.name, tuple(sides)))

    def freeze(self, name: str, plan: Mapping[str, Number] | None) -> None:
        """Keep an activity at the amount that it has in a plan."""
        where = _place("freeze", name)
        j = self.sheet.activity_index.get(name)
        if j is None:
            if name in self.sheet.rule_index:
                raise SheetError(f"{name} is a rule; only activities can be frozen", where)
            raise SheetError(unknown("activity", name, self.sheet.activity_index), where)
        if plan is None:
            raise SheetError("there is no plan whose amount it could keep", where)
        if name not in plan:
            raise SheetError("the plan has no amount of it", where)
        amount = plan[name]
        self.set_activity(j, amount, amount, "frozen", where)

    def add(self, name: str, value: Any) -> None:
        """Read one more rule."""
        where = _place("add", name)
        i = self.sheet.rule_index.get(name)
        if name in self.new:
            raise SheetError(f"the rule {name} is added twice", where)
        if i is not None and self.rules.get(i, self) is not None:
            raise SheetError(
                f"the sheet has a rule {name} already; waive it too, to replace it", where
            )
        if isinstance(value, Rule):
            rule = _checked(replace(value, name=name), len(self.sheet.activities), where)
        else:
            rule = read_rule(name, _plain(value, where), self.sheet.activity_index, where, [])
        if not rule.terms:
            self.notes.append(f"{name} holds for every plan, whatever the activities")
        self.new[name] = rule

    def done(self) -> Changes:
        """Return the changes, with the sheet that comes of them."""
        sheet = self.sheet
        activities = self.changed_activities()
        rules, places = self.changed_rules()
        added = tuple(self.new)
        if not (added or self.waived or self.changed or self.notes):
            self.notes.append("nothing is changed")
        return Changes(
            sheet,
            sheet.with_rules(activities, rules, _warnings(sheet, self.waived)),
            places,
            added,
            tuple(self.waived),
            tuple(self.changed),
            (*self.tightened, *added),
            tuple(self.loosened),
            tuple(self.notes),
        )

    def changed_rules(self) -> tuple[tuple[Rule, ...], tuple[int | None, ...]]:
        """Return the rules as they are now, and where each old one is among them."""
        now: list[Rule | None] = list(self.sheet.rules)
        for i, rule in self.rules.items():
            old, now[i] = now[i], rule
            if rule is not None:
                _check_limits(rule, f"set {rule.name}")
                if not self.compare(rule.name, (old.least, old.most), (rule.least, rule.most)):
                    self.notes.append(f"{rule.name} is as it was before")
        places: tuple[int | None, ...] = tuple(range(len(now)))
        if None in self.rules.values():
            at = count()
            places = tuple(None if rule is None else next(at) for rule in now)
        kept = [rule for rule in now if rule is not None]
        return (*kept, *self.new.values()), places

    def changed_activities(self) -> tuple[Activity, ...]:
        """Return the activities as they are now."""
        if not self.activities:
            return self.sheet.activities
        activities = list(self.sheet.activities)
        for j, now in self.activities.items():
            check_bounds(now, f"set {now.name}")
            old, activities[j] = activities[j], now
            for side in SIDES:
                name = f"{now.name} {side}"
                if f"activity {name}" not in self.touched or name in self.waived:
                    continue
                pair = (None, old.most), (None, now.most)
                if side == "least":
                    pair = (old.least, None), (now.least, None)
                self.compare(name, *pair)
        for name, sides in self.bounds_set:
            if sides and not any(f"{name} {side}" in self.changed for side in sides):
                whose = f"{name} {sides[0]}" if len(sides) == 1 else name
                self.notes.append(f"{whose} is as it was before")
        return tuple(activities)

    def compare(self, name: str, old: Limits, new: Limits) -> bool:
        """Note whether limits allow less than the old ones, or more; return whether either."""
        if old == new:
            return False
        self.changed.append(name)
        least = _compared(old[0], new[0], -1)
        most = _compared(old[1], new[1], 1)
        if min(least, most) < 0:
            self.tightened.append(name)
        if max(least, most) > 0:
            self.loosened.append(name)
        return True


def _compared(old: Number | None, new: Number | None, outward: int) -> int:
    """Return 1 if a limit allows more than the old one, -1 if less, 0 if it is the same."""
    if old == new:
        return 0
    if old is None or new is None:
        return 1 if new is None else -1
    return outward if new > old else -outward


def _warnings(sheet: Sheet, waived: list[str]) -> tuple[str, ...]:
    """Return the warnings of a sheet without those about rules that are gone."""
    gone = tuple(f"[rules] {name}: " for name in waived)
    return tuple(warning for warning in sheet.warnings if not warning.startswith(gone))


def _read_limits(name: str, owner: str, value: Any, where: str) -> Limits:
    """Return new limits as a pair, from text, a pair, or a number for a bound of `owner`."""
    if isinstance(value, str):
        text = value.strip()
        if text.startswith(("<", ">", "=")):
            return _limits(_Spoken(name, owner, f"{owner} {text}"), where)
        spoken = _spoken(text)
        if spoken is None or spoken.name != name:
            raise SheetError(f"write the new limits as <= 14, or {name} <= 14", where)
        return _limits(spoken, where)
    try:
        if isinstance(value, (tuple, list)) and len(value) == 2:
            least, most = (None if v is None else exact(v) for v in value)
            return least, most
        if name != owner:
            return exact(value), exact(value)
    except NumberError as problem:
        raise SheetError(str(problem), where) from None
    raise SheetError('new limits are text such as "<= 14", or a pair (least, most)', where)


def _one_side(
    name: str, side: str, least: Number | None, most: Number | None, where: str
) -> Limits:
    """Return the limits set by a text about one bound, which says ``= 14`` or points outward."""
    here, other = (least, most) if side == "least" else (most, least)
    if other is not None and other != here:
        owner, relation = name[: -len(side) - 1], ">=" if side == "least" else "<="
        raise SheetError(f"write {name} = 14, or {owner} {relation} 14", where)
    return (here, None) if side == "least" else (None, here)


def _beside(name: str, side: str) -> str:
    """Return a name for a rule that has the other side: ``oven_least`` beside ``oven``."""
    stem, bracket, index = name.partition("[")
    return f"{stem}_{side}{bracket}{index}"


def _place(what: str, name: str) -> str:
    """Return the place of a change for errors, a long name cut."""
    return f"{what} {name if len(name) <= 60 else name[:57] + '...'}"


def _check_limits(rule: Rule, where: str) -> None:
    """Make sure that some value lies within a rule's limits, and that it can be scaled.

    Raises
    ------
    SheetError
        None does, or it cannot.
    """
    least, most = rule.least, rule.most
    if least is not None and most is not None and least > most:
        raise SheetError(f"least = {show(least)} is above most = {show(most)}", where)
    if not rule.terms and not ((least or 0) <= 0 <= (most or 0)):
        raise SheetError("the rule would be false whatever the activities", where)
    try:
        check_spread((c for _, c in rule.terms), [v for v in (least, most) if v is not None])
    except NumberError as problem:
        raise SheetError(str(problem), where) from None


def _checked(rule: Rule, activities: int, where: str) -> Rule:
    """Return a rule that a program made, if a sheet of so many activities can hold it."""
    problem = name_problem(rule.name)
    if problem:
        raise SheetError(problem, where)
    check_give(rule.give, rule.give_most, where)
    last = -1
    for j, c in rule.terms:
        if not last < j < activities or c == 0:
            raise SheetError(f"the term of activity {j} is out of order, range or zero", where)
        last = j
    _check_limits(rule, where)
    return rule


def _plain(value: Any, where: str) -> Any:
    """Return a rule's table with the numbers of a program as a sheet may hold them."""
    if not isinstance(value, Mapping):
        return value
    table = dict(value)
    for key in ("give", "give_most"):
        if isinstance(table.get(key), (float, Fraction)):
            try:
                table[key] = fraction_text(exact(table[key]))
            except NumberError as problem:
                raise SheetError(f"{key}: {problem}", where) from None
    return table
