"""Random changes of a standing plan: what `replan` is given, and the sheet that must come of it.

A `Change` holds both sides: the keyword arguments of `replan` (names and texts), and the changed
sheet, edited here on the dataclasses of the sheet without any of the code that reads the
arguments.  `planners_change` and `dense_change` cut the standing plan off, as a planner's rule or a
row over many activities would; `random_change` draws every kind there is.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import Any

import numpy as np

from intplan.sheet import Sheet
from intplan.sheet.model import Activity, Rule

Number = int | Fraction
Limits = tuple[Number | None, Number | None]
Terms = list[tuple[int, Number]]

LARGEST_DENOMINATOR = 60  # amounts of a plan are rounded to small numbers before they are used
NEARLY = Fraction(1, 20)  # a rule this near to its limit, for its size, is nearly binding


@dataclass(frozen=True)
class Change:
    """One change, as it is asked for and as it must come out.

    Attributes
    ----------
    kinds : the kinds of `KINDS` that it is made of
    arguments : keyword arguments of `replan`: add, waive, set, freeze
    sheet : the changed sheet
    """

    kinds: tuple[str, ...]
    arguments: dict[str, Any]
    sheet: Sheet


@dataclass
class Draft:
    """A change being drawn: every edit is written down twice, as argument and in the sheet."""

    before: Sheet
    plan: list[Number]
    standing: bool  # whether `plan` is the standing plan; else any amounts inside the bounds
    rng: np.random.Generator
    activities: list[Activity] = field(default_factory=list)
    rules: list[Rule] = field(default_factory=list)
    added: list[Rule] = field(default_factory=list)
    touched: set[str] = field(default_factory=set)
    arguments: dict[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.activities = list(self.before.activities)
        self.rules = list(self.before.rules)

    # ------------------------------------------------------------------ choosing

    def chance(self, share: float) -> bool:
        """Return True in this share of all draws."""
        return bool(self.rng.random() < share)

    def number(self, low: int, high: int) -> int:
        """Return a whole number from low to high, both included."""
        return int(self.rng.integers(low, high + 1))

    def some(self, items: Sequence[Any], most: int) -> list[Any]:
        """Return one to `most` of the items, none if there are none."""
        if not items:
            return []
        count = self.number(1, min(most, len(items)))
        return [items[int(k)] for k in self.rng.choice(len(items), count, replace=False)]

    def free_rules(self, fits: Callable[[Rule], bool]) -> list[Rule]:
        """Return the rules that no edit has touched and that fit."""
        return [rule for rule in self.rules if rule.name not in self.touched and fits(rule)]

    def free_activities(self, fits: Callable[[int, Activity], bool]) -> list[int]:
        """Return the positions of the activities that no edit has touched and that fit."""
        return [
            j
            for j, activity in enumerate(self.activities)
            if activity.name not in self.touched
            and activity.name not in self.before.rule_index
            and fits(j, activity)
        ]

    def value(self, terms: Sequence[tuple[int, Number]]) -> Number:
        """Return the value of a sum at the plan."""
        return lowest(sum((c * self.plan[j] for j, c in terms), 0))

    # ------------------------------------------------------------------ editing

    def add(
        self,
        terms: Terms,
        least: Number | None,
        most: Number | None,
        give: Number | None = None,
        give_most: Number | None = None,
        name: str | None = None,
    ) -> None:
        """Add a rule, as text or as a table of one."""
        taken = {rule.name for rule in (*self.before.rules, *self.added)}
        if name is None:
            name = next(n for n in (f"new{k}" for k in range(len(taken) + 1)) if n not in taken)
        text = self.algebra(terms, least, most)
        value: Any = text
        if give is not None:
            value = {"rule": text, "give": give}
            if give_most is not None:
                value["give_most"] = give_most
        elif self.chance(0.15):
            value = {"rule": text, "note": "drawn"}
        rule = Rule(name, tuple(sorted(terms)), least, most, "", give, give_most)
        self.arguments.setdefault("add", {})[name] = rule if self.chance(0.1) else value
        self.touched.add(name)
        self.added.append(rule)

    def waive(self, name: str) -> None:
        """Take a rule out by name."""
        self.arguments.setdefault("waive", []).append(name)
        self.touched.add(name)
        self.rules = [rule for rule in self.rules if rule.name != name]

    def waive_bound(self, j: int, side: str) -> None:
        """Take a bound out."""
        activity = self.activities[j]
        self.arguments.setdefault("waive", []).append(f"{activity.name} {side}")
        self.touched.add(activity.name)
        self.activities[j] = replace(activity, **{side: None})

    def limit(self, rule: Rule, least: Number | None, most: Number | None) -> None:
        """Give a rule new limits on the sides it has."""
        self.arguments.setdefault("set", {})[rule.name] = self.setting(
            rule.name,
            None if least == rule.least else least,
            None if most == rule.most else most,
            equal=least == most and rule.least is not None and rule.most is not None,
        )
        self.touched.add(rule.name)
        place = self.rules.index(rule)
        self.rules[place] = replace(rule, least=least, most=most)

    def bound(self, j: int, least: Number | None, most: Number | None) -> None:
        """Give an activity new bounds; None leaves a side as it is."""
        activity = self.activities[j]
        sides = [side for side, v in (("least", least), ("most", most)) if v is not None]
        name = activity.name
        if least is not None and least == most:
            text: Any = self.setting(name, least, most, equal=True)
        elif len(sides) == 1 and self.chance(0.4):
            name = f"{name} {sides[0]}"
            sign = "=" if self.chance(0.5) else "<=" if most is not None else ">="
            limit = least if most is None else most
            text = limit if self.chance(0.3) else f"{sign} {written(limit)}"
        else:
            text = self.setting(name, least, most)
        self.arguments.setdefault("set", {})[name] = text
        self.touched.add(activity.name)
        self.activities[j] = replace(
            activity,
            least=activity.least if least is None else least,
            most=activity.most if most is None else most,
        )

    def freeze(self, j: int) -> None:
        """Keep an activity at its amount in the standing plan."""
        activity = self.activities[j]
        self.arguments.setdefault("freeze", []).append(activity.name)
        self.touched.add(activity.name)
        self.activities[j] = replace(activity, least=self.plan[j], most=self.plan[j])

    def room(self, j: int, least: Number | None, most: Number | None) -> bool:
        """Tell whether an activity would have an amount left between new bounds."""
        activity = self.activities[j]
        low = activity.least if least is None else least
        high = activity.most if most is None else most
        if low is None or high is None:
            return True
        return math.ceil(low) <= math.floor(high) if activity.whole else low <= high

    # ------------------------------------------------------------------ writing

    def setting(
        self, name: str, least: Number | None, most: Number | None, equal: bool = False
    ) -> Any:
        """Write limits for `set`: as a pair or as text, None for a side that stays."""
        if (least is None and most is None) or self.chance(0.2):
            return (least, most)
        spoken = f"{name} " if self.chance(0.2) else ""
        if equal and least is not None and least == most:
            return f"{spoken}= {written(least)}"
        if least is None:
            return f"{spoken}<= {written(most)}"
        if most is None:
            return f"{spoken}>= {written(least)}"
        return f"{written(least)} <= {name} <= {written(most)}"

    def algebra(self, terms: Terms, least: Number | None, most: Number | None) -> str:
        """Write a rule: terms in any order, on both sides, or between two limits."""
        order = [terms[int(k)] for k in self.rng.permutation(len(terms))]
        both = least is not None and most is not None
        if both and least != most:
            if self.chance(0.5):
                return f"{written(least)} <= {self.sum(order)} <= {written(most)}"
            return f"{written(most)} >= {self.sum(order)} >= {written(least)}"
        limit = most if least is None else least
        sign = "=" if both else "<=" if least is None else ">="
        right = order[: self.number(0, 2)] if self.chance(0.3) else []
        left = order[len(right) :]
        if not left:
            left, right = right, left
        other = self.sum([(j, -c) for j, c in right])
        tail = written(limit) if not right else f"{written(limit)} + {other}"
        if self.chance(0.15):
            turned = {"<=": ">=", ">=": "<=", "=": "="}[sign]
            return f"{tail} {turned} {self.sum(left)}"
        return f"{self.sum(left)} {sign} {tail}"

    def sum(self, terms: Sequence[tuple[int, Number]]) -> str:
        """Write a sum of terms; a term is now and then split in two that add up."""
        parts = []
        for j, c in terms:
            name = self.before.activities[j].name
            if self.chance(0.05):
                parts.append(f"{written(c - 1)}*{name} + {name}")
            else:
                parts.append(name if c == 1 else f"{written(c)}*{name}")
        return " + ".join(parts)

    def done(self, kinds: Sequence[str]) -> Change:
        """Return the change."""
        sheet = replace(
            self.before,
            activities=tuple(self.activities),
            rules=(*self.rules, *self.added),
        )
        return Change(tuple(kinds), self.arguments, sheet)


def lowest(value: Number) -> Number:
    """Return `value` as an int when it is whole."""
    return value.numerator if value.denominator == 1 else value


def written(value: Number) -> str:
    """Write an exact number so that it may stand in any place of a sum."""
    return str(value) if value >= 0 else f"({value})"


# ---------------------------------------------------------------------- changes that cut off


def tighten(draft: Draft) -> bool:
    """Tighten a limit of a binding or nearly binding rule past what the plan has of it."""
    near = []
    for rule in draft.free_rules(lambda rule: rule.give is None and rule.least != rule.most):
        value = draft.value(rule.terms)
        size = max(abs(value), 1)
        for side, limit in (("least", rule.least), ("most", rule.most)):
            if limit is not None and abs(limit - value) <= max(1, NEARLY * size):
                near.append((rule, side, value))
    for rule, side, value in draft.some(near, 1):
        step = draft.number(1, max(1, int(abs(value)) // 40))
        least, most = rule.least, rule.most
        if side == "most":
            most = math.ceil(value) - step
        else:
            least = math.floor(value) + step
        if least is not None and most is not None and least > most:
            return False
        draft.limit(rule, least, most)
        return True
    return False


def cap(draft: Draft) -> bool:
    """Cap one to three activities below their amount in the plan."""
    chosen = draft.some(
        draft.free_activities(lambda j, a: draft.room(j, None, math.ceil(draft.plan[j]) - 1)), 3
    )
    for j in chosen:
        below = math.ceil(draft.plan[j]) - 1
        most = below - draft.number(0, max(0, below // 4))
        if not draft.room(j, None, most):
            most = below
        if draft.chance(0.2):
            draft.add([(j, 1)], None, most)
        else:
            draft.bound(j, None, most)
    return bool(chosen)


def minimum(draft: Draft) -> bool:
    """Give one to three activities a minimum above their amount in the plan."""
    chosen = draft.some(
        draft.free_activities(lambda j, a: draft.room(j, math.floor(draft.plan[j]) + 1, None)), 3
    )
    for j in chosen:
        least = math.floor(draft.plan[j]) + 1
        if draft.chance(0.3) and draft.room(j, least + 1, None):
            least += 1
        if draft.chance(0.2):
            draft.add([(j, 1)], least, None)
        else:
            draft.bound(j, least, None)
    return bool(chosen)


def freeze_away(draft: Draft) -> bool:
    """Fix one to three activities at another amount than the plan has."""

    def apart(j: int, step: int) -> int:
        amount = draft.plan[j]
        return math.floor(amount) + step if step > 0 else math.ceil(amount) + step

    step = -1 if draft.chance(0.5) else 1
    chosen = draft.some(
        draft.free_activities(lambda j, a: draft.room(j, apart(j, step), apart(j, step))), 3
    )
    chosen = [j for j in chosen if within(draft.activities[j], apart(j, step))]
    for j in chosen:
        draft.bound(j, apart(j, step), apart(j, step))
    return bool(chosen)


def within(activity: Activity, amount: Number) -> bool:
    """Tell whether an amount lies within an activity's bounds."""
    low, high = activity.least, activity.most
    return (low is None or amount >= low) and (high is None or amount <= high)


