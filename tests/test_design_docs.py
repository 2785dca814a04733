"""docs/design.md speaks of what is in the code: constants, names, sources and evidence."""

from __future__ import annotations

import ast
import importlib
import json
import re
from collections import defaultdict
from collections.abc import Iterator
from dataclasses import fields
from functools import cache
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

import intplan
from intplan.planning import store
from intplan.search import Cut, SearchResult, branch_and_cut
from tests.families import assignment, lot_sizing, product_mix, selection, shift_cover
from tests.generators import KINDS, random_problem
from tests.pages import ROOT, blocks, page, prose, table

PAGE = page("docs/design.md")
WORDS = prose(PAGE)
MODULES = [
    path.relative_to(ROOT).with_suffix("").as_posix().replace("/", ".")
    for path in sorted((ROOT / "intplan").rglob("*.py"))
    if path.name not in ("__init__.py", "__main__.py")
]


@cache
def modules() -> list[ModuleType]:
    """Import the whole package."""
    return [importlib.import_module(name) for name in MODULES]


def owners(name: str) -> list[Any]:
    """Return what `a.b` or `A.b` may mean: modules by the end of their names, or classes."""
    ends = [m for m in modules() if f".{m.__name__}".endswith(f".{name}")]
    return ends or list({id(c): c for m in modules() if (c := vars(m).get(name))}.values())


def quoted(name: str) -> Any:
    """Return the one thing in the code that a dotted name on the page means."""
    owner, _, attribute = name.rpartition(".")
    found = [o for o in owners(owner) if has(o, attribute)]
    assert len(found) == 1, f"{name} means {len(found)} things in the code"
    return getattr(found[0], attribute, None)


def has(owner: Any, attribute: str) -> bool:
    """Tell whether something has an attribute, as a field of a dataclass too."""
    return hasattr(owner, attribute) or attribute in getattr(owner, "__annotations__", {})


def number(text: str) -> float:
    """Read a number as the page writes it: 30, 1e9, 2**52, 96 MB."""
    size = re.fullmatch(r"(\d+) MB", text)
    power = re.fullmatch(r"(\d+)\*\*(\d+)", text)
    if size:
        return int(size[1]) << 20
    return int(power[1]) ** int(power[2]) if power else float(text)


def section(heading: str) -> str:
    """Return the text under a heading, up to the next one."""
    (text,) = re.findall(rf"^#+ {heading}\n(.*?)(?=^#|\Z)", PAGE, re.DOTALL | re.MULTILINE)
    return text


def keys(heading: str, column: int = 0, row_of: str = "key") -> Iterator[tuple[str, str]]:
    """Yield each key in a column of the table under a heading, with the first cell of its row."""
    for row in table(section(heading), row_of):
        for key in re.findall(r"`(\w+)`", row[column]):
            yield key, row[0]


# ------------------------------------------------------------------------------ names and numbers


CONSTANTS = re.findall(r"`([a-z_.]+\.[A-Z_]+)`\s+\(([^()]+)\)", WORDS)


@pytest.mark.parametrize(("name", "value"), CONSTANTS, ids=lambda part: part)
def test_constants_are_those_of_the_code(name: str, value: str) -> None:
    assert number(value) == quoted(name)


def test_constants_are_never_named_without_their_value() -> None:
    named = re.findall(r"`([a-z_.]+\.[A-Z_]+)`", WORDS)
    assert len(named) == len(CONSTANTS) > 40


def test_names_are_those_of_the_code() -> None:
    named = set(re.findall(r"`([A-Za-z_]+(?:\.[A-Za-z_]+)+)`", WORDS))
    own = {name for name in named if not name.startswith(("networkx.", "intplan."))}
    assert len(own) > len(set(CONSTANTS))
    for name in own:
        quoted(name)
    for name in named - own:
        module, _, attribute = name.rpartition(".")
        assert has(importlib.import_module(module), attribute), name


# ------------------------------------------------------------------------------ sources


def docstrings() -> Iterator[tuple[Path, str]]:
    """Yield every docstring of the search and the relaxation, in one line each."""
    for folder in ("search", "relaxation"):
        for path in (ROOT / "intplan" / folder).rglob("*.py"):
            for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
                if isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef):
                    yield path, " ".join((ast.get_docstring(node) or "").split())


PLACE = r"\b\d+[A-Z]?:\d+-\d+"


def test_the_sources_of_the_code_are_all_listed() -> None:
    listed = set(re.findall(PLACE, section("Sources")))
    cited = {(path.name, place) for path, text in docstrings() for place in re.findall(PLACE, text)}
    assert len(cited) > 20
    assert [c for c in sorted(cited) if c[1] not in listed] == []


def test_every_source_listed_is_used_and_every_one_used_is_listed() -> None:
    listed = re.findall(r"^- ([^:]+ \d{4}): ", section("Sources"), re.MULTILINE)
    text = " ".join(WORDS[: WORDS.index("## Sources")].split())
    assert listed == sorted(set(listed))
    assert [source for source in listed if source not in text] == []
    year = r"[A-Z]\w+(?:(?:,| and) (?:Le |Van )?[A-Z]\w+)* (?:19|20)\d\d"
    assert set(re.findall(year, text)) == set(listed)


