"""What a search hands back."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, NamedTuple

import networkx as nx

from intplan.sheet.problem import Number


class Added(NamedTuple):
    """A row that a node adds to its parent: a branching bound or a cut.

    `kind` is "least", "most" (then `index` is the column) or "cut" (the number of the cut);
    `value` is the bound, or the cut's limit.
    """

    kind: str
    index: int
    value: float


@dataclass(slots=True)
class Cut:
    """A row found by the search: ``least <= sum(coefficients * x[columns]) <= most``.

    Attributes
    ----------
    kind : "gomory" or "cover"
    columns, coefficients, least, most : the row, doubles that are exact as given
    leans : whether it leans on the cut-off, through bounds that do
    evidence : what it was derived from; see `docs/design.md`
    """

    kind: str
    columns: tuple[int, ...]
    coefficients: tuple[float, ...]
    least: float
    most: float
    leans: bool
    evidence: dict[str, Any]


@dataclass
class SearchResult:
    """The answer of `intplan.search.branch_and_cut`.

    Attributes
    ----------
    outcome : "optimal", "within_gap", "infeasible", "unbounded" or "unfinished"
    ended_by : None, "time", "nodes", "interrupt", or "range" where a whole activity without a
        bound would have to be branched on beyond `intplan.search.engine.RANGE`, or any beyond
        what doubles count
    plan : exact amounts by column (activities, then bends), or None
    value : exact value of the plan in the aim's units
    bound : exact number that no plan's value can pass, None where there is no finite one
    ray : integers by column, a direction along which the aim improves for ever
    tree : the search tree; node attributes as in `docs/design.md`
    any_plan : the tree looks for any plan, whatever the aim; its bounds are of another aim,
        that of `intplan.search.engine.drawn_home`
    cuts : the cuts in the order of their numbers
    nodes, pivots : nodes solved and pivots made, trials included
    seconds : time spent
    reopened : nodes of an earlier tree that were solved again; None for a search from nothing
    """

    outcome: str
    ended_by: str | None
    plan: list[Number] | None
    value: Number | None
    bound: Number | None
    ray: list[int] | None
    tree: nx.DiGraph
    any_plan: bool = False
    cuts: list[Cut] = field(default_factory=list)
    nodes: int = 0
    pivots: int = 0
    seconds: float = 0.0
    reopened: int | None = None