def dense_terms(draft: Draft) -> Terms:
    """Draw small whole coefficients on most activities, all above 0 in two of three draws."""
    count = len(draft.activities)
    share = draft.rng.uniform(0.5, 1.0)
    size = draft.rng.integers(1, 10, count)
    if draft.chance(1 / 3):
        size = size * draft.rng.choice([-1, 1], count)
    used = draft.rng.random(count) < share
    used[draft.number(0, count - 1)] = True
    return [(int(j), int(size[j])) for j in np.flatnonzero(used)]


def dense(draft: Draft) -> bool:
    """Add a dense row that misses the plan by one unit."""
    terms = dense_terms(draft)
    value = draft.value(terms)
    if draft.chance(0.5):
        draft.add(terms, value + 1, None)
    else:
        draft.add(terms, None, value - 1)
    return True


# ---------------------------------------------------------------------- other additions


def met(draft: Draft) -> bool:
    """Add a rule that the plan meets, now and then exactly."""
    terms = dense_terms(draft)
    value, spare = draft.value(terms), draft.number(0, 4)
    limits: list[Limits] = [
        (value - spare, None),
        (None, value + spare),
        (value, value),
        (value - 1, value + spare),
    ]
    draft.add(terms, *limits[draft.number(0, 3)])
    return True


