"""Whether a sheet has a plan although its whole activities may run away: made a bounded question.

Branching alone may go on for ever where whole activities have no bounds. Two steps take that out.

A direction along which every rule and bound may be followed for ever meets some of them better and
better: these can be met whatever the rest of the plan is, and go. A direction in the relative
interior of all of them lets as many go as can. What is left stands still along every such
direction. So whole activities can be shifted along the whole steps among these directions without
any effect, and are written in other whole numbers, of which only those that have an effect are
kept. Their range is bounded, and the search comes to an end.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import partial
from itertools import count
from typing import NamedTuple

from intplan.planning.budget import Budget
from intplan.planning.standing import StandingPlan, solve
from intplan.sheet import Activity, Aim, Rule, Sheet
from intplan.sheet.numbers import Number, lowest

Solve = Callable[[Sheet], StandingPlan]

AWAY_NODES = 10  # nodes of a search in which whole activities may run away, before it is bounded


class AnyPlan(NamedTuple):
    """What a search for any plan of a sheet came to.

    Attributes
    ----------
    amounts : of the activities, if it found a plan
    search : the last search; ``infeasible`` where there is none. Its sheet is the one asked about,
        or the bounded form, which shares the names of rules and bounds
    """

    amounts: Sequence[Number] | None
    search: StandingPlan


def any_plan(
    sheet: Sheet,
    budget: Budget,
    proof: StandingPlan | None = None,
    most_nodes: int | None = None,
) -> AnyPlan:
    """Look for any plan of a sheet, whatever its aim, by its bounded form if it might not end.

    Parameters
    ----------
    sheet : soft rules count at the limits to which they may bend
    budget : the limits, shared with what came before
    proof : shows that a sheet of the same activities has no plan; its tree is taken up
    most_nodes : a node limit of one search
    """
    from intplan.planning.restart import feasible

    away = runs_away(sheet)
    few = AWAY_NODES if most_nodes is None else min(AWAY_NODES, most_nodes)
    nodes = few if away else most_nodes
    test = budget.run(feasible, proof, sheet, most_nodes=nodes)
    if test.answer.plan is not None:
        return AnyPlan(test.answer.plan[: len(sheet.activities)], test)
    if test.outcome == "infeasible" or not away or budget.ended_by() is not None:
        return AnyPlan(None, test)
    form = bounded(sheet, partial(budget.run, solve))
    if form is None or budget.ended_by() is not None:
        return AnyPlan(None, test)
    test = budget.run(feasible, None, form.sheet, most_nodes=most_nodes)
    return AnyPlan(None if test.answer.plan is None else form.lift(test.answer.plan), test)


def widest(rule: Rule) -> Rule:
    """Return a soft rule as a firm one at the limits to which it may bend; others as they are."""
    if rule.give is None:
        return rule
    least = most = None
    if rule.give_most is not None:
        least = None if rule.least is None else lowest(rule.least - rule.give_most)
        most = None if rule.most is None else lowest(rule.most + rule.give_most)
    return replace(rule, least=least, most=most, give=None, give_most=None, text="")


@dataclass(frozen=True)
class Bounded:
    """A sheet that has a plan if and only if another sheet has one, and whose search ends.

    Attributes
    ----------
    sheet : the bounded sheet; rules and bounds that it shares with the other have the same names
    original : the other sheet
    sources : for each activity of `original`, the (activity of `sheet`, factor) pairs whose sum
        it is
    direction : by activity of `original`, whole for whole activities: what to follow until the
        rules and bounds that went are met as well
    """

    sheet: Sheet
    original: Sheet
    sources: tuple[tuple[tuple[int, int], ...], ...]
    direction: tuple[Number, ...]

    def lift(self, amounts: Sequence[Number]) -> list[Number]:
        """Return the plan of `original` that a plan of `sheet` stands for."""
        plan = [sum(factor * amounts[k] for k, factor in source) for source in self.sources]
        steps: Number = 0
        for terms, least, most in _limits(self.original):
            speed = sum(c * self.direction[j] for j, c in terms)
            if not speed:
                continue
            limit = least if speed > 0 else most
            if limit is not None:
                value = sum(c * plan[j] for j, c in terms)
                steps = max(steps, math.ceil(Fraction(limit - value) / speed))
        pairs = zip(plan, self.direction, strict=True)
        return [lowest(amount + steps * step) for amount, step in pairs]


def runs_away(sheet: Sheet) -> bool:
    """Tell whether some whole activity lacks a bound."""
    return any(a.whole and (a.least is None or a.most is None) for a in sheet.activities)


def bounded(sheet: Sheet, search: Solve = solve) -> Bounded | None:
    """Return the bounded form of a sheet without an aim.

    Parameters
    ----------
    sheet : its soft rules count at the limits to which they may bend
    search : solves the sheet that finds the direction

    Returns
    -------
    Bounded or None
        None where the search for the direction was ended by a limit.

    Notes
    -----
    With C the directions of the polyhedron P of the rules, L their span, and c a whole step inside
    C: if z in P + L is whole, then z + k c is in P for large k. P + L keeps the limits that stand
    still along c. The whole numbers are changed by column operations as for Hermite's normal form
    (A. Schrijver, Theory of Linear and Integer Programming, Wiley, 1986, chapter 4), then
    shortened (A. K. Lenstra, H. W. Lenstra, L. Lovasz, Factoring polynomials with rational
    coefficients, Math. Annalen 261:515-534, 1982), for branching on skewed ones takes long.
    """
    original = replace(sheet, aim=Aim(), rules=tuple(map(widest, sheet.rules)))
    direction = _direction(original, search)
    if direction is None:
        return None
    rules = [_still(rule, direction) for rule in original.rules]
    rules = [rule for rule in rules if rule.least is not None or rule.most is not None]
    activities = []
    for activity, step in zip(original.activities, direction, strict=True):
        least, most = (None, None) if step else (activity.least, activity.most)
        activities.append(replace(activity, least=least, most=most))
    return _compressed(original, activities, rules, direction)


def _limits(sheet: Sheet) -> Iterator[tuple[Sequence[tuple[int, Number]], Number | None, ...]]:
    """Yield terms, least and most of each rule and each activity."""
    for rule in sheet.rules:
        yield rule.terms, rule.least, rule.most
    for j, activity in enumerate(sheet.activities):
        yield ((j, 1),), activity.least, activity.most


def _direction(sheet: Sheet, search: Solve) -> tuple[Number, ...] | None:
    """Return a direction that leaves as many limits behind as any; whole for whole activities."""
    names = (f"d[{number}]" for number in count())
    activities = [Activity(next(names), least=None, whole=False) for _ in sheet.activities]
    rules, ways = [], []
    for number, (terms, least, most) in enumerate(_limits(sheet)):
        if least is None and most is None:
            continue
        if not (least is None or most is None):
            rules.append(Rule(f"r[{number}]", tuple(terms), 0, 0))
            continue
        way = len(activities)
        ways.append(way)
        activities.append(Activity(next(names), most=1, whole=False))
        if most is None:
            rules.append(Rule(f"r[{number}]", (*terms, (way, -1)), 0, None))
        else:
            rules.append(Rule(f"r[{number}]", (*terms, (way, 1)), None, 0))
    aim = Aim("maximize", tuple((way, 1) for way in ways))
    found = search(Sheet("", "", aim, tuple(activities), tuple(rules)))
    if found.outcome != "optimal":
        return None
    direction = found.result.plan[: len(sheet.activities)]
    scale = math.lcm(*(step.denominator for step in direction))
    return tuple(lowest(step * scale) for step in direction)


def _still(rule: Rule, direction: Sequence[Number]) -> Rule:
    """Return a rule without limits if the direction leaves them behind, else as it is."""
    if sum(c * direction[j] for j, c in rule.terms):
        return replace(rule, least=None, most=None)
    return rule


def _compressed(
    original: Sheet,
    activities: Sequence[Activity],
    rules: Sequence[Rule],
    direction: tuple[Number, ...],
) -> Bounded:
    """Write whole activities without bounds in the whole numbers that have an effect on rules."""
    free = [a.least is None and a.most is None for a in activities]
    loose = [j for j, a in enumerate(activities) if free[j] and a.whole]
    divisible = [j for j, a in enumerate(activities) if free[j] and not a.whole]
    effects = _without(rules, divisible, loose)
    basis = _whole_basis(effects, len(loose))
    kept = [j for j in range(len(activities)) if j not in set(loose)]
    at = {j: k for k, j in enumerate(kept)}
    new = [activities[j] for j in kept]
    taken = {activity.name for activity in activities}
    names = (n for n in (f"step[{number}]" for number in count()) if n not in taken)
    sources: list[tuple[tuple[int, int], ...]] = [
        ((at[j], 1),) if j in at else () for j in range(len(activities))
    ]
    for place, j in enumerate(loose):
        steps = ((len(kept) + k, column[place]) for k, column in enumerate(basis))
        sources[j] = tuple((k, factor) for k, factor in steps if factor)
    new += [Activity(next(names), least=None) for _ in basis]
    if not new:
        new = [Activity(next(names), most=0)]
    rewritten = tuple(replace(r, terms=_rewritten(r, sources), text="") for r in rules)
    sheet = replace(original, activities=tuple(new), rules=rewritten)
    return Bounded(sheet, original, tuple(sources), direction)


def _rewritten(
    rule: Rule, sources: Sequence[tuple[tuple[int, int], ...]]
) -> tuple[tuple[int, Number], ...]:
    """Return the terms of a rule in the new activities."""
    total: dict[int, Number] = {}
    for j, c in rule.terms:
        for k, factor in sources[j]:
            total[k] = total.get(k, 0) + c * factor
    return tuple((k, lowest(total[k])) for k in sorted(total) if total[k])


def _without(
    rules: Sequence[Rule], divisible: Sequence[int], loose: Sequence[int]
) -> list[list[int]]:
    """Return rows of integers: what moves of `loose` that `divisible` cannot make good.

    Divisible activities are eliminated from the rules; the rows left over bind `loose` alone.
    """
    rows = []
    for rule in rules:
        factors = dict(rule.terms)
        rows.append([Fraction(factors.get(j, 0)) for j in (*divisible, *loose)])
    for place in range(len(divisible)):
        pivot = next((row for row in rows if row[place]), None)
        if pivot is None:
            continue
        rows = [_minus(row, pivot, row[place] / pivot[place]) for row in rows if row is not pivot]
    integers = []
    for row in rows:
        scale = math.lcm(*(c.denominator for c in row))
        integers.append([int(c * scale) for c in row[len(divisible) :]])
    return integers


def _minus(row: list[Fraction], pivot: list[Fraction], factor: Fraction) -> list[Fraction]:
    if not factor:
        return row
    return [a - factor * b for a, b in zip(row, pivot, strict=True)]


def _whole_basis(rows: Sequence[Sequence[int]], width: int) -> list[list[int]]:
    """Return the columns of a unimodular matrix U that have an effect, where rows @ U is (H, 0).

    Parameters
    ----------
    rows : integers, of the given width
    """
    # Each column carries its values in the rows above its entries in U.
    columns = [[row[j] for row in rows] + [int(i == j) for i in range(width)] for j in range(width)]
    done = 0
    for place in range(len(rows)):
        while True:
            left = [k for k in range(done, width) if columns[k][place]]
            if not left:
                break
            least = min(left, key=lambda k: abs(columns[k][place]))
            columns[done], columns[least] = columns[least], columns[done]
            pivot = columns[done]
            if len(left) == 1:
                done += 1
                break
            for k in range(done + 1, width):
                if times := columns[k][place] // pivot[place]:
                    columns[k] = [a - times * b for a, b in zip(columns[k], pivot, strict=True)]
    return [column[len(rows) :] for column in _shortened(columns[:done], len(rows))]


def _shortened(columns: list[list[int]], height: int) -> list[list[int]]:
    """Return columns of the same lattice whose first `height` entries make short vectors.

    The columns are independent in these entries. Parts of a plan that have little effect on the
    rules, and so a wide range, are then the sums of few.
    """
    basis, crossed, norms = list(columns), [], []
    k = 0
    while k < len(basis):
        for i in reversed(range(k)):
            if times := round(_dot(basis[k], crossed[i]) / norms[i]):
                basis[k] = [a - times * b for a, b in zip(basis[k], basis[i], strict=True)]
        factors = [_dot(basis[k], crossed[i]) / norms[i] for i in range(k)]
        rest = [Fraction(a) for a in basis[k][:height]]
        for factor, other in zip(factors, crossed, strict=True):
            rest = _minus(rest, other, factor)
        norm = _dot(rest, rest)
        if k == 0 or norm >= (Fraction(3, 4) - factors[-1] ** 2) * norms[-1]:
            crossed.append(rest)
            norms.append(norm)
            k += 1
        else:
            basis[k - 1], basis[k] = basis[k], basis[k - 1]
            crossed.pop()
            norms.pop()
            k -= 1
    return basis


def _dot(left: Sequence[Number], right: Sequence[Fraction]) -> Fraction:
    return Fraction(sum(a * b for a, b in zip(left, right, strict=False)))
