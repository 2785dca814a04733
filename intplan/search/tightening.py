"""Bounds tightened by the rules (propagation) and by reduced costs.

Every tightening is a branch whose other side is closed at once: an activity is not above k
because being at least k + 1 is refuted by the multipliers that are recorded.

References
----------
M. W. P. Savelsbergh, Preprocessing and probing techniques for mixed integer programming problems,
ORSA J. Computing 6:445-454, 1994.
G. B. Dantzig, D. R. Fulkerson, S. M. Johnson, Solution of a large-scale traveling-salesman
problem, Operations Research 2:393-410, 1954 (reduced-cost tightening).
"""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np

from intplan.search.evidence import LEAST, MOST, Proof

MARGIN = 1e-7  # share of a unit by which a rounded bound must be proven
HUGE = 1e100  # stands for infinity where infinities would multiply zeros
EXACT = 2.0**52  # whole bounds beyond this are left alone
FAR = 1e6  # units from its other bound at which a bound by cost adds more error than it helps
ROUNDS = 2  # rounds of propagation at a node
FIRST_ROUNDS = 12  # rounds at the root
TRIED = 16  # nodes at which propagation is tried before it is judged
PAYING = 0.2  # share of nodes it must close to be tried at each


class Bounds:
    """The bounds of a node: values and whether they lean on the cut-off.

    Attributes
    ----------
    least, most : (columns,) doubles
    leans : (2, columns) bool, by side
    """

    __slots__ = ("leans", "least", "most")

    def __init__(self, least: np.ndarray, most: np.ndarray, leans: np.ndarray) -> None:
        self.least = least
        self.most = most
        self.leans = leans

    def copy(self) -> Bounds:
        """Return an independent copy."""
        return Bounds(self.least.copy(), self.most.copy(), self.leans.copy())

    def set(self, column: int, side: int, value: float, leans: bool) -> None:
        """Tighten one bound."""
        (self.most if side else self.least)[column] = value
        self.leans[side, column] = leans

    def values(self, numbers: np.ndarray) -> np.ndarray:
        """Return the values of the bounds with the numbers ``2 * column + side``, (k,)."""
        columns = numbers >> 1
        return np.where(numbers & 1, self.most[columns], self.least[columns])


