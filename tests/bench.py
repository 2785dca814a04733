"""The measured comparison: intplan and the reference side by side, in one run.

``python -m tests.bench`` prints Markdown tables; ``--write docs/speed.md`` puts them between the
two marker comments of that page.  Every value is compared: where the two disagree the table says
DISAGREE and the exit status is 1.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import platform
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # as the command line has it

import numpy as np
import scipy

import intplan
from intplan.files import write_atomically
from tests.families import FAMILIES, Instance, index_of, instance_of

if TYPE_CHECKING:
    from intplan.relaxation.dictionary import Dictionary

BEGIN, END = "<!-- measured: begin -->", "<!-- measured: end -->"
ROOT = Path(__file__).parent.parent
MANY_RULES = 10
LONG = 2.0  # seconds after which an instance is not repeated
PIVOT_SHAPE = (20, 75)


@dataclass(frozen=True)
class Case:
    """One sheet and the same problem in arrays for the reference."""

    sheet: intplan.Sheet
    instance: Instance


@dataclass
class Measured:
    """What one instance took; seconds are the best of the repeats."""

    name: str
    rules: int
    activities: int
    seconds: float
    reference_seconds: float
    nodes: int
    reference_nodes: int
    pivots: int
    verdict: str

    @property
    def ratio(self) -> float:
        """Seconds of intplan over seconds of the reference."""
        return self.seconds / self.reference_seconds


@dataclass
class Family:
    """The measured instances of one family, and what its sheets took of memory and pivots."""

    name: str
    measured: list[Measured] = field(default_factory=list)
    peak_mb: float | None = None
    imports_mb: float | None = None
    warm_pivots: int = 0
    cold_pivots: int = 0
    warm_seconds: float = 0.0
    cold_seconds: float = 0.0

    @property
    def ratio(self) -> float:
        """The geometric mean of the ratios."""
        return geometric_mean(one.ratio for one in self.measured)


# ---------------------------------------------------------------------- what is measured


def generated(name: str) -> list[Case]:
    """Return the cases of a generated family."""
    return [
        Case(intplan.Sheet.from_arrays(**instance.arrays()), instance)
        for instance in FAMILIES[name]()
    ]


def from_sheets(folder: str, family: str | None = None) -> list[Case]:
    """Return the sheets of ``instances/FOLDER``, of one family if it is named."""
    cases = []
    for entry in index_of(folder):
        if family in (None, entry.get("family")):
            sheet = intplan.Sheet.read(entry["path"])
            cases.append(Case(sheet, instance_of(sheet, entry["name"], family or folder)))
    return cases


def families() -> dict[str, Callable[[], list[Case]]]:
    """Return what makes the cases of each family: published, demo and generated ones."""
    published = dict.fromkeys(entry["family"] for entry in index_of("published"))
    makers: dict[str, Callable[[], list[Case]]] = {}
    for name in published:
        makers[name] = lambda name=name: from_sheets("published", name)
    makers["demo"] = lambda: from_sheets("demo")
    for name in FAMILIES:
        makers[name] = lambda name=name: generated(name)
    return makers


# ---------------------------------------------------------------------- time and agreement


def measure(case: Case, repeat: int, time_limit: float) -> tuple[Measured, intplan.StandingPlan]:
    """Time both, turn about, after one warm run of each; keep the best of the repeats."""
    from tests.reference import reference_milp

    ours, theirs = [], []
    for turn in range(repeat + 1):
        started = time.perf_counter()
        standing = intplan.solve(case.sheet, time_limit=time_limit)
        seconds = time.perf_counter() - started
        answer = reference_milp(case.instance, time_limit)
        if turn == 0 and max(seconds, answer.seconds) < LONG:
            continue
        ours.append(seconds)
        theirs.append(answer.seconds)
        if max(seconds, answer.seconds) >= LONG:
            break
    rules, activities = case.instance.shape
    measured = Measured(
        name=case.instance.name,
        rules=rules,
        activities=activities,
        seconds=min(ours),
        reference_seconds=min(theirs),
        nodes=standing.search.nodes,
        reference_nodes=answer.nodes,
        pivots=standing.search.pivots,
        verdict=verdict(standing, case.instance, answer),
    )
    return measured, standing


def verdict(standing: intplan.StandingPlan, instance: Instance, answer: Any) -> str:
    """Return ``agree``, ``DISAGREE``, or ``unfinished`` when a limit ended either of the two.

    The reference works in doubles to a tolerance, so values agree within a millionth.
    """
    from tests.reference import INFEASIBLE, LIMIT, UNBOUNDED, settle

    status = settle(instance, answer)
    if standing.outcome == "unfinished" or status == LIMIT:
        return "unfinished"
    if standing.outcome in ("infeasible", "unbounded"):
        expected = {"infeasible": INFEASIBLE, "unbounded": UNBOUNDED}[standing.outcome]
        return "agree" if status == expected else "DISAGREE"
    if answer.value is None:
        return "DISAGREE"
    close = math.isclose(standing.value, answer.value, rel_tol=1e-6, abs_tol=1e-6)
    return "agree" if close else "DISAGREE"


def geometric_mean(ratios: Iterable[float]) -> float:
    """Return the geometric mean, nan of nothing."""
    ratios = list(ratios)
    return statistics.geometric_mean(ratios) if ratios else math.nan


# ---------------------------------------------------------------------- memory


def peak_mb() -> float:
    """Return the most memory this process has held, in megabytes of 10**6 bytes.

    Linux keeps the high-water mark of the process itself in ``VmHWM``; `resource` would also
    count what a parent held when it started this process, so it is only the fallback.
    """
    status = Path("/proc/self/status")
    if status.exists():
        for line in status.read_text().splitlines():
            if line.startswith("VmHWM:"):
                return int(line.split()[1]) * 1024 / 1e6
    import resource

    unit = 1 if sys.platform == "darwin" else 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit / 1e6


def print_peak(family: str, time_limit: float) -> None:
    """Solve a family in this process, without the reference, and print its memory as JSON."""
    from intplan import search  # noqa: F401  (what the imports alone take)

    imports = peak_mb()
    for case in families()[family]():
        intplan.solve(case.sheet, time_limit=time_limit)
    print(json.dumps({"imports": imports, "peak": peak_mb()}))


def measure_memory(family: Family, time_limit: float) -> None:
    """Solve the family in a process of its own and note its peak memory."""
    code = f"from tests.bench import print_peak; print_peak({family.name!r}, {time_limit!r})"
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT
    )
    answer = json.loads(done.stdout)
    family.peak_mb, family.imports_mb = answer["peak"], answer["imports"]


# ---------------------------------------------------------------------- warm against cold


def measure_warm(family: Family, measured: Measured, standing: intplan.StandingPlan) -> None:
    """Solve each node of a standing plan warm and cold, and add the totals to the family's."""
    from intplan.planning.compare import compare

    comparison = compare(standing)
    family.warm_pivots += comparison.warm_pivots
    family.cold_pivots += comparison.cold_pivots
    family.warm_seconds += comparison.warm_seconds
    family.cold_seconds += comparison.cold_seconds
    if not comparison.agree:
        measured.verdict = "warm and cold DISAGREE"


