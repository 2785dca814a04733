"""Lifted minimal cover cuts on rules with 0-1 activities, in integers throughout.

References
----------
E. Balas, Facets of the knapsack polytope, Mathematical Programming 8:146-164, 1975.
H. Crowder, E. L. Johnson, M. Padberg, Solving large-scale zero-one linear programming problems,
Operations Research 31:803-834, 1983.
Z. Gu, G. L. Nemhauser, M. W. P. Savelsbergh, Lifted cover inequalities for 0-1 integer programs:
computation, INFORMS J. Computing 10:427-437, 1998 (items at value 1 lifted down).
E. Zemel, Easily computable facets of the knapsack polytope, Mathematics of Operations Research
14:760-764, 1989 (lifting by the least weight for each left-hand value).
"""

from __future__ import annotations

import math
from bisect import bisect_right
from fractions import Fraction
from typing import Any, NamedTuple

import numpy as np

from intplan.search.cuts.candidate import Candidate
from intplan.search.cuts.distances import Rounding
from intplan.search.tightening import Bounds
from intplan.sheet.problem import ExactRow, Number

LARGEST = 1 << 52  # coefficients beyond this are left alone
FULL = 1e-6  # distance from 1 at which an item counts as taken


class Item(NamedTuple):
    """A 0-1 activity of a knapsack: its weight, and whether it stands for 1 - x."""

    column: int
    weight: int
    flipped: bool


def cover_cut(
    rounding: Rounding, number: int, row: ExactRow, limit: int
) -> Candidate | None:
    """Return a violated lifted cover cut of one limit of one rule, or None.

    Parameters
    ----------
    rounding : what is known of the problem
    number, row : the rule
    limit : 0 for its least, 1 for its most
    """
    x, knapsack = rounding.x, _knapsack(row, limit, rounding.bounds, rounding.whole)
    if knapsack is None:
        return None
    items, capacity, others = knapsack
    values = {i.column: 1 - x.item(i.column) if i.flipped else x.item(i.column) for i in items}
    best: Candidate | None = None
    tried = set()
    for by_weight in (True, False):
        cover = _minimal_cover(items, capacity, values, by_weight)
        if cover is None:
            return None
        full = sorted(
            (i for i in cover if values[i.column] > 1 - FULL), key=lambda i: (i.weight, i.column)
        )
        few = full[: len(full) - max(0, 2 - (len(cover) - len(full)))]
        for fixed in (few, []) if few else ([],):
            key = (frozenset(i.column for i in cover), len(fixed))
            if key in tried:
                continue
            tried.add(key)
            inequality = _lift(
                [i for i in cover if i not in fixed], fixed, items, capacity, values
            )
            if inequality is None:
                continue
            candidate = _candidate(
                rounding, number, limit, inequality, cover, others
            )
            if candidate.measure(x) and (best is None or candidate.efficacy > best.efficacy):
                best = candidate
    return best


def _candidate(
    rounding: Rounding,
    number: int,
    limit: int,
    inequality: tuple[list[tuple[Item, int]], int],
    cover: list[Item],
    others: np.ndarray,
) -> Candidate:
    """Write an inequality over items as a row over the activities."""
    lifted, right = inequality
    coefficients = np.zeros(len(rounding.whole))
    least = -right
    for item, coefficient in lifted:
        if item.flipped:
            coefficients[item.column] = coefficient
            least += coefficient
        else:
            coefficients[item.column] = -coefficient
    shift = max(coefficient for _, coefficient in lifted).bit_length() - 1
    scale = 2.0**-shift

    def explain() -> tuple[dict[str, Any], bool]:
        touched = coefficients != 0
        touched[others >> 1] = True
        box, leans = rounding.box(touched)
        evidence = {
            "row": number, "limit": limit, "cover": [i.column for i in cover],
            "lifted": [(i.column, c) for i, c in lifted],
            "flipped": [i.column for i, _ in lifted if i.flipped],
            "bounds": others, "values": rounding.bounds.values(others), **box,
        }  # fmt: skip
        return evidence, leans

    return Candidate("cover", coefficients * scale, least * scale, explain, shift=shift)


