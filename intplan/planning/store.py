"""Standing plans as files: versioned JSON, written whole or not at all, believed only if sound.

The file holds the sheet with its exact numbers, the answer, and the search tree with its
evidence, so that the plan can be taken up again as if the search had just ended.  Reading checks
every type and range, that the tree is one tree, that the content is what was written (by its
SHA-256 digest, against damage, not against forgery), and the plan against the sheet in exact
arithmetic.  Nothing in a file is run.
"""

from __future__ import annotations

import contextlib
import gc
import hashlib
import json
import math
import os
from collections.abc import Iterator, Sequence
from dataclasses import fields
from typing import TYPE_CHECKING, Any

import networkx as nx
import numpy as np

from intplan.errors import IntplanError, PlanFileError
from intplan.files import read_file, write_atomically
from intplan.planning.encoding import Decoder, EncodingError, decode_number, encode
from intplan.planning.shapes import Shapes
from intplan.planning.standing import StandingPlan, confirmed, sheet_without
from intplan.sheet import Sheet
from intplan.sheet.numbers import fraction_text

if TYPE_CHECKING:
    from intplan.search import SearchResult
    from intplan.sheet.problem import Problem

KIND = "intplan standing plan"
FORMAT = 2
LARGEST_FILE = 1 << 30  # bytes
OUTCOMES = ("optimal", "within_gap", "infeasible", "unbounded", "unfinished")
ENDINGS = (None, "time", "nodes", "interrupt", "range")
NODE_OUTCOMES = ("split", "beaten", "empty", "plan", "waiting")
STARTS = ("warm", "cold")
EXACT_FIELDS = ("value", "bound")
EXACT_LISTS = ("plan", "ray")
_CONTENT = b'"content":\n'
_END = b"\n}\n"


# ---------------------------------------------------------------------------------- writing


def save_standing(standing: StandingPlan, path: str | os.PathLike[str]) -> None:
    """Write a standing plan to a JSON file.

    Parameters
    ----------
    standing : what to keep
    path : the file to write

    Raises
    ------
    IntplanError
        If the file cannot be written, or the tree is larger than a file may be.
    """
    content = {"sheet": standing.sheet.to_record(), "result": _record_result(standing.result)}
    body = json.dumps(content, allow_nan=False, separators=(",", ":")).encode()
    if len(body) > LARGEST_FILE - 1024:
        raise IntplanError(
            f"the search tree takes {len(body) >> 20} MB, more than the {LARGEST_FILE >> 20} MB "
            "that a standing plan may take; it was not saved",
            where=os.fspath(path),
        )
    head = {"kind": KIND, "format": FORMAT, "sha256": hashlib.sha256(body).hexdigest()}
    opening = json.dumps(head).encode().removesuffix(b"}") + b",\n"
    write_atomically(path, opening + _CONTENT + body + _END)


def _record_result(result: SearchResult) -> dict[str, Any]:
    """Turn what a search gave into JSON values; fields unknown here are kept as they are."""
    record: dict[str, Any] = {}
    for field in fields(result):
        value = getattr(result, field.name)
        if field.name == "tree":
            record["tree"] = _record_tree(value)
        elif field.name == "cuts":
            record["cuts"] = [
                {part.name: encode(getattr(cut, part.name)) for part in fields(cut)}
                for cut in value
            ]
        elif field.name in EXACT_FIELDS:
            record[field.name] = None if value is None else fraction_text(value)
        elif field.name in EXACT_LISTS:
            record[field.name] = None if value is None else [fraction_text(v) for v in value]
        else:
            record[field.name] = encode(value)
    return record


def _record_tree(tree: nx.DiGraph) -> dict[str, Any]:
    nodes = []
    for node, attributes in tree.nodes(data=True):
        parent = next(iter(tree.predecessors(node)), None)
        entry = {"id": node, "parent": parent}
        for key, value in attributes.items():
            entry[key] = (
                [[a.kind, int(a.index), encode(a.value)] for a in value]
                if key == "added"
                else encode(value)
            )
        nodes.append(entry)
    return {"nodes": nodes, "notes": encode(dict(tree.graph))}


# ---------------------------------------------------------------------------------- reading


