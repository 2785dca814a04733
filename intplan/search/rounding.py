"""Whole-unit plans from the relaxation's point: rounding, then improvement unit by unit.

Reference: T. Berthold, Primal heuristics for mixed integer programs, Diploma thesis, Technische
Universitaet Berlin, 2006 (simple rounding by locks, and one-opt).
"""

from __future__ import annotations

import numpy as np

from intplan.search.tightening import Bounds

NEAR = 1e-9
STEPS = 60  # most activities moved by one improvement


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

    def round(self, x: np.ndarray, bounds: Bounds) -> list[np.ndarray]:
        """Return whole points near x that meet the rules, improved; for all-whole problems.

        Parameters
        ----------
        x : (columns,) an optimal point of the relaxation
        bounds : the bounds to keep to
        """
        if not self.all_whole or not len(x):
            return []
        nearest = np.rint(x)
        close = np.abs(x - nearest) < 1e-6
        found = []
        locked = np.where(self.down_locks <= self.up_locks, np.floor(x), np.ceil(x))
        for point in (np.where(close, nearest, locked), nearest):
            values = self.matrix @ point
            if (values >= self.row_least - self.tolerance).all() and (
                values <= self.row_most + self.tolerance
            ).all():
                found.append(self._improve(point, values, bounds))
                break
        return found

    def _improve(self, point: np.ndarray, values: np.ndarray, bounds: Bounds) -> np.ndarray:
        """Move activities one after the other as far as the aim and the rules allow.

        A row that gains room does not lengthen the steps found before: what is moved stays
        feasible, and only the rows that changed are looked at again.
        """
        point = point.copy()
        below = np.where(np.isfinite(self.row_most), self.row_most - values, np.inf)
        above = np.where(np.isfinite(self.row_least), values - self.row_least, np.inf)
        rows = np.arange(len(values))
        steps = np.full(len(point), np.inf)
        for _ in range(STEPS):
            steps = np.minimum(steps, self._steps(rows, below, above))
            room = np.where(self.direction > 0, bounds.most - point, point - bounds.least)
            units = np.floor(np.minimum(steps, room) + NEAR)
            units[~np.isfinite(units) | (self.direction == 0)] = 0.0
            gains = units * self.sizes
            j = gains.argmax()
            if gains[j] <= 0:
                break
            step = units[j] * self.direction[j]
            point[j] += step
            steps[j] -= units[j]
            rows = self.matrix[:, j].nonzero()[0]
            change = self.matrix[rows, j] * step
            below[rows] -= change
            above[rows] += change
        return point

    def _steps(self, rows: np.ndarray, below: np.ndarray, above: np.ndarray) -> np.ndarray:
        """Return how many units some rows let each activity move as its cost asks, (columns,)."""
        moves = self.matrix[rows] * self.direction
        below, above = np.maximum(below[rows], 0.0), np.maximum(above[rows], 0.0)
        steps = np.where(moves > 0, below[:, None], above[:, None]) / np.abs(moves)
        steps[moves == 0] = np.inf
        return steps.min(axis=0, initial=np.inf)
