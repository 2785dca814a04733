"""Standing plans as files: nothing is lost on the way, and nothing unsound is believed."""

import copy
import dataclasses
import hashlib
import json
import os
import signal
import subprocess
import sys
import time
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from intplan import IntplanError, Sheet, load_standing, solve
from intplan.planning import store
from intplan.planning.encoding import Decoder, EncodingError, decode_number, encode
from tests.bakery import ALL, BAKERY, CRATES, SOFT, split_evenly
from tests.verify import verify_standing

ROOT = Path(__file__).parent.parent


def same(a, b) -> bool:
    """Compare values of a search by type and content, arrays included."""
    if type(a) is not type(b):
        return False
    if isinstance(a, np.ndarray):
        return a.dtype == b.dtype and a.shape == b.shape and a.tobytes() == b.tobytes()
    if isinstance(a, list | tuple):
        return len(a) == len(b) and all(map(same, a, b))
    if isinstance(a, dict):
        return list(a) == list(b) and all(same(a[key], b[key]) for key in a)
    if dataclasses.is_dataclass(a):
        return all(same(getattr(a, f.name), getattr(b, f.name)) for f in dataclasses.fields(a))
    if hasattr(a, "adj"):
        return (
            dict(a.graph) == dict(b.graph)
            and list(a.edges()) == list(b.edges())
            and same(dict(a.nodes(data=True)), dict(b.nodes(data=True)))
        )
    return bool(a == b)


def keep(standing, tmp_path: Path) -> Path:
    path = tmp_path / "standing.json"
    standing.save(path)
    return path


# ------------------------------------------------------------------------------ round trip


@pytest.mark.parametrize("text", ALL.values(), ids=ALL)
def test_nothing_is_lost(text, tmp_path):
    standing = solve(Sheet.parse(text))
    path = keep(standing, tmp_path)
    loaded = load_standing(path)
    assert loaded.sheet == standing.sheet
    assert same(loaded.result, standing.result)
    assert loaded.exact_plan == standing.exact_plan
    assert same(dict(loaded.tree.nodes(data=True)), dict(standing.tree.nodes(data=True)))
    before = path.read_bytes()
    loaded.save(path)
    assert path.read_bytes() == before


def test_nothing_is_lost_of_a_search_that_branched_and_cut(tmp_path):
    standing = solve(Sheet.parse(split_evenly()), node_limit=300)
    assert len(standing.result.cuts) > 0
    loaded = load_standing(keep(standing, tmp_path))
    assert (loaded.outcome, loaded.ended_by) == ("unfinished", "nodes")
    assert same(loaded.result, standing.result)


def test_nothing_is_lost_of_a_sheet_from_arrays(tmp_path):
    sheet = Sheet.from_arrays(
        [5, 4.1], [[6, 4], [1, 2]], row_most=[24, 6.5], whole=[True, False], maximize=True
    )
    standing = solve(sheet)
    loaded = load_standing(keep(standing, tmp_path))
    assert loaded.sheet == sheet
    assert same(loaded.result, standing.result)


def test_the_file_is_versioned_json(tmp_path):
    document = json.loads(keep(solve(Sheet.parse(BAKERY)), tmp_path).read_text())
    assert (document["kind"], document["format"]) == ("intplan standing plan", store.FORMAT)
    assert document["content"]["result"]["value"] == "18137/5"


@pytest.mark.parametrize(
    "value",
    [
        None,
        True,
        "text with \x00 and \u202e",
        -(10**30),
        0.1,
        5e-324,
        -0.0,
        float("inf"),
        Fraction(-22, 7),
        [1, 2.0, [None]],
        (1, ("a",)),
        {"a": {"b": 1}},
        {"$array": 1},
        {(0, 1): 2.5, 3: "x"},
        np.array([1.5, -0.0, np.inf, -np.inf, 2.0]),
        np.array([0.0, 0.0, 0.0, -1.5, 0.0]),
        np.array([0.0, -0.0, 0.0]),
        np.arange(6).reshape(2, 3),
        np.zeros((0, 3)),
        np.array([True, False, False]),
        np.array([1, 2], dtype=np.int32),
    ],
    ids=repr,
)
def test_encoding_is_lossless(value):
    text = json.dumps(encode(value), allow_nan=False)
    back = Decoder().decode(json.loads(text))
    assert same(back, value)
    if isinstance(value, float):
        assert repr(back) == repr(value)


