"""Random changes of random standing plans: every answer against the reference, every tree proven.

A quick share runs under pytest.  ``python -m tests.test_replan_random --many 2000`` goes through
that many sheets with a chain of changes each and prints what fails, with its seed;
``--seed N`` goes through one of them in full.
"""

from __future__ import annotations

import argparse
import math
import sys
import tempfile
import traceback
from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from fractions import Fraction
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import intplan
from intplan.planning.replan import Replan, replan
from intplan.relaxation.dictionary import Dictionary
from intplan.search.engine import Search
from intplan.sheet.model import Activity, Rule, Sheet
from tests import reference
from tests.changes import (
    KINDS,
    Change,
    dense_change,
    drawn,
    lowest,
    planners_change,
    random_change,
)
from tests.families import Instance, instance_of
from tests.generators import brute_force, random_problem, tiny_problem
from tests.reference import reference_milp, settle
from tests.verify import verify_standing

CHAIN = 5
QUICK_SHEETS = 60
LOOSENING = ("waive", "outward", "bound outward", "waive bound", "replaced")
Number = int | Fraction


class Failure(AssertionError):
    """An answer that is not right, with what was asked."""


def require(condition: object, complaint: str) -> None:
    """Raise `Failure` where a condition does not hold."""
    if not condition:
        raise Failure(complaint)


# ---------------------------------------------------------------------- sheets


def random_sheet(seed: int) -> Sheet:
    """Return a small sheet of any kind, some rules of it soft or in thirds and sevenths."""
    sheet = Sheet.from_arrays(**random_problem(seed).arrays())
    rng = np.random.default_rng([seed, 5150])
    rules = []
    for rule in sheet.rules:
        if rng.random() < 0.12:
            give_most = int(rng.integers(0, 5)) if rng.random() < 0.5 else None
            rule = replace(rule, give=int(rng.integers(1, 10)), give_most=give_most)
        if rng.random() < 0.12:
            rule = scaled(rule, Fraction(int(rng.integers(1, 5)), int(rng.integers(2, 8))))
        rules.append(rule)
    return replace(sheet, rules=tuple(rules))


def scaled(rule: Rule, factor: Number) -> Rule:
    """Return a rule times a factor; its limits keep their sides."""

    def times(value: Number | None) -> Number | None:
        return None if value is None else lowest(value * factor)

    terms = tuple((j, lowest(c * factor)) for j, c in rule.terms)
    return replace(rule, terms=terms, least=times(rule.least), most=times(rule.most))


# ---------------------------------------------------------------------- one change


def check_change(standing: intplan.StandingPlan, change: Change) -> Replan:
    """Re-plan and hold everything that is said against the reference and exact arithmetic."""
    kept = (standing.exact_plan, standing.exact_value, standing.outcome, standing.search)
    answer = replan(standing, **change.arguments)
    now = (standing.exact_plan, standing.exact_value, standing.outcome, standing.search)
    require(kept == now, "the standing plan itself has changed")
    check_sheet(answer.changes.sheet, change.sheet)
    check_sheet(answer.after.sheet, change.sheet)
    verify_standing(answer.after)
    check_outcome(answer, change.sheet)
    check_effect(answer, standing, change.sheet)
    check_differences(answer, standing)
    return answer


def check_sheet(found: Sheet, expected: Sheet) -> None:
    """Compare rules and activities, exactly; ``7 <= a`` may be held as ``-a <= -7``."""

    def of_rule(rule: Rule) -> tuple:
        if rule.terms and rule.terms[0][1] < 0:
            turned = scaled(rule, -1)
            rule = replace(turned, least=turned.most, most=turned.least)
        return rule.name, rule.terms, rule.least, rule.most, rule.give, rule.give_most

    def of_activity(activity: Activity) -> tuple:
        return activity.name, activity.least, activity.most, activity.whole

    for one, other in zip(found.rules, expected.rules, strict=True):
        require(of_rule(one) == of_rule(other), f"rule {of_rule(one)}, expected {of_rule(other)}")
    for one, other in zip(found.activities, expected.activities, strict=True):
        require(
            of_activity(one) == of_activity(other),
            f"activity {of_activity(one)}, expected {of_activity(other)}",
        )
    require(found.aim == expected.aim, "the aim is another one")