class Propagator:
    """Bound propagation over the rules.

    Parameters
    ----------
    matrix : (rows, columns) coefficients of the rules
    row_least, row_most : (rows,) limits
    whole : (columns,) bool
    """

    def __init__(
        self,
        matrix: np.ndarray,
        row_least: np.ndarray,
        row_most: np.ndarray,
        whole: np.ndarray,
    ) -> None:
        self.matrix = matrix
        self.positive = np.maximum(matrix, 0.0)
        self.negative = np.minimum(matrix, 0.0)
        self.sizes = np.abs(matrix)
        self._asked = self._tried = self._closed = 0
        self.rounding = (matrix.shape[1] + 4) * 2.0**-52
        self.row_least = row_least
        self.row_most = row_most
        self.whole = whole
        self.rows_of = [column.nonzero()[0] for column in matrix.T]

    def pays(self) -> bool:
        """Tell whether to propagate at the next node.

        Always at first; once few of the nodes tried were closed by it, at every eighth only: the
        dual simplex method finds the same at less cost.
        """
        self._asked += 1
        if self._tried < TRIED or self._closed >= PAYING * self._tried:
            return True
        return self._asked % 8 == 0

    def note(self, closed: bool) -> None:
        """Count a node at which propagation was tried, and whether that closed it."""
        self._tried += 1
        self._closed += closed

    def run(
        self,
        bounds: Bounds,
        changed: list[int],
        log: list[dict],
        first: bool = False,
        rows: np.ndarray | None = None,
    ) -> tuple[list[int], int | None]:
        """Propagate from changed activities until little more comes of it.

        Parameters
        ----------
        bounds : tightened in place
        changed : the activities whose bounds have just changed
        log : receives one record a row and activity that tightened a bound
        first : also tighten divisible activities, and look at every row
        rows : the rows to begin with, instead of those of the changed activities

        Returns
        -------
        touched, empty
            the activities tightened here, and a row that cannot be met (None if there is none)
        """
        touched: set[int] = set()
        for _ in range(FIRST_ROUNDS if first else ROUNDS):
            if first:
                rows = np.arange(len(self.matrix))
            elif rows is not None:
                pass
            elif len(changed) == 1:
                rows = self.rows_of[changed[0]]
            else:
                rows = np.unique(np.concatenate([self.rows_of[j] for j in changed]))
            if not len(rows):
                break
            changed, empty = self._round(bounds, rows, log, first)
            rows = None
            touched.update(changed)
            if empty is not None:
                return list(touched), empty
            if not changed:
                break
        return list(touched), None

    def again(
        self, row: int, limit: int, columns: list[int], bounds: Bounds, log: list[dict]
    ) -> None:
        """Tighten activities by one limit of one row.

        Parameters
        ----------
        row, limit : which, 0 for the least limit and 1 for the most
        columns : the activities
        bounds : tightened in place
        log : receives a record for each that tightened a bound
        """
        entries = self.matrix[row]
        touched = entries.nonzero()[0]
        parts, least, most = entries[touched], bounds.least[touched], bounds.most[touched]
        total = float(parts @ np.where((parts > 0) == bool(limit), least, most))
        slack = self.row_most.item(row) - total if limit else total - self.row_least.item(row)
        if not math.isfinite(slack):
            return
        size = np.abs(parts) @ np.maximum(np.abs(least), np.abs(most))
        error = float(size + abs(slack)) * self.rounding
        if math.isfinite(error):
            self._tighten_row(row, columns, limit, (slack, error), bounds, log, [], False)

    def _round(
        self, bounds: Bounds, rows: np.ndarray, log: list[dict], divisible: bool
    ) -> tuple[list[int], int | None]:
        least, most = bounds.least, bounds.most
        positive, negative = self.positive[rows], self.negative[rows]
        low_open, high_open = np.isinf(least), np.isinf(most)
        if low_open.any() or high_open.any():
            least = np.where(low_open, 0.0, least)
            most = np.where(high_open, 0.0, most)
            unmet_low = ((positive > 0) & low_open | (negative < 0) & high_open).any(axis=1)
            unmet_high = ((positive > 0) & high_open | (negative < 0) & low_open).any(axis=1)
            lowest = np.where(unmet_low, -np.inf, positive @ least + negative @ most)
            highest = np.where(unmet_high, np.inf, positive @ most + negative @ least)
        else:
            lowest = positive @ least + negative @ most
            highest = positive @ most + negative @ least
        below = self.row_most[rows] - lowest
        above = highest - self.row_least[rows]
        scale = 1e-9 * (1.0 + np.minimum(np.abs(lowest), np.abs(highest)))
        scale[np.isinf(scale)] = 0.0
        failed = ((below < -scale) | (above < -scale)).nonzero()[0]
        if len(failed):
            return [], rows.item(failed[0])
        spare = np.minimum(below, above)
        room = self.sizes[rows] * np.minimum(bounds.most - bounds.least, HUGE)
        open_rows = (room.max(axis=1) > spare + scale).nonzero()[0]
        changed: list[int] = []
        if len(open_rows):
            size = self.sizes[rows] @ np.maximum(np.abs(least), np.abs(most))
        for i in open_rows:
            columns = (room[i] > spare[i] + scale[i]).nonzero()[0]
            for side, slack in ((MOST, below[i]), (LEAST, above[i])):
                if slack < np.inf:
                    error = (size.item(i) + abs(slack)) * self.rounding
                    self._tighten_row(
                        rows.item(i), columns, side, (float(slack), float(error)), bounds, log,
                        changed, divisible,
                    )  # fmt: skip
        return changed, None

    def _tighten_row(
        self,
        row: int,
        columns: Iterable[int],
        limit: int,
        spare: tuple[float, float],
        bounds: Bounds,
        log: list[dict],
        changed: list[int],
        divisible: bool,
    ) -> None:
        """Tighten activities by one limit of one row, the others at their most helpful bounds.

        `spare` is what the limit then leaves, and the error that may be in it.
        """
        slack, error = spare
        entries = self.matrix[row]
        for j in columns:
            a = entries.item(j) if limit else -entries.item(j)
            side = MOST if a > 0 else LEAST
            low, high = bounds.least.item(j), bounds.most.item(j)
            if abs(a) * (high - low) <= slack or math.isinf(low if side else high):
                continue
            share = error / abs(a)
            if share > 0.25:
                continue
            value = self._rounded(j, side, slack / a, share, divisible, low, high)
            if value is None or abs(value) > EXACT:
                continue
            leans = self._leans(row, j, limit, bounds)
            bounds.set(j, side, value, leans)
            log.append(
                {"by": "rule", "row": row, "limit": limit, "changes": [(int(j), side, value)],
                 "leans": leans}
            )  # fmt: skip
            changed.append(int(j))

    def _rounded(
        self,
        column: int,
        side: int,
        step: float,
        share: float,
        divisible: bool,
        low: float,
        high: float,
    ) -> float | None:
        """Return the bound a step away from the other one, rounded to what is proven.

        `share` is the error that may be in the step.  None where the bound is no better than the
        one there is.
        """
        value = (low if side else high) + step
        margin = max(MARGIN, share)
        if self.whole[column]:
            if side:
                value = math.floor(value + margin)
                return float(value) if value < high else None
            value = math.ceil(value - margin)
            return float(value) if value > low else None
        if not divisible:
            return None
        margin = share + 1e-9 * (1.0 + abs(value) + abs(step))
        if side:
            value += margin
            gain = high - value
        else:
            value -= margin
            gain = value - low
        return value if gain > 1e-3 * (1.0 + min(high - low, HUGE)) or gain == math.inf else None

    def _leans(self, row: int, column: int, limit: int, bounds: Bounds) -> bool:
        """Tell whether the other activities' helpful bounds lean on the cut-off."""
        if not bounds.leans.any():
            return False
        helpful_least = self.matrix[row] > 0 if limit else self.matrix[row] < 0
        helpful_most = self.matrix[row] < 0 if limit else self.matrix[row] > 0
        helpful_least[column] = helpful_most[column] = False
        return bool(
            (helpful_least & bounds.leans[LEAST]).any() or (helpful_most & bounds.leans[MOST]).any()
        )