def test_encoding_of_long_numbers():
    long = 7**9000
    for value in (long, -long, Fraction(long, 2)):
        assert Decoder().decode(json.loads(json.dumps(encode(value)))) == value


@pytest.mark.parametrize(
    "value",
    [
        {"$unknown": 1},
        {"$ratio": "1/0"},
        {"$ratio": "1.5"},
        {"$ratio": 5},
        {"$ratio": "\u0661"},
        {"$float": "1.0"},
        {"$tuple": {}},
        {"$tuple": [], "more": 1},
        {"$pairs": [[1]]},
        {"$pairs": [[[1], 2]]},
        {"$array": "object", "shape": [1], "values": [1]},
        {"$array": "float64", "shape": [2], "values": [1.0]},
        {"$array": "float64", "shape": [1], "values": [1]},
        {"$array": "float64", "shape": [1], "values": ["one"]},
        {"$array": "float64", "shape": [-1], "values": []},
        {"$array": "float64", "shape": 1, "values": [1.0]},
        {"$array": "int64", "shape": [1], "values": [1e300]},
        {"$array": "int8", "shape": [1], "values": [1000]},
        {"$array": "int64", "shape": [1], "values": [True]},
        {"$array": "float64", "shape": [9], "at": [9], "values": [1.0]},
        {"$array": "float64", "shape": [9], "at": [0, 1], "values": [1.0]},
        {"$array": "float64", "shape": [9], "at": 0, "values": [1.0]},
        {"$array": "float64", "shape": [10**12], "at": [], "values": []},
    ],
    ids=str,
)
def test_decoding_takes_nothing_else(value):
    with pytest.raises(EncodingError):
        Decoder().decode(value)


def test_arrays_of_one_file_share_a_limit():
    decoder = Decoder(largest_arrays=10)
    array = {"$array": "float64", "shape": [6], "at": [], "values": []}
    decoder.decode(array)
    with pytest.raises(EncodingError, match="too large"):
        decoder.decode(array)


def test_exact_numbers_are_read_in_lowest_terms():
    assert decode_number("6/4") == Fraction(3, 2)
    assert type(decode_number("8/4")) is int


# ------------------------------------------------------------------------------ bad files


def refusal(path: Path) -> IntplanError:
    """Return the error that loading gives: one line that names the file."""
    with pytest.raises(IntplanError) as caught:
        load_standing(path)
    error = caught.value
    assert "\n" not in str(error) and error.exit_status == 2
    assert error.where is not None and error.where.startswith(str(path))
    return error


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "not one"),
        (b"title = 'a sheet'", "not one"),
        (b"{}", "not a standing plan"),
        (b"[1, 2]", "not a standing plan"),
        (b'{"kind": "other", "format": 1}', "not a standing plan"),
        (b'{"kind": "intplan standing plan"}', "format"),
        (b'{"kind": "intplan standing plan", "format": "1"}', "format"),
        (b'{"kind": "intplan standing plan", "format": 3, "news": {}}', "newer"),
        (b'{"kind": "intplan standing plan", "format": 1}', "changed"),
        (b'{"kind": NaN}', "damaged"),
        (b'{"kind": ' + b"9" * 5000 + b"}", "damaged"),
        (b"[" * 200_000, "nested"),
        (b'{"a":' * 200_000, "nested"),
        (b"\xff\xfe\x00\x01", "not one"),
        (b'{"kind": "intplan st', "damaged"),
    ],
    ids=lambda value: repr(value[:40]),
)
def test_foreign_and_newer_files(content, message, tmp_path):
    path = tmp_path / "week.json"
    path.write_bytes(content)
    assert message in str(refusal(path))
    assert path.read_bytes() == content