# ------------------------------------------------------------------------------ evidence


@cache
def found_keys() -> dict[str, dict[str, set[str]]]:
    """Return what the evidence of many searches holds: kind of record -> kind -> keys."""
    found: dict[str, dict[str, set[str]]] = defaultdict(lambda: defaultdict(set))
    drawn = [random_problem(seed) for seed in range(8 * len(KINDS))]
    families = [
        product_mix(5, 10, 1, scarce=3), shift_cover(24, (4, 6, 9), 1), assignment(4, 10, 1),
        selection(5, 15, 1), lot_sizing(1, 8, 1),
    ]  # fmt: skip
    fractions = ("maximize = 'a'", "a = { most = 3.5 }"), ("maximize = 'a'", "a = { least = 1 }")
    texts = [f"[aim]\n{aim}\n[activities]\n{activity}\n" for aim, activity in fractions]
    texts += [f"{texts[0]}b = {{}}\n[rules]\nr = '2*a + 4*b = {n}'\n" for n in (3, 4)]
    problems = [intplan.Sheet.from_arrays(**p.arrays()).problem() for p in drawn + families]
    problems += [intplan.Sheet.parse(text).problem() for text in texts]
    for problem in problems:
        collect(branch_and_cut(problem), found)
    return found


def collect(result: SearchResult, found: dict[str, dict[str, set[str]]]) -> None:
    """Add the keys of one tree and its cuts."""
    for cut in result.cuts:
        found["cut"][cut.kind] |= set(cut.evidence)
    for _, node in result.tree.nodes(data=True):
        found["node"][node["outcome"]] |= set(node)
        evidence = node["evidence"] or {"steps": [], "closure": {}}
        found["closure"][node["outcome"]] |= set(evidence["closure"])
        for step in evidence["steps"]:
            found["step"][step["by"]] |= set(step)
            found["closure"][step["by"]] |= set(step.get("closure", ()))


@pytest.mark.parametrize(
    ("record", "heading"),
    [("node", "Nodes of the tree"), ("closure", "Closures"), ("step", "Steps")],
)
def test_the_keys_of_the_evidence_are_all_told(record: str, heading: str) -> None:
    assert {key for key, _ in keys(heading)} == set().union(*found_keys()[record].values())


def test_the_kinds_of_evidence_are_all_told() -> None:
    found = found_keys()
    assert {key for key, _ in keys("Steps", row_of="by")} == set(found["step"])
    told: dict[str, set[str]] = defaultdict(set)
    for key, kinds in keys("Cuts and what proves them", column=1, row_of="kind"):
        for kind in re.findall(r"`(\w+)`", kinds):
            told[kind].add(key)
    # Evidence is in these tables only, or the page would say what no search keeps.
    assert told == {kind: found["cut"][kind] for kind in found["cut"]}


def test_outcomes_and_ends_are_all_told() -> None:
    told = [key for key, _ in keys("Limits, interrupts, answers", row_of="outcome")]
    assert told == list(store.OUTCOMES)
    (row,) = (r for r in table(section("Limits, interrupts, answers"), "outcome") if "is `" in r[1])
    ends = re.findall(r"`(\w+)`", row[1].partition("`ended_by` is ")[2])
    assert ends == [end for end in store.ENDINGS if end]
    (row,) = (r for r in table(section("Nodes of the tree"), "key") if r[0] == "`outcome`")
    assert re.findall(r"`(\w+)`", row[1]) == list(store.NODE_OUTCOMES)


def test_the_heart_of_a_verifier_runs() -> None:
    (code,) = blocks(PAGE, "python")
    scope: dict[str, Any] = {}
    exec(code, scope)
    with pytest.raises(AssertionError):
        exec(code.replace("total += y * (row", "total += 2 * y * (row"), {})


# ------------------------------------------------------------------------------ files


def test_the_parts_of_a_saved_plan_are_all_told(tmp_path: Path) -> None:
    text = section("The standing plan file")
    sheet = intplan.Sheet.parse("[activities]\na = { most = 3 }\n")
    target = tmp_path / "plan.json"
    intplan.solve(sheet).save(target)
    saved = json.loads(target.read_text(encoding="utf-8"))
    parts = [*saved, *saved["content"], *(field.name for field in fields(SearchResult))]
    assert [part for part in parts if f"`{part}`" not in text] == []
    cut = [field.name for field in fields(Cut)]
    assert [part for part in cut if part not in section("Cuts and what proves them")] == []


def test_the_tags_of_a_saved_plan_are_all_told() -> None:
    source = (ROOT / "intplan" / "planning" / "encoding.py").read_text(encoding="utf-8")
    tags = set(re.findall(r'"(\$\w+)"', source))
    assert tags == set(re.findall(r"`(\$\w+)`", section("The standing plan file")))
