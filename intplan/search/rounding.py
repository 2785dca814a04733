"""Whole-unit plans from the relaxation's point: rounding, then improvement unit by unit.

Reference: T. Berthold, Primal heuristics for mixed integer programs, Diploma thesis, Technische
Universitaet Berlin, 2006 (simple rounding by locks, and one-opt).
"""

from __future__ import annotations

import math

import numpy as np

from intplan.search.tightening import Bounds

NEAR = 1e-9


class Rounder:
    """Rounds points of one problem.

    Parameters
    ----------
    matrix, row_least, row_most : the rules
    cost, whole : (columns,)
    """

    def __init__(
        self,
        matrix: np.ndarray,
        row_least: np.ndarray,
        row_most: np.ndarray,
        cost: np.ndarray,
        whole: np.ndarray,
    ) -> None:
        self.matrix = matrix
        self.row_least = row_least
        self.row_most = row_most
        self.cost = cost
        self.all_whole = bool(whole.all())
        has_least, has_most = np.isfinite(row_least)[:, None], np.isfinite(row_most)[:, None]
        rising, falling = matrix > 0, matrix < 0
        self.up_locks = (rising & has_most).sum(axis=0) + (falling & has_least).sum(axis=0)
        self.down_locks = (falling & has_most).sum(axis=0) + (rising & has_least).sum(axis=0)
        self.tolerance = 1e-9 * (1.0 + np.abs(matrix).sum(axis=1))
        self.direction = -np.sign(cost)
        self.sizes = np.abs(cost)
        self._moves = matrix * self.direction
        self._columns: dict[int, tuple[np.ndarray, np.ndarray, np.ndarray]] = {}

    def round(self, x: np.ndarray, bounds: Bounds, ceiling: float) -> np.ndarray | None:
        """Return a whole point near x that meets the rules, improved; for all-whole problems.

        None where none is found that costs less than the ceiling.

        Parameters
        ----------
        x : (columns,) an optimal point of the relaxation
        bounds : the bounds to keep to
        ceiling : a cost
        """
        if not self.all_whole or not len(x):
            return None
        nearest = np.rint(x)
        close = np.abs(x - nearest) < 1e-6
        locked = np.where(self.down_locks <= self.up_locks, np.floor(x), np.ceil(x))
        for point in (np.where(close, nearest, locked), nearest):
            values = self.matrix @ point
            if (values >= self.row_least - self.tolerance).all() and (
                values <= self.row_most + self.tolerance
            ).all():
                return self._improve(point, values, bounds, ceiling)
        return None

    def _improve(
        self, point: np.ndarray, values: np.ndarray, bounds: Bounds, ceiling: float
    ) -> np.ndarray | None:
        """Move activities as far as the aim and the rules allow, those that gain most first.

        What a move leaves to the others is looked up when their turn comes.
        """
        below, above = self.row_most - values, values - self.row_least
        np.maximum(below, 0.0, out=below)
        np.maximum(above, 0.0, out=above)
        room = np.where(self.direction > 0, bounds.most - point, point - bounds.least)
        movable = ((room > 0.5) & (self.direction != 0)).nonzero()[0]
        moves = self._moves[:, movable]
        slack = np.where(moves > 0, below[:, None], above[:, None])
        sizes = np.abs(moves)
        steps = np.where(sizes > 0, slack / sizes, np.inf).min(axis=0, initial=np.inf)
        units = np.floor(np.minimum(steps, room[movable]) + NEAR)
        gains = np.where(np.isfinite(units), units, 0.0) * self.sizes[movable]
        missing = float(self.cost @ point) - ceiling
        if gains.sum() <= missing:
            return None
        order = (-gains).argsort(kind="stable")
        for j in movable[order[: np.count_nonzero(gains > 0)]].tolist():
            rows, moves, sizes = self._column(j)
            left = np.where(moves > 0, below[rows], above[rows]) / sizes
            step = math.floor(min(left.min(initial=np.inf), room.item(j)) + NEAR)
            if step > 0:
                point[j] += step * self.direction[j]
                below[rows] -= moves * step
                above[rows] += moves * step
        return point if float(self.cost @ point) < ceiling else None

    def _column(self, j: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return the rows an activity stands in, and what a unit as its cost asks adds to them."""
        if j not in self._columns:
            rows = self.matrix[:, j].nonzero()[0]
            moves = self._moves[rows, j]
            self._columns[j] = rows, moves, np.abs(moves)
        return self._columns[j]
