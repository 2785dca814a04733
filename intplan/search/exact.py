"""The relaxation in exact arithmetic, for the nodes and plans that doubles cannot settle.

The same dictionary as in `intplan.relaxation`, in integers over one common denominator: a pivot
multiplies by the pivot element and divides, without remainder, by the old denominator.

References
----------
J. Edmonds, Systems of distinct representatives and linear algebra, J. Research of the National
Bureau of Standards 71B:241-245, 1967; E. H. Bareiss, Sylvester's identity and multistep
integer-preserving Gaussian elimination, Mathematics of Computation 22:565-578, 1968.
R. G. Bland, New finite pivoting rules for the simplex method, Mathematics of Operations Research
2:103-107, 1977.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from intplan.relaxation.dictionary import Stopped
from intplan.sheet.problem import Number

GREEDY = 200  # pivots by greatest violation before the least-index rule takes over


@dataclass
class ExactSystem:
    """A linear problem in integers.

    Attributes
    ----------
    entries : (rows, columns) Python integers in an object array
    row_least, row_most : limits of the rows, None where there is none
    cost : (columns,) integers in an object array
    least, most : bounds of the activities
    """

    entries: np.ndarray
    row_least: list[Number | None]
    row_most: list[Number | None]
    cost: np.ndarray
    least: list[Number | None]
    most: list[Number | None]


@dataclass
class ExactAnswer:
    """The outcome of an exact run.

    Attributes
    ----------
    status : "optimal", "empty" or "unbounded" (then `point` is a direction of improvement)
    value : the least cost, when optimal
    point : values of the activities
    multipliers : row number -> multiplier; of the cost when optimal, of the contradiction when
        empty (see `intplan.search.evidence` for the signs)
    basis : variable numbers of the last basis
    """

    status: str
    value: Fraction | None
    point: list[Fraction]
    multipliers: dict[int, Fraction]
    basis: list[int]


class _ExactDictionary:
    def __init__(self, system: ExactSystem, stop: Callable[[], bool]) -> None:
        self.system = system
        self.stop = stop
        rows, columns = system.entries.shape
        self.columns = columns
        self.table = np.vstack((system.entries, system.cost[None, :]))
        self.denominator = 1
        self.basic = [columns + i for i in range(rows)]
        self.nonbasic = list(range(columns))
        self.low = [*system.least, *system.row_least]
        self.high = [*system.most, *system.row_most]

    def go_to(self, basis: Sequence[int]) -> None:
        """Pivot towards a basis as far as its matrix allows."""
        wanted = set(basis)
        for variable in [v for v in self.nonbasic if v in wanted]:
            column = self.nonbasic.index(variable)
            for row, leaving in enumerate(self.basic):
                if leaving not in wanted and self.table[row, column] != 0:
                    self.pivot(row, column)
                    break

    def pivot(self, row: int, column: int) -> None:
        if self.stop():
            raise Stopped
        table, denominator = self.table, self.denominator
        pivot = table[row, column]
        across = table[row].copy()
        left = table[:, column].copy()
        table *= pivot
        table -= np.outer(left, across)
        if denominator != 1:
            table //= denominator
        table[:, column] = left
        table[row] = -across
        table[row, column] = denominator
        if pivot < 0:
            table *= -1
            pivot = -pivot
        self.denominator = pivot
        self.basic[row], self.nonbasic[column] = self.nonbasic[column], self.basic[row]

    def settle_sides(self) -> bool:
        """Put non-basic variables where their reduced costs ask; False if a bound is missing."""
        self.at: list[Number] = []
        self.side: list[int] = []
        for column, variable in enumerate(self.nonbasic):
            low, high = self.low[variable], self.high[variable]
            reduced = self.table[-1, column]
            if (reduced > 0 and low is None) or (reduced < 0 and high is None):
                return False
            at_least = low is not None and (reduced >= 0 or high is None)
            value = low if at_least else high if high is not None else 0
            self.at.append(value)
            fixed = low is not None and low == high
            loose = low is None and high is None
            self.side.append(0 if fixed or loose else 1 if at_least else -1)
        return True

    def values(self) -> list[Fraction]:
        """Return the values of the basic variables and, last, the cost."""
        moved = [c for c, v in enumerate(self.at) if v != 0]
        unit = math.lcm(*(self.at[c].denominator for c in moved))
        amounts = np.array([int(self.at[c] * unit) for c in moved], object)
        totals = self.table[:, moved] @ amounts if moved else [0] * len(self.table)
        return [Fraction(total, unit * self.denominator) for total in totals]

    def point(self) -> list[Fraction]:
        point: list[Fraction] = [Fraction(0)] * self.columns
        placed = zip(self.nonbasic, self.at, strict=True)
        solved = zip(self.basic, self.values()[:-1], strict=True)
        for variable, value in (*placed, *solved):
            if variable < self.columns:
                point[variable] = Fraction(value)
        return point

    def run(self) -> int | None:
        """Run the dual simplex method; return the row that cannot be met, or None."""
        made = 0
        while True:
            values = self.values()
            row, above = self._leaving(values, made >= GREEDY)
            if row is None:
                return None
            column = self._entering(row, above, made >= GREEDY)
            if column is None:
                self.failed_above = above
                return row
            leaving = self.basic[row]
            self.pivot(row, column)
            low, high = self.low[leaving], self.high[leaving]
            self.at[column] = high if above else low
            self.side[column] = 0 if low == high else -1 if above else 1
            made += 1

    def _leaving(self, values: list[Fraction], bland: bool) -> tuple[int | None, bool]:
        best: tuple[Fraction, int] | None = None
        chosen, above = None, False
        for row, variable in enumerate(self.basic):
            low, high, value = self.low[variable], self.high[variable], values[row]
            short = low - value if low is not None and value < low else None
            over = value - high if high is not None and value > high else None
            if short is None and over is None:
                continue
            rank = (0, -variable) if bland else (short if over is None else over, -variable)
            if best is None or rank > best:
                best, chosen, above = rank, row, over is not None
        return chosen, above

    def _entering(self, row: int, above: bool, bland: bool) -> int | None:
        best = None
        chosen = None
        for column, entry in enumerate(self.table[row]):
            if entry == 0:
                continue
            side = self.side[column]
            variable = self.nonbasic[column]
            if side == 0:
                if self.low[variable] is not None or self.high[variable] is not None:
                    continue
            elif (entry * side > 0) == above:
                continue
            ratio = Fraction(abs(self.table[-1, column]), abs(entry))
            rank = (ratio, variable if bland else -abs(entry))
            if best is None or rank < best:
                best, chosen = rank, column
        return chosen

    def multipliers(self, entries: np.ndarray) -> dict[int, Fraction]:
        n = self.columns
        return {
            variable - n: Fraction(entry, self.denominator)
            for variable, entry in zip(self.nonbasic, entries, strict=False)
            if variable >= n and entry != 0
        }


def solve_exactly(
    system: ExactSystem, basis: Sequence[int] = (), stop: Callable[[], bool] = lambda: False
) -> ExactAnswer:
    """Solve a linear problem in rationals.

    Parameters
    ----------
    basis : variable numbers to start from (activities, then rows after them)
    stop : polled at each pivot

    Raises
    ------
    Stopped
        When `stop` says so.
    """
    dictionary = _ExactDictionary(system, stop)
    dictionary.go_to(basis)
    if not dictionary.settle_sides():
        boxed = _boxed(system)
        direction = _ExactDictionary(boxed, stop)
        direction.settle_sides()
        direction.run()
        if direction.values()[-1] < 0:
            return ExactAnswer("unbounded", None, direction.point(), {}, direction.basic)
        dictionary = _ExactDictionary(system, stop)
        dictionary.go_to(direction.basic)
        if not dictionary.settle_sides():
            raise AssertionError("the boxed problem's last basis is dual feasible")
    failed = dictionary.run()
    if failed is None:
        return ExactAnswer(
            "optimal",
            Fraction(dictionary.values()[-1]),
            dictionary.point(),
            dictionary.multipliers(dictionary.table[-1]),
            dictionary.basic,
        )
    sign = -1 if dictionary.failed_above else 1
    multipliers = {
        row: -sign * y for row, y in dictionary.multipliers(dictionary.table[failed]).items()
    }
    if dictionary.basic[failed] >= dictionary.columns:
        multipliers[dictionary.basic[failed] - dictionary.columns] = Fraction(sign)
    return ExactAnswer("empty", None, [], multipliers, dictionary.basic)


def _boxed(system: ExactSystem) -> ExactSystem:
    """Return the problem of directions: limits become 0, missing bounds one unit."""

    def zero(limits: list[Number | None]) -> list[Number | None]:
        return [None if v is None else 0 for v in limits]

    return ExactSystem(
        system.entries,
        zero(system.row_least),
        zero(system.row_most),
        system.cost,
        [-1 if v is None else 0 for v in system.least],
        [1 if v is None else 0 for v in system.most],
    )
