"""The command line as a process of its own: start-up, pipes, terminals and signals."""

import contextlib
import json
import os
import re
import select
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from intplan import load_standing
from tests.bakery import BAKERY, split_evenly

ROOT = Path(__file__).parent.parent
PROGRAM = [sys.executable, "-m", "intplan"]
PATIENCE = 60.0  # seconds until a test gives up


@pytest.fixture
def environment(tmp_path, monkeypatch):
    """Sheets in a folder of their own, and the package on the path."""
    (tmp_path / "bakery.toml").write_text(BAKERY)
    (tmp_path / "even.toml").write_text(split_evenly())
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("PYTHONPATH", str(ROOT))
    monkeypatch.setenv("TERM", "xterm")
    return tmp_path


def test_help_waits_for_no_numerical_library(environment):
    code = (
        "import sys; from intplan.cli import run; run(['--help']); run(['solve', '--help']); "
        "run(['replan', '--help']); "
        "print([m for m in ('numpy', 'scipy', 'networkx') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.endswith("[]\n")


def test_a_reader_that_goes_away_is_no_trouble(environment):
    reading, writing = os.pipe()
    os.close(reading)
    done = subprocess.run(
        [*PROGRAM, "solve", "bakery.toml"], stdout=writing, stderr=subprocess.PIPE, timeout=PATIENCE
    )
    os.close(writing)
    assert (done.returncode, done.stderr) == (0, b"")


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="there is no /dev/full")
def test_a_full_disk_behind_stdout_is_told(environment):
    with open("/dev/full", "wb") as full:
        done = subprocess.run(
            [*PROGRAM, "solve", "bakery.toml"], stdout=full, stderr=subprocess.PIPE
        )
    assert done.returncode == 2
    assert done.stderr.decode().count("\n") == 1 and b"could not be written" in done.stderr


def test_names_beyond_the_encoding_of_the_terminal(environment, monkeypatch):
    Path("name.toml").write_text('title = "B\u00e4ckerei"\n[activities]\n"\u00e4pfel" = {most=3}\n')
    monkeypatch.setenv("PYTHONIOENCODING", "ascii")
    done = subprocess.run([*PROGRAM, "solve", "name.toml"], capture_output=True, timeout=PATIENCE)
    assert (done.returncode, done.stderr) == (0, b"")
    assert rb"B\xe4ckerei" in done.stdout


# ------------------------------------------------------------------------------ signals


class Watched:
    """A running program whose stderr is a terminal that the test reads."""

    def __init__(self, *arguments: str) -> None:
        self.terminal, child = os.openpty()
        self.process = subprocess.Popen(
            [*PROGRAM, *arguments], stdout=subprocess.PIPE, stderr=child
        )
        os.close(child)
        self.shown = ""

    def wait_for(self, pattern: str) -> None:
        """Read the terminal until a pattern shows."""
        end = time.monotonic() + PATIENCE
        while not re.search(pattern, self.shown):
            assert time.monotonic() < end, f"{pattern} never showed in {self.shown!r}"
            if select.select([self.terminal], [], [], 0.2)[0]:
                with contextlib.suppress(OSError):
                    self.shown += os.read(self.terminal, 4096).decode()

    def finish(self) -> tuple[int, str]:
        """Wait for the end; give the exit status and stdout."""
        out, _ = self.process.communicate(timeout=PATIENCE)
        with contextlib.suppress(OSError):  # a terminal that was closed is an error on Linux
            while select.select([self.terminal], [], [], 0)[0]:
                self.shown += os.read(self.terminal, 4096).decode() or " "
        os.close(self.terminal)
        return self.process.returncode, out.decode()


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_the_first_interrupt_gives_what_is_known(number, environment):
    program = Watched("solve", "even.toml", "--json", "--save", "s.json", "--plan-to", "p.csv")
    program.wait_for(r"Best plan so far [\d,]+ EUR; nothing can fall below \d+\.")
    program.process.send_signal(number)
    status, out = program.finish()
    data = json.loads(out)
    assert (status, data["outcome"], data["ended_by"]) == (3, "unfinished", "interrupt")
    assert data["value"] >= data["bound"] >= 0 and sum(data["plan"].values()) > 0
    assert load_standing("s.json").value == data["value"]
    assert Path("p.csv").read_text().startswith("activity,amount\n")
    # The status sentence was rewritten in place, and wiped at the end.
    assert "\n" not in program.shown and program.shown.endswith("\r\x1b[K")


