"""Lifted minimal cover cuts on rules with 0-1 activities, in integers throughout.

References
----------
E. Balas, Facets of the knapsack polytope, Mathematical Programming 8:146-164, 1975.
H. Crowder, E. L. Johnson, M. Padberg, Solving large-scale zero-one linear programming problems,
Operations Research 31:803-834, 1983.
E. Zemel, Easily computable facets of the knapsack polytope, Mathematics of Operations Research
14:760-764, 1989 (lifting by the least weight for each left-hand value).
"""

from __future__ import annotations

import math
from fractions import Fraction
from typing import NamedTuple

import numpy as np

from intplan.search.cuts.candidate import Candidate
from intplan.search.tightening import Bounds
from intplan.sheet.problem import ExactRow, Number

LARGEST = 1 << 52  # coefficients beyond this are left alone


class Item(NamedTuple):
    """A 0-1 activity of a knapsack: its weight, and whether it stands for 1 - x."""

    column: int
    weight: int
    flipped: bool


def cover_cut(
    number: int, row: ExactRow, limit: int, x: np.ndarray, bounds: Bounds, whole: np.ndarray
) -> Candidate | None:
    """Return a violated lifted cover cut of one limit of one rule, or None.

    Parameters
    ----------
    number, row : the rule
    limit : 0 for its least, 1 for its most
    x : (columns,) the relaxation's point
    bounds : bounds under which the cut will be used, or wider ones
    """
    knapsack = _knapsack(row, limit, bounds, whole)
    if knapsack is None:
        return None
    items, capacity, others = knapsack
    values = {i.column: 1 - x.item(i.column) if i.flipped else x.item(i.column) for i in items}
    cover = _minimal_cover(items, capacity, values)
    if cover is None or sum(1 - values[i.column] for i in cover) > 1.5:
        return None
    lifted = _lift(cover, items, capacity, values)
    coefficients = np.zeros(len(x))
    least = 1 - len(cover)
    for item, coefficient in lifted:
        if item.flipped:
            coefficients[item.column] = coefficient
            least += coefficient
        else:
            coefficients[item.column] = -coefficient
    largest = max(coefficient for _, coefficient in lifted)
    shift = largest.bit_length() - 1
    scale = 2.0**-shift
    candidate = Candidate(
        "cover", coefficients * scale, least * scale,
        {"row": number, "limit": limit, "cover": [i.column for i in cover],
         "lifted": [(i.column, c) for i, c in lifted],
         "flipped": [i.column for i, _ in lifted if i.flipped],
         "bounds": others, "values": _values(others, bounds)},
        bool(bounds.leans[others & 1, others >> 1].any()),
        shift,
    )  # fmt: skip
    return candidate if candidate.measure(x) else None


def _values(numbers: np.ndarray, bounds: Bounds) -> np.ndarray:
    columns = numbers >> 1
    return np.where(numbers & 1, bounds.most[columns], bounds.least[columns])


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
    if len(items) < 2 or capacity < 0 or sum(i.weight for i in items) <= capacity:
        return None
    return items, capacity, np.array(others, int)


def _minimal_cover(
    items: list[Item], capacity: Number, values: dict[int, float]
) -> list[Item] | None:
    """Return a minimal cover that is violated as much as greed finds it."""
    cover: list[Item] = []
    weight = 0
    for item in sorted(items, key=lambda i: ((1 - values[i.column]) / i.weight, i.column)):
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
    cover: list[Item], items: list[Item], capacity: Number, values: dict[int, float]
) -> list[tuple[Item, int]]:
    """Lift a minimal cover's inequality over the other items, the largest values first.

    ``lightest[v]`` is the least weight of items so far whose coefficients add up to at least v.
    """
    right = len(cover) - 1
    lightest: list[Number] = [0]
    for weight in sorted(i.weight for i in cover):
        lightest.append(lightest[-1] + weight)
    lightest = lightest[: right + 1]
    lifted = [(i, 1) for i in cover]
    inside = {i.column for i in cover}
    rest = [i for i in items if i.column not in inside]
    for item in sorted(rest, key=lambda i: (-values[i.column], -i.weight, i.column)):
        room = capacity - item.weight
        if room < 0:
            coefficient = right + 1
        else:
            reachable = max(v for v in range(right + 1) if lightest[v] <= room)
            coefficient = right - reachable
        if coefficient == 0:
            continue
        lifted.append((item, coefficient))
        if room < 0:
            continue
        for v in range(right, 0, -1):
            before = lightest[v - coefficient] if v >= coefficient else 0
            lightest[v] = min(lightest[v], before + item.weight)
    return lifted
