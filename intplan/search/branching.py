"""The choice of the activity to branch on: reliability branching.

References
----------
T. Achterberg, T. Koch, A. Martin, Branching rules revisited, Operations Research Letters 33:42-54,
2005 (reliability branching).
N. J. Driebeek, An algorithm for the solution of mixed integer programming problems, Management
Science 12:576-587, 1966 (the penalty of the first dual pivot, which orders the candidates).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from intplan.relaxation.dictionary import PIVOT, Dictionary, Multipliers, Status

RELIABLE = 4  # branchings observed on each side before an estimate is trusted
CANDIDATES = 8  # most activities to try at a node
LOOKAHEAD = 3  # tries without a better score before the rest is left alone
TRIAL_PIVOTS = 12  # most dual pivots of one trial
SCORE_FLOOR = 1e-6
WIDEST = 1e6  # a rise counts at most so many times the value, where there is no plan to bound it


class Closed(NamedTuple):
    """One side of a branching that is closed, and the multipliers that show it.

    `side` is 0 for at most the floor of `value`, 1 for at least the next whole number; `weight`
    is 1 if the cost takes part (beaten), 0 for a contradiction (empty).
    """

    column: int
    side: int
    value: float
    weight: int
    multipliers: Multipliers


@dataclass
class Choice:
    """What to branch on: the activity, its value, the rise expected on each side.

    `closed` lists sides that the trials found closed; `pivots` is what the trials took.
    """

    column: int
    value: float
    down_gain: float
    up_gain: float
    pivots: int = 0
    closed: list[Closed] = field(default_factory=list)


class PseudoCosts:
    """Mean rise of the bound per unit of fraction, by activity and side (0 down, 1 up)."""

    def __init__(self, columns: int) -> None:
        self.total = np.zeros((2, columns))
        self.count = np.zeros((2, columns), int)

    def record(self, column: int, side: int, fraction: float, gain: float) -> None:
        """Note that the bound rose by `gain` when an activity moved by `fraction`."""
        self.total[side, column] += max(gain, 0.0) / max(fraction, 1e-6)
        self.count[side, column] += 1

    def estimate(
        self, columns: np.ndarray, fractions: np.ndarray, penalties: np.ndarray
    ) -> np.ndarray:
        """Return expected rises, (2, k), by pseudo-cost where known and at least the penalty."""
        count = self.count[:, columns]
        known = self.total[:, columns] / np.maximum(count, 1)
        moves = np.stack((fractions, 1.0 - fractions))
        return np.where(count > 0, np.maximum(known * moves, penalties), penalties)


def penalties(
    dictionary: Dictionary, rows: np.ndarray, fractions: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return the rise of the bound in the first dual pivot of each branch, and its column.

    Parameters
    ----------
    rows : (k,) dictionary rows of the basic activities in question
    fractions : (k,) their distance above the floor

    Returns
    -------
    gains, columns
        (2, k) each, down branches first; infinite where no column can meet the branch.
    """
    entries = dictionary.entries[rows] * dictionary.side
    ratios = np.abs(dictionary.reduced) / entries
    ups = np.where(entries > PIVOT, ratios, np.inf)
    downs = np.where(entries < -PIVOT, -ratios, np.inf)
    columns = np.stack((downs.argmin(axis=1), ups.argmin(axis=1)))
    places = np.arange(len(rows))
    gains = np.stack(
        (downs[places, columns[0]] * fractions, ups[places, columns[1]] * (1.0 - fractions))
    )
    if dictionary.free:
        gains[:] = 0.0
    return gains, columns


def closed_by_penalty(
    dictionary: Dictionary,
    rows: np.ndarray,
    gains: np.ndarray,
    columns: np.ndarray,
    spare: float,
) -> list[Closed]:
    """Return the branches that their first dual pivot closes already.

    Parameters
    ----------
    rows, gains, columns : as of `penalties`
    spare : a rise beyond this beats a child
    """
    closed = []
    for side, i in np.argwhere(gains > spare).tolist():
        row = rows.item(i)
        column, value = dictionary.basic.item(row), dictionary.values.item(row)
        if gains[side, i] == np.inf:
            multipliers = dictionary.row_multipliers(row, 1.0 if side else -1.0)
            closed.append(Closed(column, side, value, 0, multipliers))
        else:
            multipliers = dictionary.cost_multipliers_after(row, columns.item(side, i))
            closed.append(Closed(column, side, value, 1, multipliers))
    return closed