def tighten_by_cost(
    proof: Proof, target: float, bounds: Bounds, whole: np.ndarray
) -> list[tuple[int, int, float]]:
    """Tighten whole activities that would lift the cost past what a better plan may have.

    Parameters
    ----------
    proof : a bound on the cost over `bounds`, weight 1
    target : a better plan costs at most this
    bounds : tightened in place; the new bounds lean on the cut-off
    whole : (columns,) bool

    Returns
    -------
    The changes (column, side, value).
    """
    spare = target - proof.bound
    if not (0 <= spare < math.inf):
        return []
    ranges = bounds.most - bounds.least
    sizes = np.abs(proof.reduced) - proof.error
    columns = (whole & (sizes * ranges > spare + MARGIN * sizes)).nonzero()[0]
    changes = []
    for j in columns:
        size = sizes.item(j)
        if size <= 0:
            continue
        units = spare / size
        if units > FAR:
            continue
        if proof.reduced[j] > 0:
            value = math.floor(bounds.least.item(j) + units + MARGIN)
            if value < bounds.most[j]:
                bounds.set(j, MOST, float(value), True)
                changes.append((int(j), MOST, float(value)))
        else:
            value = math.ceil(bounds.most.item(j) - units - MARGIN)
            if value > bounds.least[j]:
                bounds.set(j, LEAST, float(value), True)
                changes.append((int(j), LEAST, float(value)))
    return changes
