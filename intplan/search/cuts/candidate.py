"""A cut before it is chosen, and the choice among cuts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

EFFICACY = 1e-4  # least distance from the point to the cut
PARALLEL = 0.9  # greatest cosine between two cuts of one round


@dataclass(slots=True)
class Candidate:
    """The row ``coefficients @ x >= least``.

    Attributes
    ----------
    kind : "gomory" or "cover"
    coefficients : (columns,) doubles, exact as given
    least : double, exact as given
    explain : returns the evidence, what it was derived from, and whether a bound it used leans on
        the cut-off; called for the cuts that are chosen
    shift : the row times ``2**shift`` is in integers, -1 where that is not known
    efficacy : distance from the relaxation's point
    """

    kind: str
    coefficients: np.ndarray
    least: float
    explain: Callable[[], tuple[dict[str, Any], bool]]
    shift: int = -1
    efficacy: float = 0.0

    def measure(self, x: np.ndarray) -> bool:
        """Set the efficacy at a point; tell whether it is worth having."""
        norm = float(np.sqrt(self.coefficients @ self.coefficients))
        if norm == 0.0:
            return False
        self.efficacy = (self.least - float(self.coefficients @ x)) / norm
        return self.efficacy > EFFICACY


def choose(candidates: list[Candidate], most: int) -> list[Candidate]:
    """Return the cuts of greatest efficacy that are not nearly parallel to a better one."""
    ordered = sorted(candidates, key=lambda c: -c.efficacy)
    vectors = np.array([c.coefficients for c in ordered])
    return [ordered[i] for i in unlike(vectors, most)]


def unlike(vectors: np.ndarray, most: int) -> list[int]:
    """Return which vectors, in order, are not nearly parallel to one returned before.

    Parameters
    ----------
    vectors : (k, columns), none of them zero
    most : how many to return at most
    """
    if not len(vectors):
        return []
    units = vectors / np.sqrt(np.einsum("ij,ij->i", vectors, vectors))[:, None]
    cosines = np.abs(units @ units.T)
    chosen: list[int] = []
    barred = np.zeros(len(vectors), bool)
    for i in range(len(vectors)):
        if not barred[i]:
            chosen.append(i)
            if len(chosen) == most:
                break
            barred |= cosines[i] > PARALLEL
    return chosen
