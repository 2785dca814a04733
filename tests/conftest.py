"""Settings of every test run, and command lines run in this process."""

import json
import os
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # read once, when numpy is first imported

import pytest
from hypothesis import settings

from intplan.cli import run

# Examples are the same each time.
settings.register_profile("repeatable", derandomize=True, deadline=None, database=None)
settings.load_profile("repeatable")


@pytest.fixture
def call(folder, capsys):
    """Run a command line in the `folder` of the test file; give exit status, stdout, stderr."""
    capsys.readouterr()

    def call(*arguments: str) -> tuple[int, str, str]:
        status = run(arguments)
        out, err = capsys.readouterr()
        return status, out, err

    return call


@pytest.fixture
def failure(call):
    """Run a command line that must fail as bad input; give its one line."""

    def failure(*arguments: str) -> str:
        before = {path: path.read_bytes() for path in Path().iterdir() if path.is_file()}
        status, out, err = call(*arguments)
        assert (status, out) == (2, ""), out
        assert err.startswith("intplan: ") and err.count("\n") == 1 and err.endswith("\n")
        assert all(char.isprintable() for char in err[:-1])
        assert "fault in intplan" not in err
        status, out, json_err = call(*arguments[:1], "--json", *arguments[1:])
        error = json.loads(out)["error"]
        assert (status, json_err, set(error)) == (2, "", {"message", "where"})
        assert error["message"] in err
        assert {p: p.read_bytes() for p in Path().iterdir() if p.is_file()} == before
        return err

    return failure
