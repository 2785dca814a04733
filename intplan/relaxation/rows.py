"""The rows a relaxation may hold: the rules first, then every cut in the order it was found."""

from __future__ import annotations

import numpy as np


class RowStore:
    """Coefficients and limits of all rows, by row number; rows are only ever appended.

    Attributes
    ----------
    columns : number of activities
    count : number of rows held
    matrix : (count, columns) coefficients, a view
    least, most : (count,) limits, views
    shift : (count,) a view; row i times ``2**shift[i]`` is in integers of at most 2**53, or -1
        where that is not known
    """

    def __init__(
        self,
        matrix: np.ndarray,
        least: np.ndarray,
        most: np.ndarray,
        shift: np.ndarray | None = None,
    ) -> None:
        self.count, self.columns = matrix.shape
        capacity = self.count + 64
        self._matrix = np.zeros((capacity, self.columns))
        self._limits = np.zeros((2, capacity))
        self._matrix[: self.count] = matrix
        self._limits[0, : self.count] = least
        self._limits[1, : self.count] = most
        self._shift = np.full(capacity, -1)
        if shift is not None:
            self._shift[: self.count] = shift
        self._views()

    def _views(self) -> None:
        self.matrix = self._matrix[: self.count]
        self.least = self._limits[0, : self.count]
        self.most = self._limits[1, : self.count]
        self.shift = self._shift[: self.count]

    def append(
        self, coefficients: np.ndarray, least: np.ndarray, most: np.ndarray, shift: np.ndarray
    ) -> np.ndarray:
        """Append rows, (k, columns) with limits and shifts (k,); return their numbers, (k,)."""
        added = len(coefficients)
        needed = self.count + added
        if needed > len(self._matrix):
            capacity = 2 * needed
            matrix = np.zeros((capacity, self.columns))
            limits = np.zeros((2, capacity))
            matrix[: self.count] = self.matrix
            limits[:, : self.count] = self._limits[:, : self.count]
            shifts = np.full(capacity, -1)
            shifts[: self.count] = self.shift
            self._matrix, self._limits, self._shift = matrix, limits, shifts
        numbers = np.arange(self.count, needed)
        self._matrix[numbers] = coefficients
        self._limits[0, numbers] = least
        self._limits[1, numbers] = most
        self._shift[numbers] = shift
        self.count = needed
        self._views()
        return numbers
