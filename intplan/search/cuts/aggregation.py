"""Combinations of rows that are worth rounding: chains of balances, set-ups put in.

A balance (what comes in, what is made, what goes out) bounds no set-up by itself.  Added to its
neighbours along the stocks that lie between their bounds, with each amount made replaced by the
set-ups that allow it, it becomes a row over set-ups, and its rounding a strong cut.  Cuts found
that way bound a stock by set-ups in their turn.

References
----------
H. Marchand, L. A. Wolsey, Aggregation and mixed integer rounding to solve MIPs, Operations Research
49:363-371, 2001.
I. Barany, T. J. Van Roy, L. A. Wolsey, Strong formulations for multi-item capacitated lot sizing,
Management Science 30:1255-1261, 1984 (what such chains give).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from intplan.relaxation.rows import RowStore
from intplan.search.cuts.distances import Limits, Rounding

LONGEST = 6  # most rules added up
DIVISORS = 3  # most divisors tried on one sum
BETWEEN = 1e-6  # distance from both bounds at which an activity counts as between them


class Switch(NamedTuple):
    """A row with one divisible activity, which whole ones bound: its coefficient, its room."""

    row: int
    size: float
    slack: float


class Aggregator:
    """Adds rows up along the divisible activities of one problem.

    Parameters
    ----------
    rows : the store; rules first, then cuts
    rules : how many rules
    whole : (columns,) bool
    """

    def __init__(self, rows: RowStore, rules: int, whole: np.ndarray) -> None:
        self.rows = rows
        self.rules = rules
        self.whole = whole
        limited = np.isfinite(rows.least) | np.isfinite(rows.most)
        self.filled = (rows.matrix != 0) & limited[:, None]
        parts = (self.filled & ~whole).sum(axis=1)
        equal = rows.least == rows.most
        switching = (parts == 1) & self.filled[:, whole].any(axis=1) & ~equal
        self.rules_of: list[list[int]] = [[] for _ in whole]
        for i in (~switching).nonzero()[0].tolist():
            for j in (self.filled[i] & ~whole).nonzero()[0].tolist():
                self.rules_of[j].append(i)
        for numbers in self.rules_of:
            numbers.sort(key=lambda i: not equal[i])
        self.starts = (~switching & (parts > 0)).nonzero()[0]
        self.useful = bool(len(self.starts) and switching.any())

    def combinations(self, rounding: Rounding, limits: Limits) -> np.ndarray:
        """Return multipliers of the rows, a line a combination, (k, rows).

        Parameters
        ----------
        rounding : the point to cut off and its bounds
        limits : of all rows, those nearest to the point
        """
        x, bounds = rounding.x, rounding.bounds
        rooms = np.minimum(x - bounds.least, bounds.most - x)
        between = self.whole & (rooms > BETWEEN)
        switches = self._closest_switches(np.abs(self.rows.matrix @ x - limits.at))
        search = _Search(
            self, limits.at, rooms, np.where(self.whole, 0.0, rooms), between, switches
        )
        involved = between.copy()
        for j, switch in switches.items():
            search.free[j] = min(search.free[j], switch.slack)
            involved[j] |= bool((between & (self.rows.matrix[switch.row] != 0)).any())
        for start in self.starts[self.filled[self.starts][:, involved].any(axis=1)].tolist():
            for direction in (-1.0, 1.0):
                search.follow(start, direction)
        return np.array(search.lines).reshape(len(search.lines), self.rows.count)

    def _closest_switches(self, slacks: np.ndarray) -> dict[int, Switch]:
        """Return by activity the switch that leaves it least room."""
        matrix = self.rows.matrix
        parts = (matrix != 0) & ~self.whole
        limited = np.isfinite(self.rows.least) | np.isfinite(self.rows.most)
        single = (parts.sum(axis=1) == 1) & (self.rows.least != self.rows.most) & limited
        single &= (matrix[:, self.whole] != 0).any(axis=1)
        numbers = single.nonzero()[0]
        columns = parts[numbers].argmax(axis=1)
        sizes = matrix[numbers, columns]
        rooms = slacks[numbers] / np.abs(sizes)
        closest: dict[int, Switch] = {}
        for i in (-rooms).argsort(kind="stable").tolist():  # the closest comes last, and stays
            closest[columns.item(i)] = Switch(numbers.item(i), sizes.item(i), rooms.item(i))
        return closest


@dataclass
class _Search:
    """The combinations sought at one point.

    Attributes
    ----------
    base : what is known of the rows
    at : (rows,) the limit each row is measured from
    rooms : (columns,) distances from the nearer bounds
    free : (columns,) the same for divisible activities, at most what a switch leaves; else 0
    between : (columns,) whole activities between their bounds
    switches : the closest switch by activity
    lines : the multipliers found
    seen : the sets of rules that were added up
    """

    base: Aggregator
    at: np.ndarray
    rooms: np.ndarray
    free: np.ndarray
    between: np.ndarray
    switches: dict[int, Switch]
    lines: list[np.ndarray] = field(default_factory=list)
    seen: set[tuple[int, ...]] = field(default_factory=set)

    def follow(self, start: int, direction: float) -> None:
        """Add rules to a first one, each to cancel the activity furthest between its bounds.

        Only activities whose coefficient has the sign of the direction are cancelled: along a
        chain of balances one direction leads to later periods, the other to earlier ones.
        """
        matrix = self.base.rows.matrix
        multipliers = np.zeros(len(matrix))
        multipliers[start] = 1.0
        total = matrix[start].copy()
        for _ in range(LONGEST):
            key = tuple(multipliers.nonzero()[0].tolist())
            if key not in self.seen:
                self.seen.add(key)
                self.divide(multipliers, total)
            room = np.where(total * direction > 0, self.free, 0.0)
            j = room.argmax().item()
            if not BETWEEN < room[j] < np.inf:
                return
            rule = next((i for i in self.base.rules_of[j] if not multipliers[i]), None)
            if rule is None:
                return
            factor = -total.item(j) / matrix.item(rule, j)
            multipliers[rule] = factor
            total += factor * matrix[rule]
            total[j] = 0.0

    def divide(self, multipliers: np.ndarray, total: np.ndarray) -> None:
        """Put switches in and divide by coefficients of whole activities between bounds."""
        whole, matrix = self.base.whole, self.base.rows.matrix
        line, total = multipliers.copy(), total.copy()
        right = abs(float(line @ self.at))
        for j in (total * ~whole).nonzero()[0].tolist():
            switch = self.switches.get(j)
            if switch is None or line[switch.row]:
                continue
            factor = -total.item(j) / switch.size
            change = factor * matrix[switch.row]
            change[j] = 0.0
            # rounding cuts a coefficient down to the right-hand side
            brought = np.minimum(np.abs(change), right) @ self.rooms
            if brought <= abs(total.item(j)) * self.rooms.item(j):
                line[switch.row] = factor
                total += change
                total[j] = 0.0
        sizes = np.abs(total)
        divisors = sorted({*sizes[self.between].tolist()} - {0.0}, reverse=True)[:DIVISORS]
        if divisors:
            largest = sizes[whole].max().item()
            self.lines.extend(line / d for d in {*divisors, largest})
