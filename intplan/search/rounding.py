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
        self.columns = np.argsort(-np.abs(cost), kind="stable")

    def round(self, x: np.ndarray, bounds: Bounds) -> list[np.ndarray]:
        """Return whole points near x that meet the rules, improved; for all-whole problems.

        Parameters
        ----------
        x : (columns,) an optimal point of the relaxation
        bounds : the bounds to keep to
        """
        if not self.all_whole:
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
        """Move activities one after the other as far as the aim and the rules allow."""
        point = point.copy()
        below = np.where(np.isfinite(self.row_most), self.row_most - values, np.inf)
        above = np.where(np.isfinite(self.row_least), values - self.row_least, np.inf)
        for _ in range(STEPS):
            steps = self._steps(point, below, above, bounds)
            gains = steps * np.abs(self.cost)
            j = gains.argmax()
            if gains[j] <= 0:
                break
            step = steps[j] if self.cost[j] < 0 else -steps[j]
            point[j] += step
            change = self.matrix[:, j] * step
            below -= change
            above += change
        return point

    def _steps(
        self, point: np.ndarray, below: np.ndarray, above: np.ndarray, bounds: Bounds
    ) -> np.ndarray:
        """Return how many units each activity could move in its improving direction, (columns,)."""
        direction = -np.sign(self.cost)
        moves = self.matrix * direction
        with np.errstate(divide="ignore", invalid="ignore"):
            rising = np.where(moves > 0, np.maximum(below, 0.0)[:, None] / moves, np.inf)
            falling = np.where(moves < 0, np.maximum(above, 0.0)[:, None] / -moves, np.inf)
        steps = np.minimum(rising, falling).min(axis=0, initial=np.inf)
        room = np.where(direction > 0, bounds.most - point, point - bounds.least)
        steps = np.minimum(steps, room)
        steps[direction == 0] = 0.0
        steps[~np.isfinite(steps)] = 0.0
        return np.floor(steps + NEAR)