def check_outcome(answer: Replan, sheet: Sheet) -> None:
    """Compare outcome and value with the reference, from scratch on the changed sheet.

    The tree has been proven by `verify_standing` before, so where the two differ the answer
    stands, unless trying every plan shows otherwise: see `settled`.
    """
    after = answer.after
    instance = instance_of(sheet, "changed", "changed")
    theirs = reference_milp(instance, time_limit=20)
    status = settle(instance, theirs)
    expected = {
        reference.OPTIMAL: "optimal",
        reference.INFEASIBLE: "infeasible",
        reference.UNBOUNDED: "unbounded",
    }.get(status)
    agrees = after.outcome == expected and (
        expected != "optimal"
        or math.isclose(after.value, theirs.value, rel_tol=1e-6, abs_tol=1e-6)
    )
    if not agrees:
        require(
            settled(answer, instance),
            f"{after.outcome} {after.exact_value}, the reference says {expected} {theirs.value}",
        )


def settled(answer: Replan, instance: Instance) -> bool:
    """Tell whether our answer holds in spite of the reference.

    A proven optimum, contradiction or ray is right by `verify_standing`; where every plan can be
    tried, they are tried as well.  An unfinished answer settles nothing.
    """
    after = answer.after
    if after.outcome == "unfinished":
        return False
    try:
        outcome, value = brute_force(instance)
    except ValueError:
        return True
    return (outcome, value) == (after.outcome, after.exact_value)


def check_effect(answer: Replan, standing: intplan.StandingPlan, sheet: Sheet) -> None:
    """The word for what happened; among equally good plans the old one is kept."""
    after = answer.after
    if after.outcome == "infeasible":
        require(answer.effect == "impossible", f"{answer.effect} where no plan is left")
        check_clash(answer, sheet)
        return
    require(answer.found is None, "a clash where there is a plan")
    if after.outcome == "unbounded":
        require(answer.effect == "unbounded", f"{answer.effect} where the aim has no limit")
        return
    require(after.outcome == "optimal", f"{after.outcome} without any limit")
    require(answer.effect in ("stands", "moved"), f"{answer.effect} where a plan is proven best")
    same = plan_of(standing) == after.exact_plan
    require(
        (answer.effect == "stands") == same,
        f"{answer.effect}, but the plan is {'the same' if same else 'another one'}",
    )
    old = plan_of(standing)
    if old is not None:
        held = sheet.check(list(old.values()))
        require(
            same or not (held.good and held.value == after.exact_value),
            "the old plan is as good, but it was not kept",
        )


def check_differences(answer: Replan, standing: intplan.StandingPlan) -> None:
    """Cost and moves are the exact differences of the two plans."""
    cost, moves = None, {}
    old, new = plan_of(standing), plan_of(answer.after)
    if old is not None and new is not None:
        sign = -1 if standing.sheet.aim.sense == "maximize" else 1
        cost = sign * (answer.after.exact_value - standing.exact_value)
        moves = {name: (old[name], new[name]) for name in old if old[name] != new[name]}
    require(answer.exact_cost == cost, f"cost {answer.exact_cost}, expected {cost}")
    require(answer.exact_moves == moves, f"moves {answer.exact_moves}, expected {moves}")


def plan_of(standing: intplan.StandingPlan) -> dict[str, Number] | None:
    """Return the plan; None where the aim has no limit, for then no plan is the best."""
    return None if standing.outcome == "unbounded" else standing.exact_plan


# ---------------------------------------------------------------------- clashes


def check_clash(answer: Replan, sheet: Sheet) -> None:
    """The clash has no plan; each member left out, it has one: that of the member's witness.

    Tests that were given up leave members without a witness, and the clash is told to be open.
    """
    found = answer.found
    require(found is not None and found.names, "impossible without a clash")
    require(len(set(found.names)) == len(found.names), "a member of the clash is named twice")
    alone = only(sheet, found.names)
    outcome = intplan.solve(alone, node_limit=300).outcome  # may not end: bounds are missing
    require(outcome in ("infeasible", "unfinished"), f"the clash {found.names} is {outcome}")
    open_ones = set(found.names) - set(found.witnesses)
    require(found.smallest or found.given_up, f"the clash {found.names} is left open")
    require(found.smallest == (not open_ones), f"no witness for {open_ones}")
    require(set(found.witnesses) <= set(found.names), "a witness for what is no member")
    for name, witness in found.witnesses.items():
        rest = only(sheet, [member for member in found.names if member != name])
        held = rest.check([witness[activity.name] for activity in sheet.activities])
        require(held.good, f"the witness of {name} breaks {[b.name for b in held.broken]}")


