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
    chosen: list[Candidate] = []
    directions: list[np.ndarray] = []
    for candidate in sorted(candidates, key=lambda c: -c.efficacy):
        if len(chosen) == most:
            break
        vector = candidate.coefficients
        direction = vector / np.sqrt(vector @ vector)
        if directions and max(np.abs(np.array(directions) @ direction)) > PARALLEL:
            continue
        chosen.append(candidate)
        directions.append(direction)
    return chosen