def equality(draft: Draft) -> bool:
    """Add an equality near the plan, of few or many activities."""
    terms = dense_terms(draft)
    if draft.chance(0.6):
        terms = terms[:3]
    value = draft.value(terms) + draft.number(-4, 4)
    draft.add(terms, value, value)
    return True


def two_sided(draft: Draft) -> bool:
    """Add a rule with two limits, which the plan may miss on either side."""
    terms = dense_terms(draft)
    least = draft.value(terms) + draft.number(-9, 6)
    draft.add(terms, least, least + draft.number(1, 8))
    return True


def fractions(draft: Draft) -> bool:
    """Add a rule with coefficients and a limit that no decimal expresses."""
    terms = [(j, lowest(Fraction(c, draft.number(1, 7)))) for j, c in dense_terms(draft)]
    value = lowest(draft.value(terms) + Fraction(draft.number(-6, 4), 3))
    draft.add(terms, *((None, value) if draft.chance(0.5) else (value, None)))
    return True


def soft(draft: Draft) -> bool:
    """Add a soft rule that the plan misses, with or without an end to its bending."""
    terms = dense_terms(draft)
    value = draft.value(terms)
    limits: list[Limits] = [
        (value + draft.number(1, 4), None),
        (None, value - draft.number(1, 4)),
        (value + 1, value + 1),
        (value + 1, value + 3),
    ]
    give_most = draft.number(0, 5) if draft.chance(0.5) else None
    give = draft.number(1, 12)
    draft.add(terms, *limits[draft.number(0, 3)], give=give, give_most=give_most)
    return True