def load_standing(path: str | os.PathLike[str]) -> StandingPlan:
    """Read a standing plan that `StandingPlan.save` wrote.

    Parameters
    ----------
    path : the file

    Returns
    -------
    StandingPlan
        With the same sheet, answer and tree.

    Raises
    ------
    IntplanError
        If the file cannot be read, is not a standing plan, comes from a newer intplan, or is
        damaged.

    Notes
    -----
    The plan is checked against the sheet again; the proof that nothing beats it is not.
    """
    where = os.fspath(path)
    raw = read_file(path, LARGEST_FILE, PlanFileError)
    try:
        with _no_collection():
            document = _open_file(raw, where)
            return _read_content(_lifted(document["content"], document["format"]), where)
    except (EncodingError, _Damage) as error:
        raise PlanFileError(f"the standing plan is damaged: {error}", where=where) from error
    except RecursionError as error:
        raise PlanFileError("the standing plan is nested too deeply", where=where) from error


@contextlib.contextmanager
def _no_collection() -> Iterator[None]:
    """Keep the cyclic garbage collector out while a large tree is built; halves the time."""
    enabled = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if enabled:
            gc.enable()


class _Damage(ValueError):
    """What is wrong with a file that says it is a standing plan."""


def _open_file(raw: bytes, where: str) -> dict[str, Any]:
    """Return what is in the file, once its kind, format and digest are right."""
    try:
        document = json.loads(raw, parse_constant=_refuse_constant)
    except ValueError as error:
        hint = "damaged or not one" if raw.lstrip()[:1] == b"{" else "not one"
        raise PlanFileError(
            f"this should be a standing plan, and is {hint}; "
            "`intplan solve SHEET --save FILE` writes one",
            where=where,
        ) from error
    if not isinstance(document, dict) or document.get("kind") != KIND:
        raise PlanFileError(
            "this is not a standing plan; `intplan solve SHEET --save FILE` writes one",
            where=where,
        )
    version = document.get("format")
    if type(version) is not int or version < 1:
        raise _Damage("its format is not a number")
    if version > FORMAT:
        raise PlanFileError(
            f"this standing plan has format {version}, and this intplan reads up to {FORMAT}; "
            "a newer intplan wrote it",
            where=where,
        )
    body = raw.partition(_CONTENT)[2].removesuffix(_END)
    if hashlib.sha256(body).hexdigest() != document.get("sha256"):
        raise _Damage("it was changed after it was saved")
    content = document.get("content")
    if not isinstance(content, dict):
        raise _Damage("it has no content")
    return document


def _lifted(content: dict[str, Any], version: int) -> dict[str, Any]:
    """Turn the content of an older format into that of the present one."""
    if version == 1:  # nodes had no basis, and no tree was taken up again
        result = content.get("result")
        tree = result.get("tree") if isinstance(result, dict) else None
        nodes = tree.get("nodes") if isinstance(tree, dict) else None
        if not isinstance(nodes, list) or not all(isinstance(node, dict) for node in nodes):
            raise _Damage("its tree is no list of nodes")
        result["reopened"] = None
        for node in nodes:
            node["basis"] = None
    return content


def _refuse_constant(text: str) -> float:
    raise ValueError(f"{text} is no JSON number")


def _read_content(content: dict[str, Any], where: str) -> StandingPlan:
    record = content.get("result")
    if set(content) != {"sheet", "result"} or not isinstance(record, dict):
        raise _Damage("it has not exactly a sheet and a result")
    sheet = Sheet.from_record(content["sheet"], where)
    result = _read_result(record, sheet)
    try:
        result = confirmed(sheet, result)
    except AssertionError as error:
        raise _Damage("its plan does not fit its sheet") from error
    return StandingPlan(sheet, result)


def _read_result(record: dict[str, Any], sheet: Sheet) -> SearchResult:
    from intplan.search import SearchResult

    names = {field.name for field in fields(SearchResult)}
    if set(record) != names:
        raise _Damage("its result has other parts than a search gives")
    decoder = Decoder()
    parts: dict[str, Any] = {}
    problem = sheet.problem()
    columns = len(problem.whole)
    for name in names - {"tree", "cuts"}:
        value = record[name]
        if name in EXACT_FIELDS:
            parts[name] = None if value is None else decode_number(value)
        elif name in EXACT_LISTS:
            parts[name] = None if value is None else _read_amounts(value, columns)
        else:
            parts[name] = decoder.decode(value)
    proven = sheet_without(sheet, _left_out(record["tree"], sheet, decoder)).problem()
    columns, rules = len(proven.whole), len(proven.rows)
    parts["cuts"] = _read_cuts(record["cuts"], columns, decoder)
    parts["tree"] = _read_tree(record["tree"], columns, rules, len(parts["cuts"]), decoder)
    _check_evidence(Shapes(proven.whole.tolist(), rules, len(parts["cuts"])), parts)
    result = SearchResult(**parts)
    _check_result(result, problem)
    return result