def test_an_interrupted_re_plan_gives_what_is_known(environment):
    solving = [*PROGRAM, "solve", "even.toml", "--node-limit", "5", "--save", "s"]
    assert subprocess.run(solving, capture_output=True, timeout=PATIENCE).returncode == 3
    program = Watched("replan", "s", "--waive", "kind0", "--json", "--save", "t.json")
    program.wait_for(r"; nothing can fall below \d+\.")
    program.process.send_signal(signal.SIGINT)
    status, out = program.finish()
    data = json.loads(out)
    assert (status, data["outcome"], data["ended_by"]) == (3, "unfinished", "interrupt")
    assert load_standing("t.json").bound == data["bound"]
    assert "\n" not in program.shown and program.shown.endswith("\r\x1b[K")


def test_an_interrupted_search_for_a_clash_is_not_settled(environment):
    program = Watched("clash", "even.toml", "--json")
    program.wait_for("Looking for what clashes\\.")
    program.process.send_signal(signal.SIGINT)
    status, out = program.finish()
    data = json.loads(out)
    assert (status, data["outcome"], data["clash"]) == (3, "undecided", None)
    assert "\n" not in program.shown and program.shown.endswith("\r\x1b[K")


def test_quiet_shows_no_status(environment):
    program = Watched("solve", "even.toml", "--quiet", "--time-limit", "1")
    status, out = program.finish()
    assert (status, program.shown) == (3, "")
    assert "The time limit came before the proof was complete." in out


def interrupted(code: str) -> subprocess.CompletedProcess:
    """Run code that interrupts itself, with the program's handling of interrupts in place."""
    opening = (
        "import os, signal, sys\n"
        "from intplan.cli import run\n"
        "import intplan.planning\n"
        "def interrupt(): os.kill(os.getpid(), signal.SIGINT)\n"
    )
    return subprocess.run(
        [sys.executable, "-c", opening + code], capture_output=True, text=True, timeout=PATIENCE
    )


def test_a_second_interrupt_ends_at_once(environment):
    done = interrupted(
        "def deaf(sheet, stop, **limits):\n"
        "    interrupt()\n"
        "    assert stop()\n"
        "    interrupt()\n"
        "    print('went on')\n"
        "intplan.planning.solve = deaf\n"
        "sys.exit(run(['solve', 'bakery.toml']))\n"
    )
    assert (done.returncode, done.stdout) == (130, "")
    assert done.stderr == "intplan: interrupted before there was an answer\n"


def test_even_a_program_that_is_stuck_ends(environment):
    done = interrupted(
        "def stuck(sheet, stop, **limits):\n"
        "    for _ in range(4):\n"
        "        try:\n"
        "            interrupt()\n"
        "        except KeyboardInterrupt:\n"
        "            pass\n"
        "intplan.planning.solve = stuck\n"
        "sys.exit(run(['solve', 'bakery.toml']))\n"
    )
    assert done.returncode == 130


def test_an_interrupt_while_the_answer_is_kept_loses_nothing(environment):
    done = interrupted(
        "import intplan.planning.store as store\n"
        "write = store.write_atomically\n"
        "def interrupted(path, data):\n"
        "    interrupt()\n"
        "    write(path, data)\n"
        "store.write_atomically = interrupted\n"
        "sys.exit(run(['solve', 'bakery.toml', '--save', 's.json']))\n"
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert "The best plan comes to 3,627.40 EUR." in done.stdout
    assert load_standing("s.json").outcome == "optimal"


def test_an_interrupt_before_the_search(environment):
    done = interrupted(
        "import intplan.sheet\n"
        "intplan.sheet.Sheet.read = lambda path: interrupt()\n"
        "sys.exit(run(['solve', 'bakery.toml', '--json']))\n"
    )
    assert done.returncode == 3
    assert "interrupted" in json.loads(done.stdout)["error"]["message"]