def only(sheet: Sheet, names: Any) -> Sheet:
    """Return a sheet with the named rules and bounds alone, and without an aim."""
    kept = set(names)
    rules = tuple(rule for rule in sheet.rules if rule.name in kept)
    activities = tuple(
        replace(
            activity,
            least=activity.least if f"{activity.name} least" in kept else None,
            most=activity.most if f"{activity.name} most" in kept else None,
        )
        for activity in sheet.activities
    )
    return replace(sheet, aim=replace(sheet.aim, sense=None, terms=(), constant=0),
                   rules=rules, activities=activities)  # fmt: skip


# ---------------------------------------------------------------------- chains


def chain(seed: int, sheet: Sheet, folder: Path, kind: str | None = None) -> Iterator[tuple]:
    """Re-plan the re-planned, `CHAIN` times over, saved and loaded now and then.

    Where no plan is left the chain mostly goes on from the plan before, or loosens something, so
    that it does not stay there.  Yields the standing plan and the change before each step is
    checked; what is sent back is the answer.
    """
    rng = np.random.default_rng([seed, 31])
    standing = intplan.solve(sheet)
    for step in range(CHAIN):
        if rng.random() < 0.3:
            path = folder / f"{seed}-{step}.json"
            standing.save(path)
            standing = intplan.load_standing(path)
            path.unlink()
        if kind is None and standing.outcome == "infeasible" and rng.random() < 0.6:
            kind = LOOSENING[int(rng.integers(len(LOOSENING)))]
        change = random_change(standing.sheet, plan_of(standing), rng, kind)
        kind = None
        answer = yield standing, change
        if answer.effect in ("stands", "moved") or rng.random() < 0.3:
            standing = answer.after


def run_chain(seed: int, sheet: Sheet, folder: Path, kind: str | None = None) -> Counter[str]:
    """Check every step of a chain; count kinds and effects."""
    counts: Counter[str] = Counter()
    steps = chain(seed, sheet, folder, kind)
    answer: Replan | None = None
    for step in range(CHAIN):
        standing, change = next(steps) if answer is None else steps.send(answer)
        try:
            answer = check_change(standing, change)
        except Exception as problem:
            raise Failure(told(seed, step, standing, change)) from problem
        counts[answer.effect] += 1
        counts["given up"] += answer.found is not None and answer.found.given_up
        counts.update(change.kinds)
    return counts


def told(seed: int, step: int, standing: intplan.StandingPlan, change: Change) -> str:
    """Say what was asked, so that it can be asked again."""
    return (
        f"seed {seed}, step {step}, {' + '.join(change.kinds)}\n{written_sheet(standing.sheet)}\n"
        f"standing: {standing.outcome} {standing.exact_value} {standing.exact_plan}\n"
        f"replan(standing, **{change.arguments})"
    )


def written_sheet(sheet: Sheet) -> str:
    """Return a sheet as TOML."""
    lines = []
    if sheet.aim.sense is not None:
        lines += ["[aim]", f'{sheet.aim.sense} = "{sheet.show_aim()}"']
    lines.append("[activities]")
    for a in sheet.activities:
        parts = [f'least = "{a.least}"' if a.least is not None else "least = -inf"]
        parts += [f'most = "{a.most}"'] * (a.most is not None) + ["whole = false"] * (not a.whole)
        lines.append(f'"{a.name}" = {{ {", ".join(parts)} }}')
    lines.append("[rules]")
    for rule in sheet.rules:
        parts = [f'rule = "{sheet.show_rule(rule)}"']
        parts += [f'give = "{rule.give}"'] * (rule.give is not None)
        parts += [f'give_most = "{rule.give_most}"'] * (rule.give_most is not None)
        lines.append(f'"{rule.name}" = {{ {", ".join(parts)} }}')
    return "\n".join(lines)