def _check_evidence(shapes: Shapes, parts: dict[str, Any]) -> None:
    """Check the evidence of a tree and its cuts."""
    for number, cut in enumerate(parts["cuts"]):
        shapes.check_cut(number, cut)
    for node, attributes in parts["tree"].nodes(data=True):
        shapes.check_node(node, attributes)
    shapes.check_branchings(parts["tree"])


def _left_out(tree: Any, sheet: Sheet, decoder: Decoder) -> tuple[str, ...]:
    """Return the names of the soft rules that a tree knows nothing of."""
    notes = tree.get("notes") if isinstance(tree, dict) else None
    left_out = decoder.decode(notes.get("without", ())) if isinstance(notes, dict) else ()
    soft = {rule.name for rule in sheet.rules if rule.give is not None}
    if not isinstance(left_out, tuple) or not all(
        isinstance(name, str) and name in soft for name in left_out
    ):
        raise _Damage("its tree leaves out a rule that is no soft rule")
    return left_out


def _read_amounts(value: Any, columns: int) -> list[Any]:
    if not isinstance(value, list) or len(value) != columns:
        raise _Damage("its plan has not one amount an activity")
    return [decode_number(entry) for entry in value]


def _check_result(result: SearchResult, problem: Problem) -> None:
    """Check that outcome, plan, value and bound can stand together."""
    if not _is_among(result.outcome, OUTCOMES) or not _is_among(result.ended_by, ENDINGS):
        raise _Damage("its outcome is none that a search gives")
    if type(result.any_plan) is not bool:
        raise _Damage("it does not say what was looked for")
    if result.outcome == "unbounded" and (result.plan is None or result.ray is None):
        raise _Damage("its aim has no limit, but it lacks a plan or a direction")
    if (result.ended_by is None) != (result.outcome != "unfinished"):
        raise _Damage("its outcome does not fit what ended the search")
    has_plan = result.plan is not None
    if has_plan != (result.value is not None):
        raise _Damage("it has a value without a plan, or a plan without a value")
    needs_plan = result.outcome in ("optimal", "within_gap")
    if (needs_plan and not has_plan) or (result.outcome == "infeasible" and has_plan):
        raise _Damage("its outcome does not fit its plan")
    if result.outcome == "optimal" and result.bound != result.value:
        raise _Damage("its value is not its bound")
    if result.outcome == "within_gap" and result.bound is None:
        raise _Damage("it has no bound")
    reopened = 0 if result.reopened is None else result.reopened
    if not all(type(n) is int and n >= 0 for n in (result.nodes, result.pivots, reopened)):
        raise _Damage("its search numbers are no counts")
    if not _is_duration(result.seconds):
        raise _Damage("its search time is no duration")
    if result.plan is not None and any(result.plan[bend.column] < 0 for bend in problem.bends):
        raise _Damage("a bend is negative")


def _read_cuts(value: Any, columns: int, decoder: Decoder) -> list[Any]:
    from intplan.search import Cut

    names = {field.name for field in fields(Cut)}
    if not isinstance(value, list):
        raise _Damage("its cuts are no list")
    cuts = []
    for record in value:
        if not isinstance(record, dict) or set(record) != names:
            raise _Damage("a cut has other parts than a cut has")
        cut = Cut(**{name: decoder.decode(part) for name, part in record.items()})
        parts = (cut.columns, cut.coefficients)
        if not isinstance(cut.kind, str) or not all(isinstance(part, tuple) for part in parts):
            raise _Damage("a cut is no row")
        if len(cut.columns) != len(cut.coefficients):
            raise _Damage("a cut has not one coefficient an activity")
        if not all(type(column) is int and 0 <= column < columns for column in cut.columns):
            raise _Damage("a cut names an activity that does not exist")
        if not all(type(v) is float for v in (*cut.coefficients, cut.least, cut.most)):
            raise _Damage("a cut's numbers are no numbers")
        cuts.append(cut)
    return cuts


