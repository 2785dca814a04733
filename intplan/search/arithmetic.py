"""Exact checks of plans and bounds against the integers of a `Problem`."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import NamedTuple

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.rows import RowStore
from intplan.search.exact import ExactAnswer, ExactSystem, solve_exactly
from intplan.search.rational import solve_rationally
from intplan.sheet.problem import ExactRow, Number, Problem, lowest

SAFE = 2.0**52  # sums of integers below this are exact in doubles
GUESS = 10**6  # greatest denominator guessed for a divisible amount
MULTIPLIER_GUESS = 10**7  # greatest denominator guessed for multipliers
MULTIPLIER_ACCURACY = 1e-10
COARSE = 40  # bits of a row's integers up to which its basis is solved exactly


class IntegerRow(NamedTuple):
    """A row of the store: coefficients that are ``2**shift`` times the store's."""

    columns: tuple[int, ...]
    coefficients: tuple[int, ...]
    shift: int


class Arithmetic:
    """The exact side of one search.

    Parameters
    ----------
    problem : the sheet's integers
    rows : the store of the search; rules first (limits possibly tightened), then cuts
    """

    def __init__(self, problem: Problem, rows: RowStore) -> None:
        self.problem = problem
        self.rows = rows
        self.rules = len(problem.rows)
        self.divisible = (~problem.whole).nonzero()[0].tolist()
        self.largest_shift = max((row.shift for row in problem.rows), default=0)
        self._integer_rows: dict[int, IntegerRow] = {}
        self.sizes = np.abs(problem.matrix)
        self.limits = [self._written_limits(row) for row in problem.rows]
        self.plain = all(
            max(map(abs, row.coefficients), default=0) < SAFE
            and _is_integer(row.least)
            and _is_integer(row.most)
            for row in problem.rows
        )

    # ------------------------------------------------------------------ plans

    def guess_plan(self, x: np.ndarray) -> list[Number] | None:
        """Return an exact plan near a point whose whole activities are (nearly) whole.

        Divisible amounts are guessed as whole numbers or fractions of small denominator; None
        if the plan so guessed breaks a rule.
        """
        whole = np.rint(x)
        plan: list[Number] = [int(v) for v in whole.tolist()]
        if not self.divisible:
            return plan if self.fits(plan, whole) else None
        for j in self.divisible:
            plan[j] = lowest(self._clipped(j, nearest_fraction(x.item(j))))
        return plan if self.fits(plan) else None

    def solve_divisible(
        self, x: np.ndarray, stop: Callable[[], bool]
    ) -> list[Number] | None:
        """Return the best plan with the whole activities of a point, solved in rationals.

        Raises
        ------
        Stopped
            When `stop` says so.
        """
        plan: list[Number] = [int(v) for v in np.rint(x).tolist()]
        answer = solve_exactly(self._divisible_system(plan), (), stop)
        if answer.status != "optimal":
            return None
        for j, value in zip(self.divisible, answer.point, strict=True):
            plan[j] = lowest(value)
        return plan if self.fits(plan) else None

    def _clipped(self, column: int, value: Fraction) -> Number:
        low, high = self.problem.exact_least[column], self.problem.exact_most[column]
        if low is not None and value < low:
            return low
        return high if high is not None and value > high else value

    def _divisible_system(self, plan: Sequence[Number]) -> ExactSystem:
        """Return the problem over the divisible activities with the whole ones fixed."""
        problem = self.problem
        place = {j: k for k, j in enumerate(self.divisible)}
        entries, least, most = [], [], []
        for row in problem.rows:
            line = [0] * len(place)
            fixed: Number = 0
            for j, c in zip(row.columns, row.coefficients, strict=True):
                if j in place:
                    line[place[j]] = c
                else:
                    fixed += c * plan[j]
            if any(line):
                entries.append(line)
                least.append(None if row.least is None else row.least - fixed)
                most.append(None if row.most is None else row.most - fixed)
        cost = np.zeros(len(place), object)
        for j, c in problem.exact_cost:
            if j in place:
                cost[place[j]] = c
        return ExactSystem(
            np.array(entries, object).reshape(len(entries), len(place)),
            least,
            most,
            cost,
            [problem.exact_least[j] for j in self.divisible],
            [problem.exact_most[j] for j in self.divisible],
        )

    def fits(self, plan: Sequence[Number], doubles: np.ndarray | None = None) -> bool:
        """Tell whether a plan meets every bound and rule exactly.

        Parameters
        ----------
        plan : one exact amount a column
        doubles : the same plan where every amount is whole; checked in doubles when every sum
            is then exact
        """
        problem = self.problem
        for value, low, high in zip(
            plan, problem.exact_least, problem.exact_most, strict=True
        ):
            if (low is not None and value < low) or (high is not None and value > high):
                return False
        if doubles is not None and self.plain and len(problem.rows):
            reach = (self.sizes @ np.abs(doubles)).max()
            if reach * 2.0**self.largest_shift < SAFE:
                values = problem.matrix @ doubles
                return bool(
                    (values >= problem.row_least).all() and (values <= problem.row_most).all()
                )
        return all(self._row_fits(row, plan) for row in problem.rows)

    @staticmethod
    def _row_fits(row: ExactRow, plan: Sequence[Number]) -> bool:
        value = sum((c * plan[j] for j, c in zip(row.columns, row.coefficients, strict=True)), 0)
        return (row.least is None or value >= row.least) and (
            row.most is None or value <= row.most
        )

    # ------------------------------------------------------------------ bounds

    def integer_row(self, number: int) -> IntegerRow:
        """Return one row of the store in integers; kept once made."""
        if number not in self._integer_rows:
            if number < self.rules:
                row = self.problem.rows[number]
                made = IntegerRow(row.columns, row.coefficients, row.shift)
            else:
                line = self.rows.matrix[number]
                columns = line.nonzero()[0].tolist()
                ratios = [line.item(j).as_integer_ratio() for j in columns]
                shift = max(d for _, d in ratios).bit_length() - 1
                made = IntegerRow(
                    tuple(columns), tuple((p << shift) // q for p, q in ratios), shift
                )
            self._integer_rows[number] = made
        return self._integer_rows[number]

    def row_limits(self, number: int) -> tuple[Number | None, Number | None]:
        """Return the limits of one row exactly, in the store's scale."""
        if number < self.rules:
            return self.limits[number]
        return _exact(self.rows.least[number]), _exact(self.rows.most[number])

    @staticmethod
    def _written_limits(row: ExactRow) -> tuple[Number | None, Number | None]:
        unit = Fraction(1, 1 << row.shift)
        return (
            None if row.least is None else row.least * unit,
            None if row.most is None else row.most * unit,
        )

    def bound_of(self, column: int, side: int, value: float) -> Number | None:
        """Return a node's bound exactly: the written one where the double is no tighter."""
        problem = self.problem
        if side:
            written = problem.exact_most[column] if value >= problem.most[column] else None
        else:
            written = problem.exact_least[column] if value <= problem.least[column] else None
        return _exact(value) if written is None else written

    def exact_bound(
        self,
        weight: int,
        multipliers: dict[int, Fraction],
        least: np.ndarray,
        most: np.ndarray,
    ) -> Fraction | None:
        """Return the bound that exact multipliers prove, None for minus infinity.

        Parameters
        ----------
        weight, multipliers : as in `intplan.search.evidence`
        least, most : (columns,) bounds of the node, taken as exact
        """
        unit = math.lcm(*(y.denominator for y in multipliers.values()))
        rows = {i: self.integer_row(i) for i in multipliers}
        shift = max([self.problem.cost_shift, *(row.shift for row in rows.values())])
        reduced: dict[int, int] = {}  # times unit * 2**shift
        if weight:
            scale = unit << (shift - self.problem.cost_shift)
            reduced = {j: c * scale for j, c in self.problem.exact_cost}
        total: Number = 0
        for number, y in multipliers.items():
            low, high = self.row_limits(number)
            limit = low if y > 0 else high
            if limit is None:
                return None
            row = rows[number]
            scaled = y.numerator * (unit // y.denominator)
            total += (scaled << shift) * limit
            scaled <<= shift - row.shift
            for j, c in zip(row.columns, row.coefficients, strict=True):
                reduced[j] = reduced.get(j, 0) - scaled * c
        for j, d in reduced.items():
            if d == 0:
                continue
            limit = self.bound_of(j, 0, least[j]) if d > 0 else self.bound_of(j, 1, most[j])
            if limit is None:
                return None
            total += d * limit
        return Fraction(total) / (unit << shift)

    @staticmethod
    def guess_multipliers(
        numbers: np.ndarray, values: np.ndarray
    ) -> dict[int, Fraction] | None:
        """Return multipliers as fractions over one denominator, None if none is small enough."""
        guessed = common_denominator(values, MULTIPLIER_GUESS, MULTIPLIER_ACCURACY)
        if guessed is None:
            return None
        integers, unit = guessed
        return {
            i: Fraction(int(v), unit)
            for i, v in zip(numbers.tolist(), integers.tolist(), strict=True)
            if v
        }

    def cost_multipliers(self, dictionary: Dictionary) -> dict[int, Fraction] | None:
        """Return the multipliers that a basis gives the cost, exactly; None if they are too long.

        All rows at their limits must be known in integers.
        """
        cost = dict(self.problem.exact_cost)
        return self._of_basis(dictionary, cost, 1 << self.problem.cost_shift)

    def row_multipliers(self, dictionary: Dictionary, row: int) -> dict[int, Fraction] | None:
        """Return the multipliers that leave only one basic variable beside non-basic ones."""
        variable = dictionary.basic.item(row)
        if variable < dictionary.columns:
            return self._of_basis(dictionary, {variable: 1}, 1)
        number = variable - dictionary.columns
        if self.rows.shift[number] < 0:
            return None
        own = self.integer_row(number)
        line = dict(zip(own.columns, own.coefficients, strict=True))
        found = self._of_basis(dictionary, line, 1 << own.shift)
        if found is not None:
            found[number] = Fraction(-1)
        return found

    def _of_basis(
        self, dictionary: Dictionary, line: dict[int, int], divisor: int
    ) -> dict[int, Fraction] | None:
        """Combine the rows at their limits to ``line / divisor`` on the basic activities."""
        n = dictionary.columns
        numbers = dictionary.nonbasic[dictionary.nonbasic >= n] - n
        shifts = self.rows.shift[numbers]
        if (shifts < 0).any() or (shifts > COARSE).any():
            return None
        columns = dictionary.basic[dictionary.basic < n]
        matrix = np.ldexp(self.rows.matrix[numbers][:, columns].T, shifts).astype(np.int64)
        solution = solve_rationally(matrix, [line.get(j, 0) for j in columns.tolist()])
        if solution is None:
            return None
        numerators, unit = solution
        return {
            number: Fraction(y << shift, unit * divisor)
            for number, shift, y in zip(numbers.tolist(), shifts.tolist(), numerators, strict=True)
            if y
        }

    def solve_node(
        self,
        held: np.ndarray,
        basis: Sequence[int],
        least: np.ndarray,
        most: np.ndarray,
        stop: Callable[[], bool],
    ) -> ExactAnswer:
        """Solve a node's relaxation in rationals, from the basis that doubles ended with.

        Parameters
        ----------
        held : numbers of the rows to hold
        basis : variable numbers, rows counted by the store
        least, most : (columns,) bounds of the node

        Returns
        -------
        ExactAnswer
            Its value is in the engine's cost and its multipliers are by the store's rows.
        """
        n = len(least)
        numbers = held.tolist()
        place = {number: k for k, number in enumerate(numbers)}
        entries = np.zeros((len(numbers), n), object)
        scales, row_least, row_most = [], [], []
        for k, number in enumerate(numbers):
            row = self.integer_row(number)
            low, high = self.row_limits(number)
            scale = 1 << row.shift
            for j, c in zip(row.columns, row.coefficients, strict=True):
                entries[k, j] = c
            scales.append(scale)
            row_least.append(None if low is None else low * scale)
            row_most.append(None if high is None else high * scale)
        cost = np.zeros(n, object)
        for j, c in self.problem.exact_cost:
            cost[j] = c
        system = ExactSystem(
            entries, row_least, row_most, cost,
            [self.bound_of(j, 0, v) for j, v in enumerate(least)],
            [self.bound_of(j, 1, v) for j, v in enumerate(most)],
        )  # fmt: skip
        start = [v if v < n else n + place[v - n] for v in basis]
        answer = solve_exactly(system, start, stop)
        weight = Fraction(1, 1 << self.problem.cost_shift) if answer.status == "optimal" else 1
        answer.multipliers = {
            numbers[k]: y * scales[k] * weight for k, y in answer.multipliers.items()
        }
        if answer.value is not None:
            answer.value *= weight
        return answer


def nearest_fraction(value: float) -> Number:
    """Return the whole number a double nearly is, else a fraction of small denominator."""
    slack = 1e-9 * (1.0 + abs(value))
    fraction = simplest_fraction(value, slack, GUESS)
    return Fraction(*fraction) if fraction else Fraction(value).limit_denominator(GUESS)


def simplest_fraction(value: float, slack: float, largest: int) -> tuple[int, int] | None:
    """Return the first convergent of a double's continued fraction within `slack` of it.

    None if its denominator would pass `largest`.
    """
    before, over, below, under = 1, math.floor(value), 0, 1
    rest = value - over
    while abs(value - over / under) > slack:
        if rest <= 0.0:
            return None
        rest = 1.0 / rest
        whole = math.floor(rest)
        rest -= whole
        before, over = over, whole * over + before
        below, under = under, whole * under + below
        if under > largest:
            return None
    return over, under


def common_denominator(
    values: np.ndarray, largest: int, accuracy: float
) -> tuple[np.ndarray, int] | None:
    """Return integers and a denominator whose quotients are the values, as near as can be told.

    Parameters
    ----------
    values : (k,) doubles
    largest : the denominator's limit; None is returned where it would be passed
    accuracy : how near a value must be to its fraction, next to its own size
    """
    unit = 1
    for value in values.tolist():
        scaled = value * unit
        slack = accuracy * unit * (1.0 + abs(value))
        if abs(scaled - round(scaled)) > slack:
            fraction = simplest_fraction(scaled, slack, largest // unit)
            if fraction is None:
                return None
            unit *= fraction[1]
    return np.rint(values * unit), unit


def _exact(limit: float) -> Number | None:
    """Return a double limit as an exact number, None if it is infinite."""
    limit = float(limit)
    if limit in (np.inf, -np.inf):
        return None
    return int(limit) if limit.is_integer() else Fraction(limit)


def _is_integer(limit: Number | None) -> bool:
    return limit is None or (Fraction(limit).denominator == 1 and abs(limit) < SAFE)