def soft_met(draft: Draft) -> bool:
    """Add a soft rule that the plan meets without bending."""
    terms = dense_terms(draft)
    value = draft.value(terms)
    limits = (value - draft.number(0, 3), None) if draft.chance(0.5) else (None, value)
    draft.add(terms, *limits, give=draft.number(1, 9))
    return True


def beyond(draft: Draft) -> bool:
    """Add a rule that is missed with every activity at its most helpful bound."""
    terms = [
        (j, c)
        for j, c in dense_terms(draft)
        if (draft.activities[j].most if c > 0 else draft.activities[j].least) is not None
    ]
    if not terms:
        return False
    top = sum(c * (draft.activities[j].most if c > 0 else draft.activities[j].least)
              for j, c in terms)  # fmt: skip
    if draft.chance(0.5):
        draft.add(terms, lowest(top + 1), None)
    else:
        draft.add([(j, -c) for j, c in terms], None, lowest(-top - 1))
    return True


# ---------------------------------------------------------------------- rules that there are


def limited(item: Rule | Activity) -> bool:
    """Tell whether a rule or an activity has a limit."""
    return item.least is not None or item.most is not None


def set_rule(draft: Draft) -> bool:
    """Move limits of a rule, soft ones too, inward or outward by a few units."""
    for rule in draft.some(draft.free_rules(limited), 1):
        step = Fraction(draft.number(-4, 4), 3 if draft.chance(0.2) else 1)
        least, most = rule.least, rule.most
        if least is not None and least == most:
            ends = draft.number(0, 2)
            least = lowest(least + step) if ends != 1 else least
            most = lowest(most + step) if ends != 0 else most
        elif least is not None and (most is None or draft.chance(0.5)):
            least = lowest(least + step)
        elif most is not None:
            most = lowest(most + step)
        if least is not None and most is not None and least > most:
            return False
        draft.limit(rule, least, most)
        return True
    return False


