"""Diving: a plan sought by fixing one fractional activity after the other.

Nothing a dive does is evidence; it only finds plans, which are checked exactly like any other.

References
----------
T. Berthold, Primal heuristics for mixed integer programs, Diploma thesis, Technische Universitaet
Berlin, 2006 (fractional diving).
E. Danna, E. Rothberg, C. Le Pape, Exploring relaxation induced neighborhoods to improve MIP
solutions, Mathematical Programming 102:71-90, 2005 (guided dives, towards the best plan).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from intplan.relaxation.dictionary import Dictionary, Status
from intplan.search.context import Context
from intplan.search.tightening import Bounds
from intplan.sheet.problem import Number

FRACTION = 1e-6  # distance from a whole value that counts as fractional
PIVOTS_A_STEP = 40
DOWN = 3.0  # how much less a step down is liked than one up by the same distance: it settles less


def dive(
    context: Context, start: Dictionary, bounds: Bounds, towards: Sequence[Number] | None
) -> bool:
    """Dive from a relaxed node; tell whether a better plan was found.

    Parameters
    ----------
    start, bounds : of the node, left unchanged
    towards : a plan to fix activities towards; None for their nearest whole values
    """
    dictionary, bounds = start.copy(), bounds.copy()
    before = dictionary.pivots
    found = False
    for _ in range(dictionary.columns):  # activities without a bound could climb for ever
        if context.limits.out_of_time():
            break
        rows = fractional_rows(dictionary, context.problem.whole)
        x = dictionary.activities()
        if not len(rows):
            plan = context.arithmetic.guess_plan(x)
            found |= plan is not None and context.best.offer(plan)
            break
        found |= context.round_to_plan(x, bounds)
        column, up = _choose(dictionary, rows, towards)
        least, most, value = bounds.least.item(column), bounds.most.item(column), x.item(column)
        rounded_up, rounded_down = (float(np.ceil(value)), most), (least, float(np.floor(value)))
        first, second = (rounded_up, rounded_down) if up else (rounded_down, rounded_up)
        kept = dictionary.copy()
        if not _fix(context, dictionary, bounds, column, first):
            kept.pivots, dictionary = dictionary.pivots, kept
            if not _fix(context, dictionary, bounds, column, second):
                break
    context.pivots += dictionary.pivots - before
    return found


def fractional_rows(dictionary: Dictionary, whole: np.ndarray) -> np.ndarray:
    """Return the dictionary rows of whole activities away from a whole value, (k,)."""
    values = dictionary.values
    rows = (np.abs(values - np.rint(values)) > FRACTION).nonzero()[0]
    rows = rows[dictionary.basic[rows] < dictionary.columns]
    return rows[whole[dictionary.basic[rows]]]


def _choose(
    dictionary: Dictionary, rows: np.ndarray, towards: Sequence[Number] | None
) -> tuple[int, bool]:
    """Choose the activity to fix and whether upwards."""
    columns = dictionary.basic[rows]
    values = dictionary.values[rows]
    parts = values - np.floor(values)
    if towards is not None:
        wanted = np.array([float(towards[j]) for j in columns.tolist()])
        i = np.abs(wanted - values).argmin()
        return columns.item(i), bool(wanted[i] > values[i])
    distances = np.minimum(1.0 - parts, DOWN * parts)
    i = distances.argmin()
    return columns.item(i), bool(1.0 - parts[i] <= DOWN * parts[i])


def _fix(
    context: Context,
    dictionary: Dictionary,
    bounds: Bounds,
    column: int,
    ends: tuple[float, float],
) -> bool:
    """Give an activity new bounds and re-optimise; False if no better plan lies there."""
    bounds.least[column], bounds.most[column] = ends
    dictionary.set_bound(column, *ends)
    status = dictionary.reoptimise(context.best.cutoff, PIVOTS_A_STEP)
    return status in (Status.OPTIMAL, Status.LIMIT)