# ---------------------------------------------------------------------- one pivot


def pivot_starts(boxed: bool) -> list[Dictionary]:
    """Return covering relaxations of `PIVOT_SHAPE` at the slack basis.

    Boxed activities let the ratio test flip several bounds in a pivot; without upper bounds a
    pivot is a pivot.
    """
    from intplan.relaxation.dictionary import Dictionary
    from intplan.relaxation.rows import RowStore

    rules, activities = PIVOT_SHAPE
    starts = []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        matrix = rng.integers(0, 10, PIVOT_SHAPE) * (rng.random(PIVOT_SHAPE) < 0.5)
        rows = RowStore(
            matrix / 8.0, rng.integers(20, 120, rules) / 8.0, np.full(rules, np.inf)
        )
        most = np.full(activities, 2.0 if boxed else np.inf)
        cost = rng.integers(5, 30, activities) / 16.0
        starts.append(Dictionary.at_slack_basis(rows, cost, np.zeros(activities), most))
    return starts


def measure_pivot() -> dict[str, float]:
    """Time a dual simplex pivot, everything around it included, and the bare rank-1 update.

    Returns microseconds of each, best of seven, and their ratio, with and without bound flips.
    """
    from scipy.linalg.blas import dger

    plain, boxed = pivot_starts(False), pivot_starts(True)
    table = np.zeros(plain[0].table.shape)
    left, across = np.ones(table.shape[0]), np.ones(table.shape[1])
    transposed = table.T
    taken: dict[str, list[float]] = {"pivot": [], "flipping": [], "update": []}
    for _ in range(7):
        for name, starts in (("pivot", plain), ("flipping", boxed)):
            dictionaries = [start.copy() for start in starts]
            started = time.perf_counter()
            for dictionary in dictionaries:
                dictionary.reoptimise()
            pivots = sum(dictionary.pivots for dictionary in dictionaries)
            taken[name].append((time.perf_counter() - started) / pivots)
        started = time.perf_counter()
        for _ in range(2000):
            dger(1e-9, across, left, a=transposed, overwrite_a=1)
        taken["update"].append((time.perf_counter() - started) / 2000)
    best = {name: min(times) * 1e6 for name, times in taken.items()}
    return {
        "pivot_us": best["pivot"],
        "flipping_us": best["flipping"],
        "update_us": best["update"],
        "ratio": best["pivot"] / best["update"],
        "flipping_ratio": best["flipping"] / best["update"],
    }