def score(down: float, up: float) -> float:
    """Combine both sides' rises: their product, so that neither side is neglected."""
    return max(down, SCORE_FLOOR) * max(up, SCORE_FLOOR)


def highest_rise(dictionary: Dictionary, spare: float) -> float:
    """Return the rise at which a child counts as closed: `spare` if that is finite."""
    return min(spare, WIDEST * (1.0 + abs(dictionary.value)))


def scores(gains: np.ndarray) -> np.ndarray:
    """Return the scores of several activities, (k,), from both sides' rises, (2, k)."""
    floored = np.maximum(gains, SCORE_FLOOR)
    return floored[0] * floored[1]


def choose(
    dictionary: Dictionary,
    rows: np.ndarray,
    cutoff: float,
    costs: PseudoCosts,
) -> Choice:
    """Choose the activity to branch on.

    Parameters
    ----------
    dictionary : optimal, unchanged by this
    rows : (k,) dictionary rows of fractional whole activities, k >= 1
    cutoff : a child whose cost passes this is beaten
    costs : read and updated by the trials
    """
    columns = dictionary.basic[rows]
    values = dictionary.values[rows]
    fractions = values - np.floor(values)
    first, entering = penalties(dictionary, rows, fractions)
    spare = max(cutoff - dictionary.value, 0.0)
    closed = closed_by_penalty(dictionary, rows, first, entering, spare)
    ceiling = highest_rise(dictionary, spare)
    gains = costs.estimate(columns, fractions, np.minimum(first, ceiling))
    best = (-scores(gains)).argsort(kind="stable")[:CANDIDATES]
    if closed:
        i = best.item(0)
        return Choice(
            columns.item(i), values.item(i), gains.item(0, i), gains.item(1, i), 0, closed
        )
    return _try_candidates(dictionary, columns, values, gains, best, cutoff, ceiling, costs)


def _try_candidates(
    dictionary: Dictionary,
    columns: np.ndarray,
    values: np.ndarray,
    gains: np.ndarray,
    order: np.ndarray,
    cutoff: float,
    ceiling: float,
    costs: PseudoCosts,
) -> Choice:
    """Go through candidates in order, solving the children of those not yet reliable."""
    best: Choice | None = None
    best_score, stale, spent = -1.0, 0, 0
    closed: list[Closed] = []
    for i in order:
        column, value = columns.item(i), values.item(i)
        gain = [gains.item(0, i), gains.item(1, i)]
        if costs.count[:, column].min() < RELIABLE:
            fraction = value - np.floor(value)
            for side in (0, 1):
                child, status = try_child(dictionary, column, value, side, cutoff)
                spent += child.pivots - dictionary.pivots
                rise = max(child.value - dictionary.value, 0.0)
                if status is Status.EMPTY:
                    multipliers = child.row_multipliers(child.failing_row)
                    closed.append(Closed(column, side, value, 0, multipliers))
                    gain[side] = ceiling
                elif status is Status.BEATEN:
                    closed.append(Closed(column, side, value, 1, child.cost_multipliers()))
                    gain[side] = max(rise, ceiling)
                else:
                    gain[side] = rise
                    costs.record(column, side, 1 - fraction if side else fraction, rise)
        total = score(*gain)
        if total > best_score:
            best_score, stale = total, 0
            best = Choice(column, value, gain[0], gain[1])
        else:
            stale += 1
        if closed or stale >= LOOKAHEAD:
            break
    assert best is not None
    best.pivots, best.closed = spent, closed
    return best


def try_child(
    dictionary: Dictionary, column: int, value: float, side: int, cutoff: float
) -> tuple[Dictionary, Status]:
    """Solve one child of a branching for a few pivots; return its dictionary and how it ended."""
    child = dictionary.copy()
    place = child.place.item(column)
    least, most = child.basic_least.item(place), child.basic_most.item(place)
    if side:
        child.set_bound(column, float(np.ceil(value)), most)
    else:
        child.set_bound(column, least, float(np.floor(value)))
    return child, child.reoptimise(cutoff, TRIAL_PIVOTS)
