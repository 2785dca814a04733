"""A plan near an earlier one: a small search in which most activities stay where they are.

Activities whose amount in the relaxation's point is that of the earlier plan are held there, and
what is left is searched depth first, a few nodes deep.  Where that is done within its limit, the
activities are let go that the relaxation holds where they are at little cost, and it is searched
again.  Nothing done here is evidence; it only finds plans, which are checked exactly like any
other.

References
----------
E. Danna, E. Rothberg, C. Le Pape, Exploring relaxation induced neighborhoods to improve MIP
solutions, Mathematical Programming 102:71-90, 2005.
N. Mladenovic, P. Hansen, Variable neighborhood search, Computers and Operations Research
24:1097-1100, 1997.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import NamedTuple

import numpy as np

from intplan.relaxation.dictionary import Dictionary, Status
from intplan.search.branching import highest_rise, penalties, scores
from intplan.search.context import Context
from intplan.search.diving import fractional_rows
from intplan.search.tightening import Bounds
from intplan.sheet.problem import Number

NODES = 100  # most relaxations of one look around a plan
PIVOTS_A_NODE = 60  # most dual pivots of one of them
LIVELY = 0.1  # share of the gap below which a reduced cost lets its activity go
AGREE = 1e-6  # distance at which two amounts count as the same
POINTS = 3  # points with divisible amounts that are tried as plans


class _Open(NamedTuple):
    """A node to look at: the table and bounds of its parent, owned, and its own new bound."""

    dictionary: Dictionary
    bounds: Bounds
    change: tuple[int, float, float] | None


def look_nearby(
    context: Context,
    start: Dictionary,
    bounds: Bounds,
    plan: Sequence[Number],
) -> bool:
    """Look for a better plan near an earlier one; tell whether one was found.

    Parameters
    ----------
    start, bounds : an optimal relaxation and its bounds, left unchanged
    plan : the earlier plan, whether or not it still fits
    """
    search = _Nearby(context, start, bounds)
    held, costs = _held(context, start, bounds, plan)
    found = search.run(held)
    if not search.exhausted or start.value > context.best.cutoff:
        return found
    if context.best.value is None:
        few = held[(-costs).argsort(kind="stable")[: len(held) // 2]]
    else:
        few = held[costs > LIVELY * (context.best.cutoff - start.value)]
    return (len(few) < len(held) and search.run(few)) or found


def _held(
    context: Context, start: Dictionary, bounds: Bounds, plan: Sequence[Number]
) -> tuple[np.ndarray, np.ndarray]:
    """Return the activities to hold, and what the cost rises by when one moves a unit, (k,) each.

    These are the whole activities that the relaxation has where the plan has them.
    """
    point = start.activities()
    free = (context.problem.whole & (bounds.least < bounds.most)).nonzero()[0]
    pairs = ((x, plan[j]) for j, x in zip(free.tolist(), point[free].tolist(), strict=True))
    same = [x - AGREE < amount < x + AGREE for x, amount in pairs]  # doubles need not hold it
    held = free[np.array(same, bool)]
    places = start.place[held]
    costs = np.where(places < 0, np.abs(start.reduced[np.minimum(places, -1) * -1 - 1]), 0.0)
    return held, costs


class _Nearby:
    """Depth-first searches of neighbourhoods of one point, with one limit for all of them."""

    def __init__(self, context: Context, start: Dictionary, bounds: Bounds) -> None:
        self.context = context
        self.start = start
        self.bounds = bounds
        self.left = NODES
        self.exhausted = False  # whether the last search came to its end
        self.cutoff = np.inf
        self.points: list[np.ndarray] = []

    def run(self, held: np.ndarray) -> bool:
        """Search with some activities held at their amounts; tell whether a plan was found."""
        context, bounds = self.context, self.bounds.copy()
        amounts = np.rint(self.start.activities()[held])
        bounds.least[held] = bounds.most[held] = amounts
        dictionary = self.start.copy()
        dictionary.set_bounds(held.tolist(), bounds.least, bounds.most)
        waiting = [_Open(dictionary, bounds, None)]
        self.cutoff = context.best.cutoff
        self.points.clear()
        found = False
        while waiting and self.left and not context.limits.out_of_time():
            node = waiting.pop()
            self.left -= 1
            if not self._solve(node):
                continue
            rows = fractional_rows(node.dictionary, context.problem.whole)
            if len(rows):
                waiting.extend(self._children(node, rows))
            else:
                found |= self._take(node.dictionary)
        self.exhausted = not waiting
        return self._take_points() or found

    def _solve(self, node: _Open) -> bool:
        """Solve a node's relaxation; tell whether it may hold a better plan."""
        dictionary = node.dictionary
        if node.change is not None:
            column, least, most = node.change
            node.bounds.least[column], node.bounds.most[column] = least, most
            dictionary.set_bound(column, least, most)
        before = dictionary.pivots
        status = dictionary.reoptimise(self.cutoff, PIVOTS_A_NODE)
        self.context.pivots += dictionary.pivots - before
        return status in (Status.OPTIMAL, Status.LIMIT) and dictionary.value <= self.cutoff

    def _children(self, node: _Open, rows: np.ndarray) -> Iterator[_Open]:
        """Yield the children of a node that may hold a better plan, the likelier one last.

        What the first dual pivot on each side costs chooses the activity and the order.
        """
        dictionary, bounds = node.dictionary, node.bounds
        values = dictionary.values[rows]
        gains, _ = penalties(dictionary, rows, values - np.floor(values))
        spare = self.cutoff - dictionary.value
        i = scores(np.minimum(gains, highest_rise(dictionary, spare))).argmax().item()
        column, floor = dictionary.basic.item(rows[i]), np.floor(values.item(i))
        sides = [
            (gains.item(0, i), (column, bounds.least.item(column), floor)),
            (gains.item(1, i), (column, floor + 1.0, bounds.most.item(column))),
        ]
        likely = sorted((side for side in sides if side[0] <= spare), reverse=True)
        if len(likely) == 2:
            yield _Open(dictionary.copy(), bounds.copy(), likely[0][1])
        if likely:
            yield _Open(dictionary, bounds, likely[-1][1])

    def _take(self, dictionary: Dictionary) -> bool:
        """Take a point with whole amounts as a plan; tell whether it was one, and better.

        Where there are divisible amounts too, whose exact values take long to find, it is looked
        at once the search is over, unless a better one has come by then.
        """
        context, best = self.context, self.context.best
        if context.arithmetic.divisible:
            value, step = dictionary.value, float(best.step)
            self.points.append(dictionary.activities())
            self.cutoff = value - max(step * (1.0 - AGREE), 1e-9 * (1.0 + abs(value)))
            return False
        plan = context.arithmetic.guess_plan(dictionary.activities())
        found = plan is not None and best.offer(plan)
        self.cutoff = min(self.cutoff, best.cutoff)
        return found

    def _take_points(self) -> bool:
        """Take the best point that was put off and is a plan; tell whether it is a better one."""
        context = self.context
        for point in self.points[: -POINTS - 1 : -1]:
            plan = context.arithmetic.guess_plan(point)
            if plan is not None:
                return context.best.offer(plan)
        return False
