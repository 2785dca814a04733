"""The kept tree taken up again under limits: what is proven stays with the tree."""

from __future__ import annotations

from collections.abc import Callable

import pytest

import intplan
from intplan.planning.restart import restarted
from intplan.search import restart as search
from intplan.sheet.changes import Changes, change_sheet
from tests.families import Instance, covering, product_mix, selection
from tests.verify import verify_standing

INSTANCES = (product_mix(6, 14, 2, scarce=4), covering(30, 40, 0.15, 2), selection(5, 30, 2))


def standing_of(instance: Instance) -> tuple[intplan.StandingPlan, Changes]:
    """Return a standing plan with a tree, and a dense rule that cuts its plan off by one unit."""
    standing = intplan.solve(intplan.Sheet.from_arrays(**instance.arrays()))
    amounts = [standing.exact_plan[a.name] for a in standing.sheet.activities]
    weights = [3 + j % 4 for j in range(len(amounts))]
    value = sum(w * amount for w, amount in zip(weights, amounts, strict=True))
    terms = " + ".join(
        f"{w}*{a.name}" for w, a in zip(weights, standing.sheet.activities, strict=True)
    )
    limit = f"<= {value - 1}" if standing.sheet.aim.sense == "maximize" else f">= {value + 1}"
    return standing, change_sheet(standing.sheet, add={"dense": f"{terms} {limit}"})


def after(polls: int) -> Callable[[], bool]:
    """Return what asks for an end at a poll."""
    left = iter(range(polls))
    return lambda: next(left, None) is None


@pytest.mark.parametrize("instance", INSTANCES, ids=lambda instance: instance.family)
def test_earlier_nodes_that_a_limit_leaves_waiting_keep_their_evidence(
    instance: Instance,
) -> None:
    """The bound of an unfinished answer rests on them too; source: `tests.verify`."""
    standing, changes = standing_of(instance)
    kept = 0
    for nodes in (1, 2, 4, 7):
        answer = restarted(standing, changes, node_limit=nodes, at="leaves")
        verify_standing(answer)
        waiting = [n for n in answer.result.tree if answer.result.tree.nodes[n]["bound"] is not None
                   and answer.result.tree.nodes[n]["outcome"] == "waiting"]  # fmt: skip
        kept += len(waiting)
        again = restarted(answer, change_sheet(answer.sheet), at="leaves")
        verify_standing(again)
        assert again.outcome == "optimal"
        assert again.exact_value == intplan.solve(changes.sheet).exact_value
    assert kept, "no limit left an earlier node waiting"


@pytest.mark.parametrize("instance", INSTANCES, ids=lambda instance: instance.family)
def test_an_interrupted_restart_is_proven_wherever_the_interrupt_comes(instance: Instance) -> None:
    """Cuts that were taken over do not outlive the steps they rest on."""
    standing, changes = standing_of(instance)
    for polls in (0, 1, 2, 3, 5, 8):
        for at in ("root", "leaves"):
            answer = restarted(standing, changes, stop=after(polls), at=at)
            verify_standing(answer)


def test_nodes_solved_before_the_leaves_are_given_up_count(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """They are told, and a limit on nodes covers them."""
    standing, changes = standing_of(INSTANCES[0])
    monkeypatch.setattr(search, "leaves_pay", lambda kept: True)
    monkeypatch.setattr(search, "PATIENCE", 0)
    monkeypatch.setattr(search, "FEW", 3)
    solved = []
    made = search.Restart.__init__

    def noted(self: search.Restart, *arguments: object) -> None:
        made(self, *arguments)
        solved.append(self)

    monkeypatch.setattr(search.Restart, "__init__", noted)
    answer = restarted(standing, changes)
    assert len(solved) == 2, "the leaves were not given up"
    leaves, root = solved
    assert leaves.context.nodes == 4
    own = sum(1 for _, node in root.tree.nodes(data=True) if node["pivots"])
    assert answer.search.nodes >= leaves.context.nodes + own
    verify_standing(answer)