def _read_tree(
    value: Any, columns: int, rules: int, cuts: int, decoder: Decoder
) -> nx.DiGraph:
    """Read the nodes and make sure that they are one tree with node 0 as its root."""
    if not isinstance(value, dict) or set(value) != {"nodes", "notes"}:
        raise _Damage("its tree has not exactly nodes and notes")
    nodes, notes = value["nodes"], decoder.decode(value["notes"])
    if not isinstance(nodes, list) or not isinstance(notes, dict):
        raise _Damage("its tree is no list of nodes")
    tree = nx.DiGraph()
    tree.graph.update(notes)
    parents: dict[int, int | None] = {}
    for entry in nodes:
        if not isinstance(entry, dict) or not all(isinstance(key, str) for key in entry):
            raise _Damage("a node is no object")
        node, parent = entry.pop("id", None), entry.pop("parent", None)
        if type(node) is not int or node in parents:
            raise _Damage("two nodes have one number, or a node has none")
        if (parent is None) != (node == 0) or type(parent) not in (int, type(None)):
            raise _Damage(f"node {node} has no place in the tree")
        parents[node] = parent
        attributes = _read_node(node, entry, columns, cuts, decoder)
        _check_basis(node, attributes["basis"], columns, rules + cuts)
        tree.add_node(node, **attributes)
    tree.add_edges_from((parent, node) for node, parent in parents.items() if parent is not None)
    if not parents or len(tree) != len(parents) or not nx.is_arborescence(tree):
        raise _Damage("its nodes are not one tree")
    for parent, node in tree.edges():
        if tree.nodes[node]["depth"] != tree.nodes[parent]["depth"] + 1:
            raise _Damage(f"node {node} has the wrong depth")
    return tree


def _read_node(
    node: int, entry: dict[str, Any], columns: int, cuts: int, decoder: Decoder
) -> dict[str, Any]:
    """Read what a node carries: the parts every node has are checked, the rest is decoded."""
    needed = (
        "bound", "depth", "outcome", "added", "pivots", "seconds", "start", "evidence", "basis",
    )  # fmt: skip
    if not all(key in entry for key in needed):
        raise _Damage(f"node {node} lacks a part")
    attributes = {
        key: _read_added(node, value, columns, cuts, decoder)
        if key == "added"
        else decoder.decode(value)
        for key, value in entry.items()
    }
    bound = attributes["bound"]
    sound = (
        (bound is None or (isinstance(bound, float) and not math.isnan(bound)))
        and _is_among(attributes["outcome"], NODE_OUTCOMES)
        and _is_among(attributes["start"], STARTS)
        and all(type(attributes[k]) is int and attributes[k] >= 0 for k in ("depth", "pivots"))
        and _is_duration(attributes["seconds"])
        and isinstance(attributes["evidence"], dict | None)
    )
    if not sound:
        raise _Damage(f"node {node} holds something that no node holds")
    return attributes


def _check_basis(node: int, basis: Any, columns: int, rows: int) -> None:
    """Make sure that a basis holds as many activities as row values, none of them twice."""
    if basis is None:
        return
    sound = isinstance(basis, np.ndarray) and basis.ndim == 1 and basis.dtype.kind == "i"
    if sound and len(basis):
        sound = bool(basis.min() >= 0 and basis.max() < columns + rows)
        sound = sound and len(np.unique(basis)) == len(basis) == 2 * int((basis < columns).sum())
    if not sound:
        raise _Damage(f"node {node} has no such basis")


def _read_added(node: int, value: Any, columns: int, cuts: int, decoder: Decoder) -> tuple:
    from intplan.search import Added

    ends = {"least": columns, "most": columns, "cut": cuts}
    if not isinstance(value, list):
        raise _Damage(f"node {node} adds no list of rows")
    rows = []
    for row in value:
        if not isinstance(row, list) or len(row) != 3 or not _is_among(row[0], tuple(ends)):
            raise _Damage(f"node {node} adds something that is no row")
        kind, index, number = row[0], row[1], decoder.decode(row[2])
        if type(index) is not int or not 0 <= index < ends[kind]:
            raise _Damage(f"node {node} adds a row on something that does not exist")
        if isinstance(number, bool) or not isinstance(number, int | float):
            raise _Damage(f"node {node} adds a row without a number")
        rows.append(Added(kind, index, number))
    return tuple(rows)


def _is_among(value: Any, known: Sequence[str | None]) -> bool:
    return (value is None or isinstance(value, str)) and value in known


def _is_duration(value: Any) -> bool:
    return isinstance(value, float) and math.isfinite(value) and value >= 0