# ---------------------------------------------------------------------- start-up


def measure_start(times: int = 10) -> dict[str, float]:
    """Time ``intplan --help`` and the bare interpreter that imports click, turn about."""
    commands = {
        "help": [sys.executable, "-m", "intplan", "--help"],
        "bare": [sys.executable, "-c", "import click"],
    }
    taken: dict[str, list[float]] = {name: [] for name in commands}
    for _ in range(times + 1):
        for name, command in commands.items():
            started = time.perf_counter()
            subprocess.run(command, stdout=subprocess.DEVNULL, check=True, cwd=ROOT)
            taken[name].append(time.perf_counter() - started)
    ours, bare = min(taken["help"]), min(taken["bare"])
    return {"help_ms": ours * 1e3, "bare_ms": bare * 1e3, "ratio": ours / bare}


# ---------------------------------------------------------------------- the report


@dataclass
class Report:
    """Everything one run measured."""

    families: list[Family]
    repeat: int
    pivot: dict[str, float]
    start: dict[str, float]

    def measured(self) -> Iterator[Measured]:
        """Go through the instances of all families."""
        for family in self.families:
            yield from family.measured

    @property
    def good(self) -> bool:
        """Whether both agreed everywhere and nothing was left unfinished."""
        return all(one.verdict == "agree" for one in self.measured())

    def as_json(self) -> str:
        """Return the report as one JSON object."""
        content = asdict(self)
        for shown, family in zip(content["families"], self.families, strict=True):
            shown["ratio"] = family.ratio
        content["geometric_mean"] = geometric_mean(one.ratio for one in self.measured())
        content["versions"] = versions()
        return json.dumps(content, indent=1)

    def as_markdown(self, each: bool = False) -> str:
        """Return the tables, with one line an instance as well if `each`."""
        parts = [self._setting(), self._family_table(), self._summary()]
        if each:
            parts.append(self._instance_table())
        return "\n\n".join(parts) + "\n"

    def _setting(self) -> str:
        names = ", ".join(f"{name} {number}" for name, number in versions().items())
        return (
            f"{names}; {os.cpu_count()} cores. Best of {self.repeat} runs each, turn about, after "
            f"one warm run (from {LONG:.0f} s on, a single run). Time ratio is intplan's over the "
            "reference's, geometric mean over the instances; a ratio below 1 is faster. Nodes and "
            "pivots are sums. Memory is the peak of a process that solves the family, and of its "
            "imports alone."
        )

    def _family_table(self) -> str:
        lines = [
            "| family | sheets | time ratio | worst | nodes | reference nodes | pivots "
            "| warm / cold pivots | memory, imports | answers |",
            "|---|--:|--:|--:|--:|--:|--:|--:|--:|---|",
        ]
        for family in self.families:
            every = family.measured
            memory = "-"
            if family.peak_mb is not None:
                memory = f"{family.peak_mb:.0f}, {family.imports_mb:.0f} MB"
            warm = f"{family.warm_pivots} / {family.cold_pivots}" if family.cold_pivots else "-"
            lines.append(
                f"| {family.name} | {len(every)} | {family.ratio:.2f} "
                f"| {max(one.ratio for one in every):.2f} "
                f"| {sum(one.nodes for one in every)} "
                f"| {sum(one.reference_nodes for one in every)} "
                f"| {sum(one.pivots for one in every)} | {warm} "
                f"| {memory} | {answers(every)} |"
            )
        return "\n".join(lines)

    def _summary(self) -> str:
        warm = sum(family.warm_pivots for family in self.families)
        cold = sum(family.cold_pivots for family in self.families)
        warm_seconds = sum(family.warm_seconds for family in self.families)
        cold_seconds = sum(family.cold_seconds for family in self.families)
        rules, activities = PIVOT_SHAPE
        lines = [
            f"- Geometric mean over all instances "
            f"{geometric_mean(one.ratio for one in self.measured()):.2f}, over the families "
            f"{geometric_mean(family.ratio for family in self.families):.2f}.",
        ]
        if cold:
            lines.append(
                f"- Node solves on sheets with {MANY_RULES} or more rules: {warm} pivots warm, "
                f"{cold} cold, ratio {warm / cold:.3f}; {warm_seconds:.2f} s and "
                f"{cold_seconds:.2f} s, ratio {warm_seconds / cold_seconds:.2f}."
            )
        if self.pivot:
            lines.append(
                f"- A pivot at {rules} x {activities}: {self.pivot['pivot_us']:.1f} microseconds, "
                f"{self.pivot['ratio']:.1f} times the bare rank-1 update "
                f"({self.pivot['update_us']:.2f}); where most pivots also flip bounds, "
                f"{self.pivot['flipping_ratio']:.1f} times."
            )
        if self.start:
            lines.append(
                f"- `intplan --help`: {self.start['help_ms']:.0f} ms, {self.start['ratio']:.2f} "
                f"times the bare interpreter with click ({self.start['bare_ms']:.0f} ms)."
            )
        return "\n".join(lines)

    def _instance_table(self) -> str:
        lines = [
            "| instance | rules x activities | ms | reference ms | time ratio | nodes "
            "| reference nodes | pivots | answers |",
            "|---|--:|--:|--:|--:|--:|--:|--:|---|",
        ]
        lines += [
            f"| {one.name} | {one.rules} x {one.activities} | {one.seconds * 1e3:.1f} "
            f"| {one.reference_seconds * 1e3:.1f} | {one.ratio:.2f} | {one.nodes} "
            f"| {one.reference_nodes} | {one.pivots} | {one.verdict} |"
            for one in self.measured()
        ]
        return "\n".join(lines)