def test_files_that_are_none(tmp_path):
    assert "no such file" in str(refusal(tmp_path / "absent.json"))
    assert "folder" in str(refusal(tmp_path))


def test_every_truncation_and_every_changed_byte_is_noticed(tmp_path):
    path = keep(solve(Sheet.parse(CRATES)), tmp_path)
    whole = path.read_bytes()
    for cut in range(0, len(whole) - 3, 97):
        path.write_bytes(whole[:cut])
        refusal(path)
    start = whole.index(b'"content"')
    for place in range(start + 11, len(whole) - 3, 89):
        path.write_bytes(whole[:place] + bytes([whole[place] ^ 1]) + whole[place + 1 :])
        refusal(path)


def set_in(record, place: str, value) -> None:
    *path, last = place.split("/")
    for step in path:
        record = record[int(step) if isinstance(record, list) else step]
    record[int(last) if isinstance(record, list) else last] = value


FORGERIES = [
    ("sheet/rules/0/most", "1"),
    ("sheet/activities/0/name", "b"),
    ("sheet", None),
    ("result", []),
    ("result/plan/0", "3"),
    ("result/plan/0", "7/2"),
    ("result/plan/0", 4),
    ("result/plan", ["1"]),
    ("result/plan", None),
    ("result/value", "396"),
    ("result/value", None),
    ("result/bound", "394"),
    ("result/bound", "400"),
    ("result/bound", 395),
    ("result/outcome", "perfect"),
    ("result/outcome", {"$array": "float64", "shape": [2], "values": [1.0, 1.0]}),
    ("result/outcome", "infeasible"),
    ("result/outcome", "unfinished"),
    ("result/ended_by", "time"),
    ("result/nodes", -1),
    ("result/pivots", 1.5),
    ("result/seconds", {"$float": "nan"}),
    ("result/seconds", "now"),
    ("result/surprise", 1),
    ("result/tree", []),
    ("result/tree/nodes", {}),
    ("result/tree/nodes/0", 5),
    ("result/tree/nodes/0/id", 1),
    ("result/tree/nodes/0/id", "0"),
    ("result/tree/nodes/0/parent", 0),
    ("result/tree/nodes/0/depth", -1),
    ("result/tree/nodes/0/bound", "low"),
    ("result/tree/nodes/0/bound", {"$float": "nan"}),
    ("result/tree/nodes/0/outcome", "lost"),
    ("result/tree/nodes/0/start", None),
    ("result/tree/nodes/0/added", [["cut", 99, 1.0]]),
    ("result/tree/nodes/0/added", [["least", 5, 1.0]]),
    ("result/tree/nodes/0/added", [["least", 0, "one"]]),
    ("result/tree/nodes/0/added", [["sideways", 0, 1.0]]),
    ("result/tree/nodes/0/added", [["least", 0]]),
    ("result/tree/nodes/0/evidence", 5),
    ("result/tree/nodes/0/evidence", {"$array": "object", "shape": [1], "values": [1]}),
    ("result/cuts", {}),
    ("result/cuts/0", {"kind": "gomory"}),
    ("result/cuts/0/columns", {"$tuple": [77]}),
    ("result/cuts/0/columns", 3),
    ("result/cuts/0/most", "high"),
]


@pytest.mark.parametrize(("place", "value"), FORGERIES, ids=lambda v: str(v)[:50])
def test_sound_digests_do_not_make_unsound_files_sound(place, value, tmp_path):
    path = keep(solve(Sheet.parse(CRATES)), tmp_path)
    content = json.loads(path.read_text())["content"]
    forged = copy.deepcopy(content)
    set_in(forged, place, value)
    write_content(path, forged)
    refusal(path)
    write_content(path, content)
    load_standing(path)


def write_content(path: Path, content: dict) -> None:
    """Write a file as the program would, digest included."""
    body = json.dumps(content).encode()
    head = {"kind": store.KIND, "format": store.FORMAT, "sha256": hashlib.sha256(body).hexdigest()}
    path.write_bytes(json.dumps(head).encode()[:-1] + b',\n"content":\n' + body + b"\n}\n")


