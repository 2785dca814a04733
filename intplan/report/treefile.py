"""The search tree as a file for other programs: GraphML, DOT, or JSON.

GraphML and DOT carry text and numbers only: each node's number, bound, depth, outcome, the rows it
adds, pivots, seconds and start, and a sentence that says all that in words.  JSON carries the
evidence as well::

    {"format": 1, "root": 0, "nodes": [{"id": 3, "parent": 1, "bound": 2775, ...}, ...]}

References
----------
U. Brandes, M. Eiglsperger, I. Herman, M. Himsolt, M. S. Marshall, GraphML progress report, Graph
Drawing 2001, Lecture Notes in Computer Science 2265:501-512, 2002.
E. R. Gansner, S. C. North, An open graph visualization system and its applications to software
engineering, Software: Practice and Experience 30:1203-1233, 2000 (the DOT language).
"""

from __future__ import annotations

import io
import json
import math
import os
import re
from collections.abc import Callable, Iterator
from fractions import Fraction
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np

from intplan.errors import IntplanError, printable
from intplan.files import write_atomically
from intplan.planning import StandingPlan
from intplan.planning.naming import node_name
from intplan.report.numbers import value_text
from intplan.sheet import Sheet
from intplan.sheet.numbers import fraction_text

FORMAT = 1
NOISE = 1e-6  # a smaller bound is called 0 in a sentence
NUMBERS_AND_TEXT = ("bound", "depth", "outcome", "pivots", "seconds", "start")


def write_tree(standing: StandingPlan, path: str | os.PathLike[str]) -> None:
    """Write the search tree of a standing plan; the file's ending chooses the form.

    Parameters
    ----------
    standing : the solved sheet
    path : a name that ends in ``.graphml``, ``.dot`` or ``.json``

    Raises
    ------
    IntplanError
        If the ending is none of these, or the file cannot be written.
    """
    writer = tree_writer(path)
    write_atomically(path, writer(standing).encode())


def tree_writer(path: str | os.PathLike[str]) -> Callable[[StandingPlan], str]:
    """Return the function that writes a tree in the form that a file's ending asks for.

    Raises
    ------
    IntplanError
        If there is none.
    """
    ending = Path(path).suffix.lower()
    if ending in WRITERS:
        return WRITERS[ending]
    known = ", ".join(list(WRITERS)[:-1]) + f" or {list(WRITERS)[-1]}"
    raise IntplanError(f"a tree is written to a file that ends in {known}", where=os.fspath(path))


def tree_graphml(standing: StandingPlan) -> str:
    """Return the tree as GraphML, with text and number attributes only."""
    graph = nx.DiGraph(title=printable(standing.sheet.title))
    for node, attributes in _plain_nodes(standing):
        graph.add_node(node, **attributes)
    graph.add_edges_from(standing.tree.edges())
    buffer = io.BytesIO()
    nx.write_graphml_xml(graph, buffer, encoding="utf-8")
    return buffer.getvalue().decode()


def tree_dot(standing: StandingPlan) -> str:
    """Return the tree in the DOT language: one ink, one shape, a sentence on every node."""
    title = printable(standing.sheet.title) or "Search tree"
    lines = ["digraph tree {", f"  label={dot_text(title)};", "  node [shape=plaintext];"]
    for node, attributes in _plain_nodes(standing):
        written = {"label": _wrapped(attributes.pop("sentence")), **attributes}
        parts = ", ".join(f"{key}={_dot_value(value)}" for key, value in written.items())
        lines.append(f"  {node} [{parts}];")
    lines += [f"  {parent} -> {node};" for parent, node in standing.tree.edges()]
    return "\n".join([*lines, "}", ""])


def tree_json(standing: StandingPlan) -> str:
    """Return the tree as JSON with everything each node carries."""
    parents = {node: parent for parent, node in standing.tree.edges()}
    nodes = [
        {"id": node, "parent": parents.get(node), **_plain(attributes)}
        for node, attributes in standing.tree.nodes(data=True)
    ]
    document = {"format": FORMAT, "root": 0, "nodes": nodes}
    return json.dumps(document, allow_nan=False, indent=1) + "\n"


WRITERS: dict[str, Callable[[StandingPlan], str]] = {
    ".graphml": tree_graphml,
    ".dot": tree_dot,
    ".json": tree_json,
}


def node_sentence(node: int, attributes: dict[str, Any], sheet: Sheet) -> str:
    """Say in words what became of a node.

    Parameters
    ----------
    node : its number
    attributes : as in `StandingPlan.tree`
    sheet : what was solved
    """
    opening = f"Node {node}, {node_name(attributes)}: "
    bound = attributes["bound"]
    # A sentence takes seven digits; the number itself stands beside it.
    rounded = Fraction(f"{bound:.7g}" if bound and abs(bound) >= NOISE else 0)
    limit = "" if bound is None else value_text(sheet, rounded)
    passing = f"nothing here can pass {limit}, so " if limit else ""
    plan = f"a plan that comes to {limit}" if limit else "a plan"
    said = {
        "split": f"{passing}it was split.",
        "beaten": "nothing here beats the best plan.",
        "empty": "no plan meets all its rules.",
        "plan": f"{plan}.",
        "waiting": f"{passing.removesuffix('so ')}it was left waiting.",
    }
    return opening + said[attributes["outcome"]]


def _plain_nodes(standing: StandingPlan) -> Iterator[tuple[int, dict[str, Any]]]:
    """Yield each node with the attributes that any graph program reads."""
    for node, attributes in standing.tree.nodes(data=True):
        plain = {key: attributes[key] for key in NUMBERS_AND_TEXT if attributes[key] is not None}
        if "bound" in plain:
            plain["bound"] = float(plain["bound"])
        plain["added"] = "; ".join(attributes["added"])
        plain["sentence"] = node_sentence(node, attributes, standing.sheet)
        yield node, plain


def dot_text(text: str) -> str:
    """Quote text for DOT: quotes and backslashes are escaped, line breaks become ``\\n``."""
    escaped = text.replace("\\", "\\\\").replace('"', '\\"')
    escaped = re.sub(r"\r\n|\r|\n", r"\\n", escaped)
    return '"' + re.sub(r"[\x00-\x1f\x7f-\x9f]", " ", escaped) + '"'


def _dot_value(value: int | float | str) -> str:
    if isinstance(value, str):
        return dot_text(value)
    number = repr(value)
    return number if re.fullmatch(r"-?[0-9.]+", number) else dot_text(number)


def _wrapped(sentence: str, width: int = 32) -> str:
    """Break a sentence at spaces, so that a picture's nodes stay narrow."""
    lines = [""]
    for word in sentence.split(" "):
        if lines[-1] and len(lines[-1]) + 1 + len(word) > width:
            lines.append(word)
        else:
            lines[-1] = f"{lines[-1]} {word}".lstrip()
    return "\n".join(lines)


def _plain(value: Any) -> Any:
    """Return a value as JSON has it: arrays as lists, rationals and infinities as text."""
    if isinstance(value, dict):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(entry) for entry in value]
    if isinstance(value, np.ndarray | np.generic):
        return _plain(value.tolist())
    if isinstance(value, float) and not math.isfinite(value):
        return repr(value)
    if isinstance(value, Fraction):
        return fraction_text(value)
    return value
