"""An answer that stands in a changed sheet: known at once, its tree renumbered when wanted."""

from __future__ import annotations

from dataclasses import replace
from functools import cached_property
from typing import TYPE_CHECKING

from intplan.planning.standing import StandingPlan, sheet_without

if TYPE_CHECKING:
    from intplan.search import SearchResult
    from intplan.sheet.changes import Changes


class CarriedPlan(StandingPlan):
    """The answer of a standing plan as that of a changed sheet; see `StandingPlan.carried`."""

    def __init__(self, origin: StandingPlan, changes: Changes) -> None:
        answer, plan = origin.answer, origin.answer.plan
        added = changes.sheet.rules[len(changes.before.rules) :]
        soft = tuple(rule for rule in added if rule.give is not None)
        if plan is not None and soft:
            limits = [limit for rule in soft for limit in (rule.least, rule.most)]
            plan = [*plan, *[0] * (len(limits) - limits.count(None))]
        self.__dict__.update(
            sheet=changes.sheet,
            answer=replace(answer, plan=plan, nodes=0, pivots=0, seconds=0.0, reopened=0),
            _origin=origin,
            _soft=tuple(rule.name for rule in soft),
        )

    @property
    def answer(self) -> SearchResult:
        """What is known of the plan; the tree and the cuts in it are those of the sheet before."""
        return self.__dict__["answer"]

    @cached_property
    def result(self) -> SearchResult:
        """The answer with its tree in the numbers of the changed sheet."""
        import numpy as np

        from intplan.search.carry import Places
        from intplan.search.translate import translated

        origin = self.__dict__.pop("_origin")
        without = (*origin.result.tree.graph.get("without", ()), *self._soft)
        proven = sheet_without(self.sheet, without)
        index = proven.rule_index
        places = np.array([index[rule.name] for rule in origin.proven_sheet.rules], int)
        columns = np.arange(len(origin.kept.problem.cost))
        tree, cuts = translated(proven.problem(), origin.kept, Places(places, columns))
        if without:
            tree.graph["without"] = without
        return replace(self.answer, tree=tree, cuts=cuts)
