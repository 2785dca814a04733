"""The measured re-planning: answers to new rules, beside the reference from scratch.

``python -m tests.replan_bench`` draws changes that cut off the standing plan of each benchmark
sheet, half of them a planner's and half dense rows, and prints Markdown tables; ``--write
docs/replan-speed.md`` puts them between the two marker comments of that page.  Every answer is
compared: where two disagree the tables say so and the exit status is 1.
"""

from __future__ import annotations

import argparse
import gc
import math
import os
import statistics
import sys
import tempfile
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from itertools import count, islice
from pathlib import Path
from typing import Any, TypeVar

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # as the command line has it

import intplan
from intplan.files import write_atomically
from intplan.planning.replan import replan
from intplan.planning.restart import restarted
from intplan.sheet.changes import change_sheet
from intplan.sheet.numbers import Number
from tests import bench
from tests.bench import (
    BEGIN,
    END,
    Case,
    families,
    geometric_mean,
    split_at_markers,
    status,
    verdict,
)
from tests.changes import Change, dense_change, met_change, planners_change
from tests.families import instance_of
from tests.reference import INFEASIBLE, reference_milp, settle

CHANGES = 40
QUICK_CHANGES = 8
WAYS_EVERY = 4  # changes of which one is answered in the other ways as well
STANDS = 5  # rules that the plan meets, for each sheet
SLOW = 3.0  # seconds of a fresh solve from which a sheet gets a quarter of the changes
PLANNERS, DENSE = "planner's", "dense"
PLACES = ("leaves", "root")
Done = TypeVar("Done")


@dataclass
class Timed:
    """One change, and what each way to answer it took.

    Attributes
    ----------
    kind : a planner's change or a dense row
    outcome, value : of the answer; the value is exact
    verdict : whether all ways and the reference agree
    seconds, reference : of re-planning and of the reference
    nodes : solved by re-planning
    reopened : nodes of the old tree that were opened again, None where that is not known
    ways : seconds from the "leaves", from the "root" and from "scratch"; empty where not measured
    way_nodes : nodes solved on each of these ways
    clash : seconds of re-planning with the clash and the give, where no plan is left
    """

    kind: str
    outcome: str
    value: Number | None
    verdict: str
    seconds: float
    reference: float
    nodes: int
    reopened: int | None
    ways: dict[str, float] = field(default_factory=dict)
    way_nodes: dict[str, int] = field(default_factory=dict)
    clash: float | None = None

    @property
    def ratio(self) -> float:
        """Seconds of re-planning over seconds of the reference."""
        return self.seconds / self.reference

    def compare(self, after: intplan.StandingPlan) -> None:
        """Hold the answer of another way against the first one."""
        if "unfinished" in (self.outcome, after.outcome):
            return
        if (after.outcome, after.exact_value) != (self.outcome, self.value):
            self.verdict = "DISAGREE"


@dataclass
class Measured:
    """One sheet: its standing plan and its changes.

    Attributes
    ----------
    fresh, load : seconds of the first solve, and of loading the saved standing plan
    tree : nodes of the kept tree
    stands : seconds of ours and of the reference for rules that the plan meets
    fallen : rules that the plan meets, but that were not answered so
    """

    name: str
    family: str
    fresh: float
    load: float
    tree: int
    changes: list[Timed] = field(default_factory=list)
    stands: list[tuple[float, float]] = field(default_factory=list)
    fallen: int = 0

    @property
    def answers(self) -> str:
        """What is to be said of the agreement."""
        wrong = sum(one.verdict == "DISAGREE" for one in self.changes) + self.fallen
        open_ones = sum(one.verdict == "unfinished" for one in self.changes)
        parts = [f"{wrong} DISAGREE"] * bool(wrong) + [f"{open_ones} unfinished"] * bool(open_ones)
        return ", ".join(parts) or "agree"


# ---------------------------------------------------------------------- the ways to answer


def timed(work: Callable[[], Done]) -> tuple[Done, float]:
    """Return what `work` returns, and the seconds it took, without what others left to tidy up."""
    gc.collect()
    started = time.perf_counter()
    done = work()
    return done, time.perf_counter() - started


def changed(standing: intplan.StandingPlan, change: Change) -> Any:
    """Read a change."""
    return change_sheet(standing.sheet, plan=standing.exact_plan, **change.arguments)


