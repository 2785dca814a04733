"""The compact dictionary of a linear relaxation and the dual simplex method on it.

Variables are the activities ``0 .. columns-1`` and the row values ``columns + i`` of the rows of
a `RowStore`.  Every variable has bounds, possibly infinite, possibly equal.  The dictionary
writes each basic variable, and the cost, in terms of the non-basic ones::

    x[basic] = table[:-1, :-3] @ x[nonbasic]        cost = table[-1, :-3] @ x[nonbasic]

where the table's last three columns are set apart: they hold, at the current point (every
non-basic variable at one of its bounds), each basic variable's value, its room above its least
bound and its room below its most.  A pivot is then one rank-1 update of the whole array, and the
row that is furthest outside its bounds is the least entry of two columns.

References
----------
C. E. Lemke, The dual method of solving the linear programming problem, Naval Research Logistics
Quarterly 1:36-47, 1954.
J. J. Forrest, D. Goldfarb, Steepest-edge simplex algorithms for linear programming, Mathematical
Programming 57:341-374, 1992.
I. Maros, A generalized dual phase-2 simplex algorithm, European J. Operational Research
149:1-16, 2003 (the bound-flipping ratio test).
P. M. J. Harris, Pivot selection methods of the Devex LP code, Mathematical Programming 5:1-28,
1973 (among near ties of the ratio, the largest pivot).
R. G. Bland, New finite pivoting rules for the simplex method, Mathematics of Operations Research
2:103-107, 1977 (used when the cost stands still for long).
A. Koberstein, U. H. Suhl, Progress in the dual simplex method for large scale LP problems:
practical dual phase 1 algorithms, Computational Optimization and Applications 37:49-65, 2007
(the boxed problem of `cold_start`).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from enum import Enum
from typing import NamedTuple

import numpy as np
from scipy.linalg.blas import dger

from intplan.relaxation.rows import RowStore

FEASIBILITY = 1e-9  # how far past a bound a basic value may lie, for bounds up to a thousand
PIVOT = 1e-9  # smallest pivot of the ratio test
ENTRY = 1e-7  # smallest pivot that lets a freed variable enter
SLACK = 1e-11  # added to reduced costs in the ratio test, so that near ties take the large pivot
DRIFT = 1e-8  # residual of the original rows that calls for a refactorisation
FEW = 8  # a violation below this share of all flips together is settled by a few of them
REFACTOR_AFTER = 150  # pivots
CHECK_DRIFT_AFTER = 30  # pivots between two looks at the residual
VALUE, ABOVE, BELOW = -3, -2, -1  # the set-apart columns
MOVE = np.array([1.0, 1.0, -1.0])  # how they change when a basic value grows by one
POLL_EVERY = 32  # pivots between two looks at `stop`
NORMS_FROM = 30  # rows from which steepest-edge pricing pays for its norms


class Stopped(Exception):
    """Raised when the caller's `stop` asks for an end in the middle of a long computation."""


class Status(Enum):
    """How a dual simplex run ended."""

    OPTIMAL = "optimal"
    EMPTY = "empty"
    BEATEN = "beaten"
    LIMIT = "limit"


class Multipliers(NamedTuple):
    """Coefficients on row values, read off a dictionary: row numbers and doubles, both (k,)."""

    rows: np.ndarray
    values: np.ndarray


