"""Branch and cut over arrays: tree, branching, cuts, tightening, rounding."""

from intplan.search.engine import branch_and_cut
from intplan.search.result import Added, Cut, SearchResult

__all__ = ["Added", "Cut", "SearchResult", "branch_and_cut"]
