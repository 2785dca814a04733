"""The search tree as it is kept: a `networkx.DiGraph` whose nodes carry their evidence.

Evidence of a node is a dict with two entries:

``steps``
    the bounds tightened at the node, in order.  Each step is a dict with ``by`` and ``changes``,
    a list of (column, side, value), side 0 for the least bound and 1 for the most:

    - ``"rule"``: each change is refuted on its other side by one limit of one rule (``row``,
      ``limit`` 0 or 1);
    - ``"cost"``: refuted because the cost would pass the ``target`` (``closure`` holds the
      multipliers);
    - ``"trial"``: the other side of the branching was solved and closed by ``closure``;
    - ``"whole"``: a whole activity's written bound rounded inward, or, with ``row``, the limit
      of a rule in whole activities (the change is then of the row).

``closure``
    what closed the node, or for a split node what proves its bound: ``weight`` (1: the cost takes
    part, 0: a contradiction), ``rows`` and ``multipliers``, the proven ``bound``, ``bounds`` (the
    numbers ``2 * column + side`` of the bounds it used that are not the sheet's own), ``leans``
    (whether any of them, or a cut, leans on the cut-off) and ``exact`` (multipliers are rationals
    as text).  A ``column`` instead: that activity has no value left.
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import networkx as nx
import numpy as np

from intplan.search.evidence import Proof
from intplan.search.result import Added, Cut
from intplan.search.tightening import Bounds


class Recorder:
    """Writes the tree.

    Parameters
    ----------
    own_least, own_most : (columns,) the sheet's own bounds
    """

    def __init__(self, own_least: np.ndarray, own_most: np.ndarray) -> None:
        self.tree = nx.DiGraph()
        self.cuts: list[Cut] = []
        self.rules = 0
        self.leaning_rows = np.zeros(0, bool)
        self._own = (own_least, own_most)

    def open(self, number: int, parent: int | None, depth: int, added: tuple[Added, ...]) -> None:
        """Enter a node that waits to be solved."""
        self.tree.add_node(
            number, bound=None, depth=depth, outcome="waiting", added=added,
            pivots=0, seconds=0.0, start="warm" if parent is not None else "cold", evidence=None,
            basis=None,
        )  # fmt: skip
        if parent is not None:
            self.tree.add_edge(parent, number)

    def close(
        self,
        number: int,
        outcome: str,
        bound: float | None,
        steps: list[dict[str, Any]],
        closure: dict[str, Any] | None,
        basis: np.ndarray | None = None,
    ) -> None:
        """Enter how a node ended, and the basis that its relaxation ended with."""
        node = self.tree.nodes[number]
        node["outcome"] = outcome
        node["bound"] = bound
        node["evidence"] = {"steps": steps, "closure": closure}
        node["basis"] = basis

    def note_cut(self, cut: Cut) -> None:
        """Keep a cut; its number is its place in `cuts`."""
        self.cuts.append(cut)
        self.leaning_rows = np.append(self.leaning_rows, cut.leans)

    def closure(self, proof: Proof, bounds: Bounds) -> dict[str, Any]:
        """Return the record of a proof over a node's bounds.

        A reduced cost that is zero but for rounding may have needed either bound: both count as
        used.
        """
        own_least, own_most = self._own
        uses_least = (proof.reduced >= -proof.error) & (bounds.least != own_least)
        uses_most = (proof.reduced <= proof.error) & (bounds.most != own_most)
        leans = bool((uses_least & bounds.leans[0]).any() or (uses_most & bounds.leans[1]).any())
        if not leans and len(self.cuts):
            cuts = proof.rows[proof.rows >= self.rules] - self.rules
            leans = bool(self.leaning_rows[cuts].any())
        used = np.concatenate((2 * uses_least.nonzero()[0], 2 * uses_most.nonzero()[0] + 1))
        return {
            "weight": proof.weight, "rows": proof.rows, "multipliers": proof.multipliers,
            "bound": proof.bound, "bounds": used, "leans": leans, "exact": False,
        }  # fmt: skip

    def exact_closure(
        self, weight: int, multipliers: dict[int, Fraction], bound: Fraction, bounds: Bounds
    ) -> dict[str, Any]:
        """Return the record of an exact proof; it is taken to use every tightened bound."""
        changed = np.concatenate(
            (2 * (bounds.least != self._own[0]).nonzero()[0],
             2 * (bounds.most != self._own[1]).nonzero()[0] + 1)
        )  # fmt: skip
        cuts = [i - self.rules for i in multipliers if i >= self.rules]
        return {
            "weight": weight,
            "rows": np.array(list(multipliers), int),
            "multipliers": [str(y) for y in multipliers.values()],
            "bound": str(bound),
            "bounds": changed,
            "leans": bool(bounds.leans.any() or self.leaning_rows[cuts].any()),
            "exact": True,
        }