def measure_change(
    standing: intplan.StandingPlan, kind: str, change: Change, time_limit: float, ways: bool
) -> Timed:
    """Time one change, in every way if `ways`.

    The reference is asked for arrays made beforehand; ours reads the texts of the change first.
    Where no plan is left, what is compared is the proof of that; the search for the clash is
    timed apart.
    """
    instance = instance_of(change.sheet, "changed", "changed")
    gc.collect()
    theirs = reference_milp(instance, time_limit)
    limit = {"time_limit": time_limit}
    possible = settle(instance, theirs) != INFEASIBLE
    if possible:
        answer, seconds = timed(lambda: replan(standing, **change.arguments, **limit))
        after = answer.after
    else:
        after, seconds = timed(lambda: restarted(standing, changed(standing, change), **limit))
    one = Timed(
        kind=kind,
        outcome=after.outcome,
        value=after.exact_value,
        verdict=verdict(after, instance, theirs),
        seconds=seconds,
        reference=theirs.seconds,
        nodes=after.search.nodes,
        reopened=getattr(after.result, "reopened", None),
    )
    if ways:
        measure_ways(one, standing, change, time_limit)
        if not possible:
            _, one.clash = timed(lambda: replan(standing, **change.arguments, **limit))
    return one


def measure_ways(
    one: Timed, standing: intplan.StandingPlan, change: Change, time_limit: float
) -> None:
    """Time the restart from the old leaves and from the root's basis, and a solve from nothing."""
    limit = {"time_limit": time_limit}
    ways: dict[str, Callable[[], intplan.StandingPlan]] = {
        place: lambda place=place: restarted(
            standing, changed(standing, change), at=place, **limit
        )
        for place in PLACES
    }
    ways["scratch"] = lambda: intplan.solve(changed(standing, change).sheet, **limit)
    for name, work in ways.items():
        after, one.ways[name] = timed(work)
        one.way_nodes[name] = after.search.nodes
        one.compare(after)


def measure_stands(
    measured: Measured, standing: intplan.StandingPlan, plan: dict[str, Number], time_limit: float
) -> None:
    """Time rules that the plan meets, which need no search."""
    for seed in range(STANDS):
        change = met_change(standing.sheet, plan, seed)
        answer, seconds = timed(lambda change=change: replan(standing, **change.arguments))
        theirs = reference_milp(instance_of(change.sheet, "met", "met"), time_limit)
        measured.stands.append((seconds, theirs.seconds))
        kept = answer.effect == "stands" and answer.after.exact_value == standing.exact_value
        close = theirs.value is None or math.isclose(standing.value, theirs.value, rel_tol=1e-6)
        measured.fallen += not (kept and close)


# ---------------------------------------------------------------------- one sheet


def cutting(standing: intplan.StandingPlan, kind: str) -> Iterator[Change]:
    """Go through the changes of one kind that cut the standing plan off, by seed."""
    draw = planners_change if kind == PLANNERS else dense_change
    plan = standing.exact_plan
    for seed in count():
        change = draw(standing.sheet, plan, seed)
        if not change.sheet.check(list(plan.values())).good:
            yield change