class Dictionary:
    """A basis of the relaxation with everything the dual simplex method reads.

    Attributes
    ----------
    table : (m + 1, n + 3) doubles, see the module
    basic, nonbasic : (m,) and (n,) variable numbers
    place : (variables,) row of a basic variable, ``-1 - column`` of a non-basic one
    basic_least, basic_most : (m,) bounds of the basic variables
    least, most : (n,) bounds of the non-basic variables
    at : (n,) values of the non-basic variables
    side : (n,) +1 at the least bound, -1 at the most, 0 fixed or free
    free : number of non-basic variables without any bound
    pivots : pivots made since this object's history began
    since_refactored : pivots since the table was last computed from the rows
    tolerance : how far past a bound a basic value may lie
    """

    def __init__(self, rows: RowStore, cost: np.ndarray) -> None:
        self.rows = rows
        self.cost = cost
        self.columns = rows.columns
        self.pivots = 0
        self.since_refactored = self.drift_checked = 0
        self.free = 0
        self.failing_row = -1

    # ------------------------------------------------------------------ making and copying

    @classmethod
    def at_slack_basis(
        cls,
        rows: RowStore,
        cost: np.ndarray,
        least: np.ndarray,
        most: np.ndarray,
        active: np.ndarray | None = None,
    ) -> Dictionary:
        """Return the dictionary in which every row value is basic.

        Parameters
        ----------
        rows : the rows that exist
        cost : (columns,) minimised
        least, most : (columns,) bounds of the activities
        active : numbers of the rows to hold; all of them by default

        Notes
        -----
        Activities sit at the bound their cost asks for.  Where that bound is infinite the
        dictionary is not dual feasible; `intplan.relaxation.start` mends it.
        """
        self = cls(rows, cost)
        n = self.columns
        active = np.arange(rows.count) if active is None else active
        self.basic = active + n
        self.nonbasic = np.arange(n)
        self._take_table(np.vstack((rows.matrix[active], cost)))
        self.basic_least = rows.least[active]
        self.basic_most = rows.most[active]
        self.least = least.copy()
        self.most = most.copy()
        self.tolerance = self._tolerance()
        self._number_places()
        self._choose_sides()
        self.evaluate()
        return self

    @classmethod
    def at_basis(
        cls,
        rows: RowStore,
        cost: np.ndarray,
        least: np.ndarray,
        most: np.ndarray,
        basis: tuple[np.ndarray, np.ndarray],
    ) -> Dictionary:
        """Return the dictionary of a basis, or the slack basis where doubles find it singular.

        Parameters
        ----------
        rows, cost, least, most : as in `at_slack_basis`
        basis : basic and non-basic variable numbers, all activities and the rows to hold

        Notes
        -----
        A slack basis put in its place need not be dual feasible.  Nothing it leads to is believed
        without a proof, so all that is lost is time.
        """
        held = np.sort(np.concatenate(basis))[len(least) :] - len(least)
        self = cls.at_slack_basis(rows, cost, least, most, held)
        try:
            self.adopt_basis(*basis)
        except np.linalg.LinAlgError:
            self = cls.at_slack_basis(rows, cost, least, most, held)
        return self

    def adopt_basis(self, basic: np.ndarray, nonbasic: np.ndarray) -> None:
        """Go to another basis of the same rows, given as variable numbers (m,) and (n,).

        Raises
        ------
        numpy.linalg.LinAlgError
            If the basis is singular in doubles.
        """
        bounds = np.empty((2, len(self.place)))
        for limits, basics, others in (
            (bounds[0], self.basic_least, self.least),
            (bounds[1], self.basic_most, self.most),
        ):
            limits[self.basic] = basics
            limits[self.nonbasic] = others
        self.basic, self.nonbasic = basic.copy(), nonbasic.copy()
        self.basic_least, self.basic_most = bounds[0][basic], bounds[1][basic]
        self.least, self.most = bounds[0][nonbasic], bounds[1][nonbasic]
        self._number_places()
        self.at = np.zeros(self.columns)
        self.refactor()
        self._choose_sides()
        self.evaluate()

    def copy(self) -> Dictionary:
        """Return an independent copy that shares only the rows and the cost."""
        other = Dictionary.__new__(Dictionary)
        other.__dict__.update(self.__dict__)
        other.basic = self.basic.copy()
        other.nonbasic = self.nonbasic.copy()
        other.place = self.place.copy()
        other.basic_least = self.basic_least.copy()
        other.basic_most = self.basic_most.copy()
        other.least = self.least.copy()
        other.most = self.most.copy()
        other.at = self.at.copy()
        other.side = self.side.copy()
        other._view(self.table.copy())
        return other

    def _take_table(self, entries: np.ndarray) -> None:
        """Make the table from its first n columns, (m + 1, n); the others are not yet valid."""
        table = np.zeros((len(entries), self.columns + 3))
        table[:, :VALUE] = entries
        self._view(table)

    def _view(self, table: np.ndarray) -> None:
        self.table = table
        self._transposed = table.T  # column-major, as BLAS updates it in place
        self.entries = table[:-1, :VALUE]
        self.reduced = table[-1, :VALUE]
        self.values = table[:-1, VALUE]
        self.rooms = table[:-1, ABOVE:]
        self._apart = table[:, VALUE:]

    def _tolerance(self) -> float:
        limits = np.concatenate((self.basic_least, self.basic_most, self.least, self.most))
        largest = np.abs(limits[np.isfinite(limits)]).max(initial=0.0)
        return FEASIBILITY * max(1.0, min(largest, 1e9) * 1e-3)

    def _number_places(self) -> None:
        self.place = np.full(self.columns + self.rows.count, np.iinfo(np.int64).min)
        self.place[self.basic] = np.arange(len(self.basic))
        self.place[self.nonbasic] = -1 - np.arange(self.columns)

    def _choose_sides(self) -> None:
        """Put every non-basic variable at the bound its reduced cost asks for, if it has it."""
        has_least, has_most = np.isfinite(self.least), np.isfinite(self.most)
        at_least = has_least & ((self.reduced >= 0) | ~has_most)
        at_most = has_most & ~at_least
        self.at = np.where(at_least, self.least, np.where(at_most, self.most, 0.0))
        self.side = at_least * 1.0 - at_most * 1.0
        self.side[self.least == self.most] = 0.0
        self.free = int((~has_least & ~has_most).sum())

    def evaluate(self) -> None:
        """Compute the set-apart columns from the entries and the non-basic values."""
        self.table[:, VALUE] = self.table[:, :VALUE] @ self.at
        self.table[:-1, ABOVE] = self.values - self.basic_least
        self.table[:-1, BELOW] = self.basic_most - self.values

    # ------------------------------------------------------------------ reading

    @property
    def value(self) -> float:
        """The cost of the current point: a lower bound while the basis is dual feasible."""
        return self.table.item(-1, VALUE)

    def point(self) -> np.ndarray:
        """Return the values of all variables at the current point (rows not held: unset)."""
        values = np.zeros(len(self.place))
        values[self.basic] = self.values
        values[self.nonbasic] = self.at
        return values

    def activities(self) -> np.ndarray:
        """Return the activities' values at the current point, (columns,)."""
        return self.point()[: self.columns]

    def basis(self) -> np.ndarray:
        """Return what tells this basis from that of all row values, (2k,) variable numbers.

        They are the basic activities and the non-basic row values, as many of either.
        """
        n = self.columns
        inner, outer = self.basic[self.basic < n], self.nonbasic[self.nonbasic >= n]
        return np.concatenate((inner, outer)).astype(np.int32)

    def held_rows(self) -> np.ndarray:
        """Return the numbers of the rows this dictionary holds, ascending."""
        n = self.columns
        held = np.concatenate((self.basic[self.basic >= n], self.nonbasic[self.nonbasic >= n]))
        return np.sort(held) - n

    def dual_infeasible(self, tolerance: float = 1e-9) -> bool:
        """Tell whether a reduced cost pulls its variable away from the bound it sits at."""
        pulls = np.where(self.side == 0, 0.0, -self.side * self.reduced)
        loose = (self.side == 0) & (self.least != self.most)
        return bool((pulls > tolerance).any() or (np.abs(self.reduced[loose]) > tolerance).any())

    def cost_multipliers(self) -> Multipliers:
        """Return y with ``cost - y @ rows`` the reduced costs of the activities."""
        columns = ((self.nonbasic >= self.columns) & (self.reduced != 0)).nonzero()[0]
        return Multipliers(self.nonbasic[columns] - self.columns, self.reduced[columns])

    def cost_multipliers_after(self, row: int, column: int) -> Multipliers:
        """Return the multipliers of the cost as they would be after a pivot."""
        entries = self.entries[row]
        reduced = self.reduced - entries * (self.reduced[column] / entries[column])
        columns = ((self.nonbasic >= self.columns) & (reduced != 0)).nonzero()[0]
        columns = columns[columns != column]
        numbers, values = self.nonbasic[columns] - self.columns, reduced[columns]
        if self.basic[row] >= self.columns:
            numbers = np.append(numbers, self.basic[row] - self.columns)
            values = np.append(values, self.reduced[column] / entries[column])
        return Multipliers(numbers, values)

    def row_multipliers(self, row: int, sign: float | None = None) -> Multipliers:
        """Return y for a dictionary row that no choice of bounds can satisfy.

        With `sign` +1 if the basic variable lies below its least bound and -1 if above its most
        (by default as it does), ``sign * (x_basic - entries[row] @ x_nonbasic)`` is identically
        zero, yet positive over the bounds; y holds its coefficients on the row values.
        """
        if sign is None:
            sign = 1.0 if self.table[row, ABOVE] < self.table[row, BELOW] else -1.0
        entries = self.entries[row]
        columns = ((self.nonbasic >= self.columns) & (entries != 0)).nonzero()[0]
        numbers = self.nonbasic[columns] - self.columns
        values = -sign * entries[columns]
        if self.basic[row] >= self.columns:
            numbers = np.append(numbers, self.basic[row] - self.columns)
            values = np.append(values, sign)
        return Multipliers(numbers, values)

    # ------------------------------------------------------------------ bounds and rows

    def set_bound(self, variable: int, least: float, most: float) -> None:
        """Give one variable new bounds; a non-basic one moves with the bound it sits at.

        That bound must be finite.
        """
        place = self.place.item(variable)
        if place >= 0:
            self.basic_least[place] = least
            self.basic_most[place] = most
            value = self.values.item(place)
            self.table[place, ABOVE] = value - least
            self.table[place, BELOW] = most - value
            return
        column = -1 - place
        self.least[column] = least
        self.most[column] = most
        old, side = self.at.item(column), self.side.item(column)
        new = least if side > 0 else most if side < 0 else min(max(old, least), most)
        if least == most:
            self.side[column] = 0.0
        if new != old:
            self.at[column] = new
            self._shift((new - old) * self.table[:, column])

    def set_bounds(self, variables: Iterable[int], least: np.ndarray, most: np.ndarray) -> None:
        """Give several activities the bounds ``least[j], most[j]``; see `set_bound`."""
        for j in variables:
            self.set_bound(j, least.item(j), most.item(j))

    def _shift(self, change: np.ndarray) -> None:
        """Add to the values of the rows and the cost, (m + 1,)."""
        self._apart += change[:, None] * MOVE

    def add_rows(self, numbers: np.ndarray) -> None:
        """Let rows of the store enter, basic; the basis stays dual feasible.

        Parameters
        ----------
        numbers : (k,) row numbers that the dictionary does not hold yet
        """
        n = self.columns
        coefficients = self.rows.matrix[numbers]
        entering = np.zeros((len(numbers), n))
        columns = (self.nonbasic < n).nonzero()[0]
        entering[:, columns] = coefficients[:, self.nonbasic[columns]]
        basic = (self.basic < n).nonzero()[0]
        entering += coefficients[:, self.basic[basic]] @ self.entries[basic]
        self._take_table(np.vstack((self.entries, entering, self.reduced)))
        self.basic = np.append(self.basic, numbers + n)
        self.basic_least = np.append(self.basic_least, self.rows.least[numbers])
        self.basic_most = np.append(self.basic_most, self.rows.most[numbers])
        self._number_places()
        self.evaluate()

    def drop_rows(self, places: np.ndarray) -> None:
        """Let basic row values leave the dictionary (rows that do not bind here).

        Parameters
        ----------
        places : (k,) dictionary rows whose basic variable is a row value
        """
        self._view(np.delete(self.table, places, axis=0))
        self.basic = np.delete(self.basic, places)
        self.basic_least = np.delete(self.basic_least, places)
        self.basic_most = np.delete(self.basic_most, places)
        self._number_places()

    # ------------------------------------------------------------------ dual simplex

    def reoptimise(
        self,
        cutoff: float = np.inf,
        limit: int = 1 << 30,
        stop: Callable[[], bool] | None = None,
    ) -> Status:
        """Run the dual simplex method from this dual-feasible basis.

        Parameters
        ----------
        cutoff : stop as soon as the cost passes this value
        limit : most pivots to make; a run with a small limit does not refactorise
        stop : polled now and then

        Returns
        -------
        Status
            After EMPTY, `failing_row` is the dictionary row that cannot be satisfied.

        Raises
        ------
        Stopped
            When `stop` says so.
        """
        patience = 2 * (len(self.basic) + self.columns) + 20
        standing, best = 0, self.value
        for made in range(limit + 1):
            bland = standing > patience
            row, above = self._leaving_row(bland)
            if row < 0:
                return Status.OPTIMAL
            if made == limit:
                return Status.LIMIT
            column = self._entering_column(row, above, bland)
            if column < 0:
                self.failing_row = row
                return Status.EMPTY
            self._pivot(row, column, above)
            if stop is not None and made % POLL_EVERY == 0 and stop():
                raise Stopped
            value = self.table.item(-1, VALUE)
            if value > cutoff:
                return Status.BEATEN
            if value > best:
                best, standing = value + 1e-12 * abs(value), 0
            else:
                standing += 1
            if self.since_refactored >= REFACTOR_AFTER and limit > REFACTOR_AFTER:
                self.refactor()
        raise AssertionError("the loop returns before its range ends")

    def _leaving_row(self, bland: bool) -> tuple[int, int]:
        """Choose the row furthest outside its bounds, next to its norm where that pays.

        Returns the row, -1 when all are inside, and 0 if it lies below its least bound or 1 if
        above its most.
        """
        if not len(self.basic):
            return -1, 0
        worst = self.rooms.argmin().item()
        row, above = worst >> 1, worst & 1
        if self.rooms.item(row, above) >= -self.tolerance:
            return -1, above
        if len(self.basic) < NORMS_FROM and not bland:
            return row, above
        room = np.minimum(self.rooms[:, 0], self.rooms[:, 1])
        rows = (room < -self.tolerance).nonzero()[0]
        if len(rows) > 1:
            if bland:
                row = rows[self.basic[rows].argmin()].item()
            else:
                entries = self.entries[rows]
                norms = np.einsum("ij,ij->i", entries, entries) + 1.0
                row = rows[(room[rows] ** 2 / norms).argmax()].item()
            above = int(self.rooms.item(row, 1) < self.rooms.item(row, 0))
        return row, above

    def _entering_column(self, row: int, above: int, bland: bool) -> int:
        """Choose the column by the bound-flipping ratio test; -1 if the row cannot be met.

        Boxed variables whose ratio is passed flip to their other bound as long as the row stays
        violated: each flip takes ``range * |entry|`` off the violation.
        """
        helpful = self.entries[row] * self.side
        if self.free:
            loose = (self.side == 0) & (self.least != self.most)
            helpful[loose] = np.abs(self.entries[row, loose]) * (-1.0 if above else 1.0)
        candidates = ((helpful < -PIVOT) if above else (helpful > PIVOT)).nonzero()[0]
        if not candidates.size:
            return -1
        slopes = helpful.take(candidates)
        if above:
            slopes = -slopes
        ratios = np.abs(self.reduced.take(candidates))
        if self.free:
            ratios[loose[candidates]] = 0.0
        ratios += SLACK
        ratios /= slopes
        first = ratios.argmin().item()
        if bland:
            least = candidates[ratios <= ratios[first]]
            return least[self.nonbasic[least].argmin()].item()
        column = candidates.item(first)
        short = -self.rooms.item(row, above)
        passed = slopes.item(first) * (self.most.item(column) - self.least.item(column))
        if short > passed:
            return self._long_step(candidates, slopes, ratios, short)
        return column

    def _long_step(
        self, candidates: np.ndarray, slopes: np.ndarray, ratios: np.ndarray, short: float
    ) -> int:
        """Flip the boxed variables that are passed; return the column where the slope turns.

        Returns -1 when even all flips together leave the row violated.
        """
        gains = slopes * (self.most[candidates] - self.least[candidates])
        total = gains.sum()
        if short - total > self.tolerance:
            return -1
        if short * FEW > total:  # many flips: sort once; else take the least ratio a few times
            order = ratios.argsort(kind="stable")
            turn = min(int(gains[order].cumsum().searchsorted(short)), len(order) - 1)
            flipped = candidates[order[:turn]]
            turn = order.item(turn)
        else:
            flipped = []
            while True:
                turn = ratios.argmin().item()
                short -= gains.item(turn)
                if short <= 0:
                    break
                flipped.append(candidates.item(turn))
                ratios[turn] = np.inf
        if len(flipped):
            self._flip(flipped)
        return candidates.item(turn)

    def _flip(self, columns: list[int] | np.ndarray) -> None:
        """Move non-basic variables to their other bound."""
        if len(columns) == 1:
            column = int(columns[0])
            side = self.side.item(column)
            end = self.most.item(column) if side > 0 else self.least.item(column)
            change = (end - self.at.item(column)) * self.table[:, column]
            self.side[column], self.at[column] = -side, end
            self._shift(change)
            return
        columns = np.asarray(columns)
        sides = self.side.take(columns)
        least, most = self.least.take(columns), self.most.take(columns)
        steps = (most - least) * sides
        self.side[columns] = -sides
        self.at[columns] = np.where(sides > 0, most, least)
        self._shift(self.table.take(columns, axis=1) @ steps)

    def _pivot(self, row: int, column: int, above: int) -> None:
        """Exchange a basic and a non-basic variable: one rank-1 update of the table."""
        table = self.table
        pivot = table.item(row, column)
        room = self.rooms.item(row, above)
        step = (room if above else -room) / pivot
        left = table[:, column].copy()
        across = table[row] * (-1.0 / pivot)
        across[column] = 1.0 / pivot
        across[VALUE] = across[ABOVE] = step
        across[BELOW] = -step
        left[row] = 1.0
        table[:, column] = 0.0
        table[row] = 0.0
        dger(1.0, across, left, a=self._transposed, overwrite_a=1)
        self._exchange(row, column, above, self.at.item(column) + step)

    def _exchange(self, row: int, column: int, above: int, value: float) -> None:
        """Swap the bookkeeping of the leaving and the entering variable."""
        leaving, entering = self.basic.item(row), self.nonbasic.item(column)
        least, most = self.basic_least.item(row), self.basic_most.item(row)
        new_least, new_most = self.least.item(column), self.most.item(column)
        if self.free and new_least == -np.inf and new_most == np.inf:
            self.free -= 1
        self.basic[row], self.nonbasic[column] = entering, leaving
        self.place[entering], self.place[leaving] = row, -1 - column
        self.basic_least[row], self.basic_most[row] = new_least, new_most
        table = self.table
        table[row, VALUE] = value
        table[row, ABOVE] = value - new_least
        table[row, BELOW] = new_most - value
        self.least[column], self.most[column] = least, most
        self.at[column] = most if above else least
        self.side[column] = 0.0 if least == most else (-1.0 if above else 1.0)
        self.pivots += 1
        self.since_refactored += 1

    def enter(self, variable: int) -> None:
        """Bring a non-basic variable that may pass its bound into the basis.

        It moves the way that lets the cost fall; of the basic variables that are within their
        bounds, the one that reaches one of them first leaves (the ratio test of the primal simplex
        method).  Where none does, the row with the largest entry gives way.
        """
        column = -1 - self.place.item(variable)
        rising = self.reduced.item(column) < 0
        changes = self.entries[:, column] if rising else -self.entries[:, column]
        sizes = np.abs(changes)
        rooms = np.where(changes > 0, self.rooms[:, 1], self.rooms[:, 0])
        usable = (sizes > ENTRY) & (rooms >= -self.tolerance)
        ratios = np.where(usable, np.maximum(rooms, 0.0) / sizes, np.inf)
        row = ratios.argmin().item() if usable.any() else -1
        if row < 0 or ratios[row] == np.inf:
            row = sizes.argmax().item()
        self._pivot(row, column, int(changes[row] > 0))

    # ------------------------------------------------------------------ accuracy

    def drift(self) -> float:
        """Return the largest residual of the held rows at the current point."""
        held = self.held_rows()
        if not len(held):
            return 0.0
        values = self.point()
        residual = self.rows.matrix[held] @ values[: self.columns] - values[held + self.columns]
        return float(np.abs(residual).max())

    def drifted(self) -> bool:
        """Tell whether a refactorisation is due; looks every `CHECK_DRIFT_AFTER` pivots only."""
        if self.since_refactored - self.drift_checked < CHECK_DRIFT_AFTER:
            return False
        self.drift_checked = self.since_refactored
        return self.drift() > DRIFT

    def refactor(self) -> None:
        """Compute the table afresh from the rows by one dense solve with the basis.

        Raises
        ------
        numpy.linalg.LinAlgError
            If the basis is singular in doubles.
        """
        n = self.columns
        matrix = self.rows.matrix
        inner = (self.basic < n).nonzero()[0]
        outer = (self.basic >= n).nonzero()[0]
        row_columns = (self.nonbasic >= n).nonzero()[0]
        own_columns = (self.nonbasic < n).nonzero()[0]
        tight = matrix[self.nonbasic[row_columns] - n]
        own = self.nonbasic[own_columns]
        right = np.zeros((len(inner), n))
        right[np.arange(len(inner)), row_columns] = 1.0
        right[:, own_columns] = -tight[:, own]
        solved = np.linalg.solve(tight[:, self.basic[inner]], right)
        entries = np.empty((len(self.basic) + 1, n))
        entries[inner] = solved
        rest = np.vstack((matrix[self.basic[outer] - n], self.cost))
        product = rest[:, self.basic[inner]] @ solved
        product[:, own_columns] += rest[:, own]
        entries[outer] = product[:-1]
        entries[-1] = product[-1]
        self._take_table(entries)
        self.evaluate()
        self.since_refactored = self.drift_checked = 0