def _knapsack(
    row: ExactRow, limit: int, bounds: Bounds, whole: np.ndarray
) -> tuple[list[Item], Number, np.ndarray] | None:
    """Write a limit as ``weights @ items <= capacity`` over 0-1 items with positive weights.

    Activities that are not 0-1 take the bound at which they leave the most room; the numbers of
    those bounds are returned as well.
    """
    bound = row.most if limit else row.least
    if bound is None:
        return None
    capacity: Number = bound if limit else -bound
    items, others = [], []
    for column, coefficient in zip(row.columns, row.coefficients, strict=True):
        weight = coefficient if limit else -coefficient
        if abs(weight) > LARGEST:
            return None
        low, high = bounds.least.item(column), bounds.most.item(column)
        if whole[column] and low == 0 and high == 1:
            items.append(Item(column, abs(weight), weight < 0))
            capacity += max(-weight, 0)
            continue
        end = low if weight > 0 else high
        if math.isinf(end):
            return None
        others.append(2 * column + (weight < 0))
        capacity -= weight * Fraction(end) if not float(end).is_integer() else weight * int(end)
    weights = [i.weight for i in items]
    if len(items) < 2 or min(weights) == max(weights):
        return None  # a cover of equal weights says no more than the rule, its limit rounded
    if capacity < 0 or sum(weights) <= capacity:
        return None
    return items, capacity, np.array(others, int)


def _minimal_cover(
    items: list[Item], capacity: Number, values: dict[int, float], by_weight: bool
) -> list[Item] | None:
    """Return a minimal cover that is violated as much as greed finds it.

    Items enter by their distance from 1, next to their weight or alone.
    """
    cover: list[Item] = []
    weight = 0

    def rank(item: Item) -> tuple[float, int, int]:
        missing = 1 - values[item.column]
        return (missing / item.weight if by_weight else missing, -item.weight, item.column)

    for item in sorted(items, key=rank):
        if item.weight > capacity:
            continue
        cover.append(item)
        weight += item.weight
        if weight > capacity:
            break
    if weight <= capacity:
        return None
    for item in sorted(cover, key=lambda i: (values[i.column], i.column)):
        if weight - item.weight > capacity:
            cover.remove(item)
            weight -= item.weight
    return cover


def _lift(
    cover: list[Item],
    fixed: list[Item],
    items: list[Item],
    capacity: Number,
    values: dict[int, float],
) -> tuple[list[tuple[Item, int]], int] | None:
    """Lift the inequality of a cover over the other items.

    Parameters
    ----------
    cover : items of a minimal cover once those of `fixed` are taken
    fixed : items of the cover at value 1, taken at first and lifted down
    items : all items of the knapsack

    Returns
    -------
    (item, coefficient) pairs and the right-hand side, or None if too little is left of the cover
    or the point does not violate it.
    First items with a value are lifted up, then the fixed ones down, then the rest up; the least
    weight for each left-hand value gives every coefficient.
    """
    if len(cover) < 2:
        return None
    room: Number = capacity - sum(i.weight for i in fixed)
    right = len(cover) - 1
    lightest: list[Number] = [0]
    for weight in sorted(i.weight for i in cover):
        lightest.append(lightest[-1] + weight)
    lifted = [(i, 1) for i in cover]
    inside = {i.column for i in (*cover, *fixed)}
    rest = sorted(
        (i for i in items if i.column not in inside),
        key=lambda i: (-values[i.column], -i.weight, i.column),
    )
    taken = [i for i in rest if values[i.column] > 1e-9]

    def lift_up(item: Item) -> None:
        if item.weight > room:
            coefficient = right
        else:
            coefficient = right - _greatest(lightest, room - item.weight)
        if coefficient > 0:
            lifted.append((item, coefficient))
            _admit(lightest, item.weight, coefficient)

    for item in taken:
        lift_up(item)
    for item in sorted(fixed, key=lambda i: (-i.weight, i.column)):
        coefficient = _greatest(lightest, room + item.weight) - right
        room += item.weight
        if coefficient > 0:
            right += coefficient
            lifted.append((item, coefficient))
            _admit(lightest, item.weight, coefficient)
    if sum(c * values[i.column] for i, c in lifted) <= right + FULL:
        return None  # the rest, at 0, adds nothing to it
    for item in rest[len(taken) :]:
        lift_up(item)
    return lifted, right


def _greatest(lightest: list[Number], room: Number) -> int:
    """Return the greatest left-hand value whose least weight fits the room."""
    return bisect_right(lightest, room) - 1


def _admit(lightest: list[Number], weight: int, coefficient: int) -> None:
    """Let one more item count in the least weights (non-decreasing in the value)."""
    top = len(lightest) - 1
    extended = [
        lightest[v - coefficient] + weight if v >= coefficient else weight
        for v in range(top + coefficient + 1)
    ]
    for v in range(1, top + 1):
        lightest[v] = min(lightest[v], extended[v])
    lightest.extend(extended[top + 1 :])
    for v in range(len(lightest) - 2, 0, -1):
        lightest[v] = min(lightest[v], lightest[v + 1])