def saved_and_loaded(standing: intplan.StandingPlan) -> tuple[intplan.StandingPlan, float]:
    """Return the standing plan as its file gives it back, and the seconds of loading."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "standing.json"
        standing.save(path)
        return timed(lambda: intplan.load_standing(path))


def measure(
    case: Case, family: str, changes: int, time_limit: float, quick: bool
) -> Measured | None:
    """Measure all changes of one sheet; None where it has no plan that could be cut off."""
    solved, fresh = timed(lambda: intplan.solve(case.sheet, time_limit=time_limit))
    if solved.outcome != "optimal":
        return None
    standing, load = saved_and_loaded(solved)
    measured = Measured(case.instance.name, family, fresh, load, len(standing.result.tree))
    wanted = changes if fresh < SLOW else max(2, changes // 4)
    for kind in (PLANNERS, DENSE):
        for number, change in enumerate(islice(cutting(standing, kind), wanted // 2)):
            ways = not quick and number % WAYS_EVERY == 0
            measured.changes.append(measure_change(standing, kind, change, time_limit, ways))
            status(f"{case.instance.name}: {len(measured.changes)} of {wanted}")
    measure_stands(measured, standing, standing.exact_plan, time_limit)
    return measured


def run(names: list[str], changes: int, time_limit: float, quick: bool) -> Report:
    """Measure the named families, after one warm run of everything."""
    makers = families()
    warm = makers["demo"]()[0]
    measure(warm, "demo", 2, time_limit, quick)
    gc.collect()
    gc.freeze()  # so that tidying up looks at what comes now only
    report = Report(changes, time_limit, quick)
    for name in names:
        for case in makers[name]():
            measured = measure(case, name, changes, time_limit, quick)
            if measured is None:
                report.left_out.append(case.instance.name)
            else:
                report.sheets.append(measured)
    status("")
    return report


# ---------------------------------------------------------------------- the report


def mean(ratios: Iterable[float]) -> str:
    """Return a geometric mean as text, a dash of nothing."""
    ratios = list(ratios)
    return f"{geometric_mean(ratios):.2f}" if ratios else "-"


def median(numbers: Iterable[float]) -> str:
    """Return a median as text, a dash of nothing."""
    numbers = list(numbers)
    return f"{statistics.median(numbers):.0f}" if numbers else "-"


@dataclass
class Report:
    """Everything one run measured."""

    asked: int
    time_limit: float
    quick: bool
    sheets: list[Measured] = field(default_factory=list)
    left_out: list[str] = field(default_factory=list)

    @property
    def good(self) -> bool:
        """Whether all answers agreed."""
        return not any("DISAGREE" in sheet.answers for sheet in self.sheets)

    def changes(self) -> list[Timed]:
        """Return the changes of all sheets."""
        return [one for sheet in self.sheets for one in sheet.changes]

    def as_markdown(self, each: bool = False) -> str:
        """Return the tables, with one line a sheet as well if `each`."""
        parts = [self._setting(), self._families(), self._summary()]
        if each:
            parts.append(self._table("sheet", [(sheet.name, [sheet]) for sheet in self.sheets]))
        return "\n\n".join(parts) + "\n"

    def _setting(self) -> str:
        names = ", ".join(f"{name} {number}" for name, number in bench.versions().items())
        text = (
            f"{names}; {os.cpu_count()} cores. One run of each change and way. Ratios are of"
            " seconds, ours over the reference's from scratch on the changed sheet, as geometric"
            f" means; a search that was ended after {self.time_limit:g} s counts with that time."
        )
        if not self.quick:
            text += f" The other ways are those of one change in {WAYS_EVERY}."
        slow = [sheet.name for sheet in self.sheets if len(sheet.changes) < self.asked // 2 * 2]
        if slow:
            text += (
                f" Sheets whose fresh solve takes {SLOW:.0f} s or more get a quarter of the"
                f" {self.asked} changes: {', '.join(slow)}."
            )
        if self.left_out:
            text += f" Without a plan that could be cut off: {', '.join(self.left_out)}."
        return text

    def _families(self) -> str:
        by_family: dict[str, list[Measured]] = {}
        for sheet in self.sheets:
            by_family.setdefault(sheet.family, []).append(sheet)
        return self._table("family", [*by_family.items(), ("all", self.sheets)])

    def _table(self, what: str, groups: list[tuple[str, list[Measured]]]) -> str:
        heads = [what, "changes", "no plan left", "re-plan", "planner's", "dense", "worst",
                 "nodes", "stands", "answers"]  # fmt: skip
        if not self.quick:
            heads[7:8] = ["leaves", "root", "scratch", "nodes: re-plan, root, scratch",
                          "re-opened of", "load"]  # fmt: skip
        lines = ["| " + " | ".join(heads) + " |", "|---|" + "--:|" * (len(heads) - 2) + "---|"]
        lines += ["| " + " | ".join(self._line(name, group)) + " |" for name, group in groups]
        return "\n".join(lines)

    def _line(self, name: str, group: list[Measured]) -> list[str]:
        every = [one for sheet in group for one in sheet.changes]
        by_kind = {kind: [one for one in every if one.kind == kind] for kind in (PLANNERS, DENSE)}
        cells = [
            name,
            str(len(every)),
            str(sum(one.outcome == "infeasible" for one in every)),
            f"**{mean(one.ratio for one in every)}**",
            *(mean(one.ratio for one in kept) for kept in by_kind.values()),
            f"{max(one.ratio for one in every):.2f}",
        ]
        if self.quick:
            cells.append(median(one.nodes for one in every))
        else:
            cells += self._ways(group, every)
        stands = [ours / theirs for sheet in group for ours, theirs in sheet.stands]
        odd = [
            sheet.answers if len(group) == 1 else f"{sheet.name}: {sheet.answers}"
            for sheet in group
            if sheet.answers != "agree"
        ]
        share = f"{geometric_mean(stands):.4f}" if stands else "-"
        return [*cells, share, "; ".join(odd) or "agree"]

    def _ways(self, group: list[Measured], every: list[Timed]) -> list[str]:
        some = [one for one in every if one.ways]
        cells = [mean(one.ways[w] / one.reference for one in some) for w in (*PLACES, "scratch")]
        nodes = [median(one.nodes for one in some)]
        nodes += [median(one.way_nodes[way] for one in some) for way in ("root", "scratch")]
        opened = [(one.reopened, sheet.tree) for sheet in group for one in sheet.changes
                  if one.reopened is not None]  # fmt: skip
        share = f"{sum(o for o, _ in opened)} / {sum(t for _, t in opened)}" if opened else "-"
        load = geometric_mean(sheet.load / sheet.fresh for sheet in group)
        return [*cells, ", ".join(nodes), share, f"{load:.2f}"]

    def _summary(self) -> str:
        """Say what the table has no column for."""
        changes = self.changes()
        unfinished = sum(one.verdict == "unfinished" for one in changes)
        faster = sum(one.ratio < 1 for one in changes)
        lines = [
            f"- {len(changes)} changes, {unfinished} of them not finished by one of the two;"
            f" re-planning was faster than the reference on {faster}.",
        ]
        impossible = [one for one in changes if one.outcome == "infeasible"]
        if impossible:
            possible = [one for one in changes if one.outcome != "infeasible"]
            lines.append(
                f"- Where a plan is left: {mean(one.ratio for one in possible)}; where none is"
                f" ({len(impossible)} changes), the proof of that: "
                f"{mean(one.ratio for one in impossible)}."
            )
        clashes = [one.clash / one.reference for one in impossible if one.clash is not None]
        if clashes:
            lines.append(
                "- Proof, clash and least give together, in times of the reference's proof alone:"
                f" {mean(clashes)}."
            )
        for name in () if self.quick else (*PLACES, "scratch"):
            ratios = [one.seconds / one.ways[name] for one in changes if one.ways]
            lines.append(f"- Re-planning over intplan {WAYS[name]}: {mean(ratios)}.")
        answered = sum(len(sheet.stands) for sheet in self.sheets)
        fallen = sum(sheet.fallen for sheet in self.sheets)
        seconds = [ours for sheet in self.sheets for ours, _ in sheet.stands]
        if seconds:
            lines.append(
                f"- Rules that the plan meets: {answered - fallen} of {answered} answered"
                f" *stands*; median {statistics.median(seconds) * 1e6:.0f} microseconds."
            )
        return "\n".join(lines)


WAYS = {
    "leaves": "restarted at the old leaves",
    "root": "restarted at the root's basis with its cuts",
    "scratch": "from scratch",
}


def main() -> int:
    """Read the options, measure, print or write; return the exit status."""
    names = list(families())
    parser = argparse.ArgumentParser(prog="python -m tests.replan_bench", description=__doc__)
    parser.add_argument("--family", action="append", choices=names, help="only this one (repeat)")
    parser.add_argument("--changes", type=int, help=f"for each sheet, {CHANGES} by default")
    parser.add_argument("--time-limit", type=float, default=60.0, help="seconds an answer")
    parser.add_argument(
        "--quick", action="store_true", help=f"{QUICK_CHANGES} changes, no other ways to answer"
    )
    parser.add_argument("--each", action="store_true", help="one line a sheet as well")
    parser.add_argument("--write", type=Path, help="put the tables into this page")
    options = parser.parse_args()
    changes = options.changes or (QUICK_CHANGES if options.quick else CHANGES)
    if changes < 2:
        parser.error("--changes takes a number from 2")
    if options.write:
        try:
            split_at_markers(options.write)
        except (OSError, ValueError) as error:
            parser.error(str(error))
    report = run(options.family or names, changes, options.time_limit, options.quick)
    if options.write:
        head, tail = split_at_markers(options.write)
        page = f"{head}{BEGIN}\n{report.as_markdown(each=True)}{END}{tail}"
        write_atomically(options.write, page.encode())
    print(report.as_markdown(options.each), end="")
    return 0 if report.good else 1


if __name__ == "__main__":
    sys.exit(main())
