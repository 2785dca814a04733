"""Rules and bounds in algebra, and changes of them in words."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import NamedTuple

from intplan.errors import printable
from intplan.report.numbers import readable, value_text
from intplan.report.phrases import listing
from intplan.report.tables import limits_phrase, table
from intplan.sheet import Rule, Sheet
from intplan.sheet.algebra import write_sum
from intplan.sheet.changes import Changes
from intplan.sheet.numbers import Number, show

SEVERAL = 4  # more changes than this are counted in a sentence, not named
LONGEST_RULE = 72  # characters of the algebra of a rule that is there already
LONGEST_NEW = 400  # the same where its algebra is new


# ---------------------------------------------------------------------------------- algebra


def limit_of(sheet: Sheet, name: str, side: str) -> Number | None:
    """Return the least or the most of a rule, or of the activity that a bound is named after."""
    if name in sheet.rule_index:
        return getattr(sheet.rules[sheet.rule_index[name]], side)
    return getattr(sheet.activities[sheet.activity_index[_owner(name)]], side)


def note_of(sheet: Sheet, name: str) -> str:
    """Return the note of a rule, as it may be shown; bounds have none."""
    i = sheet.rule_index.get(name)
    return "" if i is None else printable(sheet.rules[i].note)


def algebra(sheet: Sheet, name: str, longest: int | None = None) -> str:
    """Write a rule or a bound (``loaf most``) as algebra, activities left and numbers right.

    Parameters
    ----------
    sheet : where the rule or bound is
    name : of the rule or bound
    longest : of a rule whose algebra has more characters than this, the middle terms are counted
    """
    i = sheet.rule_index.get(name)
    if i is None:
        owner, side = _owner(name), name.rpartition(" ")[2]
        limit = limit_of(sheet, name, side)
        return f"{owner} {'<=' if side == 'most' else '>='} {show(0 if limit is None else limit)}"
    rule = sheet.rules[i]
    whole = sheet.show_rule(rule)
    if longest is None or len(whole) <= longest or len(rule.terms) < 4:
        return whole
    names = [activity.name for activity in sheet.activities]
    body = write_sum(rule.terms, names)
    shown = 2
    while shown < len(rule.terms) - 2:
        longer = _shortened(rule, names, shown + 1)
        if len(whole) - len(body) + len(longer) > longest:
            break
        shown += 1
    return whole.replace(body, _shortened(rule, names, shown), 1)


def _shortened(rule: Rule, names: Sequence[str], shown: int) -> str:
    """Write the first terms of a rule and its last, and count those between them."""
    opening = write_sum(rule.terms[:shown], names)
    last = write_sum(rule.terms[-1:], names)
    last = f"- {last[1:]}" if last.startswith("-") else f"+ {last}"
    return f"{opening} + ({len(rule.terms) - shown - 1} more) {last}"


def bending_phrase(sheet: Sheet, rule: Rule) -> str:
    """Say at what price a soft rule bends, and how far it may."""
    if rule.give is None:
        return ""
    price = f"bends at {value_text(sheet, rule.give)} a unit"
    return price if rule.give_most is None else f"{price}, by at most {readable(rule.give_most)}"


def _owner(name: str) -> str:
    """Return the activity after which a bound such as ``loaf most`` is named."""
    return name.rpartition(" ")[0]


# ---------------------------------------------------------------------------------- changes


class Change(NamedTuple):
    """One change of a rule, or of the bounds of an activity.

    Attributes
    ----------
    kind : ``new``, ``rewritten``, ``changed`` or ``waived``
    what : ``rule``, ``bound`` (a waived one) or ``activity`` (one whose bounds changed)
    name : of that
    phrase : the change as the subject of a sentence: ``flour``, ``oven at most 14``
    tightened, loosened : whether it allows less than before, or more
    """

    kind: str
    what: str
    name: str
    phrase: str
    tightened: bool
    loosened: bool


def changes_of(changes: Changes) -> list[Change]:
    """Return the changes one by one: waived first, then those of limits, then added rules."""
    return [*_waived(changes), *_changed(changes), *_added(changes)]


def _waived(changes: Changes) -> Iterator[Change]:
    for name in changes.waived:
        if name not in changes.added:
            what = "rule" if name in changes.before.rule_index else "bound"
            yield Change("waived", what, name, f"waiving {name}", False, True)


def _changed(changes: Changes) -> Iterator[Change]:
    bounds: dict[str, list[str]] = {}
    for name in changes.changed:
        i = changes.sheet.rule_index.get(name)
        if i is not None:
            phrase = f"{name} {limits_phrase(changes.sheet.rules[i])}"
            yield Change("changed", "rule", name, phrase, *_direction(changes, [name]))
        else:
            bounds.setdefault(_owner(name), []).append(name)
    for name, moved in bounds.items():
        phrase = f"{name} {_bounds_phrase(changes.sheet, name, moved)}"
        yield Change("changed", "activity", name, phrase, *_direction(changes, moved))


def _added(changes: Changes) -> Iterator[Change]:
    for name in changes.added:
        again = name in changes.waived
        kind, phrase = ("rewritten", f"the new {name}") if again else ("new", name)
        yield Change(kind, "rule", name, phrase, True, again)


def _direction(changes: Changes, names: Sequence[str]) -> tuple[bool, bool]:
    return (
        any(name in changes.tightened for name in names),
        any(name in changes.loosened for name in names),
    )


def _bounds_phrase(sheet: Sheet, name: str, moved: Sequence[str]) -> str:
    """Say where the bounds of an activity are that moved: ``at most 800``, ``fixed at 40``."""
    least, most = (limit_of(sheet, f"{name} {side}", side) for side in ("least", "most"))
    if least is not None and least == most:
        return f"fixed at {readable(least)}"
    sides = [bound.rpartition(" ")[2] for bound in moved]
    if least is not None and most is not None and len(sides) == 2:
        return f"from {readable(least)} to {readable(most)}"
    limit = limit_of(sheet, moved[0], sides[0])
    return f"without a {sides[0]}" if limit is None else f"at {sides[0]} {readable(limit)}"


class Subject(NamedTuple):
    """Changes as the subject of a sentence.

    Attributes
    ----------
    text : ``flour and oven at most 14``
    plural : whether verbs that follow take the plural
    """

    text: str
    plural: bool

    def does(self, one: str, several: str) -> str:
        """Return the subject with its verb."""
        return f"{self.text} {several if self.plural else one}"


def subject_of(changes: Sequence[Change]) -> Subject:
    """Name a few changes; many are counted, and for none the text is empty."""
    if not changes:
        return Subject("", False)
    if len(changes) > SEVERAL:
        return Subject(f"the {len(changes)} changes", True)
    return Subject(listing([change.phrase for change in changes]), len(changes) > 1)


def changes_table(changes: Changes) -> str:
    """Return a line for each change: the rule as it came out, and what it was before."""
    rows = []
    for change in changes_of(changes):
        remarks = [*_before(changes, change), *_remarks(changes, change)]
        bracket = f" ({'; '.join(remarks)})" if remarks else ""
        rows.append([change.kind, f"{change.name}: {_came_out(changes, change)}{bracket}"])
    return "What has changed\n" + table(rows) if rows else ""


def _came_out(changes: Changes, change: Change) -> str:
    """Write what a changed rule or activity says now; of a waived one, what it said."""
    if change.kind == "waived":
        return algebra(changes.before, change.name, LONGEST_RULE)
    if change.what == "rule":
        longest = LONGEST_RULE if change.kind == "changed" else LONGEST_NEW
        return algebra(changes.sheet, change.name, longest)
    return bounds_algebra(changes.sheet, change.name)


def _before(changes: Changes, change: Change) -> list[str]:
    """Say what was before a change of limits or of algebra."""
    if change.kind == "rewritten":
        return [f"before: {algebra(changes.before, change.name, LONGEST_RULE)}"]
    if change.kind != "changed":
        return []
    if change.what == "rule":
        old = changes.before.rules[changes.before.rule_index[change.name]]
        return [f"before {limits_phrase(old)}"]
    return [f"before: {bounds_algebra(changes.before, change.name)}"]


def _remarks(changes: Changes, change: Change) -> list[str]:
    """Return how a changed rule bends, and its note."""
    if change.what != "rule":
        return []
    sheet = changes.before if change.kind == "waived" else changes.sheet
    rule = sheet.rules[sheet.rule_index[change.name]]
    return list(filter(None, [bending_phrase(sheet, rule), printable(rule.note)]))


def bounds_algebra(sheet: Sheet, name: str) -> str:
    """Write both bounds of an activity as algebra."""
    least, most = (limit_of(sheet, f"{name} {side}", side) for side in ("least", "most"))
    if least is not None and least == most:
        return f"{name} = {show(least)}"
    if least is None and most is None:
        return f"{name} without bounds"
    left = "" if least is None else f"{show(least)} <= "
    return f"{left}{name}" + ("" if most is None else f" <= {show(most)}")
