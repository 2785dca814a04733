"""The search tree as GraphML, DOT and JSON, read back by independent programs."""

import json
import re
import shutil
import subprocess

import networkx as nx
import pytest

from intplan import IntplanError, Sheet, solve
from intplan.report.treefile import dot_text, tree_dot, tree_graphml, tree_json, write_tree
from tests.bakery import ALL, BAKERY, split_evenly

needs_dot = pytest.mark.skipif(shutil.which("dot") is None, reason="Graphviz is not here")


@pytest.fixture(scope="module")
def standing():
    """A search that branched, cut and left nodes waiting."""
    return solve(Sheet.parse(split_evenly()), node_limit=25)


@pytest.fixture(scope="module")
def nasty():
    """A sheet whose texts try to break out of every quotation."""
    title = r"\"]; evil [label=\"x\u0000\u0007\\N\\\\\n</data>&<b>\u202e\\"
    return solve(Sheet.parse(BAKERY.replace("Bakery, week 14", title).replace("EUR", r"\\\"<&")))


# ------------------------------------------------------------------------------ GraphML


def test_graphml_round_trip(standing):
    graph = nx.parse_graphml(tree_graphml(standing), node_type=int)
    assert nx.is_isomorphic(graph, standing.tree) and nx.is_arborescence(graph)
    assert list(graph.edges()) == list(standing.tree.edges())
    for node, data in standing.tree.nodes(data=True):
        read = graph.nodes[node]
        for key in ("depth", "outcome", "pivots", "seconds", "start"):
            assert read[key] == data[key] and type(read[key]) is type(data[key])
        assert read.get("bound") == data["bound"]
        assert read["added"] == "; ".join(data["added"])
        assert read["sentence"].startswith(f"Node {node}, ")
        assert all(isinstance(value, str | int | float) for value in read.values())


@pytest.mark.parametrize("text", ALL.values(), ids=ALL)
def test_graphml_of_every_outcome(text):
    solved = solve(Sheet.parse(text))
    assert len(nx.parse_graphml(tree_graphml(solved))) == len(solved.tree)


def test_graphml_of_nasty_text(nasty):
    graph = nx.parse_graphml(tree_graphml(nasty))
    assert r"\x00\x07" in graph.graph["title"] and "</data>&<b>" in graph.graph["title"]


# ------------------------------------------------------------------------------ DOT


def test_dot_says_what_became_of_each_node(standing):
    dot = tree_dot(standing)
    assert dot.count(" -> ") == standing.tree.number_of_edges()
    lines = [line for line in dot.splitlines() if re.match(r"  \d+ \[label=", line)]
    assert len(lines) == len(standing.tree)
    assert all("it was left" in line for line in lines if 'outcome="waiting"' in line)
    # One ink and one shape: nothing but the words tells nodes apart.
    assert "color" not in dot and dot.count("shape=") == 1


@pytest.mark.parametrize(
    ("text", "quoted"),
    [
        ("plain", '"plain"'),
        ('a "b"', r'"a \"b\""'),
        ("back\\slash", r'"back\\slash"'),
        ("ends in \\", r'"ends in \\"'),
        ("two\nlines\r\nthree\rfour", r'"two\nlines\nthree\nfour"'),
        ("a\x00b\x1bc\x9fd", '"a b c d"'),
        ("<b>", '"<b>"'),
        ("", '""'),
    ],
)
def test_dot_quotation(text, quoted):
    assert dot_text(text) == quoted


def drawn(dot: str) -> dict:
    """Return what Graphviz makes of a graph, as its own JSON."""
    done = subprocess.run(
        ["dot", "-Tjson0"], input=dot.encode(), capture_output=True, check=True, timeout=60
    )
    assert done.stderr == b""
    return json.loads(done.stdout)


@needs_dot
def test_graphviz_reads_the_tree(standing):
    read = drawn(tree_dot(standing))
    nodes = {int(node["name"]): node for node in read["objects"]}
    assert set(nodes) == set(standing.tree.nodes)
    named = {entry["_gvid"]: int(entry["name"]) for entry in read["objects"]}
    edges = {(named[edge["tail"]], named[edge["head"]]) for edge in read["edges"]}
    assert edges == set(standing.tree.edges())
    for node, data in standing.tree.nodes(data=True):
        assert nodes[node]["outcome"] == data["outcome"]
        assert int(nodes[node]["pivots"]) == data["pivots"]
        if data["bound"] is not None:
            assert float(nodes[node]["bound"]) == data["bound"]
        assert nodes[node]["shape"] == "plaintext"


@needs_dot
def test_graphviz_draws_the_tree(standing):
    done = subprocess.run(
        ["dot", "-Tsvg"], input=tree_dot(standing).encode(), capture_output=True, timeout=60
    )
    assert done.returncode == 0 and b"<svg" in done.stdout


@needs_dot
def test_graphviz_takes_nasty_text_as_text(nasty):
    read = drawn(tree_dot(nasty))
    assert [node["name"] for node in read["objects"]] == ["0"]
    assert "evil" in read["label"]


# ------------------------------------------------------------------------------ JSON


def test_json_carries_everything(standing):
    document = json.loads(tree_json(standing))
    assert (document["format"], document["root"]) == (1, 0)
    assert len(document["nodes"]) == len(standing.tree)
    for entry in document["nodes"]:
        data = standing.tree.nodes[entry["id"]]
        parents = list(standing.tree.predecessors(entry["id"]))
        assert entry["parent"] == (parents[0] if parents else None)
        for key in ("bound", "depth", "outcome", "added", "pivots", "seconds", "start"):
            assert entry[key] == data[key]
        assert (entry["evidence"] is None) == (data["evidence"] is None)
        if data["evidence"]:
            assert set(entry["evidence"]) == set(data["evidence"])


@pytest.mark.parametrize("text", ALL.values(), ids=ALL)
def test_json_of_every_outcome(text):
    solved = solve(Sheet.parse(text))
    assert len(json.loads(tree_json(solved))["nodes"]) == len(solved.tree)


# ------------------------------------------------------------------------------ files


@pytest.mark.parametrize("name", ["tree.graphml", "tree.dot", "tree.json", "TREE.DOT"])
def test_the_ending_chooses_the_form(name, standing, tmp_path):
    write_tree(standing, tmp_path / name)
    (written,) = tmp_path.iterdir()
    starts = {".graphml": "<?xml", ".dot": "digraph", ".json": "{"}
    assert written.read_text().startswith(starts[written.suffix.lower()])


@pytest.mark.parametrize("name", ["tree.html", "tree", "tree.dot.txt", ".dot"])
def test_other_endings_are_refused(name, standing, tmp_path):
    with pytest.raises(IntplanError) as caught:
        write_tree(standing, tmp_path / name)
    assert "ends in .graphml, .dot or .json" in caught.value.message
    assert list(tmp_path.iterdir()) == []