def tree_forgery(**changes):
    def forge(nodes):
        for place, value in changes.items():
            node, key = place.rsplit("_", 1)
            nodes[int(node.removeprefix("n"))][key] = value

    return forge


@pytest.mark.parametrize(
    "forge",
    [
        tree_forgery(n1_parent=3, n3_parent=1),
        tree_forgery(n1_parent=None),
        tree_forgery(n1_parent=99),
        tree_forgery(n1_parent="0"),
        tree_forgery(n1_id=2),
        tree_forgery(n1_depth=5),
        lambda nodes: nodes.pop(0),
        lambda nodes: nodes[1].pop("evidence"),
    ],
)
def test_a_tree_must_be_a_tree(forge, tmp_path):
    path = keep(solve(Sheet.parse(split_evenly()), node_limit=10), tmp_path)
    content = json.loads(path.read_text())["content"]
    forge(content["result"]["tree"]["nodes"])
    write_content(path, content)
    refusal(path)


def test_a_negative_bend_is_refused(tmp_path):
    path = keep(solve(Sheet.parse(SOFT)), tmp_path)
    content = json.loads(path.read_text())["content"]
    content["result"]["plan"][2] = "-1"
    write_content(path, content)
    refusal(path)


# ------------------------------------------------------------------------------ writing


def test_trees_beyond_the_limit_are_not_written(tmp_path, monkeypatch):
    standing = solve(Sheet.parse(CRATES))
    path = keep(standing, tmp_path)
    before = path.read_bytes()
    monkeypatch.setattr(store, "LARGEST_FILE", 2000)
    with pytest.raises(IntplanError, match="not saved"):
        standing.save(path)
    assert path.read_bytes() == before
    with pytest.raises(IntplanError, match="limit"):
        load_standing(path)


def test_saving_to_a_place_that_is_none(tmp_path):
    standing = solve(Sheet.parse(BAKERY))
    for target in (tmp_path, tmp_path / "absent" / "x.json"):
        with pytest.raises(IntplanError):
            standing.save(target)
    assert list(tmp_path.iterdir()) == []


def test_a_kill_in_the_middle_of_saving_leaves_a_whole_file(tmp_path):
    path = keep(solve(Sheet.parse(split_evenly()), node_limit=400), tmp_path)
    code = (
        "import sys, intplan\n"
        "standing = intplan.load_standing(sys.argv[1])\n"
        "print('saving', flush=True)\n"
        "while True: standing.save(sys.argv[1])\n"
    )
    for delay in (0.003, 0.04):
        child = subprocess.Popen(
            [sys.executable, "-c", code, str(path)], cwd=ROOT, stdout=subprocess.PIPE
        )
        assert child.stdout.readline() == b"saving\n"
        time.sleep(delay)
        os.kill(child.pid, signal.SIGKILL)
        child.communicate()
        assert load_standing(path).ended_by == "nodes"


def test_a_file_of_format_1_is_read_and_can_be_replanned():
    """Written by the program of that format: nodes have no basis, cuts lean on the cut-off."""
    standing = load_standing(Path(__file__).with_name("standing_format_1.json"))
    fresh = solve(standing.sheet)
    assert (standing.outcome, standing.value) == ("optimal", fresh.value)
    assert any(cut.leans for cut in standing.result.cuts)
    assert all(basis is None for _, basis in standing.result.tree.nodes(data="basis"))
    assert standing.result.reopened is None
    verify_standing(standing)
    binding = min(standing.check.rules, key=lambda rule: rule.spare)
    for change in (
        {"set": {binding.name: f"<= {binding.most - 9}"}},
        {"set": {binding.name: f"<= {binding.most + 9}"}},
        {"waive": [binding.name]},
    ):
        answer = standing.replan(**change)
        assert answer.after.value == solve(answer.changes.sheet).value
        verify_standing(answer.after)