def outward(draft: Draft) -> bool:
    """Move a limit of a rule outward."""
    for rule in draft.some(draft.free_rules(limited), 1):
        step = draft.number(1, 6)
        if rule.most is None or (rule.least is not None and draft.chance(0.5)):
            draft.limit(rule, rule.least - step, rule.most)
        else:
            draft.limit(rule, rule.least, rule.most + step)
        return True
    return False


def bound_outward(draft: Draft) -> bool:
    """Move a bound of an activity outward."""
    for j in draft.some(draft.free_activities(lambda j, a: limited(a)), 1):
        activity, step = draft.activities[j], draft.number(1, 4)
        if activity.most is None or (activity.least is not None and draft.chance(0.4)):
            draft.bound(j, activity.least - step, None)
        else:
            draft.bound(j, None, activity.most + step)
        return True
    return False


def waive(draft: Draft) -> bool:
    """Take out one or two rules."""
    rules = draft.some(draft.free_rules(lambda rule: True), 2)
    for rule in rules:
        draft.waive(rule.name)
    return bool(rules)


def waive_bound(draft: Draft) -> bool:
    """Take out a bound of an activity."""
    for j in draft.some(draft.free_activities(lambda j, a: limited(a)), 1):
        sides = [s for s in ("least", "most") if getattr(draft.activities[j], s) is not None]
        draft.waive_bound(j, draft.some(sides, 1)[0])
        return True
    return False


def replaced(draft: Draft) -> bool:
    """Waive a rule and add another one under its name."""
    for rule in draft.some(draft.free_rules(lambda rule: True), 1):
        draft.waive(rule.name)
        terms = dense_terms(draft)
        value = draft.value(terms) + draft.number(-3, 5)
        limits = (None, value) if draft.chance(0.5) else (value, None)
        draft.add(terms, *limits, name=rule.name)
        return True
    return False


def freeze(draft: Draft) -> bool:
    """Freeze one to three activities at their amounts in the plan."""
    if not draft.standing:
        return False
    chosen = draft.some(draft.free_activities(lambda j, a: within(a, draft.plan[j])), 3)
    for j in chosen:
        draft.freeze(j)
    return bool(chosen)


def nothing(draft: Draft) -> bool:
    """Set a limit to what it is."""
    for rule in draft.some(draft.free_rules(limited), 1):
        draft.arguments.setdefault("set", {})[rule.name] = (rule.least, rule.most)
        draft.touched.add(rule.name)
        return True
    return False