def answers(every: list[Measured]) -> str:
    """Say whether the answers of a family agree, and name those that do not."""
    odd = [f"{one.name} {one.verdict}" for one in every if one.verdict != "agree"]
    return "; ".join(odd) or "agree"


def versions() -> dict[str, str]:
    """Return the versions that matter for the times."""
    return {
        "Python": platform.python_version(),
        "NumPy": np.__version__,
        "SciPy": scipy.__version__,
    }


def run(names: list[str], repeat: int, time_limit: float, quick: bool) -> Report:
    """Measure the named families, and the pivot and the start-up unless `quick`."""
    makers, done = families(), []
    for name in names:
        family = Family(name)
        for case in makers[name]():
            measured, standing = measure(case, repeat, time_limit)
            family.measured.append(measured)
            if measured.rules >= MANY_RULES and not quick:
                measure_warm(family, measured, standing)
            status(f"{name}: {measured.name} {measured.ratio:.2f}")
        if not quick:
            measure_memory(family, time_limit)
        done.append(family)
    status("")
    if quick:
        return Report(done, repeat, {}, {})
    return Report(done, repeat, measure_pivot(), measure_start())


def status(text: str) -> None:
    """Show one line on a terminal's stderr, rewritten in place."""
    if sys.stderr.isatty():
        print(f"\r\x1b[K{text}", end="", file=sys.stderr, flush=True)


def split_at_markers(path: Path) -> tuple[str, str]:
    """Return what stands before and after the place for the tables in a page.

    Raises
    ------
    ValueError
        If the page does not have both markers.
    """
    head, begin, rest = path.read_text("utf-8").partition(BEGIN)
    _, end, tail = rest.partition(END)
    if not (begin and end):
        raise ValueError(f"{path}: no lines {BEGIN} and {END} to write between")
    return head, tail


def main() -> int:
    """Read the options, measure, print or write; return the exit status."""
    names = list(families())
    parser = argparse.ArgumentParser(prog="python -m tests.bench", description=__doc__)
    parser.add_argument("--family", action="append", choices=names, help="only this one (repeat)")
    parser.add_argument("--repeat", type=int, default=3, help="runs of each, best kept")
    parser.add_argument("--time-limit", type=float, default=60.0, help="seconds a solve")
    parser.add_argument("--quick", action="store_true", help="times and answers only")
    parser.add_argument("--each", action="store_true", help="one line an instance as well")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--write", type=Path, help="put the tables into this page")
    options = parser.parse_args()
    if options.repeat < 1:
        parser.error("--repeat takes a number from 1")
    if options.write:
        try:
            split_at_markers(options.write)
        except (OSError, ValueError) as error:
            parser.error(str(error))
    report = run(options.family or names, options.repeat, options.time_limit, options.quick)
    if options.write:
        head, tail = split_at_markers(options.write)
        page = f"{head}{BEGIN}\n{report.as_markdown(each=True)}{END}{tail}"
        write_atomically(options.write, page.encode())
    print(report.as_json() if options.json else report.as_markdown(options.each), end="")
    return 0 if report.good else 1


if __name__ == "__main__":
    sys.exit(main())
