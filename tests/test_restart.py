"""The kept tree taken up again: under limits, and from files that say what no search says."""

from __future__ import annotations

import hashlib
import json
import tempfile
from collections.abc import Callable
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import intplan
from intplan.planning import store
from intplan.planning.restart import restarted
from intplan.relaxation.dictionary import Stopped
from intplan.relaxation.start import NoDualBasis
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


def test_an_interrupt_before_the_first_basis_proves_nothing(monkeypatch) -> None:
    """The old plan fits and is in hand by then, but a better one may exist: here one does."""
    def stopped(*args: Any) -> None:
        raise Stopped

    standing = intplan.solve(intplan.Sheet.from_arrays(**selection(5, 30, 2).arrays()))
    changes = change_sheet(
        standing.sheet, waive=[rule.name for rule in standing.sheet.rules[1:]]
    )
    assert restarted(standing, changes).exact_value > standing.exact_value
    monkeypatch.setattr(search, "opened", stopped)
    answer = restarted(standing, changes)
    assert (answer.outcome, answer.exact_bound) == ("unfinished", None)
    assert answer.exact_value == standing.exact_value
    verify_standing(answer)


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


@pytest.mark.parametrize("instance", INSTANCES, ids=lambda instance: instance.family)
@pytest.mark.parametrize(
    ("at", "solved", "error"),
    [
        ("leaves", 2, NoDualBasis(np.zeros(1), 0)),
        ("root", 0, np.linalg.LinAlgError("Singular matrix")),
    ],
    ids=["nodes", "root"],
)
def test_where_doubles_find_no_basis_the_slack_basis_is_the_first(
    instance: Instance, at: str, solved: int, error: Exception, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As in a search from nothing; the cuts stay, and what follows is proven anyway.

    Refused are the bases from some number of solved nodes on: of the root too, or of nodes below.
    """
    standing, changes = standing_of(instance)
    expected = intplan.solve(changes.sheet).exact_value
    refused = []
    start = search.opened

    def opened(context: Any, *where: Any) -> Any:
        if context.nodes >= solved:
            refused.append(context.nodes)
            raise error
        return start(context, *where)

    monkeypatch.setattr(search, "opened", opened)
    answer = restarted(standing, changes, at=at)
    assert refused and answer.outcome == "optimal" and answer.exact_value == expected
    verify_standing(answer)


BENDING = """
[aim]
maximize = "5*x + 4*y"
[activities]
x = { most = 9 }
y = { most = 9 }
[rules]
oven = "3*x + 2*y <= 20"
shelf = { rule = "x + 2*y <= 6", give = 1, give_most = 1 }
"""


@pytest.mark.parametrize(
    "other", [{"give_most": 8}, {"give_most": None}, {"least": 4}, {"least": 4, "most": None}]
)
def test_a_soft_rule_may_be_replaced_by_one_of_the_same_terms(other: dict[str, Any]) -> None:
    """Its bends are other columns then, or have other ends."""
    standing = intplan.solve(intplan.Sheet.parse(BENDING))
    shelf = replace(standing.sheet.rules[1], **other)
    answer = standing.replan(waive=["shelf"], add={"shelf": shelf}).after
    fresh = intplan.solve(replace(answer.sheet))
    assert (answer.outcome, answer.exact_value) == (fresh.outcome, fresh.exact_value)
    made, built = answer.sheet.problem(), fresh.sheet.problem()
    assert (made.matrix == built.matrix).all() and (made.most == built.most).all()
    verify_standing(answer)


CUT_FROM_A_BOUND = """
[aim]
maximize = "5*a + 5*b + 6*c + 4*d"
[activities]
a = { most = 5 }
b = { most = 4 }
c = { most = 4 }
d = { most = 4, least = 1, whole = false }
[rules]
r0 = "7*a + 6*b + 8*c + 7*d <= 53"
r1 = "10*a + 2*b + 1*c + 9*d <= 26"
"""


@pytest.mark.parametrize("at", ["root", "leaves"])
def test_a_bound_that_gives_less_than_a_double_undoes_its_cuts(at: str) -> None:
    """The exact bounds count; source: `tests.verify`."""
    standing = intplan.solve(intplan.Sheet.parse(CUT_FROM_A_BOUND))
    least_of_d = 2 * 3
    assert any(least_of_d in cut.evidence["bounds"] for cut in standing.result.cuts)
    hair = Fraction(1, 10**25)
    assert float(1 - hair) == 1.0
    answer = restarted(standing, change_sheet(standing.sheet, set={"d least": 1 - hair}), at=at)
    verify_standing(answer)
    assert answer.outcome == "optimal"
    assert answer.exact_value == intplan.solve(answer.sheet).exact_value


def forged(content: dict[str, Any], path: Path) -> Path:
    """Write a file whose digest is right, whatever its content says."""
    body = json.dumps(content).encode()
    digest = hashlib.sha256(body).hexdigest()
    head = json.dumps({"kind": store.KIND, "format": store.FORMAT, "sha256": digest})
    path.write_bytes(head[:-1].encode() + b",\n" + store._CONTENT + body + store._END)
    return path


Forge = Callable[[dict[str, Any]], object]


def root_evidence(result: dict[str, Any]) -> dict[str, Any]:
    """Return the evidence of the root."""
    return result["tree"]["nodes"][0]["evidence"]


def child(result: dict[str, Any]) -> dict[str, Any]:
    """Return the second node."""
    return result["tree"]["nodes"][1]


FORGERIES: dict[str, Forge] = {
    "no steps": lambda result: root_evidence(result).pop("steps"),
    "steps that are no list": lambda result: root_evidence(result).update(steps=True),
    "a step that is no object": lambda result: root_evidence(result)["steps"].append("x"),
    "a step of no activity": lambda result: root_evidence(result)["steps"].append(
        {"by": "rule", "row": 0, "limit": 1, "leans": False, "changes": [[-1, 1, 0.0]]}
    ),
    "a step of an unknown rule": lambda result: root_evidence(result)["steps"].append(
        {"by": "rule", "row": 999, "limit": 1, "leans": False, "changes": [[0, 1, 0.0]]}
    ),
    "a step without an end": lambda result: root_evidence(result)["steps"].append(
        {"by": "rule", "row": 0, "limit": 1, "leans": False,
         "changes": [[0, 1, {"$float": "nan"}]]}
    ),
    "no multipliers": lambda result: root_evidence(result)["closure"].pop("multipliers"),
    "a multiplier short": lambda result: root_evidence(result)["closure"].update(
        rows={"$array": "int64", "shape": [1], "values": [0]}
    ),
    "an unknown row": lambda result: root_evidence(result)["closure"].update(
        rows={"$array": "int64", "shape": [1], "values": [-1]},
        multipliers={"$array": "float64", "shape": [1], "values": [1.0]},
    ),
    "an amount left out": lambda result: child(result)["added"][0].__setitem__(2, -5.0),
    "a branch on a cut": lambda result: child(result)["added"][0].__setitem__(0, "cut"),
    "a branch that adds nothing": lambda result: child(result).update(added=[]),
    "no nodes": lambda result: result["tree"].update(nodes=[]),
    "a cut without premises": lambda result: result["cuts"][0]["evidence"].pop("box"),
    "a cut of a later cut": lambda result: result["cuts"][0]["evidence"].update(row=999, rows=[0]),
    "a cut without an end": lambda result: result["cuts"][0].update(least={"$float": "inf"}),
}  # fmt: skip


@pytest.fixture(scope="module")
def content() -> str:
    """What is in the file of a standing plan with branches and cuts, as JSON."""
    standing, _ = standing_of(INSTANCES[2])
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "standing.json"
        standing.save(path)
        return json.dumps(json.loads(path.read_text())["content"])


@pytest.mark.parametrize("how", FORGERIES)
def test_evidence_of_another_shape_is_refused_in_one_line(
    how: str, content: str, tmp_path: Path
) -> None:
    """The digest guards against damage only, so a right digest proves no shape."""
    record = json.loads(content)
    path = forged(record, tmp_path / "forged.json")
    assert intplan.load_standing(path).outcome == "optimal"
    FORGERIES[how](record["result"])
    with pytest.raises(intplan.IntplanError) as refused:
        intplan.load_standing(forged(record, path))
    assert "\n" not in str(refused.value)
