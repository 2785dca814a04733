"""Distances from bounds and limits, in which rounding cuts are written."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.rows import RowStore
from intplan.search.tightening import Bounds


@dataclass
class Rounding:
    """What mixed-integer rounding needs to know of a problem and of the point to cut off.

    Attributes
    ----------
    rows : the store
    whole : (columns,) bool
    grain : (rows,) the row values of all-whole plans are multiples of this, 0 if of nothing
    reach : sum over the bounded activities of their greatest size
    open : activities without both bounds
    own : the sheet's own bounds, a pair of (columns,)
    x : (columns,) the relaxation's point
    bounds : bounds under which the cuts will be used, or wider ones
    leaning_rows : (rows,) bool, rows that lean on the cut-off
    rounded : (rows,) and (columns,) bool, rows and activities with a limit or bound that its
        double only comes near: an exact cut cannot be measured from it
    """

    rows: RowStore
    whole: np.ndarray
    grain: np.ndarray
    reach: float
    open: np.ndarray
    own: tuple[np.ndarray, np.ndarray]
    x: np.ndarray
    bounds: Bounds
    leaning_rows: np.ndarray
    rounded: tuple[np.ndarray, np.ndarray]

    def box(self, touched: np.ndarray) -> tuple[dict[str, np.ndarray], bool]:
        """Return, as evidence, the bounds of some activities that are not the sheet's own.

        Errors are bounded over the box of the activities touched, (columns,) bool, so a cut
        leans on these bounds even where it measures no distance from them.  Returned as well:
        whether any of them leans on the cut-off.
        """
        bounds = self.bounds
        least = touched & (bounds.least != self.own[0])
        most = touched & (bounds.most != self.own[1])
        leans = bool((least & bounds.leans[0]).any() or (most & bounds.leans[1]).any())
        numbers = np.concatenate((2 * least.nonzero()[0], 2 * most.nonzero()[0] + 1))
        return {"box": numbers, "box_values": bounds.values(numbers)}, leans

    def nearer_least(self) -> np.ndarray:
        """Tell for each activity whether it is measured from its least bound, the nearer one."""
        return self.x - self.bounds.least <= self.bounds.most - self.x


@dataclass
class Limits:
    """Rows and the limit of each that its value is measured from.

    Attributes
    ----------
    numbers : (u,) row numbers
    at : (u,) the limits
    sides : (u,) 1 for a least, -1 for a most, 0 where both are the same
    """

    numbers: np.ndarray
    at: np.ndarray
    sides: np.ndarray

    @classmethod
    def of_dictionary(cls, dictionary: Dictionary) -> tuple[Limits, np.ndarray]:
        """Return the limits that non-basic row values are at, and their columns."""
        columns = (dictionary.nonbasic >= dictionary.columns).nonzero()[0]
        numbers = dictionary.nonbasic[columns] - dictionary.columns
        return cls(numbers, dictionary.at[columns], dictionary.side[columns]), columns

    @classmethod
    def nearest(cls, rows: RowStore, x: np.ndarray) -> Limits:
        """Return the limits of all rows that a point is nearest to."""
        values = rows.matrix @ x
        below = values - rows.least <= rows.most - values
        sides = np.where(below, 1.0, -1.0)
        sides[rows.least == rows.most] = 0.0
        at = np.where(below, rows.least, rows.most)
        limited = np.isfinite(at)  # a row without any limit is measured from nothing
        return cls(np.arange(rows.count), np.where(limited, at, 0.0), np.where(limited, sides, 0.0))


def bounds_used(
    live: np.ndarray, at_least: np.ndarray, sides: np.ndarray, bounds: Bounds
) -> dict[str, np.ndarray]:
    """Return the bounds that distances are measured from, as evidence.

    ``bounds`` holds the numbers ``2 * column + side`` and ``values`` what they are; a fixed
    activity, whose distance is zero, appears with both.
    """
    fixed = live[sides == 0]
    numbers = np.concatenate((2 * live + ~at_least, 2 * fixed + at_least[sides == 0]))
    return {"bounds": numbers, "values": bounds.values(numbers)}
