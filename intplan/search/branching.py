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

from intplan.relaxation.dictionary import PIVOT, Dictionary, Status

RELIABLE = 4  # branchings observed on each side before an estimate is trusted
CANDIDATES = 8  # most activities to try at a node
LOOKAHEAD = 3  # tries without a better score before the rest is left alone
TRIAL_PIVOTS = 12  # most dual pivots of one trial
SCORE_FLOOR = 1e-6


class Trial(NamedTuple):
    """A child solved for a few pivots: its dictionary (closed or not) and how that ended."""

    dictionary: Dictionary
    status: Status


@dataclass
class Choice:
    """What to branch on: the activity, its value, and the trial children where made.

    `closed` lists sides (0: at most the floor, 1: at least the ceiling) that a trial found empty
    or beaten, with the trial that shows it.
    """

    column: int
    value: float
    down_gain: float
    up_gain: float
    pivots: int = 0
    closed: list[tuple[int, int, float, Trial]] = field(default_factory=list)


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
) -> np.ndarray:
    """Return the rise of the bound in the first dual pivot of each branch, (2, k).

    Parameters
    ----------
    rows : (k,) dictionary rows of the basic activities in question
    fractions : (k,) their distance above the floor
    """
    entries = dictionary.entries[rows] * dictionary.side
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = np.abs(dictionary.reduced) / entries
    up = np.where(entries > PIVOT, ratios, np.inf).min(axis=1, initial=np.inf)
    down = np.where(entries < -PIVOT, -ratios, np.inf).min(axis=1, initial=np.inf)
    gains = np.stack((down * fractions, up * (1.0 - fractions)))
    if dictionary.free:
        gains[:] = 0.0
    return gains


def score(down: float, up: float) -> float:
    """Combine both sides' rises: their product, so that neither side is neglected."""
    return max(down, SCORE_FLOOR) * max(up, SCORE_FLOOR)


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
    first = penalties(dictionary, rows, fractions)
    largest = max(cutoff - dictionary.value, 0.0) if cutoff < np.inf else np.inf
    first = np.minimum(first, largest if largest < np.inf else 1e6 * (1 + abs(dictionary.value)))
    gains = costs.estimate(columns, fractions, first)
    scores = np.maximum(gains[0], SCORE_FLOOR) * np.maximum(gains[1], SCORE_FLOOR)
    order = (-scores).argsort(kind="stable")[:CANDIDATES]
    best: Choice | None = None
    best_score, stale, spent = -1.0, 0, 0
    closed: list[tuple[int, int, float, Trial]] = []
    for i in order:
        column, value = columns.item(i), values.item(i)
        gain = [gains.item(0, i), gains.item(1, i)]
        if costs.count[:, column].min() < RELIABLE:
            for side in (0, 1):
                trial = try_child(dictionary, column, value, side, cutoff)
                spent += trial.dictionary.pivots - dictionary.pivots
                rise = trial.dictionary.value - dictionary.value
                if trial.status in (Status.EMPTY, Status.BEATEN):
                    closed.append((column, side, value, trial))
                    gain[side] = max(rise, min(largest, 1e6 * (1 + abs(dictionary.value))))
                else:
                    gain[side] = max(rise, 0.0)
                    fraction = fractions.item(i)
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
) -> Trial:
    """Solve one child of a branching for a few pivots."""
    child = dictionary.copy()
    place = child.place.item(column)
    least, most = child.basic_least.item(place), child.basic_most.item(place)
    if side:
        child.set_bound(column, float(np.ceil(value)), most)
    else:
        child.set_bound(column, least, float(np.floor(value)))
    return Trial(child, child.reoptimise(cutoff, TRIAL_PIVOTS))