def sheet_of(seed: int) -> tuple[Sheet, str]:
    """Return the sheet of a seed and the kind of the first change; a third of them is tiny."""
    kinds = list(KINDS)
    if seed % 3 == 2:
        return Sheet.from_arrays(**tiny_problem(seed).arrays()), kinds[seed // 3 % len(kinds)]
    return random_sheet(seed), kinds[seed % len(kinds)]


def test_chains_of_changes_agree_with_the_reference(tmp_path: Path) -> None:
    """Source: scipy.optimize.milp from scratch on each changed sheet; trees by `tests.verify`."""
    counts: Counter[str] = Counter()
    for seed in range(QUICK_SHEETS):
        sheet, kind = sheet_of(seed)
        counts += run_chain(seed, sheet, tmp_path, kind)
    assert not counts["given up"], counts
    assert all(counts[kind] >= 5 for kind in KINDS), counts
    assert all(counts[e] >= 5 for e in ("stands", "moved", "impossible", "unbounded")), counts


# ---------------------------------------------------------------------- facts of the trade


def optimal_standings(count: int) -> Iterator[tuple[int, intplan.StandingPlan]]:
    """Go through seeds and standing plans that are optimal."""
    for seed in range(count):
        standing = intplan.solve(sheet_of(seed)[0])
        if standing.outcome == "optimal":
            yield seed, standing


def test_a_rule_that_the_plan_meets_costs_no_pivot_and_no_node(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """The plan stands at the same value, and no table is even made (common practice, no source)."""
    standings = list(optimal_standings(120))
    assert len(standings) > 50

    def forbidden(*_: object, **__: object) -> None:
        raise AssertionError("a search")

    monkeypatch.setattr(Dictionary, "__init__", forbidden)
    monkeypatch.setattr(Dictionary, "reoptimise", forbidden)
    monkeypatch.setattr(Search, "__init__", forbidden)
    for seed, standing in standings:
        for kind in ("met", "soft met"):
            rng = np.random.default_rng([seed, 40])
            change = drawn(standing.sheet, standing.exact_plan, rng, [kind])
            if not change.sheet.check(list(standing.exact_plan.values())).good:
                continue  # drawn around a plan whose odd fractions were rounded
            answer = replan(standing, **change.arguments)
            assert answer.effect == "stands", seed
            assert (answer.after.outcome, answer.cost, answer.moves) == ("optimal", 0, {})
            assert answer.after.exact_plan == standing.exact_plan
            assert answer.after.exact_value == standing.exact_value
            assert answer.after.search.nodes <= standing.search.nodes
            assert answer.after.search.pivots <= standing.search.pivots


def test_a_rule_missed_at_every_most_helpful_bound_is_impossible() -> None:
    """Told as impossible, by that rule and the bounds alone (common practice, no source)."""
    tried = 0
    for seed, standing in optimal_standings(60):
        rng = np.random.default_rng([seed, 41])
        change = drawn(standing.sheet, standing.exact_plan, rng, ["beyond"])
        if not change.kinds:
            continue
        tried += 1
        answer = check_change(standing, change)
        assert answer.effect == "impossible", seed
        (name,) = change.arguments["add"]
        assert name in answer.clash or not only_feasible_without(change.sheet, name), seed
    assert tried > 15


def only_feasible_without(sheet: Sheet, name: str) -> bool:
    """Tell whether a sheet without one rule has a plan."""
    rules = tuple(rule for rule in sheet.rules if rule.name != name)
    return intplan.solve(replace(sheet, rules=rules)).outcome != "infeasible"


def test_what_the_old_value_proved_is_undone_when_the_value_gets_worse(tmp_path: Path) -> None:
    """Minimise 10a + 5b with a + b >= 1, both 0 or 1.

    The best, 5, fixes a = 0, for a plan with a costs 10.  Then b <= 0 arrives: that step leaned
    on a value that no plan has any more, and the best is 10 with a = 1.
    """
    sheet = Sheet.parse(
        """
        [aim]
        minimize = "10*a + 5*b"
        [activities]
        a = { most = 1 }
        b = { most = 1 }
        [rules]
        one = "a + b >= 1"
        """
    )
    standing = intplan.solve(sheet)
    assert (standing.value, standing.plan) == (5, {"a": 0, "b": 1})
    standing.save(tmp_path / "one.json")
    for kept in (standing, intplan.load_standing(tmp_path / "one.json")):
        for change in ({"add": {"none": "b <= 0"}}, {"set": {"b": "<= 0"}}, {"set": {"b": "= 0"}}):
            answer = replan(kept, **change)
            assert (answer.effect, answer.after.value, answer.cost) == ("moved", 10, 5)
            assert answer.moves == {"a": (0, 1), "b": (1, 0)}
            assert (standing.value, standing.plan) == (5, {"a": 0, "b": 1})
            verify_standing(answer.after)
            back = replan(answer.after, waive=["none"] if "add" in change else [],
                          set={} if "add" in change else {"b": (0, 1)})  # fmt: skip
            assert (back.effect, back.after.value, back.cost) == ("moved", 5, -5)
            verify_standing(back.after)


# ---------------------------------------------------------------------- staying close


def plans_of(sheet: Sheet) -> Iterator[tuple[list[int], Number]]:
    """Go through all good plans of a tiny whole sheet and their values."""
    ranges = [range(math.ceil(a.least), math.floor(a.most) + 1) for a in sheet.activities]
    for plan in product(*ranges):
        check = sheet.check(list(plan))
        if check.good:
            yield list(plan), check.value


def test_the_nearest_of_the_good_plans_is_found() -> None:
    """Every plan of tiny sheets tried: within the percentage, none lies nearer to the old one."""
    asked = Counter()
    for seed in range(200):
        sheet = Sheet.from_arrays(**tiny_problem(seed).arrays())
        if math.prod(int(a.most - a.least) + 1 for a in sheet.activities) > 300:
            continue
        standing = intplan.solve(sheet)
        if standing.outcome != "optimal":
            continue
        change = planners_or_dense(standing, seed)
        percent = (0, 5, 40)[seed % 3]
        answer = replan(standing, **change.arguments, stay_close=percent)
        plans = list(plans_of(change.sheet))
        if not plans:
            assert answer.effect == "impossible", seed
            continue
        better = max if sheet.aim.sense == "maximize" else min
        best = better(value for _, value in plans)
        old = list(standing.exact_plan.values())
        distances = [
            sum(abs(new - now) for new, now in zip(plan, old, strict=True))
            for plan, value in plans
            if 100 * abs(value - best) <= percent * abs(best)
        ]
        assert answer.closeness.done, (seed, answer.closeness)
        assert answer.closeness.distance == min(distances), seed
        moved = sum(abs(new - now) for now, new in answer.exact_moves.values())
        assert moved == min(distances), seed
        assert 100 * abs(answer.after.exact_value - best) <= percent * abs(best), seed
        asked[percent] += 1
    assert all(asked[percent] > 3 for percent in (0, 5, 40)), asked


def planners_or_dense(standing: intplan.StandingPlan, seed: int) -> Change:
    """Return a change that cuts the plan off."""
    draw = planners_change if seed % 2 else dense_change
    return draw(standing.sheet, standing.exact_plan, seed)


# ---------------------------------------------------------------------- by hand


def main() -> int:
    """Go through many seeds, or one; print what fails; return the exit status."""
    parser = argparse.ArgumentParser(prog="python -m tests.test_replan_random", description=__doc__)
    parser.add_argument("--many", type=int, default=1000, help="how many sheets")
    parser.add_argument("--start", type=int, default=0, help="the first seed")
    parser.add_argument("--seed", type=int, help="this one alone")
    options = parser.parse_args()
    seeds = range(options.start, options.start + options.many)
    if options.seed is not None:
        seeds = range(options.seed, options.seed + 1)
    failed, counts = 0, Counter()
    with tempfile.TemporaryDirectory() as folder:
        for seed in seeds:
            try:
                counts += run_chain(seed, *_placed(seed, folder))
            except Exception as problem:
                failed += 1
                cause = problem.__cause__ or problem
                print(f"--- {problem}\n{''.join(traceback.format_exception(cause, limit=-3))}")
    print(f"{len(seeds)} sheets, {failed} failed; {dict(counts)}")
    return 1 if failed else 0


def _placed(seed: int, folder: str) -> tuple[Sheet, Path, str]:
    sheet, kind = sheet_of(seed)
    return sheet, Path(folder), kind


if __name__ == "__main__":
    sys.exit(main())