KINDS: dict[str, Callable[[Draft], bool]] = {
    "tighten": tighten,
    "cap": cap,
    "minimum": minimum,
    "freeze away": freeze_away,
    "dense": dense,
    "met": met,
    "equality": equality,
    "two-sided": two_sided,
    "fractions": fractions,
    "soft": soft,
    "soft met": soft_met,
    "beyond": beyond,
    "set": set_rule,
    "outward": outward,
    "bound outward": bound_outward,
    "waive": waive,
    "waive bound": waive_bound,
    "replaced": replaced,
    "freeze": freeze,
    "nothing": nothing,
}
PLANNERS = ("tighten", "cap", "minimum", "freeze away")
SEVERAL = 0.25  # the share of random changes that are made of two or three kinds


def amounts_of(sheet: Sheet, plan: dict[str, Number] | None, rng: np.random.Generator) -> list:
    """Return the amounts a change is drawn around: the plan's, or any inside the bounds."""
    if plan is not None:
        return [plan[activity.name] for activity in sheet.activities]
    found: list[Number] = []
    for activity in sheet.activities:
        low, high = activity.least, activity.most
        low = (0 if high is None else high - 5) if low is None else low
        high = low + 5 if high is None else high
        found.append(int(rng.integers(math.ceil(low), max(math.floor(high), math.ceil(low)) + 1)))
    return found


def start(sheet: Sheet, plan: dict[str, Number] | None, rng: np.random.Generator) -> Draft:
    """Return an empty draft; the plan's odd fractions are rounded, so that numbers stay small."""
    amounts = amounts_of(sheet, plan, rng)
    plain = all(amount.denominator <= LARGEST_DENOMINATOR for amount in amounts)
    if not plain:
        amounts = [a if a.denominator <= LARGEST_DENOMINATOR else math.floor(a) for a in amounts]
    return Draft(sheet, amounts, plan is not None and plain, rng)


def drawn(
    sheet: Sheet, plan: dict[str, Number] | None, rng: np.random.Generator, kinds: Sequence[str]
) -> Change:
    """Draw a change of the kinds in turn, without those that the sheet has no place for."""
    draft = start(sheet, plan, rng)
    made = [kind for kind in kinds if KINDS[kind](draft)]
    return draft.done(made)


def planners_change(sheet: Sheet, plan: dict[str, Number], seed: int) -> Change:
    """Return a change that a planner would make and that cuts the plan off.

    Half of the draws tighten a rule's limit past the plan's value, where some limit binds or
    nearly does; the others cap, raise or fix one to three activities away from the plan.
    """
    rng = np.random.default_rng([seed, 71])
    for _ in range(100):
        first = "tighten" if rng.random() < 0.5 else PLANNERS[int(rng.integers(1, 4))]
        change = drawn(sheet, plan, rng, [first])
        if change.kinds:
            return change
    raise ValueError("no bound or limit of this sheet can be moved past the plan")


def dense_change(sheet: Sheet, plan: dict[str, Number], seed: int) -> Change:
    """Return a dense row of small whole numbers that misses the plan by one unit."""
    return drawn(sheet, plan, np.random.default_rng([seed, 72]), ["dense"])


def met_change(sheet: Sheet, plan: dict[str, Number], seed: int) -> Change:
    """Return an added rule that the plan meets."""
    return drawn(sheet, plan, np.random.default_rng([seed, 73]), ["met"])


def random_change(
    sheet: Sheet, plan: dict[str, Number] | None, rng: np.random.Generator, kind: str | None = None
) -> Change:
    """Return a change of the named kind or of any, a quarter of them of several kinds at once.

    Parameters
    ----------
    sheet : what is changed
    plan : the exact amounts of the standing plan, None where there is none
    rng : where the draws come from
    kind : the first kind to try; others follow until one finds its place in the sheet
    """
    names = list(KINDS)
    count = int(rng.integers(2, 4)) if rng.random() < SEVERAL else 1
    kinds = [names[int(k)] for k in rng.integers(0, len(names), count)]
    if kind is not None:
        kinds[0] = kind
    while True:
        change = drawn(sheet, plan, rng, kinds)
        if change.kinds:
            return change
        kinds = [names[int(rng.integers(0, len(names)))]]
